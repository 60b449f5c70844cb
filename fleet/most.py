"""The most that can be given: in each event interval alone, and in all of them together.

Owns what a quote tells of the fleet. Costs are not read: this is what could be had, at whatever price.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from fleet.bound import Offers, Terms
from fleet.choice import Most, Status, most_kw
from fleet.feeders import Feeders
from fleet.offers import offered, offers_of
from fleet.prices import FEASIBLE_KW, as_choices, can_bind, node_change_kw
from sites.quotes import DenseQuotes
from sites.units import Bools, Floats, Ints

LAZY_ROUNDS: Final = 8


@dataclass(frozen=True)
class Available:
    """available_kw (E,): the most in each interval taken alone; sustained_kw: callable in all of them together."""

    available_kw: Floats
    sustained_kw: float
    proven: bool
    """No larger figure is possible beyond 0.01 %; else cut short by time, and still callable"""


def most(
    quotes: DenseQuotes,
    feeders: Feeders,
    headroom_kw: Floats,
    node_id: str,
    delivery_factor: Floats,
    allowed: Bools,
    seconds: float = 5.0,
) -> Available:
    """What allowed sites (N,) at or below a node can give there, feeder limits (J, T) kept.

    Both figures are rounded down to 0.001 kW; a request for sustained_kw can be met. Raises FleetError on an
    unknown node.
    """
    kept = offered(quotes, feeders, node_id, allowed)
    offers = offers_of(quotes, feeders, delivery_factor, np.zeros(quotes.site_count), kept)
    together = most_of(offers, headroom_kw, np.ones(offers.kw.shape[1]), seconds)
    available, proven = _alone(offers, headroom_kw, seconds)
    return Available(available, together.kw, proven and together.status is Status.PROVEN)


def most_of(offers: Offers, headroom_kw: Floats, profile: Floats, seconds: float = 5.0) -> Most:
    """The most of a profile (E,) that keeps every feeder row, in units of kW of the profile's largest value.

    Rows come into the model when an answer breaks them. `chosen` are indices into the offers.
    """
    terms = _no_terms(offers, headroom_kw)
    shape = profile / profile.max()
    every = np.arange(offers.site.size)
    coupled = can_bind(offers, terms)
    rows = np.zeros((0, 2), dtype=np.int64)
    for attempt in range(LAZY_ROUNDS + 1):
        if attempt == LAZY_ROUNDS:
            rows = np.argwhere(coupled)
        answer = most_kw(as_choices(offers, terms, every, rows), shape, seconds)
        broken = np.argwhere(coupled & _breaks(offers, terms, answer.chosen))
        if broken.size == 0:
            return answer
        rows = np.unique(np.concatenate([rows, broken]), axis=0)
    return Most(Status.FAILED, 0.0, np.zeros(0, dtype=np.int64))


def _no_terms(offers: Offers, headroom_kw: Floats) -> Terms:
    none = np.zeros(offers.kw.shape[1])
    return Terms(none, none, none, none, headroom_kw)


def _breaks(offers: Offers, terms: Terms, chosen: Ints) -> Bools:
    """(J, T) feeder rows that a choice breaks."""
    weight = np.zeros(offers.site.size)
    weight[chosen] = 1.0
    result: Bools = node_change_kw(offers, weight) > terms.headroom_kw + FEASIBLE_KW
    return result


def _alone(offers: Offers, headroom_kw: Floats, seconds: float) -> tuple[Floats, bool]:
    """(E,) most of each interval alone: every site's best where that keeps the feeders, else by model."""
    intervals = offers.kw.shape[1]
    result = np.zeros(intervals)
    proven = True
    terms = _no_terms(offers, headroom_kw)
    for e in range(intervals):
        best = _best_each(offers, e)
        if _breaks(offers, terms, best).any():
            answer = most_of(offers, headroom_kw, np.eye(intervals)[e], seconds)
            result[e], proven = answer.kw, proven and answer.status is Status.PROVEN
        else:
            result[e] = np.floor(offers.kw[best, e].sum() * 1000.0 + 1e-9) / 1000.0
    return result, proven


def _best_each(offers: Offers, interval: int) -> Ints:
    """Each site's candidate of most kW in an interval, where that is above 0."""
    kw = offers.kw[:, interval]
    order = np.lexsort((-kw, offers.site))
    _, first = np.unique(offers.site[order], return_index=True)
    best = order[first]
    return best[kw[best] > 0.0]
