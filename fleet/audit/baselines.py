"""Rules on baselines: the means of the recorded days, the baseline and its adjustment from their readings alone.

The frozen rule is applied again to the recorded days. An estimate is no reading: it never enters a baseline. Shapes:
S called sites, T shown intervals, D local days (the event's last), L slots a day.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd

from fleet.audit.days import by_day, days_chosen, free_days, sites_of
from fleet.audit.findings import Findings
from fleet.audit.levels import guards, levels, weather
from fleet.audit.settled import Days, Settled, days_of, local_day, slots_of
from fleet.rules import SettlementRule
from sites.units import AnyArray, Bools, Floats, Ints

READ: Final = ("other_day_type", "holiday")
"""Reasons for which a day's readings are not looked at, and not recorded."""
OF_DAYS: Final = ("like_days", "event_days", "regression", "base_load")
METHODS: Final = {
    "like_days": ("like_days", "event_days", "before_after", "none"),
    "temperature_regression": ("regression", "before_after", "none"),
    "maximum_base_load": ("base_load", "before_after", "none"),
    "before_after": ("before_after", "none"),
}


@dataclass(frozen=True)
class Slots:
    """Local slots of the event (E,) and of a rule's adjustment window (W,), with the window's place in time."""

    event: Ints
    window: Ints
    window_days_before: Ints
    """(W,) 0 where the window's interval lies on the event's day"""


def days_read(made: Settled, found: Findings) -> None:
    """rank_value and window_base_kw of each day from its own readings; nothing where one was not measured."""
    days, sheet = days_of(made), made.sheet("days")
    readings = days.readings
    rank, base = np.full(len(sheet.frame), np.nan), np.full(len(sheet.frame), np.nan)
    there = np.zeros(len(sheet.frame), dtype=np.bool_)
    for rule in dict.fromkeys(made.rules):
        rows = sites_of(made, rule)
        slots = _slots(made, rule)
        for values, at in ((rank, slots.event), (base, slots.window)):
            mean = _mean(readings[rows][:, :, at], days.exists[:, at])
            own = days.row[rows]
            values[own[own >= 0]] = mean[own >= 0]
        own = days.row[rows]
        there[own[own >= 0]] = days.recorded[rows][own >= 0]
    event_day = sheet.frame["day"].to_numpy().astype("datetime64[D]") == days.day[-1]
    rank = np.where(event_day, np.nan, rank)
    no_window = sheet.frame["site_id"].map(_without_window(made)).to_numpy(dtype=np.bool_)
    base = np.where(event_day & no_window, np.nan, base)
    elsewhere = sheet.frame["site_id"].map(_window_elsewhere(made)).to_numpy(dtype=np.bool_)
    base = np.where(event_day & elsewhere, sheet.numbers("window_base_kw"), base)
    for name, values in (("rank_value", rank), ("window_base_kw", base)):
        kept = np.where(there, values, sheet.numbers(name))
        found.equal("means of a day", sheet, name, kept)
    if "day_kwh" in sheet.frame.columns:
        energy = np.full(len(sheet.frame), np.nan)
        held = (days.row >= 0) & days.recorded
        energy[days.row[held]] = np.nansum(days.kw, axis=2)[held] * made.clock.step_h
        found.equal("energy of a day", sheet, "day_kwh", energy)


def baseline(made: Settled, found: Findings) -> None:
    """baseline_kw: what the used days' readings say by the rule's kind, or the mean before and after."""
    if not made.whole:
        return
    days, sheet = days_of(made), made.sheet("intervals")
    method = made.sites("method")
    wanted = [METHODS[rule.kind] for rule in made.rules]
    odd = np.array([told not in ways for told, ways in zip(method, wanted, strict=True)])
    found.wrong("baseline", made.sheet("sites"), "method", odd, method, "a method of the rule's kind")
    of_days = np.isin(method.astype(str), OF_DAYS)[:, None]
    flat = (method == "before_after")[:, None]
    around = np.stack([_around(made, days, rule, row) for row, rule in enumerate(made.rules)])
    said = np.full(made.committed_kw.shape, np.nan)
    beyond = np.full(len(said), np.nan)
    for rule in dict.fromkeys(made.rules):
        rows, slots = sites_of(made, rule), _slots(made, rule)
        one = levels(made, days, rule, rows, slots.event, slots.window)
        said[rows], beyond[rows] = one.shown_kw, one.beyond_k
    said = np.where(_like(made, days), said, np.nan)
    expected = np.where(of_days, said, np.where(flat, around[:, None], np.nan))
    # An event at night has its windows on days that are not recorded: those values are not looked at.
    known = ~flat | ~np.isnan(expected)
    expected = np.where(known, expected, made.grid("baseline_kw"))
    found.equal("baseline", sheet, "baseline_kw", expected.ravel())
    found.equal("baseline", made.sheet("sites"), "beyond_training_k", np.where(of_days[:, 0], beyond, np.nan))


