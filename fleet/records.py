"""Event records: what is kept of a call, its orders and its settlements, and how it is found again.

Owns the names and places of files in `events/<event_id>/`, revision numbers, and reading them back. How a
folder appears whole and how it is sealed is seals.py's; the types in Parquet files are tables.py's; whether
the numbers are right is audit's. A rehearsal on a fleet folder has a folder, and events, of its own under
`rehearsals/`: nothing here looks there.
"""

import difflib
import json
import re
import shutil
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import pandas as pd

from fleet.errors import FleetError
from fleet.lock import lock
from fleet.schema import table, tables
from fleet.seals import (
    KINDS,
    SEAL,
    digest,
    faults,
    json_text,
    last_seal,
    record_folders,
    seal,
    whole,
    write_folder,
)
from fleet.tables import empty_frame, read_parquet, write_parquet

__all__ = [
    "CallRecord",
    "SettlementRecord",
    "check_free",
    "event_folder",
    "event_ids",
    "events",
    "lock",
    "next_revision",
    "read_call",
    "read_settlement",
    "revisions",
    "verify_seals",
    "write_call",
    "write_folder",
    "write_orders",
    "write_settlement",
]

EVENTS: Final = "events"
EVENT_ID: Final = re.compile(r"[A-Za-z0-9_-]{1,64}")
FILE_NAME: Final = re.compile(r"[A-Za-z0-9_][A-Za-z0-9._-]{0,99}")
PAST_COLUMNS: Final = (
    "event_id",
    "revision",
    "purpose",
    "direction",
    "site_id",
    "window_start",
    "window_end",
    "called_at",
    "effective_from",
)


@dataclass(frozen=True)
class CallRecord:
    """One revision of a call as it was written: tables by name, proof, frozen input rows and rules."""

    path: Path
    event_id: str
    revision: int
    frames: Mapping[str, pd.DataFrame]
    proof: Mapping[str, Any]
    frozen: Mapping[str, pd.DataFrame]
    frozen_json: Mapping[str, Any]


@dataclass(frozen=True)
class SettlementRecord:
    """One revision of a settlement as it was written: tables by name, statement texts by file name."""

    path: Path
    event_id: str
    revision: int
    frames: Mapping[str, pd.DataFrame]
    statements: Mapping[str, str]


def write_call(
    fleet_path: Path,
    event_id: str,
    frames: Mapping[str, pd.DataFrame],
    proof: Mapping[str, Any],
    frozen: Mapping[str, pd.DataFrame],
    frozen_json: Mapping[str, Mapping[str, Any]],
) -> Path:
    """Write `events/<event_id>/call-001/` whole or not at all; returns that folder.

    frames: every table of folder "call". frozen: input tables of folder "fleet", defaults resolved.
    frozen_json: any name. The event's folder and the call in it appear together, in one rename. Raises
    FleetError where the event exists, a table is missing or does not fit its columns, or the disk refuses.
    """
    _check_event_id(event_id)
    _check_tables("call", frames)
    final = fleet_path / EVENTS / event_id
    with lock(fleet_path):
        check_free(fleet_path, event_id)
        with whole(final) as making:
            call = making / "call-001"
            (call / "frozen").mkdir(parents=True)
            _write_frames(call, "call", frames)
            _write_frames(call / "frozen", "fleet", frozen)
            for name, content in frozen_json.items():
                _write_json(call / "frozen" / f"{_file_name(name)}.json", content)
            frozen_files = sorted((call / "frozen").iterdir())
            digests = {path.name: digest(path) for path in frozen_files}
            _write_json(call / "proof.json", dict(proof) | {"frozen_sha256": digests})
            seal(call, call.name, None)
    return final / "call-001"


def write_orders(fleet_path: Path, event_id: str, files: Mapping[str, str | bytes]) -> Path:
    """Write the files of an event's orders as its next `orders-00n`; returns the folder.

    Where the newest orders of the event hold exactly these files, nothing is written and theirs is returned.
    """
    contents = {
        _file_name(name): content.encode() if isinstance(content, str) else content
        for name, content in files.items()
    }

    def writer(folder: Path) -> None:
        for name, content in contents.items():
            (folder / name).write_bytes(content)

    with lock(fleet_path):
        newest = _revisions(event_folder(fleet_path, event_id), "orders")
        if newest and _same_files(newest[max(newest)], contents):
            return newest[max(newest)]
        return _append(fleet_path, event_id, "orders", writer)


