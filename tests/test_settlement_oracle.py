"""A hundred random fleets with gaps, few days and mixed rules, against the settlement written in plain loops."""

from collections import defaultdict
from datetime import timedelta
from math import isclose, isnan
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
import pytest
from made_settlement import call, times, utc
from reference import settlement_oracle as oracle

from fleet.meters import QUALITIES
from fleet.rules import SettlementRule
from fleet.settle import CallFacts, settle
from fleet.settlement import Settlement
from sites.direction import Direction

STARTS = ("2025-07-10 14:00", "2025-07-12 15:00", "2025-11-02 00:30", "2025-03-10 09:00", "2025-11-06 22:00")
BACK = 20


def random_rule(rng: np.random.Generator, number: int) -> SettlementRule:
    pool = int(rng.integers(2, 11))
    picked = {
        "rank": ["recent", "highest", "middle", "nearest_weather"],
        "kind": ["like_days"] * 7 + ["temperature_regression", "maximum_base_load", "before_after"],
        "pre_charge_guard": ["off", "tank", "tank_or_plant"],
        "adjustment": ["none", "ratio", "ratio", "additive"],
        "when_too_few": ["before_after", "highest_event_days", "refuse"],
        "holidays": ["excluded", "as_weekend"],
        "day_classes": ["weekday_weekend", "weekday_weekend", "all_days"],
        "cap_form": ["difference", "ratio"],
        "cap_fraction": [None, 0.05, 0.2],
        "low_usage_fraction": [None, None, 0.8],
        "small_base_fraction": [0.0, 0.1, 0.9],
        "exclude_day_before_event": [False, True],
        "exclude_event_days": [True, True, False],
        "exclude_unusual_modes": [True, False],
        "after_h": [0.0, 2.0],
        "after_buffer_h": [0.0, 1.0],
        "before_buffer_h": [0.0, 1.0],
    }
    fields = {name: options[int(rng.integers(len(options)))] for name, options in picked.items()}
    if fields["kind"] == "temperature_regression" and fields["rank"] == "nearest_weather":
        fields["rank"] = "recent"
    return SettlementRule(
        name=f"rule_{number}",
        temperature_knots_c=(15.0, 22.0),
        look_back_days=int(rng.integers(8, BACK + 1)),
        pool_days=pool,
        take_days=int(rng.integers(1, pool + 1)),
        minimum_days=int(rng.integers(1, pool + 1)),
        adjustment_from_h=float(rng.integers(3, 6)),
        adjustment_to_h=float(rng.integers(0, 3)),
        **fields,
    )


