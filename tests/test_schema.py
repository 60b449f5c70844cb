import csv
from importlib.resources import files

import pytest

from fleet.errors import FleetError
from fleet.schema import FOLDERS, TYPES, choices, describe, table, tables
from sites.quotes import LIMITED_BY
from sites.roster import CHILLER_KINDS, LAYOUTS, STRATEGIES, TANK_KINDS

INPUTS = (
    "sites chillers tanks nodes node_loads weather loads tariffs bills "
    "status holidays plant_days meter_map meters"
)


def test_every_row_of_the_table_of_columns_is_well_formed():
    rows = describe()
    assert {row["folder"] for row in rows} == set(FOLDERS)
    for row in rows:
        column = table(row["folder"], row["table"]).column(row["name"])
        assert column.type in TYPES
        assert column.required in ("yes", "no", "size")
        assert column.meaning
        assert column.low is None or column.high is None or column.low < column.high
        if column.choices and column.default is not None:
            assert column.default in column.choices
        if isinstance(column.default, float):
            assert column.low is None or column.low <= column.default
            assert column.high is None or column.default <= column.high


def test_no_column_stands_twice_in_a_table():
    for folder in FOLDERS:
        for found in tables(folder).values():
            assert len(set(found.names)) == len(found.names), found.name


def test_tables_come_in_the_order_of_the_file():
    assert tuple(tables("fleet")) == tuple(INPUTS.split())
    text = files("fleet").joinpath("columns.csv").read_text(encoding="utf-8")
    rows = [row for row in csv.reader(text.splitlines()) if row[:2] == ["fleet", "tanks"]]
    assert table("fleet", "tanks").names == tuple(row[2] for row in rows)


def test_closed_lists_are_those_of_the_models():
    assert choices("fleet", "tanks", "kind") == TANK_KINDS
    assert choices("fleet", "chillers", "kind") == CHILLER_KINDS
    assert choices("fleet", "sites", "strategy") == STRATEGIES
    assert choices("fleet", "sites", "layout") == LAYOUTS
    assert choices("call", "windows", "limited_by") == LIMITED_BY
    assert choices("fleet", "sites", "site_id") == ()


def test_defaults_have_the_columns_own_type():
    sites = table("fleet", "sites")
    assert sites.column("no_unmet").default is False
    assert sites.column("supply_c").default == 5.0
    assert sites.column("building_type").default == "office"
    assert sites.column("air_kwh_per_k").default is None
    assert table("fleet", "meter_map").column("sign").default == 1


@pytest.mark.parametrize(
    ("folder", "name", "column", "expected"),
    [
        ("fleet", "sites", "floor_area_m2", "a number from 10 to 2000000 m2"),
        ("fleet", "sites", "call_fee", "a number of 0 money or more"),
        (
            "fleet",
            "tanks",
            "kind",
            "one of ice_internal_melt, ice_external_melt, chilled_water, ice_encapsulated, eutectic_salt",
        ),
        ("fleet", "node_loads", "other_kw", "a number in kW"),
        ("settlement", "sites", "penalty", "an exact amount of money of 0 money or less"),
        ("fleet", "bills", "cycle_end", "a date (YYYY-MM-DD)"),
    ],
)
def test_expected_words(folder, name, column, expected):
    assert table(folder, name).column(column).expected == expected


def test_unknown_names_are_refused_with_what_there_is():
    with pytest.raises(FleetError) as caught:
        table("settlement", "tanks")
    assert str(caught.value) == (
        "no table tanks among those of settlement; "
        "there are intervals, days, day_intervals, sites, fleet, postings"
    )
    with pytest.raises(FleetError) as caught:
        tables("settlements")
    assert str(caught.value) == (
        "no folder settlements in the table of columns; there are fleet, request, call, settlement"
    )
    with pytest.raises(FleetError) as caught:
        table("fleet", "holidays").column("day")
    assert str(caught.value) == "table fleet/holidays has no column day; it has date, name, source"
    with pytest.raises(FleetError, match=r"^no table tariff; there are bills, chillers, "):
        describe("tariff")


def test_describe_one_table_gives_its_rows_of_all_folders():
    assert {row["folder"] for row in describe("sites")} == {"fleet", "settlement"}
    assert [row["name"] for row in describe("holidays")] == ["date", "name", "source"]
