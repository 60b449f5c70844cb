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
from typing import Final

import numpy as np
import pandas as pd

from fleet import records
from fleet.callfacts import CallFacts
from fleet.desk import Progress
from fleet.errors import FleetError
from fleet.folder import FleetFolder, open_folder, read_meters
from fleet.meter_files import read_meter_file
from fleet.money import Prices
from fleet.records import CallRecord, SettlementRecord
from fleet.rules import SettlementRule
from fleet.schema import table
from fleet.settings import Settings
from fleet.settle import settle
from fleet.settlement import Settlement
from fleet.statement import statements
from fleet.tables import write_parquet
from fleet.wall_time import local_day_start
from sites.clock import as_us
from sites.direction import Direction

KEY = ["meter_id", "interval_start"]
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
) -> Settled:
    """Settle the newest call of an event on the folder's readings and write the next revision below `home`.

    meter_file: readings that take the place of the folder's own for the same meter and interval (counted in
    the notes); meters_of: the fleet folder whose readings are used where that is not `home`; excuse: site_id ->
    why it earns and owes nothing, kept by every later revision. Raises Refused and FleetError for readings, a
    record or an excuse that cannot be used; nothing is written then.
    """
    record = records.read_call(home, event_id, only=CALL_TABLES)
    revision = records.next_revision(home, event_id, "settlement")
    last = records.read_settlement(home, event_id) if revision > 1 else None
    before = None if last is None else last.frames
    excused = {**_excused(before), **_excuses(excuse)}
    made = _make(home, record, revision, before, excused, meter_file, meters_of, progress)
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
    made = _make(home, record, revision, before, inputs["excused"], meter_file, None, lambda text: None)
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
    excused: Mapping[str, str],
    meter_file: Path | None,
    meters_of: Path | None,
    progress: Progress,
) -> _Made:
    frozen = frozen_folder(meters_of or home, record)
    progress("reading meters")
    facts = call_facts(record, meters_of or home, excused)
    readings, notes, digests = _readings(frozen, facts, meter_file)
    progress(f"settling {len(facts.windows)} sites")
    settlement = settle(facts, readings, revision, None if before is None else before["sites"])
    notes = (*notes, *settlement.notes)
    texts = statements(replace(settlement, notes=notes), facts, before)
    inputs = {
        "call_revision": record.revision,
        "excused": dict(sorted(excused.items())),
        "sha256": dict(sorted(digests.items())),
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


def _excuses(excuse: Mapping[str, str] | None) -> dict[str, str]:
    without = [site for site, why in (excuse or {}).items() if not why.strip()]
    if without:
        raise FleetError(f"--excuse {without[0]}: no reason is given; say why with --why")
    return {site: why.strip() for site, why in (excuse or {}).items()}


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
    request = record.frames["request"]
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


def _readings(
    folder: FleetFolder, facts: CallFacts, meter_file: Path | None
) -> tuple[pd.DataFrame, tuple[str, ...], dict[str, str]]:
    """Readings from the longest look-back to the horizon's end and a day more, the named file's first; notes;
    digests of the files."""
    back = max(rule.look_back_days for rule in facts.rules.values())
    start = facts.request["interval_start"].min()
    local = start.tz_convert(facts.timezone).tz_localize(None).normalize() - pd.Timedelta(days=back + 1)
    since = local_day_start(np.datetime64(local, "D"), facts.timezone)
    until = _utc(facts.intervals["interval_start"].max() + pd.Timedelta(days=1))
    if meter_file is None:
        found = read_meters(folder, since, until)
        return found.frame, tuple(found.notes), found.digests
    given = read_meter_file(folder, since, until, meter_file)
    try:
        own = read_meters(folder, since, until)
    except FleetError as error:
        alone = f"readings of {meter_file.name} alone: {error}"
        return given.frame, (*given.notes, alone), given.digests
    replaced = own.frame.set_index(KEY).index.isin(given.frame.set_index(KEY).index)
    frame = pd.concat([own.frame[~replaced], given.frame])
    taken = f"{int(replaced.sum())} readings of the folder were replaced by {meter_file.name}"
    return frame, (*own.notes, *given.notes, taken), own.digests | given.digests
