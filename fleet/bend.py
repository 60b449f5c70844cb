"""Curvature of the smoothed bound in its free rows, kept in parts, and the Newton move that it gives.

Owns the arrow: a feeder row that one block alone meets touches only that block's rows and the shared ones (event
intervals, feeders above several blocks). So each block's own rows are eliminated by themselves and what is left
is as large as the shared rows: effort grows with the number of feeders, not with its cube.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fleet.blocks import Block, Rows
from sites.units import Floats, Ints

UNSEEN_SHARE = 1e-8
"""Candidates whose share of their site is smaller are left out of the curvature."""


@dataclass(frozen=True)
class Part:
    """Rows that one block alone meets."""

    at: Ints
    """(k,) positions among the free rows"""
    own: Floats
    """(k, k)"""
    shared: Ints
    """(m,) which of the shared rows the block meets too"""
    cross: Floats
    """(k, m)"""


@dataclass(frozen=True)
class Bend:
    """Negative second derivative in F free rows: shared rows (S), and a part for each block."""

    size: Floats
    """(F,) its diagonal"""
    shared: Ints
    """(S,) positions among the free rows"""
    core: Floats
    """(S, S)"""
    parts: list[Part]


def bend(blocks: Sequence[Block], rows: Rows, shares: Sequence[Floats], free: Ints, tau: float) -> Bend:
    """Spread of each site's candidates over tau, summed, in the `free` rows."""
    met = np.zeros(rows.right.size, dtype=np.int64)
    met[: 2 * rows.events] = 2
    for block in blocks:
        met[2 * rows.events + block.feeder_row] += 1
    private = met[free] == 1
    shared = np.flatnonzero(~private)
    place = np.full(free.size, -1, dtype=np.int64)
    place[shared] = np.arange(shared.size)
    core, size, parts = np.zeros((shared.size, shared.size)), np.zeros(free.size), []
    for block, share in zip(blocks, shares, strict=True):
        here, column, sign = rows.columns(block, free)
        seen = np.flatnonzero(share > UNSEEN_SHARE)
        if here.size == 0 or seen.size == 0:
            continue
        whole = _spread(block, share, seen, column, sign, tau)
        mine = private[here]
        own, others = np.flatnonzero(mine), np.flatnonzero(~mine)
        at = place[here[others]]
        core[np.ix_(at, at)] += whole[np.ix_(others, others)]
        size[here] += np.diag(whole)
        parts.append(Part(here[own], whole[np.ix_(own, own)], at, whole[np.ix_(own, others)]))
    return Bend(size, shared, core, parts)


def _spread(block: Block, share: Floats, seen: Ints, column: Ints, sign: Floats, tau: float) -> Floats:
    """Of one block, in the columns of its matrix that stand in free rows."""
    part = block.matrix[np.ix_(seen, column)] * sign
    weighted = part * share[seen, None]
    group = block.group[seen]
    mean = np.add.reduceat(weighted, np.flatnonzero(np.r_[True, np.diff(group) != 0]), axis=0)
    total: Floats = (block.weight / tau) * (weighted.T @ part - mean.T @ mean)
    return total


def newton_move(bend: Bend, slope: Floats, damping: float) -> Floats | None:
    """(F,) move along the slope, damped (Levenberg 1944); None where the system is singular in floats."""
    floor = (1e-9 * float(bend.size.max(initial=0.0)) + 1e-30) * (1.0 + damping * 1e6)
    move = slope / (bend.size * damping + floor)
    core = bend.core + np.diag(damping * np.diag(bend.core) + floor)
    right, kept = slope[bend.shared].copy(), []
    try:
        for part in bend.parts:
            own = part.own + np.diag(damping * np.diag(part.own) + floor)
            solved = np.linalg.solve(own, np.c_[part.cross, slope[part.at]])
            core[np.ix_(part.shared, part.shared)] -= part.cross.T @ solved[:, :-1]
            right[part.shared] -= part.cross.T @ solved[:, -1]
            kept.append(solved)
        move[bend.shared] = np.linalg.solve(core, right)
    except np.linalg.LinAlgError:
        return None
    common = move[bend.shared]
    for part, solved in zip(bend.parts, kept, strict=True):
        move[part.at] = solved[:, -1] - solved[:, :-1] @ common[part.shared]
    return move
