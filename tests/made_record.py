"""Makes the tables of an invented call without running any model: two sites, three machines, two tanks.

harbour-court: CH-1 stays on under a limit of 75 %, CH-2 is off; T-1 is ice. mill-school: W-1 is off, TES-1 is
chilled water, and the plant speaks US units. The event is Thu 2026-07-16, 16:00 to 19:00 in Athens, summer
time (UTC+03:00).
"""

from decimal import Decimal
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from fleet.records import CallRecord
from fleet.schema import Column, Table, table, tables
from fleet.steps import steps
from fleet.tables import stable

START, END = pd.Timestamp("2026-07-16 13:00", tz="UTC"), pd.Timestamp("2026-07-16 16:00", tz="UTC")
HORIZON = pd.date_range("2026-07-16 10:00", "2026-07-17 21:00", freq="15min", tz="UTC", inclusive="left")
SITES = ("harbour-court", "mill-school")
CHILLERS = (
    {"site_id": "harbour-court", "chiller_id": "CH-1", "loading_order": 1, "min_off_minutes": 10.0},
    {"site_id": "harbour-court", "chiller_id": "CH-2", "loading_order": 2, "min_off_minutes": 10.0},
    {"site_id": "mill-school", "chiller_id": "W-1", "loading_order": 1, "min_off_minutes": 15.0},
)
TANKS = (
    {"site_id": "harbour-court", "tank_id": "T-1", "kind": "ice_internal_melt", "capacity_kwh_th": 2000.0},
    {"site_id": "mill-school", "tank_id": "TES-1", "kind": "chilled_water", "capacity_kwh_th": 3516.853},
)
SITE_FACTS = (
    {"site_id": "harbour-court", "held_back_kwh_th": 300.0, "critical_kw_th": 120.0},
    {
        "site_id": "mill-school",
        "site_words": "units=us; contact=Plant desk, extension 12; ask for the night key",
    },
)
WINDOWS = (
    {
        "site_id": "harbour-court",
        "quote_id": "q-7",
        "chiller_ids": ["CH-2"],
        "inventory_low_start_kwh_th": 1500.0,
        "full_again_at": pd.Timestamp("2026-07-17 03:00", tz="UTC"),
    },
    {
        "site_id": "mill-school",
        "quote_id": "q-9",
        "chiller_ids": ["W-1"],
        "inventory_low_start_kwh_th": 1758.4265,
        "full_again_at": pd.NaT,
    },
)
ZERO = {
    "number": 0.0,
    "whole": 0,
    "flag": False,
    "decimal": Decimal("0"),
    "list_text": [],
    "list_number": [0.0],
}


def filled(of: Table, rows: Any) -> pd.DataFrame:
    """Rows with every column of the table: its default, its first choice, or nothing of its type."""
    frame = pd.DataFrame(list(rows))
    for column in of.columns:
        if column.name not in frame.columns:
            frame[column.name] = pd.Series([_nothing(column)] * len(frame), index=frame.index, dtype=object)
        elif column.default is not None:
            frame[column.name] = [column.default if _is_null(v) else v for v in frame[column.name]]
    return stable(frame, of)


def call_frames(
    event_id: str = "EV-1",
    purpose: str = "real",
    windows: Any = WINDOWS,
    chillers: Any = CHILLERS,
    limits: dict[tuple[str, str], float] | None = None,
    idle: tuple[str, ...] = (),
    direction: str = "shed",
    facts: Any = SITE_FACTS,
) -> dict[str, pd.DataFrame]:
    """All tables of a call. limits: load limit in the window by (site, machine); idle: machines never running."""
    limits = {("harbour-court", "CH-1"): 0.75} if limits is None else limits
    named = [{"event_id": event_id, "window_start": START, "window_end": END, **window} for window in windows]
    rows: dict[str, Any] = {
        "request": [_request(event_id, purpose, direction)],
        "windows": named,
        "machines": _machines(event_id, named, chillers, limits, idle),
        "tanks": _tanks(event_id),
    }
    empty: list[dict[str, Any]] = [{"event_id": event_id}]
    frames = {
        name: filled(of, rows.get(name, empty)) for name, of in tables("call").items() if name != "steps"
    }
    frozen = frozen_frames(chillers, facts)
    frames["steps"] = steps(
        frames["windows"], frozen["chillers"], frozen["sites"], frames["machines"], frames["tanks"], 15
    )
    return frames


