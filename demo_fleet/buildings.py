"""Invented buildings: their kinds, size, hours, thermal mass, and how cooling load and other load follow the day.

Owns the building side of the sites table and the load shapes; the plant is plants.py's. Numbers are ordinary
for such buildings (common practice, no source). Axes: site N, interval T.
"""

from dataclasses import dataclass
from importlib.resources import files
from typing import Any, Final

import numpy as np
import pandas as pd

from demo_fleet.calendar import Local
from demo_fleet.weather import DESIGN_C
from sites.units import Floats

BALANCE_C: Final = 15.0
"""Dry bulb below which weather brings no cooling load."""


@dataclass(frozen=True)
class Kind:
    """One kind of building."""

    peak_kw_th: tuple[float, float]
    cooling_w_per_m2: float
    inside: float
    """share of the design load from people, lights and equipment"""
    sun: float
    base: float
    """share of `inside` and of ventilation that stays outside occupied hours"""
    hours: tuple[float, float]
    all_week: bool
    rest_w_per_m2: float
    rest_night: float
    critical: float = 0.0
    """share of the peak that is always served"""
    no_unmet: bool = False


KINDS: Final = {
    "office": Kind((900.0, 3400.0), 88.0, 0.42, 0.14, 0.12, (8.0, 20.0), False, 24.0, 0.30),
    "school": Kind((600.0, 1500.0), 80.0, 0.48, 0.12, 0.08, (7.0, 18.0), False, 15.0, 0.25),
    "hotel": Kind((900.0, 2600.0), 75.0, 0.30, 0.18, 0.75, (0.0, 24.0), True, 20.0, 0.65),
    "courthouse": Kind((900.0, 2300.0), 82.0, 0.40, 0.14, 0.12, (8.0, 19.0), False, 20.0, 0.30),
    "concert_hall": Kind((700.0, 2000.0), 120.0, 0.55, 0.04, 0.10, (10.0, 23.0), True, 18.0, 0.30),
    "hospital": Kind((2400.0, 3950.0), 110.0, 0.38, 0.10, 0.72, (0.0, 24.0), True, 38.0, 0.75, 0.25, True),
    "laboratory": Kind((1300.0, 3200.0), 160.0, 0.40, 0.06, 0.55, (7.0, 20.0), False, 45.0, 0.60, 0.20),
    "retail": Kind((800.0, 2800.0), 95.0, 0.46, 0.10, 0.06, (9.0, 21.0), True, 26.0, 0.20),
    "other": Kind((500.0, 2000.0), 90.0, 0.42, 0.12, 0.15, (7.0, 19.0), False, 22.0, 0.30),
}


def mix(sites: int) -> pd.DataFrame:
    """The plan of each site, one row per site: forty rows of mix.csv, repeated for larger fleets."""
    text = files("demo_fleet").joinpath("mix.csv")
    with text.open("r", encoding="utf-8") as stream:
        plan = pd.read_csv(stream, keep_default_na=False)
    return plan.iloc[np.arange(sites) % len(plan)].reset_index(drop=True)


def _each(types: "pd.Series[Any]", field: str) -> Floats:
    return np.array([getattr(KINDS[name], field) for name in types], dtype=np.float64)


def buildings(plan: pd.DataFrame, rng: np.random.Generator) -> pd.DataFrame:
    """Building columns of the sites table, one row per row of `plan`."""
    types = plan["building_type"]
    count = len(plan)
    low = np.array([KINDS[name].peak_kw_th[0] for name in types])
    high = np.array([KINDS[name].peak_kw_th[1] for name in types])
    peak = np.round(low * (high / low) ** rng.beta(1.6, 1.3, count), -1)
    area = np.round(1000.0 * peak / (_each(types, "cooling_w_per_m2") * rng.uniform(0.9, 1.1, count)), -1)
    number = types.groupby(types).cumcount() + 1
    heavy = rng.uniform(0.8, 1.3, count)
    return pd.DataFrame(
        {
            "site_id": types.str.replace("_", "-") + "-" + number.astype(str).str.zfill(2),
            "building_type": types,
            "floor_area_m2": area,
            "peak_cooling_kw_th": peak,
            "critical_kw_th": np.round(peak * _each(types, "critical"), -1),
            "no_unmet": _each(types, "no_unmet") > 0.0,
            "occupied_from_hour": [KINDS[name].hours[0] for name in types],
            "occupied_to_hour": [KINDS[name].hours[1] for name in types],
            "occupied_all_week": _each(types, "all_week") > 0.0,
            "air_kwh_per_k": np.round(0.006 * area * heavy, 2),
            "mass_kwh_per_k": np.round(0.020 * area * heavy, 1),
            "coupling_kw_per_k": np.round(0.009 * area * rng.uniform(0.85, 1.15, count), 2),
            "envelope_kw_per_k": np.round(0.001 * area * rng.uniform(0.8, 1.3, count), 2),
            "rise_limit_k": np.where(
                types.isin(["hospital", "laboratory"]), 1.5, rng.choice([2.0, 2.5], count)
            ),
        }
    )


