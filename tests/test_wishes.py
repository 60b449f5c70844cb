"""Preferences: lists of sites, few sites, a cap on over-delivery; several nodes in one request; the worst feeder."""

from dataclasses import replace

import numpy as np
import pytest
from made_quotes import made_quotes
from test_allocate import Case

from fleet.bound import node_gaps, steering, worst_node
from fleet.errors import FleetError
from fleet.request import request
from fleet.wishes import Wishes


@pytest.fixture(scope="module")
def case():
    return Case(made_quotes(sites=10, candidates=8, seed=5), share=0.3)


@pytest.fixture(scope="module")
def plain(case):
    return case.run(target_gap=0.001)


def test_a_site_to_leave_out_is_not_called(case, plain):
    name = str(case.ids[plain.called[0]])
    found = case.run(target_gap=0.001, wishes=Wishes(exclude=(name,)))
    assert found.met
    assert name not in case.ids[found.called]
    assert found.proof.money >= plain.proof.bound - plain.proof.steering - 1e-6


def test_a_site_that_must_be_in_is_called_and_money_stays_money(case, plain):
    idle = np.setdiff1d(np.unique(case.quotes.site), plain.called)
    name = str(case.ids[idle[0]])
    found = case.run(target_gap=0.001, wishes=Wishes(include=(name,)))
    assert found.met
    assert name in case.ids[found.called]
    assert found.proof.money == pytest.approx(case.quotes.net_cost[found.chosen].sum())
    told = found.proof
    own = steering(case.ids, told.steering_per_call, np.array(told.include), told.include_bonus)
    assert told.steering == pytest.approx(own[found.called].sum())
    assert told.objective == pytest.approx(told.money + told.steering + told.shortfall + told.slack)
    assert told.bound <= told.objective


def test_few_sites_are_fewer_or_as_many(case, plain):
    found = case.run(target_gap=0.001, wishes=Wishes(fewest=True))
    best = np.zeros((10, 4))
    np.maximum.at(best, case.quotes.site, case.quotes.expected_kw)
    largest = np.sort(best.min(axis=1))[::-1]
    least = int(np.searchsorted(np.cumsum(np.sort(best.max(axis=1))[::-1]), case.request.requested_kw[0]) + 1)
    assert found.met
    assert least <= found.called.size <= plain.called.size
    assert found.called.size < plain.called.size or largest.size == 10


def test_over_delivery_stays_under_its_cap(case, plain):
    beyond = (plain.expected_kw - plain.requested_kw).max()
    cap = 0.5 * float(beyond)
    found = case.run(target_gap=0.001, wishes=Wishes(over_cap_kw=cap))
    assert beyond > cap
    assert found.met
    assert (found.expected_kw <= found.requested_kw + cap + 1e-6).all()


@pytest.mark.parametrize(
    ("wishes", "message"),
    [
        (
            Wishes(include=("nobody",)),
            "--include: no site nobody in this fleet; `shedwright quote` lists the sites there are",
        ),
        (
            Wishes(include=("site-001",), exclude=("site-001",)),
            "--include and --exclude both name site-001: a site is called or not; take it off one list",
        ),
        (
            Wishes(over_cap_kw=-1.0),
            "--most-over -1: expected kW of 0 or more; leave it out for no cap",
        ),
    ],
)
def test_wishes_that_make_no_sense_are_refused(case, wishes, message):
    with pytest.raises(FleetError) as caught:
        case.run(wishes=wishes)
    assert str(caught.value) == message


def several(case, node_ids, kw):
    """The same case asked at several nodes: kW (node, interval)."""
    ask = case.request
    times = ask.called_at, ask.event_from, ask.event_to
    made = request(
        "e1", node_ids, ask.direction, "real", *times, np.array(kw), case.quotes.clock.step_minutes
    )
    other = Case(case.quotes, share=0.3)
    other.request = made
    return other


def delivered(case, found, node):
    below = case.feeders.sites_below(node)
    chosen = found.chosen[below[case.quotes.site[found.chosen]]]
    return case.quotes.expected_kw[chosen].sum(axis=0)


@pytest.mark.parametrize("nodes", [("f0", "root"), ("f0", "f1")])
def test_requests_at_several_nodes_are_each_met(case, nodes):
    ask = [[300.0] * 4, [900.0, 900.0, 0.0, 900.0]]
    other = several(case, nodes, ask)
    found = other.run(target_gap=0.001)
    assert found.met
    for node, kw, told in zip(nodes, ask, found.expected_kw.reshape(2, 4), strict=True):
        given = delivered(other, found, node)
        assert told == pytest.approx(given)
        assert (given >= np.array(kw) - 1e-6).all()


def test_a_node_within_that_the_choice_serves_already_changes_nothing(case):
    alone = case.run(target_gap=0.0)
    inside = np.maximum(0.5 * delivered(case, alone, "f0"), 0.0)
    assert inside.max() > 0.0
    both = several(case, ("root", "f0"), np.stack([case.request.requested_kw, inside])).run(target_gap=0.0)
    assert both.met
    assert both.proof.money == pytest.approx(alone.proof.money, abs=2e-3)


def test_kw_by_node_must_fit():
    case = Case(made_quotes(sites=4, candidates=3, seed=1))
    with pytest.raises(FleetError) as caught:
        several(case, ("f0", "f1"), [[1.0] * 4, [0.0] * 4])
    assert str(caught.value) == (
        "request, column kw: came 0 kW of node f1; expected something asked of each node; "
        "leave the node out, or the interval"
    )


def test_gaps_of_nodes_add_up_to_the_whole_by_prices():
    """At a root without limit: regrets of its sites; with the request's own slack it is objective less bound."""
    case = Case(made_quotes(sites=20, candidates=10, seed=3), share=0.4, tight=0.5)
    found = case.run(target_gap=0.01)
    offers, terms = case.terms(found)
    gaps = node_gaps(offers, terms, found.prices, found.chosen)
    given = offers.kw[found.chosen].sum(axis=0)
    slack = found.prices.shed @ (given - terms.request_kw)
    room = terms.request_kw + terms.allowance_kw - given
    slack += found.prices.over @ room + terms.over_price_per_kw @ np.maximum(-room, 0.0)
    whole = found.proof.objective - found.proof.bound_prices
    feeders = gaps[1:].sum()
    assert feeders + slack == pytest.approx(whole, abs=1e-6)
    assert gaps[0] == pytest.approx(gaps[1:].sum() - unused(case, found), abs=1e-6)


def unused(case, found):
    priced = found.prices.importing > 0.0
    room = case.headroom[priced] - found.node_change_kw[priced]
    return float(found.prices.importing[priced] @ room)


def test_the_worst_node_is_told():
    case = Case(made_quotes(sites=20, candidates=10, seed=3), share=0.4, tight=0.5)
    found = case.run(target_gap=0.01)
    offers, terms = case.terms(found)
    gross = np.maximum(case.quotes.cost[found.chosen], 0.0).sum(axis=1)
    node, gap = worst_node(offers, terms, found.prices, found.chosen, gross)
    assert found.proof.worst_node == case.feeders.node_id[node] != "root"
    assert found.proof.worst_node_gap == pytest.approx(gap)
    below = case.feeders.below[1:][:, case.quotes.site[found.chosen]] @ gross
    assert gap == pytest.approx((node_gaps(offers, terms, found.prices, found.chosen)[1:] / below).max())
    free = replace(terms, headroom_kw=np.full_like(terms.headroom_kw, np.inf))
    none = replace(found.prices, importing=np.zeros_like(found.prices.importing))
    assert worst_node(offers, free, none, found.chosen, gross) == (-1, 0.0)
