"""The second judge's machines: published curves at every minute's weather, staging, ice making and power."""

from dataclasses import dataclass

import numpy as np
from reference.fine_case import Plants
from reference.fine_tanks import Tanks, freeze_limit_kw_th, polynomial

from sites.units import Bools, Floats

CURVES = {
    # reference leaving and condenser, range of both, capacity, eir_temperature, eir_part_load
    "water_cooled_centrifugal": (
        (6.67, 29.4),
        ((5.0, 10.0), (24.0, 35.0)),
        (0.257896, 0.0389016, -0.00021708, 0.0468684, -0.00094284, -0.00034344),
        (0.933884, -0.058212, 0.00450036, 0.00243, 0.000486, -0.001215),
        (0.222903, 0.313387, 0.463710),
    ),
    "air_cooled_screw": (
        (6.67, 35.0),
        ((4.44, 10.0), (29.4, 46.1)),
        (0.979952514, 0.0359715682, -0.000324571, -0.003526257, -0.0000442458, -0.0001206704),
        (0.1210926936, 0.0321255295, 0.0010019413, 0.0215864214, 0.0001997952, -0.0015848128),
        (0.0, 1.0, 0.0),
    ),
}
"""DOE-2.1E centrifugal record; a public simulation engine's air-cooled screw."""
LEAST_PART_LOAD = 0.1


@dataclass(frozen=True)
class Machines:
    """What machines could give and draw at full load in both modes, (N, M, T)."""

    direct: Floats
    direct_kw: Floats
    ice: Floats
    ice_kw: Floats
    part_load: Floats
    """(3, N, M) coefficients of the share of full-load power"""


def machines_of(plants: Plants) -> Machines:
    """Capability of every machine at every minute's weather, both modes."""
    condenser = np.where(
        (plants.machine_kind == "water_cooled_centrifugal")[:, :, None],
        plants.wet_c[:, None, :] + plants.approach_k[:, :, None],
        plants.dry_c[:, None, :],
    )
    direct, direct_kw = _capability(plants, plants.supply_c[:, None, None], condenser)
    warm, warm_kw = _capability(plants, np.full((len(plants.supply_c), 1, 1), 5.0), condenser)
    below = 5.0 - plants.brine_c[:, None]
    capacity = plants.makes_ice * (1.0 - plants.ice_capacity_slope * below)
    cop = 1.0 - plants.ice_cop_slope * below
    parts = {kind: np.array(part) / sum(part) for kind, (*_, part) in CURVES.items()}
    part_load = np.array([[parts[str(kind)] for kind in row] for row in plants.machine_kind]).transpose(
        2, 0, 1
    )
    made, drawn = warm * capacity[:, :, None], warm_kw * (capacity / cop)[:, :, None]
    return Machines(direct, direct_kw, made, drawn, part_load)


def loads(
    plants: Plants,
    tanks: Tanks,
    iced: Bools,
    machines: Machines,
    limit: Floats,
    charging: Bools,
    cooling: Floats,
    asked: Floats,
    held: Floats,
    loss: Floats,
    t: int,
) -> tuple[Floats, Floats]:
    """Power of all machines (N,), and charge of each tank (N, K)."""
    direct, ice = machines.direct[:, :, t] * limit, machines.ice[:, :, t] * limit
    over = plants.makes_ice & (iced & charging)[:, None]
    can = charging & (np.where(over, ice, direct).sum(1) >= cooling)
    over &= can[:, None]
    cap = np.where(over, ice, direct)
    cold = np.where(over, cap, 0.0).sum(1)
    spare = np.where(iced, np.minimum(cold, cap.sum(1) - cooling), cap.sum(1) - cooling)
    most = np.where(can[:, None], freeze_limit_kw_th(plants, tanks, held, loss), 0.0)
    taken = np.minimum(np.minimum(np.maximum(spare, 0.0), asked), most.sum(1))
    charge = most * np.divide(taken, most.sum(1), out=np.zeros_like(taken), where=most.sum(1) > 0)[:, None]
    warm = np.where(over, 0.0, cap)
    on_warm = np.minimum(cooling, warm.sum(1))
    load = _staged(plants, on_warm + np.where(iced, 0.0, taken), warm)
    load = load + _staged(plants, cooling - on_warm + np.where(iced, taken, 0.0), cap - warm)
    able = np.where(over, machines.ice[:, :, t], machines.direct[:, :, t])
    full = np.where(over, machines.ice_kw[:, :, t], machines.direct_kw[:, :, t])
    ratio = np.divide(load, able, out=np.zeros_like(load), where=able > 0.0)
    running = np.maximum(ratio, LEAST_PART_LOAD)
    power = full * polynomial(machines.part_load, running) * np.minimum(ratio / LEAST_PART_LOAD, 1.0)
    return (power + np.where(load > 0.0, plants.own_aux_kw, 0.0)).sum(1), charge


def _staged(plants: Plants, demand: Floats, capacity: Floats) -> Floats:
    """Machines start one after the other, the next over stage_up of those on; those on share alike."""
    before = np.cumsum(capacity, axis=1) - capacity
    on = (capacity > 0.0) & (demand[:, None] > plants.stage_up[:, None] * before) & (demand > 0.0)[:, None]
    running = np.where(on, capacity, 0.0)
    every = running.sum(1)
    return running * np.divide(demand, every, out=np.zeros_like(every), where=every > 0.0)[:, None]


def _capability(plants: Plants, leaving: Floats, condenser: Floats) -> tuple[Floats, Floats]:
    available, power = np.zeros_like(condenser), np.zeros_like(condenser)
    cop = np.where(plants.machine_kw_th > 0.0, plants.machine_cop, 1.0)
    for kind, (reference, (x_range, y_range), capacity, eir, _) in CURVES.items():
        x, y = np.clip(leaving, *x_range), np.clip(condenser, *y_range)
        give = plants.machine_kw_th[:, :, None] * surface(capacity, x, y) / surface(capacity, *reference)
        draw = give / cop[:, :, None] * surface(eir, x, y) / surface(eir, *reference)
        mine = (plants.machine_kind == kind)[:, :, None]
        available, power = np.where(mine, give, available), np.where(mine, draw, power)
    return available, power


def surface(c: tuple[float, ...], x: Floats | float, y: Floats | float) -> Floats:
    return np.asarray(c[0] + c[1] * x + c[2] * x * x + c[3] * y + c[4] * y * y + c[5] * x * y)
