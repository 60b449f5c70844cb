"""Candidates arranged for fast pricing: one block for all sites that meet the same feeder rows.

Owns the layout and what prices and shares of candidates come to in it, smoothed or not. Prices are one vector p over
rows: event intervals at least (shed), event intervals at most (over), feeder rows at most.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fleet.bound import Offers, Terms
from sites.units import Floats, Ints


@dataclass(frozen=True)
class Block:
    """Candidates (C) of sites with the same rows, sorted by site."""

    candidate: Ints
    """(C,) index over all offers"""
    group: Ints
    """(C,) site within the block, 0 to n-1"""
    start: Ints
    """(n,) first candidate of each site"""
    cost: Floats
    matrix: Floats
    """(C, E + k) kW in the event, then change of load in each feeder row met"""
    feeder_row: Ints
    """(k,) which of all feeder rows"""
    weight: float
    """How many sites of the fleet one site of the block stands for"""


@dataclass(frozen=True)
class Rows:
    """What prices stand for: right sides b and caps over [shed (E), over (E), feeder rows (L)]."""

    right: Floats
    cap: Floats
    events: int

    def local(self, block: Block, prices: Floats) -> Floats:
        """(E + k) price of each of a block's matrix columns."""
        e = self.events
        return np.concatenate([prices[:e] - prices[e : 2 * e], -prices[2 * e + block.feeder_row]])

    def spread(self, block: Block, local: Floats, into: Floats) -> None:
        """Adds a sum over a block's matrix columns to what all rows have, each by its sign."""
        e = self.events
        into[:e] += local[:e]
        into[e : 2 * e] -= local[:e]
        into[2 * e + block.feeder_row] -= local[e:]

    def columns(self, block: Block, free: Ints) -> tuple[Ints, Ints, Floats]:
        """Positions in `free` (rows) that a block meets, its matrix column for each, and the sign."""
        e = self.events
        column = np.full(self.right.size, -1, dtype=np.int64)
        column[:e] = column[e : 2 * e] = np.arange(e)
        column[2 * e + block.feeder_row] = e + np.arange(block.feeder_row.size)
        here = np.flatnonzero(column[free] >= 0)
        return here, column[free[here]], np.where(free[here] < e, 1.0, -1.0)


@dataclass(frozen=True)
class Smoothed:
    """The smoothed bound at some prices, the bound itself (of these candidates), slope, and shares by block."""

    value: float
    exact: float
    slope: Floats
    shares: list[Floats]


def rows_of(terms: Terms, rows: Ints) -> Rows:
    """Right sides and caps for feeder rows (L, 2: node, interval)."""
    ceiling = terms.request_kw + terms.allowance_kw
    room = terms.headroom_kw[rows[:, 0], rows[:, 1]]
    cap = np.concatenate([terms.shortfall_price_per_kw, terms.over_price_per_kw, np.full(len(rows), np.inf)])
    return Rows(np.concatenate([terms.request_kw, -ceiling, -room]), cap, terms.request_kw.size)


def patterns(offers: Offers, rows: Ints) -> Ints:
    """(N,) number of each site's pattern: which of the feeder rows' nodes are above it."""
    nodes = np.unique(rows[:, 0])
    if nodes.size == 0:
        return np.zeros(offers.site_count, dtype=np.int64)
    _, number = np.unique(offers.below[nodes], axis=1, return_inverse=True)
    return np.asarray(number, dtype=np.int64).ravel()


def arranged(offers: Offers, rows: Ints, candidates: Ints, pattern: Ints, weight: Floats) -> list[Block]:
    """Blocks of some candidates (sorted indices) by their site's pattern (N,), with each pattern's weight."""
    blocks = []
    of_candidate = pattern[offers.site[candidates]]
    for number in np.unique(of_candidate):
        members = candidates[of_candidate == number]
        site = offers.site[members]
        met = np.flatnonzero(offers.below[rows[:, 0], site[0]]) if len(rows) else np.zeros(0, dtype=np.int64)
        change = offers.change_kw[np.ix_(members, rows[met, 1])]
        start = np.flatnonzero(np.r_[True, np.diff(site) != 0])
        group = np.repeat(np.arange(start.size), np.diff(np.r_[start, site.size]))
        matrix = np.ascontiguousarray(np.concatenate([offers.kw[members], change], axis=1))
        blocks.append(Block(members, group, start, offers.cost[members], matrix, met, float(weight[number])))
    return blocks


def smoothed(blocks: Sequence[Block], rows: Rows, prices: Floats, tau: float) -> Smoothed:
    """The bound with each site's min(0, least value) softened to -tau log(1 + sum exp(-value / tau)).

    It lies below the bound by tau log(1 + candidates) a site at most, and has a slope everywhere: what the shares
    (softmax of the values) of the candidates leave open in each row.
    """
    value = exact = float(rows.right @ prices)
    slope = rows.right.copy()
    shares = []
    for block in blocks:
        worth = block.cost - block.matrix @ rows.local(block, prices)
        best = np.minimum(np.minimum.reduceat(worth, block.start), 0.0)
        share = np.exp((best[block.group] - worth) / tau)
        total = np.add.reduceat(share, block.start) + np.exp(best / tau)
        share /= total[block.group]
        exact += block.weight * float(best.sum())
        value += block.weight * float((best - tau * np.log(total)).sum())
        rows.spread(block, -block.weight * (share @ block.matrix), slope)
        shares.append(share)
    return Smoothed(value, exact, slope, shares)
