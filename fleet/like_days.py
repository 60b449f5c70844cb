"""Which days a baseline is made of, and why each other day is not: pool, exclusions, rank, too few days.

Owns the facts of days and event that a rule looks at, and the choice with its trace. sign is +1 for shed, -1 for
absorb: "highest" means highest in its sense. Leaves the arithmetic on the chosen days to baseline.py.
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from fleet.rules import SettlementRule
from sites.units import Bools, Floats, Ints

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
    "missing_weather",
    "beyond_look_back",
    "not_ranked",
    "enough_days",
    "too_few_days",
)
METHODS: Final = ("none", "like_days", "event_days", "before_after", "regression", "base_load")
NONE, LIKE_DAYS, EVENT_DAYS, BEFORE_AFTER, REGRESSION, BASE_LOAD = range(6)
OF_KIND: Final = {
    "like_days": LIKE_DAYS,
    "before_after": BEFORE_AFTER,
    "temperature_regression": REGRESSION,
    "maximum_base_load": BASE_LOAD,
}
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
class Weather:
    """Dry bulb in degC as a rule that needs it sees it; NaN = not known. Weekdays: 0 = Monday."""

    day_peak_c: Floats
    """(site, day) highest of the local day"""
    event_peak_c: Floats
    """(site,)"""
    weekday: Ints
    """(day,)"""
    day_c: Floats
    """(site, day, slot)"""
    at_weekday: Ints
    """(interval,) of each interval that gets a baseline"""
    at_c: Floats
    """(site, interval)"""
    in_event: Bools
    """(interval,)"""
    window_weekday: Ints
    """(window interval,)"""
    window_c: Floats
    """(site, window interval)"""


@dataclass(frozen=True)
class Charging:
    """Metered power that is taken out of the load that adjusts; kW means over the window, NaN = not measured."""

    guarded: Bools
    """(site,) has a meter to take it from"""
    window_kw: Floats
    """(site,) on the event day"""
    day_kw: Floats
    """(site, day)"""


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
    weather: Weather | None = None
    """None where the rule needs none"""
    charging: Charging | None = None


def _code(name: str) -> int:
    return REASONS.index(name)


def choose(
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
    score = _score(rank_value, rule, event)
    lack = rule.minimum_days - pool.sum(axis=1)
    added = _event_days(_first_reasons(day_kw, days, _with_event_days(rule), event), days, score, lack, rule)
    short = lack - added.sum(axis=1) > 0
    taken = _take(pool | added, score, rule) & ~short[:, None]
    reason = np.where(pool | added, np.where(taken, USED, _code("not_ranked")), reason)
    reason = np.where(short[:, None] & pool, _code("too_few_days"), reason)
    way_out = BEFORE_AFTER if rule.when_too_few == "before_after" else NONE
    method = np.where(added.any(axis=1) & (rule.kind == "like_days"), EVENT_DAYS, OF_KIND[rule.kind])
    return reason, np.where(short, way_out, method)


def _score(rank_value: Floats, rule: SettlementRule, event: EventFacts) -> Floats:
    """What ranks the days (site, day), highest first: load in the event's sense, or nearness of the weather."""
    if rule.rank == "nearest_weather" and event.weather is not None:
        return -np.abs(event.weather.day_peak_c - event.weather.event_peak_c[:, None])
    return event.sign * rank_value


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
    if rule.kind != "before_after" and rule.adjustment != "none":
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
        (_no_weather(rule, event), "missing_weather"),
    ]
    against = [np.broadcast_to(test, shape) for test, _ in tests]
    reason: Ints = np.select(against, [_code(name) for _, name in tests], USED)
    return reason


def _no_weather(rule: SettlementRule, event: EventFacts) -> Any:
    """(site, day) the day's dry bulb is not known for the whole day, where the rule needs it."""
    return rule.needs_weather and (event.weather is None or np.isnan(event.weather.day_peak_c))


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
        # By size: a site that exports on its usual days uses little on a day near zero.
        low = pool & (np.abs(value) < (rule.low_usage_fraction or 0.0) * np.abs(mean)[:, None])
        if not low.any():
            break
        dropped |= low
    return dropped


def _take(pool: Bools, score: Floats, rule: SettlementRule) -> Bools:
    """X of the pool by rank; of equal days the more recent stays."""
    if rule.rank == "recent":
        recent: Bools = pool & (np.cumsum(pool, axis=1) <= rule.take_days)
        return recent
    key = np.where(pool, score, -np.inf)
    recent_first = _place(np.argsort(-key, axis=1, kind="stable"))
    if rule.rank in ("highest", "nearest_weather"):
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
