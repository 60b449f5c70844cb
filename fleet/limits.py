"""Who may be called at all: call limits from past calls, calls in force, and notice.

Real and test calls count against limits; a rehearsal binds nobody and is never counted.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from sites.blocks import Terms
from sites.clock import Clock, as_us
from sites.units import Bools, Floats

COUNTED = ("real", "test")
IN_FORCE = "has a call in force"
_WEEK = pd.Timedelta(days=7)


@dataclass(frozen=True)
class Eligible:
    """Per site: may it be called, for how many hours at most, and why not."""

    allowed: Bools
    hours_left: Floats
    reason: dict[str, str]
    """site_id -> why it may not be called"""


def eligible_sites(
    sites: pd.DataFrame,
    past: pd.DataFrame,
    at: pd.Timestamp,
    event: tuple[pd.Timestamp, pd.Timestamp],
    zone: str,
) -> Eligible:
    """Which sites (rows of `sites`, in that order) the calls of `past` leave free for an event.

    sites: site_id, calls_per_season, calls_per_week, hours_per_season (empty = no limit); past: event_id,
    purpose, site_id, window_start, window_end (UTC). The season is the local calendar year of the event; a
    week is any seven days that hold the event's start. A site whose earlier window has not ended at `at` has
    its one window already.
    """
    counted = past[past["purpose"].isin(COUNTED)].copy()
    year = event[0].tz_convert(zone).year
    season = counted[counted["window_start"].dt.tz_convert(zone).dt.year == year]
    calls = _per_site(sites, season.groupby("site_id").size())
    length_h = (season["window_end"] - season["window_start"]) / pd.Timedelta(hours=1)
    hours = _per_site(sites, length_h.groupby(season["site_id"]).sum())
    busiest = _per_site(sites, _busiest_week(counted, event[0]))
    running = counted[counted["window_end"] > at]
    busy = sites["site_id"].isin(running["site_id"]).to_numpy()
    most_calls, most_week, most_hours = (
        sites[name].astype("Float64").to_numpy(dtype=np.float64, na_value=np.inf)
        for name in ("calls_per_season", "calls_per_week", "hours_per_season")
    )
    over = {
        IN_FORCE: busy,
        "has had all its calls of the season": calls + 1 > most_calls,
        "has had all its calls of the week": busiest + 1 > most_week,
        "has had all its hours of the season": hours >= most_hours,
    }
    reason: dict[str, str] = {}
    for text, mask in reversed(over.items()):
        reason |= dict.fromkeys(sites["site_id"][mask], text)
    blocked = np.logical_or.reduce(list(over.values()))
    return Eligible(~blocked, most_hours - hours, reason)


def _per_site(sites: pd.DataFrame, values: pd.Series) -> Floats:
    found: Floats = sites["site_id"].map(values).fillna(0.0).to_numpy(dtype=np.float64)
    return found


def _busiest_week(counted: pd.DataFrame, start: pd.Timestamp) -> pd.Series:
    """Most calls of each site in any seven days that would also hold `start`."""
    near = counted[(counted["window_start"] - start).abs() < _WEEK][["site_id", "window_start"]]
    firsts = pd.concat([near, near.assign(window_start=start)])
    firsts = firsts[firsts["window_start"] <= start].drop_duplicates()
    pairs = firsts.merge(near, on="site_id", suffixes=("_first", ""))
    late = pairs["window_start"] - pairs["window_start_first"]
    inside = pairs[(late >= pd.Timedelta(0)) & (late < _WEEK)]
    return inside.groupby(["site_id", "window_start_first"]).size().groupby("site_id").max()


def terms(
    sites: pd.DataFrame, who: Eligible, clock: Clock, called_at: np.datetime64, event: tuple[int, int]
) -> Terms:
    """Terms of the call for every site; sites: notice_minutes, minimum_window_minutes, resolved.

    A window starts no earlier than `called_at` plus the site's notice, on the grid.
    """
    step = clock.step_minutes
    wait = (clock.start - as_us(called_at)) / np.timedelta64(1, "m")
    notice = sites["notice_minutes"].to_numpy(dtype=np.float64)
    least = sites["minimum_window_minutes"].to_numpy(dtype=np.float64)
    longest = np.floor(np.minimum(who.hours_left, 1e6) * 60.0 / step)
    return Terms(
        event_from=event[0],
        event_to=event[1],
        step_minutes=step,
        earliest=np.maximum(np.ceil((notice - wait) / step), 0).astype(np.int64),
        minimum_intervals=np.maximum(np.ceil(least / step), 1).astype(np.int64),
        most_intervals=longest.astype(np.int64),
        allowed=who.allowed,
    )
