"""Frozen arrays over sites: what every model function reads, and nothing that changes with time.

Axes: site (N), machine (M, padded, in loading order) and tank (K, padded). Padding has `exists` False and zero
capacity, so that sums need no mask. `take(rows)` gathers sites into rows (one row per candidate, say), so
that one site is the same call with n = 1. Reading a fleet folder into these arrays is the caller's work.
"""

from dataclasses import dataclass, fields
from typing import Any, Final, Self

from sites.units import AnyArray, Bools, Floats, Ints, Strings

CHILLER_KINDS: Final = ("air_cooled_screw", "water_cooled_centrifugal")
TANK_KINDS: Final = (
    "ice_internal_melt",
    "ice_external_melt",
    "chilled_water",
    "ice_encapsulated",
    "eutectic_salt",
)
ICE_KINDS: Final = ("ice_internal_melt", "ice_external_melt", "ice_encapsulated")
FREEZING_KINDS: Final = (*ICE_KINDS, "eutectic_salt")
"""Kinds that sit at their melting point until the last of it: their standing loss does not fall with inventory."""
STRATEGIES: Final = ("full_storage", "load_levelling", "chiller_priority", "storage_priority")
LAYOUTS: Final = ("parallel", "series")


def _taken(value: Any, rows: Ints) -> Any:
    return value.take(rows) if isinstance(value, Rows) else value[rows]


@dataclass(frozen=True)
class Rows:
    """A frozen set of arrays that share their first axis."""

    def take(self, rows: Ints) -> Self:
        """Same arrays gathered along the first axis by `rows`, shape (row,)."""
        return type(self)(**{field.name: _taken(getattr(self, field.name), rows) for field in fields(self)})


@dataclass(frozen=True)
class Buildings(Rows):
    """One row per building, each array of shape (site,)."""

    site_id: Strings
    node_id: Strings
    strategy: Ints
    """Index into STRATEGIES."""
    layout: Ints
    """Index into LAYOUTS; in series the machines stand upstream of the tank."""
    critical_kw_th: Floats
    no_unmet: Bools
    held_back_kwh_th: Floats
    peak_cooling_kw_th: Floats
    floor_area_m2: Floats
    supply_c: Floats
    """Water or brine temperature to the building in direct cooling."""
    return_c: Floats
    charge_brine_c: Floats
    """Leaving brine temperature when making ice."""
    peak_from_hour: Floats
    """Local hour at which the strategy's on-peak period starts; may lie after its end (over midnight)."""
    peak_to_hour: Floats
    charge_from_hour: Floats
    charge_to_hour: Floats
    occupied_from_hour: Floats
    occupied_to_hour: Floats
    occupied_all_week: Bools
    stage_up_fraction: Floats
    """The next machine starts when load exceeds this share of the capacity of those on."""
    air_kwh_per_k: Floats
    mass_kwh_per_k: Floats
    coupling_kw_per_k: Floats
    envelope_kw_per_k: Floats
    rise_limit_k: Floats
    """The site's own ceiling, as a rise above its set-point."""
    supply_cap_c: Floats
    """Warmest the building's supply water may become in a window, inf = no cap: where humidity ends an event first."""
    shared_aux_kw: Floats
    """Pumps and fans that run whenever the plant cools, whichever machines are on."""
    tank_pump_kw: Floats
    """Pump that runs whenever a tank is charged or discharged."""
    notice_minutes: Floats
    minimum_window_minutes: Floats
    restart_gap_minutes: Floats
    call_fee: Floats
    comfort_payment_per_kwh_th: Floats
    demand_price_per_kw: Floats
    delivery_factor: Floats


@dataclass(frozen=True)
class Chillers(Rows):
    """Machines, each array of shape (site, machine)."""

    chiller_id: Strings
    exists: Bools
    kind: Ints
    """Index into CHILLER_KINDS."""
    capacity_kw_th: Floats
    rated_cop: Floats
    makes_ice: Bools
    ice_capacity_slope_per_k: Floats
    ice_cop_slope_per_k: Floats
    tower_approach_k: Floats
    dedicated_aux_kw: Floats
    min_on_minutes: Floats
    min_off_minutes: Floats
    start_to_start_minutes: Floats
    starts_left: Floats


@dataclass(frozen=True)
class Tanks(Rows):
    """Tanks, each array of shape (site, tank)."""

    tank_id: Strings
    exists: Bools
    kind: Ints
    """Index into TANK_KINDS."""
    capacity_kwh_th: Floats
    loss_fraction_per_h: Floats
    discharge_limit_kw_th: Floats
    """Flow or heat-exchanger limit besides the tank's own; inf where there is none."""
    charge_limit_kw_th: Floats


@dataclass(frozen=True)
class Standing(Rows):
    """Where every site stands at the horizon's start: inventory (site, tank), availability per unit."""

    low_kwh_th: Floats
    best_kwh_th: Floats
    high_kwh_th: Floats
    chiller_available: Bools
    """(site, machine)"""
    tank_available: Bools
    """(site, tank)"""


@dataclass(frozen=True)
class Roster(Rows):
    """Everything about the sites that does not change over the horizon."""

    buildings: Buildings
    chillers: Chillers
    tanks: Tanks

    @property
    def count(self) -> int:
        """Number of sites (rows)."""
        return len(self.buildings.site_id)


def kind_is(kind: Ints, names: tuple[str, ...], wanted: tuple[str, ...]) -> Bools:
    """Mask of the kinds (indices into `names`) that are among `wanted`; any shape."""
    codes: AnyArray = kind
    mask = codes == -1
    for name in wanted:
        mask = mask | (codes == names.index(name))
    result: Bools = mask
    return result
