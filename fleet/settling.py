"""A settlement: an event's record and readings become the next settlement revision.

Owns which record, rule and readings go together: the rule, settings and meter map are those frozen when the
call was made, whatever the fleet folder says today. The arithmetic is settle.py's, the page statement.py's.
"""

import json
from collections.abc import Callable, Mapping
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
from fleet.folder import FleetFolder, open_folder
from fleet.given_readings import given_readings
from fleet.money import Prices
from fleet.records import CallRecord, SettlementRecord
from fleet.request import outermost
from fleet.rules import SettlementRule
from fleet.schema import table
from fleet.settings import FILE, Settings
from fleet.settle import settle
from fleet.settlement import Settlement
from fleet.statement import statements
from fleet.tables import ParquetParts, write_parquet
from sites.clock import as_us
from sites.direction import Direction

CALL_TABLES: Final = ("request", "windows", "intervals")
CALL_COLUMNS: Final = {"intervals": ("site_id", "interval_start", "committed_kw")}
"""What is read of the call's largest table."""
LAST_TABLES: Final = ("sites", "intervals")
"""What is read of the settlement before."""
LARGEST: Final = "day_intervals"
"""The table that is written while it is made."""
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
    written: dict[str, Path]
    """Tables that lie in a file already."""


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
    record = records.read_call(home, event_id, only=CALL_TABLES, columns=CALL_COLUMNS)
    revision = records.next_revision(home, event_id, "settlement")
    last = records.read_settlement(home, event_id, only=LAST_TABLES) if revision > 1 else None
    before = None if last is None else last.frames
    decided = _decided(
        event_id, _excused(before), _reasons("--excuse", excuse), _reasons("--readmit", readmit), who
    )
    with TemporaryDirectory(prefix="shedwright-") as folder:
        given = meter_file, meters_of
        made = _make(home, record, revision, before, decided, given, Path(folder), progress)
        frames, texts = made.settlement.frames, made.texts
        with records.lock(home) as swept:
            path = records.write_settlement(home, event_id, frames, texts, made.written)
    return Settled(path, revision, made.settlement, (*swept, *made.notes, *_left_aside(last, made)))


def settle_again(home: Path, event_id: str, revision: int, meter_file: Path | None = None) -> list[str]:
    """Work an old revision out again from the same inputs and compare: names of files whose bytes differ.

    Nothing is written. Raises FleetError where the readings are not those it was made of, and where another
    version of this program made it and the bytes differ.
    """
    there = records.read_settlement(home, event_id, revision)
    inputs = json.loads(there.statements[INPUTS])
    record = records.read_call(
        home, event_id, inputs["call_revision"], only=CALL_TABLES, columns=CALL_COLUMNS
    )
    before = (
        records.read_settlement(home, event_id, revision - 1, LAST_TABLES).frames if revision > 1 else None
    )
    decided = {name: inputs.get(name, {}) for name in ("excused", "readmitted")} | {
        "who": inputs.get("who", "")
    }
    with TemporaryDirectory(prefix="shedwright-") as text:
        folder = Path(text)
        given = meter_file, None
        made = _make(home, record, revision, before, decided, given, folder, lambda text: None)
        now = json.loads(made.texts[INPUTS])
        if now["sha256"] != inputs["sha256"]:
            raise FleetError(
                f"event {event_id}, settlement revision {revision}: was made of other readings "
                f"({', '.join(inputs['sha256']) or 'none'}); give back those files, unchanged, to work it out again"
            )
        different = _different(made, there.path, folder)
    different += [name for name, text in made.texts.items() if text != there.statements.get(name)]
    if different and inputs["shedwright"] != now["shedwright"]:
        raise FleetError(
            f"event {event_id}, settlement revision {revision}: was made by shedwright {inputs['shedwright']}; "
            f"this is {now['shedwright']} and gives other bytes in {', '.join(different)}; use that version"
        )
    return different


def _different(made: _Made, there: Path, folder: Path) -> list[str]:
    """Names of the tables' files whose bytes are not those that lie `there`."""
    files = dict(made.written)
    for name, frame in made.settlement.frames.items():
        files[name] = folder / f"{name}.parquet"
        write_parquet(frame, files[name], table("settlement", name))
    return [path.name for path in files.values() if path.read_bytes() != (there / path.name).read_bytes()]


def _make(
    home: Path,
    record: CallRecord,
    revision: int,
    before: Mapping[str, pd.DataFrame] | None,
    decided: Mapping[str, Any],
    given_by: tuple[Path | None, Path | None],
    folder: Path,
    progress: Progress,
) -> _Made:
    """The next revision on readings of a file and a fleet folder (None: the usual ones); `folder` takes the largest
    table while it is made."""
    meter_file, meters_of = given_by
    source = meters_of or _fleet_of(home)
    frozen = frozen_folder(source, record)
    progress("reading meters")
    facts = call_facts(record, source, decided["excused"])
    given = given_readings(frozen, facts, meter_file)
    progress(f"settling {len(facts.windows)} sites")
    last = None if before is None else before["sites"]
    path = folder / f"{LARGEST}.parquet"
    with ParquetParts(path, table("settlement", LARGEST)) as parts:
        settlement = settle(facts, given.readings, revision, last, _sink(parts, folder))
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
    return _Made(settlement, texts, notes, {LARGEST: path})


def _sink(parts: ParquetParts, folder: Path) -> Callable[[pd.DataFrame], None]:
    def add(frame: pd.DataFrame) -> None:
        try:
            parts.add(frame)
        except OSError as error:
            raise FleetError(
                f"{folder}: readings of the days cannot be put by ({error.strerror or error}); nothing was "
                "settled; make room, or name another folder for such files in TMPDIR"
            ) from error

    return add


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
