"""Which heading of a workbook becomes which column: suggested, written down for a person, read back confirmed.

Owns the mapping file and the matching of names. Nothing here touches cells' values but those of closed lists;
they are cells.py's. A mapping is used only when its user hands the file back.
"""

import csv
import io
from collections.abc import Iterable
from dataclasses import astuple, dataclass, fields, replace
from difflib import SequenceMatcher
from pathlib import Path
from typing import Final

from fleet.errors import FleetError, Problem, Refused
from fleet.harmless import csv_text, text_of_csv
from fleet.schema import Column, Table, tables
from fleet.settings import FILE
from fleet.tables import read_raw
from fleet.workbook.sheets import Sheet
from fleet.workbook.trade_words import COLUMN_WORDS, TABLE_WORDS, VALUE_WORDS
from fleet.workbook.units_named import MUST_BE_SAID, accepted, parted, plain_words, unit_of

SAME, SYNONYM, ALIKE, LACKS_UNIT, CONSTANT, LACKING, UNKNOWN, UNUSED = (
    "same name",
    "synonym",
    "alike: look at it",
    "unit missing: write it",
    "made up: no such heading",
    "needed: write its heading",
    "value unknown: write it",
    "not used",
)
"""Words of the status column: how sure the suggestion is. They are for the reader; only the other columns count."""
EQUALS: Final = " = "
"""Parts heading and value, and column and value, in rows that map a value of a closed list."""
_LIKENESS: Final = 0.8
_MOST_VALUES: Final = 30
_MADE_UP: Final = {
    "station_id": "=station",
    "tariff_id": "=tariff",
    "chiller_id": "=CH-#",
    "tank_id": "=TES-#",
}
"""Ids a workbook may lack: the same everywhere, or numbered within each site (#)."""
_SETTINGS: Final = (
    ("name", "text", ""),
    ("timezone", "text", ""),
    ("currency", "text", ""),
    ("energy_price_per_kwh", "number", "money/kWh"),
    ("interval_minutes", "whole", "min"),
    ("notice_minutes", "number", "min"),
    ("minimum_window_minutes", "number", "min"),
    ("shortfall_price_per_kwh", "number", "money/kWh"),
    ("capacity_payment_per_kwh", "number", "money/kWh"),
    ("energy_payment_per_kwh", "number", "money/kWh"),
    ("penalty_per_kwh", "number", "money/kWh"),
    ("settlement_rule", "text", ""),
    ("country", "text", ""),
    ("subdivision", "text", ""),
)


@dataclass(frozen=True)
class Line:
    """One row of a mapping file; `row` is its line there, 0 in a suggestion."""

    sheet: str
    heading: str
    """"=text" where the workbook has no such heading: the same text everywhere, # numbered within each site"""
    table: str
    column: str
    unit: str
    status: str
    row: int = 0


_HEADINGS: Final = tuple(field.name for field in fields(Line) if field.name != "row")


def known_tables() -> dict[str, Table]:
    """The input tables, and the settings as one more of a single row."""
    columns = tuple(
        Column(name, kind, unit, None, None, "no", None, (), "", "") for name, kind, unit in _SETTINGS
    )
    return dict(tables("fleet")) | {FILE: Table("fleet", FILE, columns)}


def unit_for(column: Column) -> str:
    """The unit of a column as units_named.py knows it."""
    return "COP" if column.name == "rated_cop" else column.unit


def suggest(sheets: Iterable[Sheet]) -> list[Line]:
    """A line for each heading of each sheet, in order, then for made-up ids and for values of closed lists."""
    lines: list[Line] = []
    taken: set[str] = set()
    for sheet in sheets:
        table = _table_for(sheet, taken)
        if table is None:
            lines += [Line(sheet.title, heading, "", "", "", UNUSED) for heading in sheet.headings if heading]
            continue
        taken.add(table.name)
        found = _columns_for(sheet, table)
        lines += found
        named = {line.column for line in found}
        lines += _unnamed(sheet, table, named)
        for line in found:
            if line.column:
                lines += _values_for(sheet, line, table.column(line.column))
    return lines


def _unnamed(sheet: Sheet, table: Table, named: set[str]) -> list[Line]:
    """Lines for required columns that no heading stands for: an id made up, or one left to the user to name. Of the
    columns that give one size, the first is named when all are lacking."""
    lines = []
    for column in table.columns:
        if column.required == "yes" and column.name not in named:
            made_up = _MADE_UP.get(column.name, "")
            lines.append(
                Line(sheet.title, made_up, table.name, column.name, "", CONSTANT if made_up else LACKING)
            )
    sizes = [column.name for column in table.columns if _is_size(column)]
    if sizes and not named.intersection(sizes):
        ways = " or ".join(f"{name}, in {unit_for(table.column(name))}" for name in sizes)
        lines.append(Line(sheet.title, "", table.name, sizes[0], "", f"{LACKING} ({ways})"))
    return lines


