"""The true course of days: each site's cooling load and other load, and how its meter wavers.

Load follows weather and time of week; on it lie a noise the city shares and one of the site's own, both
first-order. Axes: site N, interval T.
"""

from dataclasses import dataclass, fields
from typing import Final

import numpy as np
import pandas as pd

from demo_fleet.buildings import load_share, rest_kw, scale
from demo_fleet.calendar import Local
from demo_fleet.files import naive, utc
from demo_fleet.weather import ar1
from sites.units import Floats, Ints, Times

CITY_DEVIATION: Final = 0.018
"""With the sites' own noise errors of two sites correlate at about 0.25."""
KEEP: Final = 0.97
"""Quarter-hour memory: a time constant of about eight hours."""


@dataclass(frozen=True)
class Course:
    """Each (N, T)."""

    cooling_load_kw_th: Floats
    rest_kw: Floats
    plant_factor: Floats
    """metered over modelled plant power"""
    level_kw_th: Floats
    """flat rate of load levelling, as the operator foresaw it"""

    def part(self, start: int, end: int) -> "Course":
        """Intervals from `start` to before `end`."""
        return Course(**{field.name: getattr(self, field.name)[:, start:end] for field in fields(self)})


def city_noise(count: int, rng: np.random.Generator) -> Floats:
    """Noise of load that all sites share, (T,), as a fraction."""
    return np.asarray(ar1(rng, 1, count, KEEP, CITY_DEVIATION)[0])


def course(
    sites: pd.DataFrame,
    hidden: pd.DataFrame,
    local: Local,
    dry_bulb_c: Floats,
    city: Floats,
    rng: np.random.Generator,
    expected_kw_th: Floats | None = None,
    expected_rest_kw: Floats | None = None,
) -> Course:
    """The truth at `local` times under dry bulb (N, T); `expected_` are a forecast to lean on, NaN where none."""
    count = len(local.hour)
    secret = hidden.set_index("site_id").loc[sites["site_id"]]
    wander = secret["noise_fraction"].to_numpy(dtype=np.float64)[:, None]
    usual = expected_load(sites, local, dry_bulb_c)
    if expected_kw_th is not None:
        usual = np.where(np.isnan(expected_kw_th), usual, expected_kw_th)
    usual = usual * secret["load_factor"].to_numpy(dtype=np.float64)[:, None]
    own = ar1(rng, len(sites), count, KEEP, 1.0) * wander * 1.25
    rest = rest_kw(sites, local)
    if expected_rest_kw is not None:
        rest = np.where(np.isnan(expected_rest_kw), rest, expected_rest_kw)
    rest = rest * (1.0 + 0.6 * city[None, :] + ar1(rng, len(sites), count, 0.9, 1.0) * 0.8 * wander)
    factor = 1.0 + ar1(rng, len(sites), count, 0.6, 0.008)
    return Course(usual * (1.0 + city[None, :] + own), rest, factor, level_kw_th(usual, local))


def expected_load(sites: pd.DataFrame, local: Local, dry_bulb_c: Floats) -> Floats:
    """Cooling load by weather and time of week alone, (N, T)."""
    return load_share(sites, local, dry_bulb_c) * scale(sites)[:, None]


def forecast(sites: pd.DataFrame, local: Local, dry_bulb_c: Floats, rng: np.random.Generator) -> Floats:
    """What the sites' forecasts say, (N, T): forecast weather, and an error of each forecaster's own."""
    bias = rng.normal(1.0, 0.025, (len(sites), 1)).clip(0.94, 1.06)
    drift = 1.0 + ar1(rng, len(sites), len(local.hour), 0.985, 0.02)
    return np.asarray(expected_load(sites, local, dry_bulb_c) * bias * drift)


def level_kw_th(load_kw_th: Floats, local: Local) -> Floats:
    """Each local day's mean load, (N, T)."""
    _, day, length = np.unique(local.day, return_inverse=True, return_counts=True)
    slots: Ints = day.astype(np.int64)
    edges = np.concatenate([[0], np.cumsum(length)[:-1]])
    mean = np.add.reduceat(load_kw_th, edges, axis=1) / length[None, :]
    return np.asarray(mean[:, slots])


def table(site_ids: "pd.Series[str]", times: Times, made: Course) -> pd.DataFrame:
    """Course as rows of (site_id, interval_start)."""
    count = len(times)
    columns = {field.name: getattr(made, field.name).ravel() for field in fields(made)}
    keys = {
        "site_id": np.repeat(site_ids.to_numpy(), count),
        "interval_start": utc(np.tile(times, len(site_ids))),
    }
    return pd.DataFrame({**keys, **columns})


def from_table(frame: pd.DataFrame, site_ids: "pd.Series[str]") -> tuple[Times, Course]:
    """Times (T,) and course (N, T) from rows that `table` made."""
    ordered = frame.assign(row=pd.Index(site_ids).get_indexer(pd.Index(frame["site_id"])))
    ordered = ordered.sort_values(["row", "interval_start"], kind="stable")
    shape = (len(site_ids), -1)
    times = naive(ordered["interval_start"]).reshape(shape)[0]
    arrays = {
        field.name: ordered[field.name].to_numpy(dtype=np.float64).reshape(shape) for field in fields(Course)
    }
    return times, Course(**arrays)