def random_readings(rng: np.random.Generator, site: str, starts: pd.DatetimeIndex, step: int) -> pd.DataFrame:
    """A daily shape in whole kW (so that ties happen), gaps short and long, and readings already estimated."""
    count = len(starts)
    hour = starts.hour.to_numpy()
    kw = np.round(300 + 150 * np.sin((hour - 14) / 24 * 2 * np.pi) + rng.integers(-2, 3, count) * 20)
    kw = kw - (420 if rng.random() < 0.1 else 0)
    quality = np.array(["measured"] * count, dtype=object)
    quality[rng.random(count) < 0.002] = "edited"
    quality[rng.random(count) < 0.002] = "estimated_line"
    for _ in range(int(rng.integers(0, 9))):
        first = int(rng.integers(count))
        length = int(rng.integers(1, rng.choice([3, 180 // step + 2, 24 * 60 // step])))
        kw[first : first + length] = np.nan
    late = int(0.97 * count) + int(rng.integers(0, count // 40))
    if rng.random() < 0.4:
        kw[late : late + int(rng.integers(1, 5))] = np.nan
    quality[np.isnan(kw)] = "missing"
    frame = pd.DataFrame({"meter_id": site, "interval_start": starts, "kw": kw, "quality": quality})
    return frame[rng.random(count) > 0.001]


def random_tank(rng: np.random.Generator, meter: str, starts: pd.DatetimeIndex) -> pd.DataFrame:
    """A tank that charges now and then, its meter lost in places."""
    kw = np.round(rng.uniform(0.0, 80.0, len(starts)))
    first = int(rng.integers(len(starts)))
    kw[first : first + int(rng.integers(0, 40))] = np.nan
    return pd.DataFrame({"meter_id": meter, "interval_start": starts, "kw": kw, "quality": None})


def random_weather(rng: np.random.Generator, rows: pd.DatetimeIndex, day: pd.Timestamp) -> pd.DataFrame:
    """Two stations, hourly, with peaks that tie; hours lost on days other than the event's."""
    hours = pd.date_range(rows[0], rows[-1] + pd.Timedelta(hours=1), freq="h")
    frames = []
    for station in ("w0", "w1"):
        warm = np.round(20 + 8 * np.sin((hours.hour - 20) / 24 * 2 * np.pi) + rng.integers(-2, 3, len(hours)))
        frame = pd.DataFrame({"station_id": station, "interval_start": hours, "dry_bulb_c": warm})
        own = hours.tz_convert("America/New_York").tz_localize(None).normalize() == day
        frames.append(frame[own | (rng.random(len(hours)) > 0.004)])
    weather = pd.concat(frames, ignore_index=True)
    return weather.astype({"interval_start": "datetime64[us, UTC]"})


def random_case(seed: int) -> tuple[CallFacts, pd.DataFrame]:
    rng = np.random.default_rng(seed)
    step = int(rng.choice([30, 60])) if seed % 10 else 15
    text = STARTS[seed % len(STARTS)]
    step = 30 if "30" in text and step == 60 else step
    start = utc(text)
    end = start + pd.Timedelta(hours=int(rng.integers(1, 5)))
    day = pd.Timestamp(text).normalize()
    horizon_end = utc(str(pd.Timestamp(end.tz_convert("America/New_York").date()) + pd.Timedelta(days=2)))
    sites = [f"s{number}" for number in range(int(rng.integers(2, 5)))]
    pool = [random_rule(rng, number) for number in range(2)]
    rules = {site: pool[int(rng.integers(2))] for site in sites}
    unit = pd.Timedelta(minutes=step)
    own = {
        site: (start + unit * int(rng.integers(0, 2)), end - unit * int(rng.integers(0, 2))) for site in sites
    }
    own = {site: pair if pair[0] < pair[1] else (start, end) for site, pair in own.items()}
    back = [day - pd.Timedelta(days=number) for number in range(1, BACK + 1)]
    past = [(site, at) for site in sites for at in back if rng.random() < 0.2]
    modes = [
        (site, at, rng.choice(["usual", "tank_out", "recovery"]))
        for site in sites
        for at in back
        if rng.random() < 0.1
    ]
    rows = times(utc(str(day - pd.Timedelta(days=BACK))), horizon_end, step)
    tanks = [site for site in sites if rng.random() < 0.5]
    meters = [(site, site, "building") for site in sites] + [(f"{site}-t", site, "tank") for site in tanks]
    facts = call(
        rules,
        start,
        end,
        horizon_end,
        step,
        committed_kw=100.0,
        windows=own,
        direction=Direction.ABSORB if rng.random() < 0.4 else Direction.SHED,
        holidays=pd.DataFrame({"date": [at for at in back if rng.random() < 0.08]}),
        past_event_days=pd.DataFrame(past, columns=["site_id", "day"]),
        plant_days=pd.DataFrame(modes, columns=["site_id", "day", "mode"]),
        meter_map=pd.DataFrame(meters, columns=["meter_id", "site_id", "role"]).assign(sign=1),
        weather=random_weather(rng, rows, day),
        stations={site: f"w{number % 2}" for number, site in enumerate(sites)},
    )
    found = pd.concat(
        [random_readings(rng, site, rows, step) for site in sites]
        + [random_tank(rng, f"{site}-t", rows) for site in tanks]
    )
    return facts, found.sample(frac=1.0, random_state=seed)


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
    """degC of every site's station at each moment, an hour's value held through the hour."""
    hourly: dict = defaultdict(dict)
    for row in facts.weather.itertuples():
        hourly[row.station_id][row.interval_start.to_pydatetime()] = row.dry_bulb_c
    return {
        site: {
            at: hourly[station][at.replace(minute=0)]
            for at in grid
            if at.replace(minute=0) in hourly[station]
        }
        for site, station in facts.stations.items()
    }


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
