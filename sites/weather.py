"""Weather: moist air, as far as a cooling tower needs it. What machines feel of it belongs to chiller.py."""

from typing import Final

import numpy as np

from sites.errors import SitesError
from sites.units import Bools, FloatLike, Floats

STANDARD_PRESSURE_PA: Final = 101325.0
KELVIN: Final = 273.15
TRIPLE_POINT_C: Final = 0.01
"""Up to it saturation is over ice; a wet bulb is over ice below it, over water from it on."""

MASS_RATIO: Final = 0.621945
"""Molar mass of water over that of dry air (ASHRAE Handbook, Fundamentals, ch. 1)."""

LEAST_DRY_BULB_C: Final = -60.0
MOST_DRY_BULB_C: Final = 60.0

OVER_ICE: Final = (
    -5.6745359e3,
    6.3925247,
    -9.677843e-3,
    6.2215701e-7,
    2.0747825e-9,
    -9.484024e-13,
    4.1635019,
)
OVER_WATER: Final = (-5.8002206e3, 1.3914993, -4.8640239e-2, 4.1764768e-5, -1.4452093e-8, 0.0, 6.5459673)
"""Hyland-Wexler, ln(p / Pa) = c0/T + c1 + c2 T + c3 T^2 + c4 T^3 + c5 T^4 + c6 ln T, T in K, -100 to 0 and 0 to
200 degC (ASHRAE Handbook, Fundamentals, ch. 1, eq. 5 and 6)."""

WIDEST_DEPRESSION_K: Final = 60.0
"""Dry bulb less wet bulb is less than this for any air that is let in (47 K at 60 degC, 0 %, 50 kPa)."""

BISECTIONS: Final = 36
"""Halvings of the bracket: 60 K / 2^36 is under 1e-9 K."""


def saturation_pa(temperature_c: FloatLike) -> Floats:
    """Saturation pressure of water vapour over ice or water, Pa; any shape (Hyland-Wexler)."""
    celsius = np.asarray(temperature_c, dtype=np.float64)
    kelvin = celsius + KELVIN
    log_kelvin = np.log(kelvin)
    ice, water = (
        c[0] / kelvin
        + c[1]
        + kelvin * (c[2] + kelvin * (c[3] + kelvin * (c[4] + kelvin * c[5])))
        + c[6] * log_kelvin
        for c in (OVER_ICE, OVER_WATER)
    )
    return np.exp(np.where(celsius <= TRIPLE_POINT_C, ice, water))


def wet_bulb_c(
    dry_bulb_c: FloatLike, rh_pct: FloatLike, pressure_pa: FloatLike = STANDARD_PRESSURE_PA
) -> Floats:
    """Thermodynamic wet bulb, degC, to 1e-9 K; arguments broadcast.

    The temperature whose adiabatic saturation line passes through the air's humidity ratio (ASHRAE Handbook,
    Fundamentals, ch. 1, eq. 33 and 35), found by bisection over all elements at once. Raises SitesError for dry bulb
    outside -60 to 60 degC, humidity outside 0 to 100 % or a pressure outside 50 to 120 kPa.
    """
    dry, humidity, pressure = _checked(dry_bulb_c, "rh_pct", rh_pct, 0.0, 100.0, pressure_pa)
    ratio = _humidity_ratio(humidity / 100.0 * saturation_pa(dry), pressure)
    # Between the two lines near freezing some air has a wet bulb over ice and one over water: water is taken.
    frozen = ratio < _ratio_at_wet_bulb(
        dry, np.full_like(dry, TRIPLE_POINT_C), pressure, np.zeros(dry.shape, np.bool_)
    )
    low = np.where(frozen, dry - WIDEST_DEPRESSION_K, np.maximum(dry - WIDEST_DEPRESSION_K, TRIPLE_POINT_C))
    high = np.where(frozen, np.minimum(dry, TRIPLE_POINT_C), dry)
    for _ in range(BISECTIONS):
        middle = 0.5 * (low + high)
        wetter = _ratio_at_wet_bulb(dry, middle, pressure, frozen) > ratio
        high = np.where(wetter, middle, high)
        low = np.where(wetter, low, middle)
    return 0.5 * (low + high)


