"""A settlement: an event's record and readings become the next settlement revision.

Owns which record, rule and readings go together: the rule, settings and meter map are those frozen when the
call was made, whatever the fleet folder says today. The arithmetic is settle.py's, the page statement.py's.
"""

import json
from collections.abc import Mapping
from dataclasses import dataclass, replace
from importlib.metadata import version
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet import records
from fleet.callfacts import CallFacts
from fleet.desk import Progress
from fleet.errors import FleetError
from fleet.folder import FleetFolder, meter_files, open_folder, read_meters, reading_of
from fleet.meter_files import read_meter_file
from fleet.meter_groups import GroupedReadings
from fleet.money import Prices
from fleet.plausible import meters_in_mega
from fleet.readings import FrameReadings, Overlaid, Readings
from fleet.records import CallRecord, SettlementRecord
from fleet.request import outermost
from fleet.rules import SettlementRule
from fleet.schema import table
from fleet.settings import FILE, Settings
from fleet.settle import settle
from fleet.settlement import Settlement
from fleet.statement import statements
from fleet.tables import write_parquet
from fleet.wall_time import local_day_start
from sites.clock import as_us
from sites.direction import Direction

CALL_TABLES: Final = ("request", "windows", "intervals")
INPUTS: Final = "inputs.json"
"""Which call revision, readings, excuses and version a settlement was made of."""


@dataclass(frozen=True)
class Settled:
    """A settlement that was written."""

    path: Path
    revision: int
    settlement: Settlement
    notes: tuple[str, ...]


@dataclass(frozen=True)
class _Made:
    """A settlement worked out, and every file of its folder besides the tables."""

    settlement: Settlement
    texts: dict[str, str]
    notes: tuple[str, ...]


def settle_event(
    home: Path,
    event_id: str,
    meter_file: Path | None = None,
    progress: Progress = lambda text: None,
    meters_of: Path | None = None,
    excuse: Mapping[str, str] | None = None,
    readmit: Mapping[str, str] | None = None,
    who: str = "",
) -> Settled:
    """Settle the newest call of an event on the folder's readings and write the next revision below `home`.

    meter_file: readings that take the place of the folder's own for the same meter and interval (counted in
    the notes); meters_of: the fleet folder whose readings are used where that is not `home` (a folder below
    `rehearsals` uses those of the fleet it lies in); excuse: site_id -> why it earns and owes nothing, kept by
    every later revision until it is readmitted, again with a reason; who decided that. Raises Refused and
    FleetError for readings, a record or an excuse that cannot be used; nothing is written then.
    """
    record = records.read_call(home, event_id, only=CALL_TABLES)
    revision = records.next_revision(home, event_id, "settlement")
    last = records.read_settlement(home, event_id) if revision > 1 else None
    before = None if last is None else last.frames
    decided = _decided(
        event_id, _excused(before), _reasons("--excuse", excuse), _reasons("--readmit", readmit), who
    )
    made = _make(home, record, revision, before, decided, meter_file, meters_of, progress)
    with records.lock(home) as swept:
        path = records.write_settlement(home, event_id, made.settlement.frames, made.texts)
    return Settled(path, revision, made.settlement, (*swept, *made.notes, *_left_aside(last, made)))


def settle_again(home: Path, event_id: str, revision: int, meter_file: Path | None = None) -> list[str]:
    """Work an old revision out again from the same inputs and compare: names of files whose bytes differ.

    Nothing is written. Raises FleetError where the readings are not those it was made of, and where another
    version of this program made it and the bytes differ.
    """
    there = records.read_settlement(home, event_id, revision)
    inputs = json.loads(there.statements[INPUTS])
    record = records.read_call(home, event_id, inputs["call_revision"], only=CALL_TABLES)
    before = records.read_settlement(home, event_id, revision - 1).frames if revision > 1 else None
    decided = {name: inputs.get(name, {}) for name in ("excused", "readmitted")} | {
        "who": inputs.get("who", "")
    }
    made = _make(home, record, revision, before, decided, meter_file, None, lambda text: None)
    now = json.loads(made.texts[INPUTS])
    if now["sha256"] != inputs["sha256"]:
        raise FleetError(
            f"event {event_id}, settlement revision {revision}: was made of other readings "
            f"({', '.join(inputs['sha256']) or 'none'}); give back those files, unchanged, to work it out again"
        )
    with TemporaryDirectory() as folder:
        different = [
            f"{name}.parquet"
            for name, frame in made.settlement.frames.items()
            if not _same_table(frame, name, there.path, Path(folder))
        ]
    different += [name for name, text in made.texts.items() if text != there.statements.get(name)]
    if different and inputs["shedwright"] != now["shedwright"]:
        raise FleetError(
            f"event {event_id}, settlement revision {revision}: was made by shedwright {inputs['shedwright']}; "
            f"this is {now['shedwright']} and gives other bytes in {', '.join(different)}; use that version"
        )
    return different


def _same_table(frame: pd.DataFrame, name: str, there: Path, folder: Path) -> bool:
    path = folder / f"{name}.parquet"
    write_parquet(frame, path, table("settlement", name))
    return path.read_bytes() == (there / path.name).read_bytes()


