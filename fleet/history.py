"""Readings and weather behind a settlement, laid out by local day, and what each rule sees of them.

Owns the period that is read, the gaps filled, the streams that adjustment windows are freed of and the dry bulb.
Leaves reading to meters.py, the arithmetic of a rule to baseline.py.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
import pandas as pd

from fleet.baseline import Charging, DayFacts, EventFacts, Weather
from fleet.callfacts import CallFacts, Plan, local_days, marked, modes
from fleet.errors import Problem, Refused
from fleet.estimation import estimate
from fleet.meters import EDITED, MISSING, LocalGrid, Streams, by_local_day, local_grid, streams
from fleet.rules import SettlementRule
from fleet.series import on_clock
from sites.clock import Clock
from sites.direction import Direction
from sites.units import AnyArray, Bools, Floats, Ints, Strings

SHORTEST_HISTORY_DAYS: Final = 4
"""Windows before the event reach back at most 48 h, whatever a rule's look-back."""


@dataclass(frozen=True)
class History:
    """Readings and the local days behind them; day arrays over the grid's days."""

    raw: Streams
    grid: LocalGrid
    event_day: int
    weekend: Bools
    holiday: Bools
    past: Bools
    """(site, day) other event days"""
    modes: AnyArray
    guard: Strings
    """(site,) none, tank or plant: the sub-meter whose power leaves the adjustment window"""
    charging_kw: Floats
    """(site, interval) what it read; NaN where it did not, or there is none"""
    dry_bulb_c: Floats
    """(site, interval); NaN where not known, or the site's rule needs none"""
    has_weather: bool
    """Some rule needs it."""

    @property
    def measured(self) -> Floats:
        """(site, interval) readings that are no estimate, else NaN."""
        quality = self.raw.quality
        if not ((quality > EDITED) & (quality < MISSING)).any():
            return self.raw.kw
        found: Floats = np.where(quality <= EDITED, self.raw.kw, np.nan)
        return found

    @property
    def recent(self) -> Ints:
        """Days before the event's, most recent first."""
        return np.arange(self.event_day - 1, -1, -1)


def period(call: CallFacts, plan: Plan) -> tuple[np.datetime64, np.datetime64]:
    """What is read: from the longest look-back's first local midnight to the horizon's end, or a window after."""
    day = pd.Timestamp(plan.event_start, tz="UTC").tz_convert(call.timezone).tz_localize(None).normalize()
    back = max(SHORTEST_HISTORY_DAYS, *(rule.look_back_days for rule in plan.rules))
    midnight = (day - pd.Timedelta(days=back)).tz_localize(
        call.timezone, ambiguous=True, nonexistent="shift_forward"
    )
    since = np.datetime64(midnight.tz_convert("UTC").tz_localize(None).floor(f"{call.step_minutes}min"), "us")
    after = max(hours(rule.after_h + rule.after_buffer_h) for rule in plan.rules)
    return since, max(plan.clock.end, plan.event_end + after)


def history(
    call: CallFacts, plan: Plan, readings: pd.DataFrame, since: np.datetime64, until: np.datetime64
) -> History:
    """Readings of the plan's sites over a period (see `period`), by meters that may be any of the fleet's.

    Raises Refused for readings that cannot be placed and where a rule needs weather that is not there.
    """
    known = call.fleet_site_ids or plan.site_ids
    every = streams(
        readings,
        call.meter_map,
        plan.site_ids,
        call.timezone,
        call.step_minutes,
        since,
        until,
        known_site_ids=known,
    )
    raw = every.pick(plan.site_ids, [rule.stream for rule in plan.rules])
    guard = _guards(plan, every)
    grid = local_grid(raw.clock, call.timezone)
    event_day = int(grid.day[raw.clock.index(plan.event_start)])
    holiday = np.zeros(len(grid.days), dtype=np.bool_)
    if not call.holidays.empty:
        holiday = np.isin(grid.days, local_days(call.holidays["date"]))
    return History(
        raw=raw,
        grid=grid,
        event_day=event_day,
        # Day 0 of the calendar, 1970-01-01, was a Thursday.
        weekend=(grid.days.astype(np.int64) + 3) % 7 >= 5,
        holiday=holiday,
        past=marked(call.past_event_days, plan.site_ids, grid.days),
        modes=modes(call.plant_days, plan.site_ids, grid.days),
        guard=guard,
        charging_kw=_charging_kw(plan, every, guard),
        dry_bulb_c=_dry_bulb(call, plan, raw.clock, grid, event_day),
        has_weather=any(rule.needs_weather for rule in plan.rules),
    )


