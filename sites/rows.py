"""Sites gathered into rows to be simulated: one row a site, or one row a candidate."""

from dataclasses import dataclass

import numpy as np

from sites import comfort, tank
from sites.conditions import Conditions
from sites.roster import Roster, Rows
from sites.units import Bools, Floats, Ints


@dataclass(frozen=True)
class Plants(Rows):
    """Rows to be simulated: the roster gathered per row, and which site of `Conditions` each row is."""

    roster: Roster
    site: Ints
    discharge: tank.RateCurves
    charge_knots_kw_th: Floats
    """(row, tank, knot); brine that charges is as cold at every hour"""
    zone: comfort.TwoNode
    tank_available: Bools
    reserve_kwh_th: Floats
    """(row,) inventory that staged intervals leave untouched"""
    recovery: Ints
    """(row,) index into sites.recovery.RECOVERIES: when the tank may be brought back to the usual case's level"""
    recover_from: Ints
    """(row,) interval from which the recovery holds"""


def plants(
    roster: Roster,
    here: Conditions,
    tank_available: Bools,
    rows: Ints,
    recovery: tuple[Ints, Ints] | None = None,
) -> Plants:
    """Gather sites into rows, shape (row,) of site indices.

    `recovery`: index into RECOVERIES and first interval it holds in, each (row,); None = as usual for all.
    """
    as_usual = np.zeros(len(rows), dtype=np.int64)
    code, recover_from = (as_usual, as_usual) if recovery is None else recovery
    taken = roster.take(rows)
    lmtd = np.broadcast_to(here.charge_lmtd_k[rows][:, None], taken.tanks.exists.shape)
    return Plants(
        roster=taken,
        site=rows,
        discharge=here.discharge.take(rows),
        charge_knots_kw_th=tank.knots_kw_th(
            here.charge.take(rows), taken.tanks.capacity_kwh_th, taken.tanks.charge_limit_kw_th, lmtd
        ),
        zone=comfort.two_node(taken.buildings, here.step_h),
        tank_available=tank_available[rows] & taken.tanks.exists,
        reserve_kwh_th=taken.buildings.held_back_kwh_th,
        recovery=code,
        recover_from=recover_from,
    )
