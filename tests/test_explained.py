"""Why a choice is as it is: marginal prices, what more costs, who was left out; against figures put together here."""

from dataclasses import replace

import numpy as np
import pytest
from made_quotes import made_quotes
from test_allocate import Case, hand_quotes

from fleet.explained import explain


def explained(case: Case, more_share: float = 0.1, why: dict[int, str] | None = None):
    found = case.run()
    larger = Case(case.quotes, kw=(1.0 + more_share) * case.request.requested_kw)
    larger.headroom = case.headroom
    below = np.ones(case.quotes.site_count, dtype=bool)
    return found, explain(found, larger.run(), case.quotes, case.feeders, below, why or {}, case.headroom)


def test_three_cheapest_left_out_with_their_reasons():
    """One hour of one interval: 10 kW each for 1.00, 2.00, 3.00; asked 10 kW: the first is called."""
    case = Case(hand_quotes([10.0, 10.0, 10.0], [1.0, 2.0, 3.0]), kw=10.0)
    found, told = explained(case, why={2: "on the list of sites to leave out"})
    assert found.called.tolist() == [0]
    assert [one.site for one in told.left_out] == [1, 2]
    assert [one.per_kwh for one in told.left_out] == pytest.approx([2.0 / 2.5, 3.0 / 2.5])
    assert [one.reason for one in told.left_out] == [
        "dearer than the last kW called",
        "on the list of sites to leave out",
    ]
    # 11 kW need a second site: 2.00 on top.
    assert told.more_cost == pytest.approx(2.0, abs=1e-3)


def test_marginal_prices_are_the_proofs_and_say_what_a_kwh_would_be_paid():
    case = Case(made_quotes(sites=24, candidates=6, seed=5), share=0.4)
    found, told = explained(case)
    step_h = case.quotes.clock.step_h
    assert told.marginal_per_kwh == pytest.approx(found.prices.shed / step_h)
    assert told.marginal_per_kwh.max() > 0.0
    assert len(told.left_out) == 3
    cheapest = np.full(24, np.inf)
    energy = case.quotes.expected_kw.sum(axis=1) * step_h
    paying = energy > 0.0
    np.minimum.at(cheapest, case.quotes.site[paying], (case.quotes.net_cost[paying] / energy[paying]))
    cheapest[found.called] = np.inf
    assert [one.site for one in told.left_out] == np.argsort(cheapest)[:3].tolist()
    assert [one.per_kwh for one in told.left_out] == pytest.approx(np.sort(cheapest)[:3])


def test_ten_percent_more_costs_about_what_the_marginal_prices_say():
    """With many small sites the price of one more kW holds for a tenth more: convex, so from below."""
    case = Case(made_quotes(sites=40, candidates=6, seed=7), share=0.4)
    found, told = explained(case)
    hoped = 0.1 * float(found.prices.shed @ found.requested_kw)
    slack = found.proof.gap_money + 0.05 * found.proof.gross_cost
    assert told.more_tried
    assert hoped - slack <= told.more_cost <= 2.0 * hoped + slack


def test_more_than_there_is_costs_nothing_that_could_be_told():
    case = Case(hand_quotes([10.0, 10.0, 10.0], [1.0, 2.0, 3.0]), kw=29.0)
    _, told = explained(case)
    assert told.more_tried
    assert told.more_cost is None
    assert told.left_out == ()


def test_a_site_whose_recovery_has_no_room_is_told_so():
    quotes = hand_quotes([10.0, 10.0, 10.0], [1.0, 2.0, 3.0])
    late = np.array([[-10.0, 8.0], [-10.0, 7.0], [-10.0, 1.0]])
    quotes = replace(
        quotes,
        change_kw=late,
        event_from=0,
        event_to=1,
        window_start=np.zeros(3, dtype=np.int64),
        window_end=np.ones(3, dtype=np.int64),
    )
    case = Case(quotes, kw=10.0)
    case.headroom[1] = 5.0
    found, told = explained(case)
    assert found.called.tolist() == [1]
    assert told.left_out[0].site == 0
    assert told.left_out[0].reason == "no room for its load under the limit of node f0"


def test_nodes_whose_limit_has_a_price_are_told_the_dearest_first():
    """0.50 for a kW over a quarter of an hour is 2.00 a kWh; a price that rounds to nothing is not told."""
    case = Case(hand_quotes([10.0, 10.0, 10.0], [1.0, 2.0, 3.0]), kw=10.0)
    found = case.run()
    importing = np.zeros_like(found.prices.importing)
    importing[0, 0], importing[1, :] = 0.25, [0.5, 1e-5][: importing.shape[1]]
    found = replace(found, prices=replace(found.prices, importing=importing))
    below = np.ones(3, dtype=bool)
    told = explain(found, None, case.quotes, case.feeders, below, {}, case.headroom)
    assert [(one.node, one.intervals, one.dearest, one.per_kwh) for one in told.full_nodes] == [
        (1, 1, 0, pytest.approx(2.0)),
        (0, 1, 0, pytest.approx(1.0)),
    ]
