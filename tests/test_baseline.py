"""Baselines: the worked case by hand, limits, ties, policies, vector equals scalar.

The worked case (composed, arithmetic by hand) is in made_settlement.py: ten like days before Thursday 2025-07-10.
"""

from dataclasses import fields, replace

import numpy as np
import pytest
from made_settlement import WORKED

from fleet.baseline import METHODS, REASONS, Baseline, DayFacts, EventFacts, baseline
from fleet.rules import PRESETS, SettlementRule

SLOTS = 24
WINDOW, EVENT = np.array([11, 12, 13]), np.array([15, 16, 17])


def worked_days() -> np.ndarray:
    """(site 1, day 16, slot 24): the sixteen days before the event, most recent first; weekends at 200 kW."""
    days = np.full((1, 16, SLOTS), 200.0)
    for back in range(16):
        day = str(np.datetime64("2025-07-09") - back)
        if day in WORKED:
            window, *hours = WORKED[day]
            days[0, back, WINDOW], days[0, back, EVENT] = window, hours
    return days


def facts(days: np.ndarray, **changes: np.ndarray) -> DayFacts:
    sites, count, slots = days.shape
    none = np.zeros((sites, count), dtype=bool)
    day = np.datetime64("2025-07-09") - np.arange(count)
    plain = DayFacts(
        exists=np.ones((count, slots), dtype=bool),
        weekend=(day.astype(int) + 3) % 7 >= 5,
        holiday=day == np.datetime64("2025-07-04"),
        event_past=none | (day == np.datetime64("2025-07-08")),
        before_event=none,
        unusual=none,
    )
    return replace(plain, **changes)


def event(window_kw: float = 383.0, sites: int = 1, **changes: object) -> EventFacts:
    plain = EventFacts(
        sign=1.0,
        weekend=False,
        slot=EVENT,
        like=np.ones(3, dtype=bool),
        event_slot=EVENT,
        window_slot=WINDOW,
        window_kw=np.full((sites, 3), window_kw),
        around_kw=np.array([[380.0, 390.0]] * sites),
    )
    return replace(plain, **changes)  # type: ignore[arg-type]


def run(
    rule: SettlementRule, window_kw: float = 383.0, days: np.ndarray | None = None, **known: np.ndarray
) -> Baseline:
    kw = worked_days() if days is None else days
    return baseline(kw, facts(kw, **known), rule, event(window_kw, len(kw)))


def reasons(found: Baseline) -> dict[str, str]:
    day = np.datetime64("2025-07-09") - np.arange(found.reason.shape[1])
    return {str(at)[5:]: REASONS[code] for at, code in zip(day, found.reason[0])}


TEN = PRESETS["ten_of_ten"]
PLAIN = SettlementRule(name="plain")
HIGH = SettlementRule(name="own", rank="highest", take_days=5, adjustment="additive", cap_fraction=0.2)


def test_ten_of_ten_unadjusted() -> None:
    found = run(PLAIN)
    assert found.window_base_kw[0] == pytest.approx(383.0, abs=1e-9)
    assert found.baseline_kw[0] == pytest.approx([475.5, 495.5, 455.5], abs=1e-9)
    assert found.baseline_kw[0] - [330, 340, 320] == pytest.approx([145.5, 155.5, 135.5], abs=1e-9)
    why = reasons(found)
    assert why["07-08"] == "event_past" and why["07-04"] == "holiday" and why["07-05"] == "other_day_type"
    assert sum(reason == "used" for reason in why.values()) == 10


def test_ten_of_ten_with_a_ratio_of_1_10() -> None:
    found = run(TEN, 421.3)
    assert found.adjustment[0] == pytest.approx(1.10, abs=1e-12) and found.kind[0] == "ratio"
    assert found.adjusted_kw[0] == pytest.approx([523.05, 545.05, 501.05], abs=1e-9)
    assert (found.adjusted_kw[0] - [330, 340, 320]).sum() == pytest.approx(579.15, abs=1e-9)
    assert found.adjustment_raw[0] == found.adjustment[0] and not found.doubtful[0]


def test_high_five_of_ten_additive() -> None:
    found = run(HIGH, 421.3)
    used = {day for day, reason in reasons(found).items() if reason == "used"}
    assert used == {"07-03", "07-09", "07-01", "07-07", "06-26"}
    assert found.baseline_kw[0] == pytest.approx([491, 511, 471], abs=1e-9)
    assert found.adjustment[0] == pytest.approx(25.3, abs=1e-9) and found.kind[0] == "additive"
    assert (found.adjusted_kw[0] - [330, 340, 320]).mean() == pytest.approx(186.3, abs=1e-9)


