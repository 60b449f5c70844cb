"""Quotes, network and request -> who is called with which candidate, and a proof of how good that is.

Owns the order of work: prices, an answer, whole-candidate models on what prices leave open, local improvement,
and the figures, all of them recomputed in numpy. The bound is bound.py's, the models are choice.py's.

Candidates are left out of a model in one way only that keeps the solver's bound valid: every allocation that holds
candidate c costs at least bound + regret_c, so above the best answer known c cannot be part of a better one
(reduced-cost fixing). Where a model is smaller than that, its bound is not used.
"""

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from fleet.bound import Offers, Prices, Terms, steering
from fleet.choice import Status, integer
from fleet.feeders import Feeders
from fleet.improve import Score, improve, repaired, score
from fleet.most import MOST_SECONDS, most_of
from fleet.offers import allowance_kw, check_fit, offered, offers_of
from fleet.prices import FEASIBLE_KW, Searched, as_choices, can_bind, cheapest, rows_that_bind, search
from fleet.request import Request
from sites.quotes import COST_PARTS, DenseQuotes
from sites.units import Bools, Floats, Ints, Strings

WHOLE_MODEL: Final = 6000
"""Candidates up to which all that fixing leaves goes into one model."""
FIRST_MODEL: Final = 600
SEARCH_SHARE: Final = 0.35
LEAST_SHARE: Final = 0.15
ABLE_SHARE: Final = 0.4
ABLE_SECONDS: Final = 2.0 * MOST_SECONDS
"""Longer than the model that told the most had, so that a call for it follows the same path as far at least."""
FIRM_FACTOR: Final = 1000.0


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
    seconds: float


@dataclass(frozen=True)
class Allocation:
    """Chosen candidates and what they come to. N sites, E event and T horizon intervals, J nodes."""

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


@dataclass(frozen=True)
class _Answer:
    """The best choice found, its score, and the largest valid bound a solver gave."""

    searched: Searched
    chosen: Ints
    score: Score
    bound_solver: float
    terms: Terms


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
    seconds: float = 8.0,
    target_gap: float = 0.001,
    stopwatch: Callable[[], float] = time.perf_counter,
) -> Allocation:
    """The cheapest set of candidates found that meets the request, with its proof.

    headroom_kw (J, T); delivery_factor, allowed and site_ids (N,). Only allowed sites at or below the request's
    node are called. Where the shortfall price would leave kW undelivered that the fleet can give, it is raised by
    FIRM_FACTOR and the choice made again; the price used stands in the proof. A request that cannot be met comes
    back short (`met` False). Raises FleetError where quotes and request do not fit together.
    """
    started = stopwatch()
    check_fit(quotes, request)
    kept = offered(quotes, feeders, request.node_id, allowed)
    offers = offers_of(quotes, feeders, delivery_factor, steering(site_ids), kept)
    step_h = quotes.clock.step_h
    terms = Terms(
        request_kw=request.requested_kw,
        allowance_kw=allowance_kw(offers, request.requested_kw, over_delivery_fraction),
        shortfall_price_per_kw=np.full(request.interval_count, shortfall_price_per_kwh * step_h),
        over_price_per_kw=np.full(request.interval_count, over_price_per_kwh * step_h),
        headroom_kw=headroom_kw,
    )
    gross = _gross_costs(quotes, kept)
    answer = _answer(offers, terms, gross, seconds, target_gap, stopwatch)
    proof = _proof(quotes, kept, offers, answer, gross, target_gap, stopwatch() - started)
    return _allocation(quotes, kept, answer, proof)


def _gross_costs(quotes: DenseQuotes, kept: Ints) -> Floats:
    """(C,) sum of each candidate's positive cost parts: the gap's denominator, free of savings."""
    gross: Floats = np.maximum(quotes.cost[kept], 0.0).sum(axis=1)
    return gross


