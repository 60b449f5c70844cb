"""What a command line asks for: when, where, which way and how much, from options or from a request file.

Owns which options go together. Times are read in the fleet's zone and held to its grid.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import cast

import numpy as np

from fleet import recharge
from fleet.desk import Ask, check_order
from fleet.errors import FleetError, Gathered
from fleet.folder import open_folder, parse_time
from fleet.records import check_free
from fleet.request import check_words
from fleet.request_file import AskedByFile, read_request
from fleet.settings import Settings
from sites.direction import Direction
from sites.units import Floats


@dataclass(frozen=True)
class Asked:
    """kW of a call: one for all intervals, or (node, interval) with the nodes' names (None: the whole fleet)."""

    kw: float | Floats
    node_ids: tuple[str | None, ...]
    notes: tuple[str, ...]

    @property
    def largest_kw(self) -> float:
        """The most that is asked of a node in an interval."""
        return float(np.max(self.kw))


@dataclass(frozen=True)
class Words:
    """What a call says beside time, place and kW; held against what it may be before the fleet is read."""

    event_id: str | None
    purpose: str
    within: float | None
    recoveries: tuple[str, ...] = ()


def ask(
    fleet: Path,
    start: str,
    end: str,
    node: str | None,
    at: str,
    direction: str,
    recoveries: Sequence[str] = (),
) -> Ask:
    """When and where; FleetError for an unknown direction, for times off the grid or in the wrong order: all of
    these at once."""
    gathered = Gathered()
    offered = gathered.of(lambda: recharge.named(recoveries))
    found = _ask(gathered, fleet, start, end, node, at, direction)
    gathered.tell()
    return replace(cast(Ask, found), recoveries=offered or ())


def call_ask(
    fleet: Path,
    kw: float | None,
    start: str | None,
    end: str | None,
    file: Path | None,
    node: str | None,
    at: str,
    direction: str,
    words: Words,
) -> tuple[Ask, Asked]:
    """When, where and how much: --kw with --from and --to, or --request alone.

    Raises FleetError for a mixture, and for all that is wrong with the words, the times and the kW at once.
    """
    gathered = Gathered()
    gathered.of(lambda: _check_words(fleet, words, kw))
    offered = gathered.of(lambda: recharge.named(words.recoveries)) or ()
    given = {"--kw": kw, "--from": start, "--to": end}
    if file is None:
        absent = [name for name, value in given.items() if value is None]
        if kw is None or start is None or end is None:
            gathered.tell()
            raise FleetError(
                f"{', '.join(absent)} missing: give --kw with --from and --to, or --request FILE instead of all three"
            )
        when = _ask(gathered, fleet, start, end, node, at, direction)
        gathered.tell()
        return replace(cast(Ask, when), recoveries=offered), Asked(kw, (node,), ())
    doubled = [name for name, value in given.items() if value is not None]
    if doubled:
        gathered.tell()
        raise FleetError(
            f"--request together with {', '.join(doubled)}: the file has times and kW; leave those out"
        )
    way = gathered.of(lambda: _way(direction))
    found = gathered.of(lambda: _settings(fleet))
    if found is None:
        gathered.tell()
    settings = cast(Settings, found)
    at_time = gathered.of(lambda: parse_time(at, settings.timezone))
    read = gathered.of(lambda: read_request(file, settings, node))
    gathered.tell()
    when, asked = _of_file(cast(AskedByFile, read), cast(Direction, way), cast(np.datetime64, at_time))
    return replace(when, recoveries=offered), asked


def _check_words(fleet: Path, words: Words, kw: float | None) -> None:
    check_words(words.event_id, words.purpose, 1.0 if kw is None else kw, words.within)
    if words.event_id is not None:
        check_free(fleet, words.event_id)


def _of_file(read: AskedByFile, way: Direction, at: np.datetime64) -> tuple[Ask, Asked]:
    one = read.node_ids[0] if len(read.node_ids) == 1 else None
    kw_by_node = read.kw[0] if len(read.node_ids) == 1 else read.kw
    when = Ask(one, way, at, read.event_from, read.event_to)
    return when, Asked(kw_by_node, read.node_ids, read.notes)


def _ask(
    gathered: Gathered, fleet: Path, start: str, end: str, node: str | None, at: str, direction: str
) -> Ask | None:
    """When and where, or None where something of it is refused and kept."""
    way = gathered.of(lambda: _way(direction))
    settings = gathered.of(lambda: _settings(fleet))
    if settings is None:
        return None
    zone, step = settings.timezone, settings.interval_minutes
    at_time = gathered.of(lambda: parse_time(at, zone))
    event_from = gathered.of(lambda: parse_time(start, zone, step))
    event_to = gathered.of(lambda: parse_time(end, zone, step))
    if at_time is None or event_from is None or event_to is None:
        return None
    gathered.of(lambda: check_order(at_time, event_from, event_to))
    return None if way is None else Ask(node, way, at_time, event_from, event_to)


def _settings(fleet: Path) -> Settings:
    return open_folder(fleet, names=(), needed=()).settings


def _way(direction: str) -> Direction:
    known = [str(way) for way in Direction]
    if direction not in known:
        raise FleetError(f"--direction: came {direction!r}; expected one of {', '.join(known)}; choose one")
    return Direction(direction)
