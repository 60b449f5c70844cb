import numpy as np
import pandas as pd
import pytest

from fleet.errors import FleetError
from fleet.wall_time import (
    local_day,
    local_day_start,
    local_parts,
    local_text,
    off_grid,
    on_grid,
    parse_time,
    read_times,
    up_to_grid,
)
from sites.clock import span

ZONE = "Europe/Athens"  # +02:00, summer +03:00; 2026: forward 29 March 03:00, back 25 October 04:00
NO_HOLIDAYS = pd.DataFrame({"date": pd.Series([], dtype="datetime64[s]")})


@pytest.mark.parametrize(
    ("text", "utc"),
    [
        ("2026-07-14T16:00+03:00", "2026-07-14T13:00"),
        ("2026-07-14T16:00:30.5Z", "2026-07-14T16:00:30.5"),
        ("2026-07-14 16:00", "2026-07-14T13:00"),
        (" 2026-01-14T16:00 ", "2026-01-14T14:00"),
        ("2026-07-14T16:00-0330", "2026-07-14T19:30"),
        ("2026-07-14", "2026-07-13T21:00"),
        ("2026-10-25T03:30+02:00", "2026-10-25T01:30"),
    ],
)
def test_a_time_with_offset_or_local(text, utc):
    assert parse_time(text, ZONE) == np.datetime64(utc, "us")


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (
            "2026-03-29T03:30",
            "time '2026-03-29T03:30': expected a time that exists; the clock of Europe/Athens "
            "jumps over it: was it 2026-03-29 02:30 +02:00 or 2026-03-29 04:30 +03:00?",
        ),
        (
            "2026-10-25T03:30",
            "time '2026-10-25T03:30': expected a time that can be told apart, for it exists twice: "
            "2026-10-25 03:30 +03:00 and 2026-10-25 03:30 +02:00; write it with its offset",
        ),
        (
            "14.7.2026 16:00",
            "time '14.7.2026 16:00': expected ISO 8601 such as 2026-07-14T16:00+03:00, "
            "or local time such as 2026-07-14T16:00",
        ),
        ("2026-02-30T16:00", "time '2026-02-30T16:00': expected a time in ISO 8601"),
        ("2026-07-14T25:00Z", "time '2026-07-14T25:00Z': expected a time in ISO 8601"),
        (
            "2026-07-14T16:07",
            "time 2026-07-14 16:07:00 +03:00 is not on the 15-minute grid; "
            "nearest are 2026-07-14 16:00 +03:00 and 2026-07-14 16:15 +03:00",
        ),
    ],
)
def test_times_that_are_refused(text, message):
    with pytest.raises(FleetError) as caught:
        parse_time(text, ZONE, 15)
    assert str(caught.value) == message


def test_the_grid():
    time = np.datetime64("2026-07-14T13:15", "us")
    assert on_grid(time, 15) == time
    assert up_to_grid(time, 15) == time
    assert up_to_grid(time + np.timedelta64(1, "us"), 15) == np.datetime64("2026-07-14T13:30", "us")
    times = np.array(
        ["2026-07-14T13:15", "2026-07-14T13:16", "NaT", "1969-12-31T23:45"], dtype="datetime64[us]"
    )
    assert off_grid(times, 15).tolist() == [False, True, False, False]


def test_local_text_names_the_offset():
    assert local_text(np.datetime64("2026-07-14T13:00"), ZONE) == "2026-07-14 16:00 +03:00"
    assert local_text(np.datetime64("2026-07-14T13:00"), "America/St_Johns") == "2026-07-14 10:30 -02:30"


def test_local_parts_of_a_25_hour_day():
    start, end = (
        local_day_start(np.datetime64("2026-10-25"), ZONE),
        local_day_start(np.datetime64("2026-10-26"), ZONE),
    )
    clock = span(start, end, 30)
    assert clock.count == 50
    holidays = pd.DataFrame({"date": pd.to_datetime(["2026-10-25"]).astype("datetime64[s]")})
    hour, weekday, day, holiday = local_parts(clock, ZONE, holidays)
    assert hour[6:12].tolist() == [3.0, 3.5, 3.0, 3.5, 4.0, 4.5]
    assert set(weekday.tolist()) == {6}
    assert np.unique(day).tolist() == [
        (np.datetime64("2026-10-25") - np.datetime64("1970-01-01")).astype(int)
    ]
    assert holiday.all()
    assert not local_parts(clock, ZONE, NO_HOLIDAYS)[3].any()


