"""The index page: every event with its pages, and what to read for what.

Owns the list of events and the files at the top of the folder of pages.
"""

from pathlib import Path
from typing import Any

import pandas as pd
from markupsafe import Markup, escape

from fleet import records
from fleet.folder import open_folder
from fleet.pages import vocabulary
from fleet.pages.season import season_files
from fleet.pages.season_statement import season_statement
from fleet.pages.sheet import Fact, Link, Table, name, number, page, stamp
from fleet.pages.vocabulary import word

PAGES_OF_EVENT = (
    ("event.html", "the event"),
    ("orders.html", "orders"),
    ("energy.html", "where each kWh comes back"),
    ("statement.html", "statement"),
)


def front_files(home: Path, folder: Path) -> dict[str, str]:
    """The index and the season, by name; `folder`: where the pages of the events lie already."""
    return season_files(home) | season_statement(home) | {"index.html": index_page(home, folder)}


def index_page(home: Path, folder: Path) -> str:
    """The page that leads to each other one."""
    calls = _calls(home)
    settings = _settings(home, calls)
    rows = [_row(call, folder, settings["timezone"]) for call in reversed(calls)]
    heads = [("event", "t"), ("read", "t"), ("from", "t"), ("asked", "n"), ("sites", "n")]
    others = [
        ("offer.html", "The fleet's offer", "before a call: what it can give, for how long, at what cost")
    ]
    others.append(
        (
            "season.html",
            "The season",
            "after the calls: delivered, money, fatigue, one table for the regulator",
        )
    )
    return page(
        "index.html.j2",
        title=f"{settings['name']}: pages",
        banner="",
        heading=settings["name"],
        under="Demand response from cool storage: every page of this fleet folder.",
        level=0.8,
        facts=[
            Fact("events", str(len(calls))),
            Fact("currency", settings["currency"]),
            Fact("local time", settings["timezone"]),
        ],
        links=[],
        source="Made of the records below events/; made again by shedwright pages.",
        events=Table("Events, newest first", heads, rows),
        others=[
            Link(said, href) for href, said, _ in others if (folder / href).exists() or href == "season.html"
        ],
        meaning={href: why for href, _, why in others},
    )


def _row(call: dict[str, Any], folder: Path, zone: str) -> list[Any]:
    event_id = str(call["event_id"])
    there = [(href, said) for href, said in PAGES_OF_EVENT if (folder / event_id / href).exists()]
    read = Markup(", ").join(
        Markup('<a href="{}/{}">{}</a>').format(event_id, href, said) for href, said in there
    )
    kind = f"{word(vocabulary.DIRECTION, call['direction'])}, {word(vocabulary.PURPOSE, call['purpose'])}"
    return [
        Markup("{}<br><small>{}</small>").format(name(event_id), escape(kind)),
        read or "no pages yet",
        stamp(call["start"], zone),
        f"{number(call['asked_kw'])} kW",
        number(call["sites"]),
    ]


def _settings(home: Path, calls: list[dict[str, Any]]) -> dict[str, str]:
    """Name, zone and currency: of the fleet folder, or of the newest call where the folder is a rehearsal's home."""
    if calls:
        found = records.read_call(home, str(calls[-1]["event_id"]), only=(), frozen_only=()).frozen_json[
            "settings"
        ]
        return {key: str(found[key]) for key in ("name", "timezone", "currency")}
    settings = open_folder(home, names=(), needed=()).settings
    return {"name": settings.name, "timezone": settings.timezone, "currency": settings.currency}


def _calls(home: Path) -> list[dict[str, Any]]:
    """One entry an event, newest revision, in order of the events' starts."""
    found = []
    for event_id in records.event_ids(home):
        record = records.read_call(home, event_id, only=("request", "windows"), frozen_only=())
        request = record.frames["request"]
        found.append(
            {
                "event_id": event_id,
                "direction": request["direction"].iloc[0],
                "purpose": request["purpose"].iloc[0],
                "start": pd.Timestamp(request["interval_start"].min()),
                "asked_kw": float(request["requested_kw"].max()),
                "sites": len(record.frames["windows"]),
            }
        )
    return sorted(found, key=lambda call: (call["start"], call["event_id"]))
