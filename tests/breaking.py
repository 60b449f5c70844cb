"""Breaks a run at its k-th write operation: raises an OSError, or kills the process with SIGKILL.

A broken write leaves half of its content behind, as a full disk or a dead machine would. Run as a script it
forks one child for each k, so that the real SIGKILL is seen with nothing imported anew:
`python breaking.py DIR call|orders|settlement` prints one JSON list of what each killed run left; with a number
behind it the runs are killed at that many moments spread over the time that a write takes.
"""

import errno
import json
import os
import shutil
import signal
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any
from unittest import mock

from made_record import call_frames, frozen_frames, settlement_frames

from fleet import records

EVENT = "EV-1"
WRITTEN_AGAIN = 4
"""The next run after every fourth kill writes the record anew; after the others it only takes the lock."""


class Breaker:
    """Counts write operations and breaks the one numbered `at` (from 1); 0 never breaks."""

    def __init__(self, at: int, act: Callable[[], None]) -> None:
        self.at, self.act, self.count = at, act, 0

    def passes(self) -> bool:
        self.count += 1
        return self.count != self.at


def full_disk() -> None:
    raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC), "somewhere")


def killed() -> None:
    os.kill(os.getpid(), signal.SIGKILL)


@contextmanager
def breaking(breaker: Breaker) -> Iterator[Breaker]:
    """Every write operation of a record passes the breaker first."""
    real_mkdir, real_bytes, real_text = Path.mkdir, Path.write_bytes, Path.write_text
    real_rename, real_fsync, real_parquet = os.rename, os.fsync, records.write_parquet

    def mkdir(self: Path, *rest: Any, **named: Any) -> None:
        if not breaker.passes():
            breaker.act()
        real_mkdir(self, *rest, **named)

    def write_bytes(self: Path, data: bytes) -> int:
        if not breaker.passes():
            real_bytes(self, data[: len(data) // 2])
            breaker.act()
        return real_bytes(self, data)

    def write_text(self: Path, data: str, *rest: Any, **named: Any) -> int:
        if not breaker.passes():
            real_text(self, data[: len(data) // 2], *rest, **named)
            breaker.act()
        return real_text(self, data, *rest, **named)

    def parquet(frame: Any, path: Path, table: Any) -> None:
        if not breaker.passes():
            real_bytes(path, b"PAR1half")
            breaker.act()
        real_parquet(frame, path, table)

    def rename(source: Any, target: Any) -> None:
        if not breaker.passes():
            breaker.act()
        real_rename(source, target)

    def fsync(handle: int) -> None:
        if not breaker.passes():
            breaker.act()
        real_fsync(handle)

    with (
        mock.patch.object(Path, "mkdir", mkdir),
        mock.patch.object(Path, "write_bytes", write_bytes),
        mock.patch.object(Path, "write_text", write_text),
        mock.patch.object(records, "write_parquet", parquet),
        mock.patch("os.rename", rename),
        mock.patch("os.fsync", fsync),
    ):
        yield breaker


def write(fleet: Path, kind: str, made: dict[str, Any]) -> Path:
    """Write a call, or the next orders or settlement of the event, from frames made beforehand."""
    if kind == "call":
        settings = {"settings": {"timezone": "Europe/Athens"}}
        return records.write_call(fleet, EVENT, made["call"], {"status": "proven"}, made["frozen"], settings)
    if kind == "orders":
        pages = {f"{number:03d}-site.txt": "stop\n" * 2000 for number in range(1, 9)}
        return records.write_orders(fleet, EVENT, {**pages, "orders.json": "[]\n"})
    return records.write_settlement(fleet, EVENT, made["settlement"], {"statement.txt": "Paid: 0.00\n"})


def made_frames() -> dict[str, Any]:
    return {"call": call_frames(EVENT), "frozen": frozen_frames(), "settlement": settlement_frames(EVENT)}


def _kill_each(base: Path, kind: str) -> list[dict[str, Any]]:
    """One forked run per k until a run ends unharmed; what it left, and what the next run made of it."""
    made, found, start = made_frames(), [], base / "start"
    _start(start, kind, made)
    for at in range(1, 1000):
        fleet = base / f"{at:03d}"
        shutil.copytree(start, fleet)
        died = _forked(lambda fleet=fleet, at=at: _break(fleet, kind, made, at))
        left = _left(fleet)
        whole = f"events/{EVENT}/{kind}-001" in left
        written = not whole and at % WRITTEN_AGAIN == 0
        again = _forked(lambda fleet=fleet, written=written: _next_run(fleet, kind, made, written))
        run = {"at": at, "killed": died == -signal.SIGKILL, "left": left, "again": again}
        found.append({**run, "whole": whole or written})
        if died == 0:
            break
    return found


def _start(start: Path, kind: str, made: dict[str, Any]) -> None:
    """The folder every run of a kind begins with: empty for a call, with the call for what follows it."""
    start.mkdir(parents=True)
    if kind != "call":
        _forked(lambda: write(start, "call", made))


def _left(fleet: Path) -> list[str]:
    """Names one and two levels below `events`, hidden ones too."""
    found = [*fleet.glob("events/*"), *fleet.glob("events/*/*")]
    return sorted(str(path.relative_to(fleet)) for path in found)


def _kill_at_moments(base: Path, kind: str, count: int) -> list[dict[str, Any]]:
    """Runs killed `count` times, evenly over the time from a write's first byte to its last rename."""
    made, found, start = made_frames(), [], base / "start"
    _start(start, kind, made)
    shutil.copytree(start, base / "000")
    took = _seconds_of(base / "000", kind, made)
    for turn in range(count):
        fleet = base / f"{turn + 1:03d}"
        shutil.copytree(start, fleet)
        died = _killed_after(fleet, kind, made, took * (turn + 0.5) / count)
        left = _left(fleet)
        again = _forked(lambda fleet=fleet: _next_run(fleet, kind, made, False))
        whole = f"events/{EVENT}/{kind}-001" in left
        found.append(
            {"at": turn + 1, "killed": died == -signal.SIGKILL, "left": left, "again": again, "whole": whole}
        )
    return found


def _seconds_of(fleet: Path, kind: str, made: dict[str, Any]) -> float:
    """How long a write takes that nobody disturbs, in a child like the others."""
    reader, writer = os.pipe()

    def timed() -> None:
        started = time.perf_counter()
        write(fleet, kind, made)
        os.write(writer, repr(time.perf_counter() - started).encode())

    _forked(timed)
    return float(os.read(reader, 100))


def _killed_after(fleet: Path, kind: str, made: dict[str, Any], seconds: float) -> int:
    """Exit code of a write that is killed so long after it began; 0 where it was quicker."""
    reader, writer = os.pipe()
    child = os.fork()
    if child == 0:
        code = 1
        try:
            os.write(writer, b"go")
            write(fleet, kind, made)
            code = 0
        finally:
            os._exit(code)
    os.read(reader, 2)
    time.sleep(seconds)
    os.kill(child, signal.SIGKILL)
    for end in (reader, writer):
        os.close(end)
    return os.waitstatus_to_exitcode(os.waitpid(child, 0)[1])


def _next_run(fleet: Path, kind: str, made: dict[str, Any], written: bool) -> None:
    if written:
        write(fleet, kind, made)
    else:
        with records.lock(fleet):
            pass


def _break(fleet: Path, kind: str, made: dict[str, Any], at: int) -> None:
    with breaking(Breaker(at, killed)):
        write(fleet, kind, made)


def _forked(run: Callable[[], Any]) -> int:
    """Exit code of `run` in a child process; minus the signal where one ended it."""
    child = os.fork()
    if child == 0:
        code = 1
        try:
            run()
            code = 0
        finally:
            os._exit(code)
    return os.waitstatus_to_exitcode(os.waitpid(child, 0)[1])


if __name__ == "__main__":
    folder, what, *moments = sys.argv[1:]
    print(
        json.dumps(
            _kill_at_moments(Path(folder), what, int(moments[0]))
            if moments
            else _kill_each(Path(folder), what)
        )
    )
