"""The tanks of a plant together: what they can give to a load and take from machines, shared among them.

tank.py knows one tank; here a row's tanks act as one, in proportion to what each could do, with the loop's
temperatures by layout and the held-back inventory. Unless said otherwise, arrays are (row, tank).
"""

from dataclasses import dataclass

import numpy as np

from sites import tank
from sites.roster import LAYOUTS, TANK_KINDS, kind_is
from sites.rows import Plants
from sites.units import Bools, Floats, Ints, total

SERIES_PASSES = 2
"""Leaves the limit of a tank in series less than 0.2 % too high."""


def held(rows: Plants, inventory: Floats) -> Floats:
    """Sum (row,) over the tanks that are in service."""
    return total(np.where(rows.tank_available, inventory, 0.0))


def _inlet_c(rows: Plants, tank_share: Floats) -> Floats:
    """Temperature at the tank's inlet, (row,): the loop's return in parallel; in series behind machines that
    take the rest of the load at the same flow, supply + (return - supply) x the tank's share."""
    buildings = rows.roster.buildings
    series = buildings.layout == LAYOUTS.index("series")
    rise = buildings.return_c - buildings.supply_c
    return buildings.supply_c + rise * np.where(series, np.clip(tank_share, 0.0, 1.0), 1.0)


def _reach(rows: Plants) -> Floats:
    """Share of the load (row,) that the tanks can take on: all of it, but with a tank of eutectic salt, which cools no
    colder than its melting point, what lies between the return and that; the rest is left to machines behind it."""
    buildings, tanks = rows.roster.buildings, rows.roster.tanks
    salt = (kind_is(tanks.kind, TANK_KINDS, ("eutectic_salt",)) & rows.tank_available).any(axis=1)
    whole = np.maximum(buildings.return_c - buildings.supply_c, 1e-9)
    share = np.clip((buildings.return_c - tank.EUTECTIC_MELTING_C) / whole, 0.0, 1.0)
    return np.where(salt, share, 1.0)


@dataclass(frozen=True)
class Discharged:
    """What the tanks gave in one interval, (row, tank), and the curve (row, tank, knot) that limited it."""

    drawn_kw_th: Floats
    total_kw_th: Floats
    """(row,) sum of the drawn, free of the rounding of the shares"""
    most_kw_th: Floats
    """What could have been had"""
    lmtd_k: Floats
    knots_kw_th: Floats


def _knots(rows: Plants, share: Floats) -> tuple[Floats, Floats]:
    """Discharge curve (row, tank, knot) at the inlet that the tanks' `share` (row,) of the load makes, and the
    LMTD (row, tank) it was taken at."""
    tanks = rows.roster.tanks
    lmtd = np.asarray(tank.lmtd_k(_inlet_c(rows, share), rows.roster.buildings.supply_c))[:, None]
    lmtd_all: Floats = np.repeat(lmtd, tanks.capacity_kwh_th.shape[1], axis=1)
    knots = tank.knots_kw_th(rows.discharge, tanks.capacity_kwh_th, tanks.discharge_limit_kw_th, lmtd_all)
    return knots, lmtd_all


def _most(rows: Plants, step_h: float, start: Floats, loss: Floats, knots: Floats) -> Floats:
    most = tank.most_discharge_kw_th(start, loss, rows.roster.tanks.capacity_kwh_th, knots, step_h)
    return np.where(rows.tank_available, most, 0.0)


@dataclass(frozen=True)
class Behind:
    """The rows whose tank stands in series behind the machines: their indices, and themselves gathered."""

    index: Ints
    rows: Plants
    reach: Floats
    """Share of the load that the tanks of every row (not only those in series) can take on"""


def behind(rows: Plants) -> Behind:
    """Gather the rows in series once, for all intervals."""
    index = np.flatnonzero(rows.roster.buildings.layout == LAYOUTS.index("series"))
    return Behind(index, rows.take(index), _reach(rows))


def discharge(
    rows: Plants,
    series: Behind,
    step_h: float,
    staged: Bools,
    direct_cap: Floats,
    load: Floats,
    wanted: Floats,
    start: Floats,
    loss: Floats,
) -> Discharged:
    """What the tanks give of what is `wanted` (row,) beside machines that can do `direct_cap` (row,).

    In series the inlet follows the tanks' share of what is served (the building's flow is cut to what can be
    cooled to its supply), and the share follows the limit: from the share that is wanted, SERIES_PASSES more
    close in on the limit from above, each some eight times nearer. In parallel the inlet is the loop's return
    and one pass is exact. Tanks of eutectic salt take on no more of the load than they can cool.
    """
    reachable = series.reach * load
    wanted = np.minimum(wanted, reachable)
    knots, lmtd = _knots(rows, wanted / np.maximum(load, 1e-9))
    most = _most(rows, step_h, start, loss, knots)
    usable = _above_reserve(rows, step_h, staged, start, loss, most)
    drawn = np.minimum(wanted, usable)
    pick = series.index
    for _ in range(SERIES_PASSES if len(pick) else 0):
        rest = np.minimum(load - drawn, direct_cap)[pick]
        share = drawn[pick] / np.maximum(drawn[pick] + rest, 1e-9)
        knots[pick], lmtd[pick] = _knots(series.rows, share)
        most[pick] = _most(series.rows, step_h, start[pick], loss[pick], knots[pick])
        part = (start[pick], loss[pick], most[pick])
        usable[pick] = _above_reserve(series.rows, step_h, staged[pick], *part)
        drawn = np.minimum(drawn, usable)
    sum_most = total(most)
    given = np.divide(drawn, sum_most, out=np.zeros_like(drawn), where=sum_most > 0.0)
    could = np.divide(np.minimum(usable, reachable), sum_most, out=np.zeros_like(drawn), where=sum_most > 0.0)
    return Discharged(most * given[:, None], drawn, most * could[:, None], lmtd, knots)


def _above_reserve(
    rows: Plants, step_h: float, staged: Bools, start: Floats, loss: Floats, most: Floats
) -> Floats:
    """Discharge (row,) that the tanks' limits allow and, in a stage, that leaves the held-back inventory."""
    free = np.maximum((held(rows, start) - rows.reserve_kwh_th) / step_h - total(loss), 0.0)
    every = total(most)
    return np.where(staged, np.minimum(every, free), every)


def limit_at_end(rows: Plants, inventory: Floats, knots: Floats) -> Floats:
    """Discharge limit of each tank (row, tank) at end-of-interval inventory; 0 for one out of service."""
    limit = tank.limit_kw_th(inventory, rows.roster.tanks.capacity_kwh_th, knots)
    return np.where(rows.tank_available, limit, 0.0)


def charge(rows: Plants, step_h: float, can: Bools, offered: Floats, start: Floats, loss: Floats) -> Floats:
    """Charge of each tank (row, tank) from `offered` machine cooling (row,), where the row `can` charge."""
    capacity = rows.roster.tanks.capacity_kwh_th
    most = tank.most_charge_kw_th(start, loss, capacity, rows.charge_knots_kw_th, step_h)
    most = np.where(rows.tank_available & can[:, None], most, 0.0)
    sum_most = total(most)
    taken = np.minimum(offered, sum_most)
    part = np.divide(taken, sum_most, out=np.zeros_like(taken), where=sum_most > 0.0)
    result: Floats = most * part[:, None]
    return result
