"""Readings on the grid: sums, refusals as text, gaps, local days of 23 and 25 hours."""

import numpy as np
import pandas as pd
import pytest
from made_settlement import NEW_YORK, readings, times, utc

from fleet.errors import FleetError, Refused
from fleet.estimation import estimate, spikes
from fleet.meters import QUALITIES, Streams, by_local_day, local_grid, streams
from sites.clock import Clock, span

SINCE, UNTIL = np.datetime64("2025-07-10T12:00", "us"), np.datetime64("2025-07-10T14:00", "us")
STARTS = pd.date_range(SINCE, UNTIL, freq="15min", inclusive="left", tz="UTC").as_unit("us")
KW = np.arange(100.0, 108.0)


def read(frame: pd.DataFrame, meter_map: pd.DataFrame | None = None, **changes: object) -> Streams:
    given = {"site_ids": ["a"], "timezone": NEW_YORK, "step_minutes": 15, "since": SINCE, "until": UNTIL}
    return streams(frame, pd.DataFrame() if meter_map is None else meter_map, **{**given, **changes})  # type: ignore[arg-type]


def test_without_a_map_the_meter_is_the_site() -> None:
    found = read(readings("a", STARTS, KW))
    assert found.site_id.tolist() == ["a"] and found.stream.tolist() == ["building"]
    assert found.kw.tolist() == [KW.tolist()]
    assert (found.quality == 0).all()


def test_shuffled_rows_give_the_same_and_are_counted() -> None:
    frame = readings("a", STARTS, KW)
    found = read(frame.iloc[::-1])
    assert found.kw.tolist() == [KW.tolist()]
    assert found.counts["out_of_order"] == 7 and read(frame).counts["out_of_order"] == 0


def test_meters_are_summed_with_sign_and_one_missing_makes_the_site_missing() -> None:
    table = pd.DataFrame(
        {
            "meter_id": ["m1", "m2", "m3", "m3"],
            "site_id": ["a", "a", "a", "a"],
            "role": ["building", None, "building", "plant"],
            "sign": [1, None, -1, 1],
        }
    )
    second = KW.copy()
    second[3] = np.nan
    frame = pd.concat(
        [readings("m1", STARTS, KW), readings("m2", STARTS, second, "edited"), readings("m3", STARTS, 30.0)]
    )
    found = read(frame, table)
    assert list(zip(found.site_id, found.stream)) == [("a", "building"), ("a", "plant")]
    assert found.kw[0, :3].tolist() == [170.0, 172.0, 174.0]
    assert np.isnan(found.kw[0, 3]) and QUALITIES[found.quality[0, 3]] == "missing"
    assert QUALITIES[found.quality[0, 0]] == "edited"
    assert found.kw[1].tolist() == [30.0] * 8


def test_a_stream_without_a_meter_is_missing_throughout() -> None:
    picked = read(readings("a", STARTS, KW)).pick(["b", "a"], ["building", "building"])
    assert np.isnan(picked.kw[0]).all() and picked.kw[1].tolist() == KW.tolist()
    assert QUALITIES[picked.quality[0, 0]] == "missing"


def test_doubles_that_agree_are_dropped_and_counted() -> None:
    frame = pd.concat([readings("a", STARTS, KW), readings("a", STARTS[:3], KW[:3], "edited")])
    found = read(frame)
    assert found.counts["duplicates_dropped"] == 3
    assert found.kw.tolist() == [KW.tolist()]
    # Of two that agree the worse quality holds.
    assert [QUALITIES[code] for code in found.quality[0, :4]] == ["edited"] * 3 + ["measured"]


def test_doubles_that_disagree_are_refused_with_both_values() -> None:
    frame = pd.concat([readings("a", STARTS, KW), readings("a", STARTS[2:3], 90.0)], ignore_index=True)
    with pytest.raises(Refused) as caught:
        read(frame)
    assert str(caught.value) == (
        "meters, row 8, column kw: came 90 for meter a at 2025-07-10T12:30:00.000000Z, where row 2 has 102; "
        "expected one value per meter and interval; find out which one holds and take the other out"
    )


