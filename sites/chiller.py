"""Chillers: what each machine can give and what it draws, in direct cooling and in ice making.

Owns the performance curves and their ranges. Which machines run, at what load and with what pumps belongs to
the plant. Axes: site (N), machine (M), interval (T).
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from sites.compiled import Number, choose, larger, shared, smaller
from sites.errors import SitesError
from sites.roster import CHILLER_KINDS, Chillers, kind_is
from sites.units import Bools, FloatLike, Floats, Ints

RATED_COP_MINIMUM: Final = {"air_cooled_screw": 2.960, "water_cooled_centrifugal": 6.280}
"""Full-load minima of ASHRAE 90.1-2019, path A: air-cooled of 150 ton and more 1.188 kW/ton, water-cooled
centrifugal of 400 ton and more 0.560 kW/ton. The default of `rated_cop` where a site gives none."""

ICE_REFERENCE_C: Final = 5.0
"""Leaving brine temperature from which the ice-making slopes are counted."""


@dataclass(frozen=True)
class CurveSet:
    """Performance curves of one kind of machine, as published; values at the reference need not be 1.

    capacity and eir_temperature are biquadratics c1 + c2 x + c3 x^2 + c4 y + c5 y^2 + c6 x y in leaving water
    x and condenser entering water or air y (degC); eir_part_load is c1 + c2 plr + c3 plr^2.
    """

    name: str
    origin: str
    reference_leaving_c: float
    reference_condenser_c: float
    leaving_range_c: tuple[float, float]
    condenser_range_c: tuple[float, float]
    capacity: tuple[float, ...]
    eir_temperature: tuple[float, ...]
    eir_part_load: tuple[float, ...]
    plr_min: float
    """The machine cycles below this part-load ratio."""
    plr_unload: float
    """Hot gas is bypassed below this ratio; kept with the record, the power of bypassing is not modelled."""


AIR_COOLED_SCREW: Final = CurveSet(
    name="air_cooled_screw",
    origin="Air-cooled screw chiller of a public simulation engine's example data; plr_min and plr_unload "
    "assumed, without effect because its part-load curve is a straight line through zero",
    reference_leaving_c=6.67,
    reference_condenser_c=35.0,
    leaving_range_c=(4.44, 10.0),
    condenser_range_c=(29.4, 46.1),
    capacity=(0.979952514, 0.0359715682, -0.000324571, -0.003526257, -0.0000442458, -0.0001206704),
    eir_temperature=(0.1210926936, 0.0321255295, 0.0010019413, 0.0215864214, 0.0001997952, -0.0015848128),
    eir_part_load=(0.0, 1.0, 0.0),
    plr_min=0.1,
    plr_unload=0.2,
)

WATER_COOLED_CENTRIFUGAL: Final = CurveSet(
    name="water_cooled_centrifugal",
    origin="DOE-2.1E centrifugal chiller record",
    reference_leaving_c=6.67,
    reference_condenser_c=29.4,
    leaving_range_c=(5.0, 10.0),
    condenser_range_c=(24.0, 35.0),
    capacity=(0.257896, 0.0389016, -0.00021708, 0.0468684, -0.00094284, -0.00034344),
    eir_temperature=(0.933884, -0.058212, 0.00450036, 0.00243, 0.000486, -0.001215),
    eir_part_load=(0.222903, 0.313387, 0.463710),
    plr_min=0.1,
    plr_unload=0.2,
)

CURVE_SETS: Final = (AIR_COOLED_SCREW, WATER_COOLED_CENTRIFUGAL)
"""In the order of sites.roster.CHILLER_KINDS: `kind` indexes both."""


@dataclass(frozen=True)
class Capability:
    """What every machine could give and would draw at full load, each (site, machine, interval)."""

    available_kw_th: Floats
    full_load_kw: Floats
    """Compressor power at full load; auxiliaries are not in it."""
    clipped_count: int
    """Intervals of real machines whose curve inputs lay outside the published range: held at its edge."""


def biquadratic(coefficients: Floats | tuple[float, ...], x: FloatLike, y: FloatLike) -> Floats:
    """c1 + c2 x + c3 x^2 + c4 y + c5 y^2 + c6 x y; coefficients (6, ...), broadcast with x and y."""
    c = np.asarray(coefficients, dtype=np.float64)
    value: Floats = np.asarray(c[0] + x * (c[1] + x * c[2]) + y * (c[3] + y * c[4]) + c[5] * x * y)
    return value


def condenser_c(chillers: Chillers, dry_bulb_c: Floats, wet_bulb_c: Floats) -> Floats:
    """Temperature at which each machine rejects heat, (N, M, T) in degC, from weather (N, T).

    Air-cooled: dry bulb. Water-cooled: wet bulb + the tower's approach, held at any load.
    """
    water_cooled = kind_is(chillers.kind, CHILLER_KINDS, ("water_cooled_centrifugal",))
    tower_c = wet_bulb_c[:, None, :] + chillers.tower_approach_k[:, :, None]
    return np.where(water_cooled[:, :, None], tower_c, dry_bulb_c[:, None, :])


def direct(chillers: Chillers, leaving_c: Floats, condenser: Floats) -> Capability:
    """Capacity and full-load power in direct cooling.

    Q_avail = Q_rated capacity(x, y), P = Q_avail / COP_rated eir_temperature(x, y), each curve divided by
    its own value at the reference, so that the rating is reproduced exactly (model and curves: DOE-2.1E).
    x and y are held inside the published ranges and counted. Padding machines give 0 and 0.

    leaving_c (N,) degC; condenser (N, M, T) degC as from `condenser_c`. Raises SitesError where a real
    machine has a COP or capacity that is not positive.
    """
    _refuse_bad_ratings(chillers)
    x, y, clipped = _held_in_range(chillers.kind, leaving_c[:, None, None], condenser)
    capacity, eir = _curves(chillers.kind, x, y)
    size_kw_th = np.where(chillers.exists, chillers.capacity_kw_th, 0.0)
    cop = np.where(chillers.exists, chillers.rated_cop, 1.0)
    available = size_kw_th[:, :, None] * np.maximum(capacity, 0.0)
    power = available * eir / cop[:, :, None]
    count = int((clipped & chillers.exists[:, :, None]).sum())
    return Capability(available, power, count)


def ice(chillers: Chillers, leaving_c: Floats, condenser: Floats) -> Capability:
    """Capacity and full-load power in ice making, which lies outside the ranges of the direct curves.

    From the direct curves at ICE_REFERENCE_C leaving and equal condenser temperature, capacity and COP fall
    on a straight line with leaving brine temperature: x (1 - slope (5 - leaving)), not below 0. Usual slopes:
    3.7 %/K (a maker's table: 0.63 at -5 degC and equal air) and 2.8 %/K (ideal R134a cycle: 0.72). Machines
    that make no ice give 0 and 0. leaving_c (N,) degC of brine; condenser (N, M, T) degC.
    """
    at_reference = direct(chillers, np.full_like(leaving_c, ICE_REFERENCE_C), condenser)
    below_k = ICE_REFERENCE_C - leaving_c[:, None]
    able = chillers.exists & chillers.makes_ice
    capacity = np.where(able, np.maximum(1.0 - chillers.ice_capacity_slope_per_k * below_k, 0.0), 0.0)
    cop = np.maximum(1.0 - chillers.ice_cop_slope_per_k * below_k, 0.0)
    capacity = np.where(cop > 0.0, capacity, 0.0)
    power = np.divide(capacity, cop, out=np.zeros_like(capacity), where=cop > 0.0)
    _, _, clipped = _held_in_range(chillers.kind, np.float64(ICE_REFERENCE_C), condenser)
    return Capability(
        at_reference.available_kw_th * capacity[:, :, None],
        at_reference.full_load_kw * power[:, :, None],
        int((clipped & able[:, :, None]).sum()),
    )


def part_load_power_kw(
    load_kw_th: Floats, available_kw_th: Floats, full_load_kw: Floats, kind: Ints
) -> Floats:
    """Compressor power at part load; all arguments broadcast to (..., M).

    full_load_kw x EIRPLR(plr), plr = load / available; below plr_min the machine cycles and draws
    P(plr_min) plr / plr_min; 0 at zero load and where nothing is available. A load above what is available
    is the caller's fault: the curve is carried on, not clipped.
    """
    c1, c2, c3, plr_min = np.moveaxis(part_load_curves()[kind], -1, 0)
    return np.asarray(curve_power_kw(load_kw_th, available_kw_th, full_load_kw, c1, c2, c3, plr_min))


@shared
def curve_power_kw(
    load_kw_th: Number,
    available_kw_th: Number,
    full_load_kw: Number,
    c1: Number,
    c2: Number,
    c3: Number,
    plr_min: Number,
) -> Number:
    """`part_load_power_kw` with the machine's own curve, EIRPLR(plr) = c1 + c2 plr + c3 plr^2 and 1 at full load."""
    some = available_kw_th > 0.0
    plr = choose(some, load_kw_th, 0.0) / choose(some, available_kw_th, 1.0)
    running = larger(plr, plr_min)
    return full_load_kw * (c1 + running * (c2 + running * c3)) * smaller(plr / plr_min, 1.0)


def part_load_curves() -> Floats:
    """c1, c2, c3 of EIRPLR, 1 at full load, and plr_min, (kind, 4)."""
    rows = [[*(c / sum(s.eir_part_load) for c in s.eir_part_load), s.plr_min] for s in CURVE_SETS]
    return np.array(rows)


def _curves(kind: Ints, x: Floats, y: Floats) -> tuple[Floats, Floats]:
    """Capacity and eir_temperature at (x, y), each over its value at the reference, (N, M, T)."""
    tables = []
    for field in ("capacity", "eir_temperature"):
        rows = []
        for curves in CURVE_SETS:
            c = np.array(getattr(curves, field))
            rows.append(c / biquadratic(c, curves.reference_leaving_c, curves.reference_condenser_c))
        tables.append(np.moveaxis(np.array(rows)[kind], -1, 0)[..., None])
    return biquadratic(tables[0], x, y), biquadratic(tables[1], x, y)


def _held_in_range(kind: Ints, x: FloatLike, y: Floats) -> tuple[Floats, Floats, Bools]:
    """Curve inputs held inside their ranges, and a mask of those that were outside, (N, M, T)."""
    x_low, x_high = np.array([s.leaving_range_c for s in CURVE_SETS])[kind].transpose(2, 0, 1)[..., None]
    y_low, y_high = np.array([s.condenser_range_c for s in CURVE_SETS])[kind].transpose(2, 0, 1)[..., None]
    outside = (x < x_low) | (x > x_high) | (y < y_low) | (y > y_high)
    return np.clip(x, x_low, x_high), np.clip(y, y_low, y_high), outside


def _refuse_bad_ratings(chillers: Chillers) -> None:
    """SitesError naming the first machine whose rating cannot be worked with."""
    good = (chillers.capacity_kw_th > 0.0) & (chillers.rated_cop > 0.0)
    bad = np.argwhere(chillers.exists & ~good)
    if len(bad):
        site, machine = bad[0]
        raise SitesError(
            f"chiller {chillers.chiller_id[site, machine]} (site row {site}): came capacity "
            f"{chillers.capacity_kw_th[site, machine]:g} kW_th and rated COP "
            f"{chillers.rated_cop[site, machine]:g}; expected both above 0; "
            f"correct the rating ({len(bad)} such in all)"
        )
