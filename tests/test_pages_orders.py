"""Order sheets and calendar files: what stands on them, what a second parser reads, change and cancel."""

import re
from dataclasses import replace
from datetime import UTC, datetime

import pytest
import vobject
from made_record import SITE_FACTS, WINDOWS, made_call
from strategies import HOSTILE

from fleet.called import called_sites
from fleet.orders import Order, file_stem, order_files, orders
from fleet.pages import diary
from fleet.pages.order_sheet import density, sheet_page
from fleet.pages.sheet import Link

CALLED = datetime(2026, 7, 16, 10, 0, tzinfo=UTC)
NASTY = "<script>alert(1)</script>=cmd()\u202e\u200f\"'&{{7*7}}\U0001f9ca" + "n" * 200


def sheets(**changes: object) -> dict[str, tuple[Order, str]]:
    """Orders and their pages by site."""
    record = made_call(**changes)
    return {
        order.site_id: (order, sheet_page(order, [Link("Orders", "../orders.html")], site))
        for order, site in zip(orders(record), called_sites(record), strict=True)
    }


def text_of(page: str) -> str:
    """What a reader sees of a page."""
    body = re.sub(r"<style>.*?</style>", "", page, flags=re.DOTALL)
    said = re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", body))
    for entity, letter in (("&#39;", "'"), ("&#34;", '"'), ("&lt;", "<"), ("&gt;", ">"), ("&amp;", "&")):
        said = said.replace(entity, letter)
    return said


def test_a_sheet_says_all_that_the_order_says():
    for order, page in sheets(revision=2, supersedes=1).values():
        said = text_of(page)
        assert "replaces revision 1" in said
        for part in (
            order.number,
            order.period,
            order.contact,
            order.restart,
            order.recharge,
            order.quote_id,
        ):
            assert part in said
        for line in order.lines:
            assert all(part in said for part in (line.time, line.do, line.see, line.if_not))
        for part in (*order.before, *order.stop, *order.cautions):
            assert part in said
        assert "Name and signature" in said
        assert "You never need permission to stop" in said
        assert len(order.lines) <= 10


def test_a_rehearsals_sheet_says_twice_that_nothing_is_to_be_switched():
    for order, page in sheets(purpose="rehearsal").values():
        assert text_of(page).count(order.banner) == 2


def test_a_plant_is_spoken_to_in_its_own_units_clock_and_names():
    facts = (
        SITE_FACTS[0],
        {
            "site_id": "mill-school",
            "site_words": "units=us; clock=12; contact=desk; W-1=the west machine; TES-1=big tank",
        },
    )
    _, page = sheets(facts=facts)["mill-school"]
    said = text_of(page)
    assert "Stop the west machine by the controller" in said
    assert "4:00 pm to 7:00 pm" in said
    assert "big tank: at least 500 ton-h" in said
    assert "W-1" not in said
    assert "degF" in said
    other = text_of(sheets(facts=facts)["harbour-court"][1])
    assert "16:00 to 19:00" in other
    assert "kWh_th" in other


def test_midnight_and_noon_on_a_clock_of_twelve_hours():
    """00:15 is 12:15 am, 12:15 is 12:15 pm, 13:05 is 1:05 pm."""
    from zoneinfo import ZoneInfo

    from fleet.words import words

    noon = datetime(2026, 7, 16, 12, 15, tzinfo=UTC)
    say = words("clock=12", ZoneInfo("UTC"), noon)
    told = [say.time(noon.replace(hour=hour, minute=minute)) for hour, minute in ((0, 15), (12, 15), (13, 5))]
    assert told == ["12:15 am", "12:15 pm", "1:05 pm"]
    assert words("CH-9=x", ZoneInfo("UTC"), noon, ("CH-1",)).notes == "CH-9=x"


