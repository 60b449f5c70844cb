"""A file of readings named by hand: CSV or Parquet in the form of the meters table or near it, or an XML feed.

Owns the forms that are brought to the meters table at the door: kWh instead of kW (column kwh), the interval's end
instead of its start (column interval_end), intervals finer than the fleet's. Coarser ones are refused, never
spread. Leaves a plain meters table to folder.py and the values to meters.py.
"""

import hashlib
from pathlib import Path
from typing import Final

import numpy as np
import pandas as pd

from fleet.errors import FleetError, Refused
from fleet.espi import read_feed
from fleet.folder import FleetFolder, Meters, read_meters
from fleet.meter_forms import on_grid, other_form, powers
from fleet.plausible import meters_in_mega
from fleet.references import unmapped_meters
from fleet.tables import read_raw
from fleet.values import Reading
from fleet.wall_time import utc_timestamp

COLUMNS: Final = ["meter_id", "interval_start", "kw", "quality"]


def read_meter_file(folder: FleetFolder, since: np.datetime64, until: np.datetime64, path: Path) -> Meters:
    """Readings of a file from `since` to before `until` (UTC), on the fleet's grid, in the meters table's columns.

    Raises Refused for what is wrong in it, FleetError where it cannot be read.
    """
    if path.suffix.lower() == ".xml":
        rows = _named(read_feed(path), folder)
        notes: list[str] = []
    else:
        raw = read_raw(path)
        settings = folder.settings
        reading = Reading(
            path.name, settings.time_reading("meters"), settings.timezone, settings.interval_minutes
        )
        rows, notes = powers(raw, reading)
        _check_unit(rows, folder, path, "kwh" if "kwh" in raw.columns else "kw")
        lengths = set(rows["seconds"])
        if not other_form(raw) and lengths <= {folder.settings.interval_minutes * 60}:
            found = read_meters(folder, since, until, path)
            _check_period(found.frame, rows, since, until, path)
            return found
    rows, told = on_grid(rows, folder.settings.interval_minutes * 60, path.name)
    since_utc, until_utc = utc_timestamp(since), utc_timestamp(until)
    inside = (rows["interval_start"] >= since_utc) & (rows["interval_start"] < until_utc)
    frame = rows.loc[inside, COLUMNS]
    _check_period(frame, rows, since, until, path)
    faults = unmapped_meters(frame, folder.frames["meter_map"], folder.frames["sites"]["site_id"], path.name)
    if faults:
        raise Refused(faults)
    with path.open("rb") as stream:
        digest = hashlib.file_digest(stream, "sha256").hexdigest()
    return Meters(frame, {path.name: digest}, [*notes, *told])


def _check_unit(rows: pd.DataFrame, folder: FleetFolder, path: Path, column: str) -> None:
    """Refused where a building's highest reading is no building's power: MW in a column of kW."""
    problems = meters_in_mega(folder.frames | {"meters": rows}, path.name, column)
    if problems:
        raise Refused(problems)


def _check_period(
    inside: pd.DataFrame, rows: pd.DataFrame, since: np.datetime64, until: np.datetime64, path: Path
) -> None:
    """FleetError where not one reading lies in the period: a file of another event or year."""
    if len(inside) or rows.empty:
        return
    first, last = (f"{at:%Y-%m-%dT%H:%MZ}" for at in rows["interval_start"].agg(["min", "max"]))
    raise FleetError(
        f"{path.name}: came readings from {first} to {last}; expected some from {since}Z to before {until}Z, the "
        "days that the settlement looks at; name the file of the event"
    )


def _named(rows: pd.DataFrame, folder: FleetFolder) -> pd.DataFrame:
    """A feed's usage points under their meter ids: the title where it is one, else the link's last part."""
    mapped = folder.frames["meter_map"]
    known = mapped["meter_id"] if len(mapped) else folder.frames["sites"]["site_id"]
    by_title = rows["title"].isin(known)
    return rows.assign(meter_id=rows["title"].where(by_title, rows["usage_point"]))
