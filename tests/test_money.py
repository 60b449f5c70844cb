"""Money: worked cases (composed, arithmetic by hand), minor units, remainders."""

from decimal import Decimal

import numpy as np
import pytest

from fleet.errors import FleetError
from fleet.money import (
    Prices,
    earned,
    exact,
    firm_level_charge,
    largest_remainder,
    lines,
    minor_digits,
    paid_share,
    performance_factor,
    season_factor,
    to_minor,
)
from fleet.rules import SettlementRule

# 200 kW committed, delivered 180, 220, 190 and 150 kW in four hours, $18 per kW and month: $3,600 a month in full.
HOURS = np.array([[180.0, 220.0, 190.0, 150.0]])
COMMITTED = np.full((1, 4), 200.0)
PER_KWH = Prices("USD", capacity_payment_per_kwh=18.0 * 200.0 / 800.0)


def capacity_payment(rule: SettlementRule) -> Decimal:
    factor = performance_factor(HOURS, COMMITTED, np.ones((1, 4), dtype=bool), 1.0, rule)
    paid = lines(np.array([800.0]), np.array([740.0]), paid_share(factor, rule, PER_KWH), PER_KWH)
    return Decimal(paid.capacity_payment[0])


@pytest.mark.parametrize(
    ("fields", "wanted"),
    [
        ({}, "3330.00"),  # mean 185 kW, factor 0.925
        ({"performance_decimals": 2}, "3348.00"),  # half-up: 0.93
        ({"cap_intervals": True}, "3240.00"),  # 180, 200, 190, 150: 0.90
    ],
)
def test_the_order_of_cap_and_rounding_changes_money(fields: dict[str, int], wanted: str) -> None:
    assert capacity_payment(SettlementRule(name="own", **fields)) == Decimal(wanted)


def test_energy_at_a_dollar_a_kwh() -> None:
    paid = lines(np.array([800.0]), np.array([740.0]), np.array([np.nan]), Prices("USD", 0.0, 1.0, 0.0))
    assert (paid.energy_payment[0], paid.total[0]) == (Decimal("740.00"), Decimal("740.00"))


def test_the_penalty_is_what_lacks_and_never_positive() -> None:
    delivered = np.array([740.0, 900.0, -10.0, np.nan])
    paid = lines(np.full(4, 800.0), delivered, np.full(4, np.nan), Prices("USD", 0.0, 1.0, 0.5))
    assert paid.penalty.tolist() == [Decimal(text) for text in ("-30.00", "0.00", "-405.00", "0.00")]
    assert not any(value.is_signed() for value in paid.penalty[[1, 3]])
    assert paid.energy_payment.tolist() == [Decimal(text) for text in ("740.00", "900.00", "0.00", "0.00")]
    assert paid.total.tolist() == [Decimal(text) for text in ("710.00", "900.00", "-405.00", "0.00")]


def test_no_commitment_earns_no_penalty_and_has_no_factor() -> None:
    factor = performance_factor(
        HOURS, np.zeros((1, 4)), np.ones((1, 4), dtype=bool), 1.0, SettlementRule(name="own")
    )
    assert np.isnan(factor[0])
    paid = lines(np.zeros(1), np.array([-5.0]), factor, Prices("USD", 1.0, 1.0, 1.0))
    assert paid.total[0] == Decimal("0.00")


def test_negative_hours_net_or_are_floored_each() -> None:
    delivered, counted = np.array([[100.0, -50.0, np.nan]]), np.ones((1, 3), dtype=bool)
    committed = np.full((1, 3), 100.0)
    net = performance_factor(delivered, committed, counted, 0.25, SettlementRule(name="own"))
    each = performance_factor(
        delivered, committed, counted, 0.25, SettlementRule(name="own", floor_intervals=True)
    )
    assert (net[0], each[0]) == (pytest.approx(50 / 300), pytest.approx(100 / 300))


def test_the_share_is_held_between_floor_and_cap() -> None:
    rule, factor = SettlementRule(name="own"), np.array([-0.4, 0.5, 1.3, np.nan])
    assert paid_share(factor, rule, Prices("USD")).tolist()[:3] == [0.0, 0.5, 1.0]
    assert np.isnan(paid_share(factor, rule, Prices("USD"))[3])
    own = SettlementRule(name="own", performance_floor=0.2, performance_cap=1.2)
    assert paid_share(factor, own, Prices("USD")).tolist()[:3] == [0.2, 0.5, 1.2]


