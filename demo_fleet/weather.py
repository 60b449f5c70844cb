"""Invented weather: seasons, synoptic swings, the day's course, humidity; and the error of its forecast.

Owns the true weather and what was forecast of it. The event day is made as hot as asked. Axis: interval.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd

from demo_fleet import calendar
from demo_fleet.files import utc
from sites.units import Floats, Times

STATIONS: Final = ("Quay", "Upland")
OFFSET_K: Final = (0.0, -0.8)
DESIGN_C: Final = 38.0
"""Dry bulb of the design hour, by which the plants were sized."""


@dataclass(frozen=True)
class Weather:
    """True and forecast weather at every station; arrays (station, interval)."""

    times: Times
    dry_bulb_c: Floats
    wet_bulb_c: Floats
    forecast_dry_bulb_c: Floats
    forecast_wet_bulb_c: Floats


def wet_bulb_c(dry_bulb_c: Floats, rh_pct: Floats) -> Floats:
    """Wet bulb from dry bulb and relative humidity, any shape (Stull 2011, within 1 K over 5 to 99 %)."""
    result: Floats = (
        dry_bulb_c * np.arctan(0.151977 * np.sqrt(rh_pct + 8.313659))
        + np.arctan(dry_bulb_c + rh_pct)
        - np.arctan(rh_pct - 1.676331)
        + 0.00391838 * rh_pct**1.5 * np.arctan(0.023101 * rh_pct)
        - 4.686035
    )
    return np.minimum(result, dry_bulb_c)


def humidity_pct(dry_bulb_c: Floats, dew_point_c: Floats) -> Floats:
    """Relative humidity from dew point (Magnus form), 5 to 100, any shape."""

    def pressure(celsius: Floats) -> Floats:
        result: Floats = np.exp(17.625 * celsius / (243.04 + celsius))
        return result

    result: Floats = np.clip(100.0 * pressure(dew_point_c) / pressure(dry_bulb_c), 5.0, 100.0)
    return result


def weather(
    times: Times, called_at: np.datetime64, rng: np.random.Generator, peak_c: float = calendar.EVENING.peak_c
) -> Weather:
    """The truth at `times`, and the forecast: the truth up to the call, with a shared error after it; about `peak_c`
    at the hottest of the event day."""
    here = calendar.local(times)
    day = here.day - here.day[0]
    to_event = here.day - np.datetime64(calendar.EVENT_DAY, "D").astype(np.int64)
    days = int(day[-1]) + 1
    swing = _ar1(rng, days, 0.75, 2.0)
    mean = 16.5 + 11.0 * np.sin(2.0 * np.pi * (np.arange(days) - 74.0 + 10.0) / 365.0)
    amplitude = 5.3 + 0.35 * rng.standard_normal(days)
    cloud = np.clip(rng.normal(1.0, 0.12, days), 0.6, 1.15)
    course = np.cos(2.0 * np.pi * (here.hour - 15.3) / 24.0) + 0.12 * np.cos(
        4.0 * np.pi * (here.hour - 15.3) / 24.0
    )
    base = mean[day] + swing[day] * (1.0 - np.exp(-((to_event / 2.5) ** 2)))
    hot = (peak_c - 1.12 * 5.6 - mean[day]) * np.exp(-((to_event / 2.2) ** 2))
    dry = base + hot + amplitude[day] * cloud[day] * course + _ar1(rng, len(times), 0.98, 0.25)
    dew = np.minimum(0.62 * (mean[day] + 1.5) - 1.5 + _ar1(rng, days, 0.7, 1.8)[day], 19.0)
    dry_all = dry[None, :] + np.array(OFFSET_K)[:, None]
    wet_all = wet_bulb_c(dry_all, humidity_pct(dry_all, dew[None, :]))
    ahead_h = np.maximum((times - called_at) / np.timedelta64(1, "h"), 0.0)
    error = rng.uniform(0.4, 0.7) * rng.choice([-1.0, 1.0]) * (1.0 - np.exp(-ahead_h / 2.5))
    return Weather(
        times, dry_all, wet_all, dry_all - error, np.minimum(wet_all - 0.4 * error, dry_all - error)
    )


def table(made: Weather, forecast: bool) -> pd.DataFrame:
    """The weather table of a fleet folder: the forecast to two decimals, or the truth as it is."""
    digits = 2 if forecast else 12
    dry = made.forecast_dry_bulb_c if forecast else made.dry_bulb_c
    wet = made.forecast_wet_bulb_c if forecast else made.wet_bulb_c
    frames = [
        pd.DataFrame(
            {
                "station_id": station,
                "interval_start": utc(made.times),
                "dry_bulb_c": dry[i].round(digits),
                "wet_bulb_c": np.minimum(wet[i], dry[i]).round(digits),
            }
        )
        for i, station in enumerate(STATIONS)
    ]
    return pd.concat(frames, ignore_index=True)


def _ar1(rng: np.random.Generator, count: int, keep: float, deviation: float) -> Floats:
    return np.asarray(ar1(rng, 1, count, keep, deviation)[0])


def ar1(rng: np.random.Generator, rows: int, count: int, keep: float, deviation: float) -> Floats:
    """Stationary first-order noise, (row, interval), of standard deviation `deviation`."""
    shocks = rng.standard_normal((rows, count)) * deviation * np.sqrt(1.0 - keep * keep)
    shocks[:, 0] = rng.standard_normal(rows) * deviation
    made: Floats = np.empty_like(shocks)
    made[:, 0] = shocks[:, 0]
    for t in range(1, count):
        made[:, t] = keep * made[:, t - 1] + shocks[:, t]
    return made
