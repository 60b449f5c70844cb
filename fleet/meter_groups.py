"""A fleet's readings in Parquet, read some row groups at a time for the sites that are settled together.

Owns which row groups hold whose meters, by the file's own statistics; fast where the file is sorted by meter, right
where it is not. Takes only files in the form of the meters table with times that carry a zone; any other, and every
group with something wrong in it, goes through the checks of values.py. Leaves the values to meters.py.
"""

from collections.abc import Callable, Sequence
from pathlib import Path
from threading import Lock
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.errors import Problem, Refused
from fleet.meters import QUALITIES
from fleet.references import unmapped_meters
from fleet.schema import table
from fleet.tables import TEXTS, RowGroups
from fleet.values import Reading, typed
from fleet.wall_time import off_grid
from sites.units import Bools, Ints, Times

NAMES: Final = ("meter_id", "interval_start", "kw", "quality")


class GroupedReadings:
    """Readings of Parquet files, given out by meters; see readings.Readings."""

    def __init__(
        self,
        files: Sequence[Path],
        reading: Reading,
        meter_map: pd.DataFrame,
        sites: pd.Series,
        check: Callable[[pd.DataFrame], list[Problem]] = lambda highest: [],
    ) -> None:
        """check: what speaks against each meter's highest reading (one row a meter, its first row's number)."""
        self._check_highest = check
        self._files = [RowGroups(path) for path in files]
        self._reading, self._meter_map, self._sites = reading, meter_map, sites
        known = meter_map["meter_id"] if len(meter_map) else sites
        self._known = pd.Index(known.astype(object).unique())
        self._groups = [(file, number) for file in self._files for number in range(file.count)]
        sizes = [file.rows(number) for file, number in self._groups]
        self._before = np.cumsum([1, *sizes])
        self._locks = [Lock() for _ in self._groups]
        self._held: dict[int, pd.DataFrame] = {}
        self._uses = np.zeros(len(self._groups), dtype=np.int64)

    @property
    def plain(self) -> bool:
        """The files have the meters table's own form, which a row group alone can be judged by."""
        return bool(self._groups) and all(_plain(file.types) for file in self._files)

    def pieces(self, meter_ids: Sequence[str]) -> Ints:
        """See Readings: row groups, by their first meter's id; right where the file is sorted by meter."""
        bounds = [file.bounds(number, "meter_id") for file, number in self._groups]
        first = np.sort(np.array([ends[0] for ends in bounds if ends is not None], dtype=str))
        found: Ints = np.searchsorted(first, np.array(meter_ids, dtype=str), side="right")
        return found

    def parts(self, meter_ids: Sequence[Sequence[str]]) -> list[Callable[[], pd.DataFrame]]:
        """See readings.Readings; groups with none of these meters are looked through for unknown ones."""
        needed = np.stack([self._overlapping(own) for own in meter_ids])
        self._uses = needed.sum(axis=0)
        idle = np.flatnonzero(self._uses == 0).tolist()
        return [
            self._part(own, np.flatnonzero(groups).tolist(), [] if at else idle)
            for at, (own, groups) in enumerate(zip(meter_ids, needed))
        ]

    def _overlapping(self, meter_ids: Sequence[str]) -> Bools:
        """(group,) may hold one of these meters."""
        ordered = np.sort(np.array(meter_ids, dtype=str))
        bounds = [file.bounds(number, "meter_id") for file, number in self._groups]
        return np.array(
            [
                ends is None
                or np.searchsorted(ordered, ends[0]) < np.searchsorted(ordered, ends[1], side="right")
                for ends in bounds
            ],
            dtype=np.bool_,
        )

    def _part(
        self, meter_ids: Sequence[str], groups: Sequence[int], idle: Sequence[int]
    ) -> Callable[[], pd.DataFrame]:
        def get() -> pd.DataFrame:
            wanted = self._known.isin(meter_ids)
            for group in idle:
                self._unknown(group)
            frames = [self._of(self._take(group), wanted) for group in groups]
            frames = [frame for frame in frames if len(frame)] or frames[:1]
            found = frames[0] if len(frames) == 1 else pd.concat(frames or [_nothing()])
            faults = self._check_highest(_highest(found)) if len(found) else []
            if faults:
                raise Refused(faults)
            return found

        return get

    def _of(self, frame: pd.DataFrame, wanted: Bools) -> pd.DataFrame:
        rows = wanted[frame["meter_id"].cat.codes.to_numpy()]
        return frame if rows.all() else frame[rows]

    def _take(self, group: int) -> pd.DataFrame:
        """A group's rows, read once and kept until the last part that needs it has had it."""
        with self._locks[group]:
            frame = self._held.pop(group, None)
            found = self._read(group) if frame is None else frame
            self._uses[group] -= 1
            if self._uses[group] > 0:
                self._held[group] = found
            return found

    def _unknown(self, group: int) -> None:
        file, number = self._groups[group]
        self._check(file.read(number, ["meter_id"]), group)

    def _check(self, frame: pd.DataFrame, group: int) -> pd.DataFrame:
        """Row numbers of the file as index, meters by their number among the known; Refused for a meter of none."""
        frame.index = pd.RangeIndex(self._before[group], self._before[group] + len(frame))
        meter = frame["meter_id"].astype("category")
        code = self._known.get_indexer(meter.cat.categories.astype(object))
        codes = np.append(code, -1)[meter.cat.codes.to_numpy()]
        if (codes < 0).any() and meter.notna().all():
            texts = frame.astype({"meter_id": object})
            raise Refused(unmapped_meters(texts, self._meter_map, self._sites, self._reading.file))
        return frame.assign(meter_id=pd.Categorical.from_codes(codes, categories=self._known, validate=False))

    def _read(self, group: int) -> pd.DataFrame:
        file, number = self._groups[group]
        frame = self._check(file.read(number, [name for name in NAMES if name in file.types]), group)
        if not self._clean(frame):
            found = typed(frame.astype({"meter_id": object}), table("fleet", "meters"), self._reading)
            if found.problems:
                raise Refused(found.problems)
            frame = self._check(found.frame, group)
        return frame

    def _clean(self, frame: pd.DataFrame) -> bool:
        """Nothing in it that the table of columns speaks against."""
        column = next(column for column in table("fleet", "meters").columns if column.name == "kw")
        low, high = column.low or -np.inf, column.high or np.inf
        kw = frame["kw"].to_numpy(dtype=np.float64)
        times = frame["interval_start"].dt.tz_convert("UTC").dt.tz_localize(None).to_numpy("datetime64[us]")
        times = _once(times)
        least, most = np.fmin.reduce(kw, initial=0.0), np.fmax.reduce(kw, initial=0.0)
        good = least >= low and most <= high and frame["meter_id"].notna().all()
        good = (
            good and not np.isnat(times).any() and not off_grid(times, self._reading.interval_minutes).any()
        )
        if "quality" in frame:
            quality = frame["quality"].astype("category")
            good = good and set(quality.cat.categories) <= set(QUALITIES)
        return bool(good)


