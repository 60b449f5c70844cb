"""One plant through a horizon: usual operation, and the same plant with machines held off or limited.

Usual operation is derived from the strategy, never declared; an event row is the same plant with stages laid
over it. `advance` moves one row over one interval, inside a compiled loop over rows: here the one that keeps all
(`simulate`), in trial.py the one that keeps sums. A row's records stay near the processor for its whole horizon.

Order within an interval: standing loss; which machines may run and how far; tank to load and chillers to
load; pull-down of a warm zone; charging; zone; machine loading and power. Rates of a tank are held to its
limit at the END-of-interval inventory.
"""

from dataclasses import dataclass
from math import exp, inf
from typing import Any, Final

import numpy as np

from sites import storage
from sites.candidate import Stages
from sites.comfort import after_k, net_kw_th
from sites.compiled import Number, cores, each, inner, loop
from sites.conditions import Conditions
from sites.course import MADE, NOW, STORED, Course, Usual, course
from sites.making import DIRECT, WORK_ROWS, make_within
from sites.recovery import CAPPED, USUAL
from sites.roster import STRATEGIES, Rows
from sites.rows import USUAL as USUAL_HOUR
from sites.rows import Plants, usual_hours
from sites.tank import KNOT_SOC
from sites.units import AnyArray, Bools, Floats

START_CHARGE_BELOW = 0.95
"""Usual charging starts below this share of capacity and goes on to STOP_CHARGE_AT,
where the last of the ice freezes too slowly to be worth cold brine (common practice, no source)."""
STOP_CHARGE_AT = 0.985
PULL_DOWN_H = 1.0
"""Time constant of the ramp that brings a warm zone back; a step would rebound above the normal peak
(Xu, Haves, Piette, Braun 2004 recommend a ramp; its length is common practice, no source)."""
LEAST_CHARGE_KW_TH = 1e-6
"""Less than this is rounding: it starts no pump."""
SETTLED_K = 0.02
"""Rise below which the zone is brought back at once."""
APART_FRACTION = 1e-3
"""Share of capacity by which tanks must differ from the usual case's to be held ahead of it or behind."""

_FULL, _LEVEL, _CHILLER_FIRST, _STORAGE_FIRST = range(len(STRATEGIES))

ROW: Final = np.dtype(
    [
        *((name, "i8") for name in ("site", "recovery", "recover_from", "start", "end")),
        *((name, "f8") for name in ("air_k", "mass_k")),
        ("charging", "?"),
        ("from_above", "?"),
    ],
    align=True,
)
"""One row to be run: its site, recovery and window, and where it stands between two intervals: rise of air and mass,
charging mode. from_above: its tanks come back to the usual case's level from above, after an absorb."""


@dataclass(frozen=True)
class State(Rows):
    """Where rows stand between two intervals: inventory (row, tank), charging mode, rise of air and mass (row,)."""

    inventory_kwh_th: Floats
    charging: Bools
    air_k: Floats
    mass_k: Floats


def at_rest(inventory_kwh_th: Floats, charging: Bools | None = None) -> State:
    """Rows with tanks at `inventory_kwh_th` (row, tank) and zones as in the usual case."""
    count = len(inventory_kwh_th)
    mode = np.zeros(count, dtype=np.bool_) if charging is None else charging
    return State(inventory_kwh_th, mode, np.zeros(count), np.zeros(count))


def records_of(rows: Plants, state: State) -> AnyArray:
    """ROW (row,) of rows that stand as `state` says, with no window."""
    records = np.zeros(len(rows.site), dtype=ROW)
    for name, values in (
        ("site", rows.site),
        ("recovery", rows.recovery),
        ("recover_from", rows.recover_from),
        ("air_k", state.air_k),
        ("mass_k", state.mass_k),
        ("charging", state.charging),
    ):
        records[name] = values
    return records


def laid(stages: Stages) -> tuple[AnyArray, ...]:
    """Start, end (row, stage), limits (row, stage, machine) and charge (row, stage) as a loop takes them."""
    types = ((stages.start, np.int64), (stages.end, np.int64), (stages.load_limit_fraction, np.float64))
    return (
        *(np.ascontiguousarray(values, dtype=kind) for values, kind in types),
        np.ascontiguousarray(stages.charge, dtype=np.bool_),
    )


def room(rows: Plants) -> tuple[Floats, Floats]:
    """Room to work in for one thread: (tank, knot) and (WORK_ROWS, machine)."""
    return np.zeros((rows.tanks.shape[1], len(KNOT_SOC))), np.zeros((WORK_ROWS, rows.machines.shape[1]))


