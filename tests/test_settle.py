"""Settlement from facts and readings: worked case, clock change, gaps, states, postings, mirror, order of rows."""

from decimal import Decimal

import numpy as np
import pandas as pd
import pytest
from made_settlement import call, readings, times, utc, worked_call, worked_readings

from fleet.errors import FleetError
from fleet.money import Prices
from fleet.rules import PRESETS, SettlementRule
from fleet.schema import table
from fleet.settle import Settlement, settle
from fleet.tables import stable, write_parquet
from sites.direction import Direction

TEN, PLAIN = PRESETS["ten_of_ten"], SettlementRule(name="plain")
START, END = utc("2025-07-10 15:00"), utc("2025-07-10 18:00")


def event_rows(result: Settlement, site: str = "a") -> pd.DataFrame:
    rows = result.intervals
    return rows[(rows["site_id"] == site) & rows["in_event"]]


def the_site(result: Settlement, site: str = "a") -> pd.Series:
    return result.sites.set_index("site_id").loc[site]


def with_value(frame: pd.DataFrame, at: pd.Timestamp, kw: float, quality: str = "measured") -> pd.DataFrame:
    changed = frame.copy()
    changed.loc[changed["interval_start"] == at, ["kw", "quality"]] = [kw, quality]
    return changed


def test_the_worked_case_from_meter_to_money() -> None:
    result = settle(worked_call(TEN), worked_readings(421.3))
    rows, site = event_rows(result), the_site(result)
    assert rows["baseline_kw"].tolist() == pytest.approx([475.5, 495.5, 455.5])
    assert rows["adjusted_baseline_kw"].tolist() == pytest.approx([523.05, 545.05, 501.05])
    assert rows["delivered_kw"].tolist() == pytest.approx([193.05, 205.05, 181.05])
    assert site["delivered_kwh"] == pytest.approx(579.15)
    assert site["performance_factor"] == pytest.approx(579.15 / 450.0)
    assert (site["state"], site["method"], site["adjustment_kind"]) == ("final", "like_days", "ratio")
    # 0.5 x 450 kWh in full, 0.2 x 579.15 kWh, no penalty.
    assert site["capacity_payment"] == Decimal("225.00") and site["energy_payment"] == Decimal("115.83")
    assert site["penalty"] == Decimal("0.00") and site["total"] == Decimal("340.83")
    assert result.summary["fleet_delivered_kwh"] == pytest.approx(579.15)
    own = result.days[result.days["reason"] == "event_day"]
    assert own["window_base_kw"].tolist() == pytest.approx([421.3])


def test_the_trace_holds_what_the_baseline_was_made_of() -> None:
    result = settle(worked_call(TEN), worked_readings(421.3))
    used = result.days.loc[result.days["used"], "day"]
    trace = result.day_intervals[result.day_intervals["day"].isin(used)]
    by_slot = trace.groupby("slot")["kw"].mean()
    assert by_slot.loc[[15, 16, 17]].tolist() == pytest.approx([475.5, 495.5, 455.5])
    assert by_slot.loc[[11, 12, 13]].mean() == pytest.approx(383.0)


def test_tables_are_the_ones_of_the_table_of_columns(tmp_path: object) -> None:
    result = settle(worked_call(TEN), worked_readings(421.3))
    for name, frame in result.frames.items():
        columns = table("settlement", name)
        assert list(frame.columns) == list(columns.names)
        write_parquet(frame, tmp_path / f"{name}.parquet", columns)  # type: ignore[operator]
        for column in columns.columns:
            if column.choices:
                assert set(frame[column.name]) <= set(column.choices), column.name
        assert len(stable(frame, columns)) == len(frame)


def test_a_meter_equal_to_its_baseline_delivers_nothing() -> None:
    frame = worked_readings(383.0)
    for hour, kw in zip((15, 16, 17), (475.5, 495.5, 455.5)):
        frame = with_value(frame, utc(f"2025-07-10 {hour}:00"), kw)
    site = the_site(settle(worked_call(TEN), frame))
    assert site["delivered_kwh"] == pytest.approx(0.0, abs=1e-9)
    assert site["performance_factor"] == pytest.approx(0.0, abs=1e-9)
    # Nothing earned, 0.3 x 450 kWh to pay.
    assert (site["capacity_payment"], site["total"]) == (Decimal("0.00"), Decimal("-135.00"))


