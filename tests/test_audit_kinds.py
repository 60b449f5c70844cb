"""The settlement's audit on every preset and on random fleets: holds as settled, names one number that was changed."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from made_settlement import NEW_YORK, call, times, utc, worked_call, worked_readings
from random_settlements import random_case

from fleet.audit import settlement
from fleet.audit.findings import Findings
from fleet.audit.settled import Settled
from fleet.money import Prices
from fleet.records import CallRecord, SettlementRecord
from fleet.rules import PRESETS, SettlementRule
from fleet.schema import table
from fleet.settle import CallFacts, settle
from fleet.tables import stable

WITH_TANK = pd.DataFrame(
    {"meter_id": ["a", "t"], "site_id": ["a", "a"], "role": ["building", "tank"], "sign": [1, 1]}
)


def call_record(facts: CallFacts) -> CallRecord:
    """The call as its record would hold it."""
    prices = facts.prices
    settings = {
        "timezone": facts.timezone,
        "interval_minutes": facts.step_minutes,
        **{name: getattr(prices, name) for name in Prices.__dataclass_fields__},
    }
    past = facts.past_event_days
    noon = [
        {
            "site_id": row.site_id,
            "purpose": "real",
            "window_start": utc(f"{row.day:%Y-%m-%d} 12:00", facts.timezone).isoformat(),
        }
        for row in past.itertuples()
    ]
    frozen = {"holidays": facts.holidays, "plant_days": facts.plant_days, "meter_map": facts.meter_map}
    windows = facts.windows
    if "full_again_at" not in windows:
        windows = windows.assign(full_again_at=pd.Series(pd.NaT, windows.index, "datetime64[us, UTC]"))
    frames = {
        "request": facts.request.assign(direction=str(facts.direction)),
        "windows": windows,
        "intervals": facts.intervals,
    }
    rules = {site: f"{rule.name}-{site}" for site, rule in facts.rules.items()}
    told: dict[str, Any] = {
        "settings": settings,
        "rules": {
            "rules": {rules[site]: rule.model_dump(mode="json") for site, rule in facts.rules.items()},
            "site": rules,
        },
        "calls": {"calls": noon},
    }
    return CallRecord(Path("call"), facts.event_id, 1, frames, {}, frozen, told)


def audited(facts: CallFacts, frames: Mapping[str, pd.DataFrame]) -> list[str]:
    """Faults of a settlement's tables."""
    kept = {name: stable(frame, table("settlement", name)) for name, frame in frames.items()}
    record = SettlementRecord(Path("settlement"), facts.event_id, 1, kept, {})
    made, found = Settled(call_record(facts), record, "settlement-001", None, None), Findings()
    for rule in settlement.RULES:
        rule(made, found)
    return [str(fault) for fault in found.faults]


def a_case(rule: SettlementRule) -> tuple[CallFacts, pd.DataFrame]:
    """The worked case with a tank meter, weather, and a recovery that ends at 20 h."""
    starts = times(utc("2025-04-01"), utc("2025-07-11"), 60)
    local = starts.tz_convert(NEW_YORK)
    warm = 20.0 + 6.0 * np.sin((local.hour - 9) / 12 * np.pi) + local.day % 7
    building = worked_readings(421.3)
    hour = building["interval_start"].dt.tz_convert(NEW_YORK).dt.hour
    tank = building.assign(meter_id="t", kw=5.0 + hour)
    facts = worked_call(
        rule,
        meter_map=WITH_TANK,
        weather=pd.DataFrame({"station_id": "w", "interval_start": starts, "dry_bulb_c": warm}),
        stations={"a": "w"},
    )
    facts.windows["full_again_at"] = utc("2025-07-10 20:00")
    return facts, pd.concat([building, tank])


@pytest.mark.parametrize("name", [name for name in PRESETS if not name.endswith("_plant")])
def test_every_preset_holds(name: str) -> None:
    facts, frame = a_case(PRESETS[name])
    assert audited(facts, settle(facts, frame).frames) == []


@pytest.mark.parametrize(
    "fields",
    [
        {"performance_by": "hour", "cap_intervals": True, "floor_intervals": True},
        {"performance_by": "event", "cap_intervals": True},
        {"netting": "portfolio", "performance_decimals": 2},
        {"firm_level_kw": 300.0, "firm_level_charge_per_kwh": 6.0},
        {"recovery_netting": "until_midnight", "performance_decimals": 3},
        {"recovery_netting": "until_full", "netting": "portfolio"},
    ],
)
def test_every_way_of_paying_holds(fields: dict[str, object]) -> None:
    rule = PRESETS["ten_of_ten"].model_copy(update=fields)
    start, end = utc("2025-07-10 15:00"), utc("2025-07-10 18:00")
    past = pd.DataFrame({"site_id": ["b"], "day": [pd.Timestamp("2025-07-08")]})
    facts = call(
        {"a": rule, "b": rule, "c": rule},
        start,
        end,
        utc("2025-07-11"),
        past_event_days=past,
        committed_kw=140.7,
    )
    frame = pd.concat([worked_readings(kw, site) for kw, site in ((421.3, "a"), (350.0, "b"), (383.0, "c"))])
    facts.excused.update({"c": "a power cut"})  # type: ignore[attr-defined]
    result = settle(facts, frame)
    assert result.sites["state"].tolist() == ["final", "final", "excused"]
    assert audited(facts, result.frames) == []


def test_random_fleets_hold() -> None:
    for seed in (*range(12), 58):
        facts, frame = random_case(seed)
        assert audited(facts, settle(facts, frame).frames) == [], seed


CHANGES = {
    ("weather_matched_days", "days", "peak_dry_bulb_c"): 0.5,
    ("weather_matched_days", "day_intervals", "dry_bulb_c"): 99.0,
    ("weather_matched_days", "intervals", "dry_bulb_c"): 0.5,
    ("temperature_regression", "sites", "beyond_training_k"): 0.5,
    ("temperature_regression", "intervals", "baseline_kw"): 0.5,
    ("maximum_base_load", "intervals", "baseline_kw"): 0.5,
    ("ten_of_ten", "days", "window_charging_kw"): 0.5,
    ("ten_of_ten", "days", "day_kwh"): 0.5,
    ("ten_of_ten", "sites", "adjustment_charged"): 0.01,
    ("ten_of_ten", "sites", "paid_share"): 0.01,
    ("ten_of_ten", "sites", "recovery_until_midnight_kwh"): 0.5,
    ("ten_of_ten", "sites", "recovery_until_full_kwh"): 0.5,
    ("ten_of_ten", "sites", "netted_kwh"): 0.5,
}


@pytest.mark.parametrize(("rule", "of", "column"), CHANGES, ids=lambda part: str(part))
def test_one_changed_number_is_named(rule: str, of: str, column: str) -> None:
    facts, frame = a_case(PRESETS[rule])
    frames = settle(facts, frame).frames
    told = frames[of][column].to_numpy(dtype=np.float64)
    rows = np.flatnonzero(~np.isnan(told))
    told = told.copy()
    told[rows[len(rows) // 2]] += CHANGES[rule, of, column]
    faults = audited(facts, frames | {of: frames[of].assign(**{column: told})})
    assert faults, f"{of}.{column}"


def test_another_guard_or_reason_to_excuse_is_named() -> None:
    facts, frame = a_case(PRESETS["ten_of_ten"])
    frames = settle(facts, frame).frames
    assert frames["sites"]["guard"].tolist() == ["tank"]
    for change in ({"guard": "plant"}, {"why": "for no reason"}, {"method": "regression"}):
        assert audited(facts, frames | {"sites": frames["sites"].assign(**change)}), change
