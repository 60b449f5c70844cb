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
from sites.dispatch import plant_power_kw, staged_load_kw_th
from sites.roster import STRATEGIES
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


@dataclass
class _State:
    inventory_kwh_th: Floats
    charging: Bools
    air_k: Floats
    mass_k: Floats


def simulate(
    rows: Plants, here: Conditions, stages: Stages, inventory_kwh_th: Floats, usual: Usual | None
) -> Iterator[Moment]:
    """Run every row over the horizon; yields one Moment an interval.

    inventory_kwh_th (row, tank) at the start; `usual` None means that these rows are the usual case.
    """
    count = len(rows.site)
    series = storage.behind(rows)
    state = _State(inventory_kwh_th, np.zeros(count, dtype=np.bool_), np.zeros(count), np.zeros(count))
    for interval in range(here.load_kw_th.shape[1]):
        moment, state = _advance(rows, series, here, stages, usual, state, interval)
        yield moment


def _advance(
    rows: Plants,
    series: storage.Behind,
    here: Conditions,
    stages: Stages,
    usual: Usual | None,
    state: _State,
    t: int,
) -> tuple[Moment, _State]:
    tanks = rows.roster.tanks
    start = state.inventory_kwh_th
    loss = tank.standing_loss_kw_th(
        tanks.kind, start, tanks.capacity_kwh_th, tanks.loss_fraction_per_h, here.step_h
    )
    staged, limit = stages.at(t)
    direct_cap = here.direct_kw_th[rows.site, :, t] * limit
    ready = total(direct_cap)
    load = here.load_kw_th[rows.site, t]
    wanted = _wanted_from_tank(rows, here, staged, ready, load, start, t)
    tanks_gave = storage.discharge(rows, series, here.step_h, staged, ready, load, wanted, start, loss)
    discharge = tanks_gave.drawn_kw_th
    drawn = tanks_gave.total_kw_th
    served = np.minimum(load - drawn, ready)
    unmet = np.maximum(load - drawn - served, 0.0)
    extra = unmet - usual.unmet_kw_th[rows.site, t] if usual else np.zeros_like(unmet)
    pull_down = _pull_down(rows, here, state, staged, extra, ready - served)
    air, mass, air_mean = comfort.advance(rows.zone, state.air_k, state.mass_k, extra - pull_down)
    charging = _charging(rows, here, staged, usual, state, t)
    asked = _charge_asked(rows, here, usual, load, start, t)
    direct, into_tank, charge, ice_mode = _charge_and_load(
        rows, here, charging, direct_cap, limit, served + pull_down, asked, start, loss, t
    )
    machine_kw, power = _power(rows, here, direct + into_tank, ice_mode, charge, discharge, t)
    inventory = start + (charge - discharge - loss) * here.step_h
    largest = direct_cap.max(axis=1, initial=0.0)
    moment = Moment(
        interval=t,
        staged=staged,
        limit_fraction=limit,
        direct_kw_th=direct,
        into_tank_kw_th=into_tank,
        making_ice=ice_mode,
        machine_kw=machine_kw,
        power_kw=power,
        charge_kw_th=charge,
        discharge_kw_th=discharge,
        loss_kw_th=loss,
        inventory_start_kwh_th=start,
        inventory_kwh_th=inventory,
        discharge_limit_kw_th=storage.limit_at_end(rows, inventory, tanks_gave.knots_kw_th),
        lmtd_k=tanks_gave.lmtd_k,
        wanted_kw_th=wanted,
        spare_direct_kw_th=ready - served - pull_down,
        firm_kw_th=ready - largest + total(tanks_gave.most_kw_th),
        load_kw_th=load,
        unmet_kw_th=unmet,
        pull_down_kw_th=pull_down,
        air_rise_k=air,
        mass_rise_k=mass,
        air_mean_rise_k=air_mean,
    )
    return moment, _State(inventory, charging & _not_full(rows, inventory), air, mass)


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
    rows: Plants, here: Conditions, state: _State, staged: Bools, extra: Floats, spare: Floats
) -> Floats:
    """Extra cooling (row,) that brings a warm zone back on a ramp, from spare capacity, outside stages."""
    warm = ~staged & (state.air_k > 0.0)
    if not warm.any():
        return np.zeros_like(spare)
    target = np.where(state.air_k < SETTLED_K, 0.0, state.air_k * np.exp(-here.step_h / PULL_DOWN_H))
    needed = extra - comfort.net_for_air(rows.zone, state.air_k, state.mass_k, target)
    return np.where(warm, np.clip(needed, 0.0, np.maximum(spare, 0.0)), 0.0)


