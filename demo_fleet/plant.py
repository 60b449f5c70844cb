"""The finer plant as arrays: what a row (a site, or one day of a site) is made of, and its changing state.

Owns the frozen arrays; leaves the step to truth.py and the reading of tables to hidden.py.
Axes: row R, machine M (loading order, padded with zero capacity), tank K (padded with zero capacity).
"""

from dataclasses import dataclass, fields, replace
from functools import cached_property
from typing import Final, Self

import numpy as np

from sites.units import AnyArray, Bools, Floats, Ints

STRATEGIES: Final = ("full_storage", "load_levelling", "chiller_priority", "storage_priority")


@dataclass(frozen=True)
class Gathered:
    """Arrays that share their first axis."""

    def take(self, rows: Ints) -> Self:
        """Same arrays gathered along the first axis."""
        return type(self)(**{field.name: getattr(self, field.name)[rows] for field in fields(self)})


@dataclass(frozen=True)
class Plant(Gathered):
    """Nameplates, habits and hidden truth of each row."""

    capacity_kw_th: Floats
    """(R, M) rated"""
    eir: Floats
    """(R, M) rated power per cooling, the hidden factor included"""
    air_cooled: Bools
    makes_ice: Bools
    ice_capacity_slope_per_k: Floats
    ice_cop_slope_per_k: Floats
    approach_k: Floats
    dedicated_kw: Floats
    min_off_minutes: Floats
    machine_up: Bools
    """(R, M) in service"""
    tank_kind: Ints
    """(R, K) index into store.KINDS"""
    tank_kwh_th: Floats
    loss_fraction_per_h: Floats
    discharge_limit_kw_th: Floats
    charge_limit_kw_th: Floats
    tank_up: Bools
    """(R, K) in service"""
    ua_factor: Floats
    """(R,) hidden"""
    strategy: Ints
    series: Bools
    supply_c: Floats
    return_c: Floats
    brine_c: Floats
    peak_from_hour: Floats
    peak_to_hour: Floats
    charge_from_hour: Floats
    charge_to_hour: Floats
    stage_up: Floats
    design_kw_th: Floats
    """(R,) design cooling load, which sized the pumps"""
    held_back_kwh_th: Floats
    shared_aux_kw: Floats
    tank_pump_kw: Floats
    air_kwh_per_k: Floats
    mass_kwh_per_k: Floats
    coupling_kw_per_k: Floats
    envelope_kw_per_k: Floats

    @property
    def rows(self) -> int:
        """Number of rows."""
        return len(self.strategy)

    @cached_property
    def held_kwh_th(self) -> Floats:
        """Capacity of the tanks in service, (R,)."""
        total: Floats = np.where(self.tank_up, self.tank_kwh_th, 0.0).sum(axis=1)
        return total

    @cached_property
    def ice_site(self) -> Bools:
        """(R,) charging needs machines in ice making."""
        return np.asarray(((self.tank_kind < 2) & (self.tank_kwh_th > 0.0)).any(axis=1))

    @cached_property
    def loop_kw_per_k(self) -> Floats:
        """Each tank's share of the loop's full flow as m cp, (R, K): a tenth over the design flow."""
        share = self.tank_kwh_th / np.maximum(self.tank_kwh_th.sum(axis=1, keepdims=True), 1e-9)
        return np.asarray(share * (1.1 * self.design_kw_th / (self.return_c - self.supply_c))[:, None])

    @cached_property
    def tank_is_ice(self) -> Bools:
        """(R, K)"""
        result: Bools = self.tank_kind < 2
        return result

    def without_tanks(self, out: Bools) -> "Plant":
        """Same rows, tanks out of service where `out`, (R,)."""
        return replace(self, tank_up=self.tank_up & ~out[:, None])


@dataclass(frozen=True)
class State(Gathered):
    """What changes from step to step."""

    inventory_kwh_th: Floats
    """(R, K)"""
    air_k: Floats
    mass_k: Floats
    on: Bools
    """(R, M)"""
    still_minutes: Floats
    """(R, M) minutes since the machine last started or stopped"""
    charging: Bools
    """(R,)"""


def rested(plant: Plant, full_fraction: float | AnyArray = 1.0) -> State:
    """Everything off, zones at set-point, tanks at a share of capacity."""
    return State(
        inventory_kwh_th=plant.tank_kwh_th * full_fraction,
        air_k=np.zeros(plant.rows),
        mass_k=np.zeros(plant.rows),
        on=np.zeros(plant.capacity_kw_th.shape, dtype=np.bool_),
        still_minutes=np.full(plant.capacity_kw_th.shape, 600.0),
        charging=np.zeros(plant.rows, dtype=np.bool_),
    )
