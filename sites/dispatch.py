"""How machines share a cooling demand, and what they draw for it."""

import numpy as np

from sites.chiller import part_load_power_kw
from sites.units import Bools, Floats, Ints, total


def staged_load_kw_th(demand_kw_th: Floats, capacity_kw_th: Floats, stage_up_fraction: Floats) -> Floats:
    """Load of each machine (row, machine) when `demand_kw_th` (row,) is met in loading order.

    Machines start in array order: the next one runs once demand exceeds `stage_up_fraction` (row,) of the
    capacity of those before it. Those that run share the demand at equal part load (common practice, no
    source). Demand must not exceed the sum of capacities.
    """
    before = np.cumsum(capacity_kw_th, axis=1) - capacity_kw_th
    demand = demand_kw_th[:, None]
    on: Bools = (capacity_kw_th > 0.0) & (demand > stage_up_fraction[:, None] * before) & (demand > 0.0)
    running = np.where(on, capacity_kw_th, 0.0)
    capacity = total(running)
    share = np.divide(demand_kw_th, capacity, out=np.zeros_like(capacity), where=capacity > 0.0)
    return running * share[:, None]


def plant_power_kw(
    load_kw_th: Floats,
    available_kw_th: Floats,
    full_load_kw: Floats,
    kind: Ints,
    dedicated_aux_kw: Floats,
) -> Floats:
    """Power of each machine with the auxiliaries that stop with it, (row, machine)."""
    power = part_load_power_kw(load_kw_th, available_kw_th, full_load_kw, kind)
    return power + np.where(load_kw_th > 0.0, dedicated_aux_kw, 0.0)
