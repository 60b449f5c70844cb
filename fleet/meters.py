"""Meter readings onto the UTC grid, one row per site and stream; gaps estimated; the local-day view.

Owns validation (every fault at once), signed sums over meters, estimation and the quality of each interval.
Leaves the use of the values to baseline.py and settle.py, which never let an estimate raise what was delivered.
"""

from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
import pandas as pd

from fleet.errors import FleetError, Problem, Refused
from sites.clock import Clock, span
from sites.units import AnyArray, Bools, Floats, Ints, Strings, Times

QUALITIES: Final = ("measured", "edited", "estimated_line", "estimated_like_day", "missing")
EDITED: Final = 1
"""Codes up to this one are readings, the next ones estimates."""
LINE: Final = 2
LIKE_DAY: Final = 3
MISSING: Final = 4
LONGEST_LINE_MINUTES: Final = 120
"""Gaps up to 2 h are filled by a straight line (common practice)."""
LIKE_DAYS: Final = 3
"""Longer ones by the mean of three like days (from memory of utility practice)."""


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
    quality: Ints
    """(row, interval) index into QUALITIES"""
    counts: Mapping[str, int]

    def pick(self, site_ids: Sequence[str], stream: Sequence[str]) -> "Streams":
        """One row per pair of site and stream; a site without such a meter is missing throughout."""
        place = {key: row for row, key in enumerate(zip(self.site_id.tolist(), self.stream.tolist()))}
        rows = np.array([place.get(key, -1) for key in zip(site_ids, stream)], dtype=np.int64)
        # One more row, all missing, which -1 finds.
        nothing = np.full((1, self.clock.count), np.nan)
        kw = np.concatenate([self.kw, nothing])[rows]
        quality = np.concatenate([self.quality, np.full(nothing.shape, MISSING, dtype=np.int64)])[rows]
        sites, names = np.array(site_ids, dtype=object), np.array(stream, dtype=object)
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
    quality: Ints

    def take(self, rows: AnyArray) -> "_Rows":
        """The rows of a mask or an order; itself where a mask holds them all."""
        if rows.dtype == np.bool_ and rows.all():
            return self
        return _Rows(self.number[rows], self.meter[rows], self.step[rows], self.kw[rows], self.quality[rows])


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
    used = meters[meters["site_id"].isin(list(site_ids))]
    keys = pd.MultiIndex.from_frame(used[["site_id", "role"]])
    unique = keys.unique().sort_values()
    kw, quality = _summed(rows, ids, used, unique.get_indexer(keys), (len(unique), clock.count))
    site, stream = (unique.get_level_values(k).to_numpy(dtype=object) for k in (0, 1))
    return Streams(site, stream, clock, timezone, kw, quality, counts)


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
    times = (
        pd.to_datetime(readings["interval_start"], utc=True).dt.tz_localize(None).to_numpy("datetime64[us]")
    )
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


def _given_quality(readings: pd.DataFrame) -> AnyArray:
    if "quality" not in readings:
        return np.full(len(readings), "measured", dtype=object)
    given = readings["quality"].astype(object)
    filled: AnyArray = given.where(given.notna() & (given != ""), "measured").to_numpy(dtype=object)
    return filled


def _quality_codes(readings: pd.DataFrame) -> Ints:
    if "quality" not in readings:
        return np.zeros(len(readings), dtype=np.int64)
    codes, names = pd.factorize(_given_quality(readings))
    known = [QUALITIES.index(name) if name in QUALITIES else -1 for name in names]
    return np.array(known, dtype=np.int64)[codes]


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
    rows: _Rows, ids: pd.Index, used: pd.DataFrame, row_of: AnyArray, shape: tuple[int, int]
) -> tuple[Floats, Ints]:
    """Signed sums over the meters of each stream (row, interval); the worst quality of the summands."""
    names = pd.Index(used["meter_id"].unique())
    place = names.get_indexer(ids)[rows.meter]
    rows, place = rows.take(place >= 0), place[place >= 0]
    meter_kw = np.full((len(names), shape[1]), np.nan)
    meter_quality = np.full((len(names), shape[1]), MISSING, dtype=np.int64)
    meter_kw[place, rows.step] = rows.kw
    meter_quality[place, rows.step] = rows.quality
    at = names.get_indexer(pd.Index(used["meter_id"]))
    kw, quality = np.zeros(shape), np.zeros(shape, dtype=np.int64)
    sign = used["sign"].to_numpy(dtype=np.float64)
    if len(at) == shape[0]:
        # One meter a stream, the usual case: no sum, each in its row.
        kw[row_of], quality[row_of] = sign[:, None] * meter_kw[at], meter_quality[at]
        return kw, quality
    np.add.at(kw, row_of, sign[:, None] * meter_kw[at])
    np.maximum.at(quality, row_of, meter_quality[at])
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


