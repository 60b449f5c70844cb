"""The allocation judged from outside: enumeration, scipy's milp, weak duality, and how its gap falls with size."""

from dataclasses import replace

import numpy as np
import pytest
from made_quotes import by_enumeration, made_quotes
from test_allocate import Case, hand_quotes

from fleet.bound import Prices, bound_from_prices

TINY = 300


def tiny(seed: int) -> Case:
    """Four or five sites with two to four candidates, a share asked, feeders from none to tight."""
    rng = np.random.default_rng(1000 + seed)
    quotes = made_quotes(
        sites=int(rng.integers(3, 6)), candidates=int(rng.integers(2, 5)), intervals=3, horizon=10, seed=seed
    )
    tight = (None, 0.8, 0.6, 0.4)[seed % 4]
    return Case(quotes, share=float(rng.uniform(0.1, 0.9)), tight=tight)


@pytest.mark.parametrize("part", range(6))
def test_three_hundred_tiny_fleets_equal_enumeration(part):
    for seed in range(part * TINY // 6, (part + 1) * TINY // 6):
        case = tiny(seed)
        found = case.run()
        best = by_enumeration(case.choices(found))
        assert found.proof.objective == pytest.approx(best, abs=1e-6), seed
        assert found.proof.bound <= best + 1e-6, seed


def by_milp(model, seconds: float):
    """scipy's answer and bound for the whole model."""
    optimize, sparse = pytest.importorskip("scipy.optimize"), pytest.importorskip("scipy.sparse")
    count, intervals = model.kw.shape
    eye, none = np.eye(intervals), np.zeros((intervals, intervals))
    groups = sparse.csr_array((np.ones(count), (model.site, np.arange(count))))
    wide = [np.zeros((part.shape[0], 2 * intervals)) for part in (groups, model.rows)]
    matrix = sparse.block_array(
        [
            [model.kw.T, np.c_[eye, none]],
            [model.kw.T, np.c_[none, -eye]],
            [groups, wide[0]],
            [model.rows, wide[1]],
        ]
    )
    free = np.full(intervals + groups.shape[0] + len(model.room), -np.inf)
    high = np.r_[
        np.full(intervals, np.inf),
        model.request_kw + model.allowance_kw,
        np.ones(groups.shape[0]),
        model.room,
    ]
    solved = optimize.milp(
        np.r_[model.cost, model.shortfall_price_per_kw, model.over_price_per_kw],
        constraints=optimize.LinearConstraint(matrix, np.r_[model.request_kw, free], high),
        integrality=np.r_[np.ones(count), np.zeros(2 * intervals)],
        bounds=optimize.Bounds(0.0, np.r_[np.ones(count), np.full(2 * intervals, np.inf)]),
        options={"time_limit": seconds},
    )
    return float(solved.fun), float(solved.mip_dual_bound)


@pytest.mark.slow
@pytest.mark.parametrize("tight", [None, 0.5])
def test_a_hundred_sites_beside_scipy(tight):
    """Neither answer lies below the other's bound; ours is at most 0.5 % above scipy's answer of a minute."""
    case = Case(
        made_quotes(sites=100, candidates=30, intervals=8, horizon=40, seed=9), share=0.4, tight=tight
    )
    found = case.run(target_gap=0.001)
    answer, bound = by_milp(case.choices(found), 60.0)
    size = found.proof.gross_cost
    assert found.proof.objective >= bound - 1e-6 * size
    assert answer >= found.proof.bound - 1e-6 * size
    assert found.proof.objective <= answer + 0.005 * size


def some_prices(case: Case, found, rng) -> Prices:
    """Prices anywhere in their ranges, every second time around those found; most import prices zero."""
    _, terms = case.terms(found)
    limited = np.isfinite(terms.headroom_kw)
    importing = np.where(
        limited & (rng.random(limited.shape) < 0.2), rng.exponential(0.3, limited.shape), 0.0
    )
    cap = terms.shortfall_price_per_kw
    shed = rng.random(cap.size) * cap
    if rng.random() < 0.5:
        shed, importing = (
            np.minimum(found.prices.shed * rng.uniform(0.5, 1.5, cap.size), cap),
            0.01 * importing,
        )
    return Prices(shed, rng.random(cap.size) * terms.over_price_per_kw * rng.random(), importing)


@pytest.mark.parametrize("tight", [None, 0.5])
def test_any_prices_in_their_ranges_give_a_bound_below_the_best_choice(tight):
    """Weak duality: 300 random price vectors on fleets whose best choice is known by enumeration."""
    rng = np.random.default_rng(4)
    largest = -np.inf
    for seed in range(6):
        case = Case(made_quotes(sites=5, candidates=4, intervals=3, horizon=10, seed=seed), tight=tight)
        found = case.run()
        offers, terms = case.terms(found)
        best = by_enumeration(case.choices(found))
        for _ in range(50):
            value = bound_from_prices(offers, terms, some_prices(case, found, rng)).value
            assert value <= best + 1e-6
            largest = max(largest, (value - best) / found.proof.gross_cost)
    # Not all of them are far off, or nothing would have been tried.
    assert largest > -0.3


def test_a_planted_cheap_candidate_lowers_the_printed_bound():
    """Run again with one candidate that nobody had seen: the bound printed falls by about its advantage."""
    case = Case(made_quotes(sites=30, candidates=8, seed=17), share=0.4)
    before = case.run(target_gap=0.001)
    idle = int(np.setdiff1d(np.arange(30), before.called)[0])
    own = np.flatnonzero(case.quotes.site == idle)
    cost = case.quotes.cost.copy()
    cost[own[0]] = 0.0
    cost[own[0], 4] = -500.0
    planted = Case(replace(case.quotes, cost=cost), share=0.4)
    planted.request = case.request
    after = planted.run(target_gap=0.001)
    assert after.proof.bound < before.proof.bound - 400.0
    assert after.candidate[idle] == own[0]
    # The old prices, held over the new candidates by the bound's own code, fall as well.
    stale = bound_from_prices(*planted.terms(before), before.prices).value
    assert stale < before.proof.bound_prices - 400.0


@pytest.mark.parametrize("tight", [None, 0.6])
def test_the_gap_of_prices_falls_like_rows_over_sites(tight):
    """At four times the sites with the same rows the relative gap to the bound from prices is at most about half."""
    gaps = []
    for sites in (25, 100, 400):
        case = Case(made_quotes(sites=sites, candidates=8, seed=6), share=0.4, tight=tight)
        proof = case.run(target_gap=0.0005).proof
        gaps.append((proof.objective - proof.bound_prices) / proof.gross_cost)
    assert gaps[2] < 0.25 * gaps[0] + 5e-4
    assert gaps[2] < 2e-3


def merit_order(kw, cost, asked):
    """Cheapest per kW first until the request is met: what it costs, and the dearest site taken."""
    taken, total = 0.0, []
    for i in np.argsort(cost / kw):
        if taken >= asked:
            break
        taken, total = taken + kw[i], [*total, cost[i]]
    return sum(total), max(total)


@pytest.mark.parametrize("seed", range(5))
def test_merit_order_is_within_one_marginal_site_where_nothing_else_binds(seed):
    rng = np.random.default_rng(seed)
    quotes = made_quotes(sites=20, candidates=1, intervals=1, horizon=2, event_from=1)
    kw, cost = rng.uniform(50.0, 300.0, 20), np.zeros_like(quotes.cost)
    cost[:, 4] = kw * rng.uniform(0.05, 0.3, 20)
    quotes = replace(quotes, expected_kw=kw[:, None], change_kw=np.c_[np.zeros(20), -kw], cost=cost)
    asked = 0.4 * kw.sum()
    found = Case(quotes, kw=asked).run(shortfall=100.0)
    greedy, marginal = merit_order(kw, cost[:, 4], asked)
    assert found.met
    assert found.proof.money <= greedy + 2e-3
    assert found.proof.money >= greedy - marginal
    assert found.proof.bound >= greedy - marginal - 2e-3


def test_the_three_site_case_where_merit_order_is_wrong():
    """Request 10; 9 kW for 9.00, 9 kW for 9.09, 10 kW for 10.20: merit order pays 18.09, the best 10.20."""
    kw, cost = np.array([9.0, 9.0, 10.0]), np.array([9.0, 9.09, 10.2])
    assert merit_order(kw, cost, 10.0)[0] == pytest.approx(18.09)
    found = Case(hand_quotes(kw, cost), kw=10.0).run()
    assert found.proof.money == pytest.approx(10.2)
    assert found.proof.bound == pytest.approx(found.proof.objective, abs=1e-6)


def test_the_same_inputs_give_the_same_answer_and_equal_sites_are_told_apart_by_name():
    """Six equal sites, one is enough: which it is hangs on names, not on places; twice the same to the last bit."""
    one = made_quotes(sites=1, candidates=3, seed=2)
    count = 6
    rows = np.tile(np.arange(3), count)
    equal = replace(
        made_quotes(sites=count, candidates=3, seed=2),
        expected_kw=one.expected_kw[rows],
        change_kw=one.change_kw[rows],
        cost=one.cost[rows],
    )
    case = Case(equal, kw=0.9 * float(one.expected_kw.min(axis=1).max()))
    first, second = case.run(), case.run()
    assert first.candidate.tolist() == second.candidate.tolist()
    assert first.proof.objective == second.proof.objective
    assert first.proof.bound == second.proof.bound
    assert (first.prices.shed == second.prices.shed).all()
    turned = Case(equal, kw=case.request.requested_kw)
    turned.ids = case.ids[::-1].copy()
    again = turned.run()
    assert sorted(case.ids[first.called]) == sorted(turned.ids[again.called])
