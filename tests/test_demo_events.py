"""An event as it really goes: orders acted on, one refusal, late hands, a gap in a meter, truth beside it."""

import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from demo_folders import moment, record, short_fleet

from demo_fleet import calendar, days, events
from demo_fleet.files import DemoError
from demo_fleet.orders import acts

CALLED = ["office-01", "office-04", "retail-02", "hotel-02", "courthouse-01", "office-03", "courthouse-02"]


@pytest.fixture(scope="module")
def played(tmp_path_factory: pytest.TempPathFactory) -> events.Played:
    base = tmp_path_factory.mktemp("event")
    folder = short_fleet(40).path
    return events.play(folder, record(folder, base / "call-001", CALLED), base / "out")


@pytest.fixture(scope="module")
def truth(played: events.Played) -> pd.DataFrame:
    return pd.read_parquet(played.truth)


def test_exactly_one_called_site_declines_and_draws_as_usual(
    played: events.Played, truth: pd.DataFrame
) -> None:
    assert played.declined in CALLED
    own = truth[truth["site_id"] == played.declined]
    assert (own["with_event_kw"] == own["without_event_kw"]).all()
    each, total = events.true_kwh(played.readings.parent)
    assert each[played.declined] == 0.0
    assert (each.drop(played.declined) > 0.0).all()
    assert total == pytest.approx(each.sum())
    assert total == pytest.approx(played.true_kwh)


def test_sites_not_called_and_hours_before_are_untouched(truth: pd.DataFrame) -> None:
    same = truth["with_event_kw"] == truth["without_event_kw"]
    assert same[~truth["site_id"].isin(CALLED)].all()
    assert same[truth["interval_start"] < moment(16)].all()


def test_true_kwh_is_the_area_between_the_two_courses(played: events.Played, truth: pd.DataFrame) -> None:
    own = truth[
        (truth["site_id"] == "office-01") & truth["interval_start"].between(moment(16), moment(18.75))
    ]
    area = (own["plant_without_event_kw"] - own["plant_with_event_kw"]).sum() * 0.25
    assert len(own) == 12
    assert events.true_kwh(played.readings.parent)[0]["office-01"] == pytest.approx(area)


def test_readings_are_the_truth_through_the_meter_map(played: events.Played, truth: pd.DataFrame) -> None:
    readings = pd.read_parquet(played.readings)
    main = readings[readings["meter_id"].astype(str) == "B-courthouse-01"].set_index("interval_start")["kw"]
    own = truth[truth["site_id"] == "courthouse-01"].set_index("interval_start")["with_event_kw"]
    np.testing.assert_allclose(main, own.reindex(main.index), atol=0.006)
    plant = readings[readings["meter_id"].astype(str) == "P-office-01"].set_index("interval_start")["kw"]
    own = truth[truth["site_id"] == "office-01"].set_index("interval_start")["plant_with_event_kw"]
    np.testing.assert_allclose(plant, own.reindex(plant.index), atol=0.006)
    assert readings["interval_start"].min() == moment(0)
    assert readings["interval_start"].max() == moment(23.75, calendar.next_day(calendar.EVENT_DAY))


def test_one_called_site_has_a_gap_across_the_start(played: events.Played) -> None:
    readings = pd.read_parquet(played.readings)
    missing = readings[readings["kw"].isna()]
    assert played.gap in CALLED
    assert played.gap != played.declined
    table = pd.read_csv(short_fleet(40).path / "meter_map.csv")
    mains = table[(table["site_id"] == played.gap) & (table["role"] == "building")]["meter_id"]
    assert set(missing["meter_id"].astype(str)) == set(mains)
    assert list(missing["interval_start"].drop_duplicates()) == [
        moment(15.5 + quarter / 4) for quarter in range(5)
    ]
    assert set(missing["quality"]) == {"missing"}
    assert set(readings.loc[readings["kw"].notna(), "quality"]) == {"measured"}