def by_local_day(kw: Floats, quality: Ints, grid: LocalGrid) -> tuple[Floats, Ints]:
    """Values (row, interval) as (row, day, slot) of local wall time, and their quality.

    A slot that the spring change leaves out is NaN and missing (grid.times 0: absent, not lost). The two halves
    of autumn's repeated hour are averaged, missing if either is, with the worse quality.
    """
    flat = grid.day * grid.slots + grid.slot
    _, first = np.unique(flat, return_index=True)
    again = np.setdiff1d(np.arange(len(flat)), first)
    shape = (len(kw), len(grid.days) * grid.slots)
    day_kw, day_quality = np.full(shape, np.nan), np.full(shape, MISSING, dtype=np.int64)
    day_kw[:, flat[first]] = kw[:, first]
    day_quality[:, flat[first]] = quality[:, first]
    day_kw[:, flat[again]] = (day_kw[:, flat[again]] + kw[:, again]) / 2.0
    day_quality[:, flat[again]] = np.maximum(day_quality[:, flat[again]], quality[:, again])
    full = (len(kw), len(grid.days), grid.slots)
    return day_kw.reshape(full), day_quality.reshape(full)


def estimate(
    found: Streams, breaks: Ints, shut: Bools, day_class: Ints, event_day: Bools, grid: LocalGrid
) -> Streams:
    """Gaps up to 2 h by a straight line, longer ones by the mean of the three like days before.

    breaks (row, interval): a running number that changes where an event starts or ends; no line joins two
    readings of different number. shut (row, interval): no like-day estimate here (the event). day_class (day,):
    like days share it. event_day (row, day): days that serve as no pattern. What cannot be filled stays missing.
    """
    kw, quality = _line(found.kw, found.quality, breaks, LONGEST_LINE_MINUTES // found.clock.step_minutes)
    day_kw, day_quality = by_local_day(found.kw, found.quality, grid)
    pattern = _like_day_mean(np.where(day_quality <= EDITED, day_kw, np.nan), day_class, event_day)
    guess = pattern[:, grid.day, grid.slot]
    fill = np.isnan(kw) & ~np.isnan(guess) & ~shut
    kw, quality = np.where(fill, guess, kw), np.where(fill, LIKE_DAY, quality)
    counts = {
        **found.counts,
        "estimated_line": int((quality == LINE).sum()),
        "estimated_like_day": int((quality == LIKE_DAY).sum()),
        "still_missing": int(np.isnan(kw).sum()),
    }
    return replace(found, kw=kw, quality=quality, counts=counts)


def _line(kw: Floats, quality: Ints, breaks: Ints, longest: int) -> tuple[Floats, Ints]:
    """Straight lines between readings at most `longest` missing intervals apart, within one number of breaks."""
    count = kw.shape[1]
    at = np.arange(count)
    read = ~np.isnan(kw) & (quality <= EDITED)
    left = np.maximum.accumulate(np.where(read, at, -1), axis=1)
    right = np.minimum.accumulate(np.where(read, at, count)[:, ::-1], axis=1)[:, ::-1]
    held = (left >= 0) & (right < count) & (right - left - 1 <= longest) & np.isnan(kw)
    left, right = np.where(held, left, 0), np.where(held, right, 0)
    rows = np.arange(len(kw))[:, None]
    held &= breaks[rows, left] == breaks[rows, right]
    share = (at - left) / np.maximum(right - left, 1)
    line = kw[rows, left] + (kw[rows, right] - kw[rows, left]) * share
    return np.where(held, line, kw), np.where(held, LINE, quality)


def _like_day_mean(read_kw: Floats, day_class: Ints, event_day: Bools) -> Floats:
    """Mean of the last three like days with a reading at the slot, for each (row, day, slot); NaN if fewer."""
    rows, _, slots = read_kw.shape
    mean = np.full(read_kw.shape, np.nan)
    for kind in np.unique(day_class):
        recent = np.full((LIKE_DAYS, rows, slots), np.nan)
        for day in np.flatnonzero(day_class == kind):
            mean[:, day] = recent.mean(axis=0)
            new = ~np.isnan(read_kw[:, day]) & ~event_day[:, day, None]
            shifted = np.concatenate([read_kw[None, :, day], recent[:-1]])
            recent = np.where(new, shifted, recent)
    return mean


def spikes(day_kw: Floats) -> Bools:
    """Rows (row, slot) of which (highest - third highest) / third highest is above 1.80: flagged, never edited.

    From memory of utility validation rules; a chiller's restart or ice charging can trip it.
    """
    ranked = np.sort(np.where(np.isnan(day_kw), -np.inf, day_kw), axis=1)
    highest, third = ranked[:, -1], ranked[:, -3]
    usable = third > 0.0
    found: Bools = usable & (np.where(usable, highest, 0.0) - np.where(usable, third, 0.0) > 1.8 * third)
    return found