@pytest.mark.parametrize("name", ["plain", "high"])
def test_absorb_is_the_mirror_of_shed(name: str) -> None:
    rule = SettlementRule(name="high", rank="highest", take_days=5, adjustment="additive", cap_fraction=0.05)
    rule = PLAIN if name == "plain" else rule
    frame = worked_readings(500.0)
    shed = settle(worked_call(rule), frame)
    mirrored = settle(worked_call(rule, direction=Direction.ABSORB), frame.assign(kw=-frame["kw"]))
    for column in ("delivered_kwh", "performance_factor", "total"):
        assert float(the_site(mirrored)[column]) == pytest.approx(float(the_site(shed)[column]))
    assert event_rows(mirrored)["delivered_kw"].tolist() == pytest.approx(
        event_rows(shed)["delivered_kw"].tolist()
    )
    # On the same meter the two directions are each other's negative.
    other = settle(worked_call(PLAIN, direction=Direction.ABSORB), frame)
    plain = settle(worked_call(PLAIN), frame)
    assert the_site(other)["delivered_kwh"] == pytest.approx(-the_site(plain)["delivered_kwh"])


def test_the_order_of_rows_changes_nothing() -> None:
    frame = pd.concat([worked_readings(421.3, "b"), worked_readings(390.0, "a"), worked_readings(300.0, "c")])
    rules = {"c": PLAIN, "a": TEN, "b": TEN}
    facts = call(rules, START, END, utc("2025-07-11"))
    one = settle(facts, frame)
    mixed = call(
        dict(reversed(rules.items())),
        START,
        END,
        utc("2025-07-11"),
        windows=None,
        request=facts.request.iloc[::-1],
        intervals=facts.intervals.sample(frac=1.0, random_state=1),
    )
    two = settle(mixed, frame.sample(frac=1.0, random_state=2))
    for name, frame_one in one.frames.items():
        pd.testing.assert_frame_equal(frame_one, two.frames[name])


def test_an_event_over_the_autumn_change_lasts_four_hours() -> None:
    start, end = utc("2025-11-02 00:30"), utc("2025-11-02 03:30")
    assert (end - start) == pd.Timedelta(hours=4)
    rule = SettlementRule(name="own", day_classes="all_days")
    facts = call({"a": rule}, start, end, utc("2025-11-03"), 15, committed_kw=40.0)
    starts = times(utc("2025-10-10"), utc("2025-11-03"), 15)
    local = starts.tz_convert("America/New_York")
    kw = 100.0 + local.hour.to_numpy() * 10.0
    event = (starts >= start) & (starts < end)
    result = settle(facts, readings("a", starts, np.where(event, 60.0, kw)))
    rows = event_rows(result)
    # Both one o'clock hours are held against the one hour of the like days.
    assert rows["baseline_kw"].tolist() == [100.0] * 2 + [110.0] * 8 + [120.0] * 4 + [130.0] * 2
    assert len(rows) == 16
    assert the_site(result)["delivered_kwh"] == pytest.approx((40 * 2 + 50 * 8 + 60 * 4 + 70 * 2) / 4)
    assert the_site(result)["committed_kwh"] == pytest.approx(160.0)


def test_a_day_of_23_hours_among_the_like_days_skips_the_hour() -> None:
    start, end = utc("2025-03-12 01:00"), utc("2025-03-12 04:00")
    rule = SettlementRule(name="own", day_classes="all_days", pool_days=5, take_days=5)
    facts = call({"a": rule}, start, end, utc("2025-03-13"))
    starts = times(utc("2025-03-01"), utc("2025-03-13"), 60)
    local = starts.tz_convert("America/New_York")
    result = settle(facts, readings("a", starts, local.day.to_numpy() * 10.0))
    days = result.days.set_index("day")["reason"]
    assert days.loc["2025-03-09"] == "used"
    # Days 7 to 11; at two o'clock the 9th has no such hour.
    assert event_rows(result)["baseline_kw"].tolist() == pytest.approx([90.0, 90.0, 90.0])
    assert event_rows(result)["delivered_kw"].tolist() == pytest.approx([-30.0] * 3)
    slots = result.day_intervals[result.day_intervals["day"] == "2025-03-09"]["slot"].tolist()
    assert len(slots) == 23 and 2 not in slots


def quarter_hours(
    kw_before: float = 500.0, kw_event: float = 340.0
) -> tuple[pd.DataFrame, dict[str, object]]:
    starts = times(utc("2025-06-20"), utc("2025-07-11"), 15)
    kw = np.where((starts >= START) & (starts < END), kw_event, kw_before)
    facts = {
        "rules": {"a": PLAIN},
        "start": START,
        "end": END,
        "horizon_end": utc("2025-07-11"),
        "step_minutes": 15,
    }
    return readings("a", starts, kw), facts


