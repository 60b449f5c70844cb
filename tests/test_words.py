"""A site's own units, clock and words, and text made harmless."""

from datetime import UTC, datetime
from zoneinfo import ZoneInfo

import pytest

from fleet.words import plain, words

ATHENS, NEW_YORK = ZoneInfo("Europe/Athens"), ZoneInfo("America/New_York")
AT = datetime(2026, 7, 16, 13, 0, tzinfo=UTC)


def test_nothing_said_is_si_and_the_programme_desk():
    said = words(None, ATHENS, AT)
    assert (said.units, said.contact, said.notes) == ("si", "your programme desk", "")


def test_units_contact_and_the_rest_are_told_apart():
    said = words("Units = US; contact=Plant desk, ext. 12; ask for the key; units=furlongs;", ATHENS, AT)
    assert (said.units, said.contact) == ("us", "Plant desk, ext. 12")
    assert said.notes == "ask for the key; units=furlongs"


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("\x1b[31mred\x07", r"\x1b[31mred\x07"),
        ("two\nlines\r\x0b", r"two\nlines\r\x0b"),
        ("right\u202eleft\u200b", r"right\u202eleft\u200b"),
        ("\u2028\x85\x9b2J", r"\u2028\x85\x9b2J"),
        ("Δήμος 22 °C {{ x }} {tags}", "Δήμος 22 °C {{ x }} {tags}"),
    ],
)
def test_what_does_not_print_is_spelled_out(text, expected):
    assert plain(text) == expected


def test_hostile_words_come_out_harmless_and_long_ones_say_that_they_are_cut():
    said = words("contact=\x1b]0;x\x07desk;" + "y" * 300, ATHENS, AT)
    assert said.contact == r"\x1b]0"
    assert said.notes.startswith(r"x\x07desk; yyy")
    assert said.notes.endswith("yyy ... (cut: the rest stands in the table of sites)")


def test_numbers_in_both_unit_systems():
    si, us = words("", ATHENS, AT), words("units=us", ATHENS, AT)
    # 1 US ton of refrigeration = 12 000 Btu/h = 3.516853 kW
    assert (si.energy(3516.853), us.energy(3516.853)) == ("3,517 kWh_th", "1,000 ton-h")
    assert (si.cooling(240.0), us.cooling(240.0)) == ("240 kW_th", "68.2 ton")
    assert (si.temperature(7.0), us.temperature(7.0)) == ("7.0 degC", "44.6 degF")
    assert (si.rise(2.0), us.rise(2.0)) == ("2.0 K", "3.6 degF")
    assert (si.energy(99.4), si.energy(99.6), si.energy(0.0)) == ("99.4 kWh_th", "100 kWh_th", "0.0 kWh_th")


def test_times_are_local_and_name_the_day_only_when_it_is_another():
    said = words("", ATHENS, AT)
    assert said.time(AT) == "16:00"
    assert said.time(datetime(2026, 7, 16, 20, 59, tzinfo=UTC)) == "23:59"
    assert said.time(datetime(2026, 7, 16, 21, 0, tzinfo=UTC)) == "Fri 00:00"
    assert said.day(AT) == "Thu 16 Jul 2026"
    assert said.zone_name(AT) == "EEST (UTC+03:00)"


def test_the_repeated_hour_of_autumn_names_the_zone_that_differs():
    first = datetime(2026, 11, 1, 5, 30, tzinfo=UTC)
    said = words("", NEW_YORK, first)
    assert said.time(first) == "01:30"
    assert said.time(datetime(2026, 11, 1, 6, 30, tzinfo=UTC)) == "01:30 EST (UTC-05:00)"
