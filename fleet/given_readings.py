"""Which readings a settlement is made of: the fleet folder's own, and those of a file named beside them.

Owns the period that is asked for, whose value stands where both have one, and what is to be said of it. Leaves the
files to folder.py, meter_groups.py and meter_files.py.
"""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from fleet.callfacts import CallFacts
from fleet.errors import FleetError
from fleet.folder import FleetFolder, meter_files, read_meters, reading_of
from fleet.meter_files import read_meter_file
from fleet.meter_groups import GroupedReadings
from fleet.plausible import meters_in_mega, rated_plant_kw
from fleet.readings import FrameReadings, Overlaid, Readings
from fleet.wall_time import local_day_start
from sites.clock import as_us


@dataclass(frozen=True)
class Given:
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


def given_readings(folder: FleetFolder, facts: CallFacts, meter_file: Path | None) -> Given:
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
        return Given(FrameReadings(given.frame), (*given.notes, alone), given.digests)
    both = Overlaid(own.readings, given.frame)
    return Given(both, (*own.notes, *given.notes), own.digests | given.digests, (both, meter_file.name))


def _own_readings(folder: FleetFolder, since: np.datetime64, until: np.datetime64) -> Given:
    """The folder's own: row group by row group where they are Parquet in the table's own form."""
    files, digests = meter_files(folder)
    if files:
        reading = reading_of(folder, "meters")
        frames = folder.frames
        rated = rated_plant_kw(frames["chillers"])
        grouped = GroupedReadings(
            files,
            reading,
            frames["meter_map"],
            frames["sites"]["site_id"],
            lambda highest: meters_in_mega({**frames, "meters": highest}, reading.file, rated_kw=rated),
        )
        if grouped.plain:
            return Given(grouped, (), digests)
    found = read_meters(folder, since, until)
    return Given(FrameReadings(found.frame), tuple(found.notes), found.digests)


def _utc(time: pd.Timestamp) -> np.datetime64:
    return as_us(time.tz_convert("UTC").tz_localize(None).to_datetime64())
