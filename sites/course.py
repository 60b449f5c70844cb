"""A simulated horizon kept whole: what one row per site did in every interval.

Also says what the loop over rows writes of one interval, the records that a course is read from.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from sites.units import AnyArray, Bools, Floats

NOW: Final = np.dtype(
    [
        *((name, "f8") for name in ("power_kw", "load_kw_th", "wanted_kw_th", "drawn_kw_th", "unmet_kw_th")),
        *((name, "f8") for name in ("ready_kw_th", "firm_kw_th", "pull_down_kw_th")),
        *((name, "f8") for name in ("air_rise_k", "mass_rise_k", "air_mean_rise_k")),
        *((name, "f8") for name in ("start_kwh_th", "held_kwh_th")),
        ("charging", "?"),
    ],
    align=True,
)
"""One row in one interval. wanted: what the load asked of the tanks before their limits; drawn: what they gave; ready:
what machines that may run can do; firm: what could be served with the largest running machine lost, by machines and
tanks; start and held: in all tanks at its start and end; charging: still in charging mode at its end."""
MADE: Final = np.dtype(
    [
        *((name, "f8") for name in ("limit_fraction", "direct_kw_th", "into_tank_kw_th", "machine_kw")),
        ("making_ice", "?"),
    ],
    align=True,
)
"""One machine of it: straight to load, into tanks, and power with the auxiliaries that stop with the machine."""
STORED: Final = np.dtype(
    [
        (name, "f8")
        for name in (
            "charge_kw_th",
            "discharge_kw_th",
            "loss_kw_th",
            "inventory_start_kwh_th",
            "inventory_kwh_th",
            "discharge_limit_kw_th",
            "lmtd_k",
            "most_kw_th",
        )
    ]
)
"""One tank of it; most: what could have been had."""


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
class Course:
    """Arrays (row, interval), (row, machine, interval) and (row, tank, interval); inventories at interval end."""

    power_kw: Floats
    machine_kw: Floats
    limit_fraction: Floats
    making_ice: Bools
    direct_kw_th: Floats
    """(row, machine, interval)"""
    into_tank_kw_th: Floats
    """(row, machine, interval)"""
    charge_kw_th: Floats
    """(row, tank, interval), as all tank arrays"""
    discharge_kw_th: Floats
    loss_kw_th: Floats
    inventory_start_kwh_th: Floats
    inventory_kwh_th: Floats
    discharge_limit_kw_th: Floats
    lmtd_k: Floats
    wanted_kw_th: Floats
    """(row, interval) what the load asked of the tanks before their limits"""
    load_kw_th: Floats
    unmet_kw_th: Floats
    pull_down_kw_th: Floats
    air_rise_k: Floats
    mass_rise_k: Floats
    air_mean_rise_k: Floats
    charging: Bools
    """(row, interval) still in charging mode at the interval's end"""

    @property
    def chiller_kw_th(self) -> Floats:
        """(row, interval) all cooling made by machines."""
        total: Floats = (self.direct_kw_th + self.into_tank_kw_th).sum(axis=1)
        return total

    @property
    def as_usual(self) -> Usual:
        """This course as the case that events are measured against."""
        return Usual(self.unmet_kw_th, self.inventory_kwh_th, self.charge_kw_th.sum(axis=1), self.power_kw)


def course(now: AnyArray, made: AnyArray, stored: AnyArray) -> Course:
    """The course that lies in NOW (row, interval), MADE (row, interval, machine) and STORED (row, interval, tank)."""
    columns: dict[str, AnyArray] = {}
    for records in (now, np.moveaxis(made, 2, 1), np.moveaxis(stored, 2, 1)):
        names = [name for name in Course.__dataclass_fields__ if name in (records.dtype.names or ())]
        columns |= {name: np.ascontiguousarray(records[name]) for name in names}
    return Course(**columns)
