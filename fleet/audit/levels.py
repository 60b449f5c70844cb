"""What the used days say a meter would have shown, worked out again from the recorded readings and dry bulb.

Owns the levels before adjustment by kind of rule, and the weather columns. Which days are used is
baselines.py's. Shapes: R sites of one rule, T shown intervals, D local days (the event's last), L slots a day.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from fleet.audit.findings import Findings
from fleet.audit.settled import Days, Settled, days_of, local_day, slots_of
from fleet.rules import SettlementRule
from sites.units import AnyArray, Floats, Ints


@dataclass(frozen=True)
class Levels:
    """Levels of the sites under one rule; NaN where the record does not tell."""

    shown_kw: Floats
    """(R, T)"""
    window_kw: Floats
    """(R, W)"""
    event_kw: Floats
    """(R, E)"""
    beyond_k: Floats
    """(R,) regression only"""


def levels(
    made: Settled, days: Days, rule: SettlementRule, rows: Ints, event_slot: Ints, window_slot: Ints
) -> Levels:
    """The used days' average slot by slot, their flat level, or their regression on week and dry bulb."""
    shown_slot = slots_of(made.clock.starts, str(made.settings["timezone"]), made.clock.step_minutes)
    none = np.full(len(rows), np.nan)
    if rule.kind == "temperature_regression":
        return _regressions(made, days, rule, rows, window_slot)
    if rule.kind == "maximum_base_load":
        flat = _flat(made, days, rows, event_slot)[:, None]
        sizes = (made.clock.count, len(window_slot), len(event_slot))
        shown, window, event = (np.repeat(flat, size, axis=1) for size in sizes)
        return Levels(shown, window, event, none)
    by_slot = average(days)[rows]
    return Levels(by_slot[:, shown_slot], by_slot[:, window_slot], by_slot[:, event_slot], none)


def average(days: Days) -> Floats:
    """(S, L) slot-by-slot mean over the used days, of those that have a reading there."""
    held = days.used[:, :, None] & ~np.isnan(days.readings)
    count = held.sum(axis=1)
    total = np.where(held, days.kw, 0.0).sum(axis=1)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _flat(made: Settled, days: Days, rows: Ints, event_slot: Ints) -> Floats:
    """(R,) mean over the used days of each day's highest (absorb: lowest) reading in the event hours."""
    there = days.exists[:, event_slot]
    kw = np.where(there, days.readings[rows][:, :, event_slot], np.nan)
    extreme = np.fmax.reduce(kw, axis=2) if made.sign > 0 else np.fmin.reduce(kw, axis=2)
    used = days.used[rows]
    total = np.where(used, extreme, 0.0).sum(axis=1)
    return np.where(used.any(axis=1), total / np.maximum(used.sum(axis=1), 1), np.nan)


def _regressions(made: Settled, days: Days, rule: SettlementRule, rows: Ints, window_slot: Ints) -> Levels:
    zone, step = str(made.settings["timezone"]), made.clock.step_minutes
    degrees, at_c = dry_bulb_c(made, days), made.grid("dry_bulb_c")
    week = (local_day(made.clock.starts, zone).astype(np.int64) + 3) % 7
    slot = slots_of(made.clock.starts, zone, step)
    own_week = np.full(len(window_slot), week[int(np.argmax(made.in_event))])
    shown = np.full((len(rows), made.clock.count), np.nan)
    window = np.full((len(rows), len(window_slot)), np.nan)
    beyond = np.full(len(rows), np.nan)
    for at, row in enumerate(rows.tolist()):
        training = _training(days, degrees, row)
        if training.empty:
            continue
        model = _Model(training, rule.temperature_knots_c)
        shown[at] = model.at(week, slot, at_c[row])
        window[at] = model.at(own_week, window_slot, degrees[row, -1, window_slot])
        inside = at_c[row, made.in_event]
        low, high = training["c"].min(), training["c"].max()
        beyond[at] = max(float((inside - high).max()), float((low - inside).max()), 0.0)
    return Levels(shown, window, shown[:, made.in_event], beyond)


def _training(days: Days, degrees: Floats, row: int) -> pd.DataFrame:
    """Readings of a site's used days: week (weekday), slot, kw, c."""
    held = days.used[row][:, None] & ~np.isnan(days.readings[row]) & ~np.isnan(degrees[row])
    day, slot = np.nonzero(held)
    week = (days.day[day].astype(np.int64) + 3) % 7
    return pd.DataFrame(
        {"week": week, "slot": slot, "kw": days.kw[row][day, slot], "c": degrees[row][day, slot]}
    )


