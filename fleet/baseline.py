"""What the meter would have shown: like-day averages, same-day adjustment, before / after.

Owns the choice of days with its trace and the arithmetic of one rule for many sites at once. Reads only measured
values (an estimate comes in as NaN), so that no estimate can lift a baseline. Leaves meters to meters.py and
delivered kW and money to settle.py. sign is +1 for shed, -1 for absorb: "highest" means highest in its sense.
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from fleet.rules import SettlementRule
from sites.units import Bools, Floats, Ints, Strings

REASONS: Final = (
    "used",
    "event_day",
    "other_day_type",
    "holiday",
    "event_past",
    "day_before_event",
    "outage",
    "low_usage",
    "missing_data",
    "beyond_look_back",
    "not_ranked",
    "enough_days",
    "too_few_days",
)
METHODS: Final = ("none", "like_days", "event_days", "before_after")
NONE, LIKE_DAYS, EVENT_DAYS, BEFORE_AFTER = range(4)
USED: Final = 0


@dataclass(frozen=True)
class DayFacts:
    """What is known of the candidate days, most recent first (day k lies k + 1 days before the event's)."""

    exists: Bools
    """(day, slot) False where the slot is left out by the spring change"""
    weekend: Bools
    """(day,) Saturday or Sunday"""
    holiday: Bools
    """(day,)"""
    event_past: Bools
    """(site, day) an earlier event of the site"""
    before_event: Bools
    """(site, day) the day after it is an event day"""
    unusual: Bools
    """(site, day) the plant ran in another mode than usual"""


@dataclass(frozen=True)
class EventFacts:
    """The event as one rule sees it. Readings are measured values, NaN where missing or estimated."""

    sign: float
    weekend: bool
    """The event's local day is a Saturday, Sunday or holiday."""
    slot: Ints
    """(interval,) local slot of each interval that gets a baseline"""
    like: Bools
    """(interval,) its local day is of the event day's class; elsewhere like days say nothing"""
    event_slot: Ints
    """(event interval,)"""
    window_slot: Ints
    """(window interval,) the adjustment window"""
    window_kw: Floats
    """(site, window interval)"""
    around_kw: Floats
    """(site, interval) the windows before and after"""


@dataclass(frozen=True)
class Baseline:
    """Baselines of many sites under one rule and how each came about; NaN where there is none."""

    baseline_kw: Floats
    """(site, interval) before adjustment"""
    adjusted_kw: Floats
    method: Ints
    """(site,) index into METHODS"""
    kind: Strings
    """(site,) none, ratio or additive"""
    adjustment: Floats
    """(site,) factor, or kW if additive, as applied; 1 where none"""
    adjustment_raw: Floats
    """(site,) the same before the cap; NaN where none"""
    window_base_kw: Floats
    """(site,) mean baseline over the adjustment window"""
    doubtful: Bools
    """(site,) a reading of the adjustment window (or of those before and after) is missing or estimated"""
    used: Bools
    """(site, day)"""
    reason: Ints
    """(site, day) index into REASONS"""
    rank_value: Floats
    """(site, day) mean over the event hours"""
    day_window_kw: Floats
    """(site, day) mean over the adjustment window"""


def baseline(day_kw: Floats, days: DayFacts, rule: SettlementRule, event: EventFacts) -> Baseline:
    """Baseline of every site under `rule`; day_kw (site, day, slot), most recent day first, NaN = not measured.

    Like days: the pool is the first Y eligible days, X of them are averaged slot by slot in local wall time, and
    the adjustment compares the event day's window with the same X days. Too few days: see rule.when_too_few.
    """
    rank_value = _mean(day_kw[:, :, event.event_slot], days.exists[None, :, event.event_slot])
    day_window = _mean(day_kw[:, :, event.window_slot], days.exists[None, :, event.window_slot])
    reason, method = _choose(day_kw, days, rule, event, rank_value)
    used = reason == USED
    by_slot, _ = _average(day_kw, used)
    raw_kw = np.where(event.like, by_slot[:, event.slot], np.nan)
    adjusted, kind, applied, raw, base, doubtful = _adjust(raw_kw, by_slot, day_kw, used, rule, event)
    around, around_doubtful = _around(event.around_kw)
    flat = method == BEFORE_AFTER
    raw_kw = np.where(flat[:, None], around[:, None], raw_kw)
    adjusted = np.where(flat[:, None], around[:, None], adjusted)
    like = (method == LIKE_DAYS) | (method == EVENT_DAYS)
    return Baseline(
        baseline_kw=raw_kw,
        adjusted_kw=adjusted,
        method=np.where(flat & np.isnan(around), NONE, method),
        kind=np.where(like, kind, "none").astype(object),
        adjustment=np.where(like, applied, 1.0),
        adjustment_raw=np.where(like, raw, np.nan),
        window_base_kw=base,
        doubtful=np.where(flat, around_doubtful, like & doubtful),
        used=used,
        reason=reason,
        rank_value=rank_value,
        day_window_kw=day_window,
    )


def _mean(kw: Floats, exists: Bools) -> Floats:
    """Mean over the last axis of the slots that exist; NaN if one of them is not measured, or none exists."""
    count = exists.sum(axis=-1)
    total = np.where(exists, kw, 0.0).sum(axis=-1)
    mean: Floats = np.where(count > 0, total / np.maximum(count, 1), np.nan)
    return mean


def _average(day_kw: Floats, used: Bools) -> tuple[Floats, Ints]:
    """Slot-by-slot mean over the used days (site, slot), over those with a value there, and their number."""
    held = used[:, :, None] & ~np.isnan(day_kw)
    count = held.sum(axis=1)
    total = np.where(held, day_kw, 0.0).sum(axis=1)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan), count