def test_all_faults_come_at_once() -> None:
    frame = readings("a", STARTS, KW, "measured")
    frame["quality"] = ["measured", "guessed", "missing"] + ["measured"] * 5
    frame["meter_id"] = ["a", "a", "a", "zz"] + ["a"] * 4
    frame.loc[4, "interval_start"] += pd.Timedelta(minutes=5)
    frame.loc[5, "kw"] = np.inf
    with pytest.raises(Refused) as caught:
        read(frame)
    assert str(caught.value).splitlines() == [
        "meters, row 3, column meter_id: came zz; expected a meter of meter_map; add the meter to meter_map, "
        "or take its rows out",
        "meters, row 4, column interval_start: came 2025-07-10T13:05:00.000000; expected a start on the "
        "15-minute grid; convert the readings to the fleet's interval",
        "meters, row 5, column kw: came inf; expected a finite number or nothing; leave a missing value empty",
        "meters, row 1, column quality: came guessed; expected one of measured, edited, estimated_line, "
        "estimated_like_day, missing; correct it",
        "meters, row 2, column kw: came 102.0; expected no value where quality is missing; correct the quality, "
        "or leave the value empty",
    ]


def test_meters_of_sites_not_called_are_known_and_other_times_are_counted() -> None:
    wider = pd.date_range(SINCE - np.timedelta64(1, "h"), UNTIL, freq="15min", tz="UTC").as_unit("us")
    frame = pd.concat([readings("a", wider, 50.0), readings("b", STARTS, 70.0)])
    found = read(frame, known_site_ids=["a", "b"])
    assert found.site_id.tolist() == ["a"] and (found.kw == 50.0).all()
    assert found.counts["outside_period"] == 5
    with pytest.raises(Refused, match="came b; expected a meter of meter_map"):
        read(frame)


def test_one_meter_twice_in_a_stream_is_refused() -> None:
    table = pd.DataFrame(
        {"meter_id": ["m", "m"], "site_id": ["a", "a"], "role": ["building"] * 2, "sign": [1, 1]}
    )
    with pytest.raises(
        Refused, match=r"meter_map, row 1, column meter_id: came 'm'; expected one row per stream"
    ):
        read(readings("m", STARTS, KW), table)


def test_no_readings_at_all_is_a_grid_of_nothing() -> None:
    found = read(readings("a", STARTS, KW).iloc[:0])
    assert np.isnan(found.kw).all() and found.kw.shape == (1, 8)


def filled(kw: list[float], breaks: list[int] | None = None, shut: bool = False, step: int = 15) -> Streams:
    """Gaps of one row filled on one day."""
    count = len(kw)
    clock = span(SINCE, SINCE + np.timedelta64(count * step, "m"), step)
    values = np.array([kw])
    quality = np.where(np.isnan(values), 4, 0)
    names = np.array(["a"], dtype=object)
    found = Streams(names, names, clock, "UTC", values, quality, {})
    grid = local_grid(clock, "UTC")
    days = len(grid.days)
    edges = np.array([breaks if breaks else [0] * count])
    closed = np.full((1, count), shut)
    return estimate(found, edges, closed, np.zeros(days, dtype=np.int64), np.zeros((1, days), bool), grid)


NAN = float("nan")


def test_a_short_gap_is_a_straight_line() -> None:
    found = filled([100, 104, NAN, NAN, NAN, 120])
    assert found.kw.tolist() == [[100, 104, 108, 112, 116, 120]]
    assert [QUALITIES[code] for code in found.quality[0]] == ["measured"] * 2 + ["estimated_line"] * 3 + [
        "measured"
    ]
    assert found.counts["estimated_line"] == 3


def test_a_line_never_crosses_the_events_start() -> None:
    # 14:30 to 15:30, the event from 15:00: no 460, 420, 380.
    found = filled([500, NAN, NAN, NAN, 340], breaks=[0, 0, 1, 1, 1])
    assert np.isnan(found.kw[0, 1:4]).all()
    assert filled([500, NAN, NAN, NAN, 340]).kw[0, 1:4].tolist() == [460, 420, 380]


def test_a_gap_over_two_hours_gets_no_line() -> None:
    assert filled([100.0] + [NAN] * 8 + [100.0]).counts["estimated_line"] == 8
    longer = filled([100.0] + [NAN] * 9 + [100.0])
    assert longer.counts["estimated_line"] == 0 and longer.counts["still_missing"] == 9


def test_a_gap_at_an_edge_stays_missing() -> None:
    assert np.isnan(filled([NAN, 5, 6]).kw[0, 0]) and np.isnan(filled([5, 6, NAN]).kw[0, 2])


