"""A candidate: for every interval, which machines are on and their load limit.

A candidate is a row of stages; in each stage every machine has a load limit as a fraction of what it could
give: 0 is off, 1 is free. A stage may make the tanks charge; in any other they do not. One contiguous block is
one stage. Padding stages have start == end.
"""

from dataclasses import dataclass
from typing import Self

import numpy as np

from sites.roster import Rows
from sites.units import Bools, Floats, Ints


@dataclass(frozen=True)
class Stages(Rows):
    """Stages of each row: start and end (row, stage) as clock indices, limits (row, stage, machine)."""

    start: Ints
    end: Ints
    load_limit_fraction: Floats
    charge: Bools = None  # type: ignore[assignment]
    """(row, stage) True: the tanks charge as hard as they can; none does where it is not given"""

    def __post_init__(self) -> None:
        if self.charge is None:
            object.__setattr__(self, "charge", np.zeros(self.start.shape, dtype=np.bool_))

    def at(self, interval: int) -> tuple[Bools, Floats, Bools]:
        """Rows that are in a stage in this interval (row,), each machine's limit then (row, machine), and rows that
        are made to charge (row,)."""
        inside = (self.start <= interval) & (interval < self.end)
        limit = np.where(inside[:, :, None], self.load_limit_fraction, 1.0).min(axis=1, initial=1.0)
        charge = np.asarray((inside & self.charge).any(axis=1), dtype=np.bool_)
        return np.asarray(inside.any(axis=1), dtype=np.bool_), limit, charge

    def join(self, other: Self) -> Self:
        """Both rows' stages together; where they overlap the lower limit holds."""
        return type(self)(
            np.concatenate([self.start, other.start], axis=1),
            np.concatenate([self.end, other.end], axis=1),
            np.concatenate([self.load_limit_fraction, other.load_limit_fraction], axis=1),
            np.concatenate([self.charge, other.charge], axis=1),
        )

    @property
    def window(self) -> tuple[Ints, Ints]:
        """First start and last end over the real stages of each row; (0, 0) where there is none."""
        real = self.end > self.start
        none = ~real.any(axis=1)
        first = np.where(real, self.start, np.iinfo(np.int64).max).min(axis=1, initial=np.iinfo(np.int64).max)
        last = np.where(real, self.end, 0).max(axis=1, initial=0)
        return np.where(none, 0, first), np.where(none, 0, last)


def no_stages(rows: int, machines: int) -> Stages:
    """Rows with no stage at all: usual operation."""
    return Stages(
        np.zeros((rows, 0), dtype=np.int64),
        np.zeros((rows, 0), dtype=np.int64),
        np.ones((rows, 0, machines)),
    )
