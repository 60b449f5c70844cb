"""One input table, cell by cell: headings, types, bounds and closed lists, from raw to typed.

Owns what can be said of a table alone. What tables say about each other is references.py's; reading files is
folder.py's. Every bad cell becomes a Problem and a missing value; nothing is filled or clipped.
"""

import re
from collections.abc import Iterable
from dataclasses import dataclass
from difflib import get_close_matches
from typing import Final

import numpy as np
import pandas as pd

from fleet.errors import Problem
from fleet.harmless import text_of_csv
from fleet.schema import Column, Table
from fleet.tables import stable
from fleet.wall_time import END_DAY, FIRST_DAY, SERIAL_PATTERN, not_a_serial, off_grid, read_times
from sites.units import AnyArray, Bools

KEYS: Final[dict[str, tuple[str, ...]]] = {
    "sites": ("site_id",),
    "chillers": ("site_id", "chiller_id"),
    "tanks": ("site_id", "tank_id"),
    "nodes": ("node_id",),
    "node_loads": ("node_id", "interval_start"),
    "weather": ("station_id", "interval_start"),
    "loads": ("site_id", "interval_start"),
    "tariffs": ("tariff_id", "interval_start"),
    "bills": ("site_id", "cycle_start"),
    "status": ("site_id", "unit_id", "time"),
    "holidays": ("date",),
    "plant_days": ("site_id", "day"),
    "meter_map": ("meter_id", "site_id", "role"),
}
"""What no two rows of a table may share; meters are told apart where they are read for settlement."""

MOST_NAMED: Final = 20
"""Problems of one kind in one column that are named one by one; the rest is counted in one more."""

_TRUE: Final = ("true", "1", "yes")
_FALSE: Final = ("false", "0", "no")
_NUMBER_SIGNS: Final = frozenset("0123456789.+-eE")
_NUMBER_PATTERN: Final = r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?"
_TYPO_LIKENESS: Final = 0.8
_DAY_PATTERN: Final = r"\d{4}-\d{2}-\d{2}(?:[T ]00:00(?::00(?:\.0+)?)?)?"


@dataclass(frozen=True)
class Reading:
    """How a table is to be read: its file's name, the reading of its times, the fleet's zone and grid."""

    file: str
    times: str
    timezone: str
    interval_minutes: int


@dataclass(frozen=True)
class Typed:
    """A table in the stable types (index: rows of the file), its problems, and notes on what was left aside."""

    frame: pd.DataFrame
    problems: list[Problem]
    notes: list[str]


def typed(raw: pd.DataFrame, table: Table, reading: Reading) -> Typed:
    """The raw table in the stable types of tables.py, all of its problems collected."""
    problems, notes = _headings(raw, table, reading.file)
    raw = raw.loc[:, ~raw.columns.duplicated()]
    columns: dict[str, pd.Series] = {}
    for column in (c for c in table.columns if c.name in raw.columns):
        given = raw[column.name]
        empty = _empty(given)
        if column.type == "time":
            values, bad, why = _times(given, raw, column, table, reading, notes)
        else:
            values, good = _cells(given, column)
            bad = ~(good | empty)
            words = np.full(len(given), column.expected, dtype=object)
            if column.type == "day":
                words[bad] = [_no_day(value, column.expected) for value in given[bad]]
            why = pd.Series(words, index=given.index)
        problems += _named(reading.file, column.name, given[bad], why[bad], _advice(column))
        if column.required == "yes":
            wanted = pd.Series(column.expected, index=given.index)
            problems += _named(reading.file, column.name, given[empty], wanted[empty], "fill it in")
        columns[column.name] = values
    frame = stable(pd.DataFrame(columns, index=raw.index), table)
    problems += _sizes(raw, frame, table, reading.file) + _duplicates(frame, table, reading.file)
    return Typed(frame, problems, notes)


