"""Tanks: how fast each kind can be discharged and charged at what inventory, and what it loses standing.

Owns the rate models, their piecewise-linear curves from below, and the greatest rate over one interval. Which
brine temperatures a tank sees, and who gets its cooling, belongs to the plant. Axes: row or site (N), tank (K),
knot (J). Inventory E' = E + (charge - discharge - loss) dt stays within [0, capacity]; limits are taken at the
END of the interval, so that a coarse step never gives more than a fine one.
"""

from dataclasses import dataclass
from functools import cache
from typing import Final

import numpy as np
from numpy.polynomial import polynomial

from sites.compiled import Number, choose, larger, shared, smaller
from sites.errors import SitesError
from sites.roster import FREEZING_KINDS, ICE_KINDS, TANK_KINDS, Rows, Tanks, kind_is
from sites.units import SECONDS_PER_HOUR, FloatLike, Floats, Ints

SET_A: Final = (0.0, 0.09, -0.15, 0.612, -0.324, -0.216)
"""C1 to C6 of the rate-limited form (Strand 1992); an illustrative internal-melt tank of a public simulation
engine's examples, the same for discharge and charge. Replace it by the maker's fit where there is one."""

INTERNAL_MELT: Final = (1.3879, -7.6333, 26.3423, -47.6084, 41.8498, -14.2948)
"""P(y) of the UA form for internal melt and for freezing on the coil (Henze & Krarti 2002)."""

EXTERNAL_MELT_DISCHARGE: Final = (1.1756, -5.3689, 17.3602, -30.1077, 25.6387, -8.5102)
"""P(y) of the UA form for external-melt discharge (Henze & Krarti 2002)."""

REFERENCE_LMTD_K: Final = 10.0
"""Both forms are written per 10 K of mean temperature difference."""

FREEZING_C: Final = 0.0

TOUCHING_K: Final = 1e-9
"""Brine nearer to freezing than this has no temperature difference left."""

CHILLED_WATER_HOURS: Final = 5.0
"""A chilled-water tank with no flow limit given moves its capacity in this time (assumed, common practice)."""

EUTECTIC_HOURS: Final = 6.0
"""A eutectic tank with no flow limit given moves its capacity in this time while its limit is flat (assumed, common
practice)."""
EUTECTIC_FALLS_BELOW: Final = 0.4
"""Charged fraction below which a eutectic tank's limit falls in proportion to what is left (assumed; flat and then
falling as in Chen & Sheen 1993)."""
EUTECTIC_MELTING_C: Final = 8.3
EUTECTIC_LATENT_HEAT_KJ_PER_KG: Final = 95.0
"""Phase change of the salt in use for cooling (Chen & Sheen 1993); such a tank cools no colder than that."""

WATER_DENSITY_KG_PER_M3: Final = 999.78
WATER_CP_KJ_PER_KG_K: Final = 4.1968
"""Water at 9 degC and 1 atm (IAPWS)."""

TINY: Final = float(np.finfo(np.float64).tiny)

DENSEST_WATER_C: Final = 4.0
"""Water is densest here; a stratified tank cannot be supplied colder."""

KNOT_SOC: Final[Floats] = np.array([0.0, 0.01, 0.05, 0.1, 0.15, 0.25, 0.5, 0.75, 0.87, 0.95, 1.0])
"""Charged fractions (J,) at which every limit is kept; close where a model bends."""
KNOT_SOC.setflags(write=False)


@dataclass(frozen=True)
class RateCurves(Rows):
    """Limit at knot j, as a share of capacity per hour: base + slope x LMTD / 10 K, each (N, K, J).

    Straight lines between the knots lie nowhere above the model. Below 0 the limit is 0: the line is kept
    below 0 so that its zero, too, lies where the straight line has it and not where a knot happens to be.
    """

    base: Floats
    slope: Floats


def lmtd_k(inlet_c: FloatLike, outlet_c: FloatLike, freezing_c: float = FREEZING_C) -> Floats:
    """Log mean temperature difference between brine and ice, K, as an absolute value; any shape.

    |Tin - Tout| / |ln((Tin - Tf) / (Tout - Tf))|, which tends to |Tin - Tf| as Tout tends to Tin. 0 where the
    two touch Tf or lie on either side of it: such a tank neither melts nor freezes. Same for charging, where
    both lie below Tf.
    """
    inlet = np.asarray(inlet_c, dtype=np.float64) - freezing_c
    outlet = np.asarray(outlet_c, dtype=np.float64) - freezing_c
    return np.asarray(mean_difference_k(inlet, outlet))


