"""What a settlement revision changed against the one before: by site, and interval by interval.

Owns the comparison of two revisions' tables and how it reads; postings are settlement.py's.
"""

from collections.abc import Mapping
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.money import told

SITE_COLUMNS: Final = (
    "state",
    "method",
    "adjustment",
    "delivered_kwh",
    "performance_factor",
    "capacity_payment",
    "energy_payment",
    "penalty",
    "total",
)
MONEY: Final = SITE_COLUMNS[-4:]
INTERVAL_COLUMNS: Final = ("metered_kw", "adjusted_baseline_kw", "delivered_kw", "quality")
SHOWN_INTERVALS: Final = 8
"""Intervals of a site that the statement's text names; its JSON names all."""


def changes(
    before: Mapping[str, pd.DataFrame], after: Mapping[str, pd.DataFrame], currency: str
) -> list[dict[str, Any]]:
    """One entry per site that differs: {site_id, columns: {name: [was, now]}, intervals: [{interval_start, ...}]}.

    before, after: tables sites and intervals of two revisions. A site in one of them alone differs in all.
    """
    was, now = (_with_minor_units(frames["sites"], currency) for frames in (before, after))
    of_sites = _different(was, now, ["site_id"], SITE_COLUMNS)
    of_intervals = _different(
        before["intervals"], after["intervals"], ["site_id", "interval_start"], INTERVAL_COLUMNS
    )
    found: dict[str, dict[str, Any]] = {}
    for row in of_sites + of_intervals:
        site = row.pop("site_id")
        entry = found.setdefault(site, {"site_id": site, "columns": {}, "intervals": []})
        if "interval_start" in row:
            entry["intervals"].append({"interval_start": row.pop("interval_start"), **row})
        else:
            entry["columns"] = row
    return [found[site] for site in sorted(found)]


def _with_minor_units(sites: pd.DataFrame, currency: str) -> pd.DataFrame:
    """Amounts as text with the currency's decimals, whatever a file keeps."""
    return sites.assign(**{name: [told(amount, currency) for amount in sites[name]] for name in MONEY})


def _different(
    before: pd.DataFrame, after: pd.DataFrame, key: list[str], columns: tuple[str, ...]
) -> list[dict[str, Any]]:
    """Rows of the key that differ, with [was, now] of each column that does; None = nothing there."""
    old, new = (frame.set_index(key)[list(columns)].astype(object) for frame in (before, after))
    keys = old.index.union(new.index)
    old, new = old.reindex(keys), new.reindex(keys)
    unlike = (old != new) & ~(old.isna() & new.isna())
    places = [int(place) for place in np.flatnonzero(unlike.to_numpy().any(axis=1))]
    rows = []
    for place in places:
        label = keys[place] if len(key) > 1 else (keys[place],)
        row: dict[str, Any] = {name: _plain(value) for name, value in zip(key, label)}
        for at, name in enumerate(columns):
            if unlike.iloc[place, at]:
                row[name] = [_plain(frame.iloc[place, at]) for frame in (old, new)]
        rows.append(row)
    return rows


def _plain(value: Any) -> Any:
    """A cell for JSON: money and times as text, nothing as None."""
    if value is None or value is pd.NA or (isinstance(value, float) and np.isnan(value)):
        return None
    if isinstance(value, pd.Timestamp):
        return value.strftime("%Y-%m-%dT%H:%M:%SZ")
    return float(value) if isinstance(value, (float, np.floating)) else str(value)


def change_lines(found: list[dict[str, Any]]) -> list[str]:
    """The changes as lines of a statement."""
    lines = []
    for entry in found:
        parts = [f"{name} {_text(was)} -> {_text(now)}" for name, (was, now) in entry["columns"].items()]
        lines.append(f"  {entry['site_id']}: " + ("; ".join(parts) or "intervals only"))
        for row in entry["intervals"][:SHOWN_INTERVALS]:
            cells = [
                f"{name} {_text(was)} -> {_text(now)}"
                for name, (was, now) in ((n, v) for n, v in row.items() if n != "interval_start")
            ]
            lines.append(f"    {row['interval_start']}  " + "; ".join(cells))
        more = len(entry["intervals"]) - SHOWN_INTERVALS
        if more > 0:
            lines.append(f"    and {more} more intervals; all stand in statement.json")
    return lines


def _text(value: Any) -> str:
    if value is None:
        return "nothing"
    return f"{value:,.3f}" if isinstance(value, float) else str(value)
