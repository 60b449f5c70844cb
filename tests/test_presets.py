"""Presets on the worked case by hand, regression against the full matrix of dummies, the guard against charging.

The worked case (composed) is in made_settlement.py; its arithmetic beside each number here is by hand.
"""

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from made_settlement import NEW_YORK, call, readings, times, utc, worked_call, worked_readings

from fleet.errors import Refused
from fleet.regression import components, fit
from fleet.rules import PRESETS, SettlementRule
from fleet.settle import Settlement, settle
from sites.direction import Direction

START, END = utc("2025-07-10 15:00"), utc("2025-07-10 18:00")
LAST_DAY = utc("2025-07-11")


def adjusted(result: Settlement) -> list[float]:
    rows = result.intervals
    return rows.loc[rows["in_event"], "adjusted_baseline_kw"].tolist()


def used_days(result: Settlement) -> set[str]:
    return set(result.days.loc[result.days["used"], "day"].dt.strftime("%m-%d"))


def test_high_four_of_five() -> None:
    result = settle(worked_call(PRESETS["high_four_of_five"]), worked_readings(421.3))
    # Of 07-09, 07-07, 07-03, 07-02, 07-01 the lowest, 07-02, is left out: means 495, 515, 475; window 398.75.
    assert used_days(result) == {"07-09", "07-07", "07-03", "07-01"}
    assert adjusted(result) == pytest.approx([495 + 22.55, 515 + 22.55, 475 + 22.55])


def test_middle_eight_of_ten_with_a_cap_symmetric_in_ratio() -> None:
    rule = PRESETS["middle_eight_of_ten"]
    result = settle(worked_call(rule), worked_readings(421.3))
    # Without 07-03 (highest) and 06-27 (lowest): 3795 / 8 at 15 h, 3060 / 8 in the window.
    assert used_days(result).isdisjoint({"07-03", "06-27"}) and len(used_days(result)) == 8
    assert adjusted(result)[0] == pytest.approx(474.375 * 421.3 / 382.5)
    low = settle(worked_call(rule), worked_readings(200.0)).sites.iloc[0]
    assert (low["adjustment_raw"], low["adjustment"]) == pytest.approx((200.0 / 382.5, 1 / 1.2))


def test_three_before_two_after() -> None:
    frame = worked_readings(383.0)
    local = frame["interval_start"].dt.tz_convert(NEW_YORK)
    on_day = local.dt.strftime("%Y-%m-%d") == "2025-07-10"
    for hour, kw in {14: 9000.0, 18: 9000.0, 19: 410.0, 20: 430.0}.items():
        frame.loc[on_day & (local.dt.hour == hour), "kw"] = kw
    result = settle(worked_call(PRESETS["three_before_two_after"]), frame)
    # 11 to 14 h at 383, 19 to 21 h at 410 and 430; the hours next to the event, at 9000, are left out.
    assert adjusted(result) == pytest.approx([(3 * 383 + 410 + 430) / 5] * 3)


@pytest.mark.parametrize(("direction", "level"), [(Direction.SHED, 511.0), (Direction.ABSORB, 440.0)])
def test_maximum_base_load_is_one_level(direction: Direction, level: float) -> None:
    rule = PRESETS["maximum_base_load"].model_copy(update={"look_back_days": 16})
    result = settle(worked_call(rule, direction=direction), worked_readings())
    # Highest reading of the five highest days: 530, 520, 510, 500, 495; lowest of the five lowest: 430 to 450.
    assert adjusted(result) == pytest.approx([level] * 3)
    assert result.sites["method"].tolist() == ["base_load"]


def weather(peaks: dict[str, float], zone: str = NEW_YORK) -> pd.DataFrame:
    """Hourly dry bulb: 10 degC, and the day's peak at 15 h."""
    starts = times(utc("2025-04-01"), LAST_DAY, 60)
    local = starts.tz_convert(zone)
    peak = pd.Series(local.strftime("%Y-%m-%d")).map(peaks).fillna(5.0).to_numpy()
    return pd.DataFrame(
        {
            "station_id": "w",
            "interval_start": starts,
            "dry_bulb_c": np.where(local.hour == 15, peak, np.minimum(peak, 10.0)),
        }
    )