@shared
def mean_difference_k(inlet: Number, outlet: Number) -> Number:
    """`lmtd_k` of temperatures counted from freezing, K; any shape."""
    works = (inlet * outlet > 0.0) & (smaller(np.abs(inlet), np.abs(outlet)) > TOUCHING_K)
    log = np.log1p(choose(works, inlet - outlet, 0.0) / choose(works, outlet, 1.0))
    mean = choose(log != 0.0, inlet - outlet, inlet) / choose(log != 0.0, log, 1.0)
    return choose(works, np.abs(mean), 0.0)


def strand_fraction_per_h(
    depth: FloatLike, lmtd_k: FloatLike, coefficients: tuple[float, ...] = SET_A
) -> Floats:
    """Most rate of an ice tank, share of capacity per hour, never below 0; any shape.

    C1 + C2 d + C3 d^2 + (C4 + C5 d + C6 d^2) LMTD / 10 K (Strand 1992), d in 0 to 1: discharged fraction when
    discharging, charged fraction when charging.
    """
    base, slope = coefficients[:3], coefficients[3:]
    rate = polynomial.polyval(depth, base) + polynomial.polyval(depth, slope) * (lmtd_k / REFERENCE_LMTD_K)
    return np.maximum(rate, 0.0)


def ua_fraction_per_h(y: FloatLike, lmtd_k: FloatLike, coefficients: tuple[float, ...]) -> Floats:
    """Most rate of an ice tank, share of capacity per hour; any shape.

    q = UA LMTD, UA = P(y) capacity / (1 h 10 K) (Henze & Krarti 2002), y in 0 to 1: discharged fraction when
    discharging, charged fraction when charging. P(1) > 0, so hold the rate to E / dt besides.
    """
    return np.asarray(polynomial.polyval(y, coefficients) * (lmtd_k / REFERENCE_LMTD_K), dtype=np.float64)


def minorant(coefficients: tuple[float, ...], knots: Floats) -> Floats:
    """Knot values (J,) whose straight lines lie nowhere above the polynomial between the knots.

    On the curve where it is concave; where a chord comes to lie above, both its ends are lowered by the most
    it does. Exact: the most lies at a root of the derivative.
    """
    value = polynomial.polyval(knots, coefficients)
    derivative = polynomial.polyder(coefficients)
    over = np.zeros(len(knots) + 1)
    for j in range(len(knots) - 1):
        left, right = knots[j], knots[j + 1]
        gradient = (value[j + 1] - value[j]) / (right - left)
        turn = polynomial.polyroots(polynomial.polysub(derivative, [gradient])).real
        turn = turn[(turn > left) & (turn < right)]
        chord = value[j] + gradient * (turn - left)
        over[j + 1] = (chord - polynomial.polyval(turn, coefficients)).max(initial=0.0)
    return np.asarray(value - np.maximum(over[:-1], over[1:]), dtype=np.float64)


def discharge_curves(tanks: Tanks) -> RateCurves:
    """Discharge limits, rising with inventory.

    Internal melt: SET_A in the discharged fraction. External melt: EXTERNAL_MELT_DISCHARGE. Encapsulated ice melts
    from the capsule's wall inwards through a growing layer of water: INTERNAL_MELT in the discharged fraction (taken
    over from coils; the maker's fit replaces it). Chilled water: flat, its discharge limit, or capacity over
    CHILLED_WATER_HOURS where none is given. Eutectic salt: flat likewise (EUTECTIC_HOURS), falling in proportion to
    inventory below EUTECTIC_FALLS_BELOW.
    """
    return _curves(tanks, "discharge", tanks.discharge_limit_kw_th)


def charge_curves(tanks: Tanks) -> RateCurves:
    """Charge limits, falling with inventory; a full tank takes nothing (see most_charge_kw_th).

    Ice: INTERNAL_MELT in the charged fraction, for ice grows on the coil whichever side it melts from. SET_A
    would stop short of full at usual brine (0.96 at an LMTD of 5 K), which a tank in daily use does not.
    Chilled water and eutectic salt: flat until full, the charge limit, or capacity over CHILLED_WATER_HOURS or
    EUTECTIC_HOURS.
    """
    return _curves(tanks, "charge", tanks.charge_limit_kw_th)


