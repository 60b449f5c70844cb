"""Local wall time: the only place where it turns into UTC and back.

Owns reading times as people and tables write them, the fleet's grid, and the local hour, weekday and day of each
interval. Inside, everything else is UTC (datetime64[us]), interval start.
"""

import re
from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd

from fleet.errors import FleetError
from sites.clock import Clock
from sites.units import AnyArray, Bools, Floats, Ints, Times

TIME_PATTERN: Final = (
    r"(\d{4}-\d{2}-\d{2})(?:[T ](\d{2}:\d{2}(?::\d{2}(?:\.\d{1,6})?)?))?(Z|[+-]\d{2}:?\d{2})?"
)
_WHOLE: Final = re.compile(TIME_PATTERN)
_DAY_US: Final = 86_400_000_000
FIRST_DAY: Final = np.datetime64("1970-01-01", "us")
END_DAY: Final = np.datetime64("2200-01-01", "us")
WITHIN: Final = "a time from 1970 to 2199"
"""Times outside are slips of the pen, and some zones have no rules for them."""
SERIAL_PATTERN: Final = re.compile(r"[2-9]\d{4}(?:\.\d+)?")
_SERIAL_ZERO: Final = pd.Timestamp("1899-12-30")
"""Day 0 of spreadsheets' day numbers (1 is 1 January 1900, and a 29 February 1900 is counted)."""


@dataclass(frozen=True)
class ReadTimes:
    """Times of a table in UTC, shape (row,), NaT where `fault` (row,) says what was expected ("" = no fault)."""

    utc: Times
    fault: AnyArray
    repeated_hour: int
    """Rows of the repeated autumn hour that were told apart by their order in the file."""


def parse_time(text: str, timezone: str, interval_minutes: int | None = None) -> np.datetime64:
    """UTC time of an ISO 8601 text with an offset, or of local wall time in `timezone`.

    Raises FleetError where it is no time, where the local time does not exist or exists twice (both readings are
    named), and, with `interval_minutes`, where it is not on the grid.
    """
    found = _WHOLE.fullmatch(text.strip())
    if found is None:
        raise FleetError(
            f"time {text!r}: expected ISO 8601 such as 2026-07-14T16:00+03:00, "
            "or local time such as 2026-07-14T16:00"
        )
    series = pd.Series([text.strip()], dtype=object)
    read = read_times(series, "offset" if found.group(3) else "local", timezone, pd.Series([0]))
    if read.fault[0]:
        raise FleetError(f"time {text!r}: expected {read.fault[0]}")
    time = as_us(read.utc[0])
    return time if interval_minutes is None else on_grid(time, interval_minutes, timezone)


def on_grid(time: np.datetime64, step_minutes: int, timezone: str = "UTC") -> np.datetime64:
    """`time` itself where it lies on the grid of full steps from 1970 (UTC).

    Raises FleetError naming the two nearest times on the grid, in `timezone`, where it does not.
    """
    step = step_minutes * 60_000_000
    whole, rest = divmod(_micros(time), step)
    if rest:
        below, above = (local_text(_from_micros(whole * step + more), timezone) for more in (0, step))
        raise FleetError(
            f"time {local_text(time, timezone, 'seconds')} is not on the {step_minutes}-minute grid; "
            f"nearest are {below} and {above}"
        )
    return as_us(time)


