"""Fleet folders damaged at random (a cell, a row, a column, a file), checked, quoted and called.

Run as a script for a long run: `python fuzz.py FIRST COUNT` prints one line for each fault found and the sums.
Every folder follows from its number alone, so that a fault can be looked at again. What is the same in every
folder (the tables without damage) is read once and remembered; commands run as a person's do, in this process.
"""

import io
import json
import shutil
import sys
import time
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path
from tempfile import mkdtemp
from typing import Any
from unittest import mock

import numpy as np
import pandas as pd
from commands import Ran, run
from fleet_folders import SETTINGS, small_tables
from typer.main import get_command

from fleet import folder as fleet_folder
from fleet.audit import audit
from fleet.values import Typed

ASK = ("--from", "2026-07-14T16:00", "--to", "2026-07-14T18:00", "--at", "2026-07-14T13:00")
CALL = ("--kw", "60", *ASK, "--event", "F")
LOOKED_AT = 8
"""Every eighth folder meets the other commands too: called though check refused it, or quoted, ordered, settled."""
LONGEST_S = 60.0
LEFT_OUT = {"meters.csv", "meters.parquet"}
"""Files that a call does not read."""
SAID_TO_USERS = {0: "called", 2: "refused", 3: "not met"}
NASTY = (
    "", " ", "-1", "0", "1e308", "-1e308", "1e-300", "nan", "inf", "-inf", "1,5", "1.2.3", "abc", "true", "NULL",
    "9" * 400, "46217.5", "2026-07-14", "2026-07-14T10:00Z", "2026-07-14T10:07Z", "2026-02-30", "9999-12-31T23:00Z",
    "0001-01-01", "\x1b[31m", "\x00", "=1+1", "harbour", "library", "\u202e", "'; --", '"', "\n", "é", "🧊", "../x",
    "0.5", "15", "24", "100", "1000", "50000", "200000",
)  # fmt: skip
BYTES = (b"", b"\x00", b"\xff\xfe", b"\xef\xbb\xbf", b"PAR1", b"\r\n\r\n", b'"', b"\n", b"a,b\n1,2\n")


@dataclass(frozen=True)
class Outcome:
    """How one damaged folder ended: accepted and called, not met, refused, or the fault that is a defect."""

    number: int
    damage: str
    end: str
    fault: str
    seconds: float


@cache
def texts() -> dict[str, str]:
    """The small fleet by the hour, each file as text."""
    files = {"fleet.toml": SETTINGS + "interval_minutes = 60\n"}
    for name, frame in small_tables().items():
        if "interval_start" in frame:
            frame = frame[frame["interval_start"].str.endswith(":00Z")]
        files[f"{name}.csv"] = frame.to_csv(index=False)
    return files


def damaged(number: int, folder: Path) -> str:
    """Write the small fleet to `folder` with one to three damages; returns what they are."""
    rng = np.random.default_rng(number)
    files: dict[str, str | bytes] = dict(texts())
    told = []
    for _ in range(int(rng.choice((1, 1, 1, 2, 3)))):
        name = str(rng.choice(sorted(files)))
        level = str(rng.choice(("cell", "cell", "cell", "row", "column", "file")))
        if name == "fleet.toml" or not isinstance(files[name], str) or not files[name]:
            level = "file"
        told.append(f"{level} of {name}")
        files |= _LEVELS[level](files, name, rng)
    folder.mkdir(parents=True)
    for name, content in files.items():
        target = folder / name
        if content == b"<folder>":
            target.mkdir()
        elif content != b"<none>":
            target.write_bytes(content.encode() if isinstance(content, str) else content)
    return ", ".join(told)


def _table(text: str) -> pd.DataFrame:
    return pd.read_csv(io.StringIO(text), dtype=str, keep_default_na=False)


def _cell(files: dict[str, str | bytes], name: str, rng: np.random.Generator) -> dict[str, str | bytes]:
    try:
        frame = _table(str(files[name]))
    except ValueError:
        return _file(files, name, rng)
    if frame.empty:
        return {}
    for _ in range(int(rng.integers(1, 3))):
        frame.iloc[int(rng.integers(len(frame))), int(rng.integers(frame.shape[1]))] = str(rng.choice(NASTY))
    return {name: frame.to_csv(index=False)}


