"""The search for prices: which shed, over and import prices make the bound as large as it gets.

Owns column and row generation around the linear relaxation: few candidates and few feeder rows are in the model
at a time, every candidate is priced in numpy, and what a price calls for is added. Leaves the bound to bound.py
and the models to choice.py. Any prices found give a valid bound, also when time runs out.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from fleet.bound import Bound, Offers, Prices, Terms, bound_from_prices
from fleet.choice import Choices, Relaxed, relaxation
from sites.units import Bools, Floats, Ints

FEASIBLE_KW: Final = 1e-6
"""A feeder row is kept, a request met, to within this."""
FIRST_PRICE_SHARES: Final = (0.0, 0.01, 0.03, 0.1, 0.2, 0.4, 1.0)
MOST_ROUNDS: Final = 200


@dataclass(frozen=True)
class Searched:
    """Best prices found with their bound, the feeder rows (L, 2: node, interval) met on the way, and x (C,)."""

    prices: Prices
    bound: Bound
    rows: Ints
    x: Floats
    rounds: int


def as_choices(offers: Offers, terms: Terms, columns: Ints, rows: Ints) -> Choices:
    """The model of some candidates (indices) and some feeder rows (L, 2: node, horizon interval)."""
    site = offers.site[columns]
    node, interval = rows[:, 0], rows[:, 1]
    matrix = offers.change_kw[columns][:, interval].T * offers.below[node][:, site]
    return Choices(
        site=site,
        cost=offers.cost[columns],
        kw=offers.kw[columns],
        request_kw=terms.request_kw,
        allowance_kw=terms.allowance_kw,
        shortfall_price_per_kw=terms.shortfall_price_per_kw,
        over_price_per_kw=terms.over_price_per_kw,
        rows=matrix,
        room=terms.headroom_kw[node, interval],
    )


def can_bind(offers: Offers, terms: Terms) -> Bools:
    """(J, T) feeder rows that some choice could break: the sum over sites below of the largest change > room.

    Interval arithmetic: each site gives at most max(0, its largest change), whatever else is chosen.
    """
    most = np.maximum(largest_by_site(offers.site, offers.change_kw, offers.site_count), 0.0)
    result: Bools = offers.below.astype(np.float64) @ most > terms.headroom_kw
    return result


def largest_by_site(site: Ints, values: Floats, site_count: int) -> Floats:
    """(N, ...) largest value of each site's candidates, -inf for a site without one; `site` is sorted."""
    result = np.full((site_count, *values.shape[1:]), -np.inf)
    if site.size:
        firsts = np.flatnonzero(np.r_[True, np.diff(site) != 0])
        result[site[firsts]] = np.maximum.reduceat(values, firsts, axis=0)
    return result


def node_change_kw(offers: Offers, weight: Floats) -> Floats:
    """(J, T) change of load in each node when each candidate is taken `weight` (C,) times."""
    used = np.flatnonzero(weight)
    by_site = np.zeros((offers.site_count, offers.change_kw.shape[1]))
    np.add.at(by_site, offers.site[used], weight[used, None] * offers.change_kw[used])
    result: Floats = offers.below.astype(np.float64) @ by_site
    return result


def search(
    offers: Offers, terms: Terms, seconds: float, tolerance: float, stopwatch: Callable[[], float]
) -> Searched:
    """Prices whose bound is within `tolerance` (money) of the relaxation's optimum, or the best in `seconds`."""
    end = stopwatch() + seconds
    coupled = can_bind(offers, terms)
    columns, best, prices = _first_columns(offers, terms)
    rows = np.zeros((0, 2), dtype=np.int64)
    x = np.zeros(offers.site.size)
    rounds = 0
    while rounds < MOST_ROUNDS and stopwatch() < end:
        rounds += 1
        members = np.flatnonzero(columns)
        relaxed = relaxation(as_choices(offers, terms, members, rows))
        if not relaxed.status.is_ok:
            break
        x = np.zeros(offers.site.size)
        x[members] = relaxed.x
        told = _prices(relaxed, rows, terms)
        wanted = np.zeros_like(columns)
        for trial in (_between(prices, told), told):
            bound = bound_from_prices(offers, terms, trial)
            wanted |= (bound.candidate_value <= bound.best[offers.site]) & (bound.candidate_value < 0.0)
            if bound.value > best.value:
                best, prices = bound, trial
        broken = coupled & (node_change_kw(offers, x) > terms.headroom_kw + FEASIBLE_KW)
        broken[rows[:, 0], rows[:, 1]] = False
        new = wanted & ~columns
        if not broken.any() and (relaxed.objective - best.value <= tolerance or not new.any()):
            break
        columns |= new
        rows = np.concatenate([rows, np.argwhere(broken)])
    return Searched(prices, best, rows, x, rounds)


def _first_columns(offers: Offers, terms: Terms) -> tuple[Bools, Bound, Prices]:
    """Candidates that flat prices call for, and the best of those prices."""
    none = np.zeros_like(terms.headroom_kw)
    columns = np.zeros(offers.site.size, dtype=np.bool_)
    found: list[tuple[Bound, Prices]] = []
    for share in FIRST_PRICE_SHARES:
        prices = Prices(share * terms.shortfall_price_per_kw, np.zeros(terms.request_kw.size), none)
        bound = bound_from_prices(offers, terms, prices)
        columns |= (bound.candidate_value <= bound.best[offers.site]) & (bound.candidate_value < 0.0)
        found.append((bound, prices))
    best, at = max(found, key=lambda pair: pair[0].value)
    return columns, best, at


def _prices(relaxed: Relaxed, rows: Ints, terms: Terms) -> Prices:
    """Prices of a relaxation, brought back into their ranges where a tolerance let them out."""
    importing = np.zeros_like(terms.headroom_kw)
    importing[rows[:, 0], rows[:, 1]] = np.maximum(relaxed.price_rows, 0.0)
    return Prices(
        np.clip(relaxed.price_shed, 0.0, terms.shortfall_price_per_kw),
        np.clip(relaxed.price_over, 0.0, terms.over_price_per_kw),
        importing,
    )


def _between(first: Prices, second: Prices) -> Prices:
    """Half way: prices of a relaxation with few columns jump about, and their mean is the better guess."""
    return Prices(
        0.5 * (first.shed + second.shed),
        0.5 * (first.over + second.over),
        0.5 * (first.importing + second.importing),
    )
