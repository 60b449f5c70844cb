"""Prices by climbing the smoothed bound: Newton steps, ever less smoothing, ever fewer candidates looked at.

Owns the way up. The bound of linear pieces is softened (Nesterov 2005, Math. Program. 103, 127: log-sum-exp), so that
each step knows how prices act together; on many sites coarse prices come from a share of them, drawn evenly from
every pattern of feeders. Steps are counted, no clock is read: the same arrays give the same prices.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from fleet.bend import Bend, bend, newton_move
from fleet.blocks import Block, Rows, Smoothed, arranged, patterns, rows_of, smoothed
from fleet.bound import Offers, Prices, Terms, bound_from_prices
from sites.units import Bools, Floats, Ints

SAMPLE: Final = 12_000
"""Candidates in the first share of the sites, at least; fewer are all looked at from the start."""
WORKING: Final = 60_000
"""Candidates looked at once the whole fleet is, at most about."""
COOLING: Final = 0.35
COARSE: Final = 1.0
FINE: Final = 3e-3
"""Smoothing at the start and at the end, as shares of the usual size of a candidate's cost."""
AGAIN: Final = 0.02
"""Smoothing, of the same size, with which the whole fleet is taken up once coarse prices come from some sites."""
REPEATS: Final = 4
WIDE: Final = 15.0
"""Candidates worse than their site's best by so many times the smoothing have no part in it (e^-15)."""
STEPS: Final = 25
ENOUGH: Final = 5.0
"""A level ends where a step of the whole fleet gains less than this many times its smoothing (of one site)."""
MOST_TRIES: Final = 8


@dataclass(frozen=True)
class Climbed:
    """Prices, and the smoothing at which they were found."""

    prices: Prices
    tau: float
    steps: int


def climb(offers: Offers, terms: Terms, rows: Ints, stop: Callable[[], bool] = lambda: False) -> Climbed:
    """Prices near the best of the bound, for feeder rows (L, 2: node, interval) that may have one."""
    shape, pattern = rows_of(terms, rows), patterns(offers, rows)
    usual = _usual(offers, terms)
    look = _sample(offers, pattern)
    blocks = arranged(offers, rows, look, pattern, _weights(offers, pattern, look))
    fine = FINE * usual
    at, tau, steps = _cool(blocks, shape, np.zeros(shape.right.size), COARSE * usual, fine, stop)
    for _ in range(REPEATS if look.size < offers.site.size else 0):
        if stop():
            break
        tau = max(AGAIN * usual, fine) if steps else tau
        seen, prices = look, _as_prices(shape, rows, terms, at)
        close, lacking = _close(offers, terms, prices, 2.0 * WIDE * tau, tau)
        look = close if look.size <= SAMPLE * 2 else np.union1d(seen, close)
        if np.isin(lacking, seen).all() and seen.size > SAMPLE * 2:
            break
        blocks = arranged(offers, rows, look, pattern, np.ones(int(pattern.max(initial=0)) + 1))
        at, tau, more = _cool(blocks, shape, at, tau, fine, stop)
        steps += more
    return Climbed(_as_prices(shape, rows, terms, at), tau, steps)


def _cool(
    every: Sequence[Block], shape: Rows, at: Floats, tau: float, fine: float, stop: Callable[[], bool]
) -> tuple[Floats, float, int]:
    """Levels of ever less smoothing down to `fine`; at each the candidates that have a part in it are looked at."""
    steps = 0
    few = sum(block.cost.size for block in every) <= 2 * SAMPLE
    while True:
        masks = _near(every, shape, at, np.inf if few else WIDE * tau)
        for _ in range(REPEATS):
            blocks = [_part(block, mask) for block, mask in zip(every, masks, strict=True) if mask.any()]
            at, taken = _level(blocks, shape, at, tau)
            steps += taken
            left_out = [near & ~mask for near, mask in zip(_near(every, shape, at, tau), masks, strict=True)]
            if not any(mask.any() for mask in left_out):
                break
            wide = _near(every, shape, at, WIDE * tau)
            masks = [mask | near for mask, near in zip(masks, wide, strict=True)]
        if tau <= fine * (1.0 + 1e-9) or stop():
            return at, tau, steps
        tau = max(COOLING * tau, fine)


def _usual(offers: Offers, terms: Terms) -> float:
    """The usual size of a candidate's cost; where all cost nothing, of what its kW save at shortfall prices."""
    if offers.site.size == 0:
        return 1.0
    cost = float(np.abs(offers.cost).mean())
    return (
        cost if cost > 1e-9 else max(float((np.abs(offers.kw) @ terms.shortfall_price_per_kw).mean()), 1e-9)
    )