def _make(
    home: Path,
    record: CallRecord,
    revision: int,
    before: Mapping[str, pd.DataFrame] | None,
    decided: Mapping[str, Any],
    meter_file: Path | None,
    meters_of: Path | None,
    progress: Progress,
) -> _Made:
    source = meters_of or _fleet_of(home)
    frozen = frozen_folder(source, record)
    progress("reading meters")
    facts = call_facts(record, source, decided["excused"])
    given = _readings(frozen, facts, meter_file)
    progress(f"settling {len(facts.windows)} sites")
    settlement = settle(facts, given.readings, revision, None if before is None else before["sites"])
    notes = (*given.told(), *_decisions(decided), *settlement.notes)
    texts = statements(replace(settlement, notes=notes), facts, before)
    inputs = {
        "call_revision": record.revision,
        "excused": dict(sorted(decided["excused"].items())),
        "readmitted": dict(sorted(decided["readmitted"].items())),
        "who": decided["who"],
        "sha256": dict(sorted((given.digests | _weather_digests(facts, source)).items())),
        "shedwright": version("shedwright"),
    }
    texts[INPUTS] = json.dumps(inputs, indent=1, sort_keys=True) + "\n"
    return _Made(settlement, texts, notes)


def _left_aside(last: SettlementRecord | None, made: _Made) -> list[str]:
    """A note where the revision before was made of files that this one did not get."""
    if last is None or INPUTS not in last.statements:
        return []
    files = json.loads(last.statements[INPUTS])["sha256"]
    lost = sorted(set(files) - set(json.loads(made.texts[INPUTS])["sha256"]))
    if not lost:
        return []
    return [
        f"revision {last.revision} was made of {', '.join(lost)} too, which this one was not; if that was not meant, "
        "settle again with --meter"
    ]


def _excused(before: Mapping[str, pd.DataFrame] | None) -> dict[str, str]:
    """Sites the revision before excused, and why."""
    if before is None:
        return {}
    sites = before["sites"]
    held = sites[sites["why"].notna()]
    return dict(zip(held["site_id"].astype(str), held["why"].astype(str)))


def _reasons(option: str, given: Mapping[str, str] | None) -> dict[str, str]:
    without = [site for site, why in (given or {}).items() if not why.strip()]
    if without:
        raise FleetError(f"{option} {without[0]}: no reason is given; say why with --why")
    return {site: why.strip() for site, why in (given or {}).items()}


def _decided(
    event_id: str, before: Mapping[str, str], excuse: Mapping[str, str], readmit: Mapping[str, str], who: str
) -> dict[str, Any]:
    """Sites excused in this revision and those that count again, with why and by whom."""
    strangers = sorted(set(readmit) - set(before))
    if strangers:
        raise FleetError(
            f"event {event_id}: site {', '.join(strangers)} is not excused, so it cannot be readmitted; excused are "
            f"{', '.join(before) or 'none'}"
        )
    both = sorted(set(readmit) & set(excuse))
    if both:
        raise FleetError(
            f"event {event_id}: site {', '.join(both)} is to be excused and readmitted; say one of them"
        )
    excused = {site: why for site, why in {**before, **excuse}.items() if site not in readmit}
    return {"excused": excused, "readmitted": dict(readmit), "who": who.strip()}


def _decisions(decided: Mapping[str, Any]) -> list[str]:
    """Who readmitted or excused which site, as notes."""
    by = f", by {decided['who']}" if decided["who"] else ""
    notes = [f"counts again: {site}: {why}{by}" for site, why in sorted(decided["readmitted"].items())]
    return notes or ([f"decided by {decided['who']}"] if by else [])


def _fleet_of(home: Path) -> Path:
    """The fleet folder whose tables a settlement reads: the one around, where `home` is a rehearsal's."""
    inside = home.resolve().parent
    return inside.parent if inside.name == "rehearsals" and not (home / FILE).exists() else home


def _weather_digests(facts: CallFacts, source: Path) -> dict[str, str]:
    """Digests of the fleet's weather table, where a rule in use reads it."""
    if not any(rule.needs_weather for rule in facts.rules.values()):
        return {}
    found = open_folder(source, names=("weather",), needed=()).digests
    return {name: digest for name, digest in found.items() if name != FILE}


def frozen_folder(home: Path, record: CallRecord) -> FleetFolder:
    """The fleet folder as the call froze it: settings, sites and meter map of that day."""
    settings = Settings.model_validate(record.frozen_json["settings"])
    return FleetFolder(
        home, settings, dict(record.frozen), {name: f"{name}.parquet" for name in record.frozen}, {}, []
    )