def adjustment(made: Settled, found: Findings) -> None:
    """The adjustment before and after its cap and with charging left in, from the window's means."""
    days, sheet = days_of(made), made.sheet("sites")
    told = made.sheet("days")
    level = by_day(told.numbers("window_base_kw"), days.row)[:, -1]
    charging = by_day(told.numbers("window_charging_kw"), days.row)
    guard = guards(made)
    size = level.shape
    raw, applied, charged = np.full(size, np.nan), np.ones(size), np.full(size, np.nan)
    kind = np.full(size, "none", dtype=object)
    of_days = np.isin(made.sites("method").astype(str), OF_DAYS)
    for rule in dict.fromkeys(made.rules):
        rows, slots = sites_of(made, rule), _slots(made, rule)
        rows = rows[of_days[rows]]
        if rule.adjustment == "none" or not rows.size:
            continue
        one = levels(made, days, rule, rows, slots.event, slots.window)
        base, limit = _plain_mean(one.window_kw), np.abs(_plain_mean(one.event_kw))
        peak = np.where(
            days.used[rows][:, :, None], np.nan_to_num(days.readings[rows], nan=-np.inf), -np.inf
        ).max(axis=(1, 2))
        guarded = guard[rows] != "none"
        usual = _used_mean(charging[rows], days.used[rows])
        own_level = level[rows] - np.where(guarded, charging[rows][:, -1], 0.0)
        own_base = base - np.where(guarded, usual, 0.0)
        raw[rows], applied[rows], kind[rows] = _factor(own_level, own_base, peak, limit, rule)
        charged[rows] = np.where(guarded, _factor(level[rows], base, peak, limit, rule)[1], np.nan)
        if rule.kind == "temperature_regression" and slots.window_days_before.any():
            # The dry bulb of a window on another day does not stand in the record: as told.
            raw[rows], applied[rows] = (
                made.site_numbers(name)[rows] for name in ("adjustment_raw", "adjustment")
            )
            charged[rows] = made.site_numbers("adjustment_charged")[rows]
            kind[rows] = made.sites("adjustment_kind")[rows]
    place = pd.Index(made.site_id).get_indexer(pd.Index(sheet.frame["site_id"]))
    found.equal("adjustment", sheet, "adjustment_raw", raw[place])
    found.equal("adjustment", sheet, "adjustment", applied[place])
    found.equal("adjustment", sheet, "adjustment_charged", charged[place])
    found.same("adjustment", sheet, "adjustment_kind", kind[place])
    found.same("adjustment", sheet, "guard", guard[place])
    # Power taken out stands on the used days and the event's, of guarded sites only.
    held = np.full(len(told.frame), False)
    shown = (days.row >= 0) & (days.used | (np.arange(len(days.day)) == len(days.day) - 1))
    held[days.row[shown & (guard != "none")[:, None]]] = True
    value = told.numbers("window_charging_kw")
    idle = ~held & ~np.isnan(value)
    found.wrong("adjustment", told, "window_charging_kw", idle, value, "nothing: no charging is taken out")


def _used_mean(values: Floats, used: Bools) -> Floats:
    """(R,) mean over the used days that have a value."""
    held = used & ~np.isnan(values)
    total = np.where(held, values, 0.0).sum(axis=1)
    return np.where(held.any(axis=1), total / np.maximum(held.sum(axis=1), 1), np.nan)


def _factor(
    level: Floats, base: Floats, peak: Floats, limit: Floats, rule: SettlementRule
) -> tuple[Floats, Floats, AnyArray]:
    """Before the cap, as applied, and the kind (R,)."""
    additive = (base <= np.maximum(rule.small_base_fraction * peak, 0.0)) | (rule.adjustment == "additive")
    known = ~np.isnan(level) & ~np.isnan(base)
    ratio = level / np.where(known & ~additive, base, 1.0)
    one = np.where(known, np.where(additive, level - base, ratio), np.nan)
    capped = _capped(np.where(known, one, 1.0), additive, limit, rule)
    kind = np.where(known, np.where(additive, "additive", "ratio"), "none")
    return one, np.where(known, capped, 1.0), kind


def adjusted(made: Settled, found: Findings) -> None:
    """adjusted_baseline_kw = baseline x factor, or baseline + kW if additive."""
    if not made.whole:
        return
    kind = made.sites("adjustment_kind")[:, None]
    by = made.site_numbers("adjustment")[:, None]
    raw = made.grid("baseline_kw")
    value = np.where(kind == "ratio", raw * by, np.where(kind == "additive", raw + by, raw))
    found.equal("adjusted baseline", made.sheet("intervals"), "adjusted_baseline_kw", value.ravel())


