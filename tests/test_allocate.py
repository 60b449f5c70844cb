"""Allocations against enumeration and scipy, and what must not change them."""

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from made_quotes import by_enumeration, kept, made_quotes

import fleet.allocate
from fleet.allocate import allocate
from fleet.bound import Offers, Terms, bound_from_prices, steering
from fleet.choices import Choices
from fleet.errors import FleetError
from fleet.feeders import feeders
from fleet.most import most
from fleet.request import request
from fleet.shortage import explain
from sites.direction import Direction

SHORTFALL, OVER = 2.0, 0.05


class Case:
    """Quotes with a network, a request for a share of what is there, and room on each feeder."""

    def __init__(self, quotes, share=0.5, tight=None, nodes=2, node="root", kw=None):
        self.quotes = quotes
        count, clock = quotes.site_count, quotes.clock
        names = ["root"] + [f"f{j}" for j in range(nodes)]
        table = pd.DataFrame({"node_id": names, "parent_id": [None] + ["root"] * nodes})
        table["import_limit_kw"] = [np.nan] + [1.0] * nodes
        hangs = np.array([f"f{i % nodes}" for i in range(count)], dtype=object)
        self.feeders = feeders(table, None, hangs, clock)
        self.ids = np.array([f"site-{i:03d}" for i in range(count)], dtype=object)
        change = np.zeros((count, clock.count))
        np.maximum.at(change, quotes.site, quotes.change_kw)
        worst = self.feeders.below.astype(float) @ change
        self.headroom = np.full(worst.shape, np.inf)
        if tight is not None:
            self.headroom[1:] = tight * worst[1:].max(axis=1)[:, None]
        best = np.zeros((count, quotes.event_to - quotes.event_from))
        np.maximum.at(best, quotes.site, quotes.expected_kw)
        asked = share * best.sum(axis=0).min() if kw is None else kw
        starts = clock.starts
        end = starts[quotes.event_from] + (quotes.event_to - quotes.event_from) * clock.step
        self.request = request(
            "e1",
            node,
            quotes.direction,
            "real",
            starts[0],
            starts[quotes.event_from],
            end,
            asked,
            clock.step_minutes,
        )
        self.factor = np.ones(count)
        self.allowed = np.ones(count, dtype=bool)

    def run(self, **changes):
        options = {"site_ids": self.ids, "target_gap": 0.0} | changes
        shortfall = options.pop("shortfall", SHORTFALL)
        return allocate(
            self.quotes,
            self.feeders,
            self.headroom,
            self.request,
            self.factor,
            shortfall,
            OVER,
            self.allowed,
            **options,
        )

    def most(self):
        arguments = (
            self.quotes,
            self.feeders,
            self.headroom,
            self.request.node_id,
            self.factor,
            self.allowed,
        )
        return most(*arguments)

    def terms(self, allocation):
        """The problem as the proof's prices state it, built here from quotes alone."""
        event = np.ones(self.request.interval_count) * self.quotes.clock.step_h
        quotes = self.quotes
        cost = quotes.net_cost + steering(self.ids)[quotes.site]
        kw = quotes.expected_kw * self.factor[quotes.site][:, None]
        offers = Offers(quotes.site, quotes.site_count, cost, kw, quotes.change_kw, self.feeders.below)
        terms = Terms(
            self.request.requested_kw,
            allocation.allowance_kw,
            allocation.proof.shortfall_price_per_kwh * event,
            allocation.proof.over_price_per_kwh * event,
            self.headroom,
        )
        return offers, terms

    def choices(self, allocation):
        """The same problem as one plain model of every candidate and every limited row."""
        offers, terms = self.terms(allocation)
        node, interval = np.nonzero(np.isfinite(self.headroom))
        rows = offers.change_kw[:, interval].T * offers.below[node][:, offers.site]
        return Choices(
            offers.site,
            offers.cost,
            offers.kw,
            terms.request_kw,
            terms.allowance_kw,
            terms.shortfall_price_per_kw,
            terms.over_price_per_kw,
            rows,
            self.headroom[node, interval],
        )


@pytest.mark.parametrize("seed", range(16))
def test_equals_enumeration_of_all_choices(seed):
    tight = (None, 0.7, 0.5, 0.35)[seed % 4]
    case = Case(made_quotes(sites=6, candidates=6, seed=seed), share=0.25 + 0.04 * seed, tight=tight)
    found = case.run()
    best = by_enumeration(case.choices(found))
    assert found.proof.objective == pytest.approx(best, abs=1e-6)
    assert found.proof.bound <= best + 1e-6
    assert found.proof.status == "proven"
    assert found.proof.gap_money == pytest.approx(0.0, abs=1e-5)


