"""Why a choice is as it is: the price of one more kW in each interval, what more would cost, who was left out.

Owns what is told of a request that is met. Prices are those of the proof; nothing here is relied on elsewhere.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from fleet.allocate import Allocation
from fleet.bound import Prices
from fleet.feeders import Feeders
from sites.quotes import DenseQuotes
from sites.units import Bools, Floats, Ints

MORE_SHARE: Final = 0.1
LEFT_OUT: Final = 3


@dataclass(frozen=True)
class LeftOut:
    """A site that was not called though it has something to give."""

    site: int
    per_kwh: float
    """Least money a kWh of the event of any of its candidates"""
    worth_per_kwh: float
    """What the marginal prices would pay for that candidate's kWh"""
    reason: str


@dataclass(frozen=True)
class Explained:
    """What is told of a choice that meets its request."""

    marginal_per_kwh: Floats
    """(E,) money for one more kWh in each interval, node after node"""
    more_cost: float | None
    """Money that MORE_SHARE more in every interval would cost on top; None: it cannot be met, or was not tried"""
    more_tried: bool
    left_out: tuple[LeftOut, ...]


def explain(
    allocation: Allocation,
    more: Allocation | None,
    quotes: DenseQuotes,
    feeders: Feeders,
    below: Bools,
    why: dict[int, str],
) -> Explained:
    """What to tell; `more`: the same request with MORE_SHARE more, where it was tried; below (N,): sites asked.

    why: by site, the reason for which it was not offered at all (limits, a list of sites to leave out).
    """
    prices, step_h = allocation.prices, quotes.clock.step_h
    cost = None
    if more is not None and more.met:
        cost = more.proof.money - allocation.proof.money
    net = prices.shed - prices.over
    shed = net.reshape(-1, quotes.event_to - quotes.event_from).sum(axis=0)
    return Explained(
        marginal_per_kwh=prices.shed / step_h,
        more_cost=cost,
        more_tried=more is not None,
        left_out=_left_out(allocation, quotes, feeders, below, why, shed),
    )


def _left_out(
    allocation: Allocation,
    quotes: DenseQuotes,
    feeders: Feeders,
    below: Bools,
    why: dict[int, str],
    shed: Floats,
) -> tuple[LeftOut, ...]:
    """The sites not called with the cheapest kWh, at most LEFT_OUT of them."""
    energy = quotes.expected_kw.sum(axis=1) * quotes.clock.step_h
    per_kwh = np.divide(quotes.net_cost, energy, out=np.full(energy.size, np.inf), where=energy > 0.0)
    idle = below & (allocation.candidate < 0)
    able = np.flatnonzero(idle[quotes.site] & np.isfinite(per_kwh))
    order = able[np.lexsort((per_kwh[able], quotes.site[able]))]
    _, first = np.unique(quotes.site[order], return_index=True)
    best = order[first]
    best = best[np.argsort(per_kwh[best], kind="stable")][:LEFT_OUT]
    paths = _feeder_cost(quotes, feeders, allocation.prices, best)
    found = []
    for c, path in zip(best.tolist(), paths.tolist(), strict=True):
        worth = float(shed @ quotes.expected_kw[c])
        found.append(
            LeftOut(
                site=int(quotes.site[c]),
                per_kwh=float(per_kwh[c]),
                worth_per_kwh=worth / float(energy[c]),
                reason=why.get(int(quotes.site[c])) or _reason(float(quotes.net_cost[c]), path, worth),
            )
        )
    return tuple(found)


def _feeder_cost(quotes: DenseQuotes, feeders: Feeders, prices: Prices, candidates: Ints) -> Floats:
    """What candidates would pay for room in the feeders above them."""
    over_path = feeders.below.T.astype(np.float64)[quotes.site[candidates]] @ prices.importing
    paid: Floats = np.einsum("ct,ct->c", over_path, quotes.change_kw[candidates])
    return paid


def _reason(cost: float, path: float, worth: float) -> str:
    """In words: dear, no room in a feeder, or too large a lump for what is left to fill."""
    if cost > worth:
        return "dearer than the last kW called"
    if cost + path > worth:
        return "its recovery has no room in a feeder"
    return "its kW come in a lump that does not fit what is left to fill"