def test_ladder_linear_and_gate() -> None:
    rungs = ((0.6, 0.25), (0.7, 0.5), (0.8, 0.7), (0.9, 0.85), (0.95, 0.95), (0.97, 1.0))
    ladder = SettlementRule(name="own", performance_formula="ladder", ladder=rungs)
    factor = np.array([0.5999, 0.6, 0.6999, 0.7, 0.8, 0.9, 0.95, 0.97, 1.4, 0.1 + 0.6])
    # A published availability scalar (from memory): lower bounds are inclusive.
    wanted = [0.0, 0.25, 0.25, 0.5, 0.7, 0.85, 0.95, 1.0, 1.0, 0.5]
    assert paid_share(factor, ladder, Prices("USD")).tolist() == wanted
    linear = SettlementRule(name="own", performance_formula="linear", performance_target=0.9)
    assert paid_share(np.array([0.9, 0.7, 0.3]), linear, Prices("USD")) == pytest.approx([1.0, 0.6, 0.0])
    gate = SettlementRule(name="own", performance_gate=0.25)
    assert paid_share(np.array([0.25, 0.26]), gate, Prices("USD")).tolist() == [0.0, 0.26]


def test_halves_go_away_from_zero_and_binary_dust_moves_no_cent() -> None:
    assert to_minor(Decimal("0.125"), "USD") == Decimal("0.13")
    assert to_minor(Decimal("-0.125"), "USD") == Decimal("-0.13")
    assert to_minor(Decimal("1234.5"), "JPY") == Decimal(1235)
    assert to_minor(Decimal("1.23450"), "KWD") == Decimal("1.235")
    dusty = 1.1 * 1.1 * 100 + 0.5 - 121.0
    assert dusty != 0.5 and exact(dusty) == Decimal("0.5")


def test_an_unknown_currency_gets_two_decimals_and_a_note() -> None:
    assert minor_digits("EUR") == (2, None)
    assert minor_digits("JPY") == (0, None)
    assert minor_digits("QQQ") == (
        2,
        "currency QQQ is not in the table of minor units; amounts have 2 decimals",
    )


def test_a_code_without_a_minor_unit_is_refused() -> None:
    with pytest.raises(FleetError) as caught:
        minor_digits("XAU")
    assert str(caught.value) == (
        "fleet.toml, currency: came XAU, which has no minor unit (ISO 4217), so that no amount can be rounded to it; "
        "expected the currency that is paid in, such as EUR; correct it before the next call"
    )


def test_the_total_is_the_sum_of_rounded_lines() -> None:
    rng = np.random.default_rng(3)
    committed, delivered = rng.uniform(0, 500, 300), rng.uniform(-100, 600, 300)
    prices = Prices("USD", 0.31415, 0.27182, 0.57721)
    paid = lines(committed, delivered, np.clip(delivered / committed, 0, 1), prices)
    for capacity, energy, penalty, total in zip(
        paid.capacity_payment, paid.energy_payment, paid.penalty, paid.total
    ):
        assert capacity + energy + penalty == total
        assert all(part == part.quantize(Decimal("0.01")) for part in (capacity, energy, penalty))
    one = lines(committed[:1], delivered[:1], np.clip(delivered / committed, 0, 1)[:1], prices)
    assert one.total[0] == paid.total[0]


def test_left_over_cents_go_by_largest_remainder_then_site_id() -> None:
    thirds = largest_remainder([1.0, 1.0, 1.0], ["b", "c", "a"], Decimal("100.00"), "USD")
    assert thirds.tolist() == [Decimal("33.33"), Decimal("33.33"), Decimal("33.34")]
    uneven = largest_remainder([50.0, 30.0, 20.0], ["a", "b", "c"], Decimal("0.07"), "USD")
    # Ideal 3.5, 2.1 and 1.4 cents: one left over, to the first.
    assert uneven.tolist() == [Decimal("0.04"), Decimal("0.02"), Decimal("0.01")]
    assert largest_remainder([0.0, 0.0], ["a", "b"], Decimal("3"), "JPY").tolist() == [2, 1]
    assert sum(largest_remainder([3.0, 1.0], ["a", "b"], Decimal("-0.05"), "USD")) == Decimal("-0.05")