def _highest(frame: pd.DataFrame) -> pd.DataFrame:
    """One row a meter: its highest power by size; index: the meter's first row."""
    codes = frame["meter_id"].cat.codes.to_numpy()
    runs = np.append(0, np.flatnonzero(codes[1:] != codes[:-1]) + 1)
    most = np.fmax.reduceat(np.abs(frame["kw"].to_numpy(dtype=np.float64)), runs)
    own, first, of_run = np.unique(codes[runs], return_index=True, return_inverse=True)
    highest = np.full(len(own), np.nan)
    np.fmax.at(highest, of_run, most)
    names = frame["meter_id"].cat.categories.take(own).to_numpy(dtype=object)
    return pd.DataFrame({"meter_id": names, "kw": highest}, index=frame.index[runs[first]])


def _once(times: Times) -> Times:
    """The times of one meter where all have the same ones in blocks of one length; else all of them."""
    back = np.flatnonzero(times[1:] <= times[:-1])
    length = int(back[0]) + 1 if len(back) else len(times)
    if length == 0 or len(times) % length:
        return times
    blocks = times.reshape(-1, length)
    return blocks[0] if (blocks == blocks[0]).all() else times


def _plain(types: dict[str, Any]) -> bool:
    """The meters table's columns, texts as texts, times with a zone, power as a float."""
    texts = [types.get("meter_id", ""), types.get("quality", TEXTS[0])]
    time = types.get("interval_start", "")
    return (
        set(types) <= set(NAMES)
        and all(kind in TEXTS for kind in texts)
        and time.startswith("timestamp[")
        and "tz=" in time
        and types.get("kw") == "double"
    )


def _nothing() -> pd.DataFrame:
    times = pd.DatetimeIndex([], dtype="datetime64[us, UTC]")
    return pd.DataFrame({"meter_id": [], "interval_start": times, "kw": np.zeros(0)}).astype(
        {"meter_id": object}
    )