class _Model:
    """kW = level of weekday and slot + slopes by stretch of dry bulb, by least squares on deviations."""

    def __init__(self, training: pd.DataFrame, knots: tuple[float, ...]) -> None:
        self.knots = knots
        columns = [f"x{number}" for number in range(len(knots) + 1)]
        table = training.join(pd.DataFrame(self._stretches(training["c"].to_numpy()), columns=columns))
        means = table.groupby(["week", "slot"])[["kw", *columns]].transform("mean")
        off = table[["kw", *columns]] - means
        self.slopes: AnyArray = np.linalg.lstsq(off[columns].to_numpy(), off["kw"].to_numpy(), rcond=1e-5)[0]
        rest = table["kw"] - table[columns].to_numpy() @ self.slopes
        self.level: pd.Series = table.assign(rest=rest).groupby(["week", "slot"])["rest"].mean()

    def at(self, week: Ints, slot: Ints, degrees: Floats) -> Floats:
        """kW (T,) at these weekdays, slots and dry bulbs; NaN where one is not known."""
        level = self.level.reindex(pd.MultiIndex.from_arrays([week, slot])).to_numpy(dtype=np.float64)
        found: Floats = level + self._stretches(degrees) @ self.slopes
        return found

    def _stretches(self, degrees: Floats) -> Floats:
        parts = [np.minimum(degrees, self.knots[0])]
        for number, knot in enumerate(self.knots):
            over = np.maximum(degrees - knot, 0.0)
            last = number + 1 == len(self.knots)
            parts.append(over if last else np.minimum(over, self.knots[number + 1] - knot))
        return np.stack(parts, axis=-1)


def dry_bulb_c(made: Settled, days: Days) -> Floats:
    """(S, D, L) dry bulb of the recorded days, NaN where there is none."""
    frame = made.record.frames["day_intervals"]
    found = np.full(days.kw.shape, np.nan)
    site = pd.Index(made.site_id).get_indexer(pd.Index(frame["site_id"]))
    at = (frame["day"].to_numpy().astype("datetime64[D]") - days.day[0]).astype(np.int64)
    slot = frame["slot"].to_numpy(dtype=np.int64)
    count, length = days.exists.shape
    held = (site >= 0) & (at >= 0) & (at < count) & (slot >= 0) & (slot < length)
    values = made.sheet("day_intervals").numbers("dry_bulb_c")
    found[site[held], at[held], slot[held]] = values[held]
    return found


def weather(made: Settled, found: Findings) -> None:
    """Dry bulb stands where the rule needs it and nowhere else; a day's highest is that of its own slots."""
    days, sheet = days_of(made), made.sheet("days")
    needs = {site: rule.needs_weather for site, rule in zip(made.site_id.tolist(), made.rules, strict=True)}
    for table in ("intervals", "days", "day_intervals"):
        one = made.sheet(table)
        name = "peak_dry_bulb_c" if table == "days" else "dry_bulb_c"
        value = one.numbers(name)
        idle = ~one.frame["site_id"].map(needs).fillna(False).to_numpy(dtype=np.bool_)
        found.wrong("dry bulb", one, name, idle & ~np.isnan(value), value, "nothing: the rule needs none")
    degrees = dry_bulb_c(made, days)
    known = days.recorded & ~(np.isnan(degrees) & days.exists).any(axis=2)
    highest = np.where(known, np.fmax.reduce(degrees, axis=2), np.nan)
    expected = sheet.numbers("peak_dry_bulb_c").copy()
    held = (days.row >= 0) & days.recorded
    expected[days.row[held]] = highest[held]
    found.equal("dry bulb", sheet, "peak_dry_bulb_c", expected)
    if not made.whole:
        return
    today = local_day(made.clock.starts, str(made.settings["timezone"])) == days.day[-1]
    slot = slots_of(made.clock.starts, str(made.settings["timezone"]), made.clock.step_minutes)
    once = today & ~pd.Series(slot).where(today).duplicated(keep=False).to_numpy()
    shown = np.where(once, degrees[:, -1][:, slot], made.grid("dry_bulb_c"))
    found.equal("dry bulb", made.sheet("intervals"), "dry_bulb_c", shown.ravel())


def guards(made: Settled) -> AnyArray:
    """(S,) the sub-meter that each frozen rule takes out of the adjustment window, by the frozen meter map."""
    mapped = made.call.frozen.get("meter_map")
    there = set()
    if mapped is not None and not mapped.empty:
        there = set(zip(mapped["site_id"], mapped["role"].fillna("building"), strict=True))
    found = np.full(len(made.site_id), "none", dtype=object)
    method = made.sites("method")
    for row, (site, rule) in enumerate(zip(made.site_id.tolist(), made.rules, strict=True)):
        used = rule.adjustment != "none" and method[row] not in ("none", "before_after")
        if not used or rule.pre_charge_guard == "off":
            continue
        if (site, "tank") in there:
            found[row] = "tank"
        elif (site, "plant") in there and (rule.pre_charge_guard, rule.stream, rule.kind) == (
            "tank_or_plant",
            "building",
            "like_days",
        ):
            found[row] = "plant"
    return found
