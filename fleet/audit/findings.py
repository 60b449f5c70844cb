"""Findings of an audit: faults with file, row, column and rule, and how many values each rule looked at.

Owns how a fault is told and counted, and what "equal" means for floats. What is compared with what is the rules'
business (the other audit files). A `Sheet` is one table of a record with the place it came from.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
import pandas as pd

from sites.units import AnyArray, Bools, Floats

SHOWN: Final = 20
"""Faults kept per rule and file; the others are counted."""
RELATIVE: Final = 1e-9
"""Two floats worked out in another order differ by less than this share of the terms they were made of."""
KEYS: Final = (
    "site_id",
    "quote_id",
    "tank_id",
    "chiller_id",
    "unit_id",
    "node_id",
    "action",
    "kind",
    "interval_start",
    "day",
    "slot",
    "to_revision",
)


@dataclass(frozen=True)
class Fault:
    """One value that is not what the rest of the record says it must be."""

    rule: str
    file: str
    row: int | None
    """0-based row of the file; None where the fault is of the file as a whole"""
    key: str
    column: str | None
    found: str
    expected: str

    def __str__(self) -> str:
        place = self.file
        if self.row is not None:
            place += f", row {self.row}" + (f" ({self.key})" if self.key else "")
        if self.column:
            place += f", column {self.column}"
        return f"{self.rule}: {place}: found {self.found}; expected {self.expected}"


@dataclass(frozen=True)
class Sheet:
    """A table of the record and the file it stands in, relative to the event's folder."""

    file: str
    frame: pd.DataFrame

    def key(self, row: int) -> str:
        """What names a row: its ids and its time."""
        values = self.frame.iloc[row]
        return ", ".join(_told(name, values[name]) for name in KEYS if name in self.frame.columns)

    def numbers(self, column: str) -> Floats:
        """A column as floats (row,), NaN for none."""
        numbers: Floats = pd.to_numeric(self.frame[column]).to_numpy(dtype=np.float64, na_value=np.nan)
        return numbers


@dataclass
class Findings:
    """What an audit has found so far; filled by the rules."""

    faults: list[Fault] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    checked: dict[str, int] = field(default_factory=dict)
    hidden: dict[str, int] = field(default_factory=dict)
    """Faults beyond SHOWN, by rule and file"""

    def looked_at(self, rule: str, count: int) -> None:
        """Count values that a rule has looked at."""
        self.checked[rule] = self.checked.get(rule, 0) + int(count)

    def wrong(
        self, rule: str, sheet: Sheet, column: str | None, mask: Bools, found: Any, expected: Any
    ) -> None:
        """A fault for each row (row,) where `mask` is True; found and expected are per row, or one text."""
        self.looked_at(rule, mask.size)
        rows = np.flatnonzero(mask)
        for row in rows[: self._room(rule, sheet.file, rows.size)]:
            self.faults.append(
                Fault(
                    rule,
                    sheet.file,
                    int(row),
                    sheet.key(int(row)),
                    column,
                    _cell(found, row),
                    _cell(expected, row),
                )
            )

    def equal(
        self, rule: str, sheet: Sheet, column: str, expected: Floats, scale: Floats | float = 0.0
    ) -> None:
        """A number column must equal `expected` (row,), NaN where both have none.

        Allowed is RELATIVE of the largest of: both values, `scale` (the terms they were made of), 1.
        """
        found = sheet.numbers(column)
        target = np.broadcast_to(np.asarray(expected, dtype=np.float64), found.shape)
        self.wrong(rule, sheet, column, differs(found, target, scale), found, target)

    def same(self, rule: str, sheet: Sheet, column: str, expected: Any) -> None:
        """A column of times, texts or flags must equal `expected` (one value or (row,)); none equals none."""
        found = sheet.frame[column]
        target = pd.Series(expected, index=found.index)
        told, wanted = found.notna(), target.notna()
        both = (told & wanted).to_numpy(dtype=np.bool_)
        mask = np.array(told != wanted, dtype=np.bool_)
        if both.any():
            mask[both] = (found[both] != target[both]).to_numpy(dtype=np.bool_)
        self.wrong(rule, sheet, column, mask, found.to_numpy(), target.to_numpy())

    def most(
        self, rule: str, sheet: Sheet, column: str, most: Floats | float, scale: Floats | float = 0.0
    ) -> None:
        """A number column must not lie above `most` (row,)."""
        found = sheet.numbers(column)
        top = np.broadcast_to(np.asarray(most, dtype=np.float64), found.shape)
        mask = found > top + allowed(found, np.where(np.isfinite(top), top, 0.0), scale)
        self.wrong(
            rule,
            sheet,
            column,
            mask,
            found,
            np.array([f"at most {value:.9g}" for value in top], dtype=object),
        )

    def least(
        self, rule: str, sheet: Sheet, column: str, least: Floats | float, scale: Floats | float = 0.0
    ) -> None:
        """A number column must not lie below `least` (row,)."""
        found = sheet.numbers(column)
        low = np.broadcast_to(np.asarray(least, dtype=np.float64), found.shape)
        mask = found < low - allowed(found, low, scale)
        self.wrong(
            rule,
            sheet,
            column,
            mask,
            found,
            np.array([f"at least {value:.9g}" for value in low], dtype=object),
        )

    def value(self, rule: str, file: str, name: str, found: Any, expected: Any, scale: float = 0.0) -> None:
        """One value by name, of proof.json say: numbers within RELATIVE, all else exactly."""
        self.looked_at(rule, 1)
        if _is_number(found) and _is_number(expected):
            good = not bool(differs(np.array(float(found)), np.array(float(expected)), scale))
        else:
            good = found == expected
        if not good:
            self.tell(rule, file, name, _text(found), _text(expected))

    def tell(self, rule: str, file: str, column: str | None, found: str, expected: str) -> None:
        """A fault of a file as a whole, or of one named value in it."""
        self.looked_at(rule, 1)
        if self._room(rule, file, 1):
            self.faults.append(Fault(rule, file, None, "", column, found, expected))

    def _room(self, rule: str, file: str, wanted: int) -> int:
        """How many of `wanted` faults may be kept; the rest is counted."""
        kept = sum(1 for fault in self.faults if (fault.rule, fault.file) == (rule, file))
        room = max(min(SHOWN - kept, wanted), 0)
        if room < wanted:
            name = f"{rule}: {file}"
            self.hidden[name] = self.hidden.get(name, 0) + wanted - room
        return room