def _headings(raw: pd.DataFrame, table: Table, file: str) -> tuple[list[Problem], list[str]]:
    problems, notes = [], []
    for name in raw.columns[raw.columns.duplicated()].unique():
        problems.append(Problem(file, 1, str(name), "the heading twice", "each heading once", "remove one"))
    absent = [c.name for c in table.columns if c.required == "yes" and c.name not in raw.columns]
    lower = {name.lower(): name for name in table.names}
    for name in dict.fromkeys(str(n) for n in raw.columns if n not in table.names):
        near = get_close_matches(name.lower(), table.names, n=1, cutoff=_TYPO_LIKENESS)
        likely = lower.get(name.lower()) or (near[0] if near else None)
        if likely:
            advice = f"rename it to {likely}, or give it a name that is not close to one"
            problems.append(Problem(file, 1, name, "an unknown column", "a known column", advice))
            absent = [column for column in absent if column != likely]
        else:
            notes.append(f"{file}: column {name or '(no heading)'} is not used")
    for column in absent:
        problems.append(Problem(file, 1, column, "no such column", "the column in the heading", "add it"))
    return problems, notes


def _cells(given: pd.Series, column: Column) -> tuple[pd.Series, Bools]:
    """Values in a plain type and the mask of the good ones; a bad or empty cell is missing."""
    if column.type == "text":
        return _texts(given, column)
    if column.type == "flag":
        return _flags(given)
    if column.type == "day":
        return _days(given)
    return _numbers(given, column)


def _texts(given: pd.Series, column: Column) -> tuple[pd.Series, Bools]:
    codes, uniques = pd.factorize(given.astype(object), use_na_sentinel=True)
    texts = [_text(value) for value in uniques]
    fits = [bool(text) and (not column.choices or text in column.choices) for text in texts]
    known = np.array([text if fit else None for text, fit in zip(texts, fits)] + [None], dtype=object)
    return pd.Series(known[codes], index=given.index), np.array([*fits, False])[codes]


def _text(value: object) -> str | None:
    """A cell as text, a spreadsheet's apostrophe taken off; whole numbers of Parquet count as ids; else None."""
    if isinstance(value, str):
        return text_of_csv(value.strip())
    if isinstance(value, (int, np.integer)) and not isinstance(value, bool):
        return str(value)
    return None


def _flags(given: pd.Series) -> tuple[pd.Series, Bools]:
    lower = given.astype(object).map(lambda value: str(value).lower(), na_action="ignore")
    yes, no = lower.isin(_TRUE).to_numpy(), lower.isin(_FALSE).to_numpy()
    values = pd.Series(pd.array(np.where(yes, True, False), dtype="boolean"), index=given.index)
    return values.mask(~(yes | no)), yes | no


def _days(given: pd.Series) -> tuple[pd.Series, Bools]:
    texts = given.astype(object).map(str, na_action="ignore")
    shaped = texts.str.fullmatch(_DAY_PATTERN).fillna(False).to_numpy(dtype=bool)
    days = pd.to_datetime(texts.where(shaped).str[:10], format="%Y-%m-%d", errors="coerce")
    days = days.where((days >= pd.Timestamp(FIRST_DAY)) & (days < pd.Timestamp(END_DAY)))
    return days.astype("datetime64[s]"), days.notna().to_numpy()


def _no_day(value: object, expected: str) -> str:
    """What was expected in place of a value that is no date."""
    text = str(value)
    if SERIAL_PATTERN.fullmatch(text):
        return not_a_serial(expected, text)
    return f"{expected} that exists, from 1970 to 2199" if re.fullmatch(_DAY_PATTERN, text) else expected


def _numbers(given: pd.Series, column: Column) -> tuple[pd.Series, Bools]:
    if pd.api.types.is_numeric_dtype(given.dtype) and not pd.api.types.is_bool_dtype(given.dtype):
        numbers = given.to_numpy(dtype=np.float64, na_value=np.nan)
    else:
        numbers = _number_cells(given)
    good = np.isfinite(numbers)
    if column.low is not None:
        good &= ~(numbers < column.low)
    if column.high is not None:
        good &= ~(numbers > column.high)
    if column.type == "whole":
        good &= numbers == np.round(numbers)
    values = pd.Series(np.where(good, numbers, np.nan), index=given.index)
    return values, good


def _number_cells(given: pd.Series) -> AnyArray:
    """Decimal numbers with a point; NaN for anything else ("nan", "1_000", "1,5", true)."""
    texts = given.astype(object)
    if pd.api.types.infer_dtype(texts, skipna=True) not in ("string", "empty"):
        plain = ~texts.map(lambda value: isinstance(value, (bool, np.bool_))).astype(bool)
        texts = texts.where(plain).map(str, na_action="ignore")
    if not _NUMBER_SIGNS.issuperset("".join(texts.dropna())):
        texts = texts.where(texts.str.fullmatch(_NUMBER_PATTERN).fillna(False).astype(bool))
    numbers: AnyArray = pd.to_numeric(texts, errors="coerce").to_numpy(dtype=np.float64)
    return numbers