def knots_kw_th(
    curves: RateCurves, capacity_kwh_th: Floats, ceiling_kw_th: Floats, lmtd_k: FloatLike
) -> Floats:
    """Limits at the knots, (..., J), for the functions below; capacity, ceiling and lmtd_k broadcast to (N, K).

    capacity x (base + slope LMTD / 10 K), not above `ceiling_kw_th`. May lie below 0, which those functions
    read as 0. At small LMTD (under 2.78 K for SET_A) a model turns back near one end; no knot is above the
    better of the two ends, which keeps the curve monotone and below the model.
    """
    lmtd = np.asarray(lmtd_k, dtype=np.float64)
    shape = np.broadcast_shapes(
        curves.base.shape[:-1], lmtd.shape, capacity_kwh_th.shape, ceiling_kw_th.shape
    )
    knots = np.empty((len(KNOT_SOC), *shape))
    fill_knots(
        _knots_first(curves.base), _knots_first(curves.slope), capacity_kwh_th, ceiling_kw_th, lmtd, knots
    )
    return np.moveaxis(knots, 0, -1)


@shared
def fill_knots(
    base: Number, slope: Number, capacity_kwh_th: Number, ceiling_kw_th: Number, lmtd_k: Number, knots: Number
) -> None:
    """`knots_kw_th` written into `knots` (J, ...), knots first as in base and slope (J, ...)."""
    scaled = lmtd_k / REFERENCE_LMTD_K
    last = len(KNOT_SOC) - 1
    most = larger(slope[0] * scaled + base[0], slope[last] * scaled + base[last])
    for j in range(len(KNOT_SOC)):
        rate = smaller(slope[j] * scaled + base[j], most)
        knots[j] = smaller(rate * capacity_kwh_th, ceiling_kw_th)


def limit_kw_th(inventory_kwh_th: Floats, capacity_kwh_th: Floats, knots_kw_th: Floats) -> Floats:
    """The limit at an inventory, on the straight lines between the knots, not below 0; 0 without capacity."""
    return np.asarray(on_lines_kw_th(inventory_kwh_th, capacity_kwh_th, _knots_first(knots_kw_th)))


@shared
def on_lines_kw_th(inventory_kwh_th: Number, capacity_kwh_th: Number, knots_kw_th: Number) -> Number:
    """`limit_kw_th` with knots first, (J, ...)."""
    real = capacity_kwh_th > 0.0
    soc = choose(real, inventory_kwh_th, 0.0) / choose(real, capacity_kwh_th, 1.0)
    limit = knots_kw_th[0]
    for j in range(len(KNOT_SOC) - 1):
        share = (soc - KNOT_SOC[j]) / (KNOT_SOC[j + 1] - KNOT_SOC[j])
        limit = limit + smaller(larger(share, 0.0), 1.0) * (knots_kw_th[j + 1] - knots_kw_th[j])
    return choose(real, larger(limit, 0.0), 0.0)


def most_discharge_kw_th(
    inventory_kwh_th: Floats, loss_kw_th: Floats, capacity_kwh_th: Floats, knots_kw_th: Floats, step_h: float
) -> Floats:
    """Greatest steady discharge over one interval: at most the limit at the inventory it ends with, which is >= 0.

    Solves E_end + limit(E_end) dt = E - loss dt, whose left side is piecewise linear and rising, exactly. Loss
    must not exceed E / dt. `knots_kw_th` from discharge curves, (..., J); all else broadcasts to (...).
    """
    knots = _knots_first(knots_kw_th)
    return np.asarray(steady_discharge_kw_th(inventory_kwh_th, loss_kw_th, capacity_kwh_th, knots, step_h))


@shared
def steady_discharge_kw_th(
    inventory_kwh_th: Number, loss_kw_th: Number, capacity_kwh_th: Number, knots_kw_th: Number, step_h: float
) -> Number:
    """`most_discharge_kw_th` with knots first, (J, ...)."""
    start = inventory_kwh_th - loss_kw_th * step_h
    return larger(start - end_inventory_kwh_th(start, capacity_kwh_th, knots_kw_th, step_h), 0.0) / step_h


def most_charge_kw_th(
    inventory_kwh_th: Floats, loss_kw_th: Floats, capacity_kwh_th: Floats, knots_kw_th: Floats, step_h: float
) -> Floats:
    """Greatest steady charge over one interval: at most the limit at the inventory it ends with, never over full.

    Solves E_end - limit(E_end) dt = E - loss dt, as most_discharge_kw_th; `knots_kw_th` from charge curves.
    """
    knots = _knots_first(knots_kw_th)
    return np.asarray(steady_charge_kw_th(inventory_kwh_th, loss_kw_th, capacity_kwh_th, knots, step_h))


