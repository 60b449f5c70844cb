"""How hard to look for an answer: work that is counted, and a moment by which an answer is wanted, if there is one.

Without a moment nothing here reads a clock, and the same inputs give the same answer on any load.
"""

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

from fleet.choice import LEAST_SECONDS
from fleet.choices import Work


@dataclass(frozen=True)
class Effort:
    """How many narrow models, whether the whole one too, and by when to stop (stopwatch seconds)."""

    models: int = 5
    whole: bool = True
    until: float | None = None
    stopwatch: Callable[[], float] = time.perf_counter

    @property
    def over(self) -> bool:
        """Time is up; never where no moment is given."""
        return self.until is not None and self.stopwatch() >= self.until

    def has(self, seconds: float) -> bool:
        """So much time is left; always where no moment is given."""
        return self.until is None or self.until - self.stopwatch() >= seconds

    def stop(self) -> bool:
        """The same, to be asked again and again."""
        return self.over

    def work(self, nodes: int, checks: int, share: float = 1.0) -> Work:
        """Counted work, and that share of the time that is left where time matters."""
        if self.until is None:
            return Work(nodes, checks)
        return Work(nodes, checks, max(share * (self.until - self.stopwatch()), LEAST_SECONDS))

    def sooner(self, share: float) -> "Effort":
        """The same with a share of the time that is left."""
        if self.until is None:
            return self
        now = self.stopwatch()
        return Effort(self.models, self.whole, now + share * max(self.until - now, 0.0), self.stopwatch)


STEADY: Final = Effort()
"""Counted work alone."""


def within(
    seconds: float | None, stopwatch: Callable[[], float] = time.perf_counter, rough: bool = False
) -> Effort:
    """An effort that ends after so many seconds; None: counted work alone. rough: one narrow model at most."""
    models, whole = (1, False) if rough else (Effort.models, Effort.whole)
    until = None if seconds is None else stopwatch() + seconds
    return Effort(models, whole, until, stopwatch)
