"""Hostile names in every text of a fleet: harmless on each page, in the calendar and in the CSV."""

import csv
import io
import re
from html.parser import HTMLParser
from pathlib import Path

import pandas as pd
import pytest
import vobject
from commands import ASK, run
from fleet_folders import SETTINGS, write_small_fleet
from test_hostile_text import STEERING, renamed

BY = "=cmd()<script>alert(1)</script>\u202e\u200f\x1b[31m\"'&{{7*7}}\U0001f9ca" + "n" * 160
KNOWN_TAGS = frozenset(
    (
        "html",
        "head",
        "meta",
        "title",
        "style",
        "body",
        "a",
        "header",
        "div",
        "p",
        "h1",
        "h2",
        "h3",
        "dl",
        "dt",
        "dd",
        "small",
        "nav",
        "ul",
        "li",
        "main",
        "section",
        "table",
        "caption",
        "thead",
        "tbody",
        "tfoot",
        "tr",
        "th",
        "td",
        "figure",
        "figcaption",
        "svg",
        "path",
        "rect",
        "circle",
        "text",
        "details",
        "summary",
        "footer",
        "bdi",
        "br",
        "strong",
        "em",
        "span",
    )
)


class Tags(HTMLParser):
    """Every tag and attribute of a page, as a browser would read them."""

    def __init__(self) -> None:
        super().__init__()
        self.tags: set[str] = set()
        self.attributes: set[str] = set()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.add(tag)
        self.attributes.update(name for name, _ in attrs)


@pytest.fixture(scope="module")
def pages(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Pages of a small fleet all of whose texts begin with BY: called, settled twice, offered."""
    fleet = write_small_fleet(tmp_path_factory.mktemp("hostile") / "fleet", settings=SETTINGS, **renamed(BY))
    said = [
        run("call", fleet, "--kw", "100", *ASK, "--event", "A"),
        run("settle", fleet, "A"),
        run("pages", fleet, *ASK, "--kw", "100"),
        run("pages", fleet),
    ]
    assert [ran.code for ran in said] == [0] * 4, [ran.err for ran in said]
    return fleet / "pages"


def test_no_name_becomes_a_tag_an_attribute_or_a_turn_of_direction(pages: Path):
    seen = sorted(pages.rglob("*.html"))
    assert len(seen) >= 8
    for page in seen:
        text = page.read_text(encoding="utf-8")
        found = Tags()
        found.feed(text)
        assert found.tags <= KNOWN_TAGS, (page.name, found.tags - KNOWN_TAGS)
        assert not any(name.startswith("on") for name in found.attributes)
        assert not STEERING.search(text), page.name


def test_names_are_shown_as_they_are_written(pages: Path):
    event = (pages / "A" / "event.html").read_text(encoding="utf-8")
    assert "=cmd()&lt;script&gt;alert(1)&lt;/script&gt;\\u202e\\u200f\\x1b[31m" in event
    assert "{{7*7}}" in event
    assert "\U0001f9ca" in event


def test_calendars_hold_one_event_and_fold(pages: Path):
    files = sorted(pages.rglob("*.ics"))
    assert files
    for path in files:
        raw = path.read_bytes()
        assert max(map(len, raw.split(b"\r\n"))) <= 75
        read = vobject.readOne(raw.decode("utf-8"))
        assert len(read.vevent_list) == 1
        assert not STEERING.search(read.vevent.location.value)
        assert "=cmd()<script>" in read.vevent.location.value


def test_the_seasons_csv_starts_no_formula(pages: Path):
    text = (pages / "season.csv").read_text(encoding="utf-8")
    rows = list(csv.reader(io.StringIO(text, newline="")))
    assert len(rows) == 2
    assert not any(cell.startswith(("=", "+", "@")) for cell in rows[1])
    assert isinstance(pd.read_csv(io.StringIO(text)).loc[0, "asked_kwh"], float)


def test_names_of_files_are_plain(pages: Path):
    names = [str(path.relative_to(pages)) for path in pages.rglob("*")]
    assert all(re.fullmatch(r"[A-Za-z0-9._/-]+", name) for name in names), names
