"""Quotes, network and request -> who is called with which candidate, and a proof of how good that is.

Owns the order of work (prices, then whole candidates, at which shortfall price) and the figures, all of them
recomputed in numpy. The bound is bound.py's, the prices are prices.py's, the search among candidates narrow.py's.
"""

import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from fleet import wishes as wishing
from fleet.answer import FIRM_FACTOR, Answer, best_answer
from fleet.bound import Offers, Prices, Terms, steering, worst_node
from fleet.choices import Status
from fleet.effort import within
from fleet.feeders import Feeders
from fleet.offers import allowance_kw, check_fit, offered, offers_of
from fleet.request import Request
from fleet.wishes import Wishes
from sites.quotes import COST_PARTS, DenseQuotes
from sites.units import Bools, Floats, Ints, Strings


@dataclass(frozen=True)
class Proof:
    """How good the allocation is; names and meanings as in the record's proof.json."""

    status: str
    money: float
    steering: float
    shortfall: float
    slack: float
    objective: float
    bound: float
    bound_by: str
    bound_prices: float
    bound_solver: float | None
    gap_money: float
    gross_cost: float
    gap: float | None
    shortfall_kwh: float
    shortfall_price_per_kwh: float
    """The price of the choice, above the one given where that would have left a request short in vain"""
    over_price_per_kwh: float
    worst_node: str | None
    """The limited node whose part of the choice lies furthest above its part of the bound; None: none has a part"""
    worst_node_gap: float | None
    """By how much, relative to the gross cost of the called sites below it; at the recorded prices"""
    include: tuple[str, ...]
    exclude: tuple[str, ...]
    fewest: bool
    over_cap_kw: float | None
    steering_per_call: float
    include_bonus: float
    seconds: float


@dataclass(frozen=True)
class Allocation:
    """Chosen candidates and what they come to. N sites, T horizon intervals, J nodes.

    E is event intervals, node after node where several are asked.
    """

    candidate: Ints
    """(N,) index into the quotes' candidates, -1 = not called"""
    expected_kw: Floats
    """(E,) sum over called sites of delivery_factor x expected_kw"""
    requested_kw: Floats
    shortfall_kw: Floats
    over_kw: Floats
    """(E,) beyond request and allowance"""
    allowance_kw: Floats
    node_change_kw: Floats
    """(J, T) event less usual of all called sites below"""
    cost: Floats
    """(len(COST_PARTS),) of the called sites"""
    prices: Prices
    proof: Proof

    @property
    def called(self) -> Ints:
        """Indices of the called sites."""
        return np.flatnonzero(self.candidate >= 0)

    @property
    def chosen(self) -> Ints:
        """Indices of the chosen candidates, by site."""
        chosen: Ints = self.candidate[self.candidate >= 0]
        return chosen

    @property
    def met(self) -> bool:
        """The request is met in every interval, to within 1e-6 kW."""
        return not bool(self.shortfall_kw.any())


def allocate(
    quotes: DenseQuotes,
    feeders: Feeders,
    headroom_kw: Floats,
    request: Request,
    delivery_factor: Floats,
    shortfall_price_per_kwh: float,
    over_price_per_kwh: float,
    allowed: Bools,
    *,
    site_ids: Strings,
    over_delivery_fraction: float = 0.05,
    seconds: float | None = None,
    target_gap: float = 0.001,
    wishes: Wishes = wishing.NONE,
    rough: bool = False,
    stopwatch: Callable[[], float] = time.perf_counter,
) -> Allocation:
    """The cheapest set of candidates found that meets the request, with its proof.

    headroom_kw (J, T); delivery_factor, allowed and site_ids (N,). Only allowed sites at or below the request's
    node are called. Where the shortfall price would leave kW undelivered that the fleet can give, it is raised by
    FIRM_FACTOR; the price used stands in the proof. A request that cannot be met comes back short (`met` False).

    seconds None: work is counted, and the same inputs give the same answer on any load. Else the best answer found
    by then, cut short where that is. rough: a quick answer, for a figure to tell rather than to call. Raises FleetError
    where quotes and request do not fit together, and for wishes that contradict each other.
    """
    started = stopwatch()
    check_fit(quotes, request)
    wishing.check(wishes, site_ids)
    allowed = allowed & ~wishing.named(wishes.exclude, site_ids)
    kept = offered(quotes, feeders, request.node_ids, allowed)
    per_call, bonus = wishing.weights(wishes, quotes.net_cost[kept])
    steer = steering(site_ids, per_call, np.array(wishes.include, dtype=object), bonus)
    offers = offers_of(quotes, feeders, delivery_factor, steer, kept, request.node_ids)
    step_h, count = quotes.clock.step_h, request.requested_kw.size
    asked = np.asarray(request.requested_kw > 0.0, dtype=np.float64)
    free_kw = allowance_kw(offers, request.requested_kw, over_delivery_fraction)
    over = wishing.over_price_per_kwh(wishes, over_price_per_kwh, shortfall_price_per_kwh, FIRM_FACTOR)
    terms = Terms(
        request_kw=request.requested_kw,
        allowance_kw=free_kw if wishes.over_cap_kw is None else np.full(count, wishes.over_cap_kw),
        shortfall_price_per_kw=asked * shortfall_price_per_kwh * step_h,
        over_price_per_kw=asked * over * step_h,
        headroom_kw=headroom_kw,
    )
    gross = _gross_costs(quotes, kept)
    answer = best_answer(offers, terms, gross, target_gap, within(seconds, stopwatch, rough))
    proof = _proof(quotes, kept, offers, answer, gross, target_gap, stopwatch() - started)
    told = replace(_wished(proof, wishes, per_call, bonus), **_worst(offers, answer, gross, feeders))
    return _allocation(quotes, kept, answer, told)


