"""Local improvement of a choice, and its score: plain numpy over all moves at once.

A move puts a site on another candidate or takes it out. Single moves and pairs of moves of two sites are tried
until none helps. Feeder rows are hard: a move that breaks one is never taken.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from fleet.bound import Offers, Terms
from fleet.prices import FEASIBLE_KW, node_change_kw
from sites.units import Bools, Floats, Ints

LEAST_GAIN: Final = 1e-9
PAIRS_TRIED: Final = 300
MOST_MOVES: Final = 900
"""Moves of which pairs are tried."""
MOST_SINGLES: Final = 20_000
SINGLES_TRIED: Final = 3000
"""Moves looked at by themselves, and of these how many are held against the feeders, best first."""
MOST_STEPS: Final = 300
MOST_PAIRS: Final = 40


@dataclass(frozen=True)
class Score:
    """What a choice comes to, recomputed from its candidates."""

    objective: float
    cost: float
    shortfall_kw: Floats
    over_kw: Floats
    given_kw: Floats
    node_kw: Floats
    """(J, T) change of load in each node"""
    keeps_limits: bool

    @property
    def met(self) -> bool:
        """No interval is short."""
        return not bool(self.shortfall_kw.any())


def score(offers: Offers, terms: Terms, chosen: Ints) -> Score:
    """The objective of candidates `chosen` (indices, one a site at most) from the arrays alone.

    A shortfall within 1e-6 kW counts as met; where nothing is asked nothing lacks and nothing is too much.
    """
    given = offers.kw[chosen].sum(axis=0)
    short = terms.request_kw - given
    short = np.where((short > FEASIBLE_KW) & (terms.request_kw > 0.0), short, 0.0)
    over = np.maximum(given - terms.request_kw - terms.allowance_kw, 0.0)
    over = np.where(terms.request_kw > 0.0, over, 0.0)
    weight = np.zeros(offers.site.size)
    weight[chosen] = 1.0
    node = node_change_kw(offers, weight)
    cost = float(offers.cost[chosen].sum())
    priced = float(terms.shortfall_price_per_kw @ short + terms.over_price_per_kw @ over)
    kept = bool((node <= terms.headroom_kw + FEASIBLE_KW).all())
    kept = kept and np.unique(offers.site[chosen]).size == chosen.size
    return Score(cost + priced, cost, short, over, given, node, kept)


def repaired(offers: Offers, terms: Terms, chosen: Ints) -> Ints:
    """A choice without the candidates that add most where a feeder row is broken worst, until none is."""
    weight = np.zeros(offers.site.size)
    weight[chosen] = 1.0
    excess = node_change_kw(offers, weight) - terms.headroom_kw
    while chosen.size:
        node, interval = np.unravel_index(int(excess.argmax()), excess.shape)
        if excess[node, interval] <= FEASIBLE_KW:
            break
        added = offers.change_kw[chosen, interval] * offers.below[node, offers.site[chosen]]
        enough = added >= excess[node, interval]
        cost_of_loss = offers.kw[chosen].sum(axis=1)
        drop = int(np.where(enough, cost_of_loss, np.inf).argmin()) if enough.any() else int(added.argmax())
        gone = chosen[drop]
        excess -= offers.below[:, offers.site[gone], None] * offers.change_kw[gone]
        chosen = np.delete(chosen, drop)
    return chosen


@dataclass(frozen=True)
class _Moves:
    """Moves (M): a candidate, or -1 = the site stays out; the feeder rows that could matter (R intervals)."""

    candidate: Ints
    site: Ints
    cost: Floats
    kw: Floats
    change_kw: Floats
    below: Bools
    headroom_kw: Floats


def improve(
    offers: Offers,
    terms: Terms,
    chosen: Ints,
    columns: Ints,
    coupled: Bools,
    stop: Callable[[], bool] = lambda: False,
) -> Ints:
    """A choice at least as good as `chosen`, reached by moves to candidates `columns` (indices, best first).

    chosen must keep the feeder rows; coupled (J, T) are the rows that can bind at all. At most MOST_STEPS steps, of
    two sites MOST_PAIRS of them; stop() ends it earlier.
    """
    columns = np.concatenate([chosen, columns[~np.isin(columns, chosen)][:MOST_SINGLES]])
    moves = _moves(offers, terms, columns, coupled)
    current = np.full(offers.site_count, -1, dtype=np.int64)
    current[offers.site[chosen]] = chosen
    steps = pairs = 0
    while offers.site.size and steps < MOST_STEPS and pairs < MOST_PAIRS and not stop():
        step = _best_step(offers, terms, moves, current)
        if step.size == 0:
            break
        current[moves.site[step]] = moves.candidate[step]
        steps, pairs = steps + 1, pairs + int(step.size > 1)
    return np.sort(current[current >= 0])


def _moves(offers: Offers, terms: Terms, columns: Ints, coupled: Bools) -> _Moves:
    nodes, intervals = np.flatnonzero(coupled.any(axis=1)), np.flatnonzero(coupled.any(axis=0))
    out = np.arange(offers.site_count)
    none = np.zeros((out.size, 1))
    change = offers.change_kw[np.ix_(columns, intervals)]
    return _Moves(
        candidate=np.r_[np.full(out.size, -1), columns],
        site=np.r_[out, offers.site[columns]],
        cost=np.r_[none[:, 0], offers.cost[columns]],
        kw=np.concatenate([np.repeat(none, offers.kw.shape[1], axis=1), offers.kw[columns]]),
        change_kw=np.concatenate([np.repeat(none, intervals.size, axis=1), change]),
        below=offers.below[nodes],
        headroom_kw=terms.headroom_kw[np.ix_(nodes, intervals)],
    )


def _best_step(offers: Offers, terms: Terms, moves: _Moves, current: Ints) -> Ints:
    """Indices of the one or two moves that together gain most and keep the feeder rows; empty = none."""
    taken = current >= 0
    held = np.where(taken, current, 0)
    present_kw = np.where(taken[:, None], offers.kw[held], 0.0)
    present_cost = np.where(taken, offers.cost[held], 0.0)
    intervals = moves.headroom_kw.shape[1]
    present_change = _present_change(offers, moves, current, intervals)
    given = present_kw.sum(axis=0)
    kw = moves.kw - present_kw[moves.site]
    cost = moves.cost - present_cost[moves.site]
    change = moves.change_kw - present_change[moves.site]
    room = moves.headroom_kw - moves.below.astype(np.float64) @ present_change
    now = float(_penalty(terms, given[None, :])[0])
    single = cost + _penalty(terms, given + kw) - now
    step = _first_kept(np.argsort(single)[:SINGLES_TRIED, None], single[:, None], change, moves, room)
    if step.size:
        return step
    real = np.flatnonzero(moves.candidate != current[moves.site])[:MOST_MOVES]
    pair = cost[real, None] + cost[None, real] + _pair_penalty(terms, given, kw[real]) - now
    pair[moves.site[real, None] == moves.site[None, real]] = np.inf
    flat = np.flatnonzero(pair < -LEAST_GAIN)
    flat = flat[np.argsort(pair.ravel()[flat], kind="stable")][: 2 * PAIRS_TRIED]
    both = np.stack(np.unravel_index(flat, pair.shape), axis=1)
    return _first_kept(real[both], None, change, moves, room)


def _present_change(offers: Offers, moves: _Moves, current: Ints, intervals: int) -> Floats:
    """(N, R) change of each site as it stands; read from the moves, where every held candidate is one."""
    place = np.full(offers.site.size + 1, -1, dtype=np.int64)
    place[moves.candidate] = np.arange(moves.candidate.size)
    present = np.zeros((offers.site_count, intervals))
    taken = np.flatnonzero(current >= 0)
    present[taken] = moves.change_kw[place[current[taken]]]
    return present


def _penalty(terms: Terms, given: Floats) -> Floats:
    """(M,) price of shortfall and over-delivery for given kW (M, E)."""
    short = np.maximum(terms.request_kw - given, 0.0)
    over = np.maximum(given - terms.request_kw - terms.allowance_kw, 0.0)
    result: Floats = short @ terms.shortfall_price_per_kw + over @ terms.over_price_per_kw
    return result


def _pair_penalty(terms: Terms, given: Floats, kw: Floats) -> Floats:
    """(M, M) price of shortfall and over-delivery after two moves; one interval at a time to save memory."""
    total = np.zeros((kw.shape[0], kw.shape[0]))
    for e in range(terms.request_kw.size):
        level = given[e] + kw[:, e][:, None] + kw[:, e][None, :] - terms.request_kw[e]
        total += np.where(
            level < 0.0,
            -level * terms.shortfall_price_per_kw[e],
            np.maximum(level - terms.allowance_kw[e], 0.0) * terms.over_price_per_kw[e],
        )
    return total


def _first_kept(steps: Ints, gain: Floats | None, change: Floats, moves: _Moves, room: Floats) -> Ints:
    """The first step (S, moves in it) that keeps all feeder rows; with `gain`, only steps that gain."""
    if gain is not None:
        steps = steps[gain[steps[:, 0], 0] < -LEAST_GAIN]
    if steps.size == 0:
        return np.zeros(0, dtype=np.int64)
    fits = np.ones(len(steps), dtype=np.bool_)
    for node in range(moves.below.shape[0]):
        inside = moves.below[node][moves.site[steps]]
        added = np.einsum("sm,smr->sr", inside, change[steps])
        fits &= ((added <= room[node] + FEASIBLE_KW) | (added <= 0.0)).all(axis=1)
    kept = np.flatnonzero(fits)
    return steps[kept[0]] if kept.size else np.zeros(0, dtype=np.int64)