def test_local_days():
    assert local_day(np.datetime64("2026-07-13T21:30"), ZONE) == np.datetime64("2026-07-14")
    spring = np.datetime64("2026-03-29")
    length = local_day_start(spring + 1, ZONE) - local_day_start(spring, ZONE)
    assert length == np.timedelta64(23, "h")
    # Beirut's clock jumps at midnight: the day of 29 March 2026 begins at 01:00
    assert local_text(local_day_start(spring, "Asia/Beirut"), "Asia/Beirut") == "2026-03-29 01:00 +03:00"


def read(texts, reading, key=None, timezone=ZONE):
    series = pd.Series(texts, dtype=object)
    return read_times(series, reading, timezone, pd.Series(key if key is not None else [0] * len(texts)))


def test_each_declared_reading_of_the_same_text():
    texts = ["2026-07-14T16:00", "2026-01-14T16:00"]
    for reading, utc in [
        ("utc", ["2026-07-14T16:00", "2026-01-14T16:00"]),
        ("local", ["2026-07-14T13:00", "2026-01-14T14:00"]),
        ("standard", ["2026-07-14T14:00", "2026-01-14T14:00"]),
    ]:
        found = read(texts, reading)
        assert found.utc.tolist() == np.array(utc, dtype="datetime64[us]").tolist()
        assert not found.fault.any()
        assert read([text + "-05:00" for text in texts], reading).utc[0] == np.datetime64("2026-07-14T21:00")
    found = read(texts, "offset")
    assert np.isnat(found.utc).all()
    assert (
        found.fault[0] == "a time with an offset (declare [tables] ..._time if all are Europe/Athens or UTC)"
    )


def test_standard_time_is_winter_time_on_both_halves_of_the_globe():
    assert read(["2026-01-14T16:00"], "standard", timezone="Australia/Sydney").utc[0] == np.datetime64(
        "2026-01-14T06:00"
    )
    assert read(["2026-07-14T16:00"], "standard", timezone="Europe/Dublin").utc[0] == np.datetime64(
        "2026-07-14T16:00"
    )


def test_missing_is_no_fault_and_nonsense_is():
    found = read(["", None, "soon"], "utc")
    assert np.isnat(found.utc).all()
    assert found.fault.tolist() == ["", "", "a time in ISO 8601"]


def test_repeated_autumn_hour_is_told_apart_by_order_for_each_key_and_counted():
    hours = ["02:30", "03:00", "03:30", "03:00", "03:30", "04:00"]
    texts = [f"2026-10-25T{hour}" for hour in hours for _ in "ab"]
    found = read(texts, "local", key=list("ab") * 6)
    expected = np.datetime64("2026-10-24T23:30", "us") + np.arange(6) * np.timedelta64(30, "m")
    assert found.utc[0::2].tolist() == expected.tolist()
    assert found.utc[1::2].tolist() == expected.tolist()
    assert found.repeated_hour == 8
    assert not found.fault.any()


def test_repeated_hour_given_once_or_out_of_order_is_refused():
    found = read(["2026-10-25T03:00", "2026-10-25T03:00", "2026-10-25T03:30"], "local")
    assert found.fault.tolist()[:2] == ["", ""]
    assert found.fault[2].startswith("a time that can be told apart, for it exists twice: ")
    backwards = [f"2026-10-25T{hour}" for hour in ["04:00", "03:30", "03:00", "03:30", "03:00"]]
    found = read(backwards, "local")
    assert np.isnat(found.utc[1:]).any()
    assert "rows in order of time" in found.fault[1]


def test_timestamps_with_a_zone_are_that_instant_whatever_is_declared():
    series = pd.Series(pd.DatetimeIndex(["2026-07-14T16:00"], tz="America/New_York"))
    for reading in ("utc", "offset", "local", "standard"):
        assert read_times(series, reading, ZONE, pd.Series([0])).utc[0] == np.datetime64("2026-07-14T20:00")


def test_timestamps_without_a_zone_follow_the_declaration():
    series = pd.Series(pd.DatetimeIndex(["2026-07-14T16:00"]))
    assert read_times(series, "local", ZONE, pd.Series([0])).utc[0] == np.datetime64("2026-07-14T13:00")
    assert read_times(series, "offset", ZONE, pd.Series([0])).fault[0].startswith("a time with an offset")
