"""An event settled: what every called site delivered against its frozen rule, and what that earns.

Pure: facts of the call and readings in, one Settlement out. Owns delivered kW, states and the order of work;
leaves readings to meters.py, baselines to baseline.py, money to money.py, tables to settlement.py. Delivered is
positive in the event's direction. An estimated reading counts only where it lowers what was delivered.
"""

from dataclasses import dataclass, fields
from typing import Final

import numpy as np
import pandas as pd

from fleet.baseline import NONE, Baseline, DayFacts, EventFacts, baseline
from fleet.callfacts import CallFacts, Plan, arrange, local_days, marked, modes
from fleet.meters import EDITED, LocalGrid, Streams, by_local_day, estimate, local_grid, spikes, streams
from fleet.money import lines, minor_digits, paid_share, performance_factor
from fleet.rules import SettlementRule
from fleet.settlement import (
    Settlement,
    SiteResult,
    Trace,
    day_interval_table,
    day_table,
    fleet_table,
    interval_table,
    posting_table,
    site_table,
)
from sites.clock import Clock
from sites.direction import Direction
from sites.units import AnyArray, Bools, Floats, Ints

__all__ = ["CallFacts", "Settlement", "settle"]

PRE_CHARGE_WARNING: Final = 1.10
"""Load in the adjustment window above like days by more than this, after notice, is pointed out."""
SHORTEST_HISTORY_DAYS: Final = 4
"""Windows before the event reach back at most 48 h, whatever a rule's look-back."""


@dataclass(frozen=True)
class _History:
    """Readings and the local days behind them; day arrays over the grid's days."""

    raw: Streams
    grid: LocalGrid
    event_day: int
    weekend: Bools
    holiday: Bools
    past: Bools
    """(site, day) other event days"""
    modes: AnyArray


def settle(
    call: CallFacts, readings: pd.DataFrame, revision: int = 1, previous_sites: pd.DataFrame | None = None
) -> Settlement:
    """Settle every called site of `call` on `readings` (meter_id, interval_start, kw, quality).

    previous_sites: the sites table of the revision before, from whose totals the postings start. Raises Refused
    for readings that cannot be placed (see meters.streams) and FleetError for a call that is not complete.
    """
    plan = arrange(call)
    history = _history(call, plan, readings)
    found, window_kw = _baselines(plan, call.direction, history)
    filled = _filled(plan, history)
    shown = slice(filled.clock.index(plan.clock.start), filled.clock.index(plan.clock.end))
    metered, quality = filled.kw[:, shown], filled.quality[:, shown]
    result = _result(plan, call, found, metered, quality)
    kw, day_quality = by_local_day(filled.kw, filled.quality, history.grid)
    trace = Trace(history.grid, history.event_day, kw, day_quality, history.modes, window_kw)
    head = (call.event_id, revision, plan)
    sites = site_table(*head, found, result)
    fleet = fleet_table(*head, call.request, result)
    return Settlement(
        intervals=interval_table(*head, found, result),
        days=day_table(*head, found, trace),
        day_intervals=day_interval_table(*head, found, trace),
        sites=sites,
        fleet=fleet,
        postings=posting_table(call.event_id, revision, sites, previous_sites),
        summary=_summary(call, revision, plan, sites, fleet, filled),
        notes=_notes(call, plan, found, trace),
    )


def _history(call: CallFacts, plan: Plan, readings: pd.DataFrame) -> _History:
    """Readings of the called sites from the longest look-back's first local midnight to the horizon's end."""
    day = pd.Timestamp(plan.event_start, tz="UTC").tz_convert(call.timezone).tz_localize(None).normalize()
    back = max(SHORTEST_HISTORY_DAYS, *(rule.look_back_days for rule in plan.rules))
    midnight = (day - pd.Timedelta(days=back)).tz_localize(
        call.timezone, ambiguous=True, nonexistent="shift_forward"
    )
    since = np.datetime64(midnight.tz_convert("UTC").tz_localize(None).floor(f"{call.step_minutes}min"), "us")
    after = max(_hours(rule.after_h + rule.after_buffer_h) for rule in plan.rules)
    until = max(plan.clock.end, plan.event_end + after)
    known = call.fleet_site_ids or plan.site_ids
    step = call.step_minutes
    all_rows = streams(
        readings, call.meter_map, plan.site_ids, call.timezone, step, since, until, known_site_ids=known
    )
    raw = all_rows.pick(plan.site_ids, [rule.stream for rule in plan.rules])
    grid = local_grid(raw.clock, call.timezone)
    event_day = int(grid.day[raw.clock.index(plan.event_start)])
    past = marked(call.past_event_days, plan.site_ids, grid.days)
    no_days = call.holidays.empty
    holiday = np.zeros(len(grid.days), dtype=np.bool_)
    if not no_days:
        holiday = np.isin(grid.days, local_days(call.holidays["date"]))
    # Day 0 of the calendar, 1970-01-01, was a Thursday.
    weekend = (grid.days.astype(np.int64) + 3) % 7 >= 5
    ran = modes(call.plant_days, plan.site_ids, grid.days)
    return _History(raw, grid, event_day, weekend, holiday, past, ran)


