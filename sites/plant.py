"""One plant through a horizon: usual operation, and the same plant with machines held off or limited.

Usual operation is derived from the strategy, never declared; an event row is the same plant with stages laid
over it. `simulate` loops over intervals only; every row (a site, or one candidate of a site) moves at once.
What is kept of each interval is the caller's choice (course.py keeps all, quote.py keeps sums).

Order within an interval: standing loss; which machines may run and how far; tank to load and chillers to
load; pull-down of a warm zone; charging; zone; machine loading and power. Rates of a tank are held to its
limit at the END-of-interval inventory.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from sites import comfort, storage, tank
from sites.candidate import Stages
from sites.conditions import Conditions
from sites.making import Task, make_within
from sites.recovery import CAPPED, USUAL, cap_kw
from sites.roster import STRATEGIES, Rows
from sites.rows import Plants
from sites.units import Bools, Floats, total

START_CHARGE_BELOW = 0.95
"""Usual charging starts below this share of capacity and goes on to STOP_CHARGE_AT,
where the last of the ice freezes too slowly to be worth cold brine (common practice, no source)."""
STOP_CHARGE_AT = 0.985
PULL_DOWN_H = 1.0
"""Time constant of the ramp that brings a warm zone back; a step would rebound above the normal peak
(Xu, Haves, Piette, Braun 2004 recommend a ramp; its length is common practice, no source)."""
SETTLED_K = 0.02
"""Rise below which the zone is brought back at once."""

_FULL, _LEVEL, _CHILLER_FIRST, _STORAGE_FIRST = range(len(STRATEGIES))


@dataclass(frozen=True)
class Usual:
    """What an event row is measured against, per site: unmet and inventory of the usual case."""

    unmet_kw_th: Floats
    """(site, interval)"""
    inventory_kwh_th: Floats
    """(site, tank, interval), end of interval"""
    charge_kw_th: Floats
    """(site, interval) all tanks together"""
    power_kw: Floats
    """(site, interval)"""


@dataclass(frozen=True)
class Moment:
    """One interval of every row; (row,), (row, machine) or (row, tank)."""

    interval: int
    staged: Bools
    limit_fraction: Floats
    direct_kw_th: Floats
    """(row, machine) straight to load"""
    into_tank_kw_th: Floats
    """(row, machine) into tanks"""
    making_ice: Bools
    machine_kw: Floats
    power_kw: Floats
    charge_kw_th: Floats
    discharge_kw_th: Floats
    loss_kw_th: Floats
    inventory_start_kwh_th: Floats
    inventory_kwh_th: Floats
    discharge_limit_kw_th: Floats
    lmtd_k: Floats
    wanted_kw_th: Floats
    """(row,) what the load asked of the tanks before their limits"""
    spare_direct_kw_th: Floats
    """(row,) capacity left on machines that may run, the largest machine's loss not counted"""
    firm_kw_th: Floats
    """(row,) what could be served with the largest running machine lost: other machines and tanks"""
    load_kw_th: Floats
    unmet_kw_th: Floats
    pull_down_kw_th: Floats
    air_rise_k: Floats
    mass_rise_k: Floats
    air_mean_rise_k: Floats
    charging: Bools
    """(row,) still in charging mode at the interval's end"""


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


def state_after(moment: Moment) -> State:
    """Where rows stand at the end of an interval, to be carried on from."""
    return State(moment.inventory_kwh_th, moment.charging, moment.air_rise_k, moment.mass_rise_k)


def simulate(
    rows: Plants,
    here: Conditions,
    stages: Stages,
    state: State,
    usual: Usual | None,
    first: int = 0,
    last: int | None = None,
) -> Iterator[Moment]:
    """Run every row from `state` over the intervals [first, last) of the horizon (last None: to its end); yields
    one Moment an interval. `usual` None means that these rows are the usual case.
    """
    series = storage.behind(rows)
    room_kw = _room_kw(rows, here, usual)
    for interval in range(first, here.load_kw_th.shape[1] if last is None else last):
        moment = _advance(rows, series, here, stages, usual, state, room_kw, interval)
        state = state_after(moment)
        yield moment