def test_no_line_is_drawn_over_the_events_start() -> None:
    frame, facts = quarter_hours()
    for at in ("14:45", "15:00", "15:15"):
        frame = with_value(frame, utc(f"2025-07-10 {at}"), np.nan)
    result = settle(call(**facts), frame)  # type: ignore[arg-type]
    rows = event_rows(result).head(3)
    assert rows["metered_kw"].isna().tolist() == [True, True, False]
    assert rows["quality"].tolist() == ["missing", "missing", "measured"]
    assert rows["delivered_kw"].isna().tolist() == [True, True, False]
    site = the_site(result)
    assert site["state"] == "provisional"
    # Ten of twelve quarter hours at 160 kW; the other two add nothing.
    assert site["delivered_kwh"] == pytest.approx(160.0 * 10 / 4)
    assert result.fleet["sites_missing"].tolist() == [1, 1] + [0] * 10
    assert result.fleet["delivered_kw"].tolist() == pytest.approx([0.0, 0.0] + [160.0] * 10)


@pytest.mark.parametrize("edge", ["15:00", "16:00", "17:00", "18:00"])
def test_no_line_is_drawn_over_an_edge_of_the_event_or_the_own_window(edge: str) -> None:
    frame, facts = quarter_hours()
    at = utc(f"2025-07-10 {edge}")
    gap = with_value(with_value(frame, at - pd.Timedelta(minutes=15), np.nan), at, np.nan)
    own = {"a": (utc("2025-07-10 16:00"), utc("2025-07-10 17:00"))}
    rows = settle(call(**facts, windows=own), gap).intervals.set_index("interval_start")  # type: ignore[arg-type]
    # At 18:00 the event is over: a like day may stand in, a line may not.
    assert rows.loc[at, "quality"] == ("estimated_like_day" if edge == "18:00" else "missing")
    if edge != "15:00":
        assert rows.loc[at - pd.Timedelta(minutes=15), "quality"] == "missing"


def test_an_estimate_in_the_event_counts_only_against_the_site() -> None:
    frame, facts = quarter_hours()
    gap = with_value(frame, utc("2025-07-10 16:00"), np.nan)
    result = settle(call(**facts), gap)  # type: ignore[arg-type]
    row = event_rows(result).set_index("interval_start").loc[utc("2025-07-10 16:00")]
    assert (row["metered_kw"], row["quality"]) == (340.0, "estimated_line") and np.isnan(row["delivered_kw"])
    assert the_site(result)["delivered_kwh"] == pytest.approx(160.0 * 11 / 4)
    assert the_site(result)["state"] == "provisional"
    # The meter operator's own estimate above the baseline lowers what was delivered.
    worse = with_value(frame, utc("2025-07-10 16:00"), 540.0, "estimated_like_day")
    result = settle(call(**facts), worse)  # type: ignore[arg-type]
    assert the_site(result)["delivered_kwh"] == pytest.approx((160.0 * 11 - 40.0) / 4)
    assert the_site(result)["state"] == "provisional"


def test_an_estimate_on_a_baseline_day_lifts_no_baseline() -> None:
    frame = worked_readings(383.0)
    high = with_value(frame, utc("2025-07-09 16:00"), 5000.0, "estimated_like_day")
    result = settle(worked_call(PLAIN), high)
    assert result.days.set_index("day").loc["2025-07-09", "reason"] == "missing_data"
    assert event_rows(result)["baseline_kw"].max() < 500.0


def test_an_estimate_in_the_adjustment_window_takes_the_adjustment_away() -> None:
    frame = with_value(worked_readings(421.3), utc("2025-07-10 12:00"), 421.3, "estimated_line")
    site = the_site(settle(worked_call(TEN), frame))
    assert (site["state"], site["adjustment_kind"], site["adjustment"]) == ("provisional", "none", 1.0)
    assert site["delivered_kwh"] == pytest.approx(145.5 + 155.5 + 135.5)


