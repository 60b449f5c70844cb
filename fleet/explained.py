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
from sites.units import Bools, Floats

MORE_SHARE: Final = 0.1
LEFT_OUT: Final = 3
ROUNDING_KW: Final = 1e-6
LEAST_PRICE: Final = 5e-4
"""Money per kWh below which a limit's price is rounding to who reads it."""


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
class FullNode:
    """A node whose limit has a price: what one more kWh of room would save."""

    node: int
    intervals: int
    """In how many intervals it has one"""
    dearest: int
    """Clock index of the interval in which it is highest"""
    per_kwh: float


@dataclass(frozen=True)
class Explained:
    """What is told of a choice that meets its request."""

    marginal_per_kwh: Floats
    """(E,) money for one more kWh in each interval, node after node"""
    more_cost: float | None
    """Money that MORE_SHARE more in every interval would cost on top; None: it cannot be met, or was not tried"""
    more_tried: bool
    left_out: tuple[LeftOut, ...]
    full_nodes: tuple[FullNode, ...] = ()
    """Nodes whose limits hold the choice down, the dearest first"""


def explain(
    allocation: Allocation,
    more: Allocation | None,
    quotes: DenseQuotes,
    feeders: Feeders,
    below: Bools,
    why: dict[int, str],
    headroom_kw: Floats,
) -> Explained:
    """What to tell; `more`: the same request with MORE_SHARE more, where it was tried; below (N,): sites asked.

    headroom_kw (J, T): the room that was left before the call. why: by site, the reason for which it was not
    offered at all (limits, a list of sites to leave out).
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
        left_out=_left_out(allocation, quotes, feeders, below, why, shed, headroom_kw),
        full_nodes=_full_nodes(prices.importing / step_h),
    )


def _full_nodes(per_kwh: Floats) -> tuple[FullNode, ...]:
    """Nodes with a price of their limit (J, T) in money per kWh."""
    at = per_kwh.argmax(axis=1)
    most = per_kwh.max(axis=1, initial=0.0)
    order = np.argsort(-most, kind="stable")
    return tuple(
        FullNode(int(j), int((per_kwh[j] > LEAST_PRICE).sum()), int(at[j]), float(most[j]))
        for j in order[most[order] > LEAST_PRICE]
    )


def _left_out(
    allocation: Allocation,
    quotes: DenseQuotes,
    feeders: Feeders,
    below: Bools,
    why: dict[int, str],
    shed: Floats,
    headroom_kw: Floats,
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
    room = headroom_kw - allocation.node_change_kw + ROUNDING_KW
    found = []
    for c in best.tolist():
        worth = float(shed @ quotes.expected_kw[c])
        found.append(
            LeftOut(
                site=int(quotes.site[c]),
                per_kwh=float(per_kwh[c]),
                worth_per_kwh=worth / float(energy[c]),
                reason=why.get(int(quotes.site[c]))
                or _reason(quotes, feeders, allocation.prices, room, c, worth),
            )
        )
    return tuple(found)


def _reason(
    quotes: DenseQuotes, feeders: Feeders, prices: Prices, room: Floats, candidate: int, worth: float
) -> str:
    """In words: dear, no room in a feeder (J, T kW beside the choice), or too large a lump for what is left."""
    cost, change = float(quotes.net_cost[candidate]), quotes.change_kw[candidate]
    if cost > worth:
        return "dearer than the last kW called"
    above = np.flatnonzero(feeders.below[:, quotes.site[candidate]])
    paid = prices.importing[above] @ change
    lack = (change - room[above]).max(axis=1)
    if cost + float(paid.sum()) > worth or lack.max() > 0.0:
        node = above[int(paid.argmax() if paid.max() > 0.0 else lack.argmax())]
        return f"no room for its load under the limit of node {feeders.node_id[node]}"
    return "its kW come in a lump that does not fit what is left to fill"