def _level(blocks: Sequence[Block], rows: Rows, at: Floats, tau: float) -> tuple[Floats, int]:
    """Newton steps at one smoothing, within the prices' ranges; each is taken only if it climbs."""
    here = smoothed(blocks, rows, at, tau)
    damping, taken = 1e-4, 0
    for _ in range(STEPS):
        low, high = (at <= 0.0) & (here.slope <= 0.0), (at >= rows.cap) & (here.slope >= 0.0)
        free = np.flatnonzero(~(low | high))
        if free.size == 0:
            break
        curved = bend(blocks, rows, here.shares, free, tau)
        step = _newton(blocks, rows, at, here, tau, free, curved, damping)
        if step is None:
            break
        at, gained, here, damping = step
        taken += 1
        if gained <= ENOUGH * tau:
            break
    return at, taken


def _newton(
    blocks: Sequence[Block],
    rows: Rows,
    at: Floats,
    here: Smoothed,
    tau: float,
    free: Ints,
    curved: Bend,
    damping: float,
) -> tuple[Floats, float, Smoothed, float] | None:
    """One step of the free rows, damped (Levenberg 1944) until it climbs; None where none does."""
    slope = here.slope[free]
    for _ in range(MOST_TRIES):
        move = newton_move(curved, slope, damping)
        if move is None:
            damping = max(10.0 * damping, 1e-3)
            continue
        there = at.copy()
        there[free] = np.clip(at[free] + move, 0.0, rows.cap[free])
        trial = smoothed(blocks, rows, there, tau)
        hoped = float(slope @ (there[free] - at[free]))
        if trial.value >= here.value + 1e-4 * hoped and hoped > 0.0:
            return there, trial.value - here.value, trial, max(0.1 * damping, 1e-8)
        damping = max(10.0 * damping, 1e-3)
    return None


def _sample(offers: Offers, pattern: Ints) -> Ints:
    """Candidates of every k-th site of each pattern, at least SAMPLE of them and one site a pattern."""
    count = offers.site.size
    if count <= 2 * SAMPLE:
        return np.arange(count)
    stride = max(count // SAMPLE, 1)
    has = np.unique(offers.site)
    order = has[np.argsort(pattern[has], kind="stable")]
    _, first, many = np.unique(pattern[order], return_index=True, return_counts=True)
    rank = np.arange(order.size) - np.repeat(first, many)
    taken = np.zeros(offers.site_count, dtype=np.bool_)
    taken[order[rank % stride == 0]] = True
    return np.flatnonzero(taken[offers.site])


def _weights(offers: Offers, pattern: Ints, look: Ints) -> Floats:
    """Sites of each pattern over those looked at."""
    count = int(pattern.max(initial=0)) + 1
    every = np.bincount(pattern[np.unique(offers.site)], minlength=count)
    some = np.bincount(pattern[np.unique(offers.site[look])], minlength=count)
    return np.asarray(every / np.maximum(some, 1), dtype=np.float64)


def _near(blocks: Sequence[Block], rows: Rows, at: Floats, reach: float) -> list[Bools]:
    """By block, which candidates are worth no more than `reach` above the best of their site or staying out."""
    masks = []
    for block in blocks:
        worth = block.cost - block.matrix @ rows.local(block, at)
        best = np.minimum(np.minimum.reduceat(worth, block.start), 0.0)
        masks.append(worth <= best[block.group] + reach)
    return masks


def _part(block: Block, mask: Bools) -> Block:
    """A block with some of its candidates."""
    keep = np.flatnonzero(mask)
    if keep.size > 0.7 * block.cost.size:
        return block
    site = block.group[keep]
    start = np.flatnonzero(np.r_[True, np.diff(site) != 0])
    group = np.repeat(np.arange(start.size), np.diff(np.r_[start, site.size]))
    return Block(
        block.candidate[keep],
        group,
        start,
        block.cost[keep],
        block.matrix[keep],
        block.feeder_row,
        block.weight,
    )


def _close(offers: Offers, terms: Terms, prices: Prices, reach: float, tau: float) -> tuple[Ints, Ints]:
    """Candidates of all offers whose regret is within reach (at most about 2 WORKING), and those within tau."""
    regret = bound_from_prices(offers, terms, prices).regret(offers.site)
    found = np.flatnonzero(regret <= reach)
    if found.size > 2 * WORKING:
        found = np.sort(found[np.argpartition(regret[found], 2 * WORKING)[: 2 * WORKING]])
    return found, np.flatnonzero(regret <= tau)


def _as_prices(shape: Rows, rows: Ints, terms: Terms, at: Floats) -> Prices:
    """The vector as prices; of shed and over price of one interval only the difference is left."""
    e = shape.events
    importing = np.zeros_like(terms.headroom_kw)
    importing[rows[:, 0], rows[:, 1]] = at[2 * e :]
    net = at[:e] - at[e : 2 * e]
    return Prices(np.maximum(net, 0.0), np.maximum(-net, 0.0), importing)