def up_to_grid(time: np.datetime64, step_minutes: int) -> np.datetime64:
    """First time on the grid at or after `time`."""
    step = step_minutes * 60_000_000
    return _from_micros(-(-_micros(time) // step) * step)


def off_grid(times: Times, step_minutes: int) -> Bools:
    """Mask of the times, any shape, that are not on the grid; NaT is not counted."""
    micros = times.astype("datetime64[us]")
    whole, step = micros.astype(np.int64), step_minutes * 60_000_000
    # Not by %: numpy divides millions of numbers by one far faster.
    mask: Bools = (whole // step * step != whole) & ~np.isnat(micros)
    return mask


def local_text(time: np.datetime64, timezone: str, precision: str = "minutes") -> str:
    """A UTC time as local wall time with its offset: 2026-07-14 16:00 +03:00."""
    local = utc_timestamp(time).tz_convert(timezone)
    offset = local.strftime("%z")
    clock = "%H:%M:%S" if precision == "seconds" else "%H:%M"
    return f"{local.strftime('%Y-%m-%d ' + clock)} {offset[:3]}:{offset[3:5]}"


def local_day_start(day: np.datetime64, timezone: str) -> np.datetime64:
    """UTC time at which a local calendar day begins (its first instant, where midnight does not exist)."""
    midnight = pd.Timestamp(day).tz_localize(timezone, ambiguous=True, nonexistent="shift_forward")
    return as_us(midnight.tz_convert("UTC").tz_localize(None).to_datetime64())


def local_day(time: np.datetime64, timezone: str) -> np.datetime64:
    """Local calendar day (datetime64[D]) of a UTC time."""
    day: np.datetime64 = _local(np.array([time]), timezone).astype("datetime64[D]")[0]
    return day


def local_parts(clock: Clock, timezone: str, holidays: pd.DataFrame) -> tuple[Floats, Ints, Ints, Bools]:
    """Local hour, weekday (0 = Monday), day (since 1970-01-01) and holiday of each interval, each (interval,).

    `holidays` is the input table of that name (column date).
    """
    local = _local(clock.starts, timezone)
    days = local.astype("datetime64[D]")
    day = days.astype(np.int64)
    hour = (local.astype(np.int64) - day * _DAY_US) / 3.6e9
    weekday = (day + 3) % 7
    closed = holidays["date"].to_numpy().astype("datetime64[D]")
    return hour, weekday, day, np.isin(days, closed)


def read_times(series: pd.Series, reading: str, timezone: str, key: pd.Series) -> ReadTimes:
    """Times of a column as written, by its declared reading: utc, offset, local or standard.

    `series` (row,) holds texts, or timestamps with or without a zone; "" and None are missing (NaT, no fault).
    `key` (row,) tells whose row it is: in local reading the repeated autumn hour is told apart by the order of
    the key's rows in the file. Standard time is the zone's smaller offset of the year.
    """
    if isinstance(series.dtype, pd.DatetimeTZDtype):
        utc = series.dt.tz_convert("UTC").dt.tz_localize(None).to_numpy().astype("datetime64[us]")
        return ReadTimes(utc, np.where(_astray(utc), WITHIN, "").astype(object), 0)
    codes, uniques = pd.factorize(series.astype(object), use_na_sentinel=True)
    texts = pd.Series(np.asarray(uniques, dtype=object), dtype=object).map(_as_text).astype(object)
    parts = texts.str.extract(f"^{TIME_PATTERN}$").astype(object)
    parts = parts.where(parts.notna(), "")
    written = parts[0] + "T" + parts[1].where(parts[1] != "", "00:00")
    naive = pd.to_datetime(written, format="ISO8601", errors="coerce").to_numpy().astype("datetime64[us]")
    fault = np.where(np.isnat(naive) & (texts != "").to_numpy(), "a time in ISO 8601", "").astype(object)
    serial = (fault != "") & texts.str.fullmatch(SERIAL_PATTERN).to_numpy(dtype=bool)
    fault[serial] = [not_a_serial("a time in ISO 8601", text) for text in texts[serial]]
    astray = _astray(naive)
    fault[astray], naive[astray] = WITHIN, np.datetime64("NaT")
    utc, shift_known = _by_offset(naive, parts[2].to_numpy())
    bare = ~shift_known & ~np.isnat(naive)
    if reading == "offset":
        fault[bare] = f"a time with an offset (declare [tables] ..._time if all are {timezone} or UTC)"
        utc[bare] = np.datetime64("NaT")
    elif reading == "standard":
        utc[bare] = naive[bare] - _standard_offset(naive[bare], timezone)
    elif reading == "local":
        return _resolve_local(codes, utc, naive, bare, fault, timezone, key)
    return ReadTimes(*_spread(codes, utc, fault), 0)


def not_a_serial(expected: str, text: str) -> str:
    """What was expected in place of a spreadsheet's day number, and the time that number stands for."""
    time = (_SERIAL_ZERO + pd.Timedelta(days=float(text))).round("s")
    shown = f"{time:%Y-%m-%d}" if "." not in text else f"{time:%Y-%m-%dT%H:%M:%S}"
    return f"{expected}, not a spreadsheet's day number ({text} is {shown})"


def _astray(times: Times) -> Bools:
    """Mask of the times, any shape, that no fleet lives in; NaT is not counted."""
    mask: Bools = ~np.isnat(times) & ((times < FIRST_DAY) | (times >= END_DAY))
    return mask


def _as_text(value: object) -> str:
    return value.strip() if isinstance(value, str) else str(value)


def _spread(codes: Ints, utc: Times, fault: AnyArray) -> tuple[Times, AnyArray]:
    """Unique values back to rows; code -1 (missing) becomes NaT with no fault."""
    rows = np.append(utc, np.datetime64("NaT"))[codes]
    return rows, np.append(fault, "")[codes]


def _by_offset(naive: Times, offset: AnyArray) -> tuple[Times, Bools]:
    """UTC by the written offset; without one the time as it stands, and False in the mask."""
    known = offset != ""
    kinds, place = np.unique(offset.astype(str), return_inverse=True)
    minutes = np.array([_offset_minutes(kind) for kind in kinds], dtype=np.int64)
    utc: Times = naive - minutes[place].astype("timedelta64[m]")
    return utc, known


def _offset_minutes(offset: str) -> int:
    if offset in ("", "Z"):
        return 0
    minutes = int(offset[1:3]) * 60 + int(offset[-2:])
    return -minutes if offset[0] == "-" else minutes


def _standard_offset(naive: Times, timezone: str) -> AnyArray:
    """Offset from UTC in standard time, the smaller one of January and July of the same year."""
    years, place = np.unique(naive.astype("datetime64[Y]"), return_inverse=True)
    january = _offset(years.astype("datetime64[us]"), timezone)
    july = _offset((years.astype("datetime64[M]") + 6).astype("datetime64[us]"), timezone)
    smaller: AnyArray = np.minimum(january, july)[place]
    return smaller


def _offset(utc: Times, timezone: str) -> AnyArray:
    offset: AnyArray = _local(utc, timezone) - utc.astype("datetime64[us]")
    return offset


def _local(utc: Times, timezone: str) -> Times:
    """Local wall time without a zone, datetime64[us]."""
    index = pd.DatetimeIndex(utc.astype("datetime64[us]"), tz="UTC").tz_convert(timezone)
    return index.tz_localize(None).to_numpy().astype("datetime64[us]")


def _resolve_local(
    codes: Ints, utc: Times, naive: Times, bare: Bools, fault: AnyArray, timezone: str, key: pd.Series
) -> ReadTimes:
    """Local wall time to UTC; refuses what does not exist, tells apart what exists twice by the file's order."""
    first, second = _both_readings(naive, timezone)
    missing = bare & np.isnat(first)
    fault[missing] = [_absent(time, timezone) for time in naive[missing]]
    utc[bare], utc[missing] = first[bare], np.datetime64("NaT")
    twice = bare & (first != second) & ~np.isnat(first)
    rows, row_fault = _spread(codes, utc, fault)
    places = np.flatnonzero(np.append(twice, False)[codes])
    if not len(places):
        return ReadTimes(rows, row_fault, 0)
    told = pd.DataFrame({"key": key.to_numpy()[places], "code": codes[places]}).groupby(["key", "code"])
    turn, size = told.cumcount().to_numpy(), told["code"].transform("size").to_numpy()
    rows[places] = np.where(turn == 0, first[codes[places]], second[codes[places]])
    alone = places[size != 2]
    row_fault[alone] = [_ambiguous(first[code], second[code], timezone) for code in codes[alone]]
    rows[alone] = np.datetime64("NaT")
    wrong = places[(size == 2) & ~_ascending(rows, key)[places]]
    row_fault[wrong] = "rows in order of time, for this local time exists twice; sort them"
    rows[wrong] = np.datetime64("NaT")
    return ReadTimes(rows, row_fault, int((size == 2).sum()) - len(wrong))


def _both_readings(naive: Times, timezone: str) -> tuple[Times, Times]:
    """UTC of a wall time read as the earlier and the later of two; NaT where it does not exist."""
    index = pd.DatetimeIndex(naive)
    readings = []
    for summer in (True, False):
        mask = np.full(len(naive), summer)
        zoned = index.tz_localize(timezone, ambiguous=mask, nonexistent="NaT").tz_convert("UTC")
        readings.append(zoned.tz_localize(None).to_numpy().astype("datetime64[us]"))
    return np.minimum(*readings), np.maximum(*readings)


def _ascending(utc: Times, key: pd.Series) -> Bools:
    """Mask of the rows that are later than the same key's row before, and earlier than its next."""
    series = pd.Series(utc.astype(np.int64)).where(~np.isnat(utc))
    grouped = series.groupby(key.to_numpy())
    before, after = grouped.shift(1), grouped.shift(-1)
    mask: Bools = ~((before >= series) | (after <= series)).to_numpy()
    return mask


def _ambiguous(first: np.datetime64, second: np.datetime64, timezone: str) -> str:
    return (
        f"a time that can be told apart, for it exists twice: {local_text(first, timezone)} and "
        f"{local_text(second, timezone)}; write it with its offset"
    )


def _absent(naive: np.datetime64, timezone: str) -> str:
    """Both readings of a wall time that the clock jumps over: by the offset before, and by the one after."""
    around = np.array([naive - np.timedelta64(1, "D"), naive + np.timedelta64(1, "D")])
    late, early = (local_text(naive - offset, timezone) for offset in _offset(around, timezone))
    return f"a time that exists; the clock of {timezone} jumps over it: was it {early} or {late}?"


def utc_timestamp(time: np.datetime64) -> pd.Timestamp:
    """A UTC time as a pandas timestamp with its zone, to compare with columns of frames."""
    return pd.Timestamp(as_us(time)).tz_localize("UTC")


def age_h(earlier: Times, later: np.datetime64) -> Floats:
    """Hours from each time, any shape, to `later`; NaN for NaT."""
    micros = as_us(later).astype(np.int64) - earlier.astype("datetime64[us]").astype(np.int64)
    hours: Floats = np.where(np.isnat(earlier), np.nan, micros / 3.6e9)
    return hours


def as_us(time: np.datetime64) -> np.datetime64:
    """The same time counted in microseconds."""
    micros: np.datetime64 = time.astype("datetime64[us]")
    return micros


def _micros(time: np.datetime64) -> int:
    return int(as_us(time).astype(np.int64))


def _from_micros(micros: int) -> np.datetime64:
    time: np.datetime64 = np.int64(micros).astype("datetime64[us]")
    return time
