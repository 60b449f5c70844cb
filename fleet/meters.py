"""Meter readings onto the UTC grid, one row per site and stream; the local-day view.

Owns validation (every fault at once), signed sums over meters and the quality of each interval. Leaves gaps to
estimation.py and the use of the values to baseline.py and measured.py, which never let an estimate raise what was
delivered.
"""

from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Final, TypeAlias

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from fleet.errors import FleetError, Problem, Refused
from sites.clock import Clock, span
from sites.units import AnyArray, Bools, Floats, Ints, Strings, Times

Codes: TypeAlias = NDArray[np.int8]
"""Indices into a short list of names."""
QUALITIES: Final = ("measured", "edited", "estimated_line", "estimated_like_day", "missing")
EDITED: Final = 1
"""Codes up to this one are readings, the next ones estimates."""
LINE: Final = 2
LIKE_DAY: Final = 3
MISSING: Final = 4


@dataclass(frozen=True)
class Streams:
    """Power per (site, stream) row and interval; NaN = missing. What was dropped or filled stands in counts."""

    site_id: Strings
    """(row,)"""
    stream: Strings
    """(row,) building, plant, tank or generation"""
    clock: Clock
    timezone: str
    kw: Floats
    """(row, interval) mean kW"""
    quality: Codes
    """(row, interval) index into QUALITIES"""
    counts: Mapping[str, int]

    def pick(self, site_ids: Sequence[str], stream: Sequence[str]) -> "Streams":
        """One row per pair of site and stream; a site without such a meter is missing throughout."""
        place = {key: row for row, key in enumerate(zip(self.site_id.tolist(), self.stream.tolist()))}
        rows = np.array([place.get(key, -1) for key in zip(site_ids, stream)], dtype=np.int64)
        sites, names = np.array(site_ids, dtype=object), np.array(stream, dtype=object)
        if np.array_equal(rows, np.arange(len(self.kw))):
            return replace(self, site_id=sites, stream=names)
        # One more row, all missing, which -1 finds.
        nothing = np.full((1, self.clock.count), np.nan)
        kw = np.concatenate([self.kw, nothing])[rows]
        quality = np.concatenate([self.quality, np.full(nothing.shape, MISSING, dtype=np.int8)])[rows]
        return replace(self, site_id=sites, stream=names, kw=kw, quality=quality)


@dataclass(frozen=True)
class LocalGrid:
    """Where each UTC interval lies in local wall time; slots count steps from local midnight."""

    days: Times
    """(day,) datetime64[D], consecutive"""
    slots: int
    day: Ints
    """(interval,) index into days"""
    slot: Ints
    """(interval,)"""
    times: Ints
    """(day, slot) how often the slot occurs within the grid: 0 absent in spring, 2 in autumn's repeated hour"""


@dataclass(frozen=True)
class _Rows:
    """Readings as arrays over rows of the file, and the file's own row numbers."""

    number: AnyArray
    meter: Ints
    step: Ints
    kw: Floats
    quality: Codes

    def take(self, rows: AnyArray) -> "_Rows":
        """The rows of a mask or an order; itself where a mask holds them all."""
        if rows.dtype == np.bool_ and rows.all():
            return self
        return _Rows(self.number[rows], self.meter[rows], self.step[rows], self.kw[rows], self.quality[rows])


@dataclass(frozen=True)
class _Metered:
    """Readings of the meters in use on the clock; NaN and MISSING where there is none."""

    kw: Floats
    """(meter, interval)"""
    quality: Codes
    counts: Mapping[str, int]


def streams(
    readings: pd.DataFrame,
    meter_map: pd.DataFrame,
    site_ids: Sequence[str],
    timezone: str,
    step_minutes: int,
    since: np.datetime64,
    until: np.datetime64,
    known_site_ids: Collection[str] | None = None,
) -> Streams:
    """Readings of the meters of `site_ids` from `since` to before `until` (UTC, on the grid), summed with sign.

    readings: meter_id, interval_start (UTC), kw (kW; empty = missing), quality (absent or empty = measured); its
    index numbers the rows in messages. meter_map: meter_id, site_id, role, sign; empty = meter_id is the site_id
    (of known_site_ids, default site_ids). One missing meter makes its stream's interval missing. Duplicates that
    agree are dropped and counted. Raises Refused for rows off the grid, of unknown meters, without a time, with
    a quality that is none or does not fit, and for duplicates that disagree, with all of them at once.
    """
    clock = span(since, until, step_minutes)
    meters = _meter_table(meter_map, known_site_ids if known_site_ids is not None else site_ids)
    ids = pd.Index(meters["meter_id"].unique())
    used = meters[meters["site_id"].isin(list(site_ids))]
    names = pd.Index(used["meter_id"].unique())
    found = _blocks(readings, ids, names, clock) or _row_by_row(readings, ids, names, clock)
    keys = pd.MultiIndex.from_frame(used[["site_id", "role"]])
    unique = keys.unique().sort_values()
    kw, quality = _summed(found, names, used, unique.get_indexer(keys), len(unique))
    site, stream = (unique.get_level_values(k).to_numpy(dtype=object) for k in (0, 1))
    return Streams(site, stream, clock, timezone, kw, quality, found.counts)