def _advance(
    rows: Plants,
    series: storage.Behind,
    here: Conditions,
    stages: Stages,
    usual: Usual | None,
    state: State,
    room_kw: Floats,
    t: int,
) -> Moment:
    tanks, start = rows.roster.tanks, state.inventory_kwh_th
    loss = tank.standing_loss_kw_th(
        tanks.kind, start, tanks.capacity_kwh_th, tanks.loss_fraction_per_h, here.step_h
    )
    staged, limit, made_to = stages.at(t)
    direct_cap = here.direct_kw_th[rows.site, :, t] * limit
    ready, load = total(direct_cap), here.load_kw_th[rows.site, t]
    wanted = _wanted_from_tank(rows, here, staged, ready, load, start, t)
    tanks_gave = storage.discharge(rows, series, here.step_h, staged, ready, load, wanted, start, loss)
    drawn = tanks_gave.total_kw_th
    served = np.minimum(load - drawn, ready)
    unmet = np.maximum(load - drawn - served, 0.0)
    extra = unmet - usual.unmet_kw_th[rows.site, t] if usual else np.zeros_like(unmet)
    pull_down = _pull_down(rows, here, state, staged, extra, ready - served)
    air, mass, air_mean = comfort.advance(rows.zone, state.air_k, state.mass_k, extra - pull_down)
    charging, asked = _plan_to_charge(rows, here, usual, state, (staged, made_to), (load, loss, drawn), t)
    task = Task(charging, direct_cap, limit, served + pull_down, asked, start, loss, tanks_gave.drawn_kw_th)
    made = make_within(rows, here, task, room_kw[:, t], rows.recovery == CAPPED, t)
    inventory = start + (made.charge_kw_th - tanks_gave.drawn_kw_th - loss) * here.step_h
    return Moment(
        interval=t,
        staged=staged,
        limit_fraction=limit,
        direct_kw_th=made.direct_kw_th,
        into_tank_kw_th=made.into_tank_kw_th,
        making_ice=made.ice_mode,
        machine_kw=made.machine_kw,
        power_kw=made.power_kw,
        charge_kw_th=made.charge_kw_th,
        discharge_kw_th=tanks_gave.drawn_kw_th,
        loss_kw_th=loss,
        inventory_start_kwh_th=start,
        inventory_kwh_th=inventory,
        discharge_limit_kw_th=storage.limit_at_end(rows, inventory, tanks_gave.knots_kw_th),
        lmtd_k=tanks_gave.lmtd_k,
        wanted_kw_th=wanted,
        spare_direct_kw_th=ready - served - pull_down,
        firm_kw_th=ready - direct_cap.max(axis=1, initial=0.0) + total(tanks_gave.most_kw_th),
        load_kw_th=load,
        unmet_kw_th=unmet,
        pull_down_kw_th=pull_down,
        air_rise_k=air,
        mass_rise_k=mass,
        air_mean_rise_k=air_mean,
        charging=charging & _not_full(rows, inventory),
    )


def _wanted_from_tank(
    rows: Plants, here: Conditions, staged: Bools, direct_cap: Floats, load: Floats, start: Floats, t: int
) -> Floats:
    """kW_th the load asks of the tanks, (row,), before their limits.

    Always what the chillers cannot serve; beyond it by strategy, outside stages: full storage all load on
    peak; storage priority the inventory spread over what is left of the on-peak hours; load levelling what
    lies above the flat rate; chiller priority nothing.
    """
    shortage = np.maximum(load - direct_cap, 0.0)
    strategy = rows.roster.buildings.strategy
    on_peak = here.on_peak[rows.site, t]
    left_h = np.maximum(here.on_peak_left_h[rows.site, t], here.step_h)
    spread = np.minimum(storage.held(rows, start) / left_h, load)
    level = here.level_kw_th[rows.site]
    usual = np.select(
        [strategy == _FULL, strategy == _STORAGE_FIRST, strategy == _LEVEL],
        [np.where(on_peak, load, 0.0), np.where(on_peak, spread, 0.0), np.maximum(load - level, 0.0)],
        default=0.0,
    )
    return np.where(staged, shortage, np.maximum(shortage, usual))


def _pull_down(
    rows: Plants, here: Conditions, state: State, staged: Bools, extra: Floats, spare: Floats
) -> Floats:
    """Extra cooling (row,) that brings a warm zone back on a ramp, from spare capacity, outside stages."""
    warm = ~staged & (state.air_k > 0.0)
    if not warm.any():
        return np.zeros_like(spare)
    target = np.where(state.air_k < SETTLED_K, 0.0, state.air_k * np.exp(-here.step_h / PULL_DOWN_H))
    needed = extra - comfort.net_for_air(rows.zone, state.air_k, state.mass_k, target)
    return np.where(warm, np.clip(needed, 0.0, np.maximum(spare, 0.0)), 0.0)


def _plan_to_charge(
    rows: Plants,
    here: Conditions,
    usual: Usual | None,
    state: State,
    stage: tuple[Bools, Bools],
    flows: tuple[Floats, Floats, Floats],
    t: int,
) -> tuple[Bools, Floats]:
    """Charging mode and charge asked for, each (row,): by strategy, by a recovery, or because a stage makes the
    tanks charge. `stage`: rows in a stage, rows made to charge; `flows`: load (row,), loss (row, tank), discharge
    (row,)."""
    (staged, made_to), (load, loss, drawn), start = stage, flows, state.inventory_kwh_th
    charging = _charging(rows, here, staged, usual, state, t)
    asked = _charge_asked(rows, here, usual, load, start, t)
    if usual is not None:
        charging, asked = _made_up(rows, here, usual, staged, (start, loss, drawn), (charging, asked), t)
    return charging | (made_to & _not_full(rows, start)), np.where(made_to, np.inf, asked)