def write_settlement(
    fleet_path: Path,
    event_id: str,
    frames: Mapping[str, pd.DataFrame],
    statements: Mapping[str, str],
    written: Mapping[str, Path] | None = None,
) -> Path:
    """Write a settlement and its statement files as the next `settlement-00n`; returns the folder.

    written: tables that lie in a file already, which is moved. The frames carry the revision they were made for
    (see next_revision); FleetError where another settlement took that number meanwhile, where a table is missing
    or does not fit, or the disk refuses.
    """
    moved = dict(written or {})
    _check_tables("settlement", [*frames, *moved])
    texts = {_file_name(name): text for name, text in statements.items()}

    def writer(folder: Path) -> None:
        _write_frames(folder, "settlement", frames)
        for name, path in moved.items():
            shutil.move(path, folder / f"{name}.parquet")
        for name, text in texts.items():
            (folder / name).write_bytes(text.encode())

    with lock(fleet_path):
        number = next_revision(fleet_path, event_id, "settlement")
        for name in ("intervals", "days", "day_intervals", "sites", "fleet"):
            held = name in frames and "revision" in frames[name]
            made_for = set(frames[name]["revision"].unique()) if held else set()
            if made_for - {number}:
                raise FleetError(
                    f"settlement of event {event_id}: table {name} was made for revision "
                    f"{', '.join(str(found) for found in sorted(made_for))}, but {number} is the next; "
                    "another settlement was written meanwhile: settle again"
                )
        return _append(fleet_path, event_id, "settlement", writer)


def read_call(
    fleet_path: Path,
    event_id: str,
    revision: int | None = None,
    only: Iterable[str] | None = None,
    frozen_only: Iterable[str] | None = None,
    columns: Mapping[str, Sequence[str]] | None = None,
) -> CallRecord:
    """Read a call, the newest revision unless one is named; `only` these of its tables, and `frozen_only` these
    of its frozen ones, where given; of a table in `columns` these alone.

    Raises FleetError where event, revision or a file is missing or unreadable.
    """
    number, path = _one(fleet_path, event_id, "call", revision)
    frozen = path / "frozen"
    there = sorted(found.stem for found in frozen.glob("*.parquet"))
    tables_there = there if frozen_only is None else [name for name in there if name in set(frozen_only)]
    return CallRecord(
        path=path,
        event_id=event_id,
        revision=number,
        frames=_read_frames(path, "call", only, columns),
        proof=_read_json(path / "proof.json"),
        frozen={
            name: read_parquet(frozen / f"{name}.parquet", table("fleet", name)) for name in tables_there
        },
        frozen_json={found.stem: _read_json(found) for found in sorted(frozen.glob("*.json"))},
    )


def read_settlement(
    fleet_path: Path, event_id: str, revision: int | None = None, only: Iterable[str] | None = None
) -> SettlementRecord:
    """Read a settlement, the newest revision unless one is named, `only` these of its tables where given.

    FleetError where it cannot be.
    """
    number, path = _one(fleet_path, event_id, "settlement", revision)
    texts = sorted(
        found
        for found in path.iterdir()
        if found.is_file() and found.suffix != ".parquet" and found.name != SEAL
    )
    return SettlementRecord(
        path=path,
        event_id=event_id,
        revision=number,
        frames=_read_frames(path, "settlement", only),
        statements={found.name: found.read_text(encoding="utf-8") for found in texts},
    )


def events(fleet_path: Path) -> pd.DataFrame:
    """Windows of all calls in force: the newest call revision of each event, one row per called site.

    Columns PAST_COLUMNS, sorted by event_id and site_id; purpose tells real and test calls, which count
    against call limits, from rehearsals, which do not. What lies under `rehearsals/` is never in it.
    FleetError where a record cannot be read: a call that is left out would be a call limit not kept.
    """
    rows = [_past(fleet_path, event_id) for event_id in event_ids(fleet_path)]
    found = [frame for frame in rows if len(frame)]
    if not found:
        return _no_past()
    past = pd.concat(found, ignore_index=True)
    return past.sort_values(["event_id", "site_id"], kind="stable", ignore_index=True)


def event_folder(fleet_path: Path, event_id: str) -> Path:
    """The folder of an event; FleetError names the nearest event ids where there is none."""
    path = fleet_path / EVENTS / event_id
    if EVENT_ID.fullmatch(event_id) and path.is_dir():
        return path
    if not fleet_path.is_dir():
        raise FleetError(f"{fleet_path}: there is no such fleet folder; check the path")
    known = event_ids(fleet_path)
    if not known:
        raise FleetError(
            f"{fleet_path}: no event {event_id!r}; there are no events yet: `shedwright call` makes one"
        )
    near = difflib.get_close_matches(event_id, known, n=3, cutoff=0.4) or known[-3:]
    raise FleetError(f"{fleet_path}: no event {event_id!r}; nearest of {len(known)}: {', '.join(near)}")


def event_ids(fleet_path: Path) -> list[str]:
    """Ids of all events, sorted."""
    folder = fleet_path / EVENTS
    if not folder.is_dir():
        return []
    return sorted(path.name for path in folder.iterdir() if path.is_dir() and EVENT_ID.fullmatch(path.name))


def check_free(fleet_path: Path, event_id: str) -> None:
    """FleetError where the id cannot name an event's folder, or an event of that id exists."""
    _check_event_id(event_id)
    final = fleet_path / EVENTS / event_id
    if final.exists():
        raise FleetError(
            f"{final}: there is an event {event_id} already, and an event is never written over; "
            "choose another id with --event"
        )