def allowed(found: Floats, expected: Floats, scale: Floats | float = 0.0) -> Floats:
    """What two floats may differ by: RELATIVE of the largest of both, of the terms they were made of, and of 1."""
    size = np.maximum(np.abs(np.nan_to_num(found)), np.abs(np.nan_to_num(expected)))
    result: Floats = RELATIVE * np.maximum(np.maximum(size, np.abs(scale)), 1.0)
    return result


def differs(found: Floats, expected: Floats, scale: Floats | float = 0.0) -> Bools:
    """Where two numbers are not equal; NaN equals NaN only."""
    none, other = np.isnan(found), np.isnan(expected)
    apart = np.abs(np.nan_to_num(found) - np.nan_to_num(expected)) > allowed(found, expected, scale)
    result: Bools = np.where(none | other, none != other, apart)
    return result


def names(values: Sequence[Any] | AnyArray, most: int = 5) -> str:
    """A few names in words, the rest counted."""
    listed = [str(value) for value in values]
    more = f" and {len(listed) - most} more" if len(listed) > most else ""
    return ", ".join(listed[:most]) + more


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float | np.number) and not isinstance(value, bool)


def _cell(values: Any, row: int) -> str:
    return _text(values if isinstance(values, str) else values[row])


def _text(value: Any) -> str:
    if isinstance(value, float | np.floating):
        return "none" if np.isnan(value) else f"{value:.9g}"
    if value is None or value is pd.NaT or value is pd.NA:
        return "none"
    if isinstance(value, pd.Timestamp | np.datetime64):
        return _time(value)
    if isinstance(value, list | tuple | np.ndarray):
        return "[" + ", ".join(_text(item) for item in value) + "]"
    return str(value)


def _told(name: str, value: Any) -> str:
    words = {
        "site_id": "site ",
        "node_id": "node ",
        "quote_id": "quote ",
        "slot": "slot ",
        "to_revision": "revision ",
    }
    if name == "day":
        return str(value)[:10]
    return words.get(name, "") + _text(value)


def _time(value: Any) -> str:
    stamp = pd.Timestamp(value)
    naive = stamp if stamp.tzinfo is None else stamp.tz_convert("UTC").tz_localize(None)
    return naive.strftime("%Y-%m-%dT%H:%M:%SZ").replace(":00Z", "Z")
