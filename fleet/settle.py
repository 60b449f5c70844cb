"""An event settled: what every called site delivered against its frozen rule, and what that earns.

Pure: facts of the call and readings in, one Settlement out. Owns delivered kW, states and the order of work;
leaves readings to meters.py, baselines to baseline.py, money to money.py, tables to settlement.py. Delivered is
positive in the event's direction. An estimated reading counts only where it lowers what was delivered.
"""

from dataclasses import fields
from typing import Final

import numpy as np
import pandas as pd

from fleet.baseline import NONE, Baseline, baseline
from fleet.callfacts import CallFacts, Plan, arrange
from fleet.history import (
    History,
    day_facts,
    dry_bulb_by_day,
    event_facts,
    filled,
    history,
    hours,
    part,
    peak_dry_bulb_c,
    rows_of,
)
from fleet.meters import EDITED, Streams, by_local_day, spikes
from fleet.money import Lines, earned, firm_level_charge, minor_digits, performance_factor
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
from fleet.validation import STUCK_H, negative, shifted_h, stuck
from sites.direction import Direction
from sites.units import AnyArray, Bools, Floats, Ints, Times

__all__ = ["CallFacts", "Settlement", "settle"]

PRE_CHARGE_WARNING: Final = 1.10
"""Load in the adjustment window above like days by more than this, after notice, is pointed out."""
SITES_AT_ONCE: Final = 1_000
"""Sites whose days are laid out together; keeps memory flat as the fleet grows."""


def settle(
    call: CallFacts, readings: pd.DataFrame, revision: int = 1, previous_sites: pd.DataFrame | None = None
) -> Settlement:
    """Settle every called site of `call` on `readings` (meter_id, interval_start, kw, quality).

    previous_sites: the sites table of the revision before, from whose totals the postings start. Raises Refused
    for readings that cannot be placed (see meters.streams) and FleetError for a call that is not complete.
    """
    plan = arrange(call)
    found = history(call, plan, readings)
    base, window_kw, charging = _baselines(plan, call.direction, found)
    whole = filled(plan, found)
    shown = slice(whole.clock.index(plan.clock.start), whole.clock.index(plan.clock.end))
    result = _result(plan, call, base, found, whole.kw[:, shown], whole.quality[:, shown])
    kw, day_quality = by_local_day(whole.kw, whole.quality, found.grid)
    trace = Trace(
        grid=found.grid,
        event_day=found.event_day,
        kw=kw,
        quality=day_quality,
        modes=found.modes,
        window_kw=window_kw,
        charging_kw=charging,
        dry_bulb_c=dry_bulb_by_day(found),
        peak_dry_bulb_c=peak_dry_bulb_c(found),
        step_h=plan.clock.step_h,
        starts=whole.clock.starts,
    )
    head = (call.event_id, revision, plan)
    sites = site_table(*head, base, result)
    fleet = fleet_table(*head, call.request, result)
    return Settlement(
        intervals=interval_table(*head, base, result),
        days=day_table(*head, base, trace),
        day_intervals=day_interval_table(*head, base, trace),
        sites=sites,
        fleet=fleet,
        postings=posting_table(call.event_id, revision, sites, previous_sites),
        summary=_summary(call, revision, plan, sites, fleet, whole),
        notes=_notes(call, plan, base, trace),
    )