def hours(number: float) -> np.timedelta64:
    """A number of hours as a time span."""
    return np.timedelta64(round(number * 3_600_000_000), "us")


def _guards(plan: Plan, every: Streams) -> Strings:
    """(site,) which sub-meter each site's rule takes out of the adjustment window."""
    there = set(zip(every.site_id.tolist(), every.stream.tolist()))
    found = []
    for site, rule in zip(plan.site_ids, plan.rules):
        wanted = rule.pre_charge_guard != "off" and rule.adjustment != "none" and rule.kind != "before_after"
        also_plant = rule.pre_charge_guard == "tank_or_plant" and rule.stream == "building"
        also_plant &= rule.kind == "like_days"
        ways = ["tank", "plant"] if also_plant else ["tank"]
        found.append(next((way for way in ways if wanted and (site, way) in there), "none"))
    return np.array(found, dtype=object)


def _charging_kw(plan: Plan, every: Streams, guard: Strings) -> Floats:
    """(site, interval) what the guard's meters read; NaN where they did not, or there is none."""
    if (guard == "none").all():
        return np.broadcast_to(np.nan, (len(guard), every.clock.count))
    taken = every.pick(plan.site_ids, guard.tolist())
    return np.where(taken.quality <= EDITED, taken.kw, np.nan)


def _dry_bulb(call: CallFacts, plan: Plan, clock: Clock, grid: LocalGrid, event_day: int) -> Floats:
    """(site, interval) dry bulb for the sites whose rule needs it; Refused where the event's day is not known."""
    needing = [at for at, rule in enumerate(plan.rules) if rule.needs_weather]
    if not needing:
        return np.broadcast_to(np.nan, (len(plan.site_ids), clock.count))
    found = np.full((len(plan.site_ids), clock.count), np.nan)
    names = [str(call.stations.get(plan.site_ids[at]) or "") for at in needing]
    stations = np.array(sorted(set(names)), dtype=object)
    known = np.full((len(stations), clock.count), np.nan)
    if not call.weather.empty:
        known = on_clock(call.weather, "station_id", ("dry_bulb_c",), stations, clock).values["dry_bulb_c"]
    lacking = np.isnan(known[:, grid.day == event_day]).sum(axis=1)
    if lacking.any():
        raise Refused(
            [
                Problem(
                    "weather",
                    None,
                    "dry_bulb_c",
                    f"no value of station {name or '(none named)'} in {count} intervals of {grid.days[event_day]}",
                    "the dry bulb of the event's whole day: a settlement rule in use needs weather",
                    "add the rows to the fleet's weather table",
                )
                for name, count in zip(stations.tolist(), lacking.tolist())
                if count
            ]
        )
    found[needing] = known[np.searchsorted(stations, names)]
    return found


def filled(plan: Plan, found: History) -> Streams:
    """Gaps estimated: no line over the start or end of the event or a site's window, no like day inside."""
    clock, grid = found.raw.clock, found.grid
    starts = clock.starts
    breaks = (starts >= plan.event_start).astype(np.int64) + (starts >= plan.event_end)
    own = (starts >= plan.window_start[:, None]).astype(np.int64) + (starts >= plan.window_end[:, None])
    shut = plan.in_event(clock) | plan.in_window(clock)
    events = found.past.copy()
    events[:, found.event_day] = True
    day_class = (found.weekend | found.holiday).astype(np.int64)
    return estimate(found.raw, breaks + own, shut, day_class, events, grid)


def part(found: History, rows: Ints) -> History:
    """The same of some of the sites; itself where they are all."""
    if np.array_equal(rows, np.arange(len(found.past))):
        return found
    raw = found.raw
    return replace(
        found,
        raw=replace(
            raw,
            site_id=raw.site_id[rows],
            stream=raw.stream[rows],
            kw=raw.kw[rows],
            quality=raw.quality[rows],
        ),
        past=found.past[rows],
        modes=found.modes[rows],
        guard=found.guard[rows],
        charging_kw=found.charging_kw[rows],
        dry_bulb_c=found.dry_bulb_c[rows],
    )


def day_facts(found: History) -> DayFacts:
    """Facts of the days before the event, most recent first."""
    eventful = found.past.copy()
    eventful[:, found.event_day] = True
    recent = found.recent
    return DayFacts(
        exists=found.grid.times[recent] > 0,
        weekend=found.weekend[recent],
        holiday=found.holiday[recent],
        event_past=found.past[:, recent],
        before_event=eventful[:, recent + 1],
        unusual=found.modes[:, recent] != "usual",
    )