def test_readings_before_the_call_are_those_of_the_history(played: events.Played) -> None:
    """The same morning, written once by the sample and once with the event: equal where both were metered."""
    history = pd.read_parquet(short_fleet(40).path / "meters")
    both = pd.read_parquet(played.readings).merge(
        history, on=["meter_id", "interval_start"], suffixes=("", "_before")
    )
    known = both.dropna(subset="kw")
    assert len(known) == history["meter_id"].nunique() * 13 * 4
    np.testing.assert_allclose(known["kw"], known["kw_before"], atol=0.0101)


def test_late_operators_act_late_by_their_minutes(tmp_path: Path) -> None:
    folder = short_fleet(40).path
    around = (np.datetime64("2026-07-15T13:00"), np.datetime64("2026-07-15T16:00"))
    real = events.truth_of(folder, *around, seed=None)
    minutes = real.hidden["late_minutes"]
    late = real.hidden.loc[(minutes > 0) & real.hidden["site_id"].str.startswith("office"), "site_id"].iloc[0]
    call = record(folder, tmp_path / "call", [late])
    order = acts(real, pd.read_parquet(call / "steps.parquet"), pd.read_parquet(call / "windows.parquet"))
    row = real.site_ids.to_list().index(late)
    start = int((np.datetime64("2026-07-15T13:00") - real.times[0]) / np.timedelta64(1, "m"))
    delay = int(minutes[row])
    assert 5 <= delay <= 15
    assert order.declined == ""
    assert order.at(start + delay - 1, np.array([row])).limit[0, 0] == 1.0
    assert order.at(start + delay, np.array([row])).limit[0, 0] == 0.0
    assert order.at(start + 180, np.array([row])).limit[0, 0] == 1.0
    assert order.at(start + delay, np.array([-1])).limit[0, 0] == 1.0
    assert (minutes > 0).mean() == pytest.approx(0.25, abs=0.2)


def test_tank_waits_for_its_recharge_and_zone_comes_back(truth: pd.DataFrame) -> None:
    own = truth[truth["site_id"] == "courthouse-02"].set_index("interval_start")
    between = own.loc[moment(19) : moment(22.25), "inventory_with_event_kwh_th"]
    assert (between.diff().dropna() <= 1e-6).all()
    last = own.iloc[-1]
    morning = own.loc[moment(8, calendar.next_day(calendar.EVENT_DAY))]
    assert morning["inventory_with_event_kwh_th"] > 0.95 * own["inventory_without_event_kwh_th"].max()
    assert last["zone_rise_with_event_k"] < 0.2
    warm = truth[truth["site_id"] == "courthouse-01"]
    assert warm["zone_rise_with_event_k"].max() > 0.5
    assert warm["zone_rise_with_event_k"].iloc[-1] < 0.3


def test_machine_that_is_off_draws_nothing(tmp_path: Path) -> None:
    """All machines of a site with no tank off, nobody late: only the rest of the building is left."""
    folder = short_fleet(40).path
    real = days.Days(**events.truth_of(folder, *_around(), seed=None).__dict__)
    punctual = real.hidden.assign(late_minutes=0)
    call = record(folder, tmp_path / "call", ["courthouse-01"], keep_one=False)
    steps, windows = (pd.read_parquet(call / f"{name}.parquet") for name in ("steps", "windows"))
    order = acts(days.replace(real, hidden=punctual), steps, windows)
    row = real.site_ids.to_list().index("courthouse-01")
    rows = np.where(np.arange(len(real.site_ids)) == row, np.arange(len(real.site_ids)), -1)
    until = int((np.datetime64("2026-07-15T16:00") - real.times[0]) / np.timedelta64(15, "m"))
    kept = days.run(real.until(until), lambda minute: order.at(minute, rows))
    assert (kept["power_kw"][row, until - 12 :] == 0.0).all()
    assert kept["power_kw"][row, until - 13] > 100.0
    assert kept["air_k"][row, -1] > 1.0


def _around() -> tuple[np.datetime64, np.datetime64]:
    return np.datetime64("2026-07-15T13:00"), np.datetime64("2026-07-15T16:00")


