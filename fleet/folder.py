"""The only door to a fleet folder: finds, reads and checks its files, and refuses with all reasons at once.

Owns which files stand for which table, digests, and the order of checks. Cells are checked by values.py, tables
against each other by references.py; what the tables mean for a horizon is assemble.py's. Records of events
(`events/`) belong to records.py.
"""

import hashlib
from collections.abc import Collection
from dataclasses import dataclass
from difflib import get_close_matches
from pathlib import Path
from typing import Final

import numpy as np
import pandas as pd

from fleet import plausible
from fleet.errors import FleetError, Problem, Refused
from fleet.meter_forms import meters_table, other_form
from fleet.one_price import one_price
from fleet.public_days import public_days
from fleet.references import cross_problems, unmapped_meters
from fleet.schema import table, tables
from fleet.settings import FILE, Settings, parse_settings
from fleet.starter import example_settings, without_examples
from fleet.tables import empty_frame, read_raw
from fleet.values import Reading, Typed, typed
from fleet.wall_time import local_parts, local_text, on_grid, parse_time, utc_timestamp

__all__ = [
    "FleetFolder",
    "Meters",
    "local_parts",
    "local_text",
    "meter_files",
    "on_grid",
    "open_folder",
    "parse_time",
    "problems",
    "read_meters",
    "reading_of",
    "survey_folder",
]

SIDE_FOLDERS: Final = ("events", "pages", "rehearsals")
_SUFFIXES: Final = (".csv", ".parquet")
_SIZES: Final = {"sites", "chillers", "tanks"}
"""Tables whose sizes are held against each other; not where one of them was left out."""


@dataclass(frozen=True)
class FleetFolder:
    """A fleet folder that passed every check; frames in the stable types, rows in file order from 0."""

    path: Path
    settings: Settings
    frames: dict[str, pd.DataFrame]
    """Every input table by name; an absent or left-out table has its columns and no rows."""
    files: dict[str, str]
    """Name of the file or folder of every table that has one."""
    digests: dict[str, str]
    """sha256 of every file that was read, by name relative to the folder."""
    notes: list[str]

    def file(self, table_name: str) -> str:
        """Name of a table's file as messages say it; of the CSV it would have, where it has none."""
        return self.files.get(table_name, f"{table_name}.csv")


@dataclass(frozen=True)
class Meters:
    """Readings of a time span: the meters table, digests of its files, notes."""

    frame: pd.DataFrame
    """Index: row of the file, so that later messages can name it."""
    digests: dict[str, str]
    notes: list[str]


@dataclass(frozen=True)
class Survey:
    """A folder as it was found, and everything that is wrong with it."""

    folder: FleetFolder | None
    """None where the settings cannot be read."""
    problems: list[Problem]


def open_folder(
    path: Path,
    names: Collection[str] | None = None,
    without: Collection[str] = (),
    needed: Collection[str] = ("sites",),
) -> FleetFolder:
    """Read a fleet folder: all tables, or those of `names`, but not those of `without`.

    Raises FleetError where there is no such folder, and Refused with every problem found in it; a table of
    `needed` without a file is one.
    """
    found = survey_folder(path, names, without, needed)
    if found.problems or found.folder is None:
        raise Refused(found.problems)
    return found.folder


def problems(path: Path) -> list[Problem]:
    """Everything that is wrong with a fleet folder, file by file; FleetError where there is no such folder."""
    return survey_folder(path).problems


