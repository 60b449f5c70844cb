"""Makes an event record by the real rooms on made-up sites: quoted, allocated, written, settled twice.

Six sites, one per strategy, in UTC, event Wed 2026-07-15 16:00 to 19:00, called at 13:00; a shed, or on a mild day
with tanks two fifths full and a negative price an absorb. Also re-seals a record after a change, so that only the
audit can tell.
"""

import json
from dataclasses import asdict, replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from made_sites import made_outlook, made_roster, made_standing

from fleet import event, feeders, ordering, records
from fleet.allocate import Allocation, allocate
from fleet.calling import prices_frame
from fleet.request import Request, request
from fleet.rules import PRESETS
from fleet.schema import table
from fleet.seals import SEAL, digest, json_text
from fleet.settle import settle
from fleet.settling import call_facts
from fleet.statement import statements
from fleet.steps import steps
from fleet.tables import stable
from sites import blocks
from sites.direction import Direction
from sites.outlook import Outlook
from sites.quote import Quoted, ground, quote
from sites.roster import CHILLER_KINDS, LAYOUTS, STRATEGIES, TANK_KINDS, Roster, Standing

EVENT_ID = "EV-1"
AT = np.datetime64("2026-07-15T13:00", "us")
START, END = np.datetime64("2026-07-15T16:00", "us"), np.datetime64("2026-07-15T19:00", "us")
SETTINGS = {
    "name": "made up",
    "timezone": "UTC",
    "currency": "EUR",
    "interval_minutes": 15,
    "over_delivery_fraction": 0.05,
    "capacity_payment_per_kwh": 0.2,
    "energy_payment_per_kwh": 0.1,
    "penalty_per_kwh": 0.05,
    "performance_floor": 0.0,
    "performance_cap": 1.0,
    "shortfall_price_per_kwh": None,
    "over_delivery_price_per_kwh": None,
}
NODE_OF = ("north", "north", "east", "grid", "north", "north")
LIMIT_KW = {"grid": np.nan, "north": 1310.0, "east": 260.0}
RECOVERIES_OF = {"shed": ("usual",), "absorb": ("usual", "night", "capped")}
ASKED_KW = {"shed": (100.0,) * 5 + (60.0,) * 7, "absorb": (150.0,) * 5 + (100.0,) * 7}
RULE_OF = ("ten_of_ten", "high_five_of_ten", "meter_before_after", "ten_of_ten", "ten_of_ten", "ten_of_ten")
CALLS = (
    ("EV-0", "real", "2026-06-24T16:00+00:00", "2026-06-24T18:00+00:00"),
    ("EV-T", "test", "2026-07-01T16:00+00:00", "2026-07-01T17:00+00:00"),
)


def made_event(home: Path, settlements: int = 2, direction: str = "shed") -> Path:
    """An event below `home`, settled; returns its folder."""
    roster = made_roster(delivery_factor=0.97, held_back_kwh_th=150.0, critical_kw_th=40.0)
    roster = replace(roster, buildings=replace(roster.buildings, node_id=np.array(NODE_OF, dtype=object)))
    outlook, standing = made_outlook(roster), made_standing(roster)
    if direction == "absorb":
        outlook, standing = sunny(outlook), made_standing(roster, 0.4)
    standing.chiller_available[2, 2] = False
    base = ground(roster, outlook, standing)
    quoted = quote(base, _terms(outlook, roster.count, direction), Direction(direction))
    frozen = frozen_frames(roster, outlook)
    tree = feeders.feeders(
        frozen["nodes"],
        frozen["node_loads"],
        roster.buildings.node_id,
        outlook.clock,
        roster.buildings.site_id,
    )
    room = feeders.headroom_kw(tree, base.usual.power_kw + outlook.rest_kw)
    ask = request(EVENT_ID, "grid", direction, "real", AT, START, END, list(ASKED_KW[direction]), 15)
    found = _allocated(quoted, tree, room.kw, ask, roster, outlook)
    assert found.met
    choice = event.chosen(ask, quoted, tree, found.chosen)
    frames = event.frames(choice)
    frames["steps"] = steps(
        frames["windows"],
        frozen["chillers"],
        frozen["sites"],
        frames["machines"],
        frames["tanks"],
        15,
        direction,
    )
    frames["prices"] = prices_frame(choice, found)
    records.write_call(home, EVENT_ID, frames, _proof(quoted, found), frozen, frozen_json(roster, standing))
    path = home / "events" / EVENT_ID
    ordering.write(home, EVENT_ID)
    for revision in range(1, settlements + 1):
        _settle(home, revision)
    return path


def sunny(outlook: Outlook) -> Outlook:
    """The same day mild and with a negative price while the event lasts."""
    price = outlook.price_per_kwh.copy()
    price[:, outlook.clock.index(START) : outlook.clock.index(END)] = -0.04
    load = 0.45 * outlook.cooling_load_kw_th
    return replace(outlook, cooling_load_kw_th=load, price_per_kwh=price)