@pytest.mark.parametrize("seed", range(2))
def test_equals_scipy_on_twelve_sites(seed):
    optimize = pytest.importorskip("scipy.optimize")
    case = Case(made_quotes(sites=12, candidates=20, intervals=6, horizon=24, seed=50 + seed), tight=0.6)
    found = case.run()
    model = case.choices(found)
    count, intervals = model.kw.shape
    groups = (model.site == np.arange(12)[:, None]).astype(float)
    eye, none = np.eye(intervals), np.zeros((intervals, intervals))
    wide = [np.zeros((len(part), 2 * intervals)) for part in (groups, model.rows)]
    matrix = np.block(
        [[model.kw.T, eye, none], [model.kw.T, none, -eye], [groups, wide[0]], [model.rows, wide[1]]]
    )
    low = np.r_[model.request_kw, np.full(intervals + 12 + len(model.room), -np.inf)]
    high = np.r_[np.full(intervals, np.inf), model.request_kw + model.allowance_kw, np.ones(12), model.room]
    solved = optimize.milp(
        np.r_[model.cost, model.shortfall_price_per_kw, model.over_price_per_kw],
        constraints=optimize.LinearConstraint(matrix, low, high),
        integrality=np.r_[np.ones(count), np.zeros(2 * intervals)],
        bounds=optimize.Bounds(0.0, np.r_[np.ones(count), np.full(2 * intervals, np.inf)]),
        options={"mip_rel_gap": 1e-9, "time_limit": 60.0},
    )
    assert solved.status == 0
    assert found.proof.objective == pytest.approx(solved.fun, rel=1e-6)


def hand_quotes(kw, cost):
    quotes = made_quotes(sites=3, candidates=1, intervals=1, horizon=2, event_from=1)
    expected = np.array(kw)[:, None]
    costs = np.zeros_like(quotes.cost)
    costs[:, 4] = cost
    return replace(quotes, expected_kw=expected, change_kw=np.c_[np.zeros(3), -expected], cost=costs)


def test_merit_order_is_not_optimal():
    """Request 10; 9 kW for 9.00, 9 kW for 9.09, 10 kW for 10.20: the third alone wins."""
    found = Case(hand_quotes([9.0, 9.0, 10.0], [9.0, 9.09, 10.2]), kw=10.0).run()
    assert found.candidate.tolist() == [-1, -1, 2]
    assert found.proof.money == pytest.approx(10.2)
    assert found.met


def test_proof_adds_up_and_is_recomputed_from_quotes():
    case = Case(made_quotes(sites=20, candidates=12, seed=4), share=0.4, tight=0.5)
    case.factor = np.linspace(0.9, 1.1, 20)
    found = case.run()
    proof, chosen = found.proof, found.chosen
    quotes = case.quotes
    expected = (quotes.expected_kw[chosen] * case.factor[quotes.site[chosen]][:, None]).sum(axis=0)
    assert found.expected_kw == pytest.approx(expected)
    assert proof.money == pytest.approx(quotes.net_cost[chosen].sum())
    assert proof.steering == pytest.approx(steering(case.ids)[found.called].sum())
    assert proof.objective == pytest.approx(proof.money + proof.steering + proof.shortfall + proof.slack)
    assert proof.gross_cost == pytest.approx(np.maximum(quotes.cost[chosen], 0.0).sum() + proof.shortfall)
    assert proof.gap_money == pytest.approx(proof.objective - proof.bound)
    assert proof.gap == pytest.approx(proof.gap_money / proof.gross_cost)
    assert proof.bound_by in ("prices", "solver")
    node = np.zeros_like(case.headroom)
    for candidate in chosen:
        node += case.feeders.below[:, quotes.site[candidate], None] * quotes.change_kw[candidate]
    assert found.node_change_kw == pytest.approx(node)
    assert (node <= case.headroom + 1e-6).all()
    again = bound_from_prices(*case.terms(found), found.prices)
    assert again.value == pytest.approx(proof.bound_prices, abs=1e-6)


def test_feeder_limits_bind_over_recovery():
    """Without a limit the cheap site is called; a limit that only its recovery breaks calls the dear one."""
    quotes = hand_quotes([10.0, 10.0, 10.0], [1.0, 2.0, 3.0])
    quotes = replace(
        quotes,
        event_from=0,
        event_to=1,
        window_start=np.zeros(3, dtype=np.int64),
        window_end=np.ones(3, dtype=np.int64),
        change_kw=np.array([[-10.0, 8.0], [-10.0, 7.0], [-10.0, 1.0]]),
    )
    case = Case(quotes, kw=10.0)
    assert case.run().candidate.tolist() == [0, -1, -1]
    case.headroom[1] = 5.0
    assert case.run().candidate.tolist() == [-1, 1, -1]
    case.headroom[2] = 5.0
    assert case.run().candidate.tolist() == [-1, -1, 2]