PEAKS = {
    "2025-07-10": 30.0,
    "2025-07-09": 33.0,
    "2025-07-07": 31.0,
    "2025-07-03": 29.0,
    "2025-07-02": 26.0,
    "2025-07-01": 30.5,
    "2025-06-30": 27.0,
    "2025-06-26": 27.0,
}


def test_weather_matched_days_take_the_nearest_peaks_and_of_equals_the_recent() -> None:
    facts = worked_call(PRESETS["weather_matched_days"], weather=weather(PEAKS), stations={"a": "w"})
    result = settle(facts, worked_readings(421.3))
    # Distances: 0.5, 1, 1, then 3 for 07-09, 06-30 and 06-26, of which the most recent counts.
    assert used_days(result) == {"07-01", "07-07", "07-03", "07-09"}
    assert adjusted(result)[0] == pytest.approx(
        (490 + 480 + 510 + 500) / 4 + 421.3 - (395 + 390 + 410 + 400) / 4
    )
    days = result.days.set_index(result.days["day"].dt.strftime("%m-%d"))
    assert days.loc["07-02", "peak_dry_bulb_c"] == 26.0 and days.loc["07-02", "reason"] == "not_ranked"
    absorb = settle(
        worked_call(
            PRESETS["weather_matched_days"],
            weather=weather(PEAKS),
            stations={"a": "w"},
            direction=Direction.ABSORB,
        ),
        worked_readings(421.3),
    )
    assert used_days(absorb) == used_days(result)


def test_a_rule_that_needs_weather_without_any_is_refused() -> None:
    facts = worked_call(PRESETS["weather_matched_days"], stations={"a": "w"})
    with pytest.raises(Refused) as caught:
        settle(facts, worked_readings())
    assert str(caught.value) == (
        "weather, column dry_bulb_c: came no value of station w in 24 intervals of 2025-07-10; expected the dry "
        "bulb of the event's whole day: a settlement rule in use needs weather; add the rows to the fleet's "
        "weather table"
    )
    none = replace(facts, stations={})
    with pytest.raises(Refused, match=r"came no value of station \(none named\) in 24 intervals"):
        settle(none, worked_readings())


def test_days_whose_weather_is_not_known_stay_out() -> None:
    rows = weather(PEAKS)
    local = rows["interval_start"].dt.tz_convert(NEW_YORK)
    gap = (local.dt.strftime("%m-%d") == "07-01") & (local.dt.hour.isin([3, 4]))
    facts = worked_call(PRESETS["weather_matched_days"], weather=rows[~gap], stations={"a": "w"})
    result = settle(facts, worked_readings(421.3))
    assert used_days(result) == {"07-07", "07-03", "07-09", "06-30"}
    reason = result.days.set_index(result.days["day"].dt.strftime("%m-%d"))["reason"]
    assert reason["07-01"] == "missing_weather"


def test_the_regression_is_that_of_the_full_matrix_of_dummies() -> None:
    rng = np.random.default_rng(3)
    sites, days, slots, knots = 3, 30, 6, (10.0, 20.0)
    degrees = rng.uniform(0.0, 35.0, (sites, days, slots))
    kw = rng.uniform(200.0, 500.0, (sites, days, slots)) + 4.0 * degrees
    kw[rng.random(kw.shape) < 0.1] = np.nan
    used = rng.random((sites, days)) < 0.8
    weekday = np.arange(days) % 7
    found = fit(kw, used, weekday, degrees, knots)
    week, slot = np.repeat(np.arange(7), slots), np.tile(np.arange(slots), 7)
    at_c = rng.uniform(-5.0, 40.0, (sites, len(week)))
    told = found.at(week, slot, at_c)
    for site in range(sites):
        day, column = np.nonzero(used[site][:, None] & ~np.isnan(kw[site]))
        own = weekday[day] * slots + column
        dummies = (own[:, None] == np.arange(7 * slots)).astype(float)
        there = dummies.any(axis=0)
        parts = np.stack(
            [
                np.minimum(degrees[site], 10.0),
                np.clip(degrees[site] - 10.0, 0.0, 10.0),
                np.maximum(degrees[site] - 20.0, 0.0),
            ],
            axis=-1,
        )[day, column]
        solved = np.linalg.lstsq(np.hstack([dummies[:, there], parts]), kw[site][day, column], rcond=None)[0]
        level = np.full(7 * slots, np.nan)
        level[there] = solved[: there.sum()]
        stretch = np.stack(
            [np.minimum(at_c[site], 10), np.clip(at_c[site] - 10, 0, 10), np.maximum(at_c[site] - 20, 0)], -1
        )
        np.testing.assert_allclose(told[site], level + stretch @ solved[there.sum() :], rtol=1e-8)