def revisions(fleet_path: Path, event_id: str, kind: str) -> list[int]:
    """Revision numbers there are of an event's "call", "orders" or "settlement", rising."""
    return sorted(_revisions(event_folder(fleet_path, event_id), kind))


def next_revision(fleet_path: Path, event_id: str, kind: str) -> int:
    """The next free revision number of an event's "call", "orders" or "settlement"."""
    return max(revisions(fleet_path, event_id, kind), default=0) + 1


def verify_seals(event_path: Path) -> list[str]:
    """Faults of an event's seals, one sentence each: files, revisions, the chain; empty where all is well."""
    return faults(event_path)


def _past(fleet_path: Path, event_id: str) -> pd.DataFrame:
    """Rows of `events` of one event."""
    number, path = _one(fleet_path, event_id, "call", None)
    request = read_parquet(path / "request.parquet", table("call", "request"))
    windows = read_parquet(path / "windows.parquet", table("call", "windows"))
    if request.empty:
        raise FleetError(f"{path}: request.parquet has no row; the record is incomplete")
    windows = windows.assign(event_id=event_id, revision=number)
    for name in ("purpose", "direction", "called_at", "effective_from"):
        windows[name] = pd.Series(request[name].iloc[0], index=windows.index, dtype=request[name].dtype)
    return windows[list(PAST_COLUMNS)]


def _no_past() -> pd.DataFrame:
    both = pd.concat([empty_frame(table("call", "windows")), empty_frame(table("call", "request"))], axis=1)
    frame = both.loc[:, ~both.columns.duplicated()].assign(revision=pd.Series(dtype="int64"))
    return frame[list(PAST_COLUMNS)]


def _append(fleet_path: Path, event_id: str, kind: str, writer: Callable[[Path], None]) -> Path:
    """Write the next revision of a kind, chained to the newest seal of the event."""
    event_path = event_folder(fleet_path, event_id)
    final = event_path / f"{kind}-{next_revision(fleet_path, event_id, kind):03d}"
    before = last_seal(event_path)
    if before is None:
        raise FleetError(f"{event_path}: holds no call; the event cannot be carried on")
    write_folder(final, writer, before)
    return final


def _revisions(event_path: Path, kind: str) -> dict[int, Path]:
    if kind not in KINDS:
        raise FleetError(f"no kind of record {kind!r}; there are {', '.join(KINDS)}")
    named = [(path.name.rsplit("-", 1), path) for path in record_folders(event_path)]
    return {int(number): path for (found, number), path in named if found == kind}


def _one(fleet_path: Path, event_id: str, kind: str, revision: int | None) -> tuple[int, Path]:
    """Number and folder of one revision of a kind, the newest where none is named."""
    found = _revisions(event_folder(fleet_path, event_id), kind)
    if not found:
        raise FleetError(f"event {event_id}: has no {kind} yet; there is nothing to read")
    number = max(found) if revision is None else revision
    if number not in found:
        there = ", ".join(str(number) for number in sorted(found))
        raise FleetError(f"event {event_id}: has no {kind} revision {number}; there are {there}")
    return number, found[number]


def _check_event_id(event_id: str) -> None:
    if not EVENT_ID.fullmatch(event_id):
        raise FleetError(
            f"event id {event_id!r} cannot be a folder's name; use 1 to 64 ASCII letters, digits, - and _"
        )


def _file_name(name: str) -> str:
    if not FILE_NAME.fullmatch(name) or name == SEAL:
        raise FleetError(f"file name {name!r} cannot be used in a record; use letters, digits, dot, - and _")
    return name


def _check_tables(folder: str, frames: Iterable[str]) -> None:
    wanted = set(tables(folder))
    missing, unknown = sorted(wanted - set(frames)), sorted(set(frames) - wanted)
    if missing or unknown:
        raise FleetError(
            f"tables of a {folder} record do not match; missing: {', '.join(missing) or 'none'}; "
            f"unknown: {', '.join(unknown) or 'none'}"
        )


def _write_frames(path: Path, folder: str, frames: Mapping[str, pd.DataFrame]) -> None:
    for name, frame in frames.items():
        write_parquet(frame, path / f"{name}.parquet", table(folder, name))


def _read_frames(
    path: Path, folder: str, only: Iterable[str] | None, columns: Mapping[str, Sequence[str]] | None = None
) -> dict[str, pd.DataFrame]:
    names = tables(folder) if only is None else only
    few = columns or {}
    return {
        name: read_parquet(path / f"{name}.parquet", table(folder, name), few.get(name)) for name in names
    }


def _write_json(path: Path, content: Mapping[str, Any]) -> None:
    try:
        path.write_bytes(json_text(content).encode())
    except FleetError as error:
        raise FleetError(f"{path.name}: {error}") from error


def _read_json(path: Path) -> Any:
    try:
        return json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise FleetError(
            f"{path}: cannot be read ({error}); the record is incomplete or was changed"
        ) from error


def _same_files(folder: Path, contents: Mapping[str, bytes]) -> bool:
    there = {
        path.name: path.read_bytes() for path in folder.iterdir() if path.is_file() and path.name != SEAL
    }
    return there == dict(contents)
