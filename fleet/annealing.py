"""Annealing of a choice: many random moves of single sites, ever fewer of them uphill (Kirkpatrick et al. 1983).

Owns how a choice and its candidates are laid out for the compiled loop (annealing_loop.py), and the schedule. It
finds what prices and small models miss where feeders are tight: sites whose recoveries have to fit beside each other.
Moves are counted, the chance has a fixed seed. An answer is an offer only: whoever asks scores it again.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from fleet.bound import Offers, Terms
from fleet.prices import Searched, node_change_kw
from sites.units import Bools, Floats, Ints

EACH: Final = 100
"""Candidates of a site that are tried, of least regret; a better one the more often."""
MOVES_PER_SITE: Final = 30_000
MOST_MOVES: Final = 8_000_000
SLICES: Final = 16
"""Times that a cooling looks whether to stop."""
SEED: Final = 20_260_101


@dataclass(frozen=True)
class Cooling:
    """Heat as shares of a site's usual cost, weight of shortfall and broken rows; hard: rows are never broken."""

    heat: tuple[float, float]
    weight: tuple[float, float]
    hard: bool


TIGHT: Final = (
    Cooling((1.0, 0.01), (1.0, 30.0), True),
    Cooling((0.3, 0.01), (1.0, 30.0), True),
    Cooling((0.3, 0.01), (1.0, 100.0), False),
)
"""Where feeder rows may bind: within them, then through choices that break them."""
FREE: Final = (Cooling((0.1, 0.01), (1.0, 10.0), True), Cooling((0.05, 0.005), (1.0, 10.0), True))
"""Where no row can bind: prices tell nearly all, and little heat is enough."""


@dataclass(frozen=True)
class _Layout:
    """Candidates (M, indices over all offers) by site and regret, and the arrays of the loop that never change."""

    candidate: Ints
    local: Ints
    """(M,) site among those with candidates"""
    event: tuple[Floats, Floats, Floats, Floats, Floats, Floats]
    sites: tuple[Ints, Ints, Ints]
    rows: tuple[Ints, Ints, Ints, Floats, Floats, Floats]
    short_guess: Floats
    places: Ints
    """(L, 2: node, interval) the feeder rows"""


def annealed(
    offers: Offers,
    terms: Terms,
    searched: Searched,
    gross: Floats,
    chosen: Ints,
    coupled: Bools,
    stop: Callable[[], bool] = lambda: False,
) -> Ints:
    """The best choice met on the way from `chosen`, which keeps the feeder rows; `chosen` where none is better.

    gross (C,): size of each candidate's cost, for the heat; coupled (J, T): rows that can bind; stop ends it early.
    """
    if offers.site.size == 0 or stop():
        return chosen
    layout = _layout(offers, terms, searched, chosen, coupled)
    usual = _usual(offers, gross, chosen)
    seed: Any = np.uint64(SEED)
    best = chosen
    for cooling in TIGHT if len(layout.places) else FREE:
        best, seed = _cooled(offers, terms, layout, best, cooling, usual, seed, stop)
        if stop():
            break
    return best


def _cooled(
    offers: Offers,
    terms: Terms,
    layout: _Layout,
    chosen: Ints,
    cooling: Cooling,
    usual: float,
    seed: Any,
    stop: Callable[[], bool],
) -> tuple[Ints, Any]:
    """One cooling from a choice, in slices."""
    from fleet.annealing_loop import cool  # numba is loaded, and compiles, only where it is used

    state, sums = _state(offers, terms, layout, chosen)
    best = state[0].copy()
    count = min(MOVES_PER_SITE * layout.sites[0].size, MOST_MOVES) // SLICES
    heats, weights = (np.geomspace(*ends, SLICES + 1) for ends in (cooling.heat, cooling.weight))
    for k in range(SLICES):
        if stop():
            break
        seed = cool(
            layout.event,
            layout.short_guess,
            layout.sites,
            layout.rows,
            state,
            sums,
            best,
            (usual * float(heats[k]), usual * float(heats[k + 1])),
            (float(weights[k]), float(weights[k + 1])),
            cooling.hard,
            count,
            np.uint64(seed),
        )
    return np.sort(layout.candidate[best[best >= 0]]), seed


