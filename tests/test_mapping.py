import csv
from dataclasses import replace

import pytest
from made_workbook import two_sites, write_workbook

from fleet.errors import FleetError, Refused
from fleet.workbook.mapping import as_text, known_tables, read_mapping, suggest
from fleet.workbook.sheets import read_workbook
from fleet.workbook.trade_words import COLUMN_WORDS, TABLE_WORDS, VALUE_WORDS


@pytest.fixture
def sheets(tmp_path):
    return read_workbook(write_workbook(tmp_path / "towers.xlsx"))


def suggested(tmp_path, sheets_of):
    return suggest(read_workbook(write_workbook(tmp_path / "book.xlsx", sheets_of)))


def brief(lines):
    return [
        (line.heading, f"{line.table}.{line.column}" if line.column else "", line.unit, line.status)
        for line in lines
    ]


def refused(tmp_path, sheets, lines):
    path = tmp_path / "edited.csv"
    path.write_text(as_text(lines), encoding="utf-8")
    with pytest.raises(Refused) as caught:
        read_mapping(path, sheets, "towers.xlsx")
    return [str(problem) for problem in caught.value.problems]


def test_headings_of_ones_own_are_recognised_with_their_units(sheets):
    found = brief(line for line in suggest(sheets) if line.sheet == "Chillers")
    assert found == [
        ("Building", "chillers.site_id", "", "synonym"),
        ("Tag", "chillers.chiller_id", "", "synonym"),
        ("Chiller type", "chillers.kind", "", "synonym"),
        ("Capacity (tons)", "chillers.capacity_kw_th", "ton", "synonym"),
        ("Efficiency (kW/ton)", "chillers.rated_cop", "kW/ton", "synonym"),
        ("Chiller type = Air-cooled", "chillers.kind = air_cooled_screw", "", "synonym"),
        ("Chiller type = Centrifugal", "chillers.kind = water_cooled_centrifugal", "", "synonym"),
    ]


def test_our_own_names_need_no_unit_and_misspelt_ones_are_marked_to_look_at(tmp_path):
    rows = [
        ["site_id", "chiller_id", "kind", "capacity_kw_th", "rated_copp"],
        ["a", "1", "air_cooled_screw", 500, 3],
    ]
    assert brief(suggested(tmp_path, {"chillers": rows})) == [
        ("site_id", "chillers.site_id", "", "same name"),
        ("chiller_id", "chillers.chiller_id", "", "same name"),
        ("kind", "chillers.kind", "", "same name"),
        ("capacity_kw_th", "chillers.capacity_kw_th", "kW", "same name"),
        ("rated_copp", "chillers.rated_cop", "", "unit missing: write it (COP or kW/ton or EER)"),
    ]


def test_a_bare_capacity_has_no_unit_until_its_user_writes_one(tmp_path):
    sheets = read_workbook(
        write_workbook(
            tmp_path / "book.xlsx", {"Machines": [["Building", "Kind", "Size"], ["a", "screw", 120]]}
        )
    )
    lines = suggest(sheets)
    (size,) = [line for line in lines if line.heading == "Size"]
    assert (size.column, size.unit) == ("capacity_kw_th", "")
    assert size.status == "unit missing: write it (kW or MW or ton or kBtu/h)"
    assert refused(tmp_path, sheets, lines) == [
        "edited.csv, row 4, column unit: came nothing; expected the unit of 'Size': kW or MW or ton or kBtu/h; "
        "write the unit its numbers are in"
    ]


def test_tons_are_no_unit_of_a_tank(tmp_path):
    rows = {"Tanks": [["Building", "Kind", "Capacity (tons)"], ["a", "chilled_water", 900]]}
    sheets = read_workbook(write_workbook(tmp_path / "book.xlsx", rows))
    assert (
        "expected the unit of 'Capacity (tons)': kWh or MWh or ton-h"
        in refused(tmp_path, sheets, suggest(sheets))[0]
    )


def test_a_value_of_a_closed_list_that_nobody_knows_must_be_said(tmp_path):
    rows = {"Tanks": [["Building", "Kind", "Capacity (kWh)"], ["a", "snow", 900], ["b", "chiled water", 900]]}
    sheets = read_workbook(write_workbook(tmp_path / "book.xlsx", rows))
    lines = suggest(sheets)
    snow, water = (line for line in lines if " = " in line.column)
    assert (water.heading, water.column, water.status) == (
        "Kind = chiled water",
        "kind = chilled_water",
        "alike: look at it",
    )
    assert snow.column == "kind = "
    assert snow.status.startswith("value unknown: write it (ice_internal_melt or ")
    (said,) = refused(tmp_path, sheets, lines)
    assert said.startswith(
        "edited.csv, row 6, column column: came nothing for 'snow'; expected one of ice_internal_melt, "
    )


