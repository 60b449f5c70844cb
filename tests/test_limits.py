"""Who may be called: limits of season and week, calls in force, notice on the grid."""

import numpy as np
import pandas as pd
import pytest

from fleet.limits import eligible_sites, terms
from sites.clock import Clock

ZONE = "Europe/Athens"
AT = pd.Timestamp("2026-07-15T10:00Z")
EVENT = (pd.Timestamp("2026-07-15T13:00Z"), pd.Timestamp("2026-07-15T16:00Z"))


def sites(**limits: object) -> pd.DataFrame:
    frame = pd.DataFrame({"site_id": ["A", "B", "C"], "notice_minutes": [120.0, 0.0, 200.0]})
    frame["minimum_window_minutes"] = [60.0, 50.0, 0.0]
    for name in ("calls_per_season", "calls_per_week", "hours_per_season"):
        frame[name] = pd.array(limits.get(name, [None] * 3), dtype="Float64")
    return frame


def past(*calls: tuple[str, str, float], purpose: str = "real") -> pd.DataFrame:
    """Calls as (site, start in UTC, hours)."""
    start = pd.to_datetime(pd.Series([call[1] for call in calls], dtype=object), utc=True)
    return pd.DataFrame(
        {
            "event_id": [f"E{number}" for number in range(len(calls))],
            "purpose": purpose,
            "site_id": [call[0] for call in calls],
            "window_start": start,
            "window_end": start + pd.to_timedelta([call[2] for call in calls], unit="h"),
        }
    )


def allowed(found: object) -> list[bool]:
    return found.allowed.tolist()  # type: ignore[attr-defined]


def test_no_limit_and_no_past_call_leaves_everybody_free() -> None:
    found = eligible_sites(sites(), past(), AT, EVENT, ZONE)
    assert allowed(found) == [True, True, True]
    assert found.reason == {}
    assert np.isinf(found.hours_left).all()


def test_the_season_is_the_local_calendar_year_and_rehearsals_do_not_count() -> None:
    """22:30 UTC on New Year's Eve is the new year in Athens; 21:30 is still the old one."""
    frame = sites(calls_per_season=[1, 1, 1])
    calls = (("A", "2025-12-31T22:30", 1.0), ("B", "2025-12-31T21:30", 0.5))
    found = eligible_sites(frame, past(*calls), AT, EVENT, ZONE)
    assert allowed(found) == [False, True, True]
    assert found.reason == {"A": "has had all its calls of the season"}
    assert allowed(eligible_sites(frame, past(*calls, purpose="rehearsal"), AT, EVENT, ZONE)) == [True] * 3
    assert allowed(eligible_sites(frame, past(*calls, purpose="test"), AT, EVENT, ZONE)) == [
        False,
        True,
        True,
    ]


@pytest.mark.parametrize(
    ("days", "free"),
    [
        ((-7.0, -3.5), True),  # seven days before the event is no longer in its week
        ((-6.9, -3.5), False),
        ((-3.5, 6.9), True),  # no seven days hold all three
        ((-3.5, 3.4), False),
        ((3.0, 6.9), False),  # calls made already for later days
    ],
)
def test_a_week_is_any_seven_days_that_hold_the_event(days: tuple[float, float], free: bool) -> None:
    starts = [(EVENT[0] + pd.Timedelta(days=day)).isoformat() for day in days]
    calls = [("A", start, 1.0) for start in starts]
    later = EVENT[0] + pd.Timedelta(days=30)
    found = eligible_sites(sites(calls_per_week=[2, 2, 2]), past(*calls), later, EVENT, ZONE)
    assert allowed(found) == [free, True, True]


def test_hours_left_shorten_the_longest_window() -> None:
    frame = sites(hours_per_season=[2.0, 2.0, None])
    found = eligible_sites(
        frame, past(("A", "2026-06-01T13:00", 2.0), ("B", "2026-06-01T13:00", 1.0)), AT, EVENT, ZONE
    )
    assert allowed(found) == [False, True, True]
    assert found.reason == {"A": "has had all its hours of the season"}
    clock = Clock(np.datetime64("2026-07-15T10:00"), 15, 140)
    assert terms(frame, found, clock, np.datetime64("2026-07-15T10:00"), (12, 24)).most_intervals[1] == 4


def test_a_call_in_force_blocks_until_its_window_has_ended() -> None:
    running = past(("B", "2026-07-15T09:30", 1.0))
    assert allowed(eligible_sites(sites(), running, AT, EVENT, ZONE)) == [True, False, True]
    later = AT + pd.Timedelta(minutes=30)
    assert allowed(eligible_sites(sites(), running, later, EVENT, ZONE)) == [True, True, True]


def test_notice_and_least_window_are_rounded_up_to_the_grid() -> None:
    """Called at 13:07, clock from 13:15: 120 minutes of notice end at 15:07, the first window is 15:15."""
    clock = Clock(np.datetime64("2026-07-15T10:15"), 15, 140)
    found = eligible_sites(sites(), past(), AT, EVENT, ZONE)
    told = terms(sites(), found, clock, np.datetime64("2026-07-15T10:07"), (11, 23))
    np.testing.assert_array_equal(told.earliest, [8, 0, 13])
    np.testing.assert_array_equal(told.minimum_intervals, [4, 4, 1])