def _code(name: str) -> int:
    return REASONS.index(name)


def _choose(
    day_kw: Floats, days: DayFacts, rule: SettlementRule, event: EventFacts, rank_value: Floats
) -> tuple[Ints, Ints]:
    """Reason of every (site, day) and the method of every site."""
    reason = _first_reasons(day_kw, days, rule, event)
    eligible = reason == USED
    if rule.kind == "before_after":
        return np.where(eligible, _code("not_ranked"), reason), np.full(len(day_kw), BEFORE_AFTER)
    if rule.low_usage_fraction is not None:
        low = _low_usage(eligible, rank_value, rule)
        reason, eligible = np.where(low, _code("low_usage"), reason), eligible & ~low
    pool: Bools = eligible & (np.cumsum(eligible, axis=1) <= rule.pool_days)
    reason = np.where(eligible & ~pool, _code("enough_days"), reason)
    score = event.sign * rank_value
    lack = rule.minimum_days - pool.sum(axis=1)
    added = _event_days(_first_reasons(day_kw, days, _with_event_days(rule), event), days, score, lack, rule)
    short = lack - added.sum(axis=1) > 0
    taken = _take(pool | added, score, rule) & ~short[:, None]
    reason = np.where(pool | added, np.where(taken, USED, _code("not_ranked")), reason)
    reason = np.where(short[:, None] & pool, _code("too_few_days"), reason)
    way_out = BEFORE_AFTER if rule.when_too_few == "before_after" else NONE
    method = np.where(added.any(axis=1), EVENT_DAYS, LIKE_DAYS)
    return reason, np.where(short, way_out, method)


def _with_event_days(rule: SettlementRule) -> SettlementRule:
    return rule.model_copy(update={"exclude_event_days": False})


