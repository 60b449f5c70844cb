"""The invented fleet's fixed calendar: zone, history, event day, call time, holidays.

Owns the dates and the passage between local wall time and UTC. Everything else asks here.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd

from sites.units import Bools, Floats, Ints, Times

ZONE: Final = "Europe/Athens"
HISTORY_FROM: Final = "2026-02-12"
EVENT_DAY: Final = "2026-07-15"
"""A Wednesday; how hot, the scene says."""
STEP_MINUTES: Final = 15
CYCLE_START: Final = "2026-07-01"
CYCLE_END: Final = "2026-07-31"
HOLIDAYS: Final = (
    ("2026-02-23", "Lanterns' Day"),
    ("2026-03-25", "Founders' Day"),
    ("2026-04-13", "Orchard Monday"),
    ("2026-05-01", "First of May"),
    ("2026-06-01", "Harbour Day"),
    ("2026-08-15", "Midsummer Rest"),
)
TANK_OUT_FROM: Final = "2026-07-06"
TANK_OUT_DAYS: Final = 7


@dataclass(frozen=True)
class Scene:
    """Local hours of a call and its event, the day's warmth, and what energy costs around midday of that day."""

    call_hour: int
    from_hour: int
    to_hour: int
    peak_c: float
    """highest dry bulb of the day, about"""
    sun_price_per_kwh: float | None
    """None: as on any other day"""
    settlement_rule: str


EVENING: Final = Scene(13, 16, 19, 36.0, None, "ten_of_ten")
"""A peak at the end of a hot afternoon."""
MIDDAY: Final = Scene(9, 12, 15, 33.3, -0.03, "high_four_of_five")
"""A day as warm as its season, and more sun than the grid can carry away: who takes energy then is paid for it. Its
rule adds a morning's level to recent days and scales nothing: tanks take up a small part of what a building draws."""


@dataclass(frozen=True)
class Local:
    """Local wall time of instants, each array of the instants' shape."""

    hour: Floats
    """0 to under 24, with fractions"""
    weekday: Ints
    """0 = Monday"""
    day: Ints
    """days since 1970-01-01"""
    holiday: Bools

    @property
    def resting(self) -> Bools:
        """Weekend or holiday."""
        result: Bools = (self.weekday >= 5) | self.holiday
        return result


def midnight(day: str | pd.Timestamp, zone: str = ZONE) -> np.datetime64:
    """UTC instant of local midnight at the start of `day`."""
    stamp = pd.Timestamp(day).normalize().tz_localize(zone).tz_convert("UTC").tz_localize(None)
    return np.datetime64(stamp, "us")


def moment(day: str, hour: float, zone: str = ZONE) -> np.datetime64:
    """UTC instant of a local hour on `day` (no clock change between midnight and that hour)."""
    at: np.datetime64 = midnight(day, zone) + np.timedelta64(round(hour * 3600), "s")
    return at


def next_day(day: str, days: int = 1) -> str:
    """The date `days` later."""
    return str((pd.Timestamp(day) + pd.Timedelta(days=days)).date())


def quarters(start: np.datetime64, end: np.datetime64, minutes: int = STEP_MINUTES) -> Times:
    """Interval starts from `start` to before `end`, UTC."""
    return np.arange(start, end, np.timedelta64(minutes, "m")).astype("datetime64[us]")


def local(times: Times, zone: str = ZONE, holidays: tuple[str, ...] | None = None) -> Local:
    """Local wall time of UTC instants, shape (interval,); holidays are dates, default those of this file."""
    dates = tuple(date for date, _ in HOLIDAYS) if holidays is None else holidays
    stamps = pd.DatetimeIndex(times).tz_localize("UTC").tz_convert(zone)
    day = stamps.tz_localize(None).normalize().to_numpy().astype("datetime64[D]")
    return Local(
        hour=np.asarray(stamps.hour + stamps.minute / 60.0, dtype=np.float64),
        weekday=np.asarray(stamps.day_of_week, dtype=np.int64),
        day=day.astype(np.int64),
        holiday=np.isin(day, np.array(dates, dtype="datetime64[D]")),
    )


def within(hour: Floats, from_hour: Floats, to_hour: Floats) -> Bools:
    """Local hour within [from, to), over midnight where from > to, never where equal; arrays broadcast."""
    inside = (hour >= from_hour) & (hour < to_hour)
    across = (hour >= from_hour) | (hour < to_hour)
    result: Bools = np.where(from_hour <= to_hour, inside, across)
    return result
