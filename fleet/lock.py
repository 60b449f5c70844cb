"""One writer at a time: the lock of a fleet folder, and who holds it.

Owns `.shedwright.lock` and the side file that names the holder. The lock belongs to the operating system, so
a killed run frees it; the side file is only there to be read by whoever waits.
"""

import getpass
import json
import os
import sys
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path
from typing import Final

from filelock import FileLock, Timeout

from fleet.errors import FleetError
from fleet.seals import sweep

LOCK: Final = ".shedwright.lock"
HOLDER: Final = ".shedwright.holder.json"
COMMAND_LENGTH: Final = 200


@contextmanager
def lock(fleet_path: Path, seconds: float = 10.0) -> Iterator[list[str]]:
    """Hold the fleet folder for writing; yields notes on what killed runs left and was swept.

    A process that holds it may take it again (the notes are empty then). Raises FleetError where the folder
    does not exist or cannot be written, and after `seconds` of waiting, naming the holder.
    """
    if not fleet_path.is_dir():
        raise FleetError(f"{fleet_path}: there is no such fleet folder; check the path")
    folder = fleet_path.resolve()
    guard = FileLock(folder / LOCK, is_singleton=True)
    first = not guard.is_locked
    try:
        guard.acquire(timeout=seconds)
    except Timeout as error:
        raise FleetError(
            f"{fleet_path}: is in use by {_holder(folder)}; waited {seconds:g} s; "
            "run again when that has finished"
        ) from error
    except OSError as error:
        raise FleetError(
            f"{fleet_path}: cannot be locked for writing ({error.strerror or error}); "
            "free some space or mend the permissions"
        ) from error
    try:
        if first:
            _sign(folder)
        yield sweep(folder) if first else []
    finally:
        if first:
            with suppress(OSError):
                (folder / HOLDER).unlink()
        guard.release()


def _sign(folder: Path) -> None:
    """Write who holds the lock; a disk too full for that is no reason to stop."""
    try:
        user = getpass.getuser()
    except (KeyError, OSError):
        user = str(os.getuid()) if hasattr(os, "getuid") else "unknown"
    command = " ".join([Path(sys.argv[0]).name, *sys.argv[1:]])[:COMMAND_LENGTH]
    since = datetime.now(UTC).isoformat(timespec="seconds")
    with suppress(OSError):
        (folder / HOLDER).write_text(
            json.dumps({"user": user, "pid": os.getpid(), "command": command, "since": since}) + "\n",
            encoding="utf-8",
        )


def _holder(folder: Path) -> str:
    """The holder in words, harmless to print."""
    try:
        held = json.loads((folder / HOLDER).read_text(encoding="utf-8"))
        words = f"{held['user']}, process {held['pid']} ({held['command']}), since {held['since']}"
    except (OSError, ValueError, KeyError, TypeError):
        return "another process that left no name"
    return "".join(letter if letter.isprintable() else "?" for letter in words)