def survey_folder(
    path: Path,
    names: Collection[str] | None = None,
    without: Collection[str] = (),
    needed: Collection[str] = ("sites",),
) -> Survey:
    """As `open_folder`, but gives the problems back beside what could be read."""
    if not path.is_dir():
        raise FleetError(f"{path}: there is no such fleet folder; `shedwright begin {path}` starts one")
    text, digests = _settings_text(path)
    try:
        settings = parse_settings(text)
    except Refused as refused:
        return Survey(None, refused.problems)
    wanted = [name for name in tables("fleet") if (names is None or name in names) and name not in without]
    sources, faults = _sources(path)
    faults += example_settings(settings)
    frames, notes, unreadable = {}, [], False
    for name, table_of in tables("fleet").items():
        source = sources.get(name)
        if name not in wanted or source is None:
            frames[name] = empty_frame(table_of)
            if name in wanted and name in needed:
                faults.append(Problem(f"{name}.csv", None, None, "no such file", "the table", "add it"))
            continue
        read = _read(source, name, settings)
        unreadable |= not len(read.frame.columns)
        frame = read.frame if len(read.frame.columns) else empty_frame(table_of)
        frames[name], examples = without_examples(frame, source.name, name)
        faults += examples + read.problems
        notes += read.notes
        digests |= _digests(source, path) if len(read.frame.columns) else {}
    if "tariffs" in wanted:
        frames["tariffs"], said = one_price(settings, frames, "tariffs" in sources)
        notes += said
    if not unreadable and "sites" in wanted:
        faults += _checked_together(frames, sources, wanted, settings)
        notes += plausible.unlikely(frames, _files(sources)) if set(wanted) >= _SIZES else []
    ordered = [FILE, *(_file(sources, name) for name in tables("fleet"))]
    faults.sort(key=lambda problem: ordered.index(problem.file) if problem.file in ordered else len(ordered))
    frames = {name: frame.reset_index(drop=True) for name, frame in frames.items()}
    files = {name: source.name for name, source in sources.items()}
    notes += _with_public_days(frames, settings, sources)
    return Survey(FleetFolder(path, settings, frames, files, digests, notes), faults)


def read_meters(
    folder: FleetFolder, since: np.datetime64, until: np.datetime64, file: Path | None = None
) -> Meters:
    """Readings from `since` to before `until` (UTC), of the folder's meters table or of another file in its form.

    Raises Refused for what is wrong in those rows, FleetError where there is no such file.
    """
    source = file if file is not None else _sources(folder.path)[0].get("meters")
    if source is None or not source.exists():
        raise FleetError(
            f"{source or folder.path / 'meters.csv'}: there are no meter readings; add them or name a file"
        )
    span = (utc_timestamp(since), utc_timestamp(until))
    read = _read(source, "meters", folder.settings, span)
    if not len(read.frame.columns):
        raise Refused(read.problems)
    times = read.frame["interval_start"]
    frame = read.frame[(times >= span[0]) & (times < span[1])]
    faults = read.problems + unmapped_meters(
        frame, folder.frames["meter_map"], folder.frames["sites"]["site_id"], source.name
    )
    faults += plausible.meters_in_mega(folder.frames | {"meters": frame}, source.name)
    if faults:
        raise Refused(faults)
    base = folder.path if source.is_relative_to(folder.path) else source.parent
    return Meters(frame, _digests(source, base), read.notes)


def meter_files(folder: FleetFolder) -> tuple[list[Path], dict[str, str]]:
    """The Parquet files of the folder's meters table and their digests; none where it is no Parquet."""
    source = _sources(folder.path)[0].get("meters")
    if source is None or not (source.is_dir() or source.suffix == ".parquet"):
        return [], {}
    files = sorted(source.glob("*.parquet")) if source.is_dir() else [source]
    return files, _digests(source, folder.path)


def _settings_text(path: Path) -> tuple[str, dict[str, str]]:
    try:
        content = (path / FILE).read_bytes()
        return content.decode("utf-8-sig"), {FILE: hashlib.sha256(content).hexdigest()}
    except FileNotFoundError as error:
        raise FleetError(f"{path}: holds no {FILE}; `shedwright begin {path}` starts one") from error
    except (OSError, UnicodeDecodeError) as error:
        raise FleetError(f"{path / FILE}: cannot be read ({error}); save it as UTF-8 text") from error