def _terms(outlook: Outlook, count: int, direction: str) -> blocks.Terms:
    return blocks.Terms(
        event_from=outlook.clock.index(START),
        event_to=outlook.clock.index(END),
        step_minutes=15,
        earliest=np.full(count, 8),
        minimum_intervals=np.full(count, 4),
        most_intervals=np.full(count, 99),
        allowed=np.ones(count, dtype=np.bool_),
        recoveries=RECOVERIES_OF[direction],
    )


def _allocated(
    quoted: Quoted, tree: feeders.Feeders, room: Any, ask: Request, roster: Roster, outlook: Outlook
) -> Allocation:
    return allocate(
        quoted.quotes,
        tree,
        room,
        ask,
        roster.buildings.delivery_factor,
        10.0 * float(outlook.price_per_kwh.max()),
        float(outlook.price_per_kwh.max()),
        np.ones(roster.count, dtype=np.bool_),
        site_ids=roster.buildings.site_id,
        seconds=4.0,
    )


def _proof(quoted: Quoted, found: Allocation) -> dict[str, Any]:
    clock = quoted.quotes.clock
    return asdict(found.proof) | {
        "met": found.met,
        "horizon_start": f"{np.datetime_as_string(clock.start, 's')}Z",
        "horizon_end": f"{np.datetime_as_string(clock.end, 's')}Z",
        "interval_minutes": clock.step_minutes,
        "probability": None,
        "over_delivery_fraction": 0.05,
        "requested_kwh": float(found.requested_kw.sum()) * clock.step_h,
        "quoted_unmet_kwh_th": float(quoted.quotes.unmet_kwh_th.sum()),
        "recoveries": list(RECOVERIES_OF[str(quoted.quotes.direction)]),
        "candidates_tried": quoted.tried,
        "candidates_quoted": len(quoted.quotes.site),
        "versions": {"shedwright": "0"},
        "sha256": {},
    }


def frozen_frames(roster: Roster, outlook: Outlook) -> dict[str, pd.DataFrame]:
    """Frozen tables as a call freezes them: a station and a tariff per site."""
    buildings = roster.buildings
    sites = pd.DataFrame({name: value for name, value in asdict(buildings).items()})
    sites["strategy"] = np.array(STRATEGIES, dtype=object)[buildings.strategy]
    sites["layout"] = np.array(LAYOUTS, dtype=object)[buildings.layout]
    sites["supply_cap_c"] = sites["supply_cap_c"].replace(np.inf, np.nan)
    sites["station_id"] = sites["tariff_id"] = sites["site_id"]
    sites["calls_per_season"], sites["calls_per_week"], sites["hours_per_season"] = 12, 3, 40.0
    starts = pd.DatetimeIndex(outlook.clock.starts).tz_localize("UTC")
    rows = {"interval_start": np.tile(starts, roster.count)}
    names = np.repeat(buildings.site_id, outlook.clock.count)
    frames = {
        "sites": sites,
        "chillers": _machines(roster),
        "tanks": _tanks(roster),
        "nodes": pd.DataFrame(
            {
                "node_id": list(LIMIT_KW),
                "parent_id": ["", "grid", "north"],
                "import_limit_kw": list(LIMIT_KW.values()),
            }
        ),
        "loads": pd.DataFrame(
            rows
            | {
                "site_id": names,
                "cooling_load_kw_th": outlook.cooling_load_kw_th.ravel(),
                "rest_kw": outlook.rest_kw.ravel(),
            }
        ),
        "node_loads": pd.DataFrame({"node_id": "north", "interval_start": starts, "other_kw": 400.0}),
        "weather": pd.DataFrame(
            rows
            | {
                "station_id": names,
                "dry_bulb_c": outlook.dry_bulb_c.ravel(),
                "wet_bulb_c": outlook.wet_bulb_c.ravel(),
            }
        ),
        "tariffs": pd.DataFrame(rows | {"tariff_id": names, "price_per_kwh": outlook.price_per_kwh.ravel()}),
        "bills": pd.DataFrame(
            {
                "site_id": buildings.site_id,
                "cycle_start": pd.Timestamp("2026-07-01"),
                "cycle_end": pd.Timestamp("2026-07-31"),
                "billed_peak_kw": outlook.billed_peak_kw,
            }
        ),
        "holidays": pd.DataFrame(
            {"date": [pd.Timestamp("2026-07-03")], "name": "a holiday", "source": "made up"}
        ),
        "plant_days": pd.DataFrame(
            {"site_id": ["S00"], "day": [pd.Timestamp("2026-07-08")], "mode": ["tank_out"]}
        ),
        "meter_map": pd.DataFrame(
            {"meter_id": "M-" + sites["site_id"], "site_id": sites["site_id"], "role": "building", "sign": 1}
        ),
        "status": pd.DataFrame(),
    }
    return {name: stable(frame, table("fleet", name)) for name, frame in frames.items()}


def _machines(roster: Roster) -> pd.DataFrame:
    row, unit = np.nonzero(roster.chillers.exists)
    frame = pd.DataFrame({name: value[row, unit] for name, value in asdict(roster.chillers).items()})
    frame["site_id"], frame["loading_order"] = roster.buildings.site_id[row], unit + 1
    frame["kind"] = np.array(CHILLER_KINDS, dtype=object)[roster.chillers.kind[row, unit]]
    frame["starts_left"] = np.nan
    return frame.drop(columns="exists")


