"""Makers of calls and readings for settlement tests: hourly worked case, and small random fleets."""

from collections.abc import Mapping

import numpy as np
import pandas as pd

from fleet.money import Prices
from fleet.rules import SettlementRule
from fleet.settle import CallFacts
from sites.direction import Direction

NEW_YORK = "America/New_York"
# Thursday 2025-07-10, 15:00-18:00, hourly means: window 11:00-14:00, then the hours from 15, 16 and 17.
WORKED = {
    "2025-07-09": (400, 500, 520, 480),
    "2025-07-08": (405, 300, 310, 290),
    "2025-07-07": (390, 480, 500, 460),
    "2025-07-04": (150, 160, 160, 160),
    "2025-07-03": (410, 510, 530, 490),
    "2025-07-02": (380, 470, 490, 450),
    "2025-07-01": (395, 490, 510, 470),
    "2025-06-30": (370, 460, 480, 440),
    "2025-06-27": (360, 450, 470, 430),
    "2025-06-26": (385, 475, 495, 455),
    "2025-06-25": (375, 465, 485, 445),
    "2025-06-24": (365, 455, 475, 435),
}
EVENT_HOURS = (330, 340, 320)


def utc(local: str, zone: str = NEW_YORK) -> pd.Timestamp:
    """A local wall time in UTC."""
    return pd.Timestamp(local).tz_localize(zone).tz_convert("UTC")


def times(start: pd.Timestamp, end: pd.Timestamp, step_minutes: int) -> pd.DatetimeIndex:
    """Interval starts from start to before end."""
    return pd.date_range(start, end, freq=f"{step_minutes}min", inclusive="left").as_unit("us")


def readings(
    meter_id: str, starts: pd.DatetimeIndex, kw: object, quality: object = "measured"
) -> pd.DataFrame:
    """Rows of the meters table."""
    return pd.DataFrame({"meter_id": meter_id, "interval_start": starts, "kw": kw, "quality": quality})


def worked_readings(window_kw: float = 383.0, site: str = "a", other_kw: float = 200.0) -> pd.DataFrame:
    """The worked case's meter, hourly, from 2025-06-24 to the end of the event's day; other hours `other_kw`."""
    starts = times(utc("2025-06-24"), utc("2025-07-11"), 60)
    local = starts.tz_convert(NEW_YORK)
    kw = np.full(len(starts), float(other_kw))
    days = {**WORKED, "2025-07-10": (window_kw, *EVENT_HOURS)}
    for day, (window, *hours) in days.items():
        on = local.strftime("%Y-%m-%d") == day
        kw[on & (local.hour >= 11) & (local.hour < 14)] = window
        for hour, value in zip((15, 16, 17), hours):
            kw[on & (local.hour == hour)] = value
    return readings(site, starts, kw)


def call(
    rules: Mapping[str, SettlementRule],
    start: pd.Timestamp,
    end: pd.Timestamp,
    horizon_end: pd.Timestamp,
    step_minutes: int = 60,
    committed_kw: float = 150.0,
    windows: Mapping[str, tuple[pd.Timestamp, pd.Timestamp]] | None = None,
    **changes: object,
) -> CallFacts:
    """A call of every site in `rules`, each over the whole event unless `windows` says otherwise."""
    sites = sorted(rules)
    own = {site: (windows or {}).get(site, (start, end)) for site in sites}
    event = times(start, end, step_minutes)
    horizon = times(min([start, *(since for since, _ in own.values())]), horizon_end, step_minutes)
    step = pd.Timedelta(minutes=step_minutes)
    request = pd.DataFrame(
        {
            "interval_start": event,
            "interval_end": event + step,
            "requested_kw": 100.0 * len(sites),
            "expected_kw": committed_kw * len(sites),
        }
    )
    rows = [
        {"site_id": site, "interval_start": at, "committed_kw": committed_kw if since <= at < until else 0.0}
        for site, (since, until) in own.items()
        for at in horizon
    ]
    table = [
        {"site_id": site, "window_start": since, "window_end": until, "delivery_factor": 1.0}
        for site, (since, until) in own.items()
    ]
    values: dict[str, object] = {
        "event_id": "e1",
        "direction": Direction.SHED,
        "request": request,
        "windows": pd.DataFrame(table),
        "intervals": pd.DataFrame(rows),
        "rules": rules,
        "prices": Prices("USD", 0.5, 0.2, 0.3),
        "timezone": NEW_YORK,
        "step_minutes": step_minutes,
        "meter_map": pd.DataFrame(),
        "holidays": pd.DataFrame({"date": [pd.Timestamp("2025-07-04")]}),
        "plant_days": pd.DataFrame(),
        "past_event_days": pd.DataFrame(),
    }
    return CallFacts(**{**values, **changes})  # type: ignore[arg-type]


def worked_call(rule: SettlementRule, site: str = "a", **changes: object) -> CallFacts:
    """The worked case: one site, hourly, an earlier event on 2025-07-08."""
    past = pd.DataFrame({"site_id": [site], "day": [pd.Timestamp("2025-07-08")]})
    values = {"past_event_days": past, **changes}
    start, end = utc("2025-07-10 15:00"), utc("2025-07-10 18:00")
    return call({site: rule}, start, end, utc("2025-07-11"), **values)  # type: ignore[arg-type]
