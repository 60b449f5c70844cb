"""The search for prices: which shed, over and import prices make the bound as large as it gets.

Owns what follows the climb to near-best prices: the linear relaxation of the sites that those leave undecided, with
column and row generation (few candidates and feeder rows in the model at a time, every candidate priced in numpy,
and what a price calls for added). Leaves the bound to bound.py, the climb to climb.py, the models to choice.py. Any
prices found give a valid bound, also when time runs out.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from fleet.bound import Bound, Offers, Prices, Terms, bound_from_prices
from fleet.choice import relaxation
from fleet.choices import Choices, Relaxed
from fleet.climb import WIDE, climb
from fleet.effort import Effort
from sites.units import Bools, Floats, Ints

FEASIBLE_KW: Final = 1e-6
"""A feeder row is kept, a request met, to within this."""
NEAR_SHARE: Final = 0.8
"""Feeder rows that the relaxation fills by more than this stand in the models of whole candidates."""
FIRST_PRICE_SHARES: Final = (0.0, 0.01, 0.03, 0.1, 0.2, 0.4, 1.0)
ROW_PRICES: Final = 20.0
"""A broken feeder row costs this many times the dearest kW in a search; no answer breaks one."""
MOST_ROUNDS: Final = 200
POLISH_ROUNDS: Final = 12
FIRST_COLUMNS: Final = 1500
POLISH_COLUMNS: Final = 4000
"""Candidates of undecided sites, at the start and at the end, whose relaxation is solved exactly after the climb."""


@dataclass(frozen=True)
class Aim:
    """What is relaxed, the shed prices (E,) to start from, and how told ones are brought into their range."""

    relax: Callable[[Choices], Relaxed]
    first: tuple[Floats, ...]
    within: Callable[[Floats], Floats]


@dataclass(frozen=True)
class Searched:
    """Best prices found with their bound, the relaxation's x (C,) and the feeder rows it comes near."""

    prices: Prices
    bound: Bound
    rows: Ints
    """(L, 2: node, horizon interval), those that held the relaxation and those it fills by NEAR_SHARE"""
    x: Floats
    rounds: int


def cheapest(terms: Terms) -> Aim:
    """The aim of an allocation: least money at the prices of `terms`."""
    cap = terms.shortfall_price_per_kw
    return Aim(
        relaxation, tuple(share * cap for share in FIRST_PRICE_SHARES), lambda shed: np.clip(shed, 0.0, cap)
    )


def largest(profile: Floats) -> Aim:
    """The aim of the most: the largest factor of a profile (E,). Prices are weights with weights.profile = 1.

    With cost 0 the bound of such prices is the negative of a factor that cannot be passed.
    """

    def within(shed: Floats) -> Floats:
        weights = np.where(profile > 0.0, np.maximum(shed, 0.0), 0.0)
        total = float(weights @ profile)
        return np.asarray(
            weights / total if total > 0.0 else (profile > 0.0) / profile.sum(), dtype=np.float64
        )

    return Aim(lambda choices: relaxation(choices, profile=profile), (within(np.ones(profile.size)),), within)


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


def rows_that_bind(offers: Offers, terms: Terms, columns: Ints) -> Ints:
    """Feeder rows (L, 2: node, interval) that some choice of these candidates (indices) alone could break."""
    part = replace(
        offers,
        site=offers.site[columns],
        cost=offers.cost[columns],
        kw=offers.kw[columns],
        change_kw=offers.change_kw[columns],
    )
    return np.argwhere(can_bind(part, terms)).astype(np.int64)


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


def priced(offers: Offers, terms: Terms, effort: Effort) -> Searched:
    """Prices for the least money: climbed to, then made exact on the sites that they leave undecided."""
    coupled = can_bind(offers, terms)
    climbed = climb(offers, terms, np.argwhere(coupled), effort.stop)
    prices, best = climbed.prices, bound_from_prices(offers, terms, climbed.prices)
    rounds, x = 0, _shares(best, offers)
    columns = _open_some(best, offers, climbed.tau)
    rows = prices.importing > 0.0
    while rounds < POLISH_ROUNDS and 0 < columns.sum() <= POLISH_COLUMNS and not effort.over:
        rounds += 1
        members, taken, rest = _undecided(offers, terms, best, columns)
        held = np.argwhere(rows)
        model = replace(as_choices(offers, rest, members, held), row_price=row_price(terms, prices))
        relaxed = relaxation(model)
        if not relaxed.status.is_ok:
            break
        x = np.zeros(offers.site.size)
        x[taken], x[members] = 1.0, relaxed.x
        told = _prices(relaxed, held, terms, cheapest(terms))
        total = relaxed.objective + float(offers.cost[taken].sum())
        broken = coupled & ~rows & (node_change_kw(offers, x) > terms.headroom_kw + FEASIBLE_KW)
        wanted = np.zeros_like(columns)
        for trial in (_between(prices, told), told):
            there = bound_from_prices(offers, terms, trial)
            wanted |= _wanted(there, offers)
            if there.value > best.value:
                best, prices = there, trial
        new = wanted & (x < 1.0) & ~columns
        if not broken.any() and (not new.any() or total - best.value <= 1e-9 * (1.0 + abs(total))):
            break
        columns |= new | _rivals(best, offers, new)
        rows |= broken
    near = coupled & (node_change_kw(offers, x) > NEAR_SHARE * terms.headroom_kw)
    return Searched(prices, best, np.argwhere(near | rows), x, climbed.steps + rounds)


