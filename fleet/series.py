"""Tables of time series onto the clock: one row per key, one column per interval, coarse rows carried forward.

Owns the pivot and the counting; whether a gap is refused or filled from elsewhere is assemble.py's to decide.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd

from fleet.errors import Problem
from fleet.wall_time import local_text
from sites.clock import Clock
from sites.units import Bools, Floats, Ints, Strings

LONGEST_CARRY_MINUTES: Final = 60
MOST_NAMED: Final = 20


@dataclass(frozen=True)
class Series:
    """Values of each column on the clock, shape (key, interval); NaN where `covered` is False or the cell empty."""

    key: Strings
    values: dict[str, Floats]
    covered: Bools
    """(key, interval) a row of the table stands for it"""
    has_rows: Bools
    """(key,) the table has a row of the key at any time"""
    carried: int
    """intervals that took the value of a coarser row they lie in"""


def on_clock(frame: pd.DataFrame, key: str, columns: tuple[str, ...], keys: Strings, clock: Clock) -> Series:
    """`columns` of a table (key, interval_start in UTC, one row per pair) for `keys` (key,) on `clock`.

    A row coarser than the clock's step stands for its own interval, at most an hour: as long as the closest two
    rows of its key lie apart. Nothing is carried over a gap.
    """
    code = pd.Index(keys).get_indexer(pd.Index(frame[key]))
    times = frame["interval_start"].dt.tz_convert("UTC").dt.tz_localize(None).to_numpy()
    step = np.int64(clock.step.astype(np.int64))
    offset = times.astype("datetime64[us]").astype(np.int64) - clock.start.astype(np.int64)
    rows = np.flatnonzero(code >= 0)
    code, place = code[rows], offset[rows] // step
    has_rows = np.zeros(len(keys), dtype=bool)
    has_rows[code] = True
    most = LONGEST_CARRY_MINUTES // clock.step_minutes
    length = _length_steps(code, place, len(keys), most)
    source = np.full((len(keys), clock.count + most), -1, dtype=np.int64)
    near = (place >= -most) & (place < clock.count)
    source[code[near], place[near] + most] = rows[near]
    carried = source.copy()
    for shift in range(1, most):
        free = (carried[:, shift:] < 0) & (source[:, :-shift] >= 0) & (length > shift)[:, None]
        carried[:, shift:] = np.where(free, source[:, :-shift], carried[:, shift:])
    taken, own = carried[:, most:], source[:, most:]
    covered = taken >= 0
    values = {
        name: np.append(frame[name].to_numpy(dtype=np.float64, na_value=np.nan), np.nan)[taken]
        for name in columns
    }
    return Series(keys, values, covered, has_rows, int((covered & (own < 0)).sum()))


def _length_steps(code: Ints, place: Ints, keys: int, most: int) -> Ints:
    """(key,) steps a row stands for: the least distance of two rows of the key, between 1 and `most`.

    A key with a single row takes the least distance in the whole table; 1 where there is none.
    """
    order = np.lexsort((place, code))
    apart = np.diff(place[order])
    same = (np.diff(code[order]) == 0) & (apart > 0)
    least = np.full(keys, np.iinfo(np.int64).max)
    np.minimum.at(least, code[order][1:][same], apart[same])
    known = least < np.iinfo(np.int64).max
    fallback = least[known].min() if known.any() else 1
    length: Ints = np.clip(np.where(known, least, fallback), 1, most)
    return length


def gaps(
    lacking: Bools, keys: Strings, clock: Clock, table: str, column: str, timezone: str
) -> list[Problem]:
    """A Problem for each key that lacks intervals, shape (key, interval), saying from when to when.

    The first keys are named, the rest counted in the last.
    """
    faulty = np.flatnonzero(lacking.any(axis=1))
    horizon = f"{local_text(clock.start, timezone)} to {local_text(clock.end, timezone)}"
    more, problems = len(faulty) - MOST_NAMED, []
    for turn, at in enumerate(faulty[:MOST_NAMED], start=1):
        missing = np.flatnonzero(lacking[at])
        first = local_text(clock.starts[missing[0]], timezone)
        last = local_text(clock.starts[missing[-1]] + clock.step, timezone)
        came = f"no value for {keys[at]} in {len(missing)} intervals from {first} to {last}"
        came += f" (and {more} more like it)" if turn == MOST_NAMED and more > 0 else ""
        advice = "add the rows, or ask for a time that is covered"
        problems.append(Problem(table, None, column, came, f"values over the horizon, {horizon}", advice))
    return problems
