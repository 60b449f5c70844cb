"""Levels of tanks by plant meters beside what gauges say: drift, leaks, idle tanks planted and named; fitted loads."""

from dataclasses import replace
from functools import cache
from pathlib import Path
from tempfile import mkdtemp

import numpy as np
import pandas as pd
import pytest
from demo_folders import short_fleet

from demo_fleet.calendar import EVENT_DAY
from fleet import check, load_history, records
from fleet.assemble import Fleet, assemble
from fleet.folder import FleetFolder, open_folder
from fleet.gauges import levels_at, read_levels
from fleet.level_history import Levels, findings, levels, with_levels
from fleet.past_days import Past, filled, hourly, hourly_outlook, read_past, resting
from sites.ground import usual_course

START = np.datetime64(f"{EVENT_DAY}T10:00", "us")
END = START + np.timedelta64(35, "h")
ZONE = "Europe/Athens"


def laid(**tables: pd.DataFrame) -> Path:
    """The invented fleet with some tables in other words."""
    home = Path(mkdtemp()) / "fleet"
    home.mkdir()
    for path in short_fleet(12).path.iterdir():
        if path.stem not in tables and path.name[0] != ".":
            (home / path.name).symlink_to(path)
    for name, frame in tables.items():
        frame.to_csv(home / f"{name}.csv", index=False)
    return home


@cache
def given() -> tuple[FleetFolder, Fleet, Past]:
    folder = open_folder(short_fleet(12).path, without=("meters",))
    fleet = assemble(folder, START, END)
    past = read_past(folder, fleet, records.events(folder.path))
    assert past is not None
    return folder, fleet, past


@cache
def plain() -> Levels:
    return levels(*given())


def known() -> np.ndarray:
    """Rows whose level the balance tells."""
    return np.flatnonzero(plain().reckoned.since[:, -1] >= 0)


@cache
def modelled(leak: float = 1.0, out: bool = False) -> Past:
    """The past with meters as the model's own plants would have read hour by hour, with a leak or without tanks."""
    _, fleet, past = given()
    roster, hours = fleet.roster.take(past.site), hourly_outlook(past.outlook)
    tanks, load = roster.tanks, hours.cooling_load_kw_th
    lossy = replace(roster, tanks=replace(tanks, loss_fraction_per_h=leak * tanks.loss_fraction_per_h))
    outlook = replace(hours, cooling_load_kw_th=filled(load, np.isfinite(load)))
    ready = resting(fleet, past.site, float(outlook.local_hour[0]))
    ready = replace(ready, tank_available=ready.tank_available & (not out))
    each = 60 // past.clock.step_minutes
    return replace(past, kw=np.repeat(usual_course(lossy, outlook, ready).power_kw, each, axis=1))


def test_the_invented_fleets_levels_agree_with_its_gauges_and_nothing_is_changed() -> None:
    """Meters come from a finer and different model, levels from gauges of 1 to 4 %: none lies apart."""
    folder, fleet, past = given()
    assert len(known()) >= 2
    assert not plain().apart.any()
    assert not plain().unused.any()
    after = with_levels(folder, fleet, past)
    for name in ("low_kwh_th", "best_kwh_th", "high_kwh_th"):
        np.testing.assert_array_equal(getattr(after.standing, name), getattr(fleet.standing, name))
    assert after.assumed == fleet.assumed
    assert "levels of tanks by energy balance of their plant meter" in after.notes[len(fleet.notes)]