def event_facts(plan: Plan, direction: Direction, found: History, rule: SettlementRule) -> EventFacts:
    """Slots and windows of one rule, for the sites of `found`."""
    clock, grid, measured = found.raw.clock, found.grid, found.measured
    start, end = plan.event_start, plan.event_end
    window = _between(clock, start - hours(rule.adjustment_from_h), start - hours(rule.adjustment_to_h))
    before_end, after_start = start - hours(rule.before_buffer_h), end + hours(rule.after_buffer_h)
    before = _between(clock, before_end - hours(rule.before_h), before_end)
    after = _between(clock, after_start, after_start + hours(rule.after_h))
    shown = np.arange(clock.index(plan.clock.start), clock.index(plan.clock.end))
    free = found.weekend | found.holiday
    like = (free[grid.day[shown]] == free[found.event_day]) | (rule.day_classes == "all_days")
    event = np.flatnonzero(plan.in_event(clock))
    return EventFacts(
        sign=-direction.sign,
        weekend=bool(free[found.event_day]),
        slot=grid.slot[shown],
        like=like,
        event_slot=grid.slot[event],
        window_slot=grid.slot[window],
        window_kw=measured[:, window],
        around_kw=measured[:, np.concatenate([before, after])],
        weather=_weather(found, shown, event, window) if rule.needs_weather else None,
        charging=_charging(found, window),
    )


def dry_bulb_by_day(found: History) -> Floats:
    """(site, day, slot) dry bulb; NaN where not known."""
    if not found.has_weather:
        return np.broadcast_to(np.nan, (len(found.dry_bulb_c), *found.grid.times.shape))
    return by_local_day(found.dry_bulb_c, np.zeros_like(found.raw.quality), found.grid)[0]


def peak_dry_bulb_c(found: History) -> Floats:
    """(site, day) highest dry bulb of each local day; NaN where one of its intervals is not known."""
    day_c = dry_bulb_by_day(found)
    exists = found.grid.times > 0
    if not found.has_weather:
        return np.full(day_c.shape[:2], np.nan)
    known = ~(np.isnan(day_c) & exists).any(axis=2)
    highest = np.where(exists & ~np.isnan(day_c), day_c, -np.inf).max(axis=2)
    return np.where(known, highest, np.nan)


def window_charging_kw(found: History, window_slot: Ints) -> Floats:
    """(site, day) mean of what is taken out over the window's slots; NaN where one is not measured."""
    day_kw, _ = by_local_day(found.charging_kw, np.zeros_like(found.raw.quality), found.grid)
    exists = found.grid.times[:, window_slot] > 0
    count = exists.sum(axis=1)
    total = np.where(exists, day_kw[:, :, window_slot], 0.0).sum(axis=2)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _charging(found: History, window: Ints) -> Charging | None:
    guarded = found.guard != "none"
    if not guarded.any() or not len(window):
        return None
    by_day = window_charging_kw(found, found.grid.slot[window])
    return Charging(guarded, found.charging_kw[:, window].mean(axis=1), by_day[:, found.recent])


def _weather(found: History, shown: Ints, event: Ints, window: Ints) -> Weather:
    grid, recent = found.grid, found.recent
    peak_c = peak_dry_bulb_c(found)
    day_c = dry_bulb_by_day(found)
    # Day 0 of the calendar, 1970-01-01, was a Thursday, day 3 of a week that starts on Monday.
    weekday = (grid.days.astype(np.int64) + 3) % 7
    return Weather(
        day_peak_c=peak_c[:, recent],
        event_peak_c=peak_c[:, found.event_day],
        weekday=weekday[recent],
        day_c=day_c[:, recent],
        at_weekday=weekday[grid.day[shown]],
        at_c=found.dry_bulb_c[:, shown],
        in_event=np.isin(shown, event),
        window_weekday=weekday[grid.day[window]],
        window_c=found.dry_bulb_c[:, window],
    )


def _between(clock: Clock, since: np.datetime64, until: np.datetime64) -> Ints:
    """Indices of the intervals that lie wholly within [since, until)."""
    starts = clock.starts
    return np.flatnonzero((starts >= since) & (starts + clock.step <= until))


def rows_of(rules: Sequence[SettlementRule], rule: SettlementRule) -> Ints:
    """Positions of the sites under a rule."""
    return np.array([at for at, other in enumerate(rules) if other is rule or other == rule], dtype=np.int64)