def _event_days(clear: Ints, days: DayFacts, score: Floats, lack: Ints, rule: SettlementRule) -> Bools:
    """The highest past event days that fill the pool to its minimum, where the rule says so and they suffice."""
    past = (clear == USED) & days.event_past & rule.exclude_event_days
    if rule.when_too_few != "highest_event_days":
        return np.zeros_like(past)
    place = _place(np.argsort(np.where(past, -score, np.inf), axis=1, kind="stable"))
    added: Bools = past & (place < lack[:, None])
    enough: Bools = added & (added.sum(axis=1) >= lack)[:, None]
    return enough


def _first_reasons(day_kw: Floats, days: DayFacts, rule: SettlementRule, event: EventFacts) -> Ints:
    """USED for every day that may enter the pool, else the first thing that speaks against it."""
    slots = event.event_slot
    if rule.kind == "like_days" and rule.adjustment != "none":
        slots = np.concatenate([slots, event.window_slot])
    exists = days.exists[:, slots]
    lost = (np.isnan(day_kw[:, :, slots]) & exists).any(axis=2) | ~days.exists[:, event.event_slot].any(
        axis=1
    )
    other = _other_type(days, rule, event)
    holiday = days.holiday & (rule.holidays == "excluded" and rule.day_classes == "weekday_weekend")
    age = np.arange(1, day_kw.shape[1] + 1)
    shape = day_kw.shape[:2]
    tests: list[tuple[Any, str]] = [
        (age > rule.look_back_days, "beyond_look_back"),
        (other, "other_day_type"),
        (holiday, "holiday"),
        (days.event_past & rule.exclude_event_days, "event_past"),
        (days.before_event & rule.exclude_day_before_event, "day_before_event"),
        (days.unusual & rule.exclude_unusual_modes, "outage"),
        (lost, "missing_data"),
    ]
    against = [np.broadcast_to(test, shape) for test, _ in tests]
    reason: Ints = np.select(against, [_code(name) for _, name in tests], USED)
    return reason


def _other_type(days: DayFacts, rule: SettlementRule, event: EventFacts) -> Bools:
    """Days of another class; a holiday belongs to the weekend's, and is told apart by its own reason."""
    if rule.day_classes == "all_days":
        return np.zeros(len(days.weekend), dtype=np.bool_)
    if event.weekend:
        return ~(days.weekend | days.holiday)
    if rule.holidays == "excluded":
        return days.weekend
    return days.weekend | days.holiday


def _low_usage(eligible: Bools, rank_value: Floats, rule: SettlementRule) -> Bools:
    """Days dropped because their mean is below the stated share of the pool's; each drop refills the pool."""
    dropped = np.zeros_like(eligible)
    value = np.where(eligible, rank_value, 0.0)
    for _ in range(eligible.shape[1]):
        left = eligible & ~dropped
        pool = left & (np.cumsum(left, axis=1) <= rule.pool_days)
        mean = np.where(pool, value, 0.0).sum(axis=1) / np.maximum(pool.sum(axis=1), 1)
        low = pool & (value < (rule.low_usage_fraction or 0.0) * mean[:, None])
        if not low.any():
            break
        dropped |= low
    return dropped