def test_states_of_a_site_without_a_meter_and_of_one_without_history() -> None:
    refuse = SettlementRule(name="own", when_too_few="refuse")
    facts = call(
        {"a": TEN, "b": TEN, "c": refuse}, START, END, utc("2025-07-11"), fleet_site_ids=("a", "b", "c")
    )
    short = worked_readings(421.3, "c")
    short = short[short["interval_start"] >= utc("2025-07-09")]
    result = settle(facts, pd.concat([worked_readings(421.3, "a"), short]))
    assert result.sites["state"].tolist() == ["final", "meter_missing", "no_baseline"]
    for site in ("b", "c"):
        row = the_site(result, site)
        assert np.isnan(row["delivered_kwh"]) and np.isnan(row["performance_factor"])
        assert row["total"] == Decimal("0.00") and row["committed_kwh"] == 450.0
    assert result.fleet["sites_settled"].tolist() == [1] * 3
    assert result.fleet["sites_missing"].tolist() == [2] * 3


def test_too_few_days_use_the_meter_before() -> None:
    frame = worked_readings(421.3)
    frame = frame[frame["interval_start"] >= utc("2025-07-09")]
    result = settle(worked_call(TEN), frame)
    site = the_site(result)
    # The hour before the event stands at 200 kW in this case.
    assert site["method"] == "before_after"
    assert event_rows(result)["adjusted_baseline_kw"].tolist() == [200.0] * 3
    assert site["delivered_kwh"] == pytest.approx(600.0 - 990.0)
    assert (site["capacity_payment"], site["energy_payment"]) == (Decimal("0.00"), Decimal("0.00"))


def test_only_the_own_window_is_paid_and_the_fleet_nets_the_rebound() -> None:
    frame, facts = quarter_hours()
    late = (utc("2025-07-10 15:00"), utc("2025-07-10 17:00"))
    frame.loc[(frame["interval_start"] >= late[1]) & (frame["interval_start"] < END), "kw"] = 560.0
    result = settle(call(**facts, windows={"a": late}), frame)  # type: ignore[arg-type]
    assert the_site(result)["delivered_kwh"] == pytest.approx(320.0)
    assert the_site(result)["committed_kwh"] == pytest.approx(300.0)
    assert result.fleet["delivered_kw"].tolist() == pytest.approx([160.0] * 8 + [-60.0] * 4)
    assert result.intervals.loc[~result.intervals["in_event"], "in_window"].sum() == 0


def test_the_delivery_factor_weighs_the_fleet_and_not_the_site() -> None:
    facts = worked_call(TEN)
    facts = call({"a": TEN}, START, END, utc("2025-07-11"), windows=None)
    weighed = call({"a": TEN}, START, END, utc("2025-07-11"))
    object.__setattr__(weighed, "windows", facts.windows.assign(delivery_factor=1.1))
    one, two = settle(facts, worked_readings(400.0)), settle(weighed, worked_readings(400.0))
    assert two.fleet["delivered_kw"].tolist() == pytest.approx((one.fleet["delivered_kw"] * 1.1).tolist())
    assert two.fleet["committed_kw"].tolist() == pytest.approx([165.0] * 3)
    assert the_site(two)["delivered_kwh"] == the_site(one)["delivered_kwh"]


def test_the_plant_is_settled_on_its_sub_meter() -> None:
    facts = worked_call(
        PRESETS["ten_of_ten_plant"],
        meter_map=pd.DataFrame(
            {"meter_id": ["m", "p"], "site_id": ["a", "a"], "role": ["building", "plant"], "sign": [1, 1]}
        ),
    )
    plant = worked_readings(421.3, "p")
    both = pd.concat([worked_readings(900.0, "m").assign(kw=lambda f: f["kw"] + 50.0), plant])
    site = the_site(settle(facts, both))
    # Additive by default: + 38.3 kW in each hour.
    assert (site["stream"], site["adjustment_kind"]) == ("plant", "additive")
    assert site["adjustment"] == pytest.approx(38.3)
    assert site["delivered_kwh"] == pytest.approx(436.5 + 3 * 38.3)


def test_a_corrected_meter_posts_only_the_difference() -> None:
    # 100 kWh at $1, then the meter is corrected by 4 kWh: $100.00, $96.00, posting -$4.00.
    frame, facts = quarter_hours(500.0, 500.0 - 100.0 / 3.0)
    facts["prices"] = Prices("USD", 0.0, 1.0, 0.0)
    first = settle(call(**facts), frame, 1)  # type: ignore[arg-type]
    assert the_site(first)["total"] == Decimal("100.00")
    assert first.postings["amount"].tolist() == [Decimal("100.00")]
    assert first.postings["from_revision"].isna().all()
    corrected = frame.copy()
    corrected.loc[(frame["interval_start"] >= START) & (frame["interval_start"] < END), "kw"] += 4.0 / 3.0
    second = settle(call(**facts), corrected, 2, first.sites)  # type: ignore[arg-type]
    assert the_site(second)["total"] == Decimal("96.00")
    assert second.postings[["from_revision", "to_revision", "amount"]].values.tolist() == [
        [1, 2, Decimal("-4.00")]
    ]
    third = settle(call(**facts), corrected, 3, second.sites)  # type: ignore[arg-type]
    assert third.postings["amount"].tolist() == [Decimal("0.00")]


