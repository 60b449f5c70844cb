"""Rules on the inputs of a call: frozen files against the digests in the proof, today's files against those then.

A frozen file that changed is a fault: nothing else vouches for it. An input file of the fleet that changed since is
a note, for the event rests on the frozen rows.
"""

import hashlib
from pathlib import Path

from fleet.audit.findings import Findings
from fleet.records import CallRecord

RULE = "frozen files"


def frozen_digests(record: CallRecord, folder: str, found: Findings) -> None:
    """SHA-256 of every frozen file equals the proof's; a note where the proof has none."""
    told = record.proof.get("frozen_sha256")
    if told is None:
        found.notes.append(
            f"{folder}: the proof holds no digests of the frozen files; only the seal vouches for them"
        )
        return
    there = {
        path.name: _digest(path) for path in sorted((record.path / "frozen").iterdir()) if path.is_file()
    }
    for name in sorted(set(told) | set(there)):
        found.value(RULE, f"{folder}/frozen/{name}", "sha256", there.get(name), told.get(name))


def digests(folder: Path) -> dict[str, str]:
    """SHA-256 of every file of a folder, by name."""
    return {path.name: _digest(path) for path in sorted(folder.iterdir()) if path.is_file()}


def changed_inputs(fleet_path: Path, record: CallRecord) -> list[str]:
    """One note for the input files of the fleet that are not what the call read."""
    told = dict(record.proof.get("sha256", {}))
    now = {name: _digest(fleet_path / name) for name in told if (fleet_path / name).is_file()}
    changed = sorted(name for name in told if now.get(name) != told[name])
    if not changed:
        return []
    return [
        f"{record.path.name}: read from inputs that have changed since: {', '.join(changed)}; the frozen rows hold"
    ]


def _digest(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()
