"""Text that would steer a terminal, a spreadsheet or a page is shown harmlessly, wherever a field lets text in."""

import csv
import json
import re
from pathlib import Path

import pandas as pd
import pytest
from commands import ASK, run
from fleet_folders import SETTINGS, small_tables, write_small_fleet
from hypothesis import given, settings
from made_workbook import two_sites, write_workbook
from strategies import HOSTILE, hostile

from fleet.folder import open_folder
from fleet.harmless import csv_text, harmless, text_of_csv
from fleet.schema import tables
from fleet.seals import json_text

STEERING = re.compile("[\x00-\x09\x0b-\x1f\x7f-\x9f\u200e\u200f\u202a-\u202e\u2066-\u2069]")
"""Control characters but the line's end, and marks that turn text round."""
ALL_AT_ONCE = '=@"\x1b[31m\x9b2J\u202e{{ 7*7 }}\n\r\t\x07'
TEXT_COLUMNS = [
    (name, column.name)
    for name, table in tables("fleet").items()
    for column in table.columns
    if column.type == "text" and not column.choices
]


def written(folder: Path) -> str:
    """Everything that was written as text below `folder`."""
    found = sorted(path for path in folder.rglob("*") if path.suffix in (".txt", ".json", ".csv"))
    return "\n".join(path.read_text(encoding="utf-8") for path in found)


def renamed(by: str) -> dict[str, pd.DataFrame]:
    """The small fleet with `by` set before every id and into every free text."""
    made = small_tables()
    made["sites"]["site_words"] = f"contact={by}; {by}"
    made["holidays"]["name"] = by
    for name, frame in made.items():
        for column in frame.columns:
            if (name, column) in TEXT_COLUMNS and column.endswith("_id"):
                given = frame[column].astype(object)
                frame[column] = given.where(
                    given.isna() | (given == ""), given.map(lambda text: f"{by}{text}")
                )
        frame["" if name == "sites" else f"x{by}"] = "1"
    return made


def test_no_text_of_a_fleet_steers_what_reads_it(tmp_path):
    by = ALL_AT_ONCE
    fleet = write_small_fleet(tmp_path / "fleet", settings=SETTINGS, **renamed(by))
    said = [
        run("check", fleet),
        run("quote", fleet, *ASK),
        run("call", fleet, "--kw", "100", *ASK, "--event", "A"),
    ]
    said += [run("orders", fleet, "A"), run("settle", fleet, "A"), run("audit", fleet, "A")]
    said += [
        run("quote", fleet, *ASK, "--json"),
        run("check", fleet, "--json"),
        run("audit", fleet, "A", "--json"),
    ]
    said.append(run("call", fleet, "--kw", "100", *ASK, "--event", "B", "--node", "nowhere" + by))
    assert [ran.code for ran in said] == [0] * 9 + [2], [ran.err for ran in said]
    for ran in said:
        assert not STEERING.search(ran.out), ran.out
        assert not STEERING.search(ran.err), ran.err
    assert not STEERING.search(written(fleet / "events"))
    assert "49" not in json.loads((fleet / "events/A/orders-001/orders.json").read_text())[0]["contact"]
    names = [path.name for path in (fleet / "events").rglob("*")]
    assert all(re.fullmatch(r"[A-Za-z0-9._-]+", name) for name in names), names


@pytest.mark.parametrize(("name", "column"), TEXT_COLUMNS)
def test_a_hostile_cell_in_any_text_column_is_told_harmlessly(tmp_path, name, column):
    frame = small_tables().get(name)
    if frame is None:
        frame = pd.DataFrame(
            {"meter_id": ["harbour", "library", "ward"], "site_id": ["harbour", "library", "ward"]}
        )
    frame[column] = frame[column].astype(object) if column in frame else None
    frame.loc[0, column] = "\x1b]0;title\x07=1+1\u202e"
    fleet = write_small_fleet(tmp_path, **{name: frame})
    ran = run("check", fleet)
    assert ran.code in (0, 2)
    assert not STEERING.search(ran.out + ran.err)


@settings(deadline=None, max_examples=200)
@given(hostile)
def test_text_is_harmless_on_every_way_out(text):
    assert not STEERING.search(harmless(text))
    assert "\n" not in harmless(text)
    assert not STEERING.search(json_text({"x": text}))
    assert json.loads(json_text({"x": text})) == {"x": text}
    cell = csv_text(text)
    assert not STEERING.search(cell)
    assert not cell.startswith(("=", "+", "-", "@"))


@pytest.mark.parametrize("text", HOSTILE)
def test_plain_text_is_left_as_it_is(text):
    assert harmless("Grün & Söhne, 12 °C") == "Grün & Söhne, 12 °C"
    assert csv_text("a-b") == "a-b"
    if text.isprintable() and text[0] not in "=+-@":
        assert csv_text(text) == text


def test_a_workbook_full_of_formulas_makes_csv_without_any(tmp_path):
    """In what is suggested and in what is begun; the fleet reads the texts back as the workbook has them."""
    rows, by = two_sites(), {"Maple Court": "-1+1", "River Annex": "@maple \u202e-"}
    for name in ("Buildings", "Chillers", "Ice tanks"):
        rows[name] = [[by.get(str(row[0]).strip(), row[0]), *row[1:]] if row else row for row in rows[name]]
    rows["Buildings"][1][5] = "+cmd\x9b2J"
    write_workbook(tmp_path / "towers.xlsx", rows)
    suggested = run("begin", tmp_path / "mine", "--from", tmp_path / "towers.xlsx")
    mapping = tmp_path / "towers.mapping.csv"
    begun = run("begin", tmp_path / "mine", "--from", tmp_path / "towers.xlsx", "--mapping", mapping)
    assert (suggested.code, begun.code) == (2, 0), begun.err
    written = [mapping, *(tmp_path / "mine").glob("*.csv")]
    cells = [cell for path in written for row in csv.reader(path.open(newline="")) for cell in row]
    assert [cell for cell in cells if cell.startswith(("=", "@", "\t", "\r"))] == []
    assert [cell for cell in cells if re.match(r"[+-](?![\d.]+$)", cell)] == [], "but for numbers"
    assert {"'-1+1", "'@maple \\x202e-", "'=TES-#", "'+cmd\\x9b2J"} <= set(cells)
    assert not STEERING.search("".join(cells) + suggested.out + begun.out)
    sites = open_folder(tmp_path / "mine").frames["sites"]["site_id"]
    assert sites.tolist() == ["-1+1", "@maple \\x202e-"]


@given(hostile)
def test_a_cell_of_csv_is_read_back_as_the_text_it_was(text):
    assert text_of_csv(csv_text(text)) == harmless(text)
    assert text_of_csv("it's") == "it's"
