"""Where a value lies on a chart, and which values are named at its axes.

Owns round ticks (matplotlib.ticker, the only door to it) and whole local hours. Drawing is figures.py's.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd
from matplotlib.ticker import MaxNLocator

from sites.units import Floats, Times

STEPS: Final = [1.0, 2.0, 2.5, 5.0, 10.0]
HOURS_APART: Final = (1, 2, 3, 6, 12, 24, 48, 168)
MOST_HOURS: Final = 12


@dataclass(frozen=True)
class Scale:
    """A straight line from values low..high to places start..end on the page."""

    low: float
    high: float
    start: float
    end: float

    def __call__(self, values: Floats | float) -> Floats:
        """Places of values, any shape."""
        share = (np.asarray(values, dtype=np.float64) - self.low) / (self.high - self.low)
        found: Floats = self.start + share * (self.end - self.start)
        return found


def round_ticks(low: float, high: float, most: int = 5) -> list[float]:
    """Round numbers from at or below `low` to at or above `high`; a span of nothing gets one of 1."""
    if not high > low:
        high = low + 1.0
    ticks = MaxNLocator(nbins=most, steps=STEPS).tick_values(low, high)
    return [float(tick) for tick in ticks]


def value_scale(low: float, high: float, start: float, end: float) -> tuple[Scale, list[float]]:
    """Scale and ticks that hold low..high, widened to round numbers."""
    ticks = round_ticks(low, high)
    return Scale(ticks[0], ticks[-1], start, end), ticks


def hour_ticks(start: np.datetime64, end: np.datetime64, zone: str) -> list[tuple[pd.Timestamp, bool]]:
    """Whole local hours within start..end (UTC), at most some 12; True where it is the first of its local day."""
    first, last = (pd.Timestamp(time).tz_localize("UTC").tz_convert(zone) for time in (start, end))
    length_h = (last - first) / pd.Timedelta(hours=1)
    apart = next((hours for hours in HOURS_APART if length_h / hours <= MOST_HOURS), HOURS_APART[-1])
    hours = pd.date_range(first.tz_convert("UTC").ceil("h"), last.tz_convert("UTC"), freq="h").tz_convert(
        zone
    )
    kept = hours[(hours.hour % min(apart, 24) == 0) & (hours.minute == 0)]
    if apart > 24:
        kept = kept[:: apart // 24]
    return [(tick, tick.hour == 0) for tick in kept]


def micros(times: Times | np.datetime64) -> Floats:
    """UTC times as numbers (microseconds), for a Scale."""
    found: Floats = np.asarray(times, dtype="datetime64[us]").astype(np.int64).astype(np.float64)
    return found
