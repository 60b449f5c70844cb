"""Readings that look wrong: flagged for whoever reads the statement, never edited by themselves.

Owns the tests of an event day's readings by stream; each works on (row, slot) of local wall time, NaN = not read.
Spikes are meters.py's. The thresholds are common practice without a source.
"""

from typing import Final

import numpy as np

from sites.units import Bools, Floats

STUCK_H: Final = 4.0
"""The same value other than zero for so long: a meter that stands still."""
SHIFT_SHARE: Final = 0.25
"""A day shifted by an hour fits so much better (share of the squared differences that is left)."""
LEAST_SHIFT_SLOTS: Final = 8


def negative(day_kw: Floats, may_export: Bools) -> Bools:
    """(row,) a reading below zero where no meter of the row can deliver backwards; may_export (row,)."""
    found: Bools = (np.nan_to_num(day_kw) < 0.0).any(axis=1) & ~may_export
    return found


def stuck(day_kw: Floats, step_h: float) -> Bools:
    """(row,) one value other than zero, unchanged for STUCK_H or longer."""
    longest = np.zeros(len(day_kw), dtype=np.int64)
    run = np.ones(len(day_kw), dtype=np.int64)
    for slot in range(1, day_kw.shape[1]):
        same = (day_kw[:, slot] == day_kw[:, slot - 1]) & (day_kw[:, slot] != 0.0)
        run = np.where(same, run + 1, 1)
        longest = np.maximum(longest, run)
    found: Bools = longest * step_h >= STUCK_H
    return found


def shifted_h(day_kw: Floats, usual_kw: Floats, before_slot: int, step_h: float) -> Floats:
    """(row,) hours, -1 or +1, by which the day up to `before_slot` runs late; 0 where it fits as it is.

    usual_kw (row, slot): the mean of like days. Told only where the shifted day leaves at most SHIFT_SHARE of the
    squared differences, so that a day that is merely hotter is not meant.
    """
    shift = round(1.0 / step_h)
    first, last = shift, before_slot - shift
    if last - first < LEAST_SHIFT_SLOTS:
        return np.zeros(len(day_kw))
    left = [
        np.square(day_kw[:, first + move : last + move] - usual_kw[:, first:last]).sum(axis=1)
        for move in (-shift, 0, shift)
    ]
    with_nan = np.isnan(left).any(axis=0)
    early, plain, late = (np.where(with_nan, 1.0, part) for part in left)
    enough = SHIFT_SHARE * plain
    return np.where(late < np.minimum(enough, early), 1.0, np.where(early < enough, -1.0, 0.0))