def occupancy(sites: pd.DataFrame, local: Local, resting: float = 0.12) -> Floats:
    """People and equipment as a share of their busiest, (N, T): ramps of 1.5 and 2 h at the edges of the day."""
    start = sites["occupied_from_hour"].to_numpy(dtype=np.float64)[:, None]
    end = sites["occupied_to_hour"].to_numpy(dtype=np.float64)[:, None]
    all_week = sites["occupied_all_week"].to_numpy(dtype=np.bool_)[:, None]
    hour = local.hour[None, :]
    open_all_day = (end - start) >= 24.0
    ramp = np.minimum(
        np.clip((hour - start + 0.5) / 1.5, 0.0, 1.0), np.clip((end + 0.5 - hour) / 2.0, 0.0, 1.0)
    )
    wave = 0.85 + 0.15 * np.cos(2.0 * np.pi * (hour - 16.0) / 24.0)
    day = np.where(open_all_day, wave, ramp)
    return np.where(all_week | ~local.resting[None, :], day, resting * day)


def load_share(sites: pd.DataFrame, local: Local, dry_bulb_c: Floats) -> Floats:
    """Cooling load as a share of the design load, (N, T), before scaling to the design day; dry bulb (N, T)."""
    types = sites["building_type"]
    inside = _each(types, "inside")[:, None]
    sun = _each(types, "sun")[:, None]
    base = _each(types, "base")[:, None]
    open_share = base + (1.0 - base) * occupancy(sites, local)
    height = np.clip(np.sin(np.pi * (local.hour - 6.5) / 13.5), 0.0, 1.0)[None, :]
    felt = np.clip((_slow(dry_bulb_c) - BALANCE_C) / (DESIGN_C - BALANCE_C), 0.0, 1.15)
    air = (1.0 - inside - sun) * felt * (0.2 + 0.8 * open_share)
    return np.asarray(inside * open_share * (0.55 + 0.45 * felt) + sun * height * (0.3 + 0.7 * felt) + air)


def _slow(dry_bulb_c: Floats, quarters: int = 6) -> Floats:
    """Mean of the last `quarters` intervals: walls and ducts are slower than air, (N, T)."""
    padded = np.concatenate([np.repeat(dry_bulb_c[:, :1], quarters - 1, axis=1), dry_bulb_c], axis=1)
    total = np.cumsum(np.concatenate([np.zeros((len(padded), 1)), padded], axis=1), axis=1)
    return np.asarray((total[:, quarters:] - total[:, :-quarters]) / quarters)


def design_day(sites: pd.DataFrame) -> tuple[Local, Floats, Floats]:
    """The design day: its hours (96), dry bulb (96) and load (N, 96) that peaks at peak_cooling_kw_th."""
    local, dry = _design_hours()
    return local, dry, load_share(sites, local, np.tile(dry, (len(sites), 1))) * scale(sites)[:, None]


def _design_hours() -> tuple[Local, Floats]:
    hour = np.arange(96) / 4.0
    local = Local(hour, np.full(96, 2), np.zeros(96, dtype=np.int64), np.zeros(96, dtype=np.bool_))
    return local, DESIGN_C - 6.0 + 6.0 * np.cos(2.0 * np.pi * (hour - 15.3) / 24.0)


def scale(sites: pd.DataFrame) -> Floats:
    """kW_th per unit of load_share, (N,), so that the design day peaks at peak_cooling_kw_th."""
    local, dry = _design_hours()
    most = load_share(sites, local, np.tile(dry, (len(sites), 1))).max(axis=1)
    return np.asarray(sites["peak_cooling_kw_th"].to_numpy(dtype=np.float64) / most)


def rest_kw(sites: pd.DataFrame, local: Local) -> Floats:
    """The rest of the building, (N, T), before noise."""
    types = sites["building_type"]
    day = (
        _each(types, "rest_w_per_m2")[:, None]
        * sites["floor_area_m2"].to_numpy(dtype=np.float64)[:, None]
        / 1000.0
    )
    night = _each(types, "rest_night")[:, None]
    return np.asarray(day * (night + (1.0 - night) * occupancy(sites, local, resting=0.1)))