def _usual(offers: Offers, gross: Floats, chosen: Ints) -> float:
    """The usual cost of a site: what the called ones cost, over all that could be."""
    count = np.unique(offers.site).size
    called = float(gross[chosen].sum()) / count
    return max(called, 1e-3 * float(np.abs(offers.cost).mean()), 1e-9)


def _layout(offers: Offers, terms: Terms, searched: Searched, chosen: Ints, coupled: Bools) -> _Layout:
    """Arrays of the loop, of the EACH candidates of least regret of each site and those chosen."""
    regret = searched.bound.regret(offers.site)
    order = np.lexsort((regret, offers.site))
    firsts = np.flatnonzero(np.r_[True, np.diff(offers.site[order]) != 0])
    rank = np.arange(order.size) - np.repeat(firsts, np.diff(np.r_[firsts, order.size]))
    candidate = order[(rank < EACH) | np.isin(order, chosen)]
    sites, local, size = np.unique(offers.site[candidate], return_inverse=True, return_counts=True)
    nodes, intervals = np.flatnonzero(coupled.any(axis=1)), np.flatnonzero(coupled.any(axis=0))
    place, column = np.nonzero(coupled[np.ix_(nodes, intervals)])
    at = nodes[place], intervals[column]
    below = offers.below[np.ix_(nodes, sites)]
    node_at = np.r_[0, np.cumsum(below.sum(axis=0))].astype(np.int64)
    price, guess = _guesses(searched, at)
    return _Layout(
        candidate=candidate,
        local=local,
        event=(
            offers.cost[candidate],
            np.ascontiguousarray(offers.kw[candidate]),
            terms.request_kw,
            terms.request_kw + terms.allowance_kw,
            terms.shortfall_price_per_kw,
            terms.over_price_per_kw,
        ),
        sites=(np.r_[0, np.cumsum(size)[:-1]].astype(np.int64), size.astype(np.int64), node_at),
        rows=(
            np.nonzero(below.T)[1].astype(np.int64),
            np.searchsorted(place, np.arange(nodes.size + 1)).astype(np.int64),
            column.astype(np.int64),
            np.ascontiguousarray(offers.change_kw[np.ix_(candidate, intervals)]),
            terms.headroom_kw[at],
            price,
        ),
        short_guess=guess,
        places=np.stack(at, axis=1),
    )


def _guesses(searched: Searched, at: tuple[Ints, Ints]) -> tuple[Floats, Floats]:
    """Prices of rows (L,) and of shortfall (E,) to search with: the bound's, nowhere below their mean."""
    shed, rows = searched.prices.shed, searched.prices.importing[at]
    usual = max(float(shed.mean()), 1e-6)
    priced = rows[rows > 0.0]
    least = float(priced.mean()) if priced.size else usual
    return np.maximum(rows, least), np.maximum(shed, usual)


def _state(
    offers: Offers, terms: Terms, layout: _Layout, chosen: Ints
) -> tuple[tuple[Ints, Floats, Floats], Floats]:
    """Candidate of each site, kW given, load of the rows; then objective, kW broken and the objective again."""
    held = np.flatnonzero(np.isin(layout.candidate, chosen))
    current = np.full(layout.sites[0].size, -1, dtype=np.int64)
    current[layout.local[held]] = held
    given = offers.kw[chosen].sum(axis=0)
    weight = np.zeros(offers.site.size)
    weight[chosen] = 1.0
    load = node_change_kw(offers, weight)[layout.places[:, 0], layout.places[:, 1]]
    objective = float(
        offers.cost[chosen].sum()
        + terms.shortfall_price_per_kw @ np.maximum(terms.request_kw - given, 0.0)
        + terms.over_price_per_kw @ np.maximum(given - terms.request_kw - terms.allowance_kw, 0.0)
    )
    return (current, given, load), np.array([objective, 0.0, objective])