def test_permuted_sites_give_the_same_objective():
    quotes = made_quotes(sites=8, candidates=6, seed=11)
    first = Case(quotes, tight=0.6)
    order = np.random.default_rng(3).permutation(8)
    place = np.argsort(order)
    rows = np.argsort(place[quotes.site], kind="stable")
    moved = kept(replace(quotes, site=place[quotes.site]), rows)
    second = Case(moved, tight=0.6)
    second.ids = first.ids[order]
    second.feeders = replace(first.feeders, below=first.feeders.below[:, order])
    second.headroom, second.request = first.headroom, first.request
    one, two = first.run(), second.run()
    assert one.proof.objective == pytest.approx(two.proof.objective, abs=1e-6)
    assert sorted(first.ids[one.called]) == sorted(second.ids[two.called])


def test_renamed_sites_give_the_same_money():
    case = Case(made_quotes(sites=8, candidates=6, seed=12))
    before = case.run()
    case.ids = np.array([f"other {i}" for i in range(8)], dtype=object)
    assert case.run().proof.money == pytest.approx(before.proof.money, abs=1e-3)


def test_all_kw_and_money_a_thousand_times_the_same_choice():
    small, large = (made_quotes(sites=8, candidates=6, seed=13, scale=scale) for scale in (1.0, 1000.0))
    one, two = Case(small, tight=0.6).run(), Case(large, tight=0.6).run()
    assert one.candidate.tolist() == two.candidate.tolist()
    assert two.proof.money == pytest.approx(1000.0 * one.proof.money)


def test_absorb_mirrored_makes_the_same_choice():
    """Sites that draw more instead of less: same expected kW, same costs, no limits: same choice, signs turned."""
    shed, absorb = (made_quotes(sites=8, candidates=6, seed=14, direction=way) for way in Direction)
    assert (shed.change_kw == -absorb.change_kw).all()
    one, two = Case(shed).run(), Case(absorb).run()
    assert one.candidate.tolist() == two.candidate.tolist()
    assert one.node_change_kw == pytest.approx(-two.node_change_kw)
    assert one.expected_kw == pytest.approx(two.expected_kw)


def test_absorb_is_held_by_feeders_inside_the_event():
    quotes = hand_quotes([10.0, 10.0, 10.0], [1.0, 2.0, 3.0])
    quotes = replace(quotes, direction=Direction.ABSORB, change_kw=-quotes.change_kw)
    case = Case(quotes, kw=10.0)
    assert case.run().candidate.tolist() == [0, -1, -1]
    case.headroom[1] = 9.0
    assert case.run().candidate.tolist() == [-1, 1, -1]


def test_only_sites_below_the_node_are_called():
    quotes = made_quotes(sites=8, candidates=6, seed=15)
    quotes = replace(quotes, cost=quotes.cost - 20.0)
    case = Case(quotes, node="f1", share=0.3)
    found = case.run()
    assert found.called.size > 0
    assert case.feeders.sites_below("f1")[found.called].all()


def test_sites_not_allowed_are_not_called():
    case = Case(made_quotes(sites=8, candidates=6, seed=16), share=0.3)
    case.allowed[case.run().called[0]] = False
    assert case.allowed[case.run().called].all()


def test_planted_candidate_that_no_model_saw_lowers_the_bound():
    case = Case(made_quotes(sites=10, candidates=8, seed=17))
    found = case.run()
    offers, terms = case.terms(found)
    cost = offers.cost.copy()
    planted = int(np.flatnonzero(case.quotes.site == found.called[0])[0])
    cost[planted] -= 1000.0
    assert (
        bound_from_prices(replace(offers, cost=cost), terms, found.prices).value
        < found.proof.bound_prices - 500.0
    )


def test_dear_sites_are_called_all_the_same_and_the_price_is_told():
    """A shortfall price under the cost of a call would leave in vain what the fleet can give."""
    found = Case(hand_quotes([10.0, 10.0, 10.0], [500.0, 600.0, 700.0]), kw=25.0).run()
    assert found.met
    assert found.called.size == 3
    assert found.proof.shortfall_price_per_kwh == SHORTFALL * fleet.allocate.FIRM_FACTOR
    assert found.proof.money == pytest.approx(1800.0)


