"""The finer model that plays the truth: one step of every row, and a run of steps with quarter-hour means.

Own numerics throughout (machine.py, store.py, room.py); strategies are written out here afresh. The loop runs
over steps only; every row moves at once. Axes: row R, machine M, tank K, quarter-hour Q.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from demo_fleet import machine, room, store
from demo_fleet.calendar import within
from demo_fleet.plant import STRATEGIES, Plant, State
from sites.units import Bools, Floats

CHARGE_BELOW: Final = 0.95
FULL: Final = 0.999
QUARTER_MINUTES: Final = 15
_FULL, _LEVEL, _CHILLER, _STORAGE = range(len(STRATEGIES))
MEANS: Final = ("power_kw", "direct", "charge", "discharge", "unmet", "loss", "demand")
ENDS: Final = ("inventory", "air_k", "mass_k")


@dataclass(frozen=True)
class Drive:
    """What drives the rows, each (R, Q), constant over a quarter-hour."""

    hour: Floats
    """local hour"""
    load_kw_th: Floats
    dry_bulb_c: Floats
    wet_bulb_c: Floats
    level_kw_th: Floats
    """flat rate of load levelling"""


@dataclass(frozen=True)
class Now:
    """One quarter-hour as the plant meets it; (R,) or, for machines, (R, M)."""

    load: Floats
    level: Floats
    on_peak: Bools
    peak_left_h: Floats
    charge_hours: Bools
    charge_left_h: Floats
    direct_kw_th: Floats
    """capacity of each machine in service"""
    direct_full_kw: Floats
    """compressor power at that capacity"""
    ice_kw_th: Floats
    ice_full_kw: Floats


@dataclass(frozen=True)
class Orders:
    """What operators do by order at one step; (R, M) or (R,)."""

    limit: Floats
    """load limit of each machine, 0 = off, 1 = free"""
    inhibit: Bools
    """may not start"""
    hold: Bools
    """no charging"""
    force: Bools
    """charging allowed outside its hours"""
    staged: Bools
    """in its window"""
    charge: Bools
    """made to charge"""


@dataclass(frozen=True)
class Flows:
    """One step's flows [kW_th], power [kW], inventory [kWh_th] and rises [K], each (R,)."""

    power_kw: Floats
    direct: Floats
    charge: Floats
    discharge: Floats
    unmet: Floats
    """load and pull-down asked for and not served"""
    loss: Floats
    demand: Floats
    """load and pull-down asked for"""
    inventory: Floats
    air_k: Floats
    mass_k: Floats


def no_orders(plant: Plant) -> Orders:
    """A usual step."""
    shape, none = plant.capacity_kw_th.shape, np.zeros(plant.rows, dtype=np.bool_)
    return Orders(np.ones(shape), np.zeros(shape, dtype=np.bool_), none, none, none, none)


def now_of(plant: Plant, drive: Drive, quarter: int) -> Now:
    """One quarter of `drive`, with hours and machine capability worked out."""
    hour = drive.hour[:, quarter]
    air, supply, brine = plant.air_cooled, plant.supply_c, plant.brine_c
    condenser = machine.condenser_c(
        air, plant.approach_k, drive.dry_bulb_c[:, quarter], drive.wet_bulb_c[:, quarter]
    )
    rated = plant.capacity_kw_th * plant.machine_up
    direct = rated * machine.capacity_fraction(air, supply, condenser)
    ice = rated * machine.ice_capacity_fraction(air, brine, condenser, plant.ice_capacity_slope_per_k)
    ice = np.where(plant.makes_ice, ice, 0.0)
    return Now(
        load=drive.load_kw_th[:, quarter],
        level=drive.level_kw_th[:, quarter],
        on_peak=within(hour, plant.peak_from_hour, plant.peak_to_hour),
        peak_left_h=np.maximum((plant.peak_to_hour - hour) % 24.0, 0.25),
        charge_hours=within(hour, plant.charge_from_hour, plant.charge_to_hour),
        charge_left_h=np.maximum((plant.charge_to_hour - hour) % 24.0, 0.5),
        direct_kw_th=direct,
        direct_full_kw=direct * plant.eir * machine.eir_fraction(air, supply, condenser),
        ice_kw_th=ice,
        ice_full_kw=ice
        * plant.eir
        * machine.ice_eir_fraction(air, brine, condenser, plant.ice_cop_slope_per_k),
    )


