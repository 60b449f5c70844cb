"""What `check` says of a fleet folder: everything wrong, everything assumed, and what can be done with it.

Owns the gathering and the wording; what is wrong is found by folder.py, what is assumed by resolve.py.
"""

from collections.abc import Callable, Iterable
from dataclasses import asdict, dataclass
from itertools import groupby
from pathlib import Path
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet import records
from fleet.assemble import assemble
from fleet.effects import Effect, Effects, effects
from fleet.errors import FleetError, Problem
from fleet.folder import FleetFolder, survey_folder
from fleet.limits import COUNTED
from fleet.plant_history import with_history
from fleet.resolve import Assumption, Resolved, assumptions, resolve
from fleet.settings import DefaultUsed, defaults_used
from fleet.wall_time import local_text

_NEEDED: Final = {
    "quote": ("sites", "chillers", "weather", "tariffs"),
    "call": ("sites", "chillers", "weather", "tariffs"),
    "settle": ("sites", "meters"),
}
"""Tables without which a command cannot work."""
_KEYS_SHOWN: Final = 5
LOOKED_AHEAD: Final = np.timedelta64(36, "h")
"""How far ahead of the plant meters' last reading a forecast is held against what loads were fitted to."""


@dataclass(frozen=True)
class Ability:
    """Whether a command can work on the folder, and why not, or over which time."""

    command: str
    is_ok: bool
    reasons: tuple[str, ...]


@dataclass(frozen=True)
class CheckReport:
    """Everything `check` found."""

    path: Path
    problems: tuple[Problem, ...]
    assumed: tuple[Assumption, ...]
    defaults: tuple[DefaultUsed, ...]
    notes: tuple[str, ...]
    abilities: tuple[Ability, ...]
    effects: Effects | None = None
    """what the assumed values are worth in kW, where it was asked for and there is no problem"""

    @property
    def is_ok(self) -> bool:
        """True where nothing is wrong."""
        return not self.problems


def report(
    path: Path, with_effects: bool = False, progress: Callable[[str], None] = lambda text: None
) -> CheckReport:
    """Check a fleet folder, where asked with what its assumed values are worth in kW.

    Raises FleetError where there is no such folder.
    """
    found = survey_folder(path)
    folder, problems = found.folder, tuple(found.problems)
    if folder is None:
        nothing = tuple(Ability(command, False, (_many(problems),)) for command in _NEEDED)
        return CheckReport(path, problems, (), (), (), nothing)
    assumed: tuple[Assumption, ...] = ()
    notes, worth = list(folder.notes), None
    abilities = tuple(_ability(command, folder, problems) for command in _NEEDED)
    if not problems:
        resolved = resolve(folder.frames, folder.settings)
        assumed = (*resolved.assumed, *_never_said(folder, resolved))
    if abilities[0].is_ok:
        assumed, told = _by_plant_meters(folder, assumed)
        notes += told
    defaults = tuple(defaults_used(folder.settings))
    if with_effects and abilities[0].is_ok:
        try:
            worth = effects(folder, progress)
        except FleetError as error:
            notes = [*notes, f"effects cannot be worked out: {error}"]
    return CheckReport(path, problems, assumed, defaults, tuple(notes), abilities, worth)


def lines(found: CheckReport) -> list[str]:
    """The report as lines of text: problems by file, then what can be done, then what was assumed."""
    written = []
    if found.problems:
        written.append(f"{_many(found.problems)}:")
    for file, group in groupby(found.problems, key=lambda problem: problem.file):
        written += [f"  {file}"]
        written += [f"    {str(problem).removeprefix(file).lstrip(',: ')}" for problem in group]
    written += [_ability_line(ability) for ability in found.abilities]
    written += _section("notes", found.notes)
    written += _section("settings not given", (f"{used.name} = {used.value}" for used in found.defaults))
    written += _section("assumed", assumed_lines(found.assumed))
    if found.effects is not None:
        written += effect_lines(found.effects)
    elif found.assumed and found.abilities[0].is_ok:
        written.append(f"what these are worth in kW: shedwright check {found.path} --effects")
    return written


def document(found: CheckReport) -> dict[str, Any]:
    """The report as plain values for JSON; every problem and every assumed value, none counted away."""
    return {
        "fleet": str(found.path),
        "ok": found.is_ok,
        "problems": [asdict(problem) for problem in found.problems],
        "abilities": {
            one.command: {"ok": one.is_ok, "reasons": list(one.reasons)} for one in found.abilities
        },
        "notes": list(found.notes),
        "settings_not_given": {one.name: one.value for one in found.defaults},
        "assumed": [asdict(one) for one in found.assumed],
        "effects": asdict(found.effects) if found.effects is not None else None,
    }


def assumed_lines(assumed: Iterable[Assumption]) -> list[str]:
    """One line for each table, column and reason, with the first keys and values it holds for."""
    gathered: dict[tuple[str, str, str], list[Assumption]] = {}
    for one in assumed:
        gathered.setdefault((one.table, one.column, one.why), []).append(one)
    written = []
    for (table, column, why), ones in gathered.items():
        same = len({one.value for one in ones}) == 1
        shown = [one.key if same else f"{one.key} {one.value}" for one in ones[:_KEYS_SHOWN]]
        more = f" and {len(ones) - _KEYS_SHOWN} more" if len(ones) > _KEYS_SHOWN else ""
        value = f" = {ones[0].value}" if same else ""
        written.append(f"{table}.{column}{value} ({why}): {', '.join(shown)}{more}")
    return written


