"""From prices to whole candidates: models in PuLP of what prices leave undecided, each answer mended and improved.

Owns the order of these models and the best answer so far. Sites whose best answer is clear are held, the others
stay free with a few candidates each. Where all that reduced-cost fixing leaves goes into one model, that model's bound
counts too: every allocation that holds candidate c costs at least bound + regret_c, so above the best answer known
c cannot be part of a better one. A smaller model's bound is never used.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from fleet.annealing import annealed
from fleet.bound import Bound, Offers, Terms
from fleet.choice import integer
from fleet.effort import Effort
from fleet.improve import Score, improve, repaired, score
from fleet.prices import Searched, as_choices, can_bind, less, row_price, rows_that_bind
from sites.units import Bools, Floats, Ints

WHOLE_MODEL: Final = 3000
"""Candidates up to which all that fixing leaves goes into one model."""
FREE_SITES: Final = (60, 120)
"""Sites left free in one narrow model after another."""
EACH: Final = 6
"""Candidates of a free site."""
SPLIT: Final = 1e-6
"""A site whose candidates have shares between this and one less this is undecided in the relaxation."""
NARROW_WORK: Final = (100, 150)
WHOLE_WORK: Final = (3000, 900)
"""Nodes and checks of a model's solver."""
FEW: Final = 400
"""Candidates up to which the whole model comes straight after the prices: it ends at once."""
NEAR: Final = 5.0
EASY_MODEL: Final = 4000
"""Within so many times the target gap neither annealing nor a whole model follows narrow ones, unless that model has
few coefficients: it would take longer than all before it, for the last tenths of a percent."""
COLD_SECONDS: Final = 12.0
"""Annealing is left out where less time is left: the first time on a machine its loop has to be compiled."""


@dataclass(frozen=True)
class Found:
    """The best choice, its score, and the largest bound of a solver that had the whole choice (-inf: none had)."""

    chosen: Ints
    score: Score
    bound_solver: float


class Incumbent:
    """The best answer so far; takes only what keeps the limits by numpy."""

    def __init__(self, offers: Offers, terms: Terms, searched: Searched, effort: Effort) -> None:
        self.offers, self.terms, self.effort = offers, terms, effort
        self.order = np.argsort(searched.bound.regret(offers.site), kind="stable").astype(np.int64)
        self.coupled = can_bind(offers, terms)
        self.chosen = np.zeros(0, dtype=np.int64)
        self.score = score(offers, terms, self.chosen)

    def offer(self, chosen: Ints) -> None:
        """Takes an answer, brought within the limits, and what local moves make of it."""
        kept = repaired(self.offers, self.terms, chosen)
        self.take(kept)
        if not self.effort.over:
            stop = self.effort.sooner(0.2).stop
            self.take(improve(self.offers, self.terms, kept, self.order, self.coupled, stop))

    def take(self, chosen: Ints) -> None:
        """Takes an answer as it is, where it is within the limits and better."""
        trial = score(self.offers, self.terms, chosen)
        better = trial.objective < self.score.objective - 1e-12
        if trial.keeps_limits and (better or not self.score.keeps_limits):
            self.chosen, self.score = chosen, trial


def gap(answer: Score, chosen: Ints, gross: Floats, terms: Terms, bound: float) -> float:
    """Gap relative to gross cost; 0 where the bound is reached, inf where there is no denominator."""
    lack = answer.objective - bound
    base = float(gross[chosen].sum() + terms.shortfall_price_per_kw @ answer.shortfall_kw)
    if lack <= 0.0:
        return 0.0
    return lack / base if base > 0.0 else np.inf


def rounded(offers: Offers, x: Floats) -> Ints:
    """Candidates that hold at least half of their site in the relaxation, one a site."""
    columns = np.flatnonzero(x >= 0.5)
    _, first = np.unique(offers.site[columns], return_index=True)
    return columns[first].astype(np.int64)