def _wished(proof: Proof, wishes: Wishes, per_call: float, bonus: float) -> Proof:
    """The proof with the wishes and what they weighed."""
    return replace(
        proof,
        include=wishes.include,
        exclude=wishes.exclude,
        fewest=wishes.fewest,
        over_cap_kw=wishes.over_cap_kw,
        steering_per_call=per_call,
        include_bonus=bonus,
    )


def _worst(offers: Offers, answer: Answer, gross: Floats, feeders: Feeders) -> dict[str, Any]:
    """The proof's worst node and its gap."""
    node, gap = worst_node(offers, answer.terms, answer.searched.prices, answer.chosen, gross[answer.chosen])
    if node < 0:
        return {"worst_node": None, "worst_node_gap": None}
    return {"worst_node": str(feeders.node_id[node]), "worst_node_gap": gap}


def _gross_costs(quotes: DenseQuotes, kept: Ints) -> Floats:
    """(C,) sum of each candidate's positive cost parts: the gap's denominator, free of savings."""
    gross: Floats = np.maximum(quotes.cost[kept], 0.0).sum(axis=1)
    return gross


def _proof(
    quotes: DenseQuotes,
    kept: Ints,
    offers: Offers,
    answer: Answer,
    gross: Floats,
    target_gap: float,
    seconds: float,
) -> Proof:
    """The figures of the proof. A bound above the objective by more than rounding is a defect, and stops here."""
    result, terms, chosen = answer.score, answer.terms, answer.chosen
    step_h = quotes.clock.step_h
    money = float(quotes.net_cost[kept[chosen]].sum())
    shortfall = float(terms.shortfall_price_per_kw @ result.shortfall_kw)
    by_prices = answer.searched.bound.value
    bound = max(by_prices, answer.bound_solver)
    gross_cost = float(gross[chosen].sum()) + shortfall
    if bound > result.objective + 1e-6 * (1.0 + gross_cost):
        raise RuntimeError(
            f"bound {bound} lies above the objective {result.objective}: the proof does not hold"
        )
    bound = min(bound, result.objective)
    lack = result.objective - bound
    proven = lack <= target_gap * gross_cost + 1e-9
    return Proof(
        status=(Status.PROVEN if proven else Status.FEASIBLE_CUT_SHORT).value,
        money=money,
        steering=float(offers.cost[chosen].sum()) - money,
        shortfall=shortfall,
        slack=float(terms.over_price_per_kw @ result.over_kw),
        objective=result.objective,
        bound=bound,
        bound_by="solver" if answer.bound_solver > by_prices else "prices",
        bound_prices=by_prices,
        bound_solver=answer.bound_solver if answer.bound_solver > by_prices else None,
        gap_money=lack,
        gross_cost=gross_cost,
        gap=lack / gross_cost if gross_cost > 0.0 else None,
        shortfall_kwh=float(result.shortfall_kw.sum()) * step_h,
        shortfall_price_per_kwh=float(terms.shortfall_price_per_kw.max()) / step_h,
        over_price_per_kwh=float(terms.over_price_per_kw.max()) / step_h,
        worst_node=None,
        worst_node_gap=None,
        include=(),
        exclude=(),
        fewest=False,
        over_cap_kw=None,
        steering_per_call=0.0,
        include_bonus=0.0,
        seconds=seconds,
    )


def _allocation(quotes: DenseQuotes, kept: Ints, answer: Answer, proof: Proof) -> Allocation:
    chosen = kept[answer.chosen]
    candidate = np.full(quotes.site_count, -1, dtype=np.int64)
    candidate[quotes.site[chosen]] = chosen
    return Allocation(
        candidate=candidate,
        expected_kw=answer.score.given_kw,
        requested_kw=answer.terms.request_kw,
        shortfall_kw=answer.score.shortfall_kw,
        over_kw=answer.score.over_kw,
        allowance_kw=answer.terms.allowance_kw,
        node_change_kw=answer.score.node_kw,
        cost=quotes.cost[chosen].sum(axis=0) if chosen.size else np.zeros(len(COST_PARTS)),
        prices=answer.searched.prices,
        proof=proof,
    )
