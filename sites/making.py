"""What machines make in one interval, cooling for the load and charge for the tanks, and what that draws.

Owns which machines go over to ice making, how cooling and charge are shared among machines, and the power of the
plant. When tanks are charged and how much is asked for belongs to plant.py.
"""

from dataclasses import dataclass, replace

import numpy as np

from sites import storage
from sites.conditions import Conditions
from sites.dispatch import plant_power_kw, staged_load_kw_th
from sites.roster import Rows
from sites.rows import Plants
from sites.units import AnyArray, Bools, Floats, Ints, total

CAP_PASSES = 4
"""Passes that bring a capped charge down to its power; what is still over it then does not charge."""


@dataclass(frozen=True)
class Task(Rows):
    """What is asked of every row's machines in one interval."""

    charging: Bools
    """(row,)"""
    direct_cap_kw_th: Floats
    """(row, machine) capacity in direct cooling under the load limit"""
    limit_fraction: Floats
    """(row, machine)"""
    cooling_kw_th: Floats
    """(row,) for load and zone"""
    asked_kw_th: Floats
    """(row,) charge that is asked for, inf: all there is"""
    start_kwh_th: Floats
    """(row, tank)"""
    loss_kw_th: Floats
    discharge_kw_th: Floats


@dataclass(frozen=True)
class Made(Rows):
    """What was made: machine loads (row, machine), charge (row, tank), power."""

    direct_kw_th: Floats
    into_tank_kw_th: Floats
    charge_kw_th: Floats
    ice_mode: Bools
    machine_kw: Floats
    """(row, machine) with the auxiliaries that stop with the machine"""
    power_kw: Floats
    """(row,)"""


def make(rows: Plants, here: Conditions, task: Task, t: int) -> Made:
    """Machine loads, charge and power of every row in interval t.

    Ice sites: machines that make ice go over to ice making while charging, and carry in that mode what the
    others cannot of the building's load; where that would leave load unmet they stay in direct cooling and
    the tank waits.
    """
    limit, direct_cap, cooling = task.limit_fraction, task.direct_cap_kw_th, task.cooling_kw_th
    ice_site = here.ice_site[rows.site]
    makes_ice = rows.roster.chillers.makes_ice & ice_site[:, None] & task.charging[:, None]
    ice_cap = here.ice_kw_th[rows.site, :, t] * limit
    mixed_cap = np.where(makes_ice, ice_cap, direct_cap)
    can = task.charging & (total(mixed_cap) >= cooling)
    ice_mode = makes_ice & can[:, None]
    cap = np.where(ice_mode, ice_cap, direct_cap)
    warm_cap = np.where(ice_mode, 0.0, cap)
    chilling = total(np.where(ice_mode, cap, 0.0))
    spare = np.where(ice_site, np.minimum(chilling, total(cap) - cooling), total(cap) - cooling)
    offered = np.minimum(np.maximum(spare, 0.0), task.asked_kw_th)
    charge = storage.charge(rows, here.step_h, can, offered, task.start_kwh_th, task.loss_kw_th)
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
    machine_load, ice_mode = warm_load + ice_load, ice_mode & (ice_load > 0.0)
    machine_kw, power = _power(rows, here, machine_load, ice_mode, filled + total(task.discharge_kw_th), t)
    return Made(machine_load - into_tank, into_tank, charge, ice_mode, machine_kw, power)


def make_within(rows: Plants, here: Conditions, task: Task, room_kw: Floats, capped: Bools, t: int) -> Made:
    """As `make`, with the charge of `capped` rows (row,) held down so that their power stays within `room_kw`.

    Power is nearly straight in the charge: each pass takes the chord from no charge to the last one's. Power that
    is over the room without any charge stays so, and is priced.
    """
    made = make(rows, here, task, t)
    over = np.flatnonzero(capped & (made.power_kw > room_kw) & (total(made.charge_kw_th) > 0.0))
    if not len(over):
        return made
    part, own, room = rows.take(over), task.take(over), room_kw[over]
    idle = make(part, here, replace(own, asked_kw_th=np.zeros(len(over))), t)
    least, held = idle.power_kw, made.take(over)
    for _ in range(CAP_PASSES):
        above = held.power_kw > least
        share = np.divide(room - least, held.power_kw - least, out=np.zeros(len(over)), where=above)
        asked = total(held.charge_kw_th) * np.clip(share, 0.0, 1.0)
        held = make(part, here, replace(own, asked_kw_th=asked), t)
    fits = held.power_kw <= room + 1e-9
    return Made(
        **{
            name: _put(value, over, getattr(held, name), getattr(idle, name), fits)
            for name, value in vars(made).items()
        }
    )


def _put(every: AnyArray, index: Ints, fitting: AnyArray, idle: AnyArray, fits: Bools) -> AnyArray:
    """`every` with the rows at `index` taken from `fitting`, or from `idle` where those do not fit."""
    result = every.copy()
    result[index] = np.where(fits if fitting.ndim == 1 else fits[:, None], fitting, idle)
    return result


def _power(
    rows: Plants, here: Conditions, machine_load: Floats, ice_mode: Bools, through_tank: Floats, t: int
) -> tuple[Floats, Floats]:
    """Power of each machine with its own auxiliaries (row, machine), and of the whole plant (row,)."""
    chillers, buildings = rows.roster.chillers, rows.roster.buildings
    available = np.where(ice_mode, here.ice_kw_th[rows.site, :, t], here.direct_kw_th[rows.site, :, t])
    full = np.where(ice_mode, here.ice_full_kw[rows.site, :, t], here.direct_full_kw[rows.site, :, t])
    machine_kw = plant_power_kw(machine_load, available, full, chillers.kind, chillers.dedicated_aux_kw)
    working = (total(machine_load) + through_tank) > 0.0
    shared = np.where(working, buildings.shared_aux_kw, 0.0)
    pump = np.where(through_tank > 0.0, buildings.tank_pump_kw, 0.0)
    return machine_kw, total(machine_kw) + shared + pump
