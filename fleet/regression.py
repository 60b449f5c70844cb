"""Time-of-week-and-temperature regression: one level per weekday and slot, slopes in the dry bulb, per site.

Owns the fit and its range. Which days it is fitted on, and what is made of the result, is baseline.py's.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from sites.units import Bools, Floats, Ints

WEEK_DAYS = 7


@dataclass(frozen=True)
class Fit:
    """Fitted coefficients of many sites; NaN where a weekday and slot has no reading."""

    level_kw: Floats
    """(site, weekday, slot) load at components of zero"""
    slope_kw: Floats
    """(site, component) kW per K within each stretch of dry bulb"""
    knots_c: tuple[float, ...]
    lowest_c: Floats
    """(site,) training range; NaN where there is none"""
    highest_c: Floats

    def at(self, weekday: Ints, slot: Ints, dry_bulb_c: Floats) -> Floats:
        """kW (site, interval) for weekday and slot (interval,) and dry_bulb_c (site, interval)."""
        drop = (components(dry_bulb_c, self.knots_c) * self.slope_kw[:, None, :]).sum(axis=-1)
        found: Floats = self.level_kw[:, weekday, slot] + drop
        return found

    def beyond_k(self, dry_bulb_c: Floats) -> Floats:
        """(site,) how far the hottest or coldest of dry_bulb_c (site, interval) lies outside the training range."""
        over = np.maximum(dry_bulb_c - self.highest_c[:, None], self.lowest_c[:, None] - dry_bulb_c)
        found: Floats = np.maximum(over.max(axis=1, initial=-np.inf), 0.0)
        return found


def components(dry_bulb_c: Floats, knots_c: Sequence[float]) -> Floats:
    """Dry bulb in stretches between knots, last axis added: their sum is the dry bulb, each moves in its own."""
    edges = np.array(knots_c)
    low = np.concatenate([[0.0], edges])
    high = np.append(edges, np.inf)
    floor = np.append(-np.inf, np.zeros(len(edges)))
    found: Floats = np.clip(dry_bulb_c[..., None] - low, floor, high - low)
    return found


def fit(day_kw: Floats, used: Bools, weekday: Ints, dry_bulb_c: Floats, knots_c: tuple[float, ...]) -> Fit:
    """Least squares over the used days: kW = level(weekday, slot) + slopes . components(dry bulb).

    day_kw, dry_bulb_c (site, day, slot), NaN = not known; used (site, day); weekday (day,), 0 = Monday. Levels
    are taken out first (Frisch and Waugh 1933; Lovell 1963): the slopes fitted on deviations from the means of
    each weekday and slot are those of the full matrix of dummies. Slopes without any spread are zero.
    """
    held = used[:, :, None] & ~np.isnan(day_kw) & ~np.isnan(dry_bulb_c)
    kw = np.where(held, day_kw, 0.0)
    parts = np.where(held[..., None], components(np.where(held, dry_bulb_c, 0.0), knots_c), 0.0)
    sites, _, slots = day_kw.shape
    size = parts.shape[-1]
    gram, right = np.zeros((sites, size, size)), np.zeros((sites, size))
    mean_kw = np.full((sites, WEEK_DAYS, slots), np.nan)
    mean_parts = np.zeros((sites, WEEK_DAYS, slots, size))
    for which in range(WEEK_DAYS):
        days = np.flatnonzero(weekday == which)
        one = held[:, days]
        count = one.sum(axis=1)
        safe = np.maximum(count, 1)
        level = kw[:, days].sum(axis=1) / safe
        centre = parts[:, days].sum(axis=1) / safe[..., None]
        off_kw = np.where(one, kw[:, days] - level[:, None], 0.0)
        off = np.where(one[..., None], parts[:, days] - centre[:, None], 0.0)
        gram += np.einsum("sdli,sdlj->sij", off, off)
        right += np.einsum("sdli,sdl->si", off, off_kw)
        mean_kw[:, which] = np.where(count > 0, level, np.nan)
        mean_parts[:, which] = centre
    slope = (np.linalg.pinv(gram, rcond=1e-10, hermitian=True) @ right[..., None])[..., 0]
    any_held = held.any(axis=(1, 2))
    low = np.where(held, dry_bulb_c, np.inf).min(axis=(1, 2), initial=np.inf)
    high = np.where(held, dry_bulb_c, -np.inf).max(axis=(1, 2), initial=-np.inf)
    return Fit(
        level_kw=mean_kw - (mean_parts * slope[:, None, None, :]).sum(axis=-1),
        slope_kw=slope,
        knots_c=knots_c,
        lowest_c=np.where(any_held, low, np.nan),
        highest_c=np.where(any_held, high, np.nan),
    )
