"""A settlement: an event's record and readings become the next settlement revision.

Owns which record, rule and readings go together: the rule, settings and meter map are those frozen when the
call was made, whatever the fleet folder says today. The arithmetic is settle.py's, the page statement.py's.
"""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from fleet import records
from fleet.callfacts import CallFacts
from fleet.desk import Progress
from fleet.errors import FleetError
from fleet.folder import FleetFolder, read_meters
from fleet.money import Prices
from fleet.records import CallRecord
from fleet.rules import SettlementRule
from fleet.settings import Settings
from fleet.settle import settle
from fleet.settlement import Settlement
from fleet.statement import statements
from fleet.wall_time import local_day_start
from sites.clock import as_us
from sites.direction import Direction

KEY = ["meter_id", "interval_start"]


@dataclass(frozen=True)
class Settled:
    """A settlement that was written."""

    path: Path
    revision: int
    settlement: Settlement
    notes: tuple[str, ...]


def settle_event(
    home: Path,
    event_id: str,
    meter_file: Path | None = None,
    progress: Progress = lambda text: None,
    meters_of: Path | None = None,
) -> Settled:
    """Settle the newest call of an event on the folder's readings and write the next revision below `home`.

    meter_file: readings that take the place of the folder's own for the same meter and interval (counted in
    the notes); meters_of: the fleet folder whose readings are used where that is not `home`. Raises Refused
    and FleetError for readings or a record that cannot be used; nothing is written then.
    """
    record = records.read_call(home, event_id, only=("request", "windows", "intervals"))
    frozen = frozen_folder(meters_of or home, record)
    progress("reading meters")
    facts = call_facts(record)
    readings, notes = _readings(frozen, facts, meter_file)
    revision = records.next_revision(home, event_id, "settlement")
    before = records.read_settlement(home, event_id).frames["sites"] if revision > 1 else None
    progress(f"settling {len(facts.windows)} sites")
    settlement = settle(facts, readings, revision, before)
    texts = statements(settlement, facts)
    path = records.write_settlement(home, event_id, settlement.frames, texts)
    return Settled(path, revision, settlement, (*notes, *settlement.notes))


def frozen_folder(home: Path, record: CallRecord) -> FleetFolder:
    """The fleet folder as the call froze it: settings, sites and meter map of that day."""
    settings = Settings.model_validate(record.frozen_json["settings"])
    return FleetFolder(
        home, settings, dict(record.frozen), {name: f"{name}.parquet" for name in record.frozen}, {}, []
    )


def call_facts(record: CallRecord) -> CallFacts:
    """What a settlement reads of a call's record."""
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
    )


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
) -> tuple[pd.DataFrame, tuple[str, ...]]:
    """Readings from the longest look-back to the horizon's end and a day more, the named file's first."""
    back = max(rule.look_back_days for rule in facts.rules.values())
    start = facts.request["interval_start"].min()
    local = start.tz_convert(facts.timezone).tz_localize(None).normalize() - pd.Timedelta(days=back + 1)
    since = local_day_start(np.datetime64(local, "D"), facts.timezone)
    until = _utc(facts.intervals["interval_start"].max() + pd.Timedelta(days=1))
    if meter_file is None:
        found = read_meters(folder, since, until)
        return found.frame, tuple(found.notes)
    given = read_meters(folder, since, until, meter_file)
    try:
        own = read_meters(folder, since, until)
    except FleetError as error:
        return given.frame, (*given.notes, f"readings of {meter_file.name} alone: {error}")
    replaced = own.frame.set_index(KEY).index.isin(given.frame.set_index(KEY).index)
    frame = pd.concat([own.frame[~replaced], given.frame])
    taken = f"{int(replaced.sum())} readings of the folder were replaced by {meter_file.name}"
    return frame, (*own.notes, *given.notes, taken)