@shared
def steady_charge_kw_th(
    inventory_kwh_th: Number, loss_kw_th: Number, capacity_kwh_th: Number, knots_kw_th: Number, step_h: float
) -> Number:
    """`most_charge_kw_th` with knots first, (J, ...)."""
    start = inventory_kwh_th - loss_kw_th * step_h
    return larger(end_inventory_kwh_th(start, capacity_kwh_th, knots_kw_th, -step_h) - start, 0.0) / step_h


def standing_loss_kw_th(
    kind: Ints, inventory_kwh_th: Floats, capacity_kwh_th: Floats, loss_fraction_per_h: Floats, step_h: float
) -> Floats:
    """Standing loss over one interval, kW_th; all but step_h broadcast.

    Ice and eutectic salt sit at their melting point to the last, UA (T_ambient - T_melting): a share of CAPACITY
    per hour while any of it is left. Chilled water: a share of inventory. At most what is there, E / dt.
    """
    of_capacity = kind_is(kind, TANK_KINDS, FREEZING_KINDS)
    return np.asarray(loss_kw_th(of_capacity, inventory_kwh_th, capacity_kwh_th, loss_fraction_per_h, step_h))


@shared
def loss_kw_th(
    of_capacity: Number,
    inventory_kwh_th: Number,
    capacity_kwh_th: Number,
    loss_fraction_per_h: Number,
    step_h: float,
) -> Number:
    """`standing_loss_kw_th`, told of which tanks the loss is a share of capacity."""
    held = choose(of_capacity, capacity_kwh_th, inventory_kwh_th)
    return smaller(held * loss_fraction_per_h, inventory_kwh_th / step_h)


def usable_water_kwh_th(
    volume_m3: FloatLike,
    supply_c: FloatLike,
    return_c: FloatLike,
    figure_of_merit: FloatLike = 0.9,
    density_kg_per_m3: float = WATER_DENSITY_KG_PER_M3,
    cp_kj_per_kg_k: float = WATER_CP_KJ_PER_KG_K,
) -> Floats:
    """Usable cooling in a stratified chilled-water tank, V rho cp (T_return - T_supply) FOM / 3600; any shape.

    Figure of merit 0.85 to 0.95 (ASHRAE Handbook, HVAC Applications, Thermal Storage, from memory). A warmer or
    colder return than design changes it in proportion. Raises SitesError for a supply below 4 degC, a return
    not above the supply or a figure of merit outside 0 to 1.
    """
    supply, warm, merit = (
        np.asarray(value, dtype=np.float64) for value in (supply_c, return_c, figure_of_merit)
    )
    if np.any(supply < DENSEST_WATER_C):
        raise SitesError(
            f"supply_c: came {supply.min():g} degC; expected {DENSEST_WATER_C:g} degC or more; a stratified tank "
            "turns over below that"
        )
    if np.any(warm <= supply):
        raise SitesError(
            f"return_c: came {(warm - supply).min():g} K above supply_c; expected above 0; check both"
        )
    if np.any((merit <= 0.0) | (merit > 1.0)):
        raise SitesError(f"figure_of_merit: came {merit}; expected above 0 to 1; 0.85 to 0.95 is usual")
    mass_kg = np.asarray(volume_m3, dtype=np.float64) * density_kg_per_m3
    usable: Floats = mass_kg * cp_kj_per_kg_k * (warm - supply) * merit / SECONDS_PER_HOUR
    return usable


def water_at_return_kwh_th(
    capacity_kwh_th: FloatLike, supply_c: FloatLike, return_c: FloatLike, design_return_c: FloatLike
) -> Floats:
    """Capacity of a chilled-water tank whose water comes back at `return_c` instead of the design's; any shape.

    V rho cp FOM (T_return - T_supply) in proportion: a return colder than design shrinks the tank, a warmer one is
    not counted on. Raises SitesError where the design return is not above the supply; a return at or below the supply
    leaves nothing.
    """
    supply, design = np.asarray(supply_c, dtype=np.float64), np.asarray(design_return_c, dtype=np.float64)
    if np.any(design <= supply):
        raise SitesError(
            f"design_return_c: came {np.min(design - supply):g} K above supply_c; expected above 0; check both"
        )
    share = np.clip((np.asarray(return_c, dtype=np.float64) - supply) / (design - supply), 0.0, 1.0)
    return np.asarray(capacity_kwh_th * share, dtype=np.float64)


