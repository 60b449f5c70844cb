"""What is usual for a type of building: the plant's strategy, the hours of people, how heavy it is.

Owns these defaults only; load profiles by type are `sites/load.py`'s. Common practice, no source: each value taken
from here is listed as assumed.
"""

from dataclasses import dataclass
from typing import Any, Final

import pandas as pd


@dataclass(frozen=True)
class Usual:
    """Defaults of one building type; fields but the last are columns of the table of sites."""

    strategy: str
    occupied_from_hour: float
    occupied_to_hour: float
    occupied_all_week: bool
    mass_kwh_per_k_m2: float
    """Heat capacity that couples within hours, per m2 of floor area; stone and concrete hold more."""


USUAL: Final = {
    "office": Usual("chiller_priority", 7.0, 19.0, False, 0.020),
    "school": Usual("storage_priority", 7.0, 16.0, False, 0.030),
    "hotel": Usual("load_levelling", 0.0, 24.0, True, 0.025),
    "courthouse": Usual("chiller_priority", 7.0, 17.0, False, 0.035),
    "concert_hall": Usual("load_levelling", 16.0, 23.0, True, 0.030),
    "hospital": Usual("load_levelling", 0.0, 24.0, True, 0.025),
    "laboratory": Usual("load_levelling", 0.0, 24.0, True, 0.020),
    "retail": Usual("chiller_priority", 9.0, 21.0, True, 0.015),
    "other": Usual("chiller_priority", 7.0, 19.0, False, 0.020),
}
"""By building type of the table of sites."""

USUAL_COLUMNS: Final = ("strategy", "occupied_from_hour", "occupied_to_hour", "occupied_all_week")
"""Columns of the table of sites that take the type's value as it is."""


def usual(building_type: pd.Series, field: str) -> pd.Series:
    """A field of `Usual` for each site's type, missing where the type is."""
    values: dict[str, Any] = {name: getattr(one, field) for name, one in USUAL.items()}
    return building_type.map(values)