def effect_lines(found: Effects) -> list[str]:
    """The effects with how they were worked out, one line a column, the largest first."""
    written = [
        f"worth of what is assumed: kW that all sites sustain over {found.event}, each for the whole of it,",
        f"before feeder and call limits: {found.base_kw:,.0f} as assumed; the change when the assumed cells of one",
        "column take another value (and the site that it moves most):",
    ]
    nothing = []
    for (table, column), group in groupby(found.effects, key=lambda one: (one.table, one.column)):
        ones = list(group)
        if any(round(abs(one.change_kw)) or round(abs(one.most_kw)) for one in ones):
            written.append(f"  {table}.{column}: " + ", ".join(_effect_words(one) for one in ones))
        else:
            nothing.append(f"{table}.{column}")
    return [*written, f"  no whole kW: {', '.join(nothing)}"] if nothing else written


def _effect_words(one: Effect) -> str:
    most = f" ({one.most_site} {one.most_kw:+,.0f})" if round(one.most_kw) else ""
    # A whole number has no minus zero.
    return f"{one.tried} {round(one.change_kw):+,d} kW{most}"


def _never_said(folder: FleetFolder, resolved: Resolved) -> list[Assumption]:
    """What every horizon will have to assume: loads of sites without rows, levels of tanks without a reading."""
    sites, loads, status = resolved.sites, folder.frames["loads"], folder.frames["status"]
    cooled = loads.loc[loads["cooling_load_kw_th"].notna(), "site_id"]
    no_load = sites.loc[~sites["site_id"].isin(cooled), "site_id"]
    no_rest = sites.loc[~sites["site_id"].isin(loads["site_id"]), "site_id"]
    read = status[status["inventory_kwh_th"].notna()]
    tanks = resolved.tanks["site_id"] + "/" + resolved.tanks["tank_id"]
    unread = tanks[~tanks.isin(read["site_id"] + "/" + read["unit_id"])]
    profile, course = "a profile from peak and weather", "the course of a usual day"
    return [
        *assumptions("loads", no_load, "cooling_load_kw_th", np.full(len(no_load), profile), "no row"),
        *assumptions("loads", no_rest, "rest_kw", np.zeros(len(no_rest)), "no row"),
        *assumptions("status", unread, "inventory_kwh_th", np.full(len(unread), course), "no reading"),
    ]


def _by_plant_meters(
    folder: FleetFolder, assumed: tuple[Assumption, ...]
) -> tuple[tuple[Assumption, ...], list[str]]:
    """What is assumed, and what is told, as plant meters' past changes both: as for a quote at their last reading."""
    meters, frames = folder.frames["meters"], folder.frames
    roles = frames["meter_map"]
    own = meters["meter_id"].isin(roles.loc[roles["role"] == "plant", "meter_id"])
    if not own.any():
        return assumed, []
    step = np.timedelta64(folder.settings.interval_minutes, "m")
    at = meters.loc[own, "interval_start"].max().tz_convert("UTC").tz_localize(None).to_datetime64() + step
    covered = _common_span(
        [frames[name] for name in ("weather", "tariffs", "loads") if not frames[name].empty]
    )
    until = covered[1].tz_localize(None).to_datetime64() if covered is not None else at
    if until - at < np.timedelta64(1, "h"):
        zone = folder.settings.timezone
        return assumed, [
            f"plant meters are not looked at: weather or tariffs end before {local_text(at, zone)}"
        ]
    past = records.events(folder.path)
    try:
        bare = assemble(folder, at, min(until, at + LOOKED_AHEAD))
        fleet = with_history(folder, bare, past[past["purpose"].isin(COUNTED)])
    except FleetError as error:
        return assumed, [f"plant meters are not looked at: {error}".split("\n")[0]]
    known = set(bare.assumed)
    said = {(one.table, one.key, one.column): one for one in fleet.assumed if one not in known}
    changed = [said.pop((one.table, one.key, one.column), one) for one in assumed]
    return (*changed, *said.values()), [note for note in fleet.notes if note not in bare.notes]


def _section(title: str, entries: Iterable[str]) -> list[str]:
    listed = [f"  {entry}" for entry in entries]
    return [f"{title}:", *listed] if listed else []


def _many(problems: tuple[Problem, ...]) -> str:
    return "1 problem" if len(problems) == 1 else f"{len(problems)} problems"


def _ability_line(ability: Ability) -> str:
    return f"{ability.command} {'yes' if ability.is_ok else 'no'}: {'; '.join(ability.reasons)}"


def _ability(command: str, folder: FleetFolder, problems: tuple[Problem, ...]) -> Ability:
    missing = [name for name in _NEEDED[command] if folder.frames[name].empty]
    reasons = [f"{' and '.join(missing)} missing"] if missing else []
    if problems:
        reasons.append(f"{_many(problems)} to mend")
    series = ("meters",) if command == "settle" else ("weather", "tariffs", "loads")
    span = _common_span([folder.frames[name] for name in series if not folder.frames[name].empty])
    if not reasons and span is None:
        reasons.append(f"{' and '.join(series)} have no time in common")
    if reasons or span is None:
        return Ability(command, False, tuple(reasons))
    zone = folder.settings.timezone
    start, last = (local_text(time.tz_localize(None).to_datetime64(), zone) for time in span)
    what = "events with readings" if command == "settle" else "times"
    return Ability(command, True, (f"{what} from {start} to the interval of {last}",))


def _common_span(frames: list[pd.DataFrame]) -> tuple[pd.Timestamp, pd.Timestamp] | None:
    """First and last interval_start (UTC) that all tables have in common."""
    if not frames:
        return None
    start = max(frame["interval_start"].min() for frame in frames)
    last = min(frame["interval_start"].max() for frame in frames)
    return (start, last) if start <= last else None
