"""Requests: what is refused, in which words, and what an accepted one tells."""

import numpy as np
import pytest

from fleet.errors import FleetError, Refused
from fleet.request import default_event_id, request
from sites.direction import Direction

AT = np.datetime64("2026-07-15T10:00", "us")
FROM = np.datetime64("2026-07-15T13:00", "us")
TO = np.datetime64("2026-07-15T14:00", "us")


def asked(**changes):
    given = {
        "event_id": "heat-1",
        "node_id": "North",
        "direction": "shed",
        "purpose": "real",
        "called_at": AT,
        "event_from": FROM,
        "event_to": TO,
        "requested_kw": 3500.0,
        "step_minutes": 15,
    }
    return request(**(given | changes))


def test_one_kw_fills_all_intervals():
    accepted = asked()
    assert accepted.requested_kw.tolist() == [3500.0] * 4
    assert accepted.direction is Direction.SHED
    assert accepted.notice_minutes == 180.0
    assert accepted.step == np.timedelta64(15, "m")
    assert accepted.interval_starts[-1] == np.datetime64("2026-07-15T13:45")
    assert accepted.interval_ends[-1] == TO


def test_kw_of_each_interval_are_kept():
    assert asked(requested_kw=[1.0, 2.0, 3.0, 4.0]).requested_kw.tolist() == [1.0, 2.0, 3.0, 4.0]


@pytest.mark.parametrize(
    ("changes", "text"),
    [
        (
            {"event_id": "../x"},
            "request, column event: came '../x'; expected 1 to 64 letters, digits, - or _; "
            "give --event an id that can name a folder",
        ),
        (
            {"event_id": ""},
            "request, column event: came ''; expected 1 to 64 letters, digits, - or _; "
            "give --event an id that can name a folder",
        ),
        (
            {"direction": "up"},
            "request, column direction: came 'up'; expected one of shed, absorb; choose one of them",
        ),
        (
            {"purpose": "drill"},
            "request, column purpose: came 'drill'; expected one of real, test, rehearsal; choose one of them",
        ),
        (
            {"requested_kw": -5.0, "event_to": FROM + np.timedelta64(15, "m")},
            "request, row 1, column kw: came -5.0; expected a finite number above 0; "
            "kW are positive in the event's direction; for the other way use --direction",
        ),
        (
            {"requested_kw": [1.0, 2.0, 3.0]},
            "request, column kw: came 3 values; expected one value, or one for each of the 4 event intervals; "
            "give as many kW as there are intervals",
        ),
        (
            {"event_to": FROM},
            "request, column to: came 2026-07-15T13:00:00.000000; expected a time after "
            "2026-07-15T13:00:00.000000; an event ends after it starts: exchange them or move the end",
        ),
        (
            {"event_to": FROM + np.timedelta64(20, "m")},
            "request, column to: came 2026-07-15T13:20:00.000000; expected a whole number of 15-minute intervals "
            "after 2026-07-15T13:00:00.000000; the nearest are 2026-07-15T13:15:00.000000 or "
            "2026-07-15T13:30:00.000000",
        ),
        (
            {"called_at": TO},
            "request, column from: came 2026-07-15T13:00:00.000000; expected 2026-07-15T14:00:00.000000 or later; "
            "an event cannot start before it is called: move --from, or give --at the time of the call",
        ),
        (
            {"called_at": np.datetime64("NaT", "us")},
            "request, column at: came no time; expected a date and time; give it as 2026-07-15T16:00+02:00",
        ),
    ],
)
def test_refusals_in_full(changes, text):
    with pytest.raises(Refused) as caught:
        asked(**changes)
    assert str(caught.value) == text
    assert isinstance(caught.value, FleetError)


def test_all_problems_at_once():
    with pytest.raises(Refused) as caught:
        asked(event_id="a b", direction="up", purpose="drill", requested_kw=[np.nan, 1.0, np.inf, 0.0])
    assert len(caught.value.problems) == 6


def test_sixty_four_characters_are_the_most():
    assert asked(event_id="x" * 64).event_id == "x" * 64
    with pytest.raises(Refused):
        asked(event_id="x" * 65)


def test_default_id_is_a_valid_one():
    name = default_event_id(AT, "North bank/3")
    assert name == "20260715-1000Z-North-bank-3"
    assert asked(event_id=name).event_id == name
    assert asked(event_id=default_event_id(AT, "é" * 90)).event_id == "20260715-1000Z-node"