def test_a_required_heading_that_is_not_there_is_named_and_must_be_written(tmp_path):
    book = {"Chillers": [["Tag", "Colour"], ["CH-1", "blue"]]}
    lines = suggested(tmp_path, book)
    assert brief(lines) == [
        ("Tag", "chillers.chiller_id", "", "synonym"),
        ("Colour", "", "", "not used"),
        ("", "chillers.site_id", "", "needed: write its heading"),
        ("", "chillers.kind", "", "needed: write its heading"),
        (
            "",
            "chillers.capacity_kw_th",
            "",
            "needed: write its heading (capacity_kw_th, in kW_th or capacity_ton, in ton)",
        ),
    ]
    sheets = read_workbook(tmp_path / "book.xlsx")
    told = "column heading: came nothing; expected the heading of sheet Chillers that gives"
    way = "write it, or =text for one text everywhere; if the sheet has none, add the column to it"
    assert refused(tmp_path, sheets, lines) == [
        f"edited.csv, row {row}, {told} chillers.{column}; {way}"
        for row, column in ((4, "site_id"), (5, "kind"), (6, "capacity_kw_th"))
    ]
    named = [replace(line, heading="=harbour") if line.column == "site_id" else line for line in lines]
    assert len(refused(tmp_path, sheets, named)) == 2


def test_two_headings_for_one_column_and_two_sheets_for_one_table(tmp_path):
    rows = {"Sites": [["Building", "Site name", "Area m2"], ["a", "b", 900]]}
    found = brief(suggested(tmp_path, rows))
    assert found[:2] == [("Building", "sites.site_id", "", "synonym"), ("Site name", "", "", "not used")]
    book = {
        "Weather": [["Time", "Temp C"], ["2026-07-15T14:00Z", 30]],
        "Forecast": [["Time", "RH %"], ["x", 4]],
    }
    lines = suggested(tmp_path, book)
    assert {line.table for line in lines if line.sheet == "Forecast"} == {""}


def test_a_line_that_does_not_fit_is_named_with_its_row(tmp_path, sheets):
    lines = suggest(sheets)
    at = next(place for place, line in enumerate(lines) if line.heading == "Architect")
    for change, message in (
        (
            {"table": "sites", "column": "architect"},
            "column column: came 'architect'; expected a column of sites; correct it, or leave table and column "
            "empty; `shedwright columns sites` lists them",
        ),
        (
            {"sheet": "Houses"},
            "column sheet: came 'Houses'; expected a sheet of towers.xlsx: Fleet, Buildings, Chillers, Ice tanks, "
            "Weather; correct it",
        ),
        (
            {"table": "sites", "column": "site_id"},
            "column column: came 'Architect' beside 'Building' (row 7); expected one heading for sites.site_id; "
            "leave table and column of one empty",
        ),
    ):
        found = refused(tmp_path, sheets, [*lines[:at], replace(lines[at], **change), *lines[at + 1 :]])
        assert found[0] == f"edited.csv, row {at + 2}, {message}"
    tank = replace(lines[at], table="tanks", column="capacity_ton_h", unit="ton-h")
    found = refused(tmp_path, sheets, [*lines[:at], tank, *lines[at + 1 :]])
    assert found[0].endswith(
        "column table: came sheet Ice tanks beside sheet Buildings; expected one sheet for tanks; put both in one "
        "sheet, or leave table and column of one empty"
    )
    left_out = refused(tmp_path, sheets, lines[:at] + lines[at + 1 :])
    assert left_out == [
        "edited.csv, column heading: came no line for heading Architect of sheet Buildings; expected a line for every "
        "heading; add the line (table and column empty = not used), or have the mapping suggested anew"
    ]


def test_an_edited_mapping_is_followed(tmp_path, sheets):
    path = tmp_path / "towers.mapping.csv"
    path.write_text(
        "\ufeff"
        + as_text(suggest(sheets)).replace(
            "Demand charge,sites,demand_price_per_kw,money/kW", "Demand charge,,,"
        )
    )
    lines = read_mapping(path, sheets, "towers.xlsx")
    assert [line.column for line in lines if line.heading == "Demand charge"] == [""]
    with path.open(encoding="utf-8-sig") as text:
        assert next(csv.reader(text)) == ["sheet", "heading", "table", "column", "unit", "status"]


def test_no_mapping_file_or_one_without_its_columns(tmp_path, sheets):
    with pytest.raises(FleetError, match=r"none\.csv: there is no such mapping file; check the path$"):
        read_mapping(tmp_path / "none.csv", sheets, "towers.xlsx")
    (tmp_path / "bad.csv").write_text("sheet,heading\nWeather,Time\n")
    with pytest.raises(FleetError) as caught:
        read_mapping(tmp_path / "bad.csv", sheets, "towers.xlsx")
    assert str(caught.value) == (
        "bad.csv: has no column table, column, unit; keep the heading sheet,heading,table,column,unit,status"
    )


def test_every_sheet_of_the_two_site_book_is_known(sheets):
    assert {line.sheet for line in suggest(sheets) if line.table} == set(two_sites())


def test_words_of_the_trade_speak_of_columns_and_values_that_exist():
    columns = [column for one in known_tables().values() for column in one.columns]
    assert set(COLUMN_WORDS) <= {column.name for column in columns}
    assert set(TABLE_WORDS) == set(known_tables())
    values = {choice for column in columns for choice in column.choices}
    assert set(VALUE_WORDS) <= values
    for name in ("tanks", "chillers"):
        assert set(known_tables()[name].column("kind").choices) <= set(VALUE_WORDS), "every kind has words"