def _sources(path: Path) -> tuple[dict[str, Path], list[Problem]]:
    """File or folder of each table, and problems: two forms of one table, names close to a table's."""
    known = list(tables("fleet"))
    found: dict[str, Path] = {}
    faults = []
    for entry in _entries(path):
        stem = entry.stem if entry.suffix in _SUFFIXES else entry.name if entry.is_dir() else ""
        if stem in SIDE_FOLDERS or stem.startswith(".") or not stem:
            continue
        if stem in known:
            if stem in found:
                came = f"{found[stem].name} and {entry.name}"
                faults.append(
                    Problem(entry.name, None, None, came, "one form of a table", "remove one of them")
                )
            found.setdefault(stem, entry)
        elif near := get_close_matches(stem.lower(), known, n=1, cutoff=0.8):
            advice = f"rename it to {near[0]}{entry.suffix}, or move it elsewhere"
            faults.append(
                Problem(entry.name, None, None, "an unknown table", "a table that is known", advice)
            )
    return found, faults


def _entries(path: Path) -> list[Path]:
    try:
        return sorted(path.iterdir())
    except OSError as error:
        raise FleetError(f"{path}: cannot be listed ({error.strerror}); mend the permissions") from error


def _files(sources: dict[str, Path]) -> dict[str, str]:
    return {name: _file(sources, name) for name in tables("fleet")}


def _file(sources: dict[str, Path], name: str) -> str:
    return sources[name].name if name in sources else f"{name}.csv"


def _read(
    source: Path, name: str, settings: Settings, span: tuple[pd.Timestamp, pd.Timestamp] | None = None
) -> Typed:
    """One table, typed; a frame without columns where its file cannot be read at all."""
    try:
        raw = read_raw(source, span)
    except Refused as refused:
        return Typed(pd.DataFrame(), refused.problems, [])
    reading = _reading(source.name, name, settings)
    if name == "meters" and other_form(raw):
        return meters_table(raw, reading)
    return typed(raw, table("fleet", name), reading)


def _reading(file: str, name: str, settings: Settings) -> Reading:
    return Reading(file, settings.time_reading(name), settings.timezone, settings.interval_minutes)


def reading_of(folder: FleetFolder, table_name: str) -> Reading:
    """How a table of the folder is to be read."""
    return _reading(folder.file(table_name), table_name, folder.settings)


def _checked_together(
    frames: dict[str, pd.DataFrame], sources: dict[str, Path], wanted: list[str], settings: Settings
) -> list[Problem]:
    files = _files(sources)
    faults = cross_problems(frames, files)
    faults += plausible.impossible(frames, files) if set(wanted) >= _SIZES else []
    faults += unmapped_meters(
        frames["meters"], frames["meter_map"], frames["sites"]["site_id"], files["meters"]
    )
    left_out = {name for name in tables("fleet") if name not in wanted}
    return [problem for problem in faults if not _asks_for(problem, left_out)]


def _asks_for(problem: Problem, left_out: set[str]) -> bool:
    """True where the reference is to a table that was not read."""
    return any(problem.expected.endswith(f" of {name}") for name in left_out)


def _digests(source: Path, base: Path) -> dict[str, str]:
    files = sorted(source.glob("*.parquet")) if source.is_dir() else [source]
    return {file.relative_to(base).as_posix(): _digest(file) for file in files}


def _digest(file: Path) -> str:
    with file.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def _with_public_days(
    frames: dict[str, pd.DataFrame], settings: Settings, sources: dict[str, Path]
) -> list[str]:
    """Fill an absent holidays table from the country's public calendar, over the years of the weather table."""
    if settings.country is None or "holidays" in sources:
        return []
    years = sorted(set(frames["weather"]["interval_start"].dropna().dt.year))
    frames["holidays"] = public_days(settings.country, settings.subdivision, years)
    where = settings.country + (f"-{settings.subdivision}" if settings.subdivision else "")
    return [f"holidays: {len(frames['holidays'])} public holidays of {where} taken from the holidays library"]