def _row(files: dict[str, str | bytes], name: str, rng: np.random.Generator) -> dict[str, str | bytes]:
    lines = str(files[name]).splitlines(keepends=True)
    at = int(rng.integers(len(lines)))
    turn = int(rng.integers(6))
    if turn == 0:
        del lines[at]
    elif turn == 1:
        lines.insert(at, lines[int(rng.integers(len(lines)))])
    elif turn == 2:
        lines[1:] = list(rng.permutation(np.array(lines[1:], dtype=object)))
    elif turn == 3:
        lines[at] = lines[at].rstrip("\n") + str(rng.choice((",", ",x", '"', "\r", ";"))) + "\n"
    elif turn == 4:
        lines = lines[: at + 1]
    else:
        lines[at] = str(rng.choice((",,,,\n", "\n", "x\n", "\x00\n", '"\n')))
    return {name: "".join(lines)}


def _column(files: dict[str, str | bytes], name: str, rng: np.random.Generator) -> dict[str, str | bytes]:
    try:
        frame = _table(str(files[name]))
    except ValueError:
        return _file(files, name, rng)
    if not frame.shape[1]:
        return {}
    column = str(rng.choice(list(frame.columns)))
    turn = int(rng.integers(7))
    if turn == 0:
        frame = frame.drop(columns=column)
    elif turn == 1:
        frame = frame.rename(columns={column: column[:-1] + str(rng.choice(("", "x", "\x1b", " ")))})
    elif turn == 2:
        frame[column] = str(rng.choice(NASTY))
    elif turn == 3:
        numbers = pd.to_numeric(frame[column], errors="coerce")
        frame[column] = (numbers * float(rng.choice((-1.0, 0.0, 1e-3, 1e3, 1e6, 3.516853, 1.8)))).astype(str)
    elif turn == 4:
        frame = pd.concat([frame, frame[column]], axis=1)
    elif turn == 5:
        frame[column] = rng.permutation(frame[column].to_numpy(dtype=object))
    else:
        frame.insert(0, str(rng.choice(("notes", "site_ID", "kw", ""))), "x", allow_duplicates=True)
    return {name: frame.to_csv(index=False)}


def _file(files: dict[str, str | bytes], name: str, rng: np.random.Generator) -> dict[str, str | bytes]:
    content = files[name]
    whole = content.encode() if isinstance(content, str) else content
    turn, at = int(rng.integers(9)), int(rng.integers(len(whole) + 1))
    if turn == 0:
        return {name: b"<none>"}
    if turn == 1:
        return {name: b"<folder>"}
    if turn == 2:
        return {name: whole[:at]}
    if turn == 3:
        return {name: whole[:at] + bytes(rng.integers(0, 256, 3, dtype=np.uint8)) + whole[at:]}
    if turn == 4:
        return {name: BYTES[int(rng.integers(len(BYTES)))]}
    if turn == 5:
        return {name: whole[:at] + BYTES[int(rng.integers(len(BYTES)))] + whole[at:]}
    if turn == 6:
        return {name: str(content).encode("utf-16") if isinstance(content, str) else whole}
    if turn == 7 and name.endswith(".csv") and isinstance(content, str):
        return {name: b"<none>", name.replace(".csv", ".parquet"): _parquet(content, rng)}
    other = str(rng.choice(sorted(files)))
    return {name: files[other]}


def _parquet(text: str, rng: np.random.Generator) -> bytes:
    """The table as Parquet: with numbers where all are, sometimes with other types, sometimes cut or spoilt."""
    try:
        frame = pd.read_csv(io.StringIO(text))
    except ValueError:
        return b"PAR1"
    turn = int(rng.integers(6))
    if frame.shape[1] and turn == 0:
        frame[frame.columns[0]] = [[1, 2]] * len(frame)
    elif frame.shape[1] and turn == 1:
        frame[frame.columns[-1]] = pd.Timestamp("2026-07-14 12:00")
    elif frame.shape[1] and turn == 2:
        frame[frame.columns[0]] = frame[frame.columns[0]].astype("category")
    buffer = io.BytesIO()
    frame.to_parquet(buffer)
    whole = bytearray(buffer.getvalue())
    if turn == 3:
        return bytes(whole[: int(rng.integers(len(whole)))])
    if turn == 4:
        for _ in range(5):
            whole[int(rng.integers(len(whole)))] = int(rng.integers(256))
    return bytes(whole)