def drifted() -> tuple[pd.DataFrame, str, float]:
    """Status with one site's gauge reading 30 % of its capacity too low for half a day, whose truth is the balance."""
    row = int(known()[0])
    found, told = plain(), plain().reckoned
    name, tanks = found.roster.buildings.site_id[row], found.roster.tanks
    capacity = tanks.capacity_kwh_th[row][tanks.exists[row]]
    status = pd.read_csv(short_fleet(12).path / "status.csv", dtype=str, keep_default_na=False)
    others = status[(status["site_id"] != name) | (status["inventory_kwh_th"] == "")]
    rows = []
    for hours_ago, off in ((12, 0.0), (8, -0.3), (4, -0.3), (1, -0.3)):
        level = told.level_kwh_th[row, found.clock.count - hours_ago - 1] / capacity.sum()
        at = str(START - np.timedelta64(hours_ago, "h")) + "Z"
        for tank, size in zip(tanks.tank_id[row][tanks.exists[row]], capacity, strict=True):
            kwh = f"{(level + off) * size:.1f}"
            rows.append({"site_id": name, "unit_id": tank, "time": at, "inventory_kwh_th": kwh})
    return pd.concat([others, pd.DataFrame(rows)]).fillna(""), str(name), float(0.3 * capacity.sum())


def test_a_gauge_that_drifts_is_named_with_how_far_and_since_when_and_widens_what_quotes_start_from() -> None:
    status, name, apart = drifted()
    folder = open_folder(laid(status=status), without=("meters",))
    _, _, past = given()
    fleet = assemble(folder, START, END)
    found = levels(folder, fleet, past)
    row = int(np.flatnonzero(found.roster.buildings.site_id == name)[0])
    assert found.apart_kwh_th[row] == pytest.approx(-apart, rel=1e-3)
    np.testing.assert_array_equal(found.apart, np.arange(len(found.site)) == row)
    assert found.clock.starts[found.apart_since[row]] == START - np.timedelta64(8, "h")
    after = with_levels(folder, fleet, past)
    told = next(note for note in after.notes if note.startswith(f"{name}: the level reported is"))
    assert (
        f"{name}: the level reported is {apart:,.0f} kWh_th below what its plant meter leaves since" in told
    )
    assert "apart since 2026-07-15 05:00 +03:00: drift of the level sensor" in told
    assert told.endswith("quotes hold for both levels")
    site = found.site[row]
    exists = fleet.roster.tanks.exists[site]
    np.testing.assert_array_equal(after.standing.low_kwh_th[site], fleet.standing.low_kwh_th[site])
    np.testing.assert_array_equal(after.standing.best_kwh_th[site], fleet.standing.best_kwh_th[site])
    high = after.standing.high_kwh_th[site][exists].sum()
    assert high >= found.reckoned.level_kwh_th[row, -1]
    assert high > fleet.standing.high_kwh_th[site].sum()
    widened = {one.key for one in after.assumed if one.why == "widened by what its plant meter says of it"}
    assert {key.split("/")[0] for key in widened} == {name}


def test_a_planted_leak_is_named_and_lowers_the_low_estimate() -> None:
    """Fourteen times the stated loss: found at every site that is full often enough, to a tenth."""
    folder, fleet, _ = given()
    past = modelled(leak=14.0)
    found = levels(folder, fleet, past)
    tanks, told = found.roster.tanks, found.reckoned
    stated = (tanks.capacity_kwh_th * tanks.loss_fraction_per_h * tanks.exists).sum(axis=1)
    rows = np.flatnonzero(told.leaks)
    assert len(rows) >= 1
    np.testing.assert_allclose(told.unexplained_kw_th[rows], 13.0 * stated[rows], rtol=0.15)
    words = findings(found, ZONE)
    for row in rows:
        name = found.roster.buildings.site_id[row]
        assert any(
            note.startswith(f"{name}: by its plant meter ") and "a leak, a valve that passes" in note
            for note in words
        )
    after = with_levels(folder, fleet, past)
    site = found.site[rows]
    fell = (fleet.standing.low_kwh_th - after.standing.low_kwh_th)[site].sum(axis=1)
    # What that loses in twelve hours, or all there is.
    wanted = np.minimum(12.0 * told.unexplained_kw_th[rows], fleet.standing.low_kwh_th[site].sum(axis=1))
    np.testing.assert_allclose(fell, wanted, rtol=1e-9)
    sound = levels(folder, fleet, modelled())
    assert not sound.reckoned.leaks.any()