def _take(pool: Bools, score: Floats, rule: SettlementRule) -> Bools:
    """X of the pool by rank; of equal days the more recent stays."""
    if rule.rank == "recent":
        return pool & (np.cumsum(pool, axis=1) <= rule.take_days)
    key = np.where(pool, score, -np.inf)
    recent_first = _place(np.argsort(-key, axis=1, kind="stable"))
    if rule.rank == "highest":
        return pool & (recent_first < rule.take_days)
    # Middle: from the top (falling order, older first), then from the bottom of what is left; the highest goes
    # where an odd number has to.
    spare = np.maximum(pool.sum(axis=1) - rule.take_days, 0)[:, None]
    older_first = _place(np.argsort(-key[:, ::-1], axis=1, kind="stable"))[:, ::-1]
    left = pool & (older_first >= (spare + 1) // 2)
    falling = _place(np.argsort(-np.where(left, key, -np.inf), axis=1, kind="stable"))
    middle: Bools = left & (falling < left.sum(axis=1)[:, None] - spare // 2)
    return middle


def _place(order: Ints) -> Ints:
    """Position of each element in a row's sort order."""
    place = np.empty_like(order)
    np.put_along_axis(place, order, np.broadcast_to(np.arange(order.shape[1]), order.shape), axis=1)
    return place


def _adjust(
    raw_kw: Floats, by_slot: Floats, day_kw: Floats, used: Bools, rule: SettlementRule, event: EventFacts
) -> tuple[Floats, Strings, Floats, Floats, Floats, Bools]:
    """Adjusted baseline, kind, factor or kW applied, the same before the cap, window base, and doubt.

    ratio: B' = B A / b; additive: B' = B + A - b, with A the event day's mean over the window and b the baseline's.
    A small, zero or negative b makes the ratio meaningless, so additive takes its place. A window with a
    reading missing or estimated leaves the baseline as it is.
    """
    base = _plain_mean(by_slot[:, event.window_slot])
    none = np.full(len(base), "none", dtype=object)
    if rule.adjustment == "none":
        nan = np.full(len(base), np.nan)
        return raw_kw, none, np.ones(len(base)), nan, base, np.zeros(len(base), dtype=np.bool_)
    level = _plain_mean(event.window_kw)
    known = ~np.isnan(level) & ~np.isnan(base)
    peak = np.where(used[:, :, None] & ~np.isnan(day_kw), day_kw, 0.0).max(axis=(1, 2), initial=0.0)
    small = base <= rule.small_base_fraction * peak
    additive = small if rule.adjustment == "ratio" else np.ones(len(base), dtype=np.bool_)
    ratio = level / np.where(known & ~additive, base, 1.0)
    raw = np.where(known, np.where(additive, level - base, ratio), np.nan)
    limit = np.abs(_plain_mean(by_slot[:, event.event_slot]))
    applied = _capped(np.where(known, raw, 1.0), additive, limit, rule)
    kind = np.where(known, np.where(additive, "additive", "ratio"), "none").astype(object)
    added = raw_kw + np.where(additive, applied, 0.0)[:, None]
    scaled = raw_kw * np.where(additive, 1.0, applied)[:, None]
    adjusted = np.where(additive[:, None], added, scaled)
    adjusted = np.where(known[:, None], adjusted, raw_kw)
    return adjusted, kind, np.where(known, applied, 1.0), raw, base, ~known


def _plain_mean(kw: Floats) -> Floats:
    """Mean over the last axis; NaN where a value is missing or there is none at all."""
    if kw.shape[-1] == 0:
        return np.full(kw.shape[:-1], np.nan)
    mean: Floats = kw.mean(axis=-1)
    return mean


def _capped(raw: Floats, additive: Bools, limit_kw: Floats, rule: SettlementRule) -> Floats:
    """The adjustment within its cap: ratio in [1-c, 1+c] or [1/(1+c), 1+c], additive within c x limit_kw."""
    if rule.cap_fraction is None:
        return raw
    cap = rule.cap_fraction
    low = 1.0 - cap if rule.cap_form == "difference" else 1.0 / (1.0 + cap)
    bound = cap * np.where(np.isnan(limit_kw), np.inf if cap else 0.0, limit_kw)
    capped: Floats = np.where(additive, np.clip(raw, -bound, bound), np.clip(raw, low, 1.0 + cap))
    return capped


def _around(around_kw: Floats) -> tuple[Floats, Bools]:
    """Mean of the readings before and after (site,), over those that are measured; doubt where one is not."""
    held = ~np.isnan(around_kw)
    count = held.sum(axis=1)
    mean = np.where(held, around_kw, 0.0).sum(axis=1) / np.maximum(count, 1)
    doubtful: Bools = np.logical_not(held.all(axis=1))
    return np.where(count > 0, mean, np.nan), doubtful