def test_stretches_add_up_to_the_dry_bulb() -> None:
    degrees = np.array([-12.0, 4.0, 10.0, 15.0, 33.0])
    parts = components(degrees, (10.0, 20.0))
    np.testing.assert_allclose(parts.sum(axis=-1), degrees)
    assert parts[-1].tolist() == [10.0, 10.0, 13.0] and parts[0].tolist() == [-12.0, 0.0, 0.0]


def test_a_load_made_by_its_dry_bulb_is_found_and_the_reach_beyond_training_is_told() -> None:
    starts = times(utc("2025-05-01"), LAST_DAY, 60)
    local = starts.tz_convert(NEW_YORK)
    day = local.normalize().tz_localize(None)
    mild = np.random.default_rng(1).uniform(15.0, 27.0, len(starts))
    degrees = np.where(day == pd.Timestamp("2025-07-10"), 30.0, mild)
    kw = 300.0 + 5.0 * local.hour + 3.0 * (local.day_of_week == 3) + 8.0 * degrees
    event = (starts >= START) & (starts < END)
    rows = pd.DataFrame({"station_id": "w", "interval_start": starts, "dry_bulb_c": degrees})
    frame = readings("a", starts, kw - np.where(event, 90.0, 0.0))
    rule = PRESETS["temperature_regression"].model_copy(update={"temperature_knots_c": (20.0,)})
    result = settle(call({"a": rule}, START, END, LAST_DAY, weather=rows, stations={"a": "w"}), frame)
    site = result.sites.iloc[0]
    assert (site["method"], site["state"]) == ("regression", "final")
    assert site["delivered_kwh"] == pytest.approx(270.0, rel=1e-9)
    highest = degrees[(day < pd.Timestamp("2025-07-10")) & (local.day_of_week < 5)].max()
    assert site["beyond_training_k"] == pytest.approx(30.0 - highest, abs=0.2)


def test_early_charging_lifts_no_baseline_where_the_tank_is_metered() -> None:
    """The tank draws 100 kW in the window of the event day; the building's meter holds it."""
    role = {"meter_id": ["a", "t"], "site_id": ["a", "a"], "role": ["building", "tank"], "sign": [1, 1]}
    base = worked_readings(383.0)
    tank = base.assign(meter_id="t", kw=0.0)
    local = base["interval_start"].dt.tz_convert(NEW_YORK)
    early = (local.dt.strftime("%Y-%m-%d") == "2025-07-10") & local.dt.hour.isin([11, 12, 13])
    facts = worked_call(PRESETS["ten_of_ten"], meter_map=pd.DataFrame(role))
    charged = pd.concat(
        [base.assign(kw=base["kw"] + 100.0 * early), tank.assign(kw=np.where(early, 100.0, 0.0))]
    )
    plain = settle(facts, pd.concat([base, tank])).sites.iloc[0]
    guarded = settle(facts, charged).sites.iloc[0]
    assert guarded["delivered_kwh"] == pytest.approx(plain["delivered_kwh"])
    assert (guarded["guard"], guarded["adjustment"]) == ("tank", pytest.approx(1.0))
    # Both numbers are shown: 483 / 383 would have been capped at 1.2 and paid for 285 kWh more.
    assert guarded["adjustment_charged"] == pytest.approx(1.2)
    off = worked_call(
        PRESETS["ten_of_ten"].model_copy(update={"pre_charge_guard": "off"}), meter_map=pd.DataFrame(role)
    )
    windfall = settle(off, charged).sites.iloc[0]
    assert windfall["delivered_kwh"] - plain["delivered_kwh"] == pytest.approx(0.2 * (475.5 + 495.5 + 455.5))
    assert (windfall["guard"], np.isnan(windfall["adjustment_charged"])) == ("none", True)


