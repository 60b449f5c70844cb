"""How machines share a cooling demand, and what they draw for it."""

import numpy as np

from sites.chiller import part_load_power_kw
from sites.compiled import Number, choose, shared
from sites.units import Floats, Ints


def staged_load_kw_th(demand_kw_th: Floats, capacity_kw_th: Floats, stage_up_fraction: Floats) -> Floats:
    """Load of each machine (row, machine) when `demand_kw_th` (row,) is met in loading order.

    Machines start in array order: the next one runs once demand exceeds `stage_up_fraction` (row,) of the
    capacity of those before it. Those that run share the demand at equal part load (common practice, no
    source). Demand must not exceed the sum of capacities.
    """
    load = np.zeros(capacity_kw_th.shape[::-1])
    if len(load):
        share_load(demand_kw_th, capacity_kw_th.T, stage_up_fraction, load)
    return load.T


@shared
def share_load(
    demand_kw_th: Number, capacity_kw_th: Number, stage_up_fraction: Number, load_kw_th: Number
) -> None:
    """`staged_load_kw_th` written into `load_kw_th`, (machine, ...) as the capacity is; there must be a machine."""
    before = 0.0 * capacity_kw_th[0]
    running = 0.0 * capacity_kw_th[0]
    for m in range(len(capacity_kw_th)):
        capacity = capacity_kw_th[m]
        on = (capacity > 0.0) & (demand_kw_th > stage_up_fraction * before) & (demand_kw_th > 0.0)
        load_kw_th[m] = choose(on, capacity, 0.0)
        before = before + capacity
        running = running + load_kw_th[m]
    some = running > 0.0
    share = choose(some, demand_kw_th, 0.0) / choose(some, running, 1.0)
    for m in range(len(capacity_kw_th)):
        load_kw_th[m] = load_kw_th[m] * share


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