def _baselines(plan: Plan, direction: Direction, found: History) -> tuple[Baseline, Floats, Floats]:
    """Baselines of all sites, rule by rule; the event day's mean over each adjustment window (site,), and what is
    taken out of each day's (site, day of the grid)."""
    parts: list[Baseline] = []
    order: list[int] = []
    window_kw = np.full(len(plan.site_ids), np.nan)
    charging_kw = np.full((len(plan.site_ids), len(found.grid.days)), np.nan)
    for rule in dict.fromkeys(plan.rules):
        every = rows_of(plan.rules, rule)
        for first in range(0, len(every), SITES_AT_ONCE):
            rows = every[first : first + SITES_AT_ONCE]
            own = part(found, rows)
            event = event_facts(plan, direction, own, rule)
            day_kw, _ = by_local_day(own.measured, own.raw.quality, own.grid)
            parts.append(baseline(day_kw[:, own.recent], day_facts(own), rule, event))
            if rule.kind != "before_after" and event.window_kw.shape[1]:
                window_kw[rows] = event.window_kw.mean(axis=1)
            if event.charging is not None:
                charging_kw[np.ix_(rows, own.recent)] = event.charging.day_kw
                charging_kw[rows, own.event_day] = event.charging.window_kw
            order += rows.tolist()
    back = np.argsort(order)
    joined = {
        field.name: np.concatenate([getattr(one, field.name) for one in parts])[back]
        for field in fields(Baseline)
    }
    return Baseline(**joined), window_kw, charging_kw


def _delivered(plan: Plan, direction: Direction, found: Baseline, metered: Floats, quality: Ints) -> Floats:
    """Adjusted baseline less metered for shed, the reverse for absorb (site, shown interval); NaN = unknown.

    In the event and the site's window an estimate stands only where it counts against the site.
    """
    value = -direction.sign * (found.adjusted_kw - metered)
    watched = plan.in_event(plan.clock) | plan.in_window(plan.clock)
    delivered: Floats = np.where(watched & (quality > EDITED) & (value > 0.0), np.nan, value)
    return delivered


def _result(
    plan: Plan, call: CallFacts, base: Baseline, found: History, metered: Floats, quality: Ints
) -> SiteResult:
    """Energy over each site's own window, performance, state and money."""
    clock = plan.clock
    delivered = _delivered(plan, call.direction, base, metered, quality)
    in_window = plan.in_window(clock)
    known = in_window & ~np.isnan(delivered)
    committed_kwh = np.where(in_window, plan.committed_kw, 0.0).sum(axis=1) * clock.step_h
    energy = np.where(known, delivered, 0.0).sum(axis=1) * clock.step_h
    delivered_kwh = np.where(known.any(axis=1), energy, np.nan)
    excused = np.array([site in call.excused for site in plan.site_ids])
    factor, share = np.full(len(energy), np.nan), np.full(len(energy), np.nan)
    money = np.zeros((len(energy), 4), dtype=object)
    hour = (clock.starts - plan.event_start) // np.timedelta64(1, "h")
    sign = -call.direction.sign
    for rule in dict.fromkeys(plan.rules):
        rows = rows_of(plan.rules, rule)
        inside, out = in_window[rows], excused[rows]
        one = performance_factor(delivered[rows], plan.committed_kw[rows], inside, clock.step_h, rule, hour)
        charge = firm_level_charge(metered[rows], inside, clock.step_h, rule, sign)
        factor[rows] = np.where(out, np.nan, one)
        share[rows], due = earned(
            committed_kwh[rows],
            np.where(out, np.nan, delivered_kwh[rows]),
            factor[rows],
            np.where(out, 0.0, charge),
            rule,
            call.prices,
            [plan.site_ids[row] for row in rows],
        )
        money[rows] = np.stack([due.capacity_payment, due.energy_payment, due.penalty, due.total], axis=1)
    starts = slice(found.raw.clock.index(clock.start), found.raw.clock.index(clock.end))
    return SiteResult(
        metered_kw=metered,
        quality=quality,
        delivered_kw=delivered,
        in_event=plan.in_event(clock),
        in_window=in_window,
        committed_kwh=committed_kwh,
        delivered_kwh=delivered_kwh,
        factor=factor,
        paid_share=share,
        state=np.where(excused, "excused", _state(plan, base, metered, quality)).astype(object),
        why=np.array([call.excused.get(site) for site in plan.site_ids], dtype=object),
        guard=found.guard,
        dry_bulb_c=found.dry_bulb_c[:, starts],
        until_midnight_kwh=_taken_back(plan, delivered, _midnight(plan, found.grid.day[starts])),
        until_full_kwh=_taken_back(plan, delivered, plan.full_again_at),
        money=Lines(*money.T),
    )


