"""Where a settlement's readings come from, given out for some sites at a time.

Owns the sources: a frame in memory, and a frame that takes the place of another source's rows. A source of its own
kind (see meter_groups.py) gives the same. Leaves the values to meters.py.
"""

from collections.abc import Callable, Sequence
from itertools import pairwise
from typing import Final, Protocol

import numpy as np
import pandas as pd

from sites.units import Bools, Ints

KEY: Final = ["meter_id", "interval_start"]


class Readings(Protocol):
    """Readings of a fleet that can be given out by meters."""

    def pieces(self, meter_ids: Sequence[str]) -> Ints:
        """(meter,) number of the piece of the source that holds it; meters of one are best asked for together."""

    def parts(self, meter_ids: Sequence[Sequence[str]]) -> list[Callable[[], pd.DataFrame]]:
        """For each group of meters how to get its readings (meter_id, interval_start, kw, quality).

        Readings of meters in none of the groups come with the first one, where they are checked.
        """


class FrameReadings:
    """Readings in memory."""

    def __init__(self, frame: pd.DataFrame) -> None:
        self._frame = frame

    def pieces(self, meter_ids: Sequence[str]) -> Ints:
        """See Readings; one piece."""
        return np.zeros(len(meter_ids), dtype=np.int64)

    def parts(self, meter_ids: Sequence[Sequence[str]]) -> list[Callable[[], pd.DataFrame]]:
        """See Readings."""
        if len(meter_ids) == 1:
            return [lambda: self._frame]
        group = _group_of_rows(self._frame["meter_id"], meter_ids)
        order = np.argsort(group, kind="stable")
        edges = np.searchsorted(group[order], np.arange(len(meter_ids) + 1))
        rows = [order[start:end] for start, end in pairwise(edges)]
        return [_later(self._frame, own) for own in rows]


def _group_of_rows(meter: pd.Series, meter_ids: Sequence[Sequence[str]]) -> Ints:
    """(row,) which group each row belongs to; 0 for a meter of none."""
    codes, names = pd.factorize(meter)
    number = {name: at for at, own in enumerate(meter_ids) for name in own}
    found: Ints = np.array([*(number.get(name, 0) for name in names), 0], dtype=np.int64)[codes]
    return found


def _later(frame: pd.DataFrame, rows: Ints) -> Callable[[], pd.DataFrame]:
    return lambda: frame.iloc[rows]


class Overlaid:
    """Readings of one source with those of a frame in their place for the same meter and interval.

    `replaced` counts the rows that gave way, once their part has been asked for.
    """

    def __init__(self, under: Readings, over: pd.DataFrame) -> None:
        self._under, self._over, self._counts = under, over, [0]

    @property
    def replaced(self) -> int:
        """Rows of the source below that the frame took the place of, of the parts given out so far."""
        return sum(self._counts)

    def pieces(self, meter_ids: Sequence[str]) -> Ints:
        """See Readings; those of the source below."""
        return self._under.pieces(meter_ids)

    def parts(self, meter_ids: Sequence[Sequence[str]]) -> list[Callable[[], pd.DataFrame]]:
        """See Readings."""
        self._counts = [0] * len(meter_ids)
        pairs = zip(self._under.parts(meter_ids), FrameReadings(self._over).parts(meter_ids))
        return [self._both(at, under, over) for at, (under, over) in enumerate(pairs)]

    def _both(
        self, at: int, under: Callable[[], pd.DataFrame], over: Callable[[], pd.DataFrame]
    ) -> Callable[[], pd.DataFrame]:
        def get() -> pd.DataFrame:
            below, above = under(), over()
            if above.empty:
                return below
            gone = _same_place(below, above)
            self._counts[at] = int(gone.sum())
            return pd.concat([below[~gone], above])

        return get


def _same_place(below: pd.DataFrame, above: pd.DataFrame) -> Bools:
    """(row of below,) `above` has a row of its meter and interval."""
    where = pd.Index(above["meter_id"].unique()).get_indexer(pd.Index(below["meter_id"]))
    found: Bools = np.zeros(len(below), dtype=np.bool_)
    near = np.flatnonzero(where >= 0)
    own = pd.MultiIndex.from_frame(below.iloc[near][KEY].astype({"meter_id": object}))
    found[near] = own.isin(pd.MultiIndex.from_frame(above[KEY].astype({"meter_id": object})))
    return found