def test_tanks_out_of_service_are_named_and_nothing_is_promised_from_them() -> None:
    folder, fleet, _ = given()
    found = levels(folder, fleet, modelled(out=True))
    assert found.unused.any()
    after = with_levels(folder, fleet, modelled(out=True))
    site = found.site[found.unused]
    assert (after.standing.low_kwh_th[site] == 0.0).all()
    np.testing.assert_array_equal(after.standing.best_kwh_th[site], fleet.standing.best_kwh_th[site])
    name = found.roster.buildings.site_id[found.unused][0]
    told = next(
        note for note in after.notes if note.startswith(f"{name}: by its plant meter its tanks have given")
    )
    assert "a tank out of service, or another way of running; nothing is promised from them" in told


def test_a_tank_that_was_never_read_takes_its_level_from_the_balance() -> None:
    row = int(known()[0])
    name = str(plain().roster.buildings.site_id[row])
    status = pd.read_csv(short_fleet(12).path / "status.csv", dtype=str, keep_default_na=False)
    unread = status[(status["site_id"] != name) | (status["inventory_kwh_th"] == "")]
    folder = open_folder(laid(status=unread), without=("meters",))
    fleet = assemble(folder, START, END)
    after = with_levels(folder, fleet, given()[2])
    site, told = plain().site[row], plain().reckoned
    assert after.standing.best_kwh_th[site].sum() == pytest.approx(told.level_kwh_th[row, -1])
    half = (after.standing.best_kwh_th - after.standing.low_kwh_th)[site].sum()
    assert half == pytest.approx(told.spread_kwh_th[row, -1], rel=1e-6)
    mine = [one for one in after.assumed if one.table == "status" and one.key.startswith(name)]
    assert mine
    assert {one.why for one in mine} == {
        "no reading; worked out from its plant meter since the tanks were last certainly full"
    }


def test_levels_between_readings_lie_on_a_line_and_gaps_are_not_bridged() -> None:
    at = np.datetime64("2026-07-15T00:00", "us") + np.arange(6) * np.timedelta64(1, "h")
    rows = pd.DataFrame(
        {
            "site_id": ["A", "A", "A", "B", "B"],
            "unit_id": ["T1", "T1", "T1", "T1", "T1"],
            "time": pd.to_datetime(at[[0, 2, 5, 1, 2]]).tz_localize("UTC"),
            "inventory_kwh_th": [100.0, 60.0, 50.0, 10.0, 20.0],
            "inventory_low_kwh_th": np.nan,
            "inventory_high_kwh_th": np.nan,
        }
    )
    read = read_levels(
        rows, np.array(["A", "B"], dtype=object), np.array([["T1", ""], ["T1", ""]], dtype=object)
    )
    assert read["unit"].tolist() == [0, 0, 0, 2, 2]
    found = levels_at(read, 4, at)
    np.testing.assert_array_equal(found[0], [100.0, 80.0, 60.0, np.nan, np.nan, 50.0])
    np.testing.assert_array_equal(found[2], [np.nan, 10.0, 20.0, np.nan, np.nan, np.nan])
    assert np.isnan(found[[1, 3]]).all()