def test_the_cap_binds_on_both_sides_and_the_raw_factor_is_kept() -> None:
    high, low = run(TEN, 383.0 * 1.5), run(TEN, 383.0 * 0.5)
    assert (high.adjustment[0], high.adjustment_raw[0]) == (pytest.approx(1.2), pytest.approx(1.5))
    assert (low.adjustment[0], low.adjustment_raw[0]) == (pytest.approx(0.8), pytest.approx(0.5))
    own = TEN.model_copy(update={"cap_form": "ratio"})
    assert run(own, 383.0 * 0.5).adjustment[0] == pytest.approx(1 / 1.2)
    free = TEN.model_copy(update={"cap_fraction": None})
    assert run(free, 383.0 * 1.5).adjustment[0] == pytest.approx(1.5)
    # Additive: 20 % of the event hours' mean of 491 kW.
    assert run(HIGH, 900.0).adjustment[0] == pytest.approx(98.2)
    assert run(HIGH, 0.0).adjustment[0] == pytest.approx(-98.2)


@pytest.mark.parametrize("base", [0.0, -40.0, 25.0])
def test_a_small_zero_or_negative_window_base_is_adjusted_by_addition(base: float) -> None:
    days = worked_days()
    days[:, :, WINDOW] = base
    found = run(TEN, base + 30.0, days)
    assert found.kind[0] == "additive" and found.adjustment[0] == pytest.approx(30.0)
    assert found.adjusted_kw[0] == pytest.approx(found.baseline_kw[0] + 30.0)


def test_a_window_not_measured_leaves_the_baseline_and_says_so() -> None:
    found = run(TEN, np.nan)
    assert (found.adjustment[0], found.kind[0], found.doubtful[0]) == (1.0, "none", True)
    assert np.isnan(found.adjustment_raw[0])
    assert found.adjusted_kw.tolist() == found.baseline_kw.tolist()


def test_a_day_with_a_reading_lost_gives_way_to_an_older_one() -> None:
    days = worked_days()
    days[0, 0, 16] = np.nan
    days[0, 2, 12] = np.nan
    why = reasons(run(TEN, 383.0, days))
    assert why["07-09"] == "missing_data" and why["07-07"] == "missing_data"
    # Without an adjustment the window does not matter.
    assert reasons(run(PLAIN, 383.0, days))["07-07"] == "used"


def test_a_slot_the_clock_change_leaves_out_is_skipped() -> None:
    days = worked_days()
    days[0, 0, 16] = np.nan
    exists = np.ones((16, SLOTS), dtype=bool)
    exists[0, 16] = False
    found = run(PLAIN, days=days, exists=exists)
    assert reasons(found)["07-09"] == "used"
    assert found.rank_value[0, 0] == pytest.approx(490.0)
    assert found.baseline_kw[0] == pytest.approx([475.5, (4955 - 520) / 9, 455.5])


def test_days_of_unusual_modes_and_before_an_event_can_stay_out() -> None:
    unusual = np.zeros((1, 16), dtype=bool)
    unusual[0, 0] = True
    before = np.zeros((1, 16), dtype=bool)
    before[0, 2] = True
    assert reasons(run(PLAIN, unusual=unusual, before_event=before))["07-09"] == "outage"
    own = SettlementRule(name="own", exclude_unusual_modes=False, exclude_day_before_event=True)
    why = reasons(run(own, unusual=unusual, before_event=before))
    assert (why["07-09"], why["07-07"]) == ("used", "day_before_event")


def test_a_weekend_event_takes_weekend_days() -> None:
    kw = worked_days()
    rule = SettlementRule(name="own", holidays="as_weekend", minimum_days=2)
    found = baseline(kw, facts(kw), rule, event(weekend=True))
    assert {day for day, reason in reasons(found).items() if reason == "used"} == {
        "07-06",
        "07-05",
        "07-04",
        "06-29",
        "06-28",
    }
    assert found.baseline_kw[0, 0] == pytest.approx((4 * 200 + 160) / 5)


def equal_days() -> np.ndarray:
    """Ten weekdays that tie on the event hours, but differ at noon."""
    kw = np.full((1, 14, SLOTS), 100.0)
    kw[0, :, 12] = np.arange(14)
    return kw


@pytest.mark.parametrize("rank", ["recent", "highest", "middle"])
def test_of_equal_days_the_more_recent_stays(rank: str) -> None:
    kw = equal_days()
    nothing = np.zeros((1, 14), dtype=bool)
    known = facts(kw, weekend=nothing[0], holiday=nothing[0], event_past=nothing)
    rule = SettlementRule(name="own", rank=rank, take_days=4)
    found = baseline(kw, known, rule, event())
    assert np.flatnonzero(found.used[0]).tolist() == [0, 1, 2, 3]
    codes = found.reason[0]
    assert [REASONS[code] for code in codes[[4, 9, 10, 13]]] == ["not_ranked"] * 2 + ["enough_days"] * 2


