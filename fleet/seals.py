"""Folders that appear whole or not at all, and the seals that show a later change or removal.

Owns the hidden making folder, its one atomic rename, `seal.json` and the chain of seals within one event.
What a record folder holds is records.py's business; who may write at a time is lock.py's.

A seal names the SHA-256 of every file of its folder and of the seal written before it in the event, so that a
changed file and a folder removed from within the chain show. Nothing was written after the newest folder that
could know of it: taking that one away whole leaves no trace in the chain, and its seal alone vouches for it.
"""

import hashlib
import json
import os
import re
import secrets
import shutil
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any, Final

from fleet.errors import FleetError
from fleet.schema import SCHEMA_VERSION

MAKING: Final = ".making-"
SEAL: Final = "seal.json"
KINDS: Final = ("call", "orders", "settlement")
REVISION: Final = re.compile(rf"({'|'.join(KINDS)})-(\d{{3,}})")
UNPRINTED: Final = re.compile("[\x7f-\x9f\xad\u200b-\u200f\u2028-\u202e\u2060-\u206f\ufeff]")
"""Characters that JSON lets through and that could steer a terminal or turn a text round."""
HEX_DIGEST: Final = re.compile(r"[0-9a-f]{64}")


@dataclass(frozen=True)
class Seal:
    """What `seal.json` of one record folder says, and the digest of that file itself."""

    folder: str
    digest: str
    position: int
    """1 for the first folder of the event, then one more each."""
    previous: str | None
    """Digest of the seal written before this one; None for the first."""
    previous_folder: str | None
    files: Mapping[str, str]


@contextmanager
def whole(final: Path) -> Iterator[Path]:
    """A making folder beside `final`, renamed to it when the block ends well, gone when it does not.

    Every file and folder is flushed to the disk before the rename. Raises FleetError where `final` exists
    or the disk refuses; nothing is left behind then.
    """
    if final.exists():
        raise FleetError(f"{final}: exists already; a record is never written over")
    making = final.parent / f"{MAKING}{final.name}-{secrets.token_hex(4)}"
    fresh = not final.parent.exists()
    try:
        making.mkdir(parents=True)
        yield making
        _flush(making)
        os.rename(making, final)
    except BaseException as error:
        left = _clear(making, fresh)
        if isinstance(error, OSError):
            raise _refused(final, error, left) from error
        raise
    try:
        _flush_one(final.parent)
    except OSError as error:
        raise FleetError(
            f"{final}: was written, but the disk did not confirm it ({error.strerror or error}); "
            "check the disk, then run `shedwright audit`"
        ) from error


def write_folder(final: Path, writer: Callable[[Path], None], before: Seal | None = None) -> None:
    """Let `writer` fill a folder, seal it after `before`, and let it appear at `final` whole."""
    with whole(final) as making:
        writer(making)
        seal(making, final.name, before)


def seal(folder: Path, name: str, before: Seal | None) -> None:
    """Write `seal.json` into a finished folder that will be called `name`, chained to `before`."""
    content = {
        "files": {str(path.relative_to(folder).as_posix()): digest(path) for path in _files(folder)},
        "folder": name,
        "made_by": version("shedwright"),
        "position": 1 if before is None else before.position + 1,
        "previous": None if before is None else before.digest,
        "previous_folder": None if before is None else before.folder,
        "schema_version": SCHEMA_VERSION,
    }
    (folder / SEAL).write_text(json_text(content), encoding="utf-8")


def sweep(fleet_path: Path) -> list[str]:
    """Remove the making folders that killed runs left; one note for each. Call it under the lock."""
    notes = []
    for pattern in (f"events/{MAKING}*", f"events/*/{MAKING}*"):
        for left in sorted(fleet_path.glob(pattern)):
            shutil.rmtree(left, ignore_errors=True)
            done = "could not be removed; remove it by hand" if left.exists() else "removed"
            notes.append(f"{left.relative_to(fleet_path)}: left by a run that was killed; {done}")
    return notes


def last_seal(event_path: Path) -> Seal | None:
    """The newest seal of an event, None where there is none; FleetError where one cannot be read."""
    seals = [read_seal(folder) for folder in record_folders(event_path)]
    return max(seals, key=lambda found: found.position, default=None)


def record_folders(event_path: Path) -> list[Path]:
    """Record folders of an event by kind and number; no hidden ones, nothing else that lies there."""
    found = [(REVISION.fullmatch(path.name), path) for path in event_path.iterdir() if path.is_dir()]
    ranked = [(match[1], int(match[2]), path) for match, path in found if match]
    return [path for _, _, path in sorted(ranked)]


def read_seal(folder: Path) -> Seal:
    """The seal of one record folder; FleetError where it is missing or is no seal."""
    path = folder / SEAL
    try:
        raw = path.read_bytes()
    except OSError as error:
        raise FleetError(f"{folder.name}: its {SEAL} cannot be read ({error.strerror})") from error
    try:
        content = json.loads(raw)
        files = {str(name): str(found) for name, found in content["files"].items()}
        previous, before = content["previous"], content["previous_folder"]
        fits = (previous is None) == (before is None) and all(map(HEX_DIGEST.fullmatch, files.values()))
        if not fits or not isinstance(content["position"], int):
            raise ValueError("digests or position do not fit")
        if content["folder"] != folder.name:
            raise ValueError(f"it was written for {content['folder']}")
    except (ValueError, KeyError, TypeError, AttributeError) as error:
        raise FleetError(f"{folder.name}: its {SEAL} is not a seal any more ({error})") from error
    return Seal(folder.name, hashlib.sha256(raw).hexdigest(), content["position"], previous, before, files)