def call_facts(
    record: CallRecord, home: Path | None = None, excused: Mapping[str, str] | None = None
) -> CallFacts:
    """What a settlement reads of a call's record; home: the folder whose weather table adds the days before."""
    settings = Settings.model_validate(record.frozen_json["settings"])
    named = record.frozen_json["rules"]
    rules = {name: SettlementRule.model_validate(rule) for name, rule in named["rules"].items()}
    request = outermost(record.frames["request"])
    first = request.iloc[0]
    return CallFacts(
        event_id=record.event_id,
        direction=Direction(first["direction"]),
        request=request,
        windows=record.frames["windows"],
        intervals=record.frames["intervals"],
        rules={site: rules[name] for site, name in named["site"].items()},
        prices=Prices(
            settings.currency,
            settings.capacity_payment_per_kwh,
            settings.energy_payment_per_kwh,
            settings.penalty_per_kwh,
            settings.performance_floor,
            settings.performance_cap,
        ),
        timezone=settings.timezone,
        step_minutes=settings.interval_minutes,
        meter_map=record.frozen["meter_map"],
        holidays=record.frozen["holidays"],
        plant_days=record.frozen["plant_days"],
        past_event_days=past_event_days(record, settings.timezone),
        fleet_site_ids=tuple(record.frozen["sites"]["site_id"]),
        called_at=_utc(first["called_at"]),
        weather=_weather(record, home) if any(rule.needs_weather for rule in rules.values()) else _NO_WEATHER,
        stations=_stations(record.frozen["sites"]),
        excused=dict(excused or {}),
    )


_NO_WEATHER = pd.DataFrame()


def _stations(sites: pd.DataFrame) -> dict[str, str]:
    named = sites[sites["station_id"].notna()]
    return dict(zip(named["site_id"].astype(str), named["station_id"].astype(str)))


def _weather(record: CallRecord, home: Path | None) -> pd.DataFrame:
    """Dry bulb of the folder's weather table, and of the frozen one where the folder has no row."""
    names = ["station_id", "interval_start", "dry_bulb_c"]
    frozen = record.frozen["weather"][names]
    if home is None:
        return frozen
    own = open_folder(home, names=("weather",), needed=()).frames["weather"][names]
    both = pd.concat([frame for frame in (frozen, own) if len(frame)] or [frozen])
    return both.drop_duplicates(names[:2], keep="last", ignore_index=True)


def past_event_days(record: CallRecord, zone: str) -> pd.DataFrame:
    """Local days of each site's earlier real and test events: site_id, day."""
    calls = pd.DataFrame(record.frozen_json["calls"]["calls"], columns=["site_id", "purpose", "window_start"])
    counted = calls[calls["purpose"].isin(("real", "test"))]
    start = pd.to_datetime(counted["window_start"], utc=True).dt.tz_convert(zone)
    day = start.dt.tz_localize(None).dt.normalize().astype("datetime64[s]")
    return pd.DataFrame({"site_id": counted["site_id"], "day": day}).drop_duplicates(ignore_index=True)


def _utc(time: pd.Timestamp) -> np.datetime64:
    return as_us(time.tz_convert("UTC").tz_localize(None).to_datetime64())


@dataclass(frozen=True)
class _Given:
    """Readings to settle on, what is to be said of them, and the digests of their files."""

    readings: Readings
    notes: tuple[str, ...]
    digests: dict[str, str]
    over: tuple[Overlaid, str] | None = None
    """The readings that took the place of others, and the name of their file."""

    def told(self) -> tuple[str, ...]:
        """Notes, once the readings have been used."""
        if self.over is None:
            return self.notes
        replaced = f"{self.over[0].replaced} readings of the folder were replaced by {self.over[1]}"
        return (*self.notes, replaced)


def _readings(folder: FleetFolder, facts: CallFacts, meter_file: Path | None) -> _Given:
    """Readings from the longest look-back to the horizon's end and a day more, the named file's first."""
    back = max(rule.look_back_days for rule in facts.rules.values())
    start = facts.request["interval_start"].min()
    local = start.tz_convert(facts.timezone).tz_localize(None).normalize() - pd.Timedelta(days=back + 1)
    since = local_day_start(np.datetime64(local, "D"), facts.timezone)
    until = _utc(facts.intervals["interval_start"].max() + pd.Timedelta(days=1))
    if meter_file is None:
        return _own_readings(folder, since, until)
    given = read_meter_file(folder, since, until, meter_file)
    try:
        own = _own_readings(folder, since, until)
    except FleetError as error:
        alone = f"readings of {meter_file.name} alone: {error}"
        return _Given(FrameReadings(given.frame), (*given.notes, alone), given.digests)
    both = Overlaid(own.readings, given.frame)
    return _Given(both, (*own.notes, *given.notes), own.digests | given.digests, (both, meter_file.name))


def _own_readings(folder: FleetFolder, since: np.datetime64, until: np.datetime64) -> _Given:
    """The folder's own: row group by row group where they are Parquet in the table's own form."""
    files, digests = meter_files(folder)
    if files:
        reading = reading_of(folder, "meters")
        frames = folder.frames
        grouped = GroupedReadings(
            files,
            reading,
            frames["meter_map"],
            frames["sites"]["site_id"],
            lambda highest: meters_in_mega({**frames, "meters": highest}, reading.file),
        )
        if grouped.plain:
            return _Given(grouped, (), digests)
    found = read_meters(folder, since, until)
    return _Given(FrameReadings(found.frame), tuple(found.notes), found.digests)