def test_middle_drops_the_highest_and_the_lowest() -> None:
    rule = SettlementRule(name="own", rank="middle", take_days=8)
    why = reasons(run(rule))
    assert {day for day, reason in why.items() if reason == "not_ranked"} == {"07-03", "06-27"}
    # An odd number: the highest goes first.
    why = reasons(run(rule.model_copy(update={"take_days": 9})))
    assert {day for day, reason in why.items() if reason == "not_ranked"} == {"07-03"}


def test_absorb_takes_the_lowest_for_the_highest() -> None:
    kw = worked_days()
    found = baseline(kw, facts(kw), HIGH, event(sign=-1.0))
    used = {day for day, reason in reasons(found).items() if reason == "used"}
    assert used == {"06-27", "06-24", "06-30", "06-25", "07-02"}


def test_low_usage_days_are_replaced_by_older_ones() -> None:
    days = worked_days()
    days[0, 0, EVENT] = 100.0
    rule = SettlementRule(name="own", pool_days=5, take_days=5, minimum_days=5, low_usage_fraction=0.25)
    found = run(rule, days=days)
    why = reasons(found)
    assert why["07-09"] == "low_usage"
    used = {day for day, reason in why.items() if reason == "used"}
    assert used == {"07-07", "07-03", "07-02", "07-01", "06-30"}
    assert found.baseline_kw[0, 0] == pytest.approx((480 + 510 + 470 + 490 + 460) / 5)


def test_too_few_days_fall_back_as_the_rule_says() -> None:
    few = {"look_back_days": 6, "pool_days": 10, "minimum_days": 3, "take_days": 3}
    # 07-09 and 07-07 are the only like days of the last six; the past event of 07-08 is the third.
    way_out = run(SettlementRule(name="own", **few))
    assert METHODS[way_out.method[0]] == "before_after"
    assert way_out.adjusted_kw[0].tolist() == [385.0] * 3
    assert reasons(way_out)["07-09"] == "too_few_days" and not way_out.used.any()
    added = run(SettlementRule(name="own", when_too_few="highest_event_days", **few))
    assert METHODS[added.method[0]] == "event_days" and reasons(added)["07-08"] == "used"
    assert added.baseline_kw[0, 0] == pytest.approx((500 + 480 + 300) / 3)
    refused = run(SettlementRule(name="own", when_too_few="refuse", **few))
    assert METHODS[refused.method[0]] == "none" and np.isnan(refused.adjusted_kw).all()
    assert reasons(refused)["07-02"] == "beyond_look_back"


def test_before_and_after_is_the_mean_of_what_was_measured() -> None:
    kw = worked_days()
    rule = PRESETS["meter_before_after"]
    whole = baseline(kw, facts(kw), rule, event())
    assert whole.adjusted_kw[0].tolist() == [385.0] * 3 and not whole.doubtful[0]
    part = baseline(kw, facts(kw), rule, event(around_kw=np.array([[380.0, np.nan]])))
    assert part.adjusted_kw[0].tolist() == [380.0] * 3 and part.doubtful[0]
    none = baseline(kw, facts(kw), rule, event(around_kw=np.array([[np.nan]])))
    assert METHODS[none.method[0]] == "none" and np.isnan(none.baseline_kw).all()


def test_days_of_another_class_get_no_baseline() -> None:
    kw = worked_days()
    found = baseline(kw, facts(kw), PLAIN, event(like=np.array([True, True, False])))
    assert found.baseline_kw[0, :2] == pytest.approx([475.5, 495.5]) and np.isnan(found.baseline_kw[0, 2])


@pytest.mark.parametrize(
    "rule", [TEN, HIGH, PLAIN, PRESETS["meter_before_after"]], ids=lambda rule: rule.name
)
def test_many_sites_equal_each_site_alone(rule: SettlementRule) -> None:
    rng = np.random.default_rng(5)
    kw = np.round(rng.uniform(50, 500, (7, 16, SLOTS)))
    kw[rng.random(kw.shape) < 0.01] = np.nan
    past = rng.random((7, 16)) < 0.2
    many_event = event(300.0, 7)
    many = baseline(kw, facts(kw, event_past=past), rule, many_event)
    for row in range(7):
        one = baseline(
            kw[[row]],
            facts(kw[[row]], event_past=past[[row]]),
            rule,
            replace(many_event, window_kw=many_event.window_kw[[row]], around_kw=many_event.around_kw[[row]]),
        )
        for field in fields(Baseline):
            np.testing.assert_array_equal(getattr(one, field.name), getattr(many, field.name)[[row]])