def event_day_readings(made: Settled, found: Findings) -> None:
    """The event day's readings in day_intervals are the metered ones of intervals, where both show the interval."""
    if not made.whole:
        return
    days, sheet = days_of(made), made.sheet("intervals")
    zone, step = str(made.settings["timezone"]), made.clock.step_minutes
    starts = made.clock.starts
    slot = slots_of(starts, zone, step)
    today = local_day(starts, zone) == days.day[-1]
    twice = pd.Series(slot).where(today).duplicated(keep=False).to_numpy() & today
    metered = made.grid("metered_kw")
    expected = np.where(today & ~twice, days.kw[:, -1][:, slot], metered)
    found.equal("readings of the event's day", sheet, "metered_kw", expected.ravel())


def _slots(made: Settled, rule: SettlementRule) -> Slots:
    """Slots of the event and of the adjustment window of a rule."""
    zone, clock = str(made.settings["timezone"]), made.clock
    event = np.arange(made.event[0], made.event[1], clock.step)
    start, end = (made.event[0] - _hours(h) for h in (rule.adjustment_from_h, rule.adjustment_to_h))
    # On the grid of the fleet, whole intervals only.
    before = (
        made.event[0] - np.arange(1, int(_hours(rule.adjustment_from_h) // clock.step) + 2)[::-1] * clock.step
    )
    window = before[(before >= start) & (before + clock.step <= end)]
    own = local_day(made.event[:1], zone)[0]
    ago = (own - local_day(window, zone)).astype(np.int64) if window.size else np.zeros(0, dtype=np.int64)
    return Slots(slots_of(event, zone, clock.step_minutes), slots_of(window, zone, clock.step_minutes), ago)


def _hours(hours: float) -> np.timedelta64:
    return np.timedelta64(round(hours * 3_600_000_000), "us")


def _without_window(made: Settled) -> dict[str, bool]:
    """Sites whose rule looks at no adjustment window on the event's day."""
    return {site: rule.kind == "before_after" for site, rule in zip(made.site_id.tolist(), made.rules)}


def _window_elsewhere(made: Settled) -> dict[str, bool]:
    """Sites whose window reaches into another day or an hour that comes twice: its mean is taken as told."""
    found = {}
    for site, rule in zip(made.site_id.tolist(), made.rules, strict=True):
        slots = _slots(made, rule)
        twice = len(np.unique(slots.window)) < len(slots.window)
        beyond = bool(slots.window_days_before.any()) or twice
        found[site] = beyond and rule.kind != "before_after"
    return found


def _mean(kw: Floats, exists: Bools) -> Floats:
    """Mean over the slots that exist; NaN if one of them is not measured, or none exists."""
    count = exists.sum(axis=-1)
    total = np.where(exists, kw, 0.0).sum(axis=-1)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _plain_mean(kw: Floats) -> Floats:
    return kw.mean(axis=-1) if kw.shape[-1] else np.full(kw.shape[:-1], np.nan)


def _like(made: Settled, days: Days) -> Bools:
    """(S, T) the interval's day is of the event day's class, elsewhere like days say nothing."""
    day = local_day(made.clock.starts, str(made.settings["timezone"]))
    free = free_days(made, day)
    own = free_days(made, days.day[-1:])[0]
    return np.stack([(free == own) | (rule.day_classes == "all_days") for rule in made.rules])


def _around(made: Settled, days: Days, rule: SettlementRule, row: int) -> float:
    """Mean reading before and after the event, from the event's day; NaN where a part lies on another day."""
    clock, zone = made.clock, str(made.settings["timezone"])
    start, end = made.event[0] - _hours(rule.before_buffer_h), made.event[1] + _hours(rule.after_buffer_h)
    before = np.arange(start - _hours(rule.before_h), start, clock.step)
    after = np.arange(end, end + _hours(rule.after_h), clock.step)
    times = np.concatenate([before, after])
    if not times.size or (local_day(times, zone) != days.day[-1]).any():
        return float("nan")
    kw = days.readings[row, -1, slots_of(times, zone, clock.step_minutes)]
    return float(np.nanmean(kw)) if (~np.isnan(kw)).any() else float("nan")


def _capped(raw: Floats, additive: Bools, limit_kw: Floats, rule: SettlementRule) -> Floats:
    """The adjustment within the rule's cap."""
    if rule.cap_fraction is None:
        return raw
    cap = rule.cap_fraction
    low = 1.0 - cap if rule.cap_form == "difference" else 1.0 / (1.0 + cap)
    most = cap * np.where(np.isnan(limit_kw), np.inf if cap else 0.0, limit_kw)
    return np.where(additive, np.clip(raw, -most, most), np.clip(raw, low, 1.0 + cap))


RULES = (weather, days_read, days_chosen, baseline, adjustment, adjusted, event_day_readings)
