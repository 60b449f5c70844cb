"""The most that can be given: in each event interval alone, and in all of them together.

Owns what a quote tells of the fleet. Costs are not read: this is what could be had, at whatever price.
"""

from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from fleet.bound import Offers, Terms
from fleet.choice import factor_of, most_kw
from fleet.choices import Most, Status
from fleet.effort import STEADY, Effort, within
from fleet.feeders import Feeders
from fleet.improve import repaired
from fleet.offers import offered, offers_of
from fleet.prices import FEASIBLE_KW, as_choices, largest, rows_that_bind, search
from sites.quotes import DenseQuotes
from sites.units import Bools, Floats, Ints

MODEL_COLUMNS: Final = 1200
MOST_WORK: Final = (1000, 400)
ALONE_WORK: Final = (100, 150)
"""Nodes and checks of a model's solver: of all intervals together, and of one alone."""


@dataclass(frozen=True)
class Available:
    """available_kw (E,): the most in each interval taken alone; sustained_kw: callable in all of them together."""

    available_kw: Floats
    sustained_kw: float
    proven: bool
    """No larger figure is possible beyond 0.1 %; else a larger one may be, and this one can still be called"""


def most(
    quotes: DenseQuotes,
    feeders: Feeders,
    headroom_kw: Floats,
    node_id: str,
    delivery_factor: Floats,
    allowed: Bools,
    seconds: float | None = None,
) -> Available:
    """What allowed sites (N,) at or below a node can give there, feeder limits (J, T) kept.

    Both figures are rounded down to 0.001 kW; a request for sustained_kw can be met. Raises FleetError on an
    unknown node.
    """
    kept = offered(quotes, feeders, [node_id], allowed)
    offers = offers_of(quotes, feeders, delivery_factor, np.zeros(quotes.site_count), kept)
    intervals = offers.kw.shape[1]
    effort = within(seconds)
    together = most_of(offers, headroom_kw, np.ones(intervals), effort.sooner(0.5))
    available, proven = _alone(offers, headroom_kw, effort, together.chosen)
    return Available(available, together.kw, proven and together.status is Status.PROVEN)


def sustained(
    quotes: DenseQuotes,
    feeders: Feeders,
    headroom_kw: Floats,
    node_id: str,
    delivery_factor: Floats,
    allowed: Bools,
) -> Most:
    """The most in all intervals together, as `most` tells it, without that of each interval alone."""
    kept = offered(quotes, feeders, [node_id], allowed)
    offers = offers_of(quotes, feeders, delivery_factor, np.zeros(quotes.site_count), kept)
    return most_of(offers, headroom_kw, np.ones(offers.kw.shape[1]))


def most_of(
    offers: Offers,
    headroom_kw: Floats,
    profile: Floats,
    effort: Effort = STEADY,
    enough: float = np.inf,
    allowed_work: tuple[int, int] = MOST_WORK,
) -> Most:
    """The most of a profile (E,) that keeps every feeder row, in kW of the profile's largest value.

    Prices first, then one model of the candidates of least regret and all feeder rows they could break. `chosen`
    are indices into the offers. Stops where `enough` kW is reached, and before any model where prices prove that
    it cannot be.
    """
    nothing = np.zeros(0, dtype=np.int64)
    if offers.site.size == 0:
        return Most(Status.PROVEN, 0.0, nothing)
    shape = profile / profile.max()
    free = replace(offers, cost=np.zeros(offers.site.size))
    terms = _no_terms(offers, headroom_kw, shape)
    searched = search(free, terms, largest(shape), 0.0, effort)
    ceiling = -searched.bound.value
    if np.isfinite(enough) and ceiling < enough - FEASIBLE_KW:
        return Most(Status.INFEASIBLE, 0.0, nothing)
    regret = searched.bound.regret(offers.site)
    columns = np.union1d(np.argsort(regret, kind="stable")[:MODEL_COLUMNS], np.flatnonzero(searched.x > 0.0))
    rows = rows_that_bind(free, terms, columns)
    model = as_choices(free, terms, columns, rows)
    told = most_kw(model, shape, effort.work(*allowed_work), min(enough, 0.9999 * ceiling))
    chosen = repaired(offers, terms, columns[told.chosen]) if told.chosen.size else nothing
    kw = factor_of(offers.kw[chosen], shape)
    if not told.status.is_ok:
        return Most(told.status, kw, chosen)
    whole = (
        columns.size == offers.site.size and told.status is Status.PROVEN and chosen.size == told.chosen.size
    )
    proven = kw >= 0.999 * ceiling - 0.001 or (whole and not np.isfinite(enough))
    return Most(Status.PROVEN if proven else Status.FEASIBLE_CUT_SHORT, kw, chosen)


def _no_terms(offers: Offers, headroom_kw: Floats, shape: Floats) -> Terms:
    """Terms with nothing asked; a price may be as large as the profile's shape (E,) allows a weight to be."""
    none = np.zeros(shape.size)
    cap = np.divide(1.0, shape, out=np.zeros(shape.size), where=shape > 0.0)
    return Terms(none, none, cap, none, headroom_kw)


def _alone(offers: Offers, headroom_kw: Floats, effort: Effort, known: Ints) -> tuple[Floats, bool]:
    """(E,) most of each interval alone: every site's best where that keeps the feeders, else by model.

    A model cut short is never taken for nothing: every site's best less what breaks a feeder, and the choice
    `known` for all intervals together, are answers too.
    """
    intervals = offers.kw.shape[1]
    result = np.zeros(intervals)
    proven = True
    terms = _no_terms(offers, headroom_kw, np.ones(intervals))
    for e in range(intervals):
        best = _best_each(offers, e)
        kept = repaired(offers, terms, best)
        only = np.eye(intervals)[e]
        result[e] = max(factor_of(offers.kw[kept], only), factor_of(offers.kw[known], only))
        if kept.size < best.size:
            answer = most_of(
                offers, headroom_kw, only, effort.sooner(1.0 / (intervals - e)), allowed_work=ALONE_WORK
            )
            result[e] = max(result[e], answer.kw)
            proven = proven and answer.status is Status.PROVEN
    return result, proven


def _best_each(offers: Offers, interval: int) -> Ints:
    """Each site's candidate of most kW in an interval, where that is above 0."""
    kw = offers.kw[:, interval]
    order = np.lexsort((-kw, offers.site))
    _, first = np.unique(offers.site[order], return_index=True)
    best = order[first]
    return best[kw[best] > 0.0]
