"""Forms of the meters table that are brought to its own at the door, of the folder's file or one named by hand.

Owns kWh instead of kW (column kwh), the interval's end instead of its start (column interval_end) and intervals finer
than the fleet's. Coarser ones and MW are refused, never spread or guessed. Leaves cells to values.py.
"""

from collections.abc import Iterator
from dataclasses import replace
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.errors import Problem, Refused
from fleet.schema import table
from fleet.values import Reading, Typed, typed

FORMS: Final = ("interval_end", "kwh", "mw")
RANK: Final = ("measured", "edited", "estimated_line", "estimated_like_day", "missing")
"""Qualities, the worse ones later."""


def other_form(raw: pd.DataFrame) -> bool:
    """The table is in one of the other forms."""
    return bool(set(FORMS) & set(raw.columns))


def meters_table(raw: pd.DataFrame, reading: Reading) -> Typed:
    """A meters table in another form as the table itself: power, interval starts, the fleet's grid."""
    try:
        rows, notes = powers(raw, reading)
        rows, told = on_grid(rows, reading.interval_minutes * 60, reading.file)
    except Refused as refused:
        return Typed(pd.DataFrame(), list(refused.problems), [])
    return Typed(rows.drop(columns=["seconds", "rank", "energy"], errors="ignore"), [], [*notes, *told])


def powers(raw: pd.DataFrame, reading: Reading) -> tuple[pd.DataFrame, list[str]]:
    """Rows with `seconds`, the length of their intervals; kW and interval starts whatever the form.

    Raises Refused for every cell that is wrong.
    """
    problems = _forms(raw, reading.file)
    ending, energy = "interval_end" in raw.columns, "kwh" in raw.columns
    plain = raw.rename(columns={"interval_end": "interval_start", "kwh": "kw"})
    if problems:
        raise Refused(problems)
    found = typed(plain, table("fleet", "meters"), replace(reading, interval_minutes=1))
    if found.problems:
        raise Refused(found.problems)
    rows = found.frame
    seconds = _lengths(rows, reading.interval_minutes * 60)
    start = rows["interval_start"] - pd.to_timedelta(np.where(ending, seconds, 0), unit="s")
    kw = rows["kw"] * 3600.0 / seconds if energy else rows["kw"]
    quality = rows["quality"].fillna("measured").where(kw.notna(), "missing")
    told = [text for text, given in (("interval ends read as such", ending), ("kWh as kW", energy)) if given]
    notes = [*found.notes, *(f"{reading.file}: {text}" for text in told)]
    start = start.astype("datetime64[us, UTC]")
    return rows.assign(interval_start=start, kw=kw, quality=quality, seconds=seconds), notes


def _forms(raw: pd.DataFrame, file: str) -> list[Problem]:
    problems = []
    for one, other in (("interval_start", "interval_end"), ("kw", "kwh")):
        if one in raw.columns and other in raw.columns:
            came, expected = f"both {one} and {other}", "one of them"
            problems.append(Problem(file, 1, other, came, expected, "take one column out"))
    if "mw" in raw.columns:
        advice = "multiply by 1000 and name the column kw"
        problems.append(Problem(file, 1, "mw", "readings in MW", "kw or kwh", advice))
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


def on_grid(rows: pd.DataFrame, step_s: int, file: str) -> tuple[pd.DataFrame, list[str]]:
    """Readings averaged onto the grid; an interval of the grid not wholly covered is missing."""
    coarse = rows[(rows["seconds"] > step_s) | (step_s % rows["seconds"] != 0)]
    start_s = rows["interval_start"].astype("int64") // 1_000_000
    crossing = rows[(start_s % rows["seconds"] != 0) & ~rows.index.isin(coarse.index)]
    problems = [
        Problem(
            file,
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
            file,
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
    notes = [f"{file}: {len(once)} finer readings averaged onto {len(merged)} intervals"]
    if not whole.all():
        notes.append(f"{file}: {int((~whole).sum())} intervals not wholly covered are missing")
    coarse_enough = rows[rows["seconds"] == step_s]
    return pd.concat([coarse_enough, merged.assign(kw=kw, quality=quality)], ignore_index=True), notes