def test_play_is_the_same_twice(played: events.Played, tmp_path: Path) -> None:
    folder = short_fleet(40).path
    events.play(folder, record(folder, tmp_path / "call", CALLED), tmp_path / "out")
    again = (tmp_path / "out" / events.READINGS).read_bytes()
    assert again == played.readings.read_bytes()


def test_a_folder_of_ones_own_is_played_on_its_own_tables(tmp_path: Path) -> None:
    source = short_fleet(5).path
    own = tmp_path / "own"
    shutil.copytree(source, own, ignore=shutil.ignore_patterns(".truth", "meters"))
    call = record(own, tmp_path / "call", ["office-01", "courthouse-01", "hotel-01"])
    first = events.play(own, call, tmp_path / "a", seed=11)
    other = events.play(own, call, tmp_path / "b", seed=12)
    assert first.true_kwh != other.true_kwh
    assert first.true_kwh > 100.0
    assert first.declined != ""
    assert not (own / ".truth").exists()
    loads = pd.read_parquet(own / "loads")
    truth = events.truth_from_folder(own, 11, _around()[0])
    again = events.truth_from_folder(own, 11, _around()[0])
    np.testing.assert_array_equal(truth.course.cooling_load_kw_th, again.course.cooling_load_kw_th)
    pd.testing.assert_frame_equal(truth.hidden, again.hidden)
    given = loads[(loads["site_id"] == "office-01") & (loads["interval_start"] == moment(15))][
        "cooling_load_kw_th"
    ]
    column = int((np.datetime64("2026-07-15T12:00") - truth.times[0]) / np.timedelta64(15, "m"))
    assert truth.course.cooling_load_kw_th[0, column] == pytest.approx(given.iloc[0], rel=0.2)
    assert truth.course.cooling_load_kw_th[0, column] != pytest.approx(given.iloc[0], rel=1e-3)


def test_what_a_folder_leaves_open_is_as_the_record_resolved_it(tmp_path: Path) -> None:
    own = tmp_path / "own"
    shutil.copytree(short_fleet(5).path, own, ignore=shutil.ignore_patterns(".truth", "meters"))
    sites = pd.read_csv(own / "sites.csv")
    frozen = tmp_path / "frozen"
    frozen.mkdir()
    sites.to_parquet(frozen / "sites.parquet")
    for name in ("chillers", "tanks"):
        pd.read_csv(own / f"{name}.csv").to_parquet(frozen / f"{name}.parquet")
    sites.drop(columns=["strategy", "mass_kwh_per_k"]).to_csv(own / "sites.csv", index=False)
    open_ended, resolved = (
        events.truth_from_folder(own, 3, _around()[0], where).made.plant for where in (None, frozen)
    )
    assert len(set(resolved.strategy)) > 1
    assert len(set(open_ended.strategy)) == 1
    assert not np.allclose(resolved.mass_kwh_per_k, open_ended.mass_kwh_per_k)
    sites.iloc[:2].to_parquet(frozen / "sites.parquet")
    partly = events.truth_from_folder(own, 3, _around()[0], frozen).made.plant
    np.testing.assert_array_equal(partly.strategy, open_ended.strategy)


def test_weather_that_does_not_reach_is_refused(tmp_path: Path) -> None:
    own = tmp_path / "own"
    shutil.copytree(short_fleet(5).path, own, ignore=shutil.ignore_patterns(".truth", "meters"))
    with pytest.raises(DemoError) as refused:
        events.truth_from_folder(own, 1, np.datetime64("2026-07-20T13:00"))
    assert str(refused.value) == (
        f"{own}: weather reaches from 2026-07-02T21:00:00.000000Z to 2026-07-16T20:45:00.000000Z; playing this event "
        "needs 2026-07-18T21:00:00.000000Z to 2026-07-21T20:45:00.000000Z; add rows or choose another day"
    )


def test_a_call_of_nobody_is_refused(tmp_path: Path) -> None:
    folder = short_fleet(5).path
    call = record(folder, tmp_path / "call", [])
    with pytest.raises(DemoError) as refused:
        events.play(folder, call, tmp_path / "out")
    assert str(refused.value) == f"{call} calls no site; there is nothing to play"