def as_text(lines: Iterable[Line]) -> str:
    """The mapping file's text."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(_HEADINGS)
    writer.writerows([csv_text(cell) for cell in astuple(line)[: len(_HEADINGS)]] for line in lines)
    return out.getvalue()


def read_mapping(path: Path, sheets: Iterable[Sheet], book: str) -> list[Line]:
    """The lines of a mapping file that a person gives, held against the workbook and the table of columns.

    Raises FleetError where it cannot be read, Refused with everything that does not fit.
    """
    if not path.is_file():
        raise FleetError(f"{path}: there is no such mapping file; check the path")
    raw = read_raw(path)
    lacking = [name for name in _HEADINGS if name not in raw.columns and name != "status"]
    if lacking:
        raise FleetError(
            f"{path.name}: has no column {', '.join(lacking)}; keep the heading {','.join(_HEADINGS)}"
        )
    raw["status"] = raw["status"] if "status" in raw.columns else ""
    columns = [[text_of_csv(str(cell)) for cell in raw[name]] for name in _HEADINGS]
    lines = [replace(Line(*cells), row=int(row)) for row, *cells in zip(raw.index, *columns, strict=True)]
    problems = _faults(path.name, lines, {sheet.title: sheet for sheet in sheets}, book)
    if problems:
        raise Refused(problems, shown=20)
    return lines


def _table_for(sheet: Sheet, taken: set[str]) -> Table | None:
    """The table a sheet's name stands for and no sheet before it did."""
    title, known = plain_words(sheet.title), known_tables()
    if sheet.is_settings:
        return known[FILE]
    best, most = None, _LIKENESS
    for name, words in TABLE_WORDS.items():
        if name in taken or name == FILE:
            continue
        likeness = max(_likeness(title, word) for word in (plain_words(name), *words.split(";")))
        if likeness >= most and (best is None or likeness > most):
            best, most = name, likeness
    return known[best] if best else None


def _likeness(one: str, other: str) -> float:
    return 1.0 if one == other else min(SequenceMatcher(None, one, other).ratio(), 0.99)


def _columns_for(sheet: Sheet, table: Table) -> list[Line]:
    """The best column for each heading; of two headings for one column the likelier has it."""
    offers = []
    for place, heading in enumerate(sheet.headings):
        for column in table.columns if heading else ():
            score, status = _score(heading, column)
            if score:
                offers.append((-score, place, column, status))
    chosen: dict[int, tuple[Column, str]] = {}
    for _, place, column, status in sorted(offers, key=lambda offer: offer[:2]):
        if place not in chosen and column.name not in {one.name for one, _ in chosen.values()}:
            chosen[place] = column, status
    return [
        _line(sheet, heading, table, *chosen[place])
        if place in chosen
        else Line(sheet.title, heading, "", "", "", UNUSED)
        for place, heading in enumerate(sheet.headings)
        if heading
    ]


def _score(heading: str, column: Column) -> tuple[float, str]:
    """How well a heading names a column (0 = not at all), and the word for it."""
    if plain_words(heading) == plain_words(column.name):
        return 4.0, SAME
    words, unit = parted(heading)
    own, _ = parted(column.name)
    fits = unit is None or unit in accepted(unit_for(column)) or _is_bare(column)
    if not fits and not _is_size(column):
        return 0.0, UNUSED
    names = [own, plain_words(column.name), *COLUMN_WORDS.get(column.name, "").split(";")]
    likeness = max(_likeness(words, name) for name in names if name)
    bonus = 0.5 if unit is not None and unit in accepted(unit_for(column)) else 0.0
    if likeness == 1.0:
        return 2.0 + bonus, SYNONYM
    return (likeness + bonus, ALIKE) if likeness >= _LIKENESS else (0.0, UNUSED)


def _is_bare(column: Column) -> bool:
    """A column that has no unit: whatever stands in brackets is a remark."""
    return not unit_for(column)


def _is_size(column: Column) -> bool:
    return column.required == "size"


def _line(sheet: Sheet, heading: str, table: Table, column: Column, status: str) -> Line:
    """The suggestion with its unit: the heading's, ours where the name is ours or there is no other."""
    ours = unit_for(column)
    units = accepted(ours)
    said = parted(heading)[1]
    if ours == "COP" and said is None:
        said = unit_of(parted(heading)[0].removeprefix("rated "))
    if status == SAME:
        return Line(sheet.title, heading, table.name, column.name, next(iter(units)), status)
    if said in units:
        return Line(sheet.title, heading, table.name, column.name, said or "", status)
    if ours in MUST_BE_SAID:
        wanted = f"{LACKS_UNIT} ({' or '.join(units)})"
        return Line(sheet.title, heading, table.name, column.name, "", wanted)
    return Line(sheet.title, heading, table.name, column.name, ours, status)


def _values_for(sheet: Sheet, line: Line, column: Column) -> list[Line]:
    """Lines for the values of a closed list that are not spelt as ours."""
    if not column.choices:
        return []
    texts = dict.fromkeys(str(value) for _, value in sheet.values(line.heading))
    lines = []
    for text in [text for text in texts if text not in column.choices][:_MOST_VALUES]:
        ours, status = _choice_for(text, column.choices)
        heading, target = f"{line.heading}{EQUALS}{text}", f"{column.name}{EQUALS}{ours}"
        lines.append(Line(sheet.title, heading, line.table, target, "", status))
    return lines