def _row_by_row(readings: pd.DataFrame, ids: pd.Index, names: pd.Index, clock: Clock) -> _Metered:
    """Readings in any order, each row placed for itself; Refused for what is wrong with them."""
    rows, problems = _rows(readings, ids, clock)
    inside = (rows.step >= 0) & (rows.step < clock.count)
    counts = {"readings": len(readings), "outside_period": int((~inside).sum())}
    rows = rows.take(inside)
    counts["out_of_order"] = _out_of_order(rows)
    rows, doubles = _without_doubles(rows, ids, clock, problems)
    if problems:
        raise Refused(problems)
    counts["duplicates_dropped"] = doubles
    counts["missing_values"] = int(np.isnan(rows.kw).sum())
    place = names.get_indexer(ids)[rows.meter]
    rows, place = rows.take(place >= 0), place[place >= 0]
    shape = (len(names), clock.count)
    kw, quality = np.full(shape, np.nan), np.full(shape, MISSING, dtype=np.int8)
    kw[place, rows.step], quality[place, rows.step] = rows.kw, rows.quality
    return _Metered(kw, quality, counts)


def _blocks(readings: pd.DataFrame, ids: pd.Index, names: pd.Index, clock: Clock) -> _Metered | None:
    """Readings that are one whole block a meter, all on the same regular times: reshaped, no row looked at alone.

    None where they are not, or where anything is wrong with them.
    """
    if readings.empty or clock.count == 0:
        return None
    codes, of_file = pd.factorize(readings["meter_id"])
    ends = np.append(np.flatnonzero(codes[1:] != codes[:-1]) + 1, len(codes))
    length = int(ends[0])
    if len(ends) != len(of_file) or (np.diff(ends, prepend=0) != length).any() or codes[0] < 0:
        return None
    meter: Ints = np.asarray(ids.get_indexer(pd.Index(of_file)), dtype=np.int64)
    times = _times(readings).view(np.int64).reshape(-1, length)
    step, first = int(clock.step.astype(np.int64)), int(times[0, 0] - clock.start.astype(np.int64))
    regular = (np.diff(times[0]) == step).all() and (times == times[0]).all() and first % step == 0
    kw = pd.to_numeric(readings["kw"]).to_numpy(dtype=np.float64, na_value=np.nan).reshape(-1, length)
    quality = _quality_codes(readings).reshape(-1, length)
    gap = np.isnan(kw)
    odd = np.isinf(kw).any() or (quality < 0).any() or ((quality == MISSING) & ~gap).any()
    if not regular or odd or (meter < 0).any():
        return None
    quality = np.where(gap, np.int8(MISSING), quality)
    low, high = np.clip([first // step, first // step + length], 0, clock.count)
    taken = slice(low - first // step, high - first // step)
    counts = {
        "readings": len(readings),
        "outside_period": len(meter) * (length - int(high - low)),
        "out_of_order": 0,
        "duplicates_dropped": 0,
        "missing_values": int(gap[:, taken].sum()),
    }
    place = pd.Index(of_file).get_indexer(names)
    if high - low == clock.count and np.array_equal(place, np.arange(len(kw))):
        return _Metered(kw[:, taken], quality[:, taken], counts)
    shape = (len(names), clock.count)
    whole_kw, whole_quality = np.full(shape, np.nan), np.full(shape, MISSING, dtype=np.int8)
    there = np.flatnonzero(place >= 0)
    whole_kw[there, low:high] = kw[place[there], taken]
    whole_quality[there, low:high] = quality[place[there], taken]
    return _Metered(whole_kw, whole_quality, counts)


def _meter_table(meter_map: pd.DataFrame, known: Collection[str]) -> pd.DataFrame:
    """The map with its defaults; without one every known site is its own building meter."""
    if meter_map.empty:
        sites = np.array(sorted(known), dtype=object)
        return pd.DataFrame({"meter_id": sites, "site_id": sites, "role": "building", "sign": 1})
    table = pd.DataFrame({name: meter_map[name].astype(object) for name in ("meter_id", "site_id")})
    for name, default in (("role", "building"), ("sign", 1)):
        given = meter_map[name] if name in meter_map else pd.Series(default, index=table.index)
        table[name] = given.astype(object).where(given.notna(), default)
    twice = table.duplicated(["meter_id", "site_id", "role"])
    if twice.any():
        advice = "a meter counts once in a stream; take one row out"
        raise Refused(
            [
                Problem("meter_map", _number(row), "meter_id", repr(str(meter)), "one row per stream", advice)
                for row, meter in table.loc[twice, "meter_id"].items()
            ]
        )
    return table


def _rows(readings: pd.DataFrame, ids: pd.Index, clock: Clock) -> tuple[_Rows, list[Problem]]:
    """Rows that can be placed on the grid, and a problem for each that cannot."""
    codes, names = pd.factorize(readings["meter_id"])
    meter = np.append(ids.get_indexer(pd.Index(names)), -1)[codes]
    times = _times(readings)
    offset = (times - clock.start).astype(np.int64)
    length = int(clock.step.astype(np.int64))
    kw = pd.to_numeric(readings["kw"]).to_numpy(dtype=np.float64, na_value=np.nan)
    quality = _quality_codes(readings)
    finite = ~np.isinf(kw)
    # What came is looked up only where something is wrong: texts of millions of rows are slow.
    tests: list[tuple[Bools, str, Callable[[], AnyArray], str, str]] = [
        (np.isnat(times), "interval_start", lambda: times, "a time", "give the start of the interval"),
        (
            meter < 0,
            "meter_id",
            lambda: readings["meter_id"].to_numpy(dtype=object),
            "a meter of meter_map" if len(ids) else "a known meter",
            "add the meter to meter_map, or take its rows out",
        ),
        (
            ~np.isnat(times) & (offset % length != 0),
            "interval_start",
            lambda: times,
            f"a start on the {clock.step_minutes}-minute grid",
            "convert the readings to the fleet's interval",
        ),
        (~finite, "kw", lambda: kw, "a finite number or nothing", "leave a missing value empty"),
        (
            quality < 0,
            "quality",
            lambda: _given_quality(readings),
            "one of " + ", ".join(QUALITIES),
            "correct it",
        ),
        (
            (quality == MISSING) & ~np.isnan(kw),
            "kw",
            lambda: kw,
            "no value where quality is missing",
            "correct the quality, or leave the value empty",
        ),
    ]
    number = readings.index.to_numpy()
    problems = [
        Problem("meters", _number(number[row]), column, f"{values[row]}", expected, advice)
        for wrong, column, came, expected, advice in tests
        if wrong.any()
        for values in [came()]
        for row in np.flatnonzero(wrong)
    ]
    good = ~np.any([wrong for wrong, *_ in tests], axis=0)
    step = np.where(np.isnat(times), -1, offset // length)
    quality = np.where(np.isnan(kw), MISSING, quality)
    return _Rows(number, meter.astype(np.int64), step, kw, quality).take(good), problems


def _times(readings: pd.DataFrame) -> Times:
    utc = pd.to_datetime(readings["interval_start"], utc=True).dt.tz_localize(None)
    found: Times = utc.to_numpy("datetime64[us]")
    return found


def _given_quality(readings: pd.DataFrame) -> AnyArray:
    if "quality" not in readings:
        return np.full(len(readings), "measured", dtype=object)
    given = readings["quality"].astype(object)
    filled: AnyArray = given.where(given.notna() & (given != ""), "measured").to_numpy(dtype=object)
    return filled


def _quality_codes(readings: pd.DataFrame) -> Codes:
    """(row,) index into QUALITIES, -1 for a quality that is none; nothing given is measured."""
    if "quality" not in readings:
        return np.zeros(len(readings), dtype=np.int8)
    codes, names = pd.factorize(readings["quality"], use_na_sentinel=True)
    known = [QUALITIES.index(name) if name in QUALITIES else 0 if name == "" else -1 for name in names]
    # The last one is what -1, nothing given, finds.
    found: Codes = np.array([*known, 0], dtype=np.int8)[codes]
    return found


def _number(row: object) -> int | None:
    return int(row) if isinstance(row, (int, np.integer)) else None


def _out_of_order(rows: _Rows) -> int:
    """How many rows come after a later interval's row of the same meter."""
    order = np.argsort(rows.meter, kind="stable")
    back = np.diff(rows.step[order]) < 0
    return int((back & (np.diff(rows.meter[order]) == 0)).sum())


def _without_doubles(rows: _Rows, ids: pd.Index, clock: Clock, problems: list[Problem]) -> tuple[_Rows, int]:
    """Rows with each (meter, interval) once; doubles that disagree are added to `problems`.

    Of two that agree the worse quality stays.
    """
    key = rows.meter * clock.count + rows.step
    if (np.diff(key) > 0).all():
        return rows, 0
    order = np.lexsort((-rows.quality, key))
    same = np.append(False, np.diff(key[order]) == 0)[: len(key)]
    kw = rows.kw[order]
    before = np.append(np.nan, kw)[: len(key)]
    wrong = same & (kw != before) & ~(np.isnan(kw) & np.isnan(before))
    problems += [
        Problem(
            "meters",
            _number(rows.number[order[at]]),
            "kw",
            f"{kw[at]:g} for meter {ids[rows.meter[order[at]]]} at {clock.starts[rows.step[order[at]]]}Z, "
            f"where row {rows.number[order[at - 1]]} has {before[at]:g}",
            "one value per meter and interval",
            "find out which one holds and take the other out",
        )
        for at in np.flatnonzero(wrong)
    ]
    return rows.take(order[~same]), int(same.sum())


def _summed(
    found: _Metered, names: pd.Index, used: pd.DataFrame, row_of: AnyArray, rows: int
) -> tuple[Floats, Codes]:
    """Signed sums over the meters of each stream (row, interval); the worst quality of the summands."""
    at = names.get_indexer(pd.Index(used["meter_id"]))
    sign = used["sign"].to_numpy(dtype=np.float64)
    if (sign == 1.0).all() and np.array_equal(at[np.argsort(row_of)], np.arange(len(found.kw))):
        return found.kw, found.quality
    shape = (rows, found.kw.shape[1])
    kw, quality = np.zeros(shape), np.zeros(shape, dtype=np.int8)
    if len(at) == rows:
        # One meter a stream, the usual case: no sum, each in its row.
        kw[row_of], quality[row_of] = sign[:, None] * found.kw[at], found.quality[at]
        return kw, quality
    np.add.at(kw, row_of, sign[:, None] * found.kw[at])
    np.maximum.at(quality, row_of, found.quality[at])
    return kw, quality


def local_grid(clock: Clock, timezone: str) -> LocalGrid:
    """Local day and slot of every interval; FleetError for a zone that does not exist."""
    starts = pd.DatetimeIndex(clock.starts).tz_localize("UTC")
    try:
        local = starts.tz_convert(timezone).tz_localize(None).to_numpy("datetime64[us]")
    except (KeyError, ValueError) as error:
        raise FleetError(
            f"timezone {timezone!r} is not known; give an IANA name such as Europe/Athens"
        ) from error
    day = local.astype("datetime64[D]")
    slot = (local - day).astype("timedelta64[m]").astype(np.int64) // clock.step_minutes
    days = np.arange(day.min(), day.max() + 1)
    index = (day - days[0]).astype(np.int64)
    slots = 1440 // clock.step_minutes
    times = np.bincount(index * slots + slot, minlength=len(days) * slots).reshape(len(days), slots)
    return LocalGrid(days, slots, index, slot, times.astype(np.int64))


def by_local_day(kw: Floats, quality: Codes, grid: LocalGrid) -> tuple[Floats, Codes]:
    """Values (row, interval) as (row, day, slot) of local wall time, and their quality.

    A slot that the spring change leaves out is NaN and missing (grid.times 0: absent, not lost). The two halves
    of autumn's repeated hour are averaged, missing if either is, with the worse quality.
    """
    flat = grid.day * grid.slots + grid.slot
    rows, cells = len(kw), len(grid.days) * grid.slots
    full = (rows, len(grid.days), grid.slots)
    day_kw, day_quality = np.empty((rows, cells)), np.empty((rows, cells), dtype=np.int8)
    if flat[-1] - flat[0] + 1 == len(flat) and (np.diff(flat) == 1).all():
        # No clock change: the intervals follow one another as they are.
        own = slice(int(flat[0]), int(flat[-1]) + 1)
        for whole, part, nothing in ((day_kw, kw, np.nan), (day_quality, quality, MISSING)):
            whole[:, : own.start], whole[:, own], whole[:, own.stop :] = nothing, part, nothing
        return day_kw.reshape(full), day_quality.reshape(full)
    _, first = np.unique(flat, return_index=True)
    again = np.setdiff1d(np.arange(len(flat)), first)
    day_kw[:], day_quality[:] = np.nan, MISSING
    day_kw[:, flat[first]] = kw[:, first]
    day_quality[:, flat[first]] = quality[:, first]
    day_kw[:, flat[again]] = (day_kw[:, flat[again]] + kw[:, again]) / 2.0
    day_quality[:, flat[again]] = np.maximum(day_quality[:, flat[again]], quality[:, again])
    return day_kw.reshape(full), day_quality.reshape(full)