def _gap(answer: Score, chosen: Ints, gross: Floats, terms: Terms, bound: float) -> float:
    """Gap relative to gross cost; 0 where the bound is reached, inf where there is no denominator."""
    lack = answer.objective - bound
    base = float(gross[chosen].sum() + terms.shortfall_price_per_kw @ answer.shortfall_kw)
    if lack <= 0.0:
        return 0.0
    return lack / base if base > 0.0 else np.inf


class _Incumbent:
    """The best answer so far; takes only what keeps the limits by numpy."""

    def __init__(self, offers: Offers, terms: Terms) -> None:
        self.offers, self.terms = offers, terms
        self.chosen = np.zeros(0, dtype=np.int64)
        self.score = score(offers, terms, self.chosen)

    def offer(self, chosen: Ints) -> None:
        trial = score(self.offers, self.terms, chosen)
        if trial.keeps_limits and trial.objective < self.score.objective - 1e-12:
            self.chosen, self.score = chosen, trial


def _answer(
    offers: Offers,
    terms: Terms,
    gross: Floats,
    seconds: float,
    target_gap: float,
    stopwatch: Callable[[], float],
) -> _Answer:
    """The best choice at the given prices, or at firm ones where only the price would leave the request short.

    A bound at the given prices holds at firm ones too: a dearer shortfall makes no choice cheaper.
    """
    end = stopwatch() + seconds
    searched = search(offers, terms, cheapest(terms), SEARCH_SHARE * seconds, _tolerance(gross), stopwatch)
    able = _able(offers, terms, ABLE_SHARE * seconds, stopwatch)
    if able is None:
        return _solve(offers, terms, gross, searched, end, target_gap, (), -np.inf, stopwatch)
    known, bound = [able], -np.inf
    at_cap = bool((searched.prices.shed >= 0.999 * terms.shortfall_price_per_kw).any())
    if not at_cap:
        answer = _solve(offers, terms, gross, searched, end, target_gap, known, bound, stopwatch)
        if answer.score.met:
            return answer
        known, bound = [able, answer.chosen], answer.bound_solver
        end = stopwatch() + 0.25 * seconds
    firm = replace(terms, shortfall_price_per_kw=terms.shortfall_price_per_kw * FIRM_FACTOR)
    left = max(end - stopwatch(), 0.0)
    again = search(offers, firm, cheapest(firm), SEARCH_SHARE * left, _tolerance(gross), stopwatch)
    if searched.bound.value > again.bound.value:
        again = replace(again, prices=searched.prices, bound=searched.bound)
    return _solve(offers, firm, gross, again, end, target_gap, known, bound, stopwatch)


def _able(offers: Offers, terms: Terms, seconds: float, stopwatch: Callable[[], float]) -> Ints | None:
    """Candidates that meet the request whatever they cost; None where none were found.

    Local moves first, which mostly do; else the very model that tells the most, stopped where it is enough.
    """
    end = stopwatch() + 0.3 * seconds
    count = terms.request_kw.size
    free = replace(offers, cost=np.zeros(offers.site.size))
    only = replace(terms, shortfall_price_per_kw=np.ones(count), over_price_per_kw=np.zeros(count))
    searched = search(free, only, cheapest(only), 0.3 * seconds, FEASIBLE_KW, stopwatch)
    if searched.bound.value > FEASIBLE_KW * count:
        return None
    order = np.argsort(searched.bound.regret(offers.site), kind="stable").astype(np.int64)
    start = repaired(offers, terms, _rounded(offers, searched.x))
    near = improve(free, only, start, order, can_bind(offers, terms), lambda: stopwatch() > end)
    if score(free, only, near).met:
        return near
    asked = float(terms.request_kw.max())
    able = most_of(offers, terms.headroom_kw, terms.request_kw, max(seconds, ABLE_SECONDS), enough=asked)
    return able.chosen if score(free, only, able.chosen).met else None