def eutectic_kwh_th(mass_kg: FloatLike) -> Floats:
    """Cooling held by the salt of a eutectic tank, latent heat alone: 38 kg a kWh_th; any shape."""
    return np.asarray(mass_kg, dtype=np.float64) * EUTECTIC_LATENT_HEAT_KJ_PER_KG / SECONDS_PER_HOUR


@shared
def end_inventory_kwh_th(target: Number, capacity: Number, knots_kw_th: Number, gain_h: float) -> Number:
    """The E_end in [0, capacity] for which E_end + gain_h limit(E_end) = target, the limit given at the knots (J, ...).

    The left side must rise with E: the last segment that starts below the target holds the answer.
    """
    start = KNOT_SOC[0] * capacity + knots_kw_th[0] * gain_h
    above = KNOT_SOC[1] * capacity + knots_kw_th[1] * gain_h
    low, high, soc, width = start, above, 0.0 * start, KNOT_SOC[1] - KNOT_SOC[0] + 0.0 * start
    for j in range(1, len(KNOT_SOC) - 1):
        below = above
        above = KNOT_SOC[j + 1] * capacity + knots_kw_th[j + 1] * gain_h
        reached = target > below
        low = choose(reached, below, low)
        high = choose(reached, above, high)
        soc = choose(reached, KNOT_SOC[j], soc)
        width = choose(reached, KNOT_SOC[j + 1] - KNOT_SOC[j], width)
    share = (target - low) / larger(high - low, TINY)
    return (soc + smaller(larger(share, 0.0), 1.0) * width) * capacity


def _knots_first(per_knot: Floats) -> Floats:
    """(..., J) as (J, ...)."""
    return np.moveaxis(per_knot, -1, 0)


def _curves(tanks: Tanks, way: str, limit_kw_th: Floats) -> RateCurves:
    """Curves of every tank in one direction: ice from the table of its kind, water from its own flat limit."""
    base, slope = (table[tanks.kind] for table in _ice_tables(way))
    real = np.isfinite(limit_kw_th) & (tanks.capacity_kwh_th > 0.0)
    salt = kind_is(tanks.kind, TANK_KINDS, ("eutectic_salt",))
    flat = 1.0 / np.where(salt, EUTECTIC_HOURS, CHILLED_WATER_HOURS)
    np.divide(limit_kw_th, tanks.capacity_kwh_th, out=flat, where=real)
    falling = (
        np.minimum(KNOT_SOC / EUTECTIC_FALLS_BELOW, 1.0) if way == "discharge" else np.ones_like(KNOT_SOC)
    )
    level = flat[..., None] * np.where(salt[..., None], falling, 1.0)
    water = ~kind_is(tanks.kind, TANK_KINDS, ICE_KINDS)
    return RateCurves(np.where(water[..., None], level, base), np.where(water[..., None], 0.0, slope))


@cache
def _ice_tables(way: str) -> tuple[Floats, Floats]:
    """Base and slope at the knots, each (tank kind, J), rows in the order of TANK_KINDS; zeros for water and salt."""
    freezing = ((0.0, 0.0), INTERNAL_MELT)
    pairs: dict[str, tuple[tuple[float, ...], tuple[float, ...]]] = {
        "ice_internal_melt": freezing,
        "ice_external_melt": freezing,
        "ice_encapsulated": freezing,
    }
    if way == "discharge":
        pairs = {
            "ice_internal_melt": (SET_A[:3], SET_A[3:]),
            "ice_external_melt": ((0.0, 0.0), EXTERNAL_MELT_DISCHARGE),
            "ice_encapsulated": freezing,
        }
    # A model of discharge is written in the discharged fraction: mirror the knots, then the values back.
    mirrored = way == "discharge"
    knots = (1.0 - KNOT_SOC)[::-1] if mirrored else KNOT_SOC
    tables = np.zeros((2, len(TANK_KINDS), len(KNOT_SOC)))
    for kind, pair in pairs.items():
        for table, coefficients in zip(tables, pair, strict=True):
            values = minorant(coefficients, knots)
            table[TANK_KINDS.index(kind)] = values[::-1] if mirrored else values
    tables.setflags(write=False)
    return tables[0], tables[1]
