"""From a workbook and a confirmed mapping to the texts of a fleet folder.

Owns which sheet fills which file, and the account of what was converted, read specially or left out. A row of a table
keeps the number of its row in the sheet, so that later messages name both.
"""

from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from fleet.errors import Problem, Refused
from fleet.harmless import csv_text
from fleet.schema import Table
from fleet.settings import FILE
from fleet.starter import settings_text, table_text
from fleet.workbook.cells import Reader, reader
from fleet.workbook.mapping import EQUALS, Line, known_tables, unit_for
from fleet.workbook.sheets import Sheet, place
from fleet.workbook.units_named import Conversion

ASKED: Final = ("timezone", "currency")
"""Settings that nothing stands in for."""


@dataclass(frozen=True)
class Taken:
    """Files by name, and what is to be said about them."""

    files: dict[str, str]
    rows: dict[str, int]
    """rows of each table"""
    notes: tuple[str, ...]


def take(book: Path, sheets: Iterable[Sheet], lines: list[Line], given: dict[str, str | float]) -> Taken:
    """The fleet folder that a confirmed mapping makes of a workbook; `given` settings go before the workbook's.

    Raises Refused with every cell that cannot be read, and for settings that are missing.
    """
    known, titles = known_tables(), {sheet.title: sheet for sheet in sheets}
    problems: list[Problem] = []
    settings: dict[str, str | float] = {}
    files, rows, local, notes = {}, {}, [], []
    for name in [name for name in known if any(line.table == name for line in lines)]:
        own = [line for line in lines if line.table == name]
        sheet = titles[own[0].sheet]
        readers = _readers(book, own, known[name])
        cells = _columns(sheet, readers)
        problems += [problem for one in readers.values() for problem in one.problems]
        notes += _account(name, sheet, readers.values())
        if name == FILE:
            settings = _settings(cells, known[name])
            continue
        files[f"{name}.csv"], rows[name] = _filled(sheet, own, cells, known[name])
        if any(one.has_local for one in readers.values()):
            local.append(name)
    settings = {"name": book.stem} | settings | given
    problems += _missing(book, settings)
    if problems:
        raise Refused(problems, shown=20)
    notes += _unused(titles.values(), lines)
    text = settings_text(settings, tuple(local))
    notes += [f"{name}: times without an offset are local time, {settings['timezone']}" for name in local]
    return Taken({FILE: text} | files, rows, tuple(notes))


def _readers(book: Path, own: list[Line], table: Table) -> dict[str, Reader]:
    """A reader for each column that a heading fills."""
    spelt: dict[str, dict[str, str]] = {}
    for line in (line for line in own if EQUALS in line.column):
        name, _, ours = line.column.partition(EQUALS)
        spelt.setdefault(name, {})[line.heading.split(EQUALS)[-1]] = ours
    return {
        line.column: reader(
            place(book, line.sheet),
            line.heading,
            table.column(line.column),
            line.unit,
            unit_for(table.column(line.column)),
            spelt.get(line.column),
        )
        for line in own
        if EQUALS not in line.column and not line.heading.startswith("=")
    }


def _columns(sheet: Sheet, readers: dict[str, Reader]) -> dict[str, list[str]]:
    """Texts of each column, in the sheet's rows."""
    return {
        name: [one.text(number, cells[sheet.headings.index(one.heading)]) for number, cells in sheet.rows]
        for name, one in readers.items()
    }


def _filled(sheet: Sheet, own: list[Line], cells: dict[str, list[str]], table: Table) -> tuple[str, int]:
    """A table's CSV text and its number of rows; a row without any value of its columns is left blank."""
    made_up = {line.column: csv_text(line.heading[1:]) for line in own if line.heading.startswith("=")}
    words = set(table.of_type("text"))
    cells = {
        name: [csv_text(text) for text in texts] if name in words else texts for name, texts in cells.items()
    }
    kept = [at for at in range(len(sheet.rows)) if any(texts[at] for texts in cells.values())]
    count: Counter[str] = Counter()
    written: list[tuple[int, tuple[str, ...]]] = [(sheet.heading_row, (*made_up, *cells))]
    for at in kept:
        site = cells["site_id"][at] if "site_id" in cells else ""
        count[site] += 1
        ids = (pattern.replace("#", str(count[site])) for pattern in made_up.values())
        written.append((sheet.rows[at][0], (*ids, *(texts[at] for texts in cells.values()))))
    return table_text(written), len(kept)


def _settings(cells: dict[str, list[str]], table: Table) -> dict[str, str | float]:
    return {
        name: texts[0] if table.column(name).type == "text" else float(texts[0])
        for name, texts in cells.items()
        if texts[0]
    }


def _missing(book: Path, settings: dict[str, str | float]) -> list[Problem]:
    advice = "give it by --{}, or in a sheet Fleet with its name in the first column, its value in the second"
    return [
        Problem(book.name, None, name, "nothing", f"the fleet's {name}", advice.format(name))
        for name in ASKED
        if name not in settings
    ]


def _account(name: str, sheet: Sheet, readers: Iterable[Reader]) -> list[str]:
    """What was converted (with its first value) and what was read in a special way."""
    notes = []
    for one in readers:
        target = f"{name}.{one.column.name}"
        if one.conversion != Conversion() and one.first is not None:
            given, ours = one.first
            words = one.conversion.words(f"{sheet.title}: {one.heading}")
            notes.append(
                f"{target} = {words}; the first: {given:.6g} -> {ours:.6g} {one.column.unit}".rstrip()
            )
        notes += [f"{sheet.title}: {one.heading}: {count} {what}" for what, count in one.counts.items()]
        notes += [f"{sheet.title}: {one.heading}: {text!r} is {ours}" for text, ours in one.values.items()]
    if sheet.blank_rows:
        notes.append(f"{sheet.title}: {sheet.blank_rows} blank rows left out")
    return notes


def _unused(sheets: Iterable[Sheet], lines: list[Line]) -> list[str]:
    """Headings and whole sheets that fill nothing."""
    used = {(line.sheet, line.heading.split(EQUALS)[0]) for line in lines if line.column}
    used |= {(line.sheet, line.heading) for line in lines if line.column}
    notes = []
    for sheet in sheets:
        left = [heading for heading in sheet.headings if heading and (sheet.title, heading) not in used]
        if left:
            notes.append(f"not used: {sheet.title}: {', '.join(left)}")
    return notes
