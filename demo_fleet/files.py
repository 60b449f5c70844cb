"""The single file door of this package: tables in and out of a fleet folder, an event record and `.truth`.

Times are written as UTC: with an offset in CSV, as timestamp[us, UTC] in Parquet.
"""

import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from sites.units import Times

TIME_NAMES = ("interval_start", "time", "at", "window_start", "window_end", "called_at")


class DemoError(ValueError):
    """The invented fleet cannot be made or played here; the message says what to do."""


def utc(times: Times) -> "pd.Series[Any]":
    """Naive UTC instants as a column of timestamp[us, UTC]."""
    return pd.Series(pd.DatetimeIndex(times.astype("datetime64[us]")).tz_localize("UTC"))


def naive(column: "pd.Series[Any]") -> Times:
    """A column of UTC timestamps as plain datetime64[us], shape (row,)."""
    plain: Times = column.dt.tz_convert("UTC").dt.tz_localize(None).to_numpy().astype("datetime64[us]")
    return plain


def write_csv(frame: pd.DataFrame, path: Path) -> None:
    """Write a table as CSV, times as 2026-07-15T13:00:00Z."""
    shown = frame.copy(deep=False)
    for name in shown.columns:
        if isinstance(shown[name].dtype, pd.DatetimeTZDtype):
            shown[name] = np.datetime_as_string(naive(shown[name]), unit="s")
            shown[name] = shown[name] + "Z"
        elif shown[name].dtype == bool:
            shown[name] = np.where(shown[name], "true", "false")
    path.parent.mkdir(parents=True, exist_ok=True)
    shown.to_csv(path, index=False)


def write_parquet(frame: pd.DataFrame, path: Path) -> None:
    """Write a table as Parquet; categories as plain text, whose files join whatever their categories."""
    path.parent.mkdir(parents=True, exist_ok=True)
    named = {name: "str" for name in frame.columns if isinstance(frame[name].dtype, pd.CategoricalDtype)}
    frame.astype(named).to_parquet(path, index=False)


def write_text(text: str, path: Path) -> None:
    """Write a text file."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(text, encoding="utf-8")


def read_settings(folder: Path) -> dict[str, Any]:
    """fleet.toml of a folder; DemoError where there is none."""
    path = folder / "fleet.toml"
    if not path.is_file():
        raise DemoError(f"{folder} has no fleet.toml; make a folder with `shedwright sample` or `begin`")
    return tomllib.loads(path.read_text(encoding="utf-8"))


def read_table(folder: Path, name: str) -> pd.DataFrame | None:
    """Table `name` of a folder (CSV, Parquet or a folder of Parquet), times in UTC; None where it is absent."""
    for path in (folder / f"{name}.parquet", folder / name):
        if path.exists():
            return _timed(pd.read_parquet(path), folder, name)
    path = folder / f"{name}.csv"
    if path.exists():
        return _timed(
            pd.read_csv(path, dtype=_TEXT, encoding="utf-8-sig", skipinitialspace=True), folder, name
        )
    return None


_TEXT = dict.fromkeys(
    ("site_id", "node_id", "parent_id", "tariff_id", "station_id", "chiller_id", "tank_id", "unit_id"), str
)


def _timed(frame: pd.DataFrame, folder: Path, name: str) -> pd.DataFrame:
    """Time columns as timestamp[us, UTC], by what fleet.toml declares for the table."""
    settings = read_settings(folder) if (folder / "fleet.toml").exists() else {}
    zone = str(settings.get("timezone", "UTC"))
    declared = settings.get("tables", {}).get(f"{name}_time", "offset")
    for column in [column for column in TIME_NAMES if column in frame.columns]:
        frame[column] = _to_utc(frame[column], declared, zone).dt.as_unit("us")
    return frame


def _to_utc(column: "pd.Series[Any]", declared: str, zone: str) -> "pd.Series[Any]":
    moments: pd.Series[Any]
    if isinstance(column.dtype, pd.DatetimeTZDtype):
        moments = column.dt.tz_convert("UTC")
        return moments
    if declared in ("utc", "offset"):
        return pd.to_datetime(column, utc=True, format="ISO8601")
    plain = pd.to_datetime(column, format="ISO8601")
    if declared == "standard":
        winter = pd.Timestamp(plain.iloc[0].year, 1, 1)
        ahead = winter - winter.tz_localize(zone).tz_convert("UTC").tz_localize(None)
        return (plain - ahead).dt.tz_localize("UTC")
    # one clock change at most twice a year, spread over many sites: the first reading of the repeated hour
    return plain.dt.tz_localize(zone, ambiguous=True, nonexistent="shift_forward").dt.tz_convert("UTC")