def _charging(
    rows: Plants, here: Conditions, staged: Bools, usual: Usual | None, state: State, t: int
) -> Bools:
    """Rows (row,) in charging mode: in charging hours, from low enough until full; an event row also while
    its tank lies below the usual case's; load levelling whenever load is under the flat rate."""
    hours = here.charge_hours[rows.site, t]
    held = storage.held(rows, state.inventory_kwh_th)
    capacity = storage.held(rows, rows.roster.tanks.capacity_kwh_th)
    low = state.charging | (held < START_CHARGE_BELOW * capacity)
    if usual is not None:
        low = low | (held < storage.held(rows, usual.inventory_kwh_th[rows.site, :, t]) - 1e-3 * capacity)
    below_level = here.load_kw_th[rows.site, t] < here.level_kw_th[rows.site]
    levelling = rows.roster.buildings.strategy == _LEVEL
    charging: Bools = (
        ~staged
        & _not_full(rows, state.inventory_kwh_th)
        & ((hours & low & ~levelling) | (levelling & (below_level | (hours & _behind(rows, usual, held, t)))))
    )
    return charging


def _not_full(rows: Plants, inventory: Floats) -> Bools:
    capacity = storage.held(rows, rows.roster.tanks.capacity_kwh_th)
    below: Bools = storage.held(rows, inventory) < STOP_CHARGE_AT * capacity
    return below


def _room_kw(rows: Plants, here: Conditions, usual: Usual | None) -> Floats:
    """Plant power (row, interval) that a capped recovery keeps to; inf for all others."""
    count = here.load_kw_th.shape[1]
    if usual is None or not (rows.recovery == CAPPED).any():
        return np.broadcast_to(np.float64(np.inf), (len(rows.site), count))
    room = cap_kw(here.rest_kw, here.billed_peak_kw, usual.power_kw)
    return np.where((rows.recovery == CAPPED)[:, None], room[rows.site], np.inf)


def _made_up(
    rows: Plants,
    here: Conditions,
    usual: Usual,
    staged: Bools,
    tanks: tuple[Floats, Floats, Floats],
    plan: tuple[Bools, Floats],
    t: int,
) -> tuple[Bools, Floats]:
    """Charging mode and charge asked for (row,) after a window under a recovery other than the usual one.

    In the recovery's hours what brings the tanks to the usual case's level by the interval's end, in others what
    the usual case charges; nothing while the tanks give. `tanks` are start inventory and loss (row, tank) and
    discharge (row,); `plan` is what the usual recovery would do.
    """
    own = (rows.recovery != USUAL) & (rows.recover_from <= t)
    if not own.any():
        return plan
    start, loss, drawn = tanks
    level = storage.held(rows, usual.inventory_kwh_th[rows.site, :, t])
    lacking = (level - storage.held(rows, start)) / here.step_h + storage.held(rows, loss)
    hours = here.recovery_hours[rows.recovery, rows.site, t]
    asked = np.where(hours, np.maximum(lacking, 0.0), usual.charge_kw_th[rows.site, t])
    on = ~staged & (drawn <= 0.0) & (asked > 0.0)
    return np.where(own, on, plan[0]), np.where(own, asked, plan[1])


def _charge_asked(
    rows: Plants, here: Conditions, usual: Usual | None, load: Floats, start: Floats, t: int
) -> Floats:
    """Charge (row,) that the strategy asks for: all there is, or with load levelling what lies under the flat
    rate, unless the tank is behind the usual case in its charging hours; a levelled tank that is ahead of the usual
    case waits for it."""
    levelling = rows.roster.buildings.strategy == _LEVEL
    behind = here.charge_hours[rows.site, t] & _behind(rows, usual, storage.held(rows, start), t)
    below_level = np.maximum(here.level_kw_th[rows.site] - load, 0.0)
    asked = np.where(levelling & ~behind, below_level, np.inf)
    if usual is None or t == 0:
        return asked
    held, capacity = storage.held(rows, start), storage.held(rows, rows.roster.tanks.capacity_kwh_th)
    ahead = held - storage.held(rows, usual.inventory_kwh_th[rows.site, :, t - 1]) > 1e-3 * capacity
    lacking = (storage.held(rows, usual.inventory_kwh_th[rows.site, :, t]) - held) / here.step_h
    return np.where(levelling & ahead, np.minimum(asked, np.maximum(lacking, 0.0)), asked)


def _behind(rows: Plants, usual: Usual | None, held: Floats, t: int) -> Bools:
    """Rows whose tanks hold less than in the usual case at this interval's start."""
    if usual is None or t == 0:
        return np.zeros(len(rows.site), dtype=np.bool_)
    behind: Bools = held < storage.held(rows, usual.inventory_kwh_th[rows.site, :, t - 1])
    return behind