def _times(
    given: pd.Series, raw: pd.DataFrame, column: Column, table: Table, reading: Reading, notes: list[str]
) -> tuple[pd.Series, Bools, pd.Series]:
    """UTC times, the mask of the bad ones and what was expected of each; notes count the repeated hour."""
    others = [
        name for name in KEYS.get(table.name, ("meter_id",)) if name in raw.columns and name != column.name
    ]
    key = raw.groupby(others, dropna=False, sort=False).ngroup() if others else pd.Series(0, index=raw.index)
    found = read_times(given, reading.times, reading.timezone, key)
    why = pd.Series(found.fault, index=given.index)
    if column.name == "interval_start":
        astray = off_grid(found.utc, reading.interval_minutes)
        grid = f"a time on the fleet's {reading.interval_minutes}-minute grid"
        why = pd.Series(np.where(astray, grid, why), index=given.index, dtype=object)
    bad = (why != "").to_numpy()
    if found.repeated_hour:
        notes.append(
            f"{reading.file}: {found.repeated_hour} rows of the repeated autumn hour told apart by their order"
        )
    utc = np.where(bad, np.datetime64("NaT"), found.utc).astype("datetime64[us]")
    return pd.Series(pd.DatetimeIndex(utc, tz="UTC"), index=given.index), bad, why


def _empty(given: pd.Series) -> Bools:
    mask: Bools = (given.isna() | (given.astype(object) == "")).to_numpy(dtype=bool)
    return mask


def _advice(column: Column) -> str:
    if column.type in ("number", "whole"):
        return "correct it (digits and a decimal point only), or leave it empty if it is not required"
    if column.type in ("time", "day"):
        return "correct it"
    return "correct the spelling" if column.choices else "correct it"


def _named(
    file: str, column: str, came: pd.Series, expected: pd.Series, advice: str, most: int = MOST_NAMED
) -> list[Problem]:
    """A Problem for each of the first rows, and one that counts the rest."""
    problems = [
        Problem(file, int(row), column, repr(value) if value not in ("", None) else "nothing", wanted, advice)
        for row, value, wanted in zip(came.index[:most], _plain(came[:most]), expected[:most])
    ]
    if len(came) > most:
        rest = len(came) - most
        row, wanted = int(came.index[most]), str(expected.iloc[most])
        problems.append(Problem(file, row, column, f"{rest} more rows like this", wanted, advice))
    return problems


def _plain(values: Iterable[object]) -> list[object]:
    """Values as Python's own, missing ones as None, so that a message shows them plainly."""
    plain = [value.item() if isinstance(value, np.generic) else value for value in values]
    return [None if value is None or value is pd.NaT or value != value else value for value in plain]


def _sizes(raw: pd.DataFrame, frame: pd.DataFrame, table: Table, file: str) -> list[Problem]:
    """Rows without any of the table's size columns."""
    sizes = [column.name for column in table.columns if column.required == "size"]
    if not sizes:
        return []
    present = [name for name in sizes if name in raw.columns]
    filled = np.zeros(len(raw), dtype=bool)
    for name in present:
        filled |= ~_empty(raw[name])
    lacking = pd.Series(None, index=frame.index[~filled], dtype=object)
    wanted = pd.Series(f"one of {', '.join(sizes)}", index=lacking.index)
    return _named(file, sizes[0], lacking, wanted, "give its size")


def _duplicates(frame: pd.DataFrame, table: Table, file: str) -> list[Problem]:
    """Rows whose key stands in a row before."""
    key = list(KEYS.get(table.name, ()))
    if not key:
        return []
    full = frame[key].notna().all(axis=1)
    again = frame[full & frame.duplicated(key)]
    if again.empty:
        return []
    named = again.head(MOST_NAMED)
    came = named[key].astype(str).agg(", ".join, axis=1).to_list() + [""] * (len(again) - len(named))
    wanted = pd.Series(f"each {', '.join(key)} once", index=again.index)
    advice = "remove one of the rows, or correct its key"
    return _named(file, key[-1], pd.Series(came, index=again.index, dtype=object), wanted, advice)
