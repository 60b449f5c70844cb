"""Orders in a calendar: RFC 5545 files that a plant's own calendar takes in, changes and removes.

Owns the mapping from an order to a VEVENT. A change of plan keeps the UID and raises SEQUENCE; a site that is no
longer called gets STATUS:CANCELLED under the same UID. Folding and escaping are icalendar's (the only door to it).
"""

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any, Final

import pandas as pd
from icalendar import Alarm, Calendar, Event

from fleet import records
from fleet.orders import NOT_IN_FILE_NAMES, Order
from fleet.words import plain

PRODUCT: Final = "-//Shedwright//Orders//EN"
REMIND_BEFORE: Final = timedelta(minutes=30)
NOT_ACTED_ON: Final = {"rehearsal": "REHEARSAL, do not act: ", "test": "TEST: ", "real": ""}


@dataclass(frozen=True)
class Withdrawn:
    """A site that an earlier revision of the call had called and the newest does not."""

    site_id: str
    window_start: datetime
    window_end: datetime
    stem: str


def order_calendar(order: Order, made_at: datetime) -> str:
    """The order's window as a calendar of one event; made_at: when this revision was called (UTC)."""
    event = _event(
        order.event_id, order.site_id, order.revision, order.window_start, order.window_end, made_at
    )
    event.add("summary", f"{NOT_ACTED_ON[order.purpose]}order {order.number}: {order.title}")
    event.add("location", order.site_id)
    event.add("description", _said(order))
    event.add("status", "CONFIRMED")
    alarm = Alarm()
    alarm.add("action", "DISPLAY")
    alarm.add("description", f"{NOT_ACTED_ON[order.purpose]}order {order.number} starts at {order.start}")
    alarm.add("trigger", -REMIND_BEFORE)
    event.add_component(alarm)
    return _calendar("PUBLISH", event)


def cancelled_calendar(event_id: str, gone: Withdrawn, revision: int, made_at: datetime) -> str:
    """What takes a withdrawn order out of a calendar again."""
    event = _event(event_id, gone.site_id, revision, gone.window_start, gone.window_end, made_at)
    event.add("summary", f"withdrawn: order of event {event_id}")
    event.add("location", gone.site_id)
    event.add("status", "CANCELLED")
    return _calendar("CANCEL", event)


def withdrawn_sites(home: Path, event_id: str, revision: int) -> list[Withdrawn]:
    """Sites of earlier revisions of the call that revision `revision` does not call, as last ordered."""
    frames = [
        records.read_call(home, event_id, number, only=("windows",), frozen_only=()).frames["windows"]
        for number in records.revisions(home, event_id, "call")
        if number <= revision
    ]
    called = set(frames[-1]["site_id"])
    before = [frame[~frame["site_id"].isin(called)] for frame in frames[:-1]]
    last = pd.concat(before).drop_duplicates("site_id", keep="last") if before else frames[-1].iloc[:0]
    gone: list[dict[Any, Any]] = last.sort_values("site_id").astype(object).to_dict("records")
    return [
        Withdrawn(
            plain(str(row["site_id"])),
            pd.Timestamp(row["window_start"]).to_pydatetime(),
            pd.Timestamp(row["window_end"]).to_pydatetime(),
            f"withdrawn-{place:03d}-{NOT_IN_FILE_NAMES.sub('_', str(row['site_id']))[:60]}",
        )
        for place, row in enumerate(gone, start=1)
    ]


def uid(event_id: str, site_id: str) -> str:
    """The same for every revision of a site's order in an event, whatever letters its id has."""
    found = hashlib.sha256(f"{event_id}\n{site_id}".encode()).hexdigest()[:32]
    return f"{found}@shedwright"


def _event(
    event_id: str, site_id: str, revision: int, start: datetime, end: datetime, made_at: datetime
) -> Event:
    event = Event()
    event.add("uid", uid(event_id, site_id))
    event.add("dtstamp", made_at)
    event.add("dtstart", start)
    event.add("dtend", end)
    event.add("sequence", revision - 1)
    return event


def _calendar(method: str, event: Event) -> str:
    calendar = Calendar()
    calendar.add("prodid", PRODUCT)
    calendar.add("version", "2.0")
    calendar.add("method", method)
    calendar.add_component(event)
    return str(calendar.to_ical().decode("utf-8"))


def _said(order: Order) -> str:
    """The order in words, short: its lines, whom to ring, the cautions. The sheet says the rest."""
    parts: Sequence[str] = (
        order.banner,
        f"Ring {order.contact}: say yes or no. You may refuse until {order.start} and stop at any time after it.",
        *(f"Before: {condition}" for condition in order.before),
        *(f"{line.time}  {line.do}" for line in order.lines),
        *order.cautions,
    )
    return "\n".join(parts)
