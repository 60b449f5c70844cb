import dataclasses
import re

import pandas as pd
import pytest
from fleet_folders import SETTINGS, small_tables, write_small_fleet

from fleet.check import document, effect_lines, lines, report
from fleet.effects import effects, sustained_kw, trial_event
from fleet.errors import FleetError
from fleet.folder import open_folder
from fleet.resolve import resolve


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return open_folder(write_small_fleet(tmp_path_factory.mktemp("assumed"), meters=None))


@pytest.fixture(scope="module")
def found(folder):
    return effects(folder)


def given(folder, table, column, factor):
    """The folder whose empty cells of a column were filled in by hand: the assumed value times a factor."""
    frame = folder.frames[table].copy()
    known = resolve(folder.frames, folder.settings).frames[table][column]
    frame[column] = frame[column].fillna(known * factor)
    return dataclasses.replace(folder, frames=folder.frames | {table: frame})


@pytest.mark.parametrize(
    ("table", "column", "factor"),
    [
        ("chillers", "rated_cop", 0.8),
        ("tanks", "discharge_limit_kw_th", 1.2),
        ("sites", "coupling_kw_per_k", 0.8),
    ],
)
def test_an_effect_is_what_a_folder_with_that_value_written_in_can_give_more(
    folder, found, table, column, factor
):
    tried = f"{100 * (factor - 1):+.0f} %"
    (one,) = [one for one in found.effects if (one.table, one.column, one.tried) == (table, column, tried)]
    written_in = sustained_kw(given(folder, table, column, factor))
    assert one.change_kw == pytest.approx(written_in.sum() - found.base_kw, abs=1e-6)


def test_some_effects_are_not_nothing_and_the_largest_column_comes_first(found):
    assert found.base_kw > 50.0
    size: dict[tuple[str, str], float] = {}
    for one in found.effects:
        size[one.table, one.column] = max(size.get((one.table, one.column), 0.0), abs(one.change_kw))
    assert list(size.values()) == sorted(size.values(), reverse=True)
    assert next(iter(size.values())) > 5.0
    assert {
        ("sites", "mass_kwh_per_k"),
        ("loads", "cooling_load_kw_th"),
        ("status", "inventory_kwh_th"),
    } <= set(size)


def test_columns_that_were_given_are_not_moved(found):
    assert ("sites", "strategy") not in {(one.table, one.column) for one in found.effects}


def test_the_trial_event_is_on_the_hottest_working_day_that_is_covered(folder, found):
    assert found.event == "2026-07-14 16:00 +03:00 to 2026-07-14 18:00 +03:00"
    assert str(trial_event(folder).start) == "2026-07-14T13:00:00.000000"
    weather = folder.frames["weather"].copy()
    weather.loc[weather["interval_start"] >= pd.Timestamp("2026-07-14T21:00Z"), "dry_bulb_c"] += 2.0
    hotter = dataclasses.replace(folder, frames=folder.frames | {"weather": weather})
    assert str(trial_event(hotter).start) == "2026-07-15T13:00:00.000000"


def test_without_a_whole_day_it_says_so_and_the_rest_of_the_report_stands(tmp_path):
    short = small_tables()["weather"].iloc[:120]
    path = write_small_fleet(tmp_path, weather=short, meters=None)
    message = (
        "effects: no day is covered by weather, prices and loads from 120 minutes before 16:00 to the end of the "
        "day after; add rows"
    )
    with pytest.raises(FleetError, match=f"^{re.escape(message)}$"):
        effects(open_folder(path))
    found = report(path, with_effects=True)
    assert found.effects is None
    assert f"  effects cannot be worked out: {message}" in lines(found)


def test_the_report_has_them_when_asked_and_says_how_to_ask(tmp_path, found, monkeypatch):
    monkeypatch.setattr("fleet.check.effects", lambda folder, progress: found)
    path = write_small_fleet(tmp_path, settings=SETTINGS, meters=None)
    assert lines(report(path))[-1] == f"what these are worth in kW: shedwright check {path} --effects"
    assert document(report(path))["effects"] is None
    asked = report(path, with_effects=True)
    assert document(asked)["effects"]["base_kw"] == pytest.approx(found.base_kw)
    assert lines(asked)[-len(effect_lines(found)) :] == effect_lines(found)


def test_effects_in_words(found):
    one = dataclasses.replace
    first, second = found.effects[:2]
    made = one(
        found,
        base_kw=1234.4,
        effects=(
            one(
                first,
                table="sites",
                column="x",
                tried="-20 %",
                change_kw=-12.3,
                most_site="ward",
                most_kw=-20.0,
            ),
            one(
                second, table="sites", column="x", tried="+20 %", change_kw=0.2, most_site="ward", most_kw=0.3
            ),
            one(
                second,
                table="tanks",
                column="y",
                tried="+20 %",
                change_kw=-0.1,
                most_site="ward",
                most_kw=0.3,
            ),
        ),
    )
    assert effect_lines(made) == [
        "worth of what is assumed: kW that all sites sustain over 2026-07-14 16:00 +03:00 to "
        "2026-07-14 18:00 +03:00, each for the whole of it,",
        "before feeder and call limits: 1,234 as assumed; the change when the assumed cells of one",
        "column take another value (and the site that it moves most):",
        "  sites.x: -20 % -12 kW (ward -20), +20 % +0 kW",
        "  no whole kW: tanks.y",
    ]