def _hours(hours: float) -> np.timedelta64:
    return np.timedelta64(round(hours * 3_600_000_000), "us")


def _measured(history: _History) -> Floats:
    """(site, interval) readings that are no estimate, else NaN."""
    measured: Floats = np.where(history.raw.quality <= EDITED, history.raw.kw, np.nan)
    return measured


def _filled(plan: Plan, history: _History) -> Streams:
    """Gaps estimated: no line over the start or end of the event or a site's window, no like day inside."""
    clock, grid = history.raw.clock, history.grid
    starts = clock.starts
    breaks = (starts >= plan.event_start).astype(np.int64) + (starts >= plan.event_end)
    own = (starts >= plan.window_start[:, None]).astype(np.int64) + (starts >= plan.window_end[:, None])
    shut = plan.in_event(clock) | plan.in_window(clock)
    events = history.past.copy()
    events[:, history.event_day] = True
    day_class = (history.weekend | history.holiday).astype(np.int64)
    return estimate(history.raw, breaks + own, shut, day_class, events, grid)


def _baselines(plan: Plan, direction: Direction, history: _History) -> tuple[Baseline, Floats]:
    """Baselines of all sites, rule by rule, and the event day's mean over each site's adjustment window."""
    measured = _measured(history)
    day_kw, _ = by_local_day(measured, history.raw.quality, history.grid)
    recent = np.arange(history.event_day - 1, -1, -1)
    parts: list[Baseline] = []
    order: list[int] = []
    window_kw = np.full(len(plan.site_ids), np.nan)
    for rule in dict.fromkeys(plan.rules):
        rows = np.array([at for at, other in enumerate(plan.rules) if other == rule], dtype=np.int64)
        event = _event_facts(plan, direction, history, rule, measured[rows])
        facts = _day_facts(history, recent, rows)
        parts.append(baseline(day_kw[np.ix_(rows, recent)], facts, rule, event))
        if rule.kind == "like_days" and event.window_kw.shape[1]:
            window_kw[rows] = event.window_kw.mean(axis=1)
        order += rows.tolist()
    back = np.argsort(order)
    joined = {
        field.name: np.concatenate([getattr(part, field.name) for part in parts])[back]
        for field in fields(Baseline)
    }
    return Baseline(**joined), window_kw


def _day_facts(history: _History, recent: Ints, rows: Ints) -> DayFacts:
    """Facts of the days before the event for some sites, most recent first."""
    eventful = history.past.copy()
    eventful[:, history.event_day] = True
    return DayFacts(
        exists=history.grid.times[recent] > 0,
        weekend=history.weekend[recent],
        holiday=history.holiday[recent],
        event_past=history.past[np.ix_(rows, recent)],
        before_event=eventful[np.ix_(rows, recent + 1)],
        unusual=history.modes[np.ix_(rows, recent)] != "usual",
    )


def _event_facts(
    plan: Plan, direction: Direction, history: _History, rule: SettlementRule, measured: Floats
) -> EventFacts:
    """Slots and windows of one rule; measured (site of the rule, interval)."""
    clock, grid = history.raw.clock, history.grid
    start, end = plan.event_start, plan.event_end
    window = _between(clock, start - _hours(rule.adjustment_from_h), start - _hours(rule.adjustment_to_h))
    before_end, after_start = start - _hours(rule.before_buffer_h), end + _hours(rule.after_buffer_h)
    before = _between(clock, before_end - _hours(rule.before_h), before_end)
    after = _between(clock, after_start, after_start + _hours(rule.after_h))
    shown = np.arange(clock.index(plan.clock.start), clock.index(plan.clock.end))
    free = history.weekend | history.holiday
    like = (free[grid.day[shown]] == free[history.event_day]) | (rule.day_classes == "all_days")
    return EventFacts(
        sign=-direction.sign,
        weekend=bool(free[history.event_day]),
        slot=grid.slot[shown],
        like=like,
        event_slot=grid.slot[np.flatnonzero(plan.in_event(clock))],
        window_slot=grid.slot[window],
        window_kw=measured[:, window],
        around_kw=measured[:, np.concatenate([before, after])],
    )


def _between(clock: Clock, since: np.datetime64, until: np.datetime64) -> Ints:
    """Indices of the intervals that lie wholly within [since, until)."""
    starts = clock.starts
    return np.flatnonzero((starts >= since) & (starts + clock.step <= until))


