from datetime import date, datetime, time

import openpyxl
import pytest
from made_workbook import two_sites, write_workbook

from fleet.begin import begin_from, suggest_mapping
from fleet.errors import FleetError, Refused
from fleet.schema import table
from fleet.workbook.cells import reader
from fleet.workbook.sheets import Percent, read_workbook


def read(name, column, value, unit="", our_unit=None):
    found = table("fleet", name).column(column)
    one = reader("b.xlsx, sheet S", "Heading", found, unit, our_unit or found.unit)
    return one.text(7, value), [str(problem) for problem in one.problems], dict(one.counts)


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (900, "900"),
        (900.25, "900.25"),
        ("900", "900"),
        ("900,5", "900.5"),
        ("0,125", "0.125"),
        ("1.250,5", "1250.5"),
        ("1,250.5", "1250.5"),
        ("1 250,5", "1250.5"),
        ("-3.5e2", "-350"),
        (None, ""),
    ],
)
def test_numbers(value, text):
    assert read("sites", "floor_area_m2", value, "m2")[:2] == (text, [])


@pytest.mark.parametrize(
    ("value", "message"),
    [
        (
            "1,250",
            "came '1,250'; expected a number that is one thing only: is it 1250 or 1.250?; write it without the comma",
        ),
        (
            "450 kW",
            "came '450 kW'; expected a number; put the number alone in the cell, its unit in the heading",
        ),
        ("nan", "came 'nan'; expected a number; put the number alone in the cell, its unit in the heading"),
        (True, "came True; expected a number; format the cell as a number and write it again"),
        (
            "#REF!",
            "came '#REF!' (an error of the spreadsheet); expected a value; mend the formula",
        ),
        (
            datetime(2026, 7, 15),
            "came 2026-07-15 00:00:00; expected a number; format the cell as a number and write it again",
        ),
    ],
)
def test_what_is_no_number_is_refused_with_sheet_row_and_column(value, message):
    text, problems, _ = read("sites", "floor_area_m2", value, "m2")
    assert (text, problems) == ("", [f"b.xlsx, sheet S, row 7, column Heading: {message}"])


def test_an_efficiency_of_nothing_is_refused():
    _, problems, _ = read("chillers", "rated_cop", 0, "kW/ton", "COP")
    assert problems == [
        "b.xlsx, sheet S, row 7, column Heading: came 0; expected a number above 0; correct it"
    ]


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (datetime(2026, 7, 15, 14, 0), "2026-07-15T14:00:00"),
        (datetime(2026, 7, 15, 13, 59, 59, 999_990), "2026-07-15T14:00:00"),
        (46218.583333333336, "2026-07-15T14:00:00"),  # 46218 = 15 July 2026 in the 1900 system
        (46218, "2026-07-15T00:00:00"),
        (date(2026, 7, 15), "2026-07-15"),
        ("2026-07-15T14:00+03:00", "2026-07-15T14:00+03:00"),
        ("2026-07-15 14:00", "2026-07-15 14:00"),
        ("15.07.2026 14:00", "2026-07-15T14:00:00"),
    ],
)
def test_times(value, text):
    assert read("weather", "interval_start", value)[:2] == (text, [])


@pytest.mark.parametrize("value", ["07/15/2026 14:00", "soon", "14:00", "July 15", time(14, 0)])
def test_times_that_could_be_read_two_ways_or_none_are_refused(value):
    _, problems, _ = read("weather", "interval_start", value)
    assert problems[0].endswith(
        "; expected a date cell or an ISO 8601 text; write 2026-07-15T14:00 (local), or with its offset "
        "2026-07-15T14:00+03:00"
    )


def test_a_small_number_is_no_date_serial():
    assert read("weather", "interval_start", 14.5)[1] == [
        "b.xlsx, sheet S, row 7, column Heading: came 14.5; expected a time; format the cell as date and time"
    ]