_LEVELS = {"cell": _cell, "row": _row, "column": _column, "file": _file}


@contextmanager
def remembering() -> Iterator[None]:
    """Tables whose bytes were read before are taken from memory, and nothing waits for the disk."""
    real, known = fleet_folder._read, {}

    def read(source: Path, name: str, settings: Any, span: Any = None) -> Typed:
        if not source.is_file():
            return real(source, name, settings, span)
        reading = (settings.time_reading(name), settings.timezone, settings.interval_minutes)
        key = (name, source.name, source.read_bytes(), reading, span)
        if key not in known:
            found = real(source, name, settings, span)
            if source.suffix != ".csv" or source.read_text("utf-8", "replace") != texts()[source.name]:
                return found
            known[key] = found
        found = known[key]
        return replace(
            found, frame=found.frame.copy(), problems=list(found.problems), notes=list(found.notes)
        )

    with (
        mock.patch.object(fleet_folder, "_read", read),
        mock.patch("os.fsync", lambda handle: None),
        mock.patch("typer.main.get_command", cache(get_command)),
    ):
        yield


def tried(number: int, base: Path) -> Outcome:
    """Damage, check, quote and call one folder; what is not a refusal, an answer or a whole record is a fault."""
    folder = base / f"{number}"
    damage = damaged(number, folder)
    started = time.perf_counter()
    try:
        end, fault = _end(folder, number)
    except Exception as error:
        end, fault = "defect", f"{type(error).__name__}: {error}"[:300]
    seconds = time.perf_counter() - started
    left = [path for path in folder.rglob("*") if ".making-" in path.name]
    records = list(folder.glob("events/*/call-*"))
    if not fault and left:
        fault = f"left behind: {left[0]}"
    if not fault and bool(records) != (end == "called"):
        fault = f"{end}, but there are {len(records)} records"
    if not fault and seconds > LONGEST_S:
        fault = f"took {seconds:.0f} s"
    shutil.rmtree(folder)
    return Outcome(number, damage, end, fault, seconds)


def _end(folder: Path, number: int) -> tuple[str, str]:
    """How it ended, and the fault where it ended otherwise than it may."""
    closely = number % LOOKED_AT == 0
    checked = run("check", folder, "--json")
    if checked.code not in (0, 2) or not checked.out:
        return "defect", f"check ended with {checked}"[:300]
    found = json.loads(checked.out)
    files = {problem.get("file") for problem in found.get("problems", [{}])}
    if checked.code == 2 and not closely:
        return "refused by check", ""
    called = run("call", folder, *CALL)
    if called.code not in SAID_TO_USERS or bool(called.err) == (called.code == 0):
        return "defect", f"call ended with {called}"[:300]
    end = SAID_TO_USERS[called.code]
    if checked.code == 2 and not files <= LEFT_OUT:
        return "refused by check", "" if end == "refused" else f"{end} all the same"
    return end, _after(folder, called) if closely else ""


def _after(folder: Path, called: Ran) -> str:
    """The fault, if any, of the commands that stand beside a call, and of its record."""
    ends = {"quote": run("quote", folder, *ASK).code}
    if called.code == 0:
        ends |= {name: run(name, folder, "F").code for name in ("orders", "settle")}
        found = audit(folder, "F")
        if not found.holds:
            return f"the audit found {found.faults[:3]}"
    return "" if set(ends.values()) <= {0, 2} else f"ended with {ends}"


def main(first: int, count: int) -> None:
    """A long run: one line for each fault and each hundred, then how many ended how."""
    base, ends, slowest, faults = Path(mkdtemp(prefix="fuzz-")), Counter[str](), 0.0, 0
    with remembering():
        for number in range(first, first + count):
            outcome = tried(number, base)
            ends[outcome.end] += 1
            slowest = max(slowest, outcome.seconds)
            if outcome.fault:
                faults += 1
                print(f"{number} ({outcome.damage}): {outcome.fault}", flush=True)
            if (number + 1 - first) % 100 == 0:
                print(f"to {number}: {dict(ends)}; {faults} faults; slowest {slowest:.1f} s", flush=True)
    base.rmdir()
    print(f"{count} folders from {first}: {dict(ends)}; {faults} faults; slowest {slowest:.1f} s", flush=True)


if __name__ == "__main__":
    main(int(sys.argv[1]), int(sys.argv[2]))