def test_a_calendar_is_read_back_by_another_parser():
    order, _ = sheets()["harbour-court"]
    text = diary.order_calendar(order, CALLED)
    read = vobject.readOne(text)
    event = read.vevent
    assert event.dtstart.value == order.window_start
    assert event.dtend.value == order.window_end
    assert event.dtstamp.value == CALLED
    assert event.sequence.value == "0"
    assert event.status.value == "CONFIRMED"
    assert event.location.value == "harbour-court"
    assert f"order {order.number}" in event.summary.value
    for line in order.lines:
        assert line.do in event.description.value
    assert read.prodid.value == diary.PRODUCT
    assert read.version.value == "2.0"


def test_lines_fold_at_75_octets_and_end_as_the_standard_says():
    order, _ = sheets()["harbour-court"]
    order = replace(order, contact="Ωμέγα 🧊 " * 40)
    raw = diary.order_calendar(order, CALLED).encode()
    lines = raw.split(b"\r\n")
    assert b"\n" not in raw.replace(b"\r\n", b"")
    assert max(map(len, lines)) <= 75
    assert any(line.startswith(b" ") for line in lines)
    assert ("Ωμέγα 🧊 " * 40).strip() in vobject.readOne(raw.decode()).vevent.description.value


def test_a_change_keeps_the_uid_and_raises_the_sequence_and_a_withdrawal_cancels():
    first, _ = sheets()["mill-school"]
    second, _ = sheets(revision=2, supersedes=1)["mill-school"]
    gone = diary.Withdrawn("mill-school", first.window_start, first.window_end, "withdrawn-001-mill-school")
    read = [
        vobject.readOne(text)
        for text in (
            diary.order_calendar(first, CALLED),
            diary.order_calendar(second, CALLED),
            diary.cancelled_calendar("EV-1", gone, 3, CALLED),
        )
    ]
    assert len({one.vevent.uid.value for one in read}) == 1
    assert [one.vevent.sequence.value for one in read] == ["0", "1", "2"]
    assert [one.vevent.status.value for one in read] == ["CONFIRMED", "CONFIRMED", "CANCELLED"]
    assert [one.method.value for one in read] == ["PUBLISH", "PUBLISH", "CANCEL"]
    assert diary.uid("EV-1", "mill-school") != diary.uid("EV-1", "harbour-court")


def test_the_same_record_gives_the_same_bytes():
    assert sheets()["mill-school"][1] == sheets()["mill-school"][1]
    order, _ = sheets()["mill-school"]
    assert diary.order_calendar(order, CALLED) == diary.order_calendar(order, CALLED)


@pytest.mark.parametrize("nasty", [NASTY, *HOSTILE])
def test_hostile_words_stay_words(nasty):
    facts = ({"site_id": "harbour-court", "site_words": f"contact={nasty}; {nasty}"}, SITE_FACTS[1])
    order, page = sheets(facts=facts)["harbour-court"]
    assert page.count("<script") == 0
    assert not re.search("[\u200e\u200f\u202a-\u202e\u2066-\u2069\x00-\x08\x1b]", page)
    calendar = diary.order_calendar(order, CALLED)
    assert not re.search("[\u200e\u200f\u202a-\u202e\u2066-\u2069\x00-\x08\x1b]", calendar)
    assert calendar.count("BEGIN:VEVENT") == 1
    assert vobject.readOne(calendar).vevent.status.value == "CONFIRMED"
    assert re.fullmatch(r"[A-Za-z0-9_-]+", file_stem(order))


def test_density_rises_with_what_stands_on_the_sheet():
    order, _ = sheets()["harbour-court"]
    longer = [replace(order, notes="x" * count) for count in (0, 1200, 5000)]
    found = [density(one) for one in longer]
    assert found[0] in ("roomy", "tight")
    assert found[-1] == "dense"
    assert found == sorted(found, key=("roomy", "tight", "dense").index)


def test_the_text_of_an_order_is_no_wider_for_a_longer_clock():
    facts = (SITE_FACTS[0], {"site_id": "mill-school", "site_words": "clock=12"})
    files = order_files(made_call(facts=facts))
    assert all(
        len(line) <= 80 for name, text in files.items() if name.endswith(".txt") for line in text.split("\n")
    )
    assert WINDOWS[1]["site_id"] == "mill-school"