def _held(plant: Plant, state: State) -> Floats:
    """Inventory in service, (R,)."""
    total: Floats = _across(state.inventory_kwh_th * plant.tank_up)
    return total


def _across(values: Floats) -> Floats:
    """Sum over machines or tanks, (R,): as a product with ones, ten times faster over so short an axis."""
    total: Floats = values @ np.ones(values.shape[1])
    return total


def _ratio(top: Floats, bottom: Floats) -> Floats:
    """top / bottom, 0 where bottom is not positive; any shape."""
    result: Floats = np.divide(top, bottom, out=np.zeros_like(bottom), where=bottom > 0.0)
    return result


def _wants_charge(plant: Plant, now: Now, state: State, orders: Orders, held: Floats) -> Bools:
    """Rows that want to charge, (R,)."""
    hours = now.charge_hours | orders.force
    low = state.charging | (held < CHARGE_BELOW * plant.held_kwh_th) | orders.force
    wants = np.where(plant.strategy == _LEVEL, hours | (now.load < now.level), hours & low)
    wants = (wants & ~orders.hold & ~orders.staged) | orders.charge
    result: Bools = wants & (held < FULL * plant.held_kwh_th)
    return result


def _most_from_tank(plant: Plant, state: State, ua: Floats, left: Floats, share: Floats) -> Floats:
    """Most each tank can give in this step, (R, K), when the tanks carry `share` (R,) of the demand."""
    inlet = plant.return_c - (plant.return_c - plant.supply_c) * np.where(plant.series, 1.0 - share, 0.0)
    ice = store.melt_kw_th(ua, inlet[:, None], plant.supply_c[:, None], plant.loop_kw_per_k)
    water = store.water_kw_th(plant.tank_kwh_th, state.inventory_kwh_th, plant.tank_kwh_th / 5.0)
    most = np.minimum(np.where(plant.tank_is_ice, ice, water), plant.discharge_limit_kw_th)
    return np.minimum(most, left) * plant.tank_up


def _wanted(plant: Plant, now: Now, orders: Orders, held: Floats, demand: Floats, capacity: Floats) -> Floats:
    """What the rows ask of their tanks, (R,): by strategy, and always what the machines cannot."""
    short = np.maximum(demand - capacity, 0.0)
    spread = np.minimum(held / now.peak_left_h, demand)
    usual = np.where(plant.strategy == _STORAGE, spread, demand) * now.on_peak
    usual = np.where(plant.strategy == _LEVEL, np.maximum(demand - now.level, 0.0), usual)
    usual = np.where((plant.strategy == _CHILLER) | orders.staged, 0.0, usual)
    return np.asarray(np.maximum(short, usual))


def _discharge(
    plant: Plant, state: State, orders: Orders, demand: Floats, wanted: Floats, loss: Floats, step_h: float
) -> Floats:
    """Discharge of each tank, (R, K), solved twice where tanks stand behind the machines."""
    ua = plant.ua_factor[:, None] * store.melt_ua_kw_per_k(
        plant.tank_kind, plant.tank_kwh_th, state.inventory_kwh_th
    )
    left = np.maximum(state.inventory_kwh_th / step_h - loss, 0.0)
    share = np.minimum(_ratio(wanted, demand), 1.0)
    most = _most_from_tank(plant, state, ua, left, share)
    if bool(plant.series.any()):
        share = np.minimum(_ratio(np.minimum(wanted, _across(most)), demand), 1.0)
        most = _most_from_tank(plant, state, ua, left, share)
    total = _across(most)
    free = np.maximum(_held(plant, state) - plant.held_back_kwh_th, 0.0) / step_h
    drawn = np.minimum(wanted, np.where(orders.staged, np.minimum(total, free), total))
    return most * _ratio(drawn, total)[:, None]


