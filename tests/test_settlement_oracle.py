"""A hundred random fleets with gaps, few days and mixed rules, against the settlement written in plain loops."""

from collections import defaultdict
from datetime import timedelta
from math import isclose, isnan
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
import pytest
from made_settlement import utc
from random_settlements import random_case
from reference import settlement_oracle as oracle

from fleet.meters import QUALITIES
from fleet.settle import CallFacts, settle
from fleet.settlement import Settlement


def plain(facts: CallFacts, readings: pd.DataFrame) -> dict:
    """The case in plain values."""
    back = max(4, *(rule.look_back_days for rule in facts.rules.values()))
    zone = ZoneInfo(facts.timezone)
    start = facts.request["interval_start"].min().to_pydatetime()
    end = facts.request["interval_end"].max().to_pydatetime()
    first = start.astimezone(zone).date() - timedelta(days=back)
    since = utc(str(first)).to_pydatetime()
    unit = timedelta(minutes=facts.step_minutes)
    horizon_end = facts.intervals["interval_start"].max().to_pydatetime() + unit
    grid, at = [], since
    after = max(timedelta(hours=rule.after_h + rule.after_buffer_h) for rule in facts.rules.values())
    while at < max(horizon_end, end + after):
        grid.append(at)
        at += unit
    series: dict = defaultdict(dict)
    moments = readings["interval_start"].dt.to_pydatetime() if len(readings) else []
    columns = (list(moments), *(readings[name].tolist() for name in ("meter_id", "kw", "quality")))
    for moment, site, kw, quality in zip(*columns):
        series[site][moment] = (None, "missing") if np.isnan(kw) else (kw, quality or "measured")
    inside = set(grid)
    case: dict = {
        "timezone": facts.timezone,
        "step_minutes": facts.step_minutes,
        "direction": str(facts.direction),
        "event_start": start,
        "event_end": end,
        "horizon_end": horizon_end,
        "grid": grid,
        "first_day": first,
        "series": {site: {at: v for at, v in series[site].items() if at in inside} for site in facts.rules},
        "rules": {site: rule.model_dump() for site, rule in facts.rules.items()},
        "holidays": {at.date() for at in facts.holidays["date"]},
        "windows": {
            r.site_id: (r.window_start.to_pydatetime(), r.window_end.to_pydatetime())
            for r in facts.windows.itertuples()
        },
        "committed": dict.fromkeys(facts.rules, 100.0),
        "charging": {
            meter.removesuffix("-t"): {at: kw for at, (kw, _) in series[meter].items() if kw is not None}
            for meter in facts.meter_map["meter_id"]
            if meter.endswith("-t")
        },
        "dry_bulb": dry_bulb(facts, grid),
        "fits": {},
        "past": {site: set() for site in facts.rules},
        "modes": {site: {} for site in facts.rules},
    }
    for row in facts.past_event_days.itertuples():
        case["past"][row.site_id].add(row.day.date())
    for row in facts.plant_days.itertuples():
        case["modes"][row.site_id][row.day.date()] = row.mode
    case["local"] = {at: oracle.local_time(case, at) for at in grid}
    by_slot: dict = defaultdict(list)
    for at in grid:
        by_slot[oracle.local(case, at)].append(at)
    return {**case, "by_slot": by_slot}


def dry_bulb(facts: CallFacts, grid: list) -> dict:
    """degC at each moment of the sites whose rule asks for it, an hour's value held through the hour."""
    hourly: dict = defaultdict(dict)
    for row in facts.weather.itertuples():
        hourly[row.station_id][row.interval_start.to_pydatetime()] = row.dry_bulb_c
    asking = {site for site, rule in facts.rules.items() if rule.needs_weather}
    hours = [(at, at.replace(minute=0)) for at in grid]
    held = {
        station: {at: hourly[station][hour] for at, hour in hours if hour in hourly[station]}
        for station in {facts.stations[site] for site in asking}
    }
    return {site: held[facts.stations[site]] for site in asking}


def same(got: float, wanted: float | None) -> bool:
    return isnan(got) if wanted is None else isclose(got, wanted, rel_tol=1e-9, abs_tol=1e-9)


def compare(result: Settlement, case: dict, site: str) -> str:
    wanted = oracle.settle_site(case, site)
    row = result.sites.set_index("site_id").loc[site]
    for name in ("method", "state"):
        assert row[name] == wanted[name], name
    assert row["adjustment_kind"] == wanted["kind"]
    assert same(row["adjustment"], wanted["adjustment"])
    assert same(row["delivered_kwh"], wanted["delivered_kwh"])
    assert same(row["adjustment_charged"], wanted["charged"])
    assert same(row["beyond_training_k"], wanted["beyond"])
    assert same(row["recovery_until_midnight_kwh"], wanted["until_midnight"])
    assert same(row["netted_kwh"], wanted["netted"])
    assert same(row["performance_factor"], wanted["factor"])
    assert (row["guard"] == "tank") == (wanted["charged"] is not None)
    assert same(row["committed_kwh"], wanted["committed_kwh"])
    days = result.days[(result.days["site_id"] == site) & (result.days["reason"] != "event_day")]
    assert dict(zip(days["day"].dt.date, days["reason"])) == wanted["days"]
    rows = result.intervals[result.intervals["site_id"] == site]
    assert len(rows) == len(wanted["rows"])
    names = ("baseline_kw", "adjusted_baseline_kw", "metered_kw", "delivered_kw")
    for found in rows.to_dict("records"):
        values = wanted["rows"][found["interval_start"].to_pydatetime()]
        for name, value in zip(names, values):
            assert same(found[name], value), (found["interval_start"], name)
        assert found["quality"] == values[4]
    return f"{wanted['method']} {wanted['state']} {wanted['kind']}"


def walk(seeds: range) -> tuple[dict[str, int], set[str], set[str]]:
    """Compares every site of these cases; what was met on the way: ways through, qualities, reasons."""
    seen: dict[str, int] = defaultdict(int)
    qualities: set[str] = set()
    reasons: set[str] = set()
    for seed in seeds:
        facts, readings = random_case(seed)
        result = settle(facts, readings)
        case = plain(facts, readings)
        for site in sorted(facts.rules):
            seen[compare(result, case, site)] += 1
        qualities |= set(result.intervals["quality"])
        reasons |= set(result.days["reason"])
    return seen, qualities, reasons


@pytest.mark.slow
def test_a_thousand_random_fleets_agree_with_the_plain_settlement() -> None:
    seen, _, _ = walk(range(100, 1_100))
    assert sum(seen.values()) > 2_000


def test_random_fleets_agree_with_the_plain_settlement() -> None:
    seen, qualities, reasons = walk(range(100))
    # The comparison means something only where every way through was walked.
    words = {word for key in seen for word in key.split()}
    assert {"like_days", "event_days", "before_after", "none", "ratio", "additive"} <= words
    assert {"regression", "base_load"} <= words
    assert {"final", "provisional", "no_baseline", "meter_missing"} <= words
    assert qualities == set(QUALITIES)
    assert {"used", "not_ranked", "enough_days", "low_usage", "too_few_days", "missing_data"} <= reasons
    assert "missing_weather" in reasons
    assert {"holiday", "event_past", "day_before_event", "outage", "other_day_type"} <= reasons