def _choice_for(text: str, choices: tuple[str, ...]) -> tuple[str, str]:
    words = plain_words(text)
    best, most = "", 0.0
    for choice in choices:
        names = (plain_words(choice), *VALUE_WORDS.get(choice, "").split(";"))
        likeness = max(_likeness(words, name) for name in names if name)
        if likeness > most:
            best, most = choice, likeness
    if words == plain_words(best):
        return best, SAME
    if most == 1.0:
        return best, SYNONYM
    return (best, ALIKE) if most >= _LIKENESS else ("", f"{UNKNOWN} ({' or '.join(choices)})")


def _faults(file: str, lines: list[Line], sheets: dict[str, Sheet], book: str) -> list[Problem]:
    """What does not fit, line by line; then headings no line speaks of; then two lines for one column."""
    known = known_tables()
    problems = []
    for line in lines:
        problem = _fault(file, line, sheets, known, book)
        if problem is not None:
            problems.append(problem)
    spoken = {(line.sheet, line.heading) for line in lines}
    for sheet in sheets.values():
        for heading in sheet.headings:
            if heading and (sheet.title, heading) not in spoken:
                came = f"no line for heading {heading} of sheet {sheet.title}"
                advice = (
                    "add the line (table and column empty = not used), or have the mapping suggested anew"
                )
                problems.append(Problem(file, None, "heading", came, "a line for every heading", advice))
    return problems + _clashes(file, [line for line in lines if line.column])


def _fault(
    file: str, line: Line, sheets: dict[str, Sheet], known: dict[str, Table], book: str
) -> Problem | None:
    sheet = sheets.get(line.sheet)
    if sheet is None:
        named = ", ".join(sheets)
        return Problem(file, line.row, "sheet", repr(line.sheet), f"a sheet of {book}: {named}", "correct it")
    heading, _, value = line.heading.partition(EQUALS)
    name, mark, ours = f"{line.column} ".partition(EQUALS)
    name, ours, is_value = name.strip(), ours.strip(), bool(mark)
    if (
        not line.heading.startswith("=")
        and line.heading not in sheet.headings
        and not (heading in sheet.headings and (is_value or not line.column))
    ):
        if not line.heading and line.column:
            advice = "write it, or =text for one text everywhere; if the sheet has none, add the column to it"
            expected = f"the heading of sheet {line.sheet} that gives {line.table}.{line.column}"
            return Problem(file, line.row, "heading", "nothing", expected, advice)
        return Problem(
            file, line.row, "heading", repr(line.heading), f"a heading of sheet {line.sheet}", "correct it"
        )
    if not line.column and not line.table:
        return None
    if line.table not in known:
        return Problem(file, line.row, "table", repr(line.table), f"one of {', '.join(known)}", "correct it")
    table = known[line.table]
    if name not in table.names:
        advice = f"correct it, or leave table and column empty; `shedwright columns {line.table}` lists them"
        return Problem(file, line.row, "column", repr(line.column), f"a column of {line.table}", advice)
    column = table.column(name)
    if is_value:
        if ours in column.choices:
            return None
        came, expected = (
            repr(ours) if ours else f"nothing for {value!r}",
            f"one of {', '.join(column.choices)}",
        )
        return Problem(file, line.row, "column", came, expected, f"write {name}{EQUALS}... with one of them")
    units = accepted(unit_for(column))
    if line.unit in units or (not line.unit and unit_for(column) not in MUST_BE_SAID):
        return None
    came = repr(line.unit) if line.unit else "nothing"
    expected = f"the unit of {line.heading!r}: {' or '.join(unit or 'empty' for unit in units)}"
    return Problem(file, line.row, "unit", came, expected, "write the unit its numbers are in")


def _clashes(file: str, lines: list[Line]) -> list[Problem]:
    """Two headings for one column; two sheets for one table."""
    problems: list[Problem] = []
    column_of: dict[tuple[str, ...], Line] = {}
    sheet_of: dict[str, str] = {}
    for line in lines:
        key = (
            (line.table, line.column)
            if EQUALS not in line.column
            else (line.table, line.column, line.heading)
        )
        first = column_of.setdefault(key, line)
        if first is not line:
            came = f"{line.heading!r} beside {first.heading!r} (row {first.row})"
            expected = f"one heading for {line.table}.{line.column}"
            problems.append(
                Problem(file, line.row, "column", came, expected, "leave table and column of one empty")
            )
        owner = sheet_of.setdefault(line.table, line.sheet)
        if owner != line.sheet:
            came = f"sheet {line.sheet} beside sheet {owner}"
            advice = "put both in one sheet, or leave table and column of one empty"
            problems.append(Problem(file, line.row, "table", came, f"one sheet for {line.table}", advice))
    return problems
