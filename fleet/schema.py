"""The one table of columns: what every table may hold, in which unit, within which bounds.

Owns reading `fleet/columns.csv` and asking it questions. Parquet types are derived in tables.py, validation
of input in folder.py; documentation prints `describe()`.
"""

import csv
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import Final, TypeAlias

from fleet.errors import FleetError

SCHEMA_VERSION: Final = 1
"""Written into every Parquet file; raised when the meaning of a column changes."""

FOLDERS: Final = ("fleet", "request", "call", "settlement")
TYPES: Final = ("text", "number", "whole", "flag", "time", "day", "decimal", "list_text", "list_number")
TYPE_WORDS: Final = {
    "text": "text",
    "number": "a number",
    "whole": "a whole number",
    "flag": "true or false",
    "time": "a time (ISO 8601)",
    "day": "a date (YYYY-MM-DD)",
    "decimal": "an exact amount of money",
    "list_text": "a list of texts",
    "list_number": "a list of numbers",
}
"""How a message names each type."""

Default: TypeAlias = str | float | int | bool | None


@dataclass(frozen=True)
class Column:
    """One column: its type is one of TYPES; `low` and `high` are None where unbounded."""

    name: str
    type: str
    unit: str
    low: float | None
    high: float | None
    required: str
    """yes, no, or size (one of the table's size columns must be given in each row)."""
    default: Default
    """In the column's own type; None where there is none, or where it depends on other columns."""
    choices: tuple[str, ...]
    meaning: str
    where: str
    """Where a real plant finds the value."""

    @property
    def expected(self) -> str:
        """What a value of this column must be, as a message says it."""
        if self.choices:
            return "one of " + ", ".join(self.choices)
        words = TYPE_WORDS[self.type]
        unit = f" {self.unit}" if self.unit else ""
        if self.low is not None and self.high is not None:
            return f"{words} from {self.low:.15g} to {self.high:.15g}{unit}"
        if self.low is not None:
            return f"{words} of {self.low:.15g}{unit} or more"
        if self.high is not None:
            return f"{words} of {self.high:.15g}{unit} or less"
        return words + (f" in{unit}" if unit else "")


@dataclass(frozen=True)
class Table:
    """One table: its columns in the order of files."""

    folder: str
    name: str
    columns: tuple[Column, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """Column names in order."""
        return tuple(column.name for column in self.columns)

    def column(self, name: str) -> Column:
        """One column by name; FleetError where the table has none of that name."""
        for column in self.columns:
            if column.name == name:
                return column
        raise FleetError(
            f"table {self.folder}/{self.name} has no column {name}; it has {', '.join(self.names)}"
        )

    def of_type(self, *types: str) -> tuple[str, ...]:
        """Names of the columns of these types."""
        return tuple(column.name for column in self.columns if column.type in types)


def table(folder: str, name: str) -> Table:
    """One table of a folder ("fleet", "request", "call" or "settlement"); FleetError names the tables there are."""
    found = tables(folder)
    if name not in found:
        raise FleetError(f"no table {name} among those of {folder}; there are {', '.join(found)}")
    return found[name]


def tables(folder: str) -> dict[str, Table]:
    """All tables of a folder by name, in the order of the table of columns."""
    if folder not in FOLDERS:
        raise FleetError(f"no folder {folder} in the table of columns; there are {', '.join(FOLDERS)}")
    return dict(_all()[folder])


def choices(folder: str, table_name: str, column: str) -> tuple[str, ...]:
    """The closed list of a column; empty where any value of its type will do."""
    return table(folder, table_name).column(column).choices


def describe(table_name: str | None = None) -> list[dict[str, str]]:
    """Rows of the table of columns as text, for printing; all tables, or those of this name.

    FleetError where no table has the name.
    """
    rows = [row for row in _rows() if table_name in (None, row["table"])]
    if not rows:
        names = sorted({row["table"] for row in _rows()})
        raise FleetError(f"no table {table_name}; there are {', '.join(names)}")
    return [dict(row) for row in rows]


@cache
def _rows() -> tuple[dict[str, str], ...]:
    text = files("fleet").joinpath("columns.csv").read_text(encoding="utf-8")
    return tuple(csv.DictReader(text.splitlines()))


@cache
def _all() -> dict[str, dict[str, Table]]:
    gathered: dict[str, dict[str, list[Column]]] = {folder: {} for folder in FOLDERS}
    for row in _rows():
        gathered[row["folder"]].setdefault(row["table"], []).append(_column(row))
    return {
        folder: {name: Table(folder, name, tuple(columns)) for name, columns in named.items()}
        for folder, named in gathered.items()
    }


def _column(row: dict[str, str]) -> Column:
    return Column(
        name=row["name"],
        type=row["type"],
        unit=row["unit"],
        low=float(row["low"]) if row["low"] else None,
        high=float(row["high"]) if row["high"] else None,
        required=row["required"],
        default=_default(row["type"], row["default"]),
        choices=tuple(row["choices"].split()),
        meaning=row["meaning"],
        where=row["where"],
    )


def _default(kind: str, text: str) -> Default:
    if not text:
        return None
    if kind == "number":
        return float(text)
    if kind == "whole":
        return int(text)
    if kind == "flag":
        return text == "true"
    return text