def factor(rule: SettlementRule, delivered: list[float], hours: list[int] | None = None) -> float:
    """Performance factor of 200 kW committed in each interval of an hour."""
    kw = np.array([delivered], dtype=float)
    hour = None if hours is None else np.array(hours)
    return float(
        performance_factor(kw, np.full(kw.shape, 200.0), np.ones(kw.shape, bool), 1.0, rule, hour)[0]
    )


def test_caps_and_floors_look_at_intervals_hours_or_the_whole_window() -> None:
    # Two hours of two intervals: 300, 100 and -50, 150; 200 committed in each.
    kw, hours = [300.0, 100.0, -50.0, 150.0], [0, 0, 1, 1]
    capped = {"name": "own", "cap_intervals": True, "floor_intervals": True}
    assert factor(SettlementRule(**capped), kw) == pytest.approx((200 + 100 + 0 + 150) / 800)
    by_hour = SettlementRule(**capped, performance_by="hour")
    assert factor(by_hour, kw, hours) == pytest.approx((400 + 100) / 800)
    whole = SettlementRule(**capped, performance_by="event")
    assert factor(whole, [900.0, 100.0, -50.0, 150.0], hours) == 1.0
    assert "negative hours to zero; hours capped at their commitment" in by_hour.order_of_rounding


def test_a_season_is_averaged_over_its_hours_and_not_over_its_events() -> None:
    # One event of one hour at 100 %, one of four at 50 %: 60 %, not 75 %.
    plain = SettlementRule(name="own")
    assert season_factor([200.0, 100.0, 100.0, 100.0, 100.0], [200.0] * 5, plain) == pytest.approx(0.6)


def test_use_above_a_firm_level_is_charged_by_the_kwh() -> None:
    rule = SettlementRule(name="own", firm_level_kw=300.0, firm_level_charge_per_kwh=6.0)
    metered = np.array([[310.0, 290.0, 305.0, np.nan]])
    inside = np.array([[True, True, True, True]])
    # 10 kW and 5 kW above in quarter hours: 3.75 kWh at $6.00.
    assert firm_level_charge(metered, inside, 0.25, rule, 1.0).tolist() == [22.5]
    assert firm_level_charge(metered, inside, 0.25, rule, -1.0).tolist() == [15.0]
    due = lines(np.array([100.0]), np.array([100.0]), np.array([1.0]), Prices("USD"), np.array([22.5]))
    assert due.penalty[0] == due.total[0] == Decimal("-22.50")


def test_a_portfolio_nets_over_its_sites_and_shares_out_to_the_cent() -> None:
    rule = SettlementRule(name="own", netting="portfolio")
    prices = Prices("USD", 0.1, 0.01, 0.05)
    committed, delivered = np.array([100.0, 100.0, 100.0, 50.0]), np.array([150.0, 40.0, 100.0, np.nan])
    own = delivered / committed
    nothing = np.zeros(4)
    share, due = earned(committed, delivered, own, nothing, rule, prices, ["a", "b", "c", "d"])
    # 290 of 300 kWh together; the fourth, undefined, stays out.
    assert share[:3] == pytest.approx([290 / 300] * 3) and np.isnan(share[3])
    assert sum(due.capacity_payment) == Decimal("29.00") and due.capacity_payment[3] == 0
    assert sorted(due.capacity_payment[:3]) == [Decimal("9.66"), Decimal("9.67"), Decimal("9.67")]
    # 10 kWh lack at 5 cents, borne by the one site that lacks; alone it would owe for 60.
    assert due.penalty.tolist() == [0, Decimal("-0.50"), 0, 0]
    alone = earned(committed, delivered, own, nothing, SettlementRule(name="own"), prices, list("abcd"))[1]
    assert alone.penalty[1] == Decimal("-3.00")
    assert (due.total == due.capacity_payment + due.energy_payment + due.penalty).all()