def faults(event_path: Path) -> list[str]:
    """Everything that no longer agrees with the seals of an event; empty where all is as it was written."""
    found: list[str] = []
    seals: dict[str, Seal] = {}
    for folder in record_folders(event_path):
        try:
            seals[folder.name] = read_seal(folder)
        except FleetError as error:
            found.append(str(error))
            continue
        found += _changed(folder, seals[folder.name])
    return found + _missing_revisions(event_path) + _broken_links(event_path, seals)


def digest(path: Path) -> str:
    """SHA-256 of a file, as lower-case hex."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def json_text(value: Any) -> str:
    """JSON with sorted keys, indented, ending in a new line; FleetError names where a NaN or infinity is."""
    try:
        text = json.dumps(
            value, sort_keys=True, indent=1, allow_nan=False, ensure_ascii=False, default=_plain_number
        )
    except ValueError as error:
        raise FleetError(
            f"{_bad_place(value, '')}: is not a finite number; write null where there is none"
        ) from error
    return UNPRINTED.sub(lambda found: f"\\u{ord(found[0]):04x}", text) + "\n"


def _plain_number(value: Any) -> Any:
    """numpy scalars as plain numbers; anything else is refused by name."""
    if hasattr(value, "item") and getattr(value, "shape", None) == ():
        return value.item()
    raise TypeError(f"{type(value).__name__} has no place in JSON; convert it first")


def _bad_place(value: Any, place: str) -> str:
    """Path to the first non-finite number, like `gap.parts[2]`."""
    items: list[tuple[str, Any]] = []
    if isinstance(value, Mapping):
        items = [(f"{place}.{key}" if place else str(key), item) for key, item in value.items()]
    elif isinstance(value, list | tuple):
        items = [(f"{place}[{i}]", item) for i, item in enumerate(value)]
    for name, item in items:
        try:
            json.dumps(item, allow_nan=False, default=_plain_number)
        except ValueError:
            return _bad_place(item, name)
    return place or "value"


def _files(folder: Path) -> list[Path]:
    return sorted(path for path in folder.rglob("*") if path.is_file() and path != folder / SEAL)


def _flush(folder: Path) -> None:
    """Push every file, then every folder from the deepest up, to the disk."""
    paths = sorted(folder.rglob("*"), key=lambda path: (path.is_dir(), -len(path.parts)))
    for path in [*paths, folder]:
        _flush_one(path)


def _flush_one(path: Path) -> None:
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _clear(making: Path, fresh: bool) -> bool:
    """Remove the making folder, and its parent where it was made for it; True if the making folder stays."""
    shutil.rmtree(making, ignore_errors=True)
    if fresh:
        with suppress(OSError):
            making.parent.rmdir()
    return making.exists()


def _refused(final: Path, error: OSError, left: bool) -> FleetError:
    what = error.strerror or str(error)
    where = f" at {Path(str(error.filename)).name}" if error.filename else ""
    rest = "a hidden making folder stays and is swept by the next run" if left else "nothing was left behind"
    return FleetError(
        f"{final}: could not be written ({what}{where}); {rest}; "
        "free some space or mend the permissions, then run the same command again"
    )


def _changed(folder: Path, sealed: Seal) -> list[str]:
    """Files changed, missing or added since the folder was sealed."""
    there = {str(path.relative_to(folder).as_posix()): path for path in _files(folder)}
    lines = [f"{folder.name}/{name}: is missing" for name in sealed.files if name not in there]
    for name, path in there.items():
        if name not in sealed.files:
            lines.append(f"{folder.name}/{name}: was added after sealing")
            continue
        try:
            same = digest(path) == sealed.files[name]
        except OSError as error:
            lines.append(f"{folder.name}/{name}: cannot be read ({error.strerror})")
            continue
        if not same:
            lines.append(f"{folder.name}/{name}: was changed after it was sealed")
    return lines


def _missing_revisions(event_path: Path) -> list[str]:
    numbers: dict[str, set[int]] = {kind: set() for kind in KINDS}
    for folder in record_folders(event_path):
        kind, number = folder.name.rsplit("-", 1)
        numbers[kind].add(int(number))
    numbers["call"].add(1)
    wanted = {kind: range(1, max(there, default=0) + 1) for kind, there in numbers.items()}
    names = [f"{kind}-{n:03d}" for kind, span in wanted.items() for n in span]
    return [f"{name}: this revision is missing" for name in names if not (event_path / name).is_dir()]


def _broken_links(event_path: Path, seals: Mapping[str, Seal]) -> list[str]:
    """Seals whose forerunner is gone, is another one or has two followers; a first that is not call-001."""
    lines: list[str] = []
    followers: dict[str, str] = {}
    for name, sealed in sorted(seals.items(), key=lambda item: item[1].position):
        before = sealed.previous_folder
        if before is None:
            if name != "call-001":
                lines.append(f"{name}: claims to be the first folder of the event; call-001 is")
        elif before not in seals:
            if not (event_path / before).is_dir():
                lines.append(f"{before}: was removed; {name} was written after it")
        elif seals[before].digest != sealed.previous:
            lines.append(f"{before}: its seal is not the one that {name} was written after")
        elif before in followers:
            lines.append(f"{name}: follows {before}, which {followers[before]} follows already")
        followers.setdefault(before or "", name)
    return lines