def test_days_hours_flags_and_percent():
    assert read("holidays", "date", datetime(2026, 8, 15))[0] == "2026-08-15"
    assert read("sites", "occupied_from_hour", time(7, 30), "h")[0] == "7.5"
    assert read("sites", "occupied_from_hour", "07:30", "h")[0] == "7.5"
    assert read("sites", "no_unmet", True)[0] == "true"
    assert read("weather", "rh_pct", Percent(0.45), "%") == (
        "45",
        [],
        {"cells shown in per cent taken as such": 1},
    )
    assert read("sites", "site_id", 101.0)[0] == "101"


def test_every_bad_cell_of_a_workbook_is_named_at_once_and_nothing_is_written(tmp_path):
    sheets = two_sites()
    sheets["Buildings"][2][2] = "180,000"
    sheets["Chillers"][1][3] = "260 tons"
    sheets["Weather"][5][0] = "07/14/2026 04:00"
    sheets["Weather"][6][1] = "#N/A"
    book = write_workbook(tmp_path / "towers.xlsx", sheets)
    mapping = suggest_mapping(tmp_path / "mine", book).mapping
    with pytest.raises(Refused) as caught:
        begin_from(tmp_path / "mine", book, mapping, {})
    assert [str(problem).split("; expected")[0] for problem in caught.value.problems] == [
        "towers.xlsx, sheet Buildings, row 3, column Floor Area (sq ft): came '180,000'",
        "towers.xlsx, sheet Chillers, row 2, column Capacity (tons): came '260 tons'",
        "towers.xlsx, sheet Weather, row 6, column Time: came '07/14/2026 04:00'",
        "towers.xlsx, sheet Weather, row 7, column Outdoor temperature (F): came '#N/A' (an error of the spreadsheet)",
    ]
    assert sorted(path.name for path in tmp_path.iterdir()) == ["towers.mapping.csv", "towers.xlsx"]


def test_what_is_no_workbook(tmp_path):
    (tmp_path / "a.xlsx").write_text("site_id,area\n")
    with pytest.raises(
        FleetError, match=r"^a\.xlsx: is no Excel workbook \(File is not a zip file\); save it as an "
    ):
        read_workbook(tmp_path / "a.xlsx")
    with pytest.raises(FleetError, match=r"none\.xlsx: there is no such workbook; check the path$"):
        read_workbook(tmp_path / "none.xlsx")
    book = write_workbook(tmp_path / "cut.xlsx")
    book.write_bytes(book.read_bytes()[:2000])
    with pytest.raises(FleetError, match=r"^cut\.xlsx: is no Excel workbook "):
        read_workbook(book)
    write_workbook(tmp_path / "empty.xlsx", {"Sites": [["Building"]]})
    with pytest.raises(
        FleetError, match=r"^empty\.xlsx: holds no sheet with a heading and a row; fill one in$"
    ):
        read_workbook(tmp_path / "empty.xlsx")


def test_headings_twice_and_formulas_nobody_saved(tmp_path):
    rows = {
        "Sites": [["Building", "Area m2", "Area m2"], ["a", 900, 900]],
        "Tanks": [["Building", "Size"], ["a", "=1+1"]],
    }
    with pytest.raises(Refused) as caught:
        read_workbook(write_workbook(tmp_path / "b.xlsx", rows))
    assert [str(problem) for problem in caught.value.problems] == [
        "b.xlsx, sheet Sites, row 1, column Area m2: came the heading twice; expected each heading once; rename one",
        "b.xlsx, sheet Tanks, row 2, column number 2: came a formula without a saved value (cells like this: 1); "
        "expected a value; open the workbook in its program and save it, or put the values in",
    ]


def test_percent_cells_and_spaces_are_seen_as_shown(tmp_path):
    book = openpyxl.Workbook()
    sheet = book.active
    sheet.title = "Weather"
    sheet.append(["Time ", " Humidity"])
    sheet.append([datetime(2026, 7, 15, 14), 0.45])
    sheet["B2"].number_format = "0%"
    book.save(tmp_path / "b.xlsx")
    (found,) = read_workbook(tmp_path / "b.xlsx")
    assert found.headings == ("Time", "Humidity")
    assert isinstance(found.rows[0][1][1], Percent)