def test_a_site_no_longer_called_is_posted_back() -> None:
    frame = pd.concat([worked_readings(421.3, "a"), worked_readings(421.3, "b")])
    known = {"fleet_site_ids": ("a", "b")}
    first = settle(call({"a": TEN, "b": TEN}, START, END, utc("2025-07-11"), **known), frame)
    second = settle(call({"a": TEN}, START, END, utc("2025-07-11"), **known), frame, 2, first.sites)
    total = the_site(first, "b")["total"]
    assert second.postings["site_id"].tolist() == ["a", "b"]
    assert second.postings["amount"].tolist() == [Decimal("0.00"), -total]


def test_an_incomplete_call_is_refused_with_what_is_missing() -> None:
    facts = worked_call(TEN)
    object.__setattr__(facts, "rules", {})
    with pytest.raises(FleetError, match="event e1: no settlement rule for a; freeze one each"):
        settle(facts, worked_readings())
    facts = worked_call(TEN)
    object.__setattr__(facts, "intervals", facts.intervals.iloc[1:])
    with pytest.raises(FleetError) as caught:
        settle(facts, worked_readings())
    assert str(caught.value) == (
        "event e1: intervals must hold every called site and interval from 2025-07-10T19:00:00.000000Z to "
        "2025-07-11T04:00:00.000000Z once; 1 of 9 are missing, 0 too many"
    )
    facts = worked_call(TEN)
    object.__setattr__(facts, "request", facts.request.drop(index=1))
    with pytest.raises(
        FleetError, match="request has 2 rows; expected each of the 3 intervals of 60 minutes"
    ):
        settle(facts, worked_readings())


def test_early_charging_after_notice_is_pointed_out() -> None:
    early = np.datetime64("2025-07-10T12:00", "us")
    # The made-up meter stands still at night, which is pointed out too.
    still = "one value unchanged for 4 h or longer on the event day: a"
    result = settle(worked_call(TEN, called_at=early), worked_readings(430.0))
    assert result.notes == (
        "load in the adjustment window more than 10 % above like days after notice; look for early charging of "
        "the tank: a",
        still,
    )
    assert settle(worked_call(TEN, called_at=early), worked_readings(420.0)).notes == (still,)
    after = np.datetime64("2025-07-10T18:30", "us")
    assert settle(worked_call(TEN, called_at=after), worked_readings(430.0)).notes == (still,)


def test_the_day_after_of_another_class_has_no_baseline() -> None:
    friday = (utc("2025-07-11 15:00"), utc("2025-07-11 18:00"))
    facts = call({"a": PLAIN}, *friday, utc("2025-07-13"))
    starts = times(utc("2025-06-20"), utc("2025-07-13"), 60)
    result = settle(facts, readings("a", starts, 100.0))
    rows = result.intervals
    saturday = rows["interval_start"] >= utc("2025-07-12")
    assert rows.loc[saturday, "adjusted_baseline_kw"].isna().all()
    assert rows.loc[~saturday, "adjusted_baseline_kw"].tolist() == [100.0] * 9
    assert the_site(result)["state"] == "final"


@pytest.mark.parametrize(
    ("too_few", "state", "told"),
    [
        (
            "before_after",
            "final",
            "too few like days; the readings before and after the event take their place: a",
        ),
        (
            "refuse",
            "no_baseline",
            "too few like days, or none at all, and nothing takes their place; nothing is paid or charged on them: a",
        ),
    ],
)
def test_three_days_of_history_are_told(too_few: str, state: str, told: str) -> None:
    rule = TEN.model_copy(update={"when_too_few": too_few})
    frame = worked_readings(421.3)
    result = settle(worked_call(rule), frame[frame["interval_start"] >= utc("2025-07-07")])
    site = the_site(result)
    assert site["state"] == state and told in result.notes
    assert (result.days["reason"] == "too_few_days").sum() == 2
    if state == "no_baseline":
        assert site["total"] == 0 and pd.isna(site["performance_factor"])
