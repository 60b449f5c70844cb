"""What a command line asks for: when, where, which way and how much, from options or from a request file.

Owns which options go together. Times are read in the fleet's zone and held to its grid.
"""

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from fleet.desk import Ask
from fleet.errors import FleetError
from fleet.folder import open_folder, parse_time
from fleet.request_file import read_request
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


def ask(fleet: Path, start: str, end: str, node: str | None, at: str, direction: str) -> Ask:
    """When and where; FleetError for an unknown direction and for times off the grid."""
    settings = _settings(fleet)
    zone, step = settings.timezone, settings.interval_minutes
    return Ask(
        node_id=node,
        direction=_way(direction),
        at=parse_time(at, zone),
        event_from=parse_time(start, zone, step),
        event_to=parse_time(end, zone, step),
    )


def call_ask(
    fleet: Path,
    kw: float | None,
    start: str | None,
    end: str | None,
    file: Path | None,
    node: str | None,
    at: str,
    direction: str,
) -> tuple[Ask, Asked]:
    """When, where and how much: --kw with --from and --to, or --request alone; FleetError for a mixture."""
    given = {"--kw": kw, "--from": start, "--to": end}
    if file is None:
        absent = [name for name, value in given.items() if value is None]
        if kw is None or start is None or end is None:
            raise FleetError(
                f"{', '.join(absent)} missing: give --kw with --from and --to, or --request FILE instead of all three"
            )
        return ask(fleet, start, end, node, at, direction), Asked(kw, (node,), ())
    doubled = [name for name, value in given.items() if value is not None]
    if doubled:
        raise FleetError(
            f"--request together with {', '.join(doubled)}: the file has times and kW; leave those out"
        )
    settings = _settings(fleet)
    read = read_request(file, settings, node)
    one = read.node_ids[0] if len(read.node_ids) == 1 else None
    at_time = parse_time(at, settings.timezone)
    when = Ask(one, _way(direction), at_time, read.event_from, read.event_to)
    kw_by_node = read.kw[0] if len(read.node_ids) == 1 else read.kw
    return when, Asked(kw_by_node, read.node_ids, read.notes)


def _settings(fleet: Path) -> Settings:
    return open_folder(fleet, names=(), needed=()).settings


def _way(direction: str) -> Direction:
    known = [str(way) for way in Direction]
    if direction not in known:
        raise FleetError(f"--direction: came {direction!r}; expected one of {', '.join(known)}; choose one")
    return Direction(direction)