def _most_into_tank(plant: Plant, state: State, step_h: float) -> Floats:
    """Most each tank can take in this step, (R, K)."""
    ua = plant.ua_factor[:, None] * store.freeze_ua_kw_per_k(plant.tank_kwh_th, state.inventory_kwh_th)
    ice = store.freeze_kw_th(ua, plant.brine_c[:, None])
    most = np.minimum(np.where(plant.tank_is_ice, ice, plant.tank_kwh_th / 4.0), plant.charge_limit_kw_th)
    space = np.maximum(plant.tank_kwh_th - state.inventory_kwh_th, 0.0) / step_h
    return np.minimum(most, space) * plant.tank_up


def _asked_charge(plant: Plant, now: Now, orders: Orders, held: Floats) -> Floats:
    """How fast rows want to charge, (R,): as fast as they can, load levelling only up to its flat rate or as
    fast as must be to be full in time, unless it is made to."""
    due = np.where(now.charge_hours | orders.force, (plant.held_kwh_th - held) / now.charge_left_h, 0.0)
    flat = np.maximum(np.maximum(now.level - now.load, 0.0), due)
    return np.where((plant.strategy == _LEVEL) & ~orders.charge, flat, np.inf)


def _stage(plant: Plant, state: State, orders: Orders, target: Floats, capacity: Floats) -> Floats:
    """Load of each machine, (R, M), for a target (R,): in loading order, with hysteresis and minimum stops."""
    before = np.cumsum(capacity, axis=1) - capacity
    threshold = plant.stage_up[:, None] * np.where(state.on, 0.88, 1.0)
    may = state.on | ((state.still_minutes >= plant.min_off_minutes) & ~orders.inhibit)
    needed = (target[:, None] > threshold * before) & (target > 0.0)[:, None]
    running = capacity * (may & needed)
    share = np.minimum(_ratio(target, _across(running)), 1.0)
    return running * share[:, None]


def _power_kw(plant: Plant, now: Now, load: Floats, ice_mode: Bools, through_tank: Floats) -> Floats:
    """Power of the whole plant, (R,)."""
    part = _ratio(load, np.where(ice_mode, now.ice_kw_th, now.direct_kw_th))
    full = np.where(ice_mode, now.ice_full_kw, now.direct_full_kw)
    machines = full * machine.part_load_fraction(plant.air_cooled, part) + plant.dedicated_kw * (load > 0.0)
    cooling = _across(load) + through_tank
    flow = np.minimum(cooling / plant.design_kw_th, 1.2)
    shared = plant.shared_aux_kw * (0.85 + 0.2 * flow) * (cooling > 0.0)
    result: Floats = _across(machines) + shared + plant.tank_pump_kw * (through_tank > 0.0)
    return result


def _modes(plant: Plant, now: Now, wants: Bools, limit: Floats) -> tuple[Bools, Bools, Floats]:
    """Rows that charge (R,), machines in ice making (R, M), and capacity of each machine as it runs (R, M).

    A row charges only where the machines, as they then run, still carry the load.
    """
    ice_mode = plant.makes_ice & (wants & plant.ice_site)[:, None]
    mixed = np.where(ice_mode, now.ice_kw_th, now.direct_kw_th) * limit
    enough = _across(mixed) >= now.load
    ice_mode &= enough[:, None]
    charging = wants & enough & (~plant.ice_site | ice_mode.any(axis=1))
    return charging, ice_mode, np.where(ice_mode, now.ice_kw_th, now.direct_kw_th) * limit