def frozen_frames(chillers: Any = CHILLERS, facts: Any = SITE_FACTS) -> dict[str, pd.DataFrame]:
    """The frozen rows of the sites, their machines and their tanks."""
    rows = {"sites": facts, "chillers": chillers, "tanks": TANKS}
    return {name: filled(table("fleet", name), found) for name, found in rows.items()}


def made_call(
    facts: Any = SITE_FACTS, revision: int = 1, supersedes: int | None = None, **changes: Any
) -> CallRecord:
    """A CallRecord as if it had been read."""
    frames = call_frames(facts=facts, **changes)
    frames["request"]["supersedes"] = pd.array([supersedes] * len(frames["request"]), dtype="Int64")
    return CallRecord(
        path=Path("events/EV-1/call-001"),
        event_id=changes.get("event_id", "EV-1"),
        revision=revision,
        frames=frames,
        proof={"status": "proven"},
        frozen=frozen_frames(changes.get("chillers", CHILLERS), facts),
        frozen_json={"settings": {"timezone": "Europe/Athens"}},
    )


def settlement_frames(event_id: str = "EV-1", revision: int = 1) -> dict[str, pd.DataFrame]:
    """All tables of a settlement, one row each."""
    row = {"event_id": event_id, "revision": revision, "to_revision": revision}
    return {
        name: filled(of, [{key: value for key, value in row.items() if key in of.names}])
        for name, of in tables("settlement").items()
    }


def _request(event_id: str, purpose: str, direction: str) -> dict[str, Any]:
    called = pd.Timestamp("2026-07-16 10:00", tz="UTC")
    return {
        "event_id": event_id,
        "node_id": "North",
        "direction": direction,
        "purpose": purpose,
        "called_at": called,
        "effective_from": called,
        "interval_start": START,
        "interval_end": END,
        "requested_kw": 300.0,
    }


def _machines(
    event_id: str, windows: Any, chillers: Any, limits: Any, idle: tuple[str, ...]
) -> list[dict[str, Any]]:
    rows = []
    for machine in chillers:
        site, unit = machine["site_id"], machine["chiller_id"]
        window = next((found for found in windows if found["site_id"] == site), None)
        for at in HORIZON:
            inside = window is not None and window["window_start"] <= at < window["window_end"]
            off = inside and unit in window["chiller_ids"]
            limit = 0.0 if off else limits.get((site, unit), 1.0) if inside else 1.0
            runs = 0.0 if off or unit in idle else 200.0
            rows.append(
                {
                    "event_id": event_id,
                    "site_id": site,
                    "chiller_id": unit,
                    "interval_start": at,
                    "load_limit_fraction": limit,
                    "direct_kw_th": runs,
                }
            )
    return rows


def _tanks(event_id: str) -> list[dict[str, Any]]:
    """T-1 charges at up to 240 kW_th from 22:00 local, TES-1 at 100 kW_th from 23:00 local; both from 40 % up."""
    rows = []
    for tank, hour, rate in zip(TANKS, (19, 20), (240.0, 100.0)):
        first = pd.Timestamp(2026, 7, 16, hour, tz="UTC")
        for at in HORIZON:
            since = max((at - first) / pd.Timedelta(minutes=15) + 1, 0.0)
            level = min(0.4 * tank["capacity_kwh_th"] + since * rate / 4, tank["capacity_kwh_th"])
            charging = since > 0 and level < tank["capacity_kwh_th"]
            rows.append(
                {
                    "event_id": event_id,
                    "site_id": tank["site_id"],
                    "tank_id": tank["tank_id"],
                    "interval_start": at,
                    "charge_kw_th": rate if charging else 0.0,
                    "inventory_kwh_th": level,
                }
            )
    return rows


def _nothing(column: Column) -> Any:
    if column.default is not None:
        return column.default
    if column.required != "yes":
        return None
    if column.choices:
        return column.choices[0]
    if column.type == "time":
        return START
    if column.type == "day":
        return pd.Timestamp("2026-07-16")
    return ZERO.get(column.type, "x")


def _is_null(value: Any) -> bool:
    return value is None or (isinstance(value, float) and np.isnan(value))
