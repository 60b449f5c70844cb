"""The open interval-data feed: units by hand, links before order, hostile and foreign feeds refused."""

from itertools import permutations
from pathlib import Path

import pandas as pd
import pytest
from feeds import START, block, feed, meter_reading, reading_type, usage_point

from fleet.errors import FleetError, Refused
from fleet.espi import read_feed


def written(folder: Path, text: str) -> Path:
    path = folder / "feed.xml"
    path.write_text(text)
    return path


def refusal(folder: Path, *entries: str) -> str:
    with pytest.raises(FleetError) as caught:
        read_feed(written(folder, feed(*entries)))
    return str(caught.value)


def test_watt_hours_with_a_multiplier_become_kilowatts(tmp_path: Path) -> None:
    text = feed(usage_point(), meter_reading(), reading_type(power=3), block([25, None, 30], quality={2: 8}))
    found = read_feed(written(tmp_path, text))
    # 25 x 10^3 Wh in a quarter of an hour: 25 kWh x 4 = 100 kW.
    assert found["kw"].tolist()[0::2] == [100.0, 120.0]
    assert found["quality"].tolist() == ["measured", "missing", "estimated_like_day"]
    assert found["interval_start"].tolist()[0] == pd.Timestamp(START, unit="s", tz="UTC")
    assert set(found["usage_point"]) == {"01"} and set(found["title"]) == {"House"}


def test_watts_need_no_interval(tmp_path: Path) -> None:
    text = feed(usage_point(), meter_reading(), reading_type(uom=38, power=0), block([250_000]))
    assert read_feed(written(tmp_path, text))["kw"].tolist() == [250.0]


def test_export_is_taken_off_and_one_way_alone_is_a_gap(tmp_path: Path) -> None:
    text = feed(
        usage_point(),
        meter_reading("1", "7"),
        reading_type("7"),
        block([50_000, 50_000]),
        meter_reading("2", "8"),
        reading_type("8", direction=19),
        block([80_000], reading="2"),
    )
    found = read_feed(written(tmp_path, text))
    assert found["kw"].tolist()[0] == pytest.approx(4 * (50.0 - 80.0))
    assert found["quality"].tolist() == ["measured", "missing"]


def test_links_count_and_the_order_of_entries_does_not(tmp_path: Path) -> None:
    entries = (usage_point(), meter_reading(), reading_type(), block([1000, 2000], quality={1: 9}))
    frames = [read_feed(written(tmp_path, feed(*order))) for order in permutations(entries)]
    for frame in frames[1:]:
        pd.testing.assert_frame_equal(frame, frames[0])
    two = feed(
        block([7000], reading="1", point="02"),
        usage_point("02", "Barn"),
        reading_type("9", uom=38),
        meter_reading("1", "9", "02"),
        *entries,
    )
    found = read_feed(written(tmp_path, two)).set_index(["usage_point", "interval_start"])["kw"]
    assert found.loc["02"].tolist() == [7.0] and found.loc["01"].tolist() == [4.0, 8.0]


def test_an_entity_bomb_is_refused_before_it_is_read(tmp_path: Path) -> None:
    swell = "".join(f'<!ENTITY l{n + 1} "{f"&l{n};" * 10}">' for n in range(9))
    bomb = f'<?xml version="1.0"?><!DOCTYPE feed [<!ENTITY l0 "ha">{swell}]><feed>&l9;</feed>'
    with pytest.raises(FleetError) as caught:
        read_feed(written(tmp_path, bomb))
    assert str(caught.value) == (
        "feed.xml: declares a document type, which can hold entities that swell without end; an interval-data "
        "feed needs none: export it again without <!DOCTYPE>"
    )


def test_gas_bulk_and_foreign_units_are_refused_together(tmp_path: Path) -> None:
    text = refusal(
        tmp_path,
        usage_point("01", kind=1),
        meter_reading("1", "7"),
        reading_type("7", uom=119),
        usage_point("02"),
        meter_reading("1", "8", "02"),
        reading_type("8", accumulation=1),
    )
    assert text.splitlines() == [
        "feed.xml, column ServiceCategory: came 1 (gas) at usage point 01; expected 0 (electricity); "
        "take its readings out of the feed",
        "feed.xml, column uom: came 119; expected 72 (Wh) or 38 (W); ask for interval data in Wh or W",
        "feed.xml, column accumulationBehaviour: came 1 (bulk quantity); expected 4 (delta data); "
        "register readings are no interval data; ask for deltas",
    ]


def test_a_feed_without_its_links_readings_or_agreement_is_refused(tmp_path: Path) -> None:
    assert refusal(tmp_path, meter_reading(), reading_type(), block([1])) == (
        "feed.xml, column link: came meter reading /RetailCustomer/9/UsagePoint/01/MeterReading/1 with no usage "
        "point; expected links to its usage point and its reading type; ask for a whole feed"
    )
    assert refusal(tmp_path, usage_point(), meter_reading(), reading_type()) == (
        "feed.xml: holds no interval readings; export the feed with its IntervalBlocks"
    )
    twice = refusal(
        tmp_path, usage_point(), meter_reading(), reading_type(), block([1000]), block([2000], number="2")
    )
    assert twice == (
        "feed.xml, column IntervalReading: came 4 and 8 kW at 2025-07-10T15:00Z; expected one value per interval; "
        "take the block that does not hold out of the feed"
    )


def test_blocks_that_say_the_same_twice_count_once(tmp_path: Path) -> None:
    entries = (usage_point(), meter_reading(), reading_type(), block([1000]), block([1000], number="2"))
    assert read_feed(written(tmp_path, feed(*entries)))["kw"].tolist() == [4.0]


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("<feed", "feed.xml: is not well-formed XML (unclosed token: line 1, column 0); export it again"),
        (
            "<html/>",
            "feed.xml: is XML, but no Atom feed (came <html>); expected interval data by NAESB REQ.21 (ESPI)",
        ),
    ],
)
def test_what_is_no_feed_is_refused(tmp_path: Path, text: str, said: str) -> None:
    with pytest.raises(FleetError) as caught:
        read_feed(written(tmp_path, text))
    assert str(caught.value) == said
    assert not isinstance(caught.value, Refused)
