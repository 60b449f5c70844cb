"""Plants in the words of the second judge (fine_plant.py): arrays of N cases, minute by minute."""

from dataclasses import dataclass, fields, replace

import numpy as np

from sites.units import Bools, Floats, Strings

STEP_H = 1.0 / 60.0


@dataclass(frozen=True)
class Plants:
    """N plants; minute arrays (N, T), machine arrays (N, M), tank arrays (N, K), else (N,)."""

    strategy: Strings
    series: Bools
    supply_c: Floats
    return_c: Floats
    brine_c: Floats
    held_back_kwh_th: Floats
    stage_up: Floats
    shared_kw: Floats
    pump_kw: Floats
    air_kwh_per_k: Floats
    mass_kwh_per_k: Floats
    coupling_kw_per_k: Floats
    envelope_kw_per_k: Floats
    level_kw_th: Floats
    machine_kind: Strings
    machine_kw_th: Floats
    machine_cop: Floats
    makes_ice: Bools
    ice_capacity_slope: Floats
    ice_cop_slope: Floats
    approach_k: Floats
    own_aux_kw: Floats
    tank_kind: Strings
    tank_kwh_th: Floats
    """0 = no tank"""
    loss_per_h: Floats
    tank_limit_kw_th: Floats
    charge_limit_kw_th: Floats
    load_kw_th: Floats
    dry_c: Floats
    wet_c: Floats
    on_peak: Bools
    charge_hours: Bools

    def take(self, rows: np.ndarray) -> "Plants":
        """Plants of the given rows."""
        return Plants(**{field.name: getattr(self, field.name)[rows] for field in fields(self)})

    def until(self, minutes: int) -> "Plants":
        """The same plants over the first `minutes` alone."""
        names = ("load_kw_th", "dry_c", "wet_c", "on_peak", "charge_hours")
        return replace(self, **{name: getattr(self, name)[:, :minutes] for name in names})