def test_without_a_tank_meter_the_plants_power_is_taken_out_and_a_lost_reading_leaves_no_adjustment() -> None:
    role = {"meter_id": ["a", "p"], "site_id": ["a", "a"], "role": ["building", "plant"], "sign": [1, 1]}
    base = worked_readings(430.0)
    local = base["interval_start"].dt.tz_convert(NEW_YORK)
    plant = base.assign(meter_id="p", kw=100.0)
    early = (local.dt.strftime("%Y-%m-%d") == "2025-07-10") & (local.dt.hour == 12)
    facts = worked_call(PRESETS["ten_of_ten"], meter_map=pd.DataFrame(role))
    site = settle(facts, pd.concat([base, plant])).sites.iloc[0]
    assert site["guard"] == "plant"
    assert site["adjustment"] == pytest.approx((430.0 - 100.0) / (383.0 - 100.0))
    regressed = PRESETS["temperature_regression"].model_copy(update={"minimum_days": 5})
    warm = {"weather": weather(PEAKS), "stations": {"a": "w"}, "meter_map": pd.DataFrame(role)}
    assert settle(worked_call(regressed, **warm), pd.concat([base, plant])).sites["guard"][0] == "none"
    lost = settle(facts, pd.concat([base, plant[~early]])).sites.iloc[0]
    assert (lost["adjustment_kind"], lost["state"]) == ("none", "provisional")


def test_a_day_with_the_tank_out_pays_no_windfall() -> None:
    frame = worked_readings(383.0)
    local = frame["interval_start"].dt.tz_convert(NEW_YORK)
    broken = (local.dt.strftime("%Y-%m-%d") == "2025-07-02") & local.dt.hour.isin([15, 16, 17])
    frame.loc[broken, "kw"] = 900.0
    rule = PRESETS["high_five_of_ten"]
    out = pd.DataFrame({"site_id": ["a"], "day": [pd.Timestamp("2025-07-02")], "mode": ["tank_out"]})
    told = settle(worked_call(rule, plant_days=out), frame)
    untold = settle(worked_call(rule), frame)
    assert "07-02" in used_days(untold) and "07-02" not in used_days(told)
    assert told.days.loc[told.days["mode"] == "tank_out", "reason"].tolist() == ["outage"]
    assert told.sites["delivered_kwh"][0] < untold.sites["delivered_kwh"][0] - 100.0


@pytest.mark.parametrize("name", [name for name in PRESETS if not name.endswith("_plant")])
def test_every_preset_mirrors_from_shed_to_absorb(name: str) -> None:
    rule: SettlementRule = PRESETS[name].model_copy(update={"cap_form": "difference"})
    frame = worked_readings(400.0)
    facts = {"weather": weather(PEAKS), "stations": {"a": "w"}}
    shed = settle(worked_call(rule, **facts), frame).sites.iloc[0]
    turned = settle(
        worked_call(rule, direction=Direction.ABSORB, **facts), frame.assign(kw=-frame["kw"])
    ).sites.iloc[0]
    assert turned["method"] == shed["method"]
    # A negative load is adjusted by addition; only rules whose adjustment is not a ratio mirror to the last digit.
    if rule.adjustment != "ratio":
        for column in ("delivered_kwh", "performance_factor", "recovery_until_midnight_kwh"):
            assert float(turned[column]) == pytest.approx(float(shed[column]))