def _tanks(roster: Roster) -> pd.DataFrame:
    row, unit = np.nonzero(roster.tanks.exists)
    frame = pd.DataFrame({name: value[row, unit] for name, value in asdict(roster.tanks).items()})
    frame["site_id"] = roster.buildings.site_id[row]
    frame["kind"] = np.array(TANK_KINDS, dtype=object)[roster.tanks.kind[row, unit]]
    limits = ["discharge_limit_kw_th", "charge_limit_kw_th"]
    frame[limits] = frame[limits].replace(np.inf, np.nan)
    return frame.drop(columns="exists")


def frozen_json(roster: Roster, standing: Standing) -> dict[str, dict[str, Any]]:
    """Settings, rules, standing and past calls as a call freezes them."""
    site_id = roster.buildings.site_id
    found: dict[str, Any] = {name: {} for name in site_id}
    for row, unit in zip(*np.nonzero(roster.tanks.exists), strict=True):
        levels = {
            f"{which}_kwh_th": float(getattr(standing, f"{which}_kwh_th")[row, unit])
            for which in ("low", "best", "high")
        }
        found[site_id[row]][roster.tanks.tank_id[row, unit]] = levels | {
            "available": bool(standing.tank_available[row, unit])
        }
    for row, unit in zip(*np.nonzero(roster.chillers.exists), strict=True):
        found[site_id[row]][roster.chillers.chiller_id[row, unit]] = {
            "available": bool(standing.chiller_available[row, unit])
        }
    calls = [
        {"event_id": name, "purpose": purpose, "site_id": site, "window_start": since, "window_end": until}
        for site in ("S01", "S03")
        for name, purpose, since, until in CALLS
    ]
    used = sorted(set(RULE_OF))
    return {
        "settings": dict(SETTINGS),
        "rules": {
            "rules": {name: PRESETS[name].model_dump(mode="json") for name in used},
            "site": dict(zip(site_id, RULE_OF, strict=True)),
        },
        "standing": found,
        "calls": {"calls": calls},
    }


def readings(home: Path, revision: int) -> pd.DataFrame:
    """Meters of the called sites: usual-like days with noise, the event on its day, two gaps."""
    record = records.read_call(home, EVENT_ID)
    sign = Direction(record.frames["request"]["direction"].iloc[0]).sign
    usual = record.frames["usual"].set_index(["site_id", "interval_start"])
    starts = pd.date_range("2026-06-01", "2026-07-17", freq="15min", tz="UTC", inclusive="left")
    rng = np.random.default_rng(7)
    frames = []
    for site in record.frames["windows"]["site_id"]:
        own = usual.loc[site]
        building = (own["usual_kw"] + own["rest_kw"]).groupby(own.index.time).mean()
        day = pd.Series(starts.time).map(building).to_numpy() * np.repeat(
            rng.uniform(0.9, 1.1, len(starts) // 96), 96
        )
        kw = day + rng.normal(0.0, 2.0, len(starts))
        course = record.frames["intervals"]
        course = course[course["site_id"] == site]
        at = starts.get_indexer(pd.DatetimeIndex(course["interval_start"]))
        kw[at] += sign * course["committed_kw"].to_numpy() * 0.9
        frames.append(
            pd.DataFrame({"meter_id": f"M-{site}", "interval_start": starts, "kw": kw, "quality": "measured"})
        )
    meters = pd.concat(frames, ignore_index=True)
    gap = (meters["meter_id"] == meters["meter_id"].iloc[0]) & (
        meters["interval_start"].between(pd.Timestamp("2026-07-15 16:15Z"), pd.Timestamp("2026-07-15 16:45Z"))
    )
    hole = meters["interval_start"].between(
        pd.Timestamp("2026-07-02 02:00Z"), pd.Timestamp("2026-07-02 02:30Z")
    )
    meters.loc[gap | hole, "kw"] = np.nan
    if revision > 1:
        meters.loc[~gap & (meters["interval_start"] > pd.Timestamp("2026-07-15 17:00Z")), "kw"] += 3.0
    return meters


def _settle(home: Path, revision: int) -> None:
    record = records.read_call(home, EVENT_ID)
    facts = call_facts(record)
    before = records.read_settlement(home, EVENT_ID).frames["sites"] if revision > 1 else None
    made = settle(facts, readings(home, revision), revision, before)
    records.write_settlement(home, EVENT_ID, made.frames, statements(made, facts))


def reseal(event_path: Path) -> None:
    """Seals of an event made to fit what now lies there, as who changes a record on purpose would."""
    folders = sorted(
        (path for path in event_path.iterdir() if (path / SEAL).exists()),
        key=lambda path: json.loads((path / SEAL).read_text())["position"],
    )
    before = None
    for folder in folders:
        content = json.loads((folder / SEAL).read_text())
        content["files"] = {name: digest(folder / name) for name in content["files"]}
        content["previous"] = before
        (folder / SEAL).write_text(json_text(content), encoding="utf-8")
        before = digest(folder / SEAL)
