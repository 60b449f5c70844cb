"""The tanks of a plant together: what they can give to a load and take from machines, shared among them.

tank.py knows one tank; here a row's tanks act as one, in proportion to what each could do, with the loop's
temperatures by layout and the held-back inventory. Unless said otherwise, arrays are (row, tank).
"""

import numpy as np

from sites import tank
from sites.conditions import Conditions
from sites.roster import LAYOUTS
from sites.rows import Plants
from sites.units import Bools, Floats


def held(rows: Plants, inventory: Floats) -> Floats:
    """Sum (row,) over the tanks that are in service."""
    total: Floats = np.where(rows.tank_available, inventory, 0.0).sum(axis=1)
    return total


def _inlet_c(rows: Plants, tank_share: Floats) -> Floats:
    """Temperature at the tank's inlet, (row,): the loop's return in parallel; in series behind machines that
    take the rest of the load at the same flow, supply + (return - supply) x the tank's share."""
    buildings = rows.roster.buildings
    series = buildings.layout == LAYOUTS.index("series")
    rise = buildings.return_c - buildings.supply_c
    return buildings.supply_c + rise * np.where(series, np.clip(tank_share, 0.0, 1.0), 1.0)


def most_discharge(
    rows: Plants, here: Conditions, start: Floats, loss: Floats, share: Floats
) -> tuple[Floats, Floats]:
    """Greatest discharge of each tank (row, tank) and the LMTD (row, tank) at which its limit was taken."""
    tanks = rows.roster.tanks
    lmtd = tank.lmtd_k(_inlet_c(rows, share), rows.roster.buildings.supply_c)
    lmtd_all: Floats = np.broadcast_to(np.asarray(lmtd)[:, None], start.shape)
    knots = tank.knots_kw_th(rows.discharge, tanks.capacity_kwh_th, tanks.discharge_limit_kw_th, lmtd_all)
    most = tank.most_discharge_kw_th(start, loss, tanks.capacity_kwh_th, knots, here.step_h)
    return np.where(rows.tank_available, most, 0.0), lmtd_all


def discharge(
    rows: Plants,
    here: Conditions,
    staged: Bools,
    direct_cap: Floats,
    load: Floats,
    wanted: Floats,
    start: Floats,
    loss: Floats,
) -> tuple[Floats, Floats, Floats]:
    """Discharge (row, tank), its LMTD (row, tank), and the most that could have been had (row, tank).

    Two passes: where the first limit leaves more load to machines upstream, the tank's inlet is colder and
    its limit lower.
    """
    total = np.maximum(load, 1e-9)
    most, lmtd = most_discharge(rows, here, start, loss, wanted / total)
    drawn = np.minimum(wanted, _above_reserve(rows, here, staged, start, loss, most))
    rest = np.minimum(load - drawn, direct_cap)
    most, lmtd = most_discharge(rows, here, start, loss, 1.0 - rest / total)
    usable = _above_reserve(rows, here, staged, start, loss, most)
    drawn = np.minimum(drawn, usable)
    sum_most = most.sum(axis=1)
    part = np.divide(drawn, sum_most, out=np.zeros_like(drawn), where=sum_most > 0.0)
    scale = np.divide(usable, sum_most, out=np.zeros_like(drawn), where=sum_most > 0.0)
    return most * part[:, None], lmtd, most * scale[:, None]


def _above_reserve(
    rows: Plants, here: Conditions, staged: Bools, start: Floats, loss: Floats, most: Floats
) -> Floats:
    """Discharge (row,) that the tanks' limits allow and, in a stage, that leaves the held-back inventory."""
    free = np.maximum((held(rows, start) - rows.reserve_kwh_th) / here.step_h - loss.sum(axis=1), 0.0)
    total: Floats = most.sum(axis=1)
    return np.where(staged, np.minimum(total, free), total)


def limit_at_end(rows: Plants, inventory: Floats, lmtd: Floats) -> Floats:
    """Discharge limit of each tank (row, tank) at end-of-interval inventory; 0 for one out of service."""
    tanks = rows.roster.tanks
    knots = tank.knots_kw_th(rows.discharge, tanks.capacity_kwh_th, tanks.discharge_limit_kw_th, lmtd)
    limit = tank.limit_kw_th(inventory, tanks.capacity_kwh_th, knots)
    return np.where(rows.tank_available, limit, 0.0)


def charge(
    rows: Plants, here: Conditions, can: Bools, offered: Floats, start: Floats, loss: Floats
) -> Floats:
    """Charge of each tank (row, tank) from `offered` machine cooling (row,), where the row `can` charge."""
    tanks = rows.roster.tanks
    lmtd = np.broadcast_to(here.charge_lmtd_k[rows.site][:, None], start.shape)
    knots = tank.knots_kw_th(rows.charge, tanks.capacity_kwh_th, tanks.charge_limit_kw_th, lmtd)
    most = tank.most_charge_kw_th(start, loss, tanks.capacity_kwh_th, knots, here.step_h)
    most = np.where(rows.tank_available & can[:, None], most, 0.0)
    sum_most = most.sum(axis=1)
    total = np.minimum(offered, sum_most)
    part = np.divide(total, sum_most, out=np.zeros_like(total), where=sum_most > 0.0)
    result: Floats = most * part[:, None]
    return result