def _charging(
    rows: Plants, here: Conditions, staged: Bools, usual: Usual | None, state: _State, t: int
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


def _charge_asked(
    rows: Plants, here: Conditions, usual: Usual | None, load: Floats, start: Floats, t: int
) -> Floats:
    """Charge (row,) that the strategy asks for: all there is, or with load levelling what lies under the flat
    rate, unless the tank is behind the usual case in its charging hours."""
    levelling = rows.roster.buildings.strategy == _LEVEL
    behind = here.charge_hours[rows.site, t] & _behind(rows, usual, storage.held(rows, start), t)
    below_level = np.maximum(here.level_kw_th[rows.site] - load, 0.0)
    return np.where(levelling & ~behind, below_level, np.inf)


def _behind(rows: Plants, usual: Usual | None, held: Floats, t: int) -> Bools:
    """Rows whose tanks hold less than in the usual case at this interval's end."""
    if usual is None:
        return np.zeros(len(rows.site), dtype=np.bool_)
    behind: Bools = held < storage.held(rows, usual.inventory_kwh_th[rows.site, :, t])
    return behind


def _charge_and_load(
    rows: Plants,
    here: Conditions,
    charging: Bools,
    direct_cap: Floats,
    limit: Floats,
    cooling: Floats,
    asked: Floats,
    start: Floats,
    loss: Floats,
    t: int,
) -> tuple[Floats, Floats, Floats, Bools]:
    """Machine loads to the building and into tanks (row, machine), charge (row, tank), ice mode (row, machine).

    Ice sites: machines that make ice go over to ice making while charging, and carry in that mode what the
    others cannot of the building's load; where that would leave load unmet they stay in direct cooling and
    the tank waits.
    """
    makes_ice = rows.roster.chillers.makes_ice & here.ice_site[rows.site][:, None] & charging[:, None]
    ice_cap = here.ice_kw_th[rows.site, :, t] * limit
    mixed_cap = np.where(makes_ice, ice_cap, direct_cap)
    can = charging & (total(mixed_cap) >= cooling)
    ice_mode = makes_ice & can[:, None]
    cap = np.where(ice_mode, ice_cap, direct_cap)
    warm_cap = np.where(ice_mode, 0.0, cap)
    ice_site = here.ice_site[rows.site]
    chilling = total(np.where(ice_mode, cap, 0.0))
    spare = np.where(ice_site, np.minimum(chilling, total(cap) - cooling), total(cap) - cooling)
    offered = np.minimum(np.maximum(spare, 0.0), asked)
    charge = storage.charge(rows, here.step_h, can, offered, start, loss)
    filled = total(charge)
    on_warm = np.minimum(cooling, total(warm_cap))
    on_ice = cooling - on_warm
    stage_up = rows.roster.buildings.stage_up_fraction
    into = np.where(ice_site, 0.0, filled)
    warm_load = staged_load_kw_th(on_warm + into, warm_cap, stage_up)
    ice_load = staged_load_kw_th(on_ice + np.where(ice_site, filled, 0.0), cap - warm_cap, stage_up)
    share_warm = np.divide(into, on_warm + into, out=np.zeros_like(into), where=on_warm + into > 0.0)
    share_ice = np.divide(filled, on_ice + filled, out=np.zeros_like(into), where=on_ice + filled > 0.0)
    share_ice = np.where(ice_site, share_ice, 0.0)
    into_tank = warm_load * share_warm[:, None] + ice_load * share_ice[:, None]
    return warm_load + ice_load - into_tank, into_tank, charge, ice_mode & (ice_load > 0.0)


def _power(
    rows: Plants,
    here: Conditions,
    machine_load: Floats,
    ice_mode: Bools,
    charge: Floats,
    discharge: Floats,
    t: int,
) -> tuple[Floats, Floats]:
    """Power of each machine with its own auxiliaries (row, machine), and of the whole plant (row,)."""
    chillers, buildings = rows.roster.chillers, rows.roster.buildings
    available = np.where(ice_mode, here.ice_kw_th[rows.site, :, t], here.direct_kw_th[rows.site, :, t])
    full = np.where(ice_mode, here.ice_full_kw[rows.site, :, t], here.direct_full_kw[rows.site, :, t])
    machine_kw = plant_power_kw(machine_load, available, full, chillers.kind, chillers.dedicated_aux_kw)
    through_tank = total(charge) + total(discharge)
    working = (total(machine_load) + through_tank) > 0.0
    shared = np.where(working, buildings.shared_aux_kw, 0.0)
    pump = np.where(through_tank > 0.0, buildings.tank_pump_kw, 0.0)
    return machine_kw, total(machine_kw) + shared + pump