def simulate(rows: Plants, here: Conditions, stages: Stages, state: State, usual: Usual | None) -> Course:
    """Run every row from `state` over the horizon. `usual` None means that these rows are the usual case."""
    count, intervals = len(rows.site), rows.hours.shape[1]
    now = np.zeros((count, intervals), dtype=NOW)
    made = np.zeros((count, intervals, rows.machines.shape[1]), dtype=MADE)
    made["limit_fraction"] = 1.0
    stored = np.zeros((count, intervals, rows.tanks.shape[1]), dtype=STORED)
    inventory = np.ascontiguousarray(state.inventory_kwh_th, dtype=np.float64).copy()
    hours = np.zeros((1, 1), dtype=USUAL_HOUR)
    if usual is not None:
        parts = (usual.unmet_kw_th, usual.inventory_kwh_th, usual.charge_kw_th, usual.power_kw)
        hours = usual_hours(rows, here, *parts)
    fixed = (rows.sites, rows.machines, rows.tanks, rows.hours, rows.able, hours)
    moving = (records_of(rows, state), *laid(stages), inventory, now, made, stored)
    edges = np.linspace(0, count, cores() + 1).astype(np.int64)

    def part(i: int) -> None:
        _keep(edges[i], edges[i + 1], rows.step_h, usual is not None, *fixed, *moving, *room(rows))

    each(part, len(edges) - 1)
    return course(now, made, stored)


@loop
def _keep(
    first_row: int,
    last_row: int,
    step_h: float,
    event: bool,
    sites: Any,
    machines: Any,
    tanks: Any,
    hours: Any,
    able: Any,
    usual: Any,
    rows: Any,
    stage_start: Any,
    stage_end: Any,
    stage_limit: Any,
    stage_charge: Any,
    inventory: Any,
    now: Any,
    made: Any,
    stored: Any,
    knots: Any,
    work: Any,
) -> None:
    """Rows [first_row, last_row) over the whole horizon, every interval kept in NOW, MADE and STORED."""
    for r in range(first_row, last_row):
        row = rows[r]
        i = row.site
        site, site_tanks = sites[i], tanks[i]
        for t in range(hours.shape[1]):
            last = t - 1 if event and t > 0 else 0
            beside = (usual[i, t], usual[i, last]) if event else (usual[0, 0], usual[0, 0])
            staged, made_to = stage(
                site, made[r, t], stage_start[r], stage_end[r], stage_limit[r], stage_charge[r], t
            )
            advance(
                site, machines[i], site_tanks, hours[i, t], able[i, t], beside[0], beside[1], event, t,
                staged, made_to, True, row, inventory[r], now[r, t], made[r, t], stored[r, t], knots, work, step_h,
            )  # fmt: skip
            storage.limits(site, site_tanks, stored[r, t], knots)


@inner
def stage(site: Any, made: Any, start: Any, end: Any, limit: Any, charge: Any, t: int) -> tuple[bool, bool]:
    """Whether a row is in a stage in interval t, and whether it is made to charge; each machine's limit is written to
    `made`. Where stages overlap the lower limit holds."""
    staged = False
    made_to = False
    for m in range(site.machine_count):
        made[m].limit_fraction = 1.0
    for s in range(len(start)):
        if start[s] <= t and t < end[s]:
            staged = True
            made_to = made_to or charge[s]
            for m in range(site.machine_count):
                made[m].limit_fraction = min(made[m].limit_fraction, limit[s, m])
    return staged, made_to


@inner
def advance(
    site: Any,
    machines: Any,
    tanks: Any,
    hour: Any,
    able: Any,
    usual: Any,
    before: Any,
    event: bool,
    t: int,
    staged: bool,
    made_to: bool,
    whole: bool,
    row: Any,
    inventory: Any,
    now: Any,
    made: Any,
    stored: Any,
    knots: Any,
    work: Any,
    step_h: Number,
) -> None:
    """One row over interval t. `usual` and `before` are the usual case in this interval and in the one before it, read
    where `event`; not `whole`: what tanks could have given is left out where they are asked for nothing."""
    every, held, lost = storage.stand(site, tanks, stored, inventory, step_h)
    ready = 0.0
    largest = 0.0
    for m in range(site.machine_count):
        work[DIRECT, m] = able[m].direct_kw_th * made[m].limit_fraction
        ready += work[DIRECT, m]
        largest = max(largest, work[DIRECT, m])
    load = hour.load_kw_th
    now.start_kwh_th, now.load_kw_th, now.ready_kw_th, now.drawn_kw_th = every, load, ready, 0.0
    now.wanted_kw_th = _wanted(site, hour, staged, ready, held, step_h)
    could = 0.0
    if whole or now.wanted_kw_th > 0.0:
        could = storage.discharge(site, tanks, stored, now, knots, staged, held, step_h)
    now.firm_kw_th = ready - largest + could
    served = min(load - now.drawn_kw_th, ready)
    now.unmet_kw_th = max(load - now.drawn_kw_th - served, 0.0)
    extra = now.unmet_kw_th - usual.unmet_kw_th if event else 0.0
    now.pull_down_kw_th = _pull_down(site, row, staged, extra, ready - served, step_h)
    _drift(site, row, now, extra - now.pull_down_kw_th)
    charging, asked = _plan(
        site, hour, usual, before, event, t, row, (held, lost, now.drawn_kw_th), staged, made_to, step_h
    )
    room_kw = usual.room_kw if event and row.recovery == CAPPED else inf
    flows = (served + now.pull_down_kw_th, asked, now.drawn_kw_th)
    now.power_kw = make_within(
        site, machines, able, tanks, made, stored, work, flows, charging, step_h, room_kw
    )
    now.held_kwh_th, held = storage.settle(site, tanks, stored, inventory, step_h)
    row.charging = charging and held < STOP_CHARGE_AT * site.capacity_kwh_th
    now.charging = row.charging


