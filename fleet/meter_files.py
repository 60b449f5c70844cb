"""A file of readings named by hand: CSV or Parquet in the form of the meters table or near it, or an XML feed.

Owns the forms that are brought to the meters table at the door: kWh instead of kW (column kwh), the interval's end
instead of its start (column interval_end), intervals finer than the fleet's. Coarser ones are refused, never
spread. Leaves a plain meters table to folder.py and the values to meters.py.
"""

import hashlib
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.errors import FleetError, Problem, Refused
from fleet.espi import RANK, read_feed
from fleet.folder import FleetFolder, Meters, read_meters
from fleet.plausible import meters_in_mega
from fleet.references import unmapped_meters
from fleet.schema import table
from fleet.tables import read_raw
from fleet.values import Reading, typed
from fleet.wall_time import utc_timestamp

FORMS: Final = ("interval_end", "kwh", "mw")
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
        rows, notes = _table(raw, folder, path)
        _check_unit(rows, folder, path, "kwh" if "kwh" in raw.columns else "kw")
        lengths = set(rows["seconds"])
        if not set(FORMS) & set(raw.columns) and lengths <= {folder.settings.interval_minutes * 60}:
            found = read_meters(folder, since, until, path)
            _check_period(found.frame, rows, since, until, path)
            return found
    rows, told = _on_grid(rows, folder.settings.interval_minutes * 60, path)
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


def _table(raw: pd.DataFrame, folder: FleetFolder, path: Path) -> tuple[pd.DataFrame, list[str]]:
    """Rows of a table with `seconds`, the length of their intervals; kW and interval starts whatever the form."""
    problems = _forms(raw, path)
    ending, energy = "interval_end" in raw.columns, "kwh" in raw.columns
    plain = raw.rename(columns={"interval_end": "interval_start", "kwh": "kw"})
    settings = folder.settings
    reading = Reading(path.name, settings.time_reading("meters"), settings.timezone, 1)
    if problems:
        raise Refused(problems)
    found = typed(plain, table("fleet", "meters"), reading)
    if found.problems:
        raise Refused(found.problems)
    rows = found.frame
    seconds = _lengths(rows, settings.interval_minutes * 60)
    start = rows["interval_start"] - pd.to_timedelta(np.where(ending, seconds, 0), unit="s")
    kw = rows["kw"] * 3600.0 / seconds if energy else rows["kw"]
    quality = rows["quality"].fillna("measured").where(kw.notna(), "missing")
    told = [text for text, given in (("interval ends read as such", ending), ("kWh as kW", energy)) if given]
    notes = [*found.notes, *(f"{path.name}: {text}" for text in told)]
    start = start.astype("datetime64[us, UTC]")
    return rows.assign(interval_start=start, kw=kw, quality=quality, seconds=seconds), notes


def _forms(raw: pd.DataFrame, path: Path) -> list[Problem]:
    problems = []
    for one, other in (("interval_start", "interval_end"), ("kw", "kwh")):
        if one in raw.columns and other in raw.columns:
            came, expected = f"both {one} and {other}", "one of them"
            problems.append(Problem(path.name, 1, other, came, expected, "take one column out"))
    if "mw" in raw.columns:
        advice = "multiply by 1000 and name the column kw"
        problems.append(Problem(path.name, 1, "mw", "readings in MW", "kw or kwh", advice))
    return problems


def _lengths(rows: pd.DataFrame, step_s: int) -> pd.Series:
    """Seconds of each row's interval: the closest two rows of its meter; the fleet's step for a single row."""
    ordered = rows.sort_values(["meter_id", "interval_start"])
    apart = ordered.groupby("meter_id")["interval_start"].diff().dt.total_seconds()
    least = apart.where(apart > 0).groupby(ordered["meter_id"]).min()
    return rows["meter_id"].map(least).fillna(step_s).astype("int64")


def _rows(frame: pd.DataFrame) -> Iterator[Any]:
    return iter(frame.itertuples(index=False))


def _longest(coarse: pd.DataFrame) -> Iterator[tuple[str, int]]:
    longest = coarse.groupby("meter_id")["seconds"].max()
    return zip(longest.index.astype(str), longest.tolist(), strict=True)


def _on_grid(rows: pd.DataFrame, step_s: int, path: Path) -> tuple[pd.DataFrame, list[str]]:
    """Readings averaged onto the grid; an interval of the grid not wholly covered is missing."""
    coarse = rows[(rows["seconds"] > step_s) | (step_s % rows["seconds"] != 0)]
    start_s = rows["interval_start"].astype("int64") // 1_000_000
    crossing = rows[(start_s % rows["seconds"] != 0) & ~rows.index.isin(coarse.index)]
    problems = [
        Problem(
            path.name,
            None,
            "interval_start",
            f"intervals of {length / 60:g} minutes for meter {meter}",
            f"the fleet's {step_s / 60:g} minutes, or parts of it",
            "give finer readings; coarse ones are never spread",
        )
        for meter, length in _longest(coarse)
    ]
    problems += [
        Problem(
            path.name,
            None,
            "interval_start",
            f"{row.interval_start:%Y-%m-%dT%H:%M:%SZ} for meter {row.meter_id}",
            f"starts on the {row.seconds / 60:g}-minute grid",
            "correct the times",
        )
        for row in _rows(crossing.head(5))
    ]
    if problems:
        raise Refused(problems)
    finer = rows[rows["seconds"] < step_s]
    if finer.empty:
        return rows, []
    once = finer.drop_duplicates(["meter_id", "interval_start", "kw"])
    at = pd.to_datetime(
        once["interval_start"].astype("int64") // (step_s * 1_000_000) * step_s, unit="s", utc=True
    )
    grouped = once.assign(
        interval_start=at.astype("datetime64[us, UTC]"),
        rank=once["quality"].map(RANK.index),
        energy=once["kw"] * once["seconds"],
    ).groupby(["meter_id", "interval_start"], as_index=False)
    merged = grouped.agg(
        energy=("energy", lambda kws: kws.sum(skipna=False)), seconds=("seconds", "sum"), rank=("rank", "max")
    )
    whole = merged["seconds"] == step_s
    kw = (merged["energy"] / step_s).where(whole)
    quality = merged["rank"].map(dict(enumerate(RANK))).where(kw.notna(), "missing")
    notes = [f"{path.name}: {len(once)} finer readings averaged onto {len(merged)} intervals"]
    if not whole.all():
        notes.append(f"{path.name}: {int((~whole).sum())} intervals not wholly covered are missing")
    coarse_enough = rows[rows["seconds"] == step_s]
    return pd.concat([coarse_enough, merged.assign(kw=kw, quality=quality)], ignore_index=True), notes