def relative_humidity_pct(
    dry_bulb_c: FloatLike, wet_bulb_c: FloatLike, pressure_pa: FloatLike = STANDARD_PRESSURE_PA
) -> Floats:
    """Relative humidity, %, from dry and wet bulb, the inverse of `wet_bulb_c`; arguments broadcast.

    Raises SitesError as there, for a wet bulb above dry bulb, and for one colder than air with no vapour has.
    """
    dry, wet, pressure = _checked(dry_bulb_c, "wet_bulb_c", wet_bulb_c, -105.0, 60.0, pressure_pa)
    _refuse(wet > dry, "wet_bulb_c", wet, "at most dry_bulb_c", "check which is which")
    ratio = _ratio_at_wet_bulb(dry, wet, pressure, wet < TRIPLE_POINT_C)
    vapour_pa = pressure * ratio / (MASS_RATIO + ratio)
    _refuse(
        ratio < -1e-9, "wet_bulb_c", wet, "no less than that of dry air at dry_bulb_c", "check the reading"
    )
    return 100.0 * np.maximum(vapour_pa, 0.0) / saturation_pa(dry)


def _humidity_ratio(vapour_pa: Floats, pressure_pa: Floats) -> Floats:
    """Mass of vapour per mass of dry air from vapour pressure."""
    return MASS_RATIO * vapour_pa / (pressure_pa - vapour_pa)


def _ratio_at_wet_bulb(dry_c: Floats, wet_c: Floats, pressure_pa: Floats, frozen: Bools) -> Floats:
    """Humidity ratio of air at `dry_c` with that wet bulb, over ice or water; below 0 where no air can have it."""
    saturated = _humidity_ratio(saturation_pa(wet_c), pressure_pa)
    depression = 1.006 * (dry_c - wet_c)
    over_water = ((2501.0 - 2.326 * wet_c) * saturated - depression) / (2501.0 + 1.86 * dry_c - 4.186 * wet_c)
    over_ice = ((2830.0 - 0.24 * wet_c) * saturated - depression) / (2830.0 + 1.86 * dry_c - 2.1 * wet_c)
    return np.where(frozen, over_ice, over_water)


def _checked(
    dry_bulb_c: FloatLike, name: str, other: FloatLike, low: float, high: float, pressure_pa: FloatLike
) -> tuple[Floats, Floats, Floats]:
    """The three inputs as arrays of one shape, or SitesError naming the first value out of its range."""
    given = (np.asarray(value, dtype=np.float64) for value in (dry_bulb_c, other, pressure_pa))
    dry, second, pressure = np.broadcast_arrays(*given)
    for label, values, least, most, unit in (
        ("dry_bulb_c", dry, LEAST_DRY_BULB_C, MOST_DRY_BULB_C, "degC"),
        (name, second, low, high, "%" if name.endswith("pct") else "degC"),
        ("pressure_pa", pressure, 50_000.0, 120_000.0, "Pa"),
    ):
        outside = ~((values >= least) & (values <= most))
        _refuse(outside, label, values, f"{least:g} to {most:g} {unit}", "correct or leave out the reading")
    return dry, second, pressure


def _refuse(bad: Bools, name: str, values: Floats, expected: str, advice: str) -> None:
    """SitesError naming the first bad index and value, and how many there are; nothing where all is well."""
    if not bad.any():
        return
    index = tuple(int(i) for i in np.argwhere(bad)[0])
    raise SitesError(
        f"{name}, index {index}: came {values[index]:g}; expected {expected}; {advice} ({int(bad.sum())} such in all)"
    )
