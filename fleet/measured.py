"""What each called site delivered against its baseline: readings to kW and kWh, for some sites at a time.

Owns delivered kW over the event and after it, energy taken back, and how sure it all is. Delivered is positive in the
event's direction; an estimated reading counts only where it lowers what was delivered. Leaves readings to meters.py
and history.py, baselines to baseline.py, money to settle.py.
"""

from dataclasses import dataclass, fields
from typing import Any, TypeVar

import numpy as np
import pandas as pd

from fleet.baseline import NONE, Baseline, baseline
from fleet.callfacts import CallFacts, Plan
from fleet.history import (
    History,
    day_facts,
    dry_bulb_by_day,
    event_facts,
    filled,
    history,
    part,
    peak_dry_bulb_c,
    rows_of,
)
from fleet.meters import EDITED, Codes, by_local_day
from fleet.remarks import Remark, remarks
from fleet.settlement import Trace, day_interval_table, day_table
from sites.direction import Direction
from sites.units import AnyArray, Floats, Ints, Strings, Times

Arrays = TypeVar("Arrays")


@dataclass(frozen=True)
class Measured:
    """What sites delivered; arrays over (site,) or (site, shown interval)."""

    base: Baseline
    metered_kw: Floats
    quality: Codes
    delivered_kw: Floats
    """NaN = unknown"""
    guard: Strings
    dry_bulb_c: Floats
    """NaN where the rule needs none"""
    until_midnight_kwh: Floats
    """energy taken back after the own window; NaN where not known"""
    until_full_kwh: Floats
    state: AnyArray


@dataclass(frozen=True)
class Part:
    """Some sites of a call worked out, and the tables of their days."""

    measured: Measured
    days: pd.DataFrame
    day_intervals: pd.DataFrame | None
    """None once given away"""
    remarks: tuple[Remark, ...]
    counts: dict[str, int]


def measure(
    call: CallFacts,
    plan: Plan,
    readings: pd.DataFrame,
    revision: int,
    since: np.datetime64,
    until: np.datetime64,
) -> Part:
    """The plan's sites on their readings, since and until as history.period has them for the whole call.

    Raises Refused for readings that cannot be placed (see meters.streams).
    """
    found = history(call, plan, readings, since, until)
    base, window_kw, charging = _baselines(plan, call.direction, found)
    whole = filled(plan, found)
    shown = slice(whole.clock.index(plan.clock.start), whole.clock.index(plan.clock.end))
    metered, quality = whole.kw[:, shown], whole.quality[:, shown]
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
    delivered = _delivered(plan, call.direction, base, metered, quality)
    measured = Measured(
        base=base,
        metered_kw=metered,
        quality=quality,
        delivered_kw=delivered,
        guard=found.guard,
        dry_bulb_c=found.dry_bulb_c[:, shown],
        until_midnight_kwh=_taken_back(plan, delivered, _midnight(plan, found.grid.day[shown])),
        until_full_kwh=_taken_back(plan, delivered, plan.full_again_at),
        state=_state(plan, base, metered, quality),
    )
    return Part(
        measured=measured,
        days=day_table(call.event_id, revision, plan, base, trace),
        day_intervals=day_interval_table(call.event_id, revision, plan, base, trace),
        remarks=remarks(call, plan, base, trace),
        counts=dict(whole.counts),
    )


def joined(parts: list[Measured]) -> Measured:
    """Sites one after the other."""
    return parts[0] if len(parts) == 1 else _joined(Measured, parts)


def _joined(kind: type[Arrays], parts: list[Arrays]) -> Arrays:
    values: dict[str, Any] = {}
    for field in fields(kind):  # type: ignore[arg-type]
        own = [getattr(one, field.name) for one in parts]
        values[field.name] = _joined(Baseline, own) if field.name == "base" else np.concatenate(own)
    return kind(**values)


def _baselines(plan: Plan, direction: Direction, found: History) -> tuple[Baseline, Floats, Floats]:
    """Baselines of all sites, rule by rule; the event day's mean over each adjustment window (site,), and what is
    taken out of each day's (site, day of the grid)."""
    parts: list[Baseline] = []
    order: list[int] = []
    window_kw = np.full(len(plan.site_ids), np.nan)
    charging_kw = np.full((len(plan.site_ids), len(found.grid.days)), np.nan)
    for rule in dict.fromkeys(plan.rules):
        rows = rows_of(plan.rules, rule)
        own = part(found, rows)
        event = event_facts(plan, direction, own, rule)
        day_kw, _ = by_local_day(own.measured, own.raw.quality, own.grid)
        recent = day_kw[:, : own.event_day][:, ::-1]
        parts.append(baseline(recent, day_facts(own), rule, event))
        if rule.kind != "before_after" and event.window_kw.shape[1]:
            window_kw[rows] = event.window_kw.mean(axis=1)
        if event.charging is not None:
            charging_kw[np.ix_(rows, own.recent)] = event.charging.day_kw
            charging_kw[rows, own.event_day] = event.charging.window_kw
        order += rows.tolist()
    if len(parts) == 1:
        return parts[0], window_kw, charging_kw
    back = np.argsort(order)
    whole = _joined(Baseline, parts)
    sorted_back = {field.name: getattr(whole, field.name)[back] for field in fields(Baseline)}
    return Baseline(**sorted_back), window_kw, charging_kw


def _delivered(plan: Plan, direction: Direction, found: Baseline, metered: Floats, quality: Codes) -> Floats:
    """Adjusted baseline less metered for shed, the reverse for absorb (site, shown interval); NaN = unknown.

    In the event and the site's window an estimate stands only where it counts against the site.
    """
    value = -direction.sign * (found.adjusted_kw - metered)
    watched = plan.in_event(plan.clock) | plan.in_window(plan.clock)
    delivered: Floats = np.where(watched & (quality > EDITED) & (value > 0.0), np.nan, value)
    return delivered


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


def _state(plan: Plan, found: Baseline, metered: Floats, quality: Codes) -> AnyArray:
    """(site,) how sure the result is: see the choices of the state column."""
    in_window = plan.in_window(plan.clock)
    watched = in_window | plan.in_event(plan.clock)
    none_read = ~(in_window & ~np.isnan(metered)).any(axis=1)
    no_base = (found.method == NONE) | ~(in_window & ~np.isnan(found.adjusted_kw)).any(axis=1)
    unsure = (watched & (quality > EDITED)).any(axis=1) | found.doubtful
    unsure |= (in_window & np.isnan(found.adjusted_kw)).any(axis=1)
    states = np.select([none_read, no_base, unsure], ["meter_missing", "no_baseline", "provisional"], "final")
    return states.astype(object)