@pytest.mark.parametrize("tight", [None, 0.5, 0.3])
@pytest.mark.parametrize("seed", range(4))
def test_a_call_for_the_sustained_kw_succeeds(seed, tight):
    case = Case(made_quotes(sites=12, candidates=10, seed=30 + seed), tight=tight)
    could = case.most()
    assert could.sustained_kw > 0.0
    assert (could.available_kw >= could.sustained_kw - 1e-3).all()
    again = Case(case.quotes, tight=tight, kw=could.sustained_kw)
    assert again.run().met


@pytest.mark.parametrize("seed", range(4))
def test_nothing_above_the_most_can_be_given(seed):
    """Each figure of `most` against enumeration of every choice."""
    case = Case(made_quotes(sites=5, candidates=5, seed=40 + seed), tight=0.4)
    could = case.most()
    model = case.choices(case.run())
    above = replace(
        model,
        cost=np.zeros_like(model.cost),
        over_price_per_kw=np.zeros(4),
        shortfall_price_per_kw=np.ones(4),
    )
    asked = np.full(4, could.sustained_kw)
    assert by_enumeration(replace(above, request_kw=asked)) == pytest.approx(0.0, abs=1e-6)
    beyond = could.sustained_kw * 1.001 + 0.01
    assert could.proven is False or by_enumeration(replace(above, request_kw=np.full(4, beyond))) > 0.0
    for e, kw in enumerate(could.available_kw):
        alone = np.zeros(4)
        alone[e] = kw
        above = replace(above, shortfall_price_per_kw=np.eye(4)[e])
        assert by_enumeration(replace(above, request_kw=alone)) == pytest.approx(0.0, abs=1e-6)
        alone[e] = kw * 1.001 + 0.01
        assert could.proven is False or by_enumeration(replace(above, request_kw=alone)) > 0.0


def test_a_request_that_cannot_be_met_comes_back_short_and_explained():
    case = Case(made_quotes(sites=8, candidates=6, seed=21), tight=0.3)
    could = case.most()
    wanted = Case(case.quotes, tight=0.3, kw=could.sustained_kw + 50.0)
    wanted.allowed[2] = False
    found = wanted.run()
    assert not found.met
    assert found.proof.shortfall_kwh == pytest.approx(found.shortfall_kw.sum() * 0.25)
    assert found.proof.shortfall == pytest.approx(found.proof.shortfall_kwh * SHORTFALL)
    told = explain(
        found, wanted.quotes, wanted.feeders, wanted.headroom, wanted.request, wanted.factor, wanted.allowed
    )
    assert told.gap_kw == pytest.approx(np.maximum(found.requested_kw - found.expected_kw, 0.0))
    assert (told.available_kw >= told.sustained_kw[0] - 1e-3).all()
    worst = int(told.gap_kw.argmax())
    assert told.sentences() == [
        f"short by up to {told.gap_kw[worst]:,.1f} kW: {found.requested_kw[0]:,.1f} kW asked, "
        f"{found.expected_kw[worst]:,.1f} kW given in event interval {worst + 1}; at most "
        f"{told.sustained_kw[0]:,.1f} kW can be had in all intervals together",
        "sites limited by: discharge_rate 8",
    ]


def test_nobody_to_call_is_no_crash():
    case = Case(made_quotes(sites=4, candidates=3, seed=22))
    case.allowed[:] = False
    found = case.run()
    assert found.called.size == 0
    assert found.shortfall_kw == pytest.approx(case.request.requested_kw)
    assert case.most().available_kw.tolist() == [0.0] * 4
    assert case.most().sustained_kw == 0.0


def test_two_runs_are_the_same():
    case = Case(made_quotes(sites=10, candidates=8, seed=23), tight=0.6)
    assert case.run().candidate.tolist() == case.run().candidate.tolist()


def test_quotes_for_other_intervals_are_refused():
    case = Case(made_quotes(seed=24))
    case.quotes = replace(case.quotes, event_to=case.quotes.event_to - 1)
    with pytest.raises(FleetError) as caught:
        case.run()
    assert str(caught.value) == (
        "quotes are for 3 intervals of 15 minutes from 2026-07-15T11:00:00.000000, the request for 4 from "
        "2026-07-15T11:00:00.000000 to 2026-07-15T12:00:00.000000: quote again"
    )


def test_quotes_for_the_other_way_are_refused():
    case = Case(made_quotes(seed=24))
    case.quotes = replace(case.quotes, direction=Direction.ABSORB)
    with pytest.raises(FleetError) as caught:
        case.run()
    assert str(caught.value) == "quotes are for absorb, the request is for shed: quote again"


def test_a_quote_that_is_no_number_is_refused():
    case = Case(made_quotes(seed=25))
    case.quotes.change_kw[7, 3] = np.nan
    with pytest.raises(FleetError) as caught:
        case.run()
    assert str(caught.value) == "quote q00007 holds a value that is no number: it was not to be offered"