def with_levels_read() -> tuple[FleetFolder, Fleet, Past, str, np.ndarray]:
    """A site with a tank and no load table whose level is read every hour: meters and levels of the model's plant."""
    _, fleet, past = given()
    row = int(np.flatnonzero(past.site == plain().site[known()[0]])[0])
    name = str(fleet.roster.buildings.site_id[past.site[row]])
    roster = fleet.roster.take(past.site[[row]])
    outlook = past.outlook.take(np.array([row]))
    course = usual_course(roster, outlook, resting(fleet, past.site[[row]], float(outlook.local_hour[0])))
    power = past.kw.copy()
    power[row] = course.power_kw[0]
    each = 60 // past.clock.step_minutes
    ends = course.inventory_kwh_th[0][:, each - 1 :: each]
    rows = pd.concat(
        [
            pd.DataFrame(
                {
                    "site_id": name, "unit_id": tank, "inventory_kwh_th": np.round(ends[k], 2),
                    "time": [f"{time}Z" for time in past.clock.starts[each - 1 :: each] + past.clock.step],
                }
            )
            for k, tank in enumerate(roster.tanks.tank_id[0]) if roster.tanks.exists[0, k]
        ]
    )  # fmt: skip
    status = pd.read_csv(short_fleet(12).path / "status.csv", dtype=str, keep_default_na=False)
    source = short_fleet(12).path
    loads = pd.read_parquet(source / ("loads" if (source / "loads").exists() else "loads.parquet"))
    loads = loads[loads["site_id"].astype(str) != name]
    home = laid(status=pd.concat([status[status["site_id"] != name], rows]).fillna(""), loads=loads)
    opened = open_folder(home, without=("meters",))
    served = hourly(course.load_kw_th - course.unmet_kw_th, past.clock)
    return opened, assemble(opened, START, END), replace(past, kw=power), name, served


def test_a_load_behind_a_tank_is_fitted_where_its_level_is_read_and_told_why_not_elsewhere() -> None:
    opened, fleet, past, name, served = with_levels_read()
    row = np.flatnonzero(past.site == np.flatnonzero(fleet.roster.buildings.site_id == name)[0])
    measured = load_history._measured_kw_th(opened, fleet, past, row)
    close = np.abs(measured / np.maximum(served, 1.0) - 1.0)[np.isfinite(measured)]
    assert np.isfinite(measured).sum() > 200
    assert np.median(close) < 0.02
    after = load_history.with_fitted_loads(opened, fleet, past.whole_days)
    mine = [one for one in after.assumed if (one.table, one.key) == ("loads", name)]
    (told,) = (one for one in mine if one.column == "cooling_load_kw_th")
    assert told.value == "fitted"
    assert told.why.startswith("fitted to 1")
    assert "of its plant meter, CV(RMSE) " in told.why
    unread = replace(opened, frames=opened.frames | {"status": opened.frames["status"].iloc[:0]})
    kept = load_history.with_fitted_loads(unread, fleet, past.whole_days)
    (why,) = (one.why for one in kept.assumed if (one.key, one.column) == (name, "cooling_load_kw_th"))
    assert why.endswith(
        "its plant meter tells it of 0 of 120 hours needed, where its tanks' levels are read every two hours or closer"
    )
    np.testing.assert_array_equal(kept.outlook.cooling_load_kw_th, fleet.outlook.cooling_load_kw_th)


def test_check_tells_what_plant_meters_say() -> None:
    status, name, _ = drifted()
    found = check.report(laid(status=status))
    text = "\n".join(check.lines(found))
    assert f"{name}: the level reported is" in text
    assert "status.inventory_high_kwh_th" in text
    assert "usual operation beside the plant meters of" in text
    assert "levels of tanks by energy balance of their plant meter since each was last certainly full" in text
    assert "1 apart from what is reported" in text


@pytest.mark.parametrize("shape", [(0, 2), (1, 0)])
def test_levels_of_other_sites_are_none_of_those_asked_for(shape) -> None:
    """A fleet whose metered plants have no tank, or that has none metered long enough."""
    status = pd.DataFrame(
        {
            "site_id": ["pier"],
            "unit_id": ["ICE-1"],
            "time": pd.to_datetime(["2026-07-14T12:00Z"]),
            "inventory_kwh_th": [800.0],
            "inventory_low_kwh_th": [np.nan],
            "inventory_high_kwh_th": [np.nan],
        }
    )
    sites = np.array(["harbour"] * shape[0], dtype=object)
    read = read_levels(status, sites, np.full(shape, "", dtype=object))
    assert len(read) == 0
    at = np.array(["2026-07-14T12:00"], dtype="datetime64[us]")
    assert levels_at(read, shape[0] * shape[1], at).shape == (shape[0] * shape[1], 1)
