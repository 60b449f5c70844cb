"""A stranger's own fleet: a new folder with examples, or one made from a workbook by a confirmed mapping.

Owns the order of steps and that a folder appears whole or not at all. What it holds comes from starter.py and
intake.py; whether it is right is `check`'s to say.
"""

import os
import shutil
from collections.abc import Mapping
from contextlib import suppress
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from fleet.check import report
from fleet.errors import FleetError
from fleet.settings import FILE, parse_settings
from fleet.starter import example_files, settings_text
from fleet.workbook.intake import take
from fleet.workbook.mapping import Line, as_text, read_mapping, suggest
from fleet.workbook.sheets import read_workbook


@dataclass(frozen=True)
class Begun:
    """A folder that was written."""

    path: Path
    files: tuple[str, ...]
    rows: dict[str, int]
    """rows of each table that a workbook filled; empty for a folder of examples"""
    notes: tuple[str, ...]
    to_mend: int
    """problems that `check` finds in it"""


@dataclass(frozen=True)
class Suggested:
    """A mapping that waits for its user's word; no folder was written."""

    book: Path
    mapping: Path
    lines: tuple[Line, ...]
    next_command: str


def begin(path: Path, given: Mapping[str, str | float]) -> Begun:
    """Write a folder of a commented fleet.toml and tables with one example row each; `given`: settings known already.

    Raises FleetError where the folder exists and is not empty, or cannot be written.
    """
    _check_free(path)
    files = example_files() | ({FILE: settings_text(given)} if given else {})
    parse_settings(files[FILE])
    _write_whole(path, files)
    return Begun(path, tuple(files), {}, (), len(report(path).problems))


def suggest_mapping(path: Path, book: Path) -> Suggested:
    """Write a suggested mapping of the workbook's headings beside the target folder; nothing else is written.

    Raises FleetError where the target is not free or a mapping file is there already, which may have been edited.
    """
    _check_free(path)
    mapping = path.absolute().parent / f"{book.stem}.mapping.csv"
    shown = path.parent / mapping.name
    again = f"shedwright begin {_quoted(path)} --from {_quoted(book)} --mapping {_quoted(shown)}"
    if mapping.exists():
        raise FleetError(
            f"{shown}: is there already; when it is right, confirm it: {again}; "
            "remove it to have a mapping suggested anew"
        )
    lines = suggest(read_workbook(book))
    try:
        mapping.parent.mkdir(parents=True, exist_ok=True)
        mapping.write_text(as_text(lines), encoding="utf-8")
    except OSError as error:
        raise FleetError(f"{shown}: cannot be written ({error.strerror or error}); mend that") from error
    return Suggested(book, shown, tuple(lines), again)


def begin_from(path: Path, book: Path, mapping: Path, given: Mapping[str, str | float]) -> Begun:
    """Write a folder from a workbook by a mapping its user has confirmed by naming its file.

    `given` settings go before the workbook's. Raises FleetError and Refused for anything that cannot be read.
    """
    _check_free(path)
    sheets = read_workbook(book)
    taken = take(book, sheets, read_mapping(mapping, sheets, book.name), dict(given))
    parse_settings(taken.files[FILE])
    _write_whole(path, taken.files)
    return Begun(path, tuple(taken.files), taken.rows, taken.notes, len(report(path).problems))


def begun_lines(begun: Begun) -> list[str]:
    """What was written, for a person."""
    lines = [f"{begun.path}: {len(begun.files)} files written"]
    lines += [f"  {name}: {count} rows" for name, count in begun.rows.items()]
    lines += [f"  {note}" for note in begun.notes]
    left = f"{begun.to_mend} places to fill in; " if begun.to_mend else ""
    return [*lines, f"{left}next: shedwright check {_quoted(begun.path)}"]


def begun_json(begun: Begun) -> dict[str, Any]:
    """The same as plain values."""
    return {
        "fleet": str(begun.path),
        "files": list(begun.files),
        "rows": begun.rows,
        "notes": list(begun.notes),
        "problems": begun.to_mend,
    }


def suggested_lines(suggested: Suggested) -> list[str]:
    """The suggestion as a table, and what to do next."""
    rows = [("sheet", "heading", "becomes", "unit", "status")]
    rows += [
        (
            line.sheet,
            line.heading,
            f"{line.table}.{line.column}" if line.column else "-",
            line.unit or "-",
            line.status,
        )
        for line in suggested.lines
    ]
    width = [max(len(row[place]) for row in rows) for place in range(4)]
    written = [
        "  ".join(cell.ljust(size) for cell, size in zip((*row, ""), (*width, 0, 0))).rstrip() for row in rows
    ]
    return [
        *written,
        "",
        f"Nothing is used yet. Read {suggested.mapping}, correct it where it is wrong (a table and column left",
        "empty: not used), fill in what is missing, then confirm it:",
        f"  {suggested.next_command}",
    ]


def suggested_json(suggested: Suggested) -> dict[str, Any]:
    """The same as plain values."""
    lines = [{key: value for key, value in asdict(line).items() if key != "row"} for line in suggested.lines]
    return {
        "workbook": str(suggested.book),
        "mapping": str(suggested.mapping),
        "confirmed": False,
        "lines": lines,
        "next": suggested.next_command,
    }


def _quoted(path: Path) -> str:
    text = str(path)
    return f'"{text}"' if " " in text else text


def _check_free(path: Path) -> None:
    if path.is_dir() and any(path.iterdir()):
        raise FleetError(f"{path}: is not empty; name a new folder, nothing was written")
    if path.exists() and not path.is_dir():
        raise FleetError(f"{path}: is a file; name a new folder, nothing was written")


def _write_whole(path: Path, files: Mapping[str, str]) -> None:
    """Write the files beside the target and move them there in one step; leftovers of a killed run are replaced."""
    target = path.absolute()
    made = target.parent / f".{target.name}.unfinished"
    try:
        if made.exists():
            shutil.rmtree(made)
        made.mkdir(parents=True)
        for name, text in files.items():
            with (made / name).open("w", encoding="utf-8", newline="") as stream:
                stream.write(text)
                stream.flush()
                os.fsync(stream.fileno())
        if target.exists():
            target.rmdir()
        made.rename(target)
    except OSError as error:
        with suppress(OSError):
            shutil.rmtree(made)
        raise FleetError(
            f"{path}: cannot be written ({error.strerror or error}); nothing was kept; "
            "free some space, mend the permissions or name another folder"
        ) from error
