"""Quotes -> the offers an allocation chooses from: who may be called, and what it gives at the requested node.

Owns the checks that quotes fit the request, and the over-delivery that costs nothing.
"""

from collections.abc import Sequence

import numpy as np

from fleet.bound import Offers
from fleet.errors import FleetError
from fleet.feeders import Feeders
from fleet.request import Request
from sites.quotes import DenseQuotes
from sites.units import Bools, Floats, Ints


def check_fit(quotes: DenseQuotes, request: Request) -> None:
    """FleetError where quotes are for another direction or other intervals than the request."""
    if quotes.direction is not request.direction:
        raise FleetError(
            f"quotes are for {quotes.direction}, the request is for {request.direction}: quote again"
        )
    event = quotes.event_to - quotes.event_from
    start = quotes.clock.start + quotes.event_from * quotes.clock.step
    same = event == request.interval_count and start == request.event_from
    if not same or quotes.clock.step != request.step:
        raise FleetError(
            f"quotes are for {event} intervals of {quotes.clock.step_minutes} minutes from {start}, the request "
            f"for {request.interval_count} from {request.event_from} to {request.event_to}: quote again"
        )


def offered(quotes: DenseQuotes, feeders: Feeders, node_ids: Sequence[str], allowed: Bools) -> Ints:
    """Indices of the candidates that may be chosen: of allowed sites (N,) at or below one of the nodes.

    Sites elsewhere are never called: nobody there was asked. Raises FleetError on an unknown node, on candidates
    that are not sorted by site and on values that are no numbers.
    """
    if np.any(np.diff(quotes.site) < 0):
        raise FleetError("candidates are not sorted by site: sort the quotes before they are offered")
    sound = np.isfinite(quotes.net_cost) & np.isfinite(quotes.expected_kw).all(axis=1)
    sound &= np.isfinite(quotes.change_kw).all(axis=1)
    if not sound.all():
        first = str(quotes.quote_id[int(np.flatnonzero(~sound)[0])])
        raise FleetError(f"quote {first} holds a value that is no number: it was not to be offered")
    mask = allowed & np.any([feeders.sites_below(name) for name in node_ids], axis=0)
    return np.flatnonzero(mask[quotes.site])


def offers_of(
    quotes: DenseQuotes,
    feeders: Feeders,
    delivery_factor: Floats,
    steering: Floats,
    kept: Ints,
    node_ids: Sequence[str] = (),
) -> Offers:
    """The offers of candidates `kept` (indices): kW at the requested node, cost with steering (N,).

    Several nodes: kW (C, node x event interval), 0 at the nodes that a site is not below.
    """
    site = quotes.site[kept]
    whole = kept.size == quotes.site.size
    kw = quotes.expected_kw[kept] * delivery_factor[site][:, None]
    if len(node_ids) > 1:
        inside = [feeders.sites_below(name)[site] for name in node_ids]
        kw = np.concatenate([np.where(mask[:, None], kw, 0.0) for mask in inside], axis=1)
    return Offers(
        site=site,
        site_count=quotes.site_count,
        cost=quotes.net_cost[kept] + steering[site],
        kw=kw,
        change_kw=quotes.change_kw if whole else quotes.change_kw[kept],
        below=feeders.below,
    )


def allowance_kw(offers: Offers, requested_kw: Floats, fraction: float) -> Floats:
    """(E,) over-delivery that costs nothing: the fraction of the request, or the largest offer if that is more.

    "The largest called site" would depend on the choice and make the bound inseparable; the largest kW that any
    offered candidate gives in the interval is a constant, and never less.
    """
    largest = offers.kw.max(axis=0, initial=0.0)
    return np.asarray(np.maximum(fraction * requested_kw, largest), dtype=np.float64)