def row_price(terms: Terms, prices: Prices) -> float:
    """Money for each kW by which a feeder row is broken in a search: far beyond any price found, and any kW's."""
    dearest = max(float(prices.importing.max(initial=0.0)), float(prices.shed.max(initial=0.0)))
    return ROW_PRICES * max(dearest, float(terms.over_price_per_kw.max(initial=0.0)), 1e-6)


def _wanted(bound: Bound, offers: Offers) -> Bools:
    """Candidates that are their site's best answer, better than staying out."""
    wanted: Bools = (bound.candidate_value <= bound.best[offers.site]) & (bound.candidate_value < 0.0)
    return wanted


def _shares(bound: Bound, offers: Offers) -> Floats:
    """1 for each site's best answer (the first of equal ones), 0 for the others."""
    x = np.zeros(offers.site.size)
    columns = np.flatnonzero(_wanted(bound, offers))
    _, first = np.unique(offers.site[columns], return_index=True)
    x[columns[first]] = 1.0
    return x


def _open(bound: Bound, offers: Offers, reach: float) -> Bools:
    """Candidates within reach of the best, of sites where they are not the only answer within reach."""
    near = bound.regret(offers.site) <= reach
    answers = np.bincount(offers.site[near], minlength=offers.site_count)
    answers += bound.best >= -reach
    return np.asarray(near & (answers[offers.site] > 1), dtype=np.bool_)


def _open_some(bound: Bound, offers: Offers, tau: float) -> Bools:
    """The same, with a reach that leaves FIRST_COLUMNS at most; the climb's prices are good to some tau."""
    reach = 2.0 * WIDE * tau
    columns = _open(bound, offers, reach)
    while columns.sum() > FIRST_COLUMNS and reach > tau:
        reach *= 0.7
        columns = _open(bound, offers, reach)
    return columns


def _rivals(bound: Bound, offers: Offers, wanted: Bools) -> Bools:
    """The best answers of sites that were held fixed and now have another one too."""
    sites = np.zeros(offers.site_count, dtype=np.bool_)
    sites[offers.site[wanted]] = True
    return _wanted(bound, offers) & sites[offers.site]


def _undecided(offers: Offers, terms: Terms, bound: Bound, columns: Bools) -> tuple[Ints, Ints, Terms]:
    """Open candidates, those taken of all other sites, and what is left to ask once these are taken."""
    free = np.zeros(offers.site_count, dtype=np.bool_)
    free[offers.site[columns]] = True
    taken = np.flatnonzero((_shares(bound, offers) > 0.0) & ~free[offers.site])
    return np.flatnonzero(columns), taken, less(offers, terms, taken)


def less(offers: Offers, terms: Terms, taken: Ints) -> Terms:
    """What is left to ask, and what room, once some candidates are taken."""
    weight = np.zeros(offers.site.size)
    weight[taken] = 1.0
    return replace(
        terms,
        request_kw=terms.request_kw - offers.kw[taken].sum(axis=0),
        headroom_kw=terms.headroom_kw - node_change_kw(offers, weight),
    )


def search(offers: Offers, terms: Terms, aim: Aim, tolerance: float, effort: Effort) -> Searched:
    """Prices whose bound is within `tolerance` of the relaxation's optimum, or the best found in time."""
    coupled = can_bind(offers, terms)
    columns, best, prices = _first_columns(offers, terms, aim)
    rows = np.zeros((0, 2), dtype=np.int64)
    x = np.zeros(offers.site.size)
    rounds = 0
    while rounds < MOST_ROUNDS and not effort.over:
        rounds += 1
        members = np.flatnonzero(columns)
        relaxed = aim.relax(as_choices(offers, terms, members, rows))
        if not relaxed.status.is_ok:
            break
        x = np.zeros(offers.site.size)
        x[members] = relaxed.x
        told = _prices(relaxed, rows, terms, aim)
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
    near = coupled & (node_change_kw(offers, x) > NEAR_SHARE * terms.headroom_kw)
    near[rows[:, 0], rows[:, 1]] = True
    return Searched(prices, best, np.argwhere(near), x, rounds)


def _first_columns(offers: Offers, terms: Terms, aim: Aim) -> tuple[Bools, Bound, Prices]:
    """Candidates that the first prices call for, and the best of those prices."""
    none = np.zeros_like(terms.headroom_kw)
    columns = np.zeros(offers.site.size, dtype=np.bool_)
    found: list[tuple[Bound, Prices]] = []
    for shed in aim.first:
        prices = Prices(shed, np.zeros(shed.size), none)
        bound = bound_from_prices(offers, terms, prices)
        columns |= (bound.candidate_value <= bound.best[offers.site]) & (bound.candidate_value < 0.0)
        found.append((bound, prices))
    best, at = max(found, key=lambda pair: pair[0].value)
    return columns, best, at


def _prices(relaxed: Relaxed, rows: Ints, terms: Terms, aim: Aim) -> Prices:
    """Prices of a relaxation, brought back into their ranges where a tolerance let them out."""
    importing = np.zeros_like(terms.headroom_kw)
    importing[rows[:, 0], rows[:, 1]] = np.maximum(relaxed.price_rows, 0.0)
    over = np.zeros(terms.request_kw.size)
    if relaxed.price_over.size:
        over = np.clip(relaxed.price_over, 0.0, terms.over_price_per_kw)
    return Prices(aim.within(relaxed.price_shed), over, importing)


def _between(first: Prices, second: Prices) -> Prices:
    """Half way: prices of a relaxation with few columns jump about, and their mean is the better guess."""
    return Prices(
        0.5 * (first.shed + second.shed),
        0.5 * (first.over + second.over),
        0.5 * (first.importing + second.importing),
    )
