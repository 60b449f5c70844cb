"""Unit words, conversions and physical constants; every name's unit suffix is one of those below.

=============== =====================================================
suffix          meaning
=============== =====================================================
_kw             electric power, mean over the interval
_kwh            electric energy
_kw_th          cooling (thermal) power
_kwh_th         cooling energy; tank inventory
_c              temperature, degC
_k              temperature difference, K
_kw_per_k       heat-loss or coupling coefficient of a zone
_kwh_per_k      heat capacity of a zone node
_h, _minutes    time
_per_kwh        money per electric kWh, in the fleet's currency
_fraction       0 to 1
=============== =====================================================
"""

from typing import Any, Final, TypeAlias

import numpy as np
from numpy.typing import NDArray

Floats: TypeAlias = NDArray[np.float64]
Ints: TypeAlias = NDArray[np.int64]
Bools: TypeAlias = NDArray[np.bool_]
Strings: TypeAlias = NDArray[np.object_]
Times: TypeAlias = NDArray[np.datetime64]
FloatLike: TypeAlias = "float | Floats"
AnyArray: TypeAlias = NDArray[Any]

KW_TH_PER_TON: Final = 3.516853
"""1 US ton of refrigeration = 12 000 Btu/h (international table Btu) = 3.516853 kW."""

LATENT_HEAT_OF_ICE_KJ_PER_KG: Final = 333.55
"""Latent heat of fusion of water at 0 degC (CRC Handbook, from memory; IAPWS ice and water give 333.43)."""

SECONDS_PER_HOUR: Final = 3600.0


def ton_to_kw_th(ton: FloatLike) -> FloatLike:
    """Cooling power in kW_th from US tons of refrigeration; any shape."""
    return ton * KW_TH_PER_TON


def kw_th_to_ton(kw_th: FloatLike) -> FloatLike:
    """US tons of refrigeration from cooling power in kW_th (also ton-hours from kWh_th); any shape."""
    return kw_th / KW_TH_PER_TON


def c_to_f(celsius: FloatLike) -> FloatLike:
    """Degrees Fahrenheit from degrees Celsius; any shape."""
    return celsius * 1.8 + 32.0


def f_to_c(fahrenheit: FloatLike) -> FloatLike:
    """Degrees Celsius from degrees Fahrenheit; any shape."""
    return (fahrenheit - 32.0) / 1.8


def total(per_unit: Floats) -> Floats:
    """Sum over the last axis, (..., unit) -> (...): machines or tanks of a row (einsum, fast on short axes)."""
    summed: Floats = np.einsum("...u->...", per_unit)
    return summed