def solve(
    offers: Offers,
    terms: Terms,
    gross: Floats,
    searched: Searched,
    target_gap: float,
    known: Sequence[Ints],
    effort: Effort,
    bound_solver: float = -np.inf,
) -> Found:
    """The best answer of narrow models, then of the whole one where it is small enough, until the gap is small."""
    best = Incumbent(offers, terms, searched, effort)
    few, tight = offers.site.size <= FEW, bool((searched.prices.importing > 0.0).any())

    def lack() -> float:
        return gap(best.score, best.chosen, gross, terms, max(searched.bound.value, bound_solver))

    def done() -> bool:
        return lack() <= target_gap or effort.over

    def anneal() -> None:
        if not effort.has(COLD_SECONDS):
            return
        stop = effort.sooner(0.5).stop
        best.offer(annealed(offers, terms, searched, gross, best.chosen, best.coupled, stop))

    for start in (*known, rounded(offers, searched.x)):
        if few or not tight:
            best.offer(start)
        else:
            best.take(repaired(offers, terms, start))
    if tight and not few and not done() and effort.has(COLD_SECONDS):
        anneal()
    elif not done():
        _narrow_models(best, searched, gross, target_gap, done)
        if not few and not effort.over and lack() > NEAR * target_gap:
            anneal()
    rows = terms.request_kw.size + len(searched.rows)
    easy = few or _whole(offers, searched, best).size * rows <= EASY_MODEL
    if best.effort.whole and not done() and (easy or lack() > NEAR * target_gap):
        bound_solver = max(bound_solver, _whole_model(best, searched, gross, target_gap))
    return Found(best.chosen, best.score, bound_solver)