def _midnight(plan: Plan, day: Ints) -> Times:
    """(site,) end of the local day of the own window's last interval, or of the horizon; day (interval,)."""
    last = ((plan.window_end - plan.clock.start) // plan.clock.step).astype(np.int64) - 1
    after = np.searchsorted(day, day[last], side="right")
    end: Times = plan.clock.start + after * plan.clock.step
    return end


def _taken_back(plan: Plan, delivered: Floats, until: Times) -> Floats:
    """kWh (site,) given back from the own window's end to `until`, what was delivered there with its sign turned.

    Undefined where `until` is, or an interval has no value.
    """
    starts = plan.clock.starts
    held = (starts >= plan.window_end[:, None]) & (starts < until[:, None])
    value = np.where(held, -delivered, 0.0).sum(axis=1) * plan.clock.step_h
    # Minus zero would read as something given back.
    return np.where(np.isnat(until), np.nan, value + 0.0)


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
    call: CallFacts, revision: int, plan: Plan, sites: pd.DataFrame, fleet: pd.DataFrame, whole: Streams
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
        "readings": dict(whole.counts),
    }


def _notes(call: CallFacts, plan: Plan, found: Baseline, trace: Trace) -> tuple[str, ...]:
    """What a reader of the statement should know besides the figures."""
    notes = [note for note in [minor_digits(call.prices.currency)[1]] if note]
    with_base = found.window_base_kw > 0.0
    above = trace.window_kw > PRE_CHARGE_WARNING * np.where(with_base, found.window_base_kw, np.inf)
    late = [
        call.called_at is not None and call.called_at < plan.event_start - hours(rule.adjustment_to_h)
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
    _readings_notes(notes, call, plan, found, trace)
    return tuple(notes)


def _readings_notes(notes: list[str], call: CallFacts, plan: Plan, found: Baseline, trace: Trace) -> None:
    """Readings of the event day that look wrong, and like days on which the plant ran unusually."""
    day_kw, step_h = trace.kw[:, trace.event_day], trace.step_h
    export = np.array([site in _exporting(call) for site in plan.site_ids])
    _name(notes, plan, negative(day_kw, export), "readings below zero on a meter that only delivers")
    _name(
        notes,
        plan,
        stuck(day_kw, step_h),
        f"one value unchanged for {STUCK_H:g} h or longer on the event day",
    )
    used = found.used[:, ::-1, None]
    held = used & ~np.isnan(trace.kw[:, : trace.event_day])
    total = np.where(held, trace.kw[:, : trace.event_day], 0.0).sum(axis=1)
    usual = np.where(held.any(axis=1), total / np.maximum(held.sum(axis=1), 1), np.nan)
    first = trace.grid.slot[np.searchsorted(trace.starts, plan.event_start)]
    shift = shifted_h(day_kw, usual, int(first), step_h)
    _name(notes, plan, shift != 0.0, "the event day fits its like days better when shifted by an hour")
    odd = (used[:, :, 0] & (trace.modes[:, : trace.event_day] != "usual")).any(axis=1)
    _name(
        notes,
        plan,
        odd,
        "the rule lets days count on which the plant ran unusually (tank out, recovery, ...)",
    )


def _exporting(call: CallFacts) -> set[str]:
    """Sites with a meter that can deliver backwards."""
    mapped = call.meter_map
    if mapped.empty:
        return set()
    sign = mapped["sign"].fillna(1) if "sign" in mapped else 1
    role = mapped["role"].fillna("building") if "role" in mapped else "building"
    back = (pd.Series(sign, index=mapped.index) < 0) | (pd.Series(role, index=mapped.index) == "generation")
    return set(mapped.loc[back, "site_id"].astype(str))


def _name(notes: list[str], plan: Plan, mask: Bools, text: str) -> None:
    named = [site for site, hit in zip(plan.site_ids, mask.tolist()) if hit]
    if named:
        more = f" and {len(named) - 5} more" if len(named) > 5 else ""
        notes.append(f"{text}: {', '.join(named[:5])}{more}")