def _solve(
    offers: Offers,
    terms: Terms,
    gross: Floats,
    searched: Searched,
    end: float,
    target_gap: float,
    known: Sequence[Ints],
    bound_solver: float,
    stopwatch: Callable[[], float],
) -> _Answer:
    """Answers from ever smaller open sets of candidates until the gap is small or the time `end` has come."""
    regret = searched.bound.regret(offers.site)
    order = np.argsort(regret, kind="stable").astype(np.int64)
    coupled = can_bind(offers, terms)
    began = stopwatch()
    best = _Incumbent(offers, terms)

    def better(chosen: Ints) -> None:
        """Takes an answer, brought within the limits, and what local moves make of it."""
        kept = repaired(offers, terms, chosen)
        best.offer(kept)
        stop = stopwatch() + max(0.1 * (end - stopwatch()), 0.02 * (end - began))
        best.offer(improve(offers, terms, kept, order, coupled, lambda: stopwatch() > stop))

    for start in (*known, _rounded(offers, searched.x)):
        better(start)
    rows = searched.rows
    for attempt in range(6):
        bound = max(searched.bound.value, bound_solver)
        if _gap(best.score, best.chosen, gross, terms, bound) <= target_gap or stopwatch() >= end:
            break
        open_columns = order[regret[order] <= best.score.objective - searched.bound.value + 1e-9]
        whole = open_columns.size <= (FIRST_MODEL if attempt == 0 else WHOLE_MODEL)
        columns = np.union1d(open_columns if whole else open_columns[:FIRST_MODEL], best.chosen)
        left = max(end - stopwatch(), 0.0)
        if attempt > 0 and left < LEAST_SHARE * (end - began):
            break
        before = best.score.objective
        told = integer(
            as_choices(offers, terms, columns, rows if whole else rows_that_bind(offers, terms, columns)),
            gap=0.5 * target_gap * float(gross[best.chosen].sum()),
            seconds=left if whole else 0.5 * left,
            start=np.searchsorted(columns, best.chosen),
        )
        broken = np.zeros((0, 2), dtype=np.int64)
        if told.status.is_ok:
            broken = _broken(offers, terms, columns[told.chosen], coupled)
            better(columns[told.chosen])
            if whole:
                bound_solver = max(bound_solver, min(told.bound_solver, before))
        if broken.size == 0 and (whole or attempt > 0) and best.score.objective >= before - 1e-9:
            break
        rows = np.unique(np.concatenate([rows, broken]), axis=0)
    return _Answer(searched, best.chosen, best.score, bound_solver, terms)


def _tolerance(gross: Floats) -> float:
    """Money by which the search for prices may stop short: a ten-thousandth of a usual candidate's cost."""
    return 1e-4 * float(np.median(gross)) if gross.size else 0.0


def _rounded(offers: Offers, x: Floats) -> Ints:
    """Candidates that hold at least half of their site in the relaxation, one a site."""
    columns = np.flatnonzero(x >= 0.5)
    _, first = np.unique(offers.site[columns], return_index=True)
    return columns[first].astype(np.int64)


def _broken(offers: Offers, terms: Terms, chosen: Ints, coupled: Bools) -> Ints:
    """Feeder rows (L, 2: node, interval) that a choice breaks."""
    node = score(offers, terms, chosen).node_kw
    return np.argwhere(coupled & (node > terms.headroom_kw + FEASIBLE_KW)).astype(np.int64)


def _proof(
    quotes: DenseQuotes,
    kept: Ints,
    offers: Offers,
    answer: _Answer,
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
        bound_solver=answer.bound_solver if np.isfinite(answer.bound_solver) else None,
        gap_money=lack,
        gross_cost=gross_cost,
        gap=lack / gross_cost if gross_cost > 0.0 else None,
        shortfall_kwh=float(result.shortfall_kw.sum()) * step_h,
        shortfall_price_per_kwh=float(terms.shortfall_price_per_kw[0]) / step_h,
        over_price_per_kwh=float(terms.over_price_per_kw[0]) / step_h,
        seconds=seconds,
    )


def _allocation(quotes: DenseQuotes, kept: Ints, answer: _Answer, proof: Proof) -> Allocation:
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