def _delivered(plan: Plan, direction: Direction, found: Baseline, metered: Floats, quality: Ints) -> Floats:
    """Adjusted baseline less metered for shed, the reverse for absorb (site, shown interval); NaN = unknown.

    In the event and the site's window an estimate stands only where it counts against the site.
    """
    value = -direction.sign * (found.adjusted_kw - metered)
    watched = plan.in_event(plan.clock) | plan.in_window(plan.clock)
    delivered: Floats = np.where(watched & (quality > EDITED) & (value > 0.0), np.nan, value)
    return delivered


def _result(plan: Plan, call: CallFacts, found: Baseline, metered: Floats, quality: Ints) -> SiteResult:
    """Energy over each site's own window, performance, state and money."""
    clock = plan.clock
    delivered = _delivered(plan, call.direction, found, metered, quality)
    in_window = plan.in_window(clock)
    known = in_window & ~np.isnan(delivered)
    committed_kwh = np.where(in_window, plan.committed_kw, 0.0).sum(axis=1) * clock.step_h
    energy = np.where(known, delivered, 0.0).sum(axis=1) * clock.step_h
    delivered_kwh = np.where(known.any(axis=1), energy, np.nan)
    factor, share = np.full(len(energy), np.nan), np.full(len(energy), np.nan)
    for rule in dict.fromkeys(plan.rules):
        rows = np.array([other == rule for other in plan.rules])
        factor[rows] = performance_factor(
            delivered[rows], plan.committed_kw[rows], in_window[rows], clock.step_h, rule
        )
        share[rows] = paid_share(factor[rows], rule, call.prices)
    return SiteResult(
        metered_kw=metered,
        quality=quality,
        delivered_kw=delivered,
        in_event=plan.in_event(clock),
        in_window=in_window,
        committed_kwh=committed_kwh,
        delivered_kwh=delivered_kwh,
        factor=factor,
        state=_state(plan, found, metered, quality),
        money=lines(committed_kwh, delivered_kwh, share, call.prices),
    )


def _state(plan: Plan, found: Baseline, metered: Floats, quality: Ints) -> AnyArray:
    """(site,) how sure the result is: see the choices of the state column."""
    in_window = plan.in_window(plan.clock)
    watched = in_window | plan.in_event(plan.clock)
    none_read = ~(in_window & ~np.isnan(metered)).any(axis=1)
    no_base = (found.method == NONE) | ~(in_window & ~np.isnan(found.adjusted_kw)).any(axis=1)
    unsure = (watched & (quality > EDITED)).any(axis=1) | found.doubtful
    unsure |= (in_window & np.isnan(found.adjusted_kw)).any(axis=1)
    states = np.select([none_read, no_base, unsure], ["meter_missing", "no_baseline", "provisional"], "final")
    return states.astype(object)


def _summary(
    call: CallFacts, revision: int, plan: Plan, sites: pd.DataFrame, fleet: pd.DataFrame, filled: Streams
) -> dict[str, object]:
    """The revision in a few figures; kWh of the fleet at the requested node, over the whole event."""
    money = {name: sites[name].sum() for name in ("capacity_payment", "energy_payment", "penalty", "total")}
    return {
        "event_id": call.event_id,
        "revision": revision,
        "currency": call.prices.currency,
        "states": {str(name): int(count) for name, count in sites["state"].value_counts().items()},
        "fleet_committed_kwh": float(fleet["committed_kw"].sum() * plan.clock.step_h),
        "fleet_delivered_kwh": float(fleet["delivered_kw"].sum() * plan.clock.step_h),
        **money,
        "readings": dict(filled.counts),
    }


def _notes(call: CallFacts, plan: Plan, found: Baseline, trace: Trace) -> tuple[str, ...]:
    """What a reader of the statement should know besides the figures."""
    notes = [note for note in [minor_digits(call.prices.currency)[1]] if note]
    with_base = found.window_base_kw > 0.0
    above = trace.window_kw > PRE_CHARGE_WARNING * np.where(with_base, found.window_base_kw, np.inf)
    late = [
        call.called_at is not None and call.called_at < plan.event_start - _hours(rule.adjustment_to_h)
        for rule in plan.rules
    ]
    adjusted = np.array([kind != "none" for kind in found.kind])
    _name(
        notes,
        plan,
        above & adjusted & late,
        "load in the adjustment window more than 10 % above like days "
        "after notice; look for early charging of the tank",
    )
    _name(notes, plan, found.doubtful, "readings of the adjustment window, or before and after, not measured")
    spiky = spikes(trace.kw[:, trace.event_day])
    _name(notes, plan, spiky, "a spike on the event day (highest above third highest by over 180 %)")
    return tuple(notes)


def _name(notes: list[str], plan: Plan, mask: Bools, text: str) -> None:
    named = [site for site, hit in zip(plan.site_ids, mask.tolist()) if hit]
    if named:
        more = f" and {len(named) - 5} more" if len(named) > 5 else ""
        notes.append(f"{text}: {', '.join(named[:5])}{more}")
