"""A simulated horizon kept whole: what one row per site did in every interval."""

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from sites.plant import Moment, Usual
from sites.units import Bools, Floats


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


def course(moments: Iterable[Moment]) -> Course:
    """Keep every interval of a simulation."""
    kept = list(moments)

    def over(name: str) -> Floats:
        return np.stack([getattr(moment, name) for moment in kept], axis=-1)

    return Course(
        power_kw=over("power_kw"),
        machine_kw=over("machine_kw"),
        limit_fraction=over("limit_fraction"),
        making_ice=over("making_ice").astype(np.bool_),
        direct_kw_th=over("direct_kw_th"),
        into_tank_kw_th=over("into_tank_kw_th"),
        charge_kw_th=over("charge_kw_th"),
        discharge_kw_th=over("discharge_kw_th"),
        loss_kw_th=over("loss_kw_th"),
        inventory_start_kwh_th=over("inventory_start_kwh_th"),
        inventory_kwh_th=over("inventory_kwh_th"),
        discharge_limit_kw_th=over("discharge_limit_kw_th"),
        lmtd_k=over("lmtd_k"),
        wanted_kw_th=over("wanted_kw_th"),
        load_kw_th=over("load_kw_th"),
        unmet_kw_th=over("unmet_kw_th"),
        pull_down_kw_th=over("pull_down_kw_th"),
        air_rise_k=over("air_rise_k"),
        mass_rise_k=over("mass_rise_k"),
        air_mean_rise_k=over("air_mean_rise_k"),
        charging=over("charging").astype(np.bool_),
    )
