"""The grid of time: UTC, interval start, equal steps. Local wall time never enters here."""

from dataclasses import dataclass

import numpy as np

from sites.errors import SitesError
from sites.units import Times


def as_us(time: np.datetime64) -> np.datetime64:
    """The same time in microseconds, the one resolution used inside."""
    in_us: np.datetime64 = time.astype("datetime64[us]")
    return in_us


@dataclass(frozen=True)
class Clock:
    """Equal intervals from `start` (UTC, microseconds), each `step_minutes` long, `count` of them."""

    start: np.datetime64
    step_minutes: int
    count: int

    def __post_init__(self) -> None:
        if self.step_minutes <= 0 or 60 % self.step_minutes != 0:
            raise SitesError(
                f"step of {self.step_minutes} minutes does not divide the hour; use 5, 10, 15, 30 or 60"
            )
        if self.count <= 0:
            raise SitesError(f"a clock of {self.count} intervals is empty; its end must lie after its start")
        object.__setattr__(self, "start", as_us(self.start))

    @property
    def step(self) -> np.timedelta64:
        """Length of one interval."""
        return np.timedelta64(self.step_minutes * 60_000_000, "us")

    @property
    def step_h(self) -> float:
        """Length of one interval in hours."""
        return self.step_minutes / 60.0

    @property
    def starts(self) -> Times:
        """Start of each interval, shape (interval,), datetime64[us] in UTC."""
        return self.start + np.arange(self.count) * self.step

    @property
    def end(self) -> np.datetime64:
        """End of the last interval."""
        return np.datetime64(self.start + self.count * self.step)

    def index(self, time: np.datetime64) -> int:
        """Index of the interval that starts at `time`; `count` for the clock's end.

        Raises SitesError where `time` is off the grid or outside it.
        """
        offset = as_us(time) - self.start
        whole, rest = divmod(int(offset.astype(np.int64)), int(self.step.astype(np.int64)))
        if rest:
            before = self.start + whole * self.step
            after = before + self.step
            raise SitesError(
                f"{time} is not on the {self.step_minutes}-minute grid; nearest: {before}, {after}"
            )
        if not 0 <= whole <= self.count:
            raise SitesError(f"{time} lies outside {self.start} to {self.end}; widen the horizon")
        return whole


def span(start: np.datetime64, end: np.datetime64, step_minutes: int) -> Clock:
    """Clock from `start` to `end`; SitesError where the end is not a whole number of steps later."""
    minutes = (as_us(end) - as_us(start)) / np.timedelta64(1, "m")
    if minutes <= 0 or minutes % step_minutes:
        raise SitesError(
            f"{start} to {end} is not a whole, positive number of {step_minutes}-minute intervals"
        )
    return Clock(as_us(start), step_minutes, int(minutes // step_minutes))
