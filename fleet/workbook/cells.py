"""A workbook's cells as the texts of our tables: numbers in our units, times in ISO 8601, closed values in our words.

Owns what a cell may look like. What cannot be read one way only is refused, with its sheet, row and heading.
Counts of what was read in a special way are kept, so that nothing happens in silence.
"""

import re
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import date, datetime, time, timedelta
from typing import Final

from fleet.errors import Problem
from fleet.schema import Column
from fleet.wall_time import TIME_PATTERN
from fleet.workbook.sheets import Percent
from fleet.workbook.units_named import Conversion, accepted

_SERIAL_DAY_0: Final = datetime(1899, 12, 30)
"""Day 0 of Excel's date serials (1900 system, from 1 March 1900 on)."""
_SERIALS: Final = (36526.0, 73050.0)
"""Serials taken as dates: the years 2000 to 2099."""
_POINT: Final = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_COMMA: Final = re.compile(r"[+-]?\d*,\d+")
_GROUPED: Final = re.compile(r"[+-]?\d{1,3}(?:,\d{3})+\.\d+|[+-]?\d{1,3}(?:\.\d{3})+,\d+")
_THOUSAND: Final = re.compile(r"[+-]?[1-9]\d{0,2},\d{3}")
_ISO: Final = re.compile(TIME_PATTERN)
_DOTTED: Final = re.compile(r"(\d{1,2})\.(\d{1,2})\.(\d{4})(?:[ T,]+(\d{1,2}):(\d{2})(?::(\d{2}))?)?")
_HOUR: Final = re.compile(r"(\d{1,2}):(\d{2})(?::\d{2})?")


@dataclass
class Reader:
    """Reads the cells of one heading; `place` is the sheet as messages name it."""

    place: str
    heading: str
    column: Column
    conversion: Conversion
    values: Mapping[str, str] = field(default_factory=dict)
    """closed values as the workbook spells them, to ours"""
    problems: list[Problem] = field(default_factory=list)
    counts: Counter[str] = field(default_factory=Counter)
    first: tuple[float, float] | None = None
    """first number as given and in our unit"""
    has_local: bool = False
    """True: a time came without an offset"""

    def text(self, row: int, value: object) -> str:
        """The cell's text for our table, "" for an empty cell or one that is refused."""
        if value is None:
            return ""
        try:
            if isinstance(value, str) and value.startswith("#"):
                raise _CannotRead("an error of the spreadsheet", "a value", "mend the formula")
            if self.column.type in ("number", "whole"):
                return self._number(value)
            if self.column.type == "time":
                return self._time(value)
            if self.column.type == "day":
                return self._time(value)[:10]
            if self.column.type == "flag":
                return str(value).lower()
            return self._plain(value)
        except _CannotRead as error:
            came = f"{_shown(value)} ({error.came})" if error.came else _shown(value)
            at = row if row else None
            self.problems.append(Problem(self.place, at, self.heading, came, error.expected, error.advice))
            return ""

    def _plain(self, value: object) -> str:
        if isinstance(value, float) and value.is_integer():
            value = int(value)
        if isinstance(value, (datetime, date, time)):
            raise _CannotRead("a date", "a text", "format the cell as text and write it again")
        return self.values.get(str(value), str(value))

    def _number(self, value: object) -> str:
        given = self._as_number(value)
        try:
            ours = self.conversion.ours(given)
        except ZeroDivisionError as error:
            raise _CannotRead("", "a number above 0", "correct it") from error
        if self.first is None:
            self.first = given, ours
        return f"{given:.15g}" if ours == given else f"{ours:.10g}"

    def _as_number(self, value: object) -> float:
        if isinstance(value, Percent) and self.column.unit == "%":
            self.counts["cells shown in per cent taken as such"] += 1
            return float(value) * 100.0
        if isinstance(value, (int, float)) and not isinstance(value, bool):
            return float(value)
        if isinstance(value, time) and self.column.unit == "h":
            return value.hour + value.minute / 60.0
        if not isinstance(value, str):
            raise _CannotRead("", "a number", "format the cell as a number and write it again")
        hour = _HOUR.fullmatch(value)
        if hour and self.column.unit == "h":
            return int(hour[1]) + int(hour[2]) / 60.0
        return self._from_text(value)

    def _from_text(self, text: str) -> float:
        bare = text.replace(" ", "")
        if _POINT.fullmatch(bare):
            self.counts["numbers written as text read as numbers"] += 1
            return float(bare)
        if _THOUSAND.fullmatch(bare):
            either = f"{bare.replace(',', '')} or {bare.replace(',', '.')}"
            raise _CannotRead(
                "", f"a number that is one thing only: is it {either}?", "write it without the comma"
            )
        if _COMMA.fullmatch(bare):
            self.counts["decimal commas read as points"] += 1
            return float(bare.replace(",", "."))
        if _GROUPED.fullmatch(bare):
            self.counts["numbers with thousands marks read without them"] += 1
            point = max(bare.rfind("."), bare.rfind(","))
            return float(re.sub(r"[.,]", "", bare[:point]) + "." + bare[point + 1 :])
        raise _CannotRead("", "a number", "put the number alone in the cell, its unit in the heading")

    def _time(self, value: object) -> str:
        if isinstance(value, datetime):
            return self._local(value)
        if isinstance(value, date):
            return value.isoformat()
        if isinstance(value, (int, float)) and not isinstance(value, bool):
            if not _SERIALS[0] <= float(value) < _SERIALS[1]:
                raise _CannotRead("", "a time", "format the cell as date and time")
            self.counts["date serials read as dates"] += 1
            return self._local(_SERIAL_DAY_0 + timedelta(days=float(value)))
        text = str(value)
        whole = _ISO.fullmatch(text)
        if whole:
            if not whole[3]:
                self.has_local = True
            return text
        dotted = _DOTTED.fullmatch(text)
        if dotted:
            self.counts["dates of the form 31.12.2026 read as day, month, year"] += 1
            return self._dotted(dotted)
        advice = "write 2026-07-15T14:00 (local), or with its offset 2026-07-15T14:00+03:00"
        raise _CannotRead("", "a date cell or an ISO 8601 text", advice)

    def _dotted(self, found: re.Match[str]) -> str:
        day, month, year, hour, minute, second = (int(part or 0) for part in found.groups())
        try:
            return self._local(datetime(year, month, day, hour, minute, second))
        except ValueError as error:
            raise _CannotRead("", "a date that exists", "correct it") from error

    def _local(self, moment: datetime) -> str:
        """Local wall time to the nearest second: a serial holds no more."""
        self.has_local = True
        rounded = moment + timedelta(microseconds=500_000)
        return rounded.replace(microsecond=0).isoformat()


class _CannotRead(Exception):  # noqa: N818
    def __init__(self, came: str, expected: str, advice: str) -> None:
        super().__init__(came)
        self.came, self.expected, self.advice = came, expected, advice


def reader(
    place: str,
    heading: str,
    column: Column,
    unit: str,
    our_unit: str,
    values: Mapping[str, str] | None = None,
) -> Reader:
    """A reader for the cells under a heading whose numbers are in `unit`, a key of `accepted(our_unit)`."""
    units = accepted(our_unit)
    return Reader(
        place, heading, column, units[unit] if unit else units.get(our_unit, Conversion()), values or {}
    )


def _shown(value: object) -> str:
    return repr(value) if isinstance(value, str) else str(value)
