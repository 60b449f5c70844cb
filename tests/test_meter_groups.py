"""Readings out of Parquet row groups: the same settlement as from one frame, whatever the file's order."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from made_settlement import NEW_YORK, call, times, utc

from fleet import settle as settling
from fleet.errors import Problem, Refused
from fleet.meter_groups import GroupedReadings
from fleet.readings import FrameReadings, Overlaid
from fleet.rules import PRESETS
from fleet.settle import settle
from fleet.values import Reading

START, END, HORIZON = utc("2025-07-10 15:00"), utc("2025-07-10 18:00"), utc("2025-07-11")
SITES = [f"s{number}" for number in range(7)]


def readings(seed: int = 1) -> pd.DataFrame:
    """Hourly, seven meters, with a gap, an estimate and a value given twice."""
    starts = times(utc("2025-06-10"), HORIZON, 60)
    rng = np.random.default_rng(seed)
    frame = pd.DataFrame(
        {
            "meter_id": np.repeat(SITES, len(starts)),
            "interval_start": np.tile(starts, len(SITES)),
            "kw": rng.normal(300.0, 30.0, len(SITES) * len(starts)),
            "quality": "measured",
        }
    )
    frame.loc[700, ["kw", "quality"]] = [np.nan, "missing"]
    frame.loc[1_400, "quality"] = "estimated_line"
    return pd.concat([frame, frame.iloc[[50]]], ignore_index=True).sort_values("meter_id", ignore_index=True)


def source(frame: pd.DataFrame, path: Path, rows: int = 900) -> GroupedReadings:
    frame.to_parquet(path, row_group_size=rows, index=False)
    reading = Reading(path.name, "offset", NEW_YORK, 60)
    return GroupedReadings([path], reading, pd.DataFrame(), pd.Series(SITES))


def facts(step: int = 60, **changes: object):
    rules = {site: PRESETS["ten_of_ten"] for site in SITES[:6]}
    return call(rules, START, END, HORIZON, step, fleet_site_ids=tuple(SITES), **changes)


@pytest.mark.parametrize("at_once", [2, 4, 250])
@pytest.mark.parametrize("order", ["meter", "time"])
def test_it_settles_as_from_one_frame(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, at_once: int, order: str
) -> None:
    frame = readings()
    whole = settle(facts(), frame)
    ordered = frame if order == "meter" else frame.sort_values("interval_start", ignore_index=True)
    monkeypatch.setattr(settling, "SITES_AT_ONCE", at_once)
    grouped = source(ordered, tmp_path / "meters.parquet")
    assert grouped.plain
    for given in (grouped, ordered):
        parted = settle(facts(), given)
        for name, table in whole.frames.items():
            pd.testing.assert_frame_equal(parted.frames[name], table, check_categorical=False)
        assert parted.notes == whole.notes
        if order == "meter":
            told = dict(parted.summary["readings"])
            assert {**told, "readings": 0} == {**whole.summary["readings"], "readings": 0}


def test_a_row_of_a_named_file_takes_its_place(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(settling, "SITES_AT_ONCE", 2)
    frame = readings()
    at = frame["interval_start"] == START
    over = frame[at & (frame["meter_id"] == "s1")].assign(kw=1.0)
    changed = frame.assign(kw=frame["kw"].where(~(at & (frame["meter_id"] == "s1")), 1.0))
    both = Overlaid(source(frame, tmp_path / "meters.parquet"), over)
    result = settle(facts(), both)
    assert both.replaced == 1
    pd.testing.assert_frame_equal(result.sites, settle(facts(), FrameReadings(changed)).sites)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (
            {"meter_id": "s9"},
            "meters.parquet, row 1201, column meter_id: came 's9'; expected a site_id (there is no meter_map); "
            "add it to meter_map, or correct the spelling",
        ),
        (
            {"quality": "guessed"},
            "meters.parquet, row 1201, column quality: came 'guessed'; expected one of measured, edited, "
            "estimated_line, estimated_like_day, missing; correct the spelling",
        ),
        (
            {"kw": 9e9},
            "meters.parquet, row 1201, column kw: came 9000000000.0; expected a number from -500000 to 500000 kW; "
            "correct it (digits and a decimal point only), or leave it empty if it is not required",
        ),
        (
            {"interval_start": START + pd.Timedelta(minutes=5)},
            "meters.parquet, row 1201, column interval_start: came Timestamp('2025-07-10 19:05:00+0000', tz='UTC'); "
            "expected a time on the fleet's 60-minute grid; correct it",
        ),
    ],
)
def test_what_is_wrong_is_named_by_row(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, change: dict[str, object], message: str
) -> None:
    monkeypatch.setattr(settling, "SITES_AT_ONCE", 3)
    frame = readings()
    frame.loc[1_200, list(change)] = list(change.values())
    with pytest.raises(Refused) as refused:
        settle(facts(), source(frame, tmp_path / "meters.parquet"))
    assert [str(problem) for problem in refused.value.problems] == [message]


def test_another_form_is_left_to_the_checks_of_a_whole_table(tmp_path: Path) -> None:
    frame = readings()
    naive = frame.assign(interval_start=frame["interval_start"].dt.tz_localize(None))
    assert not source(naive, tmp_path / "naive.parquet").plain
    assert not source(frame.rename(columns={"kw": "kwh"}), tmp_path / "energy.parquet").plain


def test_each_meters_highest_reading_is_looked_at(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(settling, "SITES_AT_ONCE", 3)
    frame = readings()
    seen: dict[str, float] = {}

    def check(highest: pd.DataFrame) -> list[Problem]:
        seen.update(zip(highest["meter_id"], highest["kw"]))
        low = highest[highest["meter_id"] == "s4"]
        return [Problem("m", int(row), "kw", "little", "more", "look") for row in low.index]

    frame.to_parquet(tmp_path / "m.parquet", row_group_size=900, index=False)
    reading = Reading("m.parquet", "offset", NEW_YORK, 60)
    given = GroupedReadings([tmp_path / "m.parquet"], reading, pd.DataFrame(), pd.Series(SITES), check)
    with pytest.raises(Refused) as refused:
        settle(facts(), given)
    first = 1 + int(np.flatnonzero(frame["meter_id"] == "s4")[0])
    assert str(refused.value) == f"m, row {first}, column kw: came little; expected more; look"
    most = frame["kw"].abs().groupby(frame["meter_id"]).max()
    assert seen == {site: most[site] for site in SITES[:6]}


def test_sites_are_cut_where_the_source_is_and_nowhere_twice(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(settling, "SITES_AT_ONCE", 4)
    cuts = {
        (0, 0, 0, 1, 1, 1, 2, 2, 2): [3, 3, 3],  # three a piece: 4 would split the next one
        (0, 1, 1, 1, 1, 1): [4, 2],  # a piece of one alone would make parts too small
        (0, 0, 0, 0, 0, 0): [4, 2],
        (0,): [1],
    }
    for pieces, sizes in cuts.items():
        groups = settling._groups(np.array(pieces))
        assert [len(rows) for rows in groups] == sizes
        assert np.concatenate(groups).tolist() == list(range(len(pieces)))


def test_the_largest_table_goes_to_a_sink_in_order(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(settling, "SITES_AT_ONCE", 3)
    frame, parts = readings(), []
    given = settle(facts(), source(frame, tmp_path / "meters.parquet"), sink=parts.append)
    kept = settle(facts(), frame)
    assert len(parts) == 2
    assert "day_intervals" not in given.frames
    found = pd.concat([part.astype({"site_id": object}) for part in parts], ignore_index=True)
    wanted = kept.day_intervals.astype({"site_id": object})
    pd.testing.assert_frame_equal(found, wanted, check_categorical=False)


def test_files_that_overlap_and_disagree_are_refused_with_both_values(tmp_path: Path) -> None:
    frame = readings().drop_duplicates(["meter_id", "interval_start"])
    frame.to_parquet(tmp_path / "june.parquet", index=False)
    again = frame[(frame["meter_id"] == "s2") & (frame["interval_start"] == START)].assign(kw=1.0)
    again.to_parquet(tmp_path / "july.parquet", index=False)
    files = [tmp_path / "june.parquet", tmp_path / "july.parquet"]
    given = GroupedReadings(
        files, Reading("meters", "offset", NEW_YORK, 60), pd.DataFrame(), pd.Series(SITES)
    )
    with pytest.raises(Refused) as refused:
        settle(facts(), given)
    at = frame.index.get_loc(again.index[0]) + 1
    assert [str(problem) for problem in refused.value.problems] == [
        f"meters, row {len(frame) + 1}, column kw: came 1 for meter s2 at 2025-07-10T19:00:00.000000Z, where row {at} "
        f"has {frame.loc[again.index[0], 'kw']:g}; expected one value per meter and interval; find out which one holds "
        "and take the other out"
    ]
