"""The only door to Excel workbooks: sheets as headings and rows of plain values.

Owns finding the heading row, blank rows, and what cannot be read at all. What headings mean is mapping.py's, what
cells mean is cells.py's.
"""

import zipfile
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from fleet.errors import FleetError, Problem, Refused
from fleet.harmless import harmless

SETTINGS_SHEETS: Final = ("fleet", "settings", "general", "programme", "program", "project")
"""Sheets of this name hold one setting a row: its name, then its value."""
_MOST_BYTES: Final = 500_000_000
"""Most bytes a workbook may unpack to."""
_EPOCH_YEAR: Final = 1899
_FORMULA: Final = (b"<f>", b"<f ")


class Percent(float):
    """A number whose cell is shown in per cent: 0.45 stands for 45 %."""


@dataclass(frozen=True)
class Sheet:
    """One sheet: its headings, and its rows that are not blank, each with its row number in the workbook."""

    title: str
    headings: tuple[str, ...]
    heading_row: int
    rows: tuple[tuple[int, tuple[object, ...]], ...]
    blank_rows: int
    """rows without a value between the first and the last"""
    is_settings: bool = False
    """its headings stand in the first column, its one row in the second"""

    def values(self, heading: str) -> list[tuple[int, object]]:
        """Row number and value of every cell under a heading that is not empty."""
        place = self.headings.index(heading)
        return [(row, cells[place]) for row, cells in self.rows if cells[place] is not None]


def read_workbook(path: Path) -> list[Sheet]:
    """Sheets with a heading and values, in the workbook's order.

    Raises FleetError where it is no workbook of the .xlsx form, Refused for headings that stand twice and for
    formulas whose values were never saved.
    """
    _check_file(path)
    values = _cells(path, True)
    formulas = _cells(path, False) if _has_formulas(path) else None
    problems, sheets = [], []
    for title, rows in values.items():
        if formulas is not None:
            problems += _unsaved(path, title, rows, formulas[title])
        sheet = _sheet(title, rows)
        if sheet is not None:
            problems += _twice(path, sheet)
            sheets.append(sheet)
    if problems:
        raise Refused(problems)
    if not sheets:
        raise FleetError(f"{path.name}: holds no sheet with a heading and a row; fill one in")
    return sheets


def place(path: Path, title: str) -> str:
    """How messages name a sheet."""
    return f"{path.name}, sheet {title}"


Rows = list[tuple[object, ...]]


def _check_file(path: Path) -> None:
    advice = "save it as an Excel workbook (.xlsx)"
    if not path.is_file():
        raise FleetError(f"{path}: there is no such workbook; check the path")
    try:
        with zipfile.ZipFile(path) as packed:
            size = sum(part.file_size for part in packed.infolist())
            names = packed.namelist()
    except (zipfile.BadZipFile, OSError) as error:
        raise FleetError(f"{path.name}: is no Excel workbook ({error}); {advice}") from error
    if "xl/workbook.xml" not in names:
        raise FleetError(f"{path.name}: is no Excel workbook of the .xlsx form; {advice}")
    if size > _MOST_BYTES:
        raise FleetError(
            f"{path.name}: unpacks to {size / 1e6:,.0f} MB; expected at most {_MOST_BYTES / 1e6:,.0f} MB; "
            "give long tables as CSV or Parquet files in the fleet folder"
        )


def _has_formulas(path: Path) -> bool:
    with zipfile.ZipFile(path) as packed:
        parts = [name for name in packed.namelist() if name.startswith("xl/worksheets/")]
        return any(mark in packed.read(name) for name in parts for mark in _FORMULA)


def _cells(path: Path, saved_values: bool) -> dict[str, Rows]:
    """Every sheet's cells as plain values; with `saved_values` a formula's last result, else its text."""
    import openpyxl

    try:
        book = openpyxl.load_workbook(path, read_only=True, data_only=saved_values)
        from_1904 = book.epoch.year != _EPOCH_YEAR
        found = {harmless(one.title): [_plain_row(row) for row in one.iter_rows()] for one in book.worksheets}
        book.close()
    except Exception as error:
        # The library lets errors of every kind through for a damaged file.
        raise FleetError(
            f"{path.name}: cannot be read as a workbook ({type(error).__name__}: {error}); open it and save it again"
        ) from error
    if from_1904:
        raise FleetError(
            f"{path.name}: counts its days from 1904; switch the workbook's 1904 date system off and save it"
        )
    return found


def _plain_row(row: Iterable[Any]) -> tuple[object, ...]:
    return tuple(_plain(cell) for cell in row)


def _plain(cell: Any) -> object:
    value = cell.value
    if isinstance(value, str):
        return harmless(" ".join(value.replace("\u00a0", " ").split())) or None
    if isinstance(value, (int, float)) and not isinstance(value, bool) and "%" in str(cell.number_format):
        return Percent(value)
    return value


def _sheet(title: str, rows: Rows) -> Sheet | None:
    """The sheet from its first row with two or more filled cells on; None where there is no row below that."""
    if title.strip().lower() in SETTINGS_SHEETS:
        return _settings_sheet(title, rows)
    start = next((at for at, row in enumerate(rows) if sum(cell is not None for cell in row) > 1), None)
    if start is None:
        return None
    headings = tuple("" if cell is None else str(cell) for cell in rows[start])
    width = len(headings)
    filled = [
        (number, (*row, *[None] * width)[:width])
        for number, row in enumerate(rows[start + 1 :], start=start + 2)
        if any(cell is not None for cell in row)
    ]
    blank = filled[-1][0] - start - 1 - len(filled) if filled else 0
    return Sheet(title, headings, start + 1, tuple(filled), blank) if filled else None


def _settings_sheet(title: str, rows: Rows) -> Sheet | None:
    pairs = [
        (str(row[0]), row[1]) for row in rows if len(row) > 1 and row[0] is not None and row[1] is not None
    ]
    if not pairs:
        return None
    names, values = zip(*pairs, strict=True)
    return Sheet(title, names, 1, ((0, values),), 0, is_settings=True)


def _twice(path: Path, sheet: Sheet) -> list[Problem]:
    named = [heading for heading in sheet.headings if heading]
    again = dict.fromkeys(heading for heading in named if named.count(heading) > 1)
    row = None if sheet.is_settings else sheet.heading_row
    return [
        Problem(
            place(path, sheet.title), row, heading, "the heading twice", "each heading once", "rename one"
        )
        for heading in again
    ]


def _unsaved(path: Path, title: str, values: Rows, formulas: Rows) -> list[Problem]:
    """Formulas without a saved result: the first of each sheet, and how many."""
    lost = [
        (row, column)
        for row, (shown, written) in enumerate(zip(values, formulas, strict=False), start=1)
        for column, (value, text) in enumerate(zip(shown, written, strict=False), start=1)
        if value is None and text is not None
    ]
    if not lost:
        return []
    row, column = lost[0]
    came = f"a formula without a saved value (cells like this: {len(lost)})"
    advice = "open the workbook in its program and save it, or put the values in"
    return [Problem(place(path, title), row, f"number {column}", came, "a value", advice)]
