"""Random small fleets to settle: gaps, ties, clock changes, exports, few days, tank meters, two weather stations."""

import numpy as np
import pandas as pd
from made_settlement import call, times, utc

from fleet.rules import SettlementRule
from fleet.settle import CallFacts
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
        "recovery_netting": ["none", "none", "until_midnight"],
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