def _narrow_models(
    best: Incumbent, searched: Searched, gross: Floats, target_gap: float, done: Callable[[], bool]
) -> None:
    """Narrow models one after another, the first around the prices, the others around the best answer."""
    for step, free_sites in enumerate(FREE_SITES[: best.effort.models]):
        if done() or (step > 0 and _whole(best.offers, searched, best).size <= WHOLE_MODEL // 2):
            break
        money = 0.25 * target_gap * float(gross[best.chosen].sum())
        _narrow(best, searched, free_sites, money, by_prices=step == 0)


def _narrow(best: Incumbent, searched: Searched, count: int, money: float, by_prices: bool) -> None:
    """One model of the sites whose answer is least clear; the others as prices, or as the best answer has them."""
    offers, terms, bound = best.offers, best.terms, searched.bound
    split = np.flatnonzero((searched.x > SPLIT) & (searched.x < 1.0 - SPLIT))
    first = np.unique(offers.site[split]) if by_prices else _off_price(offers, bound, best.chosen)
    free = _least_clear(offers, bound, first, count)
    held = np.flatnonzero(searched.x >= 0.5) if by_prices else best.chosen
    held = held[~free[offers.site[held]]]
    _, once = np.unique(offers.site[held], return_index=True)
    held = held[once]
    own = best.chosen[free[offers.site[best.chosen]]]
    split = split[free[offers.site[split]]]
    columns = np.union1d(_few_each(offers, bound, free, EACH), np.union1d(own, split))
    rest = less(offers, terms, held)
    rows = _rows(offers, rest, columns, searched.rows)
    choices = as_choices(offers, rest, columns, rows)
    if by_prices:
        price = row_price(terms, searched.prices)
        short = np.minimum(terms.shortfall_price_per_kw, price)
        choices = replace(choices, row_price=price, shortfall_price_per_kw=short)
    start = None if by_prices else np.searchsorted(columns, own)
    told = integer(choices, money, best.effort.work(*NARROW_WORK, share=0.4), start)
    if told.status.is_ok:
        best.offer(np.sort(np.concatenate([held, columns[told.chosen]])))


def _whole(offers: Offers, searched: Searched, best: Incumbent) -> Ints:
    """Candidates that can be part of a better answer than the best known (reduced-cost fixing)."""
    lack = best.score.objective - searched.bound.value
    return np.flatnonzero(searched.bound.regret(offers.site) <= lack + 1e-9)


def _whole_model(best: Incumbent, searched: Searched, gross: Floats, target_gap: float) -> float:
    """The model of all that fixing leaves; the bound that its solver tells, -inf where it is too large."""
    offers, terms = best.offers, best.terms
    columns = _whole(offers, searched, best)
    if columns.size > WHOLE_MODEL:
        return -np.inf
    before = best.score.objective
    columns = np.union1d(columns, best.chosen)
    rows = rows_that_bind(offers, terms, columns)
    told = integer(
        as_choices(offers, terms, columns, rows),
        0.5 * target_gap * float(gross[best.chosen].sum()),
        best.effort.work(*WHOLE_WORK),
        np.searchsorted(columns, best.chosen),
    )
    if not told.status.is_ok:
        return -np.inf
    best.offer(columns[told.chosen])
    return min(told.bound_solver, before)


def _off_price(offers: Offers, bound: Bound, chosen: Ints) -> Ints:
    """Sites that an answer has on another candidate than prices call for, or out where they call for one."""
    lack = -bound.best
    lack[offers.site[chosen]] = bound.regret(offers.site)[chosen]
    sites = np.flatnonzero(lack > 1e-9)
    return sites[np.argsort(-lack[sites], kind="stable")]


def _least_clear(offers: Offers, bound: Bound, first: Ints, count: int) -> Bools:
    """(N,) `count` sites: the given ones, then those whose two best answers (staying out is one) lie closest.

    Half as many of the latter stay free at least.
    """
    margin = _margins(offers, bound)
    free = np.zeros(offers.site_count, dtype=np.bool_)
    free[first[:count]] = True
    able = np.flatnonzero(np.isfinite(margin) & ~free)
    more = max(count - int(free.sum()), count // 2)
    free[able[np.argsort(margin[able], kind="stable")[:more]]] = True
    return free


def _margins(offers: Offers, bound: Bound) -> Floats:
    """(N,) second best less best answer of each site, staying out (0) among them; inf without candidates."""
    best = np.full(offers.site_count, np.inf)
    second = best.copy()
    if offers.site.size:
        order = np.lexsort((bound.candidate_value, offers.site))
        firsts = np.flatnonzero(np.r_[True, np.diff(offers.site[order]) != 0])
        value = bound.candidate_value[order]
        best[offers.site[order[firsts]]] = value[firsts]
        seconds = firsts + 1
        inside = seconds < np.r_[firsts[1:], order.size]
        second[offers.site[order[seconds[inside]]]] = value[seconds[inside]]
    least = np.minimum(best, 0.0)
    other = np.where(best < 0.0, np.minimum(second, 0.0), best)
    return np.where(np.isfinite(best), other - least, np.inf)


def _few_each(offers: Offers, bound: Bound, free: Bools, each: int) -> Ints:
    """The candidates of least regret of each free site."""
    columns = np.flatnonzero(free[offers.site])
    regret = bound.regret(offers.site)[columns]
    order = columns[np.lexsort((regret, offers.site[columns]))]
    site = offers.site[order]
    firsts = np.flatnonzero(np.r_[True, np.diff(site) != 0]) if order.size else np.zeros(0, dtype=np.int64)
    rank = np.arange(order.size) - np.repeat(firsts, np.diff(np.r_[firsts, order.size]))
    return np.sort(order[rank < each])


def _rows(offers: Offers, rest: Terms, columns: Ints, near: Ints) -> Ints:
    """Feeder rows that these candidates could break in the room that is left, and those prices stand on."""
    rows = rows_that_bind(offers, rest, columns)
    return np.unique(np.concatenate([rows, near]), axis=0).astype(np.int64)