def long_gap() -> Streams:
    """Six hourly days in UTC at 10, 20, .. 60 kW; day 4 has no reading; day 2 an event, day 3 another class."""
    clock = span(np.datetime64("2025-07-07", "us"), np.datetime64("2025-07-13", "us"), 60)
    kw = np.repeat(np.arange(10.0, 70.0, 10.0), 24)[None]
    kw[0, 96:120] = np.nan
    names = np.array(["a"], dtype=object)
    quality = np.where(np.isnan(kw), 4, 0)
    event = np.zeros((1, 6), bool)
    event[0, 2] = True
    shut = np.zeros(kw.shape, bool)
    found = Streams(names, names, clock, "UTC", kw, quality, {})
    day_class = np.array([0, 0, 0, 1, 0, 0])
    return estimate(found, np.zeros(kw.shape, np.int64), shut, day_class, event, local_grid(clock, "UTC"))


def test_a_long_gap_needs_three_like_days() -> None:
    # Only days 0 and 1 are like days with no event: not enough.
    assert np.isnan(long_gap().kw[0, 96:120]).all()


def test_a_long_gap_is_the_mean_of_the_three_like_days_before_but_not_in_the_event() -> None:
    clock = span(np.datetime64("2025-07-07", "us"), np.datetime64("2025-07-13", "us"), 60)
    kw = np.repeat(np.arange(10.0, 70.0, 10.0), 24)[None]
    kw[0, 96:120] = np.nan
    names = np.array(["a"], dtype=object)
    shut = np.zeros(kw.shape, bool)
    shut[0, 110:112] = True
    found = Streams(names, names, clock, "UTC", kw, np.where(np.isnan(kw), 4, 0), {})
    none = np.zeros((1, 6), bool)
    grid = local_grid(clock, "UTC")
    done = estimate(found, np.zeros(kw.shape, np.int64), shut, np.zeros(6, np.int64), none, grid)
    # Days 1, 2 and 3: 20, 30, 40 kW.
    assert (done.kw[0, 96:110] == 30.0).all() and np.isnan(done.kw[0, 110:112]).all()
    assert QUALITIES[done.quality[0, 100]] == "estimated_like_day"


def local_day_clock(rows: pd.DatetimeIndex) -> Clock:
    start = rows[0].tz_localize(None).to_datetime64()
    return Clock(start, 60, len(rows))


def test_a_day_of_25_hours_averages_its_repeated_hour() -> None:
    rows = times(utc("2025-11-02"), utc("2025-11-03"), 60)
    clock = local_day_clock(rows)
    assert clock.count == 25
    kw = np.arange(25.0)[None]
    grid = local_grid(clock, NEW_YORK)
    by_day, quality = by_local_day(kw, np.array([[0] * 2 + [1] + [0] * 22]), grid)
    assert by_day.shape == (1, 1, 24) and grid.times[0, 1] == 2
    assert by_day[0, 0, :4].tolist() == [0.0, 1.5, 3.0, 4.0]
    assert quality[0, 0, :3].tolist() == [0, 1, 0]
    kw[0, 2] = np.nan
    assert np.isnan(by_local_day(kw, np.zeros((1, 25), np.int64), grid)[0][0, 0, 1])


def test_a_day_of_23_hours_skips_the_absent_slot() -> None:
    rows = times(utc("2025-03-09"), utc("2025-03-10"), 60)
    assert len(rows) == 23
    clock = local_day_clock(rows)
    grid = local_grid(clock, NEW_YORK)
    by_day, _ = by_local_day(np.arange(23.0)[None], np.zeros((1, 23), np.int64), grid)
    assert grid.times[0, :4].tolist() == [1, 1, 0, 1]
    assert np.isnan(by_day[0, 0, 2]) and by_day[0, 0, 3] == 2.0 and by_day[0, 0, 23] == 22.0


def test_an_unknown_zone_is_refused() -> None:
    with pytest.raises(FleetError, match="timezone 'Mars/Base' is not known; give an IANA name"):
        local_grid(span(SINCE, UNTIL, 15), "Mars/Base")


def test_a_spike_is_flagged_by_its_ratio_to_the_third_highest() -> None:
    day = np.array([[100.0, 100, 100, 281], [100, 100, 100, 280], [0, 0, 0, 900], [100, NAN, 281, 100]])
    assert spikes(day).tolist() == [True, False, False, True]