def step(plant: Plant, now: Now, state: State, orders: Orders, step_h: float) -> tuple[State, Flows]:
    """One step of every row: tank first by strategy, machines for the rest and the charge, then the zone."""
    held = _held(plant, state)
    loss = store.loss_kw_th(
        plant.tank_kind, plant.tank_kwh_th, state.inventory_kwh_th, plant.loss_fraction_per_h, step_h
    )
    demand = now.load + room.pull_down_kw_th(state.air_k, plant.air_kwh_per_k, plant.coupling_kw_per_k)
    wants = _wants_charge(plant, now, state, orders, held)
    charging, ice_mode, capacity = _modes(plant, now, wants, orders.limit)
    usable = _across(capacity * (state.on | ~orders.inhibit))
    wanted = np.where(charging, 0.0, _wanted(plant, now, orders, held, demand, usable))
    drawn = _discharge(plant, state, orders, demand, wanted, loss, step_h)
    discharge = _across(drawn)
    direct = np.minimum(demand - discharge, usable)
    into = _most_into_tank(plant, state, step_h) * charging[:, None]
    asked = np.minimum(_across(into), _asked_charge(plant, now, orders, held))
    load, charge = _machine_loads(plant, state, orders, capacity, ice_mode, direct, asked)
    served = _across(load) - charge + discharge
    air, mass = room.advance(
        state.air_k, state.mass_k, now.load - served, plant.air_kwh_per_k, plant.mass_kwh_per_k,
        plant.coupling_kw_per_k, plant.envelope_kw_per_k, step_h,
    )  # fmt: skip
    charged = into * _ratio(charge, _across(into))[:, None]
    inventory = state.inventory_kwh_th + (charged - drawn - loss) * step_h
    on = load > 0.0
    still = np.where(on == state.on, state.still_minutes, 0.0) + step_h * 60.0
    power = _power_kw(plant, now, load, ice_mode, charge + discharge)
    flows = Flows(
        power, _across(load) - charge, charge, discharge, demand - served, _across(loss), demand,
        _across(inventory), air, mass,
    )  # fmt: skip
    return State(inventory, air, mass, on, still, charging), flows


def _machine_loads(
    plant: Plant,
    state: State,
    orders: Orders,
    capacity: Floats,
    ice_mode: Bools,
    direct: Floats,
    asked: Floats,
) -> tuple[Floats, Floats]:
    """Load of each machine (R, M), and what of it goes into tanks (R,).

    While ice is made, machines in direct cooling carry the building first; the ice makers carry the rest of it
    and the charge. Where a machine may not start yet, the charge gives way before the building.
    """
    warm = np.where(ice_mode, 0.0, capacity)
    on_warm = np.minimum(direct, _across(warm))
    on_ice = direct - on_warm
    spare = np.where(plant.ice_site, _across(capacity - warm) - on_ice, _across(warm) - on_warm)
    asked = np.minimum(asked, np.maximum(spare, 0.0))
    with_water = np.where(plant.ice_site, 0.0, asked)
    load = _stage(plant, state, orders, on_warm + with_water, warm)
    if bool(ice_mode.any()):
        load = load + _stage(plant, state, orders, on_ice + asked - with_water, capacity - warm)
    charge = np.clip(_across(load) - direct, 0.0, asked)
    return load, charge


def run(
    plant: Plant, drive: Drive, state: State, step_minutes: int, orders: Callable[[int], Orders] | None = None
) -> tuple[State, dict[str, Floats]]:
    """Run all quarters of `drive`; `orders` gives those of a step, counted from 0, None for usual operation.

    Returns the end state and, (R, Q) each, the fields of Flows: means of a quarter, and at its end inventory
    and rises.
    """
    each = QUARTER_MINUTES // step_minutes
    usual = no_orders(plant)
    kept = {name: np.zeros(drive.hour.shape) for name in (*MEANS, *ENDS)}
    for quarter in range(drive.hour.shape[1]):
        now = now_of(plant, drive, quarter)
        for part in range(each):
            given = orders(quarter * each + part) if orders else usual
            state, flows = step(plant, now, state, given, step_minutes / 60.0)
            for name in MEANS:
                kept[name][:, quarter] += getattr(flows, name) / each
        for name in ENDS:
            kept[name][:, quarter] = getattr(flows, name)
    return state, kept
