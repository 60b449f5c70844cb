"""Cooling load from a site's own past: a level for each hour of the week, slopes in outdoor temperature.

Owns the regression, its goodness, its spread and how far a forecast lies beyond what it was trained on. Which hours
count, and where the past comes from, is the caller's. Axes: site N, hour T, hour of the week W = 168.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from sites.errors import SitesError
from sites.load import SEGMENT_BOUNDS_F, segments_k
from sites.roster import Rows
from sites.units import Bools, Floats, Ints, f_to_c

WEEK_HOURS: Final = 168
SEGMENT_BOUNDS_C: Final = tuple(float(f_to_c(bound)) for bound in SEGMENT_BOUNDS_F)
CV_LIMIT: Final = 0.30
NMBE_LIMIT: Final = 0.10
"""Hourly limits of ASHRAE Guideline 14."""


@dataclass(frozen=True)
class LoadFit(Rows):
    """Fitted loads of N sites; NaN levels where an hour of the week was never seen."""

    level_kw_th: Floats
    """(N, W) load at features of zero"""
    slope_kw_th_per_k: Floats
    """(N, 2, segment) unoccupied, occupied"""
    lowest_c: Floats
    """(N,) training range; NaN where nothing was seen"""
    highest_c: Floats
    hours: Ints
    """(N,) hours seen"""
    parameters: Ints
    """(N,) levels and slopes that they determine"""
    spread_kw_th: Floats
    """(N,) standard deviation of what the fit leaves over, sqrt(sum e^2 / (n - p))"""
    cv_rmse: Floats
    """(N,) that over the mean; NaN where there are no more hours than parameters"""
    nmbe: Floats

    @property
    def is_good(self) -> Bools:
        """(N,) within the hourly limits of ASHRAE Guideline 14."""
        good: Bools = (self.cv_rmse <= CV_LIMIT) & (np.abs(self.nmbe) <= NMBE_LIMIT)
        return good

    def at(self, week_hour: Ints, occupied: Bools, dry_bulb_c: Floats) -> Floats:
        """Load (N, T), not below 0, at hours of the week (T,), occupied and dry bulb (N, T).

        An hour of the week that was never seen takes the mean level of those that were.
        """
        seen = np.isfinite(self.level_kw_th)
        mean = np.where(seen, self.level_kw_th, 0.0).sum(axis=1) / np.maximum(seen.sum(axis=1), 1)
        level = np.where(seen, self.level_kw_th, mean[:, None])
        slope = np.where(occupied[..., None], *(self.slope_kw_th_per_k[:, mode, None, :] for mode in (1, 0)))
        driven = (segments_k(dry_bulb_c, SEGMENT_BOUNDS_C) * slope).sum(axis=-1)
        return np.asarray(np.maximum(level[:, week_hour] + driven, 0.0))

    def beyond_k(self, dry_bulb_c: Floats) -> Floats:
        """(N,) how far the hottest or coldest of dry_bulb_c (N, T) lies outside the training range; 0 inside."""
        over = np.maximum(dry_bulb_c - self.highest_c[:, None], self.lowest_c[:, None] - dry_bulb_c)
        return np.asarray(np.maximum(over.max(axis=1, initial=-np.inf), 0.0))


def fit_load(load_kw_th: Floats, week_hour: Ints, occupied: Bools, dry_bulb_c: Floats) -> LoadFit:
    """Time-of-week-and-temperature regression (Mathieu, Price, Kiliccote, Piette 2011) of every site, least squares:

    load = level(hour of the week) + slopes(occupied or not) . segments(dry bulb).

    load and dry bulb (N, T), NaN = not known; week_hour (T,) 0 to 167, Monday's first hour is 0; occupied (N, T).
    Levels are taken out first (Frisch and Waugh 1933; Lovell 1963), so that the slopes are those of the full matrix of
    dummies; slopes that the data do not determine are the shortest vector. Goodness is that of ASHRAE Guideline 14.
    Raises SitesError for an hour outside the week.
    """
    if ((week_hour < 0) | (week_hour >= WEEK_HOURS)).any():
        raise SitesError(f"week_hour: came {week_hour.min()} to {week_hour.max()}; expected 0 to 167")
    held = np.isfinite(load_kw_th) & np.isfinite(dry_bulb_c)
    load = np.where(held, load_kw_th, 0.0)
    features = _features(np.where(held, dry_bulb_c, 0.0), occupied) * held[..., None]
    at_hour = (week_hour[:, None] == np.arange(WEEK_HOURS)).astype(np.float64)
    count = held @ at_hour
    mean_load = _over(load @ at_hour, count)
    mean_features = _over(np.einsum("ntf,tw->nwf", features, at_hour, optimize=True), count[..., None])
    rest = (load - mean_load[:, week_hour]) * held
    spread = (features - mean_features[:, week_hour]) * held[..., None]
    gram = np.einsum("ntf,ntg->nfg", spread, spread, optimize=True)
    slope = (
        np.linalg.pinv(gram, rcond=1e-10, hermitian=True) @ np.einsum("ntf,nt->nf", spread, rest)[..., None]
    )
    slope = slope[..., 0]
    error = rest - (spread * slope[:, None, :]).sum(axis=-1)
    hours = held.sum(axis=1)
    rank = np.linalg.matrix_rank(gram, hermitian=True, rtol=1e-10)
    parameters = (count > 0).sum(axis=1) + rank
    freedom = np.where(hours > parameters, hours - parameters, np.nan)
    mean = _over(load.sum(axis=1), hours)
    left = np.sqrt((error * error).sum(axis=1) / freedom)
    positive = np.where(mean > 0.0, mean, np.nan)
    level = mean_load - (mean_features * slope[:, None, :]).sum(axis=-1)
    return LoadFit(
        level_kw_th=np.where(count > 0, level, np.nan),
        slope_kw_th_per_k=slope.reshape(len(load), 2, -1),
        lowest_c=_edge(dry_bulb_c, held, np.fmin, np.inf),
        highest_c=_edge(dry_bulb_c, held, np.fmax, -np.inf),
        hours=hours.astype(np.int64),
        parameters=parameters.astype(np.int64),
        spread_kw_th=left,
        cv_rmse=left / positive,
        nmbe=error.sum(axis=1) / freedom / positive,
    )


def _features(dry_bulb_c: Floats, occupied: Bools) -> Floats:
    """Temperature segments (N, T, 2 x segment): those of unoccupied hours, then those of occupied ones."""
    segments = segments_k(dry_bulb_c, SEGMENT_BOUNDS_C)
    return np.concatenate([segments * ~occupied[..., None], segments * occupied[..., None]], axis=-1)


def _over(sums: Floats, count: Floats | Ints) -> Floats:
    """Means from sums, 0 where nothing was counted."""
    return np.asarray(sums / np.maximum(count, 1))


def _edge(dry_bulb_c: Floats, held: Bools, pick: np.ufunc, start: float) -> Floats:
    """(N,) lowest or highest temperature seen; NaN where there is none."""
    edge = pick.reduce(np.where(held, dry_bulb_c, start), axis=1, initial=start)
    return np.where(held.any(axis=1), edge, np.nan)
