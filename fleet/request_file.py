"""A request from a file: kW by interval and node, as the utility sent it.

Owns what such a file must hold. A node's kW count for everything called below it, so a node inside another one
counts in both: to have 1 MW beside the 2 MW of a node within, ask 3 MW of the outer one.
"""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from fleet.errors import FleetError, Problem, Refused
from fleet.schema import table
from fleet.settings import Settings
from fleet.tables import read_raw
from fleet.values import Reading, typed
from fleet.wall_time import local_text
from sites.units import Floats


@dataclass(frozen=True)
class AskedByFile:
    """What a file asks; times UTC, datetime64[us]."""

    node_ids: tuple[str | None, ...]
    """None: the whole fleet"""
    event_from: np.datetime64
    event_to: np.datetime64
    kw: Floats
    """(node, event interval), 0 where nothing is asked of a node"""
    notes: tuple[str, ...]


def read_request(path: Path, settings: Settings, node_id: str | None = None) -> AskedByFile:
    """The rows of a CSV or Parquet file: interval_start, kw and, where there are several nodes, node_id.

    node_id: the node of rows that name none. The event runs from the first row to the end of the last; an interval
    that one node has and another has not is 0 kW there, and noted. Raises FleetError where there is no file, and
    Refused with everything wrong in it: times off the grid, kW that are none, doubles, intervals nobody asks for.
    """
    if not path.exists():
        raise FleetError(f"{path}: there is no such request file; name one with interval_start and kw")
    reading = Reading(
        path.name, settings.time_reading("request"), settings.timezone, settings.interval_minutes
    )
    read = typed(read_raw(path), table("request", "request"), reading)
    if read.problems:
        raise Refused(read.problems)
    frame = read.frame
    if frame.empty:
        raise Refused([Problem(path.name, None, None, "no row", "one row per interval", "add rows")])
    names = frame["node_id"].astype(object).where(frame["node_id"].notna(), node_id)
    starts = frame["interval_start"].dt.tz_convert("UTC").dt.tz_localize(None).to_numpy("datetime64[us]")
    step = np.timedelta64(settings.interval_minutes, "m")
    first, last = starts.min(), starts.max() + step
    count = int((last - first) // step)
    nodes = tuple(dict.fromkeys(names))
    number = names.map({name: place for place, name in enumerate(nodes)}).to_numpy(dtype=np.int64)
    column = ((starts - first) // step).astype(np.int64)
    given = np.zeros((len(nodes), count), dtype=np.int64)
    np.add.at(given, (number, column), 1)
    problems = _problems(frame, given, number, column, path.name)
    problems += _holes(given, first, step, settings.timezone, path.name)
    if problems:
        raise Refused(problems)
    kw = np.zeros((len(nodes), count))
    kw[number, column] = frame["kw"].to_numpy(dtype=np.float64)
    notes = [
        f"{path.name}: node {nodes[row] or 'of the whole fleet'} has no kW in {int((given[row] == 0).sum())} "
        f"of {count} intervals; nothing is asked of it there"
        for row in np.flatnonzero((given == 0).any(axis=1))
    ]
    return AskedByFile(nodes, first, last, kw, (*read.notes, *notes))


def _problems(
    frame: pd.DataFrame, given: np.ndarray, number: np.ndarray, column: np.ndarray, file: str
) -> list[Problem]:
    """Rows of a node and interval that stand in another row too, and kW that are not above 0."""
    problems = []
    for place in np.flatnonzero(given[number, column] > 1)[1:6]:
        advice = "remove one of the rows"
        row = int(frame.index[place])
        came = str(frame["interval_start"].iloc[place])
        problems.append(Problem(file, row, "interval_start", came, "each node and interval once", advice))
    wrong = np.flatnonzero(~(frame["kw"].to_numpy(dtype=np.float64) > 0.0))
    advice = "leave the row out where nothing is asked; for the other way use --direction"
    return problems + [
        Problem(file, int(frame.index[at]), "kw", str(frame["kw"].iloc[at]), "a number above 0", advice)
        for at in wrong[:6]
    ]


def _holes(
    given: np.ndarray, first: np.datetime64, step: np.timedelta64, timezone: str, file: str
) -> list[Problem]:
    """Intervals between the first and the last that no node asks for: two events, not one."""
    empty = np.flatnonzero(given.sum(axis=0) == 0)
    if not empty.size:
        return []
    came = f"no row for {empty.size} intervals, first {local_text(first + empty[0] * step, timezone)}"
    advice = "fill the gap, or make two calls"
    return [Problem(file, None, "interval_start", came, "intervals without a gap between them", advice)]