@inner
def _wanted(site: Any, hour: Any, staged: bool, ready: Number, held: Number, step_h: Number) -> Number:
    """kW_th the load asks of the tanks, before their limits.

    Always what the chillers cannot serve; beyond it by strategy, outside stages: full storage all load on
    peak; storage priority the inventory spread over what is left of the on-peak hours; load levelling what
    lies above the flat rate; chiller priority nothing.
    """
    load = hour.load_kw_th
    wanted = max(load - ready, 0.0)
    if staged:
        return wanted
    if site.strategy == _LEVEL:
        return max(wanted, load - site.level_kw_th)
    if hour.on_peak_left_h > 0.0:
        if site.strategy == _FULL:
            return max(wanted, load)
        if site.strategy == _STORAGE_FIRST:
            return max(wanted, min(held / max(hour.on_peak_left_h, step_h), load))
    return wanted


@inner
def _pull_down(site: Any, row: Any, staged: bool, extra: Number, spare: Number, step_h: Number) -> Number:
    """Extra cooling that brings a warm zone back on a ramp, from spare capacity, outside stages."""
    if staged or row.air_k <= 0.0:
        return 0.0
    target = 0.0 if row.air_k < SETTLED_K else row.air_k * exp(-step_h / PULL_DOWN_H)
    net = net_kw_th(site.air_of_air, site.air_of_mass, site.air_gain, row.air_k, row.mass_k, target)
    return min(max(extra - net, 0.0), max(spare, 0.0))


@inner
def _drift(site: Any, row: Any, now: Any, net: Number) -> None:
    """The zone over one interval under `net` kW_th of cooling that goes unmet."""
    air, mass = row.air_k, row.mass_k
    air_end = after_k(site.air_of_air, site.air_of_mass, site.air_gain, air, mass, net)
    mass_end = after_k(site.mass_of_air, site.mass_of_mass, site.mass_gain, air, mass, net)
    now.air_mean_rise_k = after_k(site.mean_of_air, site.mean_of_mass, site.mean_gain, air, mass, net)
    now.air_rise_k, now.mass_rise_k = air_end, mass_end
    row.air_k, row.mass_k = air_end, mass_end


@inner
def _plan(
    site: Any,
    hour: Any,
    usual: Any,
    before: Any,
    event: bool,
    t: int,
    row: Any,
    tanks: tuple[Number, Number, Number],
    staged: bool,
    made_to: bool,
    step_h: Number,
) -> tuple[bool, float]:
    """Charging mode and charge asked for: by strategy, by a recovery, or because a stage makes the tanks charge.
    `tanks`: held and lost by those in service, drawn from all.

    Charging mode: in charging hours, from low enough until full; an event row also while its tank lies below the usual
    case's; load levelling whenever load is under the flat rate. Asked for: all there is, or with load levelling what
    lies under the flat rate, and in charging hours what brings a tank that is behind the usual case up to it, no
    further; a levelled tank that is ahead of the usual case waits for it.
    """
    held, capacity = tanks[0], site.capacity_kwh_th
    compared = event and t > 0
    not_full = held < STOP_CHARGE_AT * capacity
    asked = inf
    if site.strategy == _LEVEL:
        behind = hour.charge and compared and held < before.held_kwh_th
        below_level = site.level_kw_th - hour.load_kw_th
        charging = below_level > 0.0 or behind
        asked = max(below_level, 0.0)
        if behind:
            asked = max(asked, (usual.held_kwh_th - held) / step_h + tanks[1])
        if compared and held - before.held_kwh_th > APART_FRACTION * capacity:
            asked = min(asked, max((usual.held_kwh_th - held) / step_h, 0.0))
    else:
        low = row.charging or held < START_CHARGE_BELOW * capacity
        if event:
            low = low or held < usual.held_kwh_th - APART_FRACTION * capacity
        charging = hour.charge and low
    charging = charging and not_full and not staged
    if event and row.recovery != USUAL and row.recover_from <= t:
        asked = _made_up(hour, usual, row, tanks, step_h)
        charging = not staged and tanks[2] <= 0.0 and asked > LEAST_CHARGE_KW_TH
    if made_to:
        return charging or not_full, inf
    return charging, asked


@inner
def _made_up(hour: Any, usual: Any, row: Any, tanks: tuple[Number, Number, Number], step_h: Number) -> Number:
    """Charge asked for after a window under a recovery other than the usual one: in the recovery's hours what brings
    the tanks to the usual case's level by the interval's end, in others what the usual case charges."""
    held, lost, _ = tanks
    if (hour.recoveries >> row.recovery) & 1:
        return max((usual.held_kwh_th - held) / step_h + lost, 0.0)
    return usual.charge_kw_th
