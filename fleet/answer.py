"""From offers to the best choice: at which shortfall price, prices first, then whole candidates.

Owns the order of work, and that a request which can be met is met whatever it costs. The figures told of a choice
are allocate.py's, the bound bound.py's, the search among candidates narrow.py's.
"""

from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from fleet.bound import Offers, Terms
from fleet.effort import Effort
from fleet.improve import Score, score
from fleet.most import most_of
from fleet.narrow import solve
from fleet.prices import Searched, priced
from sites.units import Floats, Ints

FIRM_FACTOR: Final = 1000.0
"""How many times the shortfall price is raised where the given one would leave kW undelivered that can be had."""


@dataclass(frozen=True)
class Answer:
    """The best choice found, its score, and the largest valid bound a solver gave."""

    searched: Searched
    chosen: Ints
    score: Score
    bound_solver: float
    terms: Terms


def best_answer(offers: Offers, terms: Terms, gross: Floats, target_gap: float, effort: Effort) -> Answer:
    """The best choice that meets the request, at firm prices; at the given ones where none meets it.

    A bound at the given prices holds at firm ones too: a dearer shortfall makes no choice cheaper.
    """
    firm = replace(terms, shortfall_price_per_kw=terms.shortfall_price_per_kw * FIRM_FACTOR)
    searched = priced(offers, firm, effort.sooner(0.5))
    if searched.bound.value <= _dearest(offers, terms):
        found = solve(offers, firm, gross, searched, target_gap, (), effort)
        if not found.score.met:
            able = _able(offers, terms, effort)
            if able is not None:
                found = solve(offers, firm, gross, searched, target_gap, (able,), effort, found.bound_solver)
        if found.score.met:
            return _told(offers, terms, firm, searched, found.chosen, found.bound_solver)
    searched = priced(offers, terms, effort.sooner(0.5))
    found = solve(offers, terms, gross, searched, target_gap, (), effort)
    return Answer(searched, found.chosen, found.score, found.bound_solver, terms)


def _told(
    offers: Offers, terms: Terms, firm: Terms, searched: Searched, chosen: Ints, bound_solver: float
) -> Answer:
    """An answer that meets the request, at the given shortfall price where the bound's prices keep within it."""
    inside = bool((searched.prices.shed <= terms.shortfall_price_per_kw).all())
    if inside and bound_solver <= searched.bound.value:
        return Answer(searched, chosen, score(offers, terms, chosen), -np.inf, terms)
    return Answer(searched, chosen, score(offers, firm, chosen), bound_solver, firm)


def _dearest(offers: Offers, terms: Terms) -> float:
    """What no choice that meets the request can cost more than: a bound above it proves that there is none."""
    top = np.zeros(offers.site_count)
    np.maximum.at(top, offers.site, offers.cost)
    most = np.zeros((offers.site_count, offers.kw.shape[1]))
    np.maximum.at(most, offers.site, offers.kw)
    return float(top.sum() + most.sum(axis=0) @ terms.over_price_per_kw)


def _able(offers: Offers, terms: Terms, effort: Effort) -> Ints | None:
    """Candidates that meet the request whatever they cost; None where none were found."""
    asked = float(terms.request_kw.max())
    able = most_of(offers, terms.headroom_kw, terms.request_kw, effort, enough=asked)
    return able.chosen if score(offers, terms, able.chosen).met else None
