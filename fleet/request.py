"""What the utility asks: kW per event interval, at one node or several, which way, for what purpose, told when.

Owns the checks that need nothing but the request itself. Whether the node exists, the grid's alignment with a
horizon, the fleet's rated total and past calls are left to those who know them.
"""

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
import pandas as pd

from fleet.errors import Problem, Refused
from sites.direction import Direction
from sites.units import Floats, Times

PURPOSES: Final = ("real", "test", "rehearsal")
LONGEST_EVENT_ID: Final = 64
_EVENT_ID = re.compile(r"[A-Za-z0-9_-]{1,64}")


@dataclass(frozen=True)
class Request:
    """One checked request; times are UTC, datetime64[us], interval start."""

    event_id: str
    node_ids: tuple[str, ...]
    """Where it is held; a node's kW count for everything called below it"""
    direction: Direction
    purpose: str
    called_at: np.datetime64
    event_from: np.datetime64
    event_to: np.datetime64
    requested_kw: Floats
    """(node x event interval,) node after node, positive in the event's direction; 0 where nothing is asked"""

    @property
    def node_id(self) -> str:
        """The first node, the only one mostly."""
        return self.node_ids[0]

    @property
    def interval_count(self) -> int:
        """Number of event intervals."""
        return len(self.requested_kw) // len(self.node_ids)

    @property
    def by_node_kw(self) -> Floats:
        """(node, event interval)"""
        return self.requested_kw.reshape(len(self.node_ids), -1)

    @property
    def step(self) -> np.timedelta64:
        """Length of one event interval."""
        return np.timedelta64((self.event_to - self.event_from) // self.interval_count)

    @property
    def interval_starts(self) -> Times:
        """Start of each event interval, shape (event interval,)."""
        return self.event_from + np.arange(self.interval_count) * self.step

    @property
    def interval_ends(self) -> Times:
        """End of each event interval, shape (event interval,)."""
        return self.interval_starts + self.step

    @property
    def notice_minutes(self) -> float:
        """Minutes between the call and the event's first interval."""
        return float((self.event_from - self.called_at) / np.timedelta64(1, "m"))


def request(
    event_id: str,
    node_id: str | Sequence[str],
    direction: Direction | str,
    purpose: str,
    called_at: np.datetime64,
    event_from: np.datetime64,
    event_to: np.datetime64,
    requested_kw: float | Sequence[float] | Floats,
    step_minutes: int,
) -> Request:
    """A checked request; one kW for all intervals, or one for each of them; (node, interval) for several nodes.

    Of several nodes one may be asked nothing (0) in an interval, but not all of them.

    Raises Refused with all that is wrong: the event id, the order of the times, a part of an interval,
    kW that are not finite and above zero or not one per interval, an unknown direction or purpose.
    """
    times = {"at": called_at, "from": event_from, "to": event_to}
    problems = [*_id_problems(event_id), *_word_problems(str(direction), purpose)]
    time_problems = _time_problems(times, step_minutes)
    problems += time_problems
    nodes = (node_id,) if isinstance(node_id, str) else tuple(node_id)
    kw: Floats = np.atleast_1d(np.asarray(requested_kw, dtype=np.float64))
    if len(nodes) > 1:
        problems += _shares_problems(kw, nodes)
    elif not time_problems:
        kw = kw.ravel()
        count = int((event_to - event_from) / np.timedelta64(step_minutes, "m"))
        kw = np.repeat(kw, count) if kw.shape == (1,) else kw
        if kw.shape != (count,):
            expected = f"one value, or one for each of the {count} event intervals"
            problems.append(
                _problem("kw", f"{kw.size} values", expected, "give as many kW as there are intervals")
            )
    problems += _kw_problems(kw) if len(nodes) == 1 else []
    if problems:
        raise Refused(problems)
    at, start, end = (time.astype("datetime64[us]") for time in times.values())
    return Request(event_id, nodes, Direction(direction), purpose, at, start, end, kw.ravel())


def outermost(rows: pd.DataFrame) -> pd.DataFrame:
    """Table request as one row an interval, sorted: kW of the outermost nodes summed, which hold those within."""
    if "within_node_id" in rows:
        rows = rows[rows["within_node_id"].isna()]
    first = rows.drop_duplicates("interval_start").sort_values("interval_start", kind="stable")
    if len(first) == len(rows):
        return first.reset_index(drop=True)
    names = ["requested_kw", "expected_kw"]
    total = rows.groupby("interval_start")[names].sum().loc[first["interval_start"]]
    return first.assign(**{name: total[name].to_numpy() for name in names}).reset_index(drop=True)


def check_words(event_id: str | None, purpose: str, kw: float, within: float | None = None) -> None:
    """Refused for an id, a purpose, kW or seconds that no request can have: known before anything is read."""
    problems = [] if event_id is None else _id_problems(event_id)
    problems += _word_problems(str(Direction.SHED), purpose)
    problems += _kw_problems(np.array([kw]))[:1]
    if within is not None and not (np.isfinite(within) and within > 0.0):
        advice = "leave it out to search by counted work"
        problems.append(_problem("within", str(within), "seconds above 0", advice))
    if problems:
        raise Refused([replace(problem, file="call", row=None) for problem in problems])


def default_event_id(called_at: np.datetime64, node_id: str) -> str:
    """An id made of the call's minute in UTC and the node, as 20260715-1000Z-North."""
    stamp = (
        np.datetime_as_string(called_at.astype("datetime64[m]"))
        .replace("-", "")
        .replace(":", "")
        .replace("T", "-")
    )
    place = re.sub(r"[^A-Za-z0-9_-]+", "-", node_id).strip("-") or "node"
    return f"{stamp}Z-{place}"[:LONGEST_EVENT_ID]


def _problem(column: str, came: str, expected: str, advice: str) -> Problem:
    return Problem("request", None, column, came, expected, advice)


def _id_problems(event_id: str) -> list[Problem]:
    if _EVENT_ID.fullmatch(event_id):
        return []
    expected = f"1 to {LONGEST_EVENT_ID} letters, digits, - or _"
    return [_problem("event", repr(event_id[:80]), expected, "give --event an id that can name a folder")]


def _word_problems(direction: str, purpose: str) -> list[Problem]:
    problems = []
    words = [("direction", direction, [str(way) for way in Direction]), ("purpose", purpose, list(PURPOSES))]
    for column, came, known in words:
        if came not in known:
            problems.append(_problem(column, repr(came), "one of " + ", ".join(known), "choose one of them"))
    return problems


def _time_problems(times: dict[str, np.datetime64], step_minutes: int) -> list[Problem]:
    """Times that are not given, in the wrong order, or not a whole number of intervals apart."""
    missing = [name for name, time in times.items() if np.isnat(time)]
    if missing:
        return [
            _problem(name, "no time", "a date and time", "give it as 2026-07-15T16:00+02:00")
            for name in missing
        ]
    at, start, end = times.values()
    problems = []
    if end <= start:
        advice = "an event ends after it starts: exchange them or move the end"
        problems.append(_problem("to", str(end), f"a time after {start}", advice))
    elif (end - start) % np.timedelta64(step_minutes, "m") != np.timedelta64(0, "m"):
        whole = start + (end - start) // np.timedelta64(step_minutes, "m") * np.timedelta64(step_minutes, "m")
        nearest = f"{whole} or {whole + np.timedelta64(step_minutes, 'm')}"
        expected = f"a whole number of {step_minutes}-minute intervals after {start}"
        problems.append(_problem("to", str(end), expected, f"the nearest are {nearest}"))
    if start < at:
        advice = "an event cannot start before it is called: move --from, or give --at the time of the call"
        problems.append(_problem("from", str(start), f"{at} or later", advice))
    return problems


def _shares_problems(kw: Floats, nodes: Sequence[str]) -> list[Problem]:
    """kW (node, interval) of several nodes: finite, not negative, something asked of each and in each interval."""
    expected = "a row of finite kW, 0 or more, for each of " + ", ".join(nodes)
    sound = kw.ndim == 2 and len(kw) == len(nodes) and bool(np.isfinite(kw).all() and (kw >= 0.0).all())
    if not sound:
        return [_problem("kw", f"values of shape {kw.shape}", expected, "give kW by node and interval")]
    idle = [name for name, row in zip(nodes, kw, strict=True) if not row.any()]
    empty = int((~kw.any(axis=0)).sum())
    advice = "leave the node out, or the interval"
    problems = [
        _problem("kw", f"0 kW of node {name}", "something asked of each node", advice) for name in idle
    ]
    if empty:
        problems.append(_problem("kw", f"0 kW in {empty} intervals", "something asked in each", advice))
    return problems


def _kw_problems(kw: Floats) -> list[Problem]:
    wrong = np.flatnonzero(~(np.isfinite(kw) & (kw > 0.0)))
    advice = "kW are positive in the event's direction; for the other way use --direction"
    return [
        Problem("request", int(index) + 1, "kw", str(float(kw[index])), "a finite number above 0", advice)
        for index in wrong
    ]
