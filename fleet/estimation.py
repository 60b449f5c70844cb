"""Gaps of readings estimated by their length, and spikes told: what validation adds to a stream.

Owns straight lines and like days, and their limits: no line crosses a break, no like day stands in for the event.
Leaves the streams themselves to meters.py and the use of an estimate to settle.py.
"""

from dataclasses import replace
from typing import Final

import numpy as np

from fleet.meters import EDITED, LIKE_DAY, LINE, Codes, LocalGrid, Streams, by_local_day
from sites.units import Bools, Floats, Ints

LONGEST_LINE_MINUTES: Final = 120
"""Gaps up to 2 h are filled by a straight line (common practice)."""
LIKE_DAYS: Final = 3
"""Longer ones by the mean of three like days (from memory of utility practice)."""


def estimate(
    found: Streams, breaks: Ints, shut: Bools, day_class: Ints, event_day: Bools, grid: LocalGrid
) -> Streams:
    """Gaps up to 2 h by a straight line, longer ones by the mean of the three like days before.

    breaks (row, interval): a running number that changes where an event starts or ends; no line joins two
    readings of different number. shut (row, interval): no like-day estimate here (the event). day_class (day,):
    like days share it. event_day (row, day): days that serve as no pattern. What cannot be filled stays missing.
    """
    rows = np.flatnonzero(np.isnan(found.kw).any(axis=1))
    kw, quality = found.kw, found.quality
    if len(rows):
        kw, quality = kw.copy(), quality.copy()
        kw[rows], quality[rows] = _filled(found, rows, breaks[rows], shut[rows], day_class, event_day, grid)
    lined, liked = quality == LINE, quality == LIKE_DAY
    counts = {
        **found.counts,
        "estimated_line": int(lined.sum()),
        "estimated_like_day": int(liked.sum()),
        "still_missing": int(np.isnan(kw).sum()),
    }
    return replace(found, kw=kw, quality=quality, counts=counts)


def _filled(
    found: Streams, rows: Ints, breaks: Ints, shut: Bools, day_class: Ints, event_day: Bools, grid: LocalGrid
) -> tuple[Floats, Codes]:
    """Values and quality of the rows that have gaps (gap row, interval)."""
    given_kw, given = found.kw[rows], found.quality[rows]
    kw, quality = _line(given_kw, given, breaks, LONGEST_LINE_MINUTES // found.clock.step_minutes)
    day_kw, day_quality = by_local_day(given_kw, given, grid)
    pattern = _like_day_mean(np.where(day_quality <= EDITED, day_kw, np.nan), day_class, event_day[rows])
    guess = pattern[:, grid.day, grid.slot]
    fill = np.isnan(kw) & ~np.isnan(guess) & ~shut
    return np.where(fill, guess, kw), np.where(fill, np.int8(LIKE_DAY), quality)


def _line(kw: Floats, quality: Codes, breaks: Ints, longest: int) -> tuple[Floats, Codes]:
    """Straight lines between readings at most `longest` missing intervals apart, within one number of breaks."""
    count = kw.shape[1]
    at = np.arange(count)
    read = ~np.isnan(kw) & (quality <= EDITED)
    left = np.maximum.accumulate(np.where(read, at, -1), axis=1)
    right = np.minimum.accumulate(np.where(read, at, count)[:, ::-1], axis=1)[:, ::-1]
    held = (left >= 0) & (right < count) & (right - left - 1 <= longest) & np.isnan(kw)
    left, right = np.where(held, left, 0), np.where(held, right, 0)
    rows = np.arange(len(kw))[:, None]
    held &= breaks[rows, left] == breaks[rows, right]
    share = (at - left) / np.maximum(right - left, 1)
    line = kw[rows, left] + (kw[rows, right] - kw[rows, left]) * share
    return np.where(held, line, kw), np.where(held, np.int8(LINE), quality)


def _like_day_mean(read_kw: Floats, day_class: Ints, event_day: Bools) -> Floats:
    """Mean of the last three like days with a reading at the slot, for each (row, day, slot); NaN if fewer."""
    rows, _, slots = read_kw.shape
    mean = np.full(read_kw.shape, np.nan)
    for kind in np.unique(day_class):
        recent = np.full((LIKE_DAYS, rows, slots), np.nan)
        for day in np.flatnonzero(day_class == kind):
            mean[:, day] = recent.mean(axis=0)
            new = ~np.isnan(read_kw[:, day]) & ~event_day[:, day, None]
            shifted = np.concatenate([read_kw[None, :, day], recent[:-1]])
            recent = np.where(new, shifted, recent)
    return mean


def spikes(day_kw: Floats) -> Bools:
    """Rows (row, slot) of which (highest - third highest) / third highest is above 1.80: flagged, never edited.

    From memory of utility validation rules; a chiller's restart or ice charging can trip it.
    """
    ranked = np.sort(np.where(np.isnan(day_kw), -np.inf, day_kw), axis=1)
    highest, third = ranked[:, -1], ranked[:, -3]
    usable = third > 0.0
    found: Bools = usable & (np.where(usable, highest, 0.0) - np.where(usable, third, 0.0) > 1.8 * third)
    return found
