"""The bound: what no allocation can beat, worked out from prices alone, over every candidate there is.

Owns the Lagrangian bound and the regret of each candidate. Imports nothing of the solver's side, so that whoever
checks a record evaluates the same bound from the record's prices and quotes, without believing who made them.

The choice it bounds, with x in {0,1} and at most one candidate c a site i:

    minimise   sum_c cost_c x_c + sum_t P_t s_t + sum_t Q_t o_t          s, o >= 0
    subject to sum_c kw_ct x_c + s_t >= request_t                         price pi_t,  0 <= pi_t <= P_t
               sum_c kw_ct x_c - o_t <= request_t + allowance_t           price om_t,  0 <= om_t <= Q_t
               sum_c below_n,i(c) change_c,u x_c <= headroom_n,u          price mu_nu, 0 <= mu_nu

Any x, s, o that keeps the rows costs at least its Lagrangian, since every term added below is 0 or less there:

    cost.x + P.s + Q.o + pi.(request - kw x - s) + om.(kw x - o - request - allowance) + mu.(A x - headroom)

Collected by unknown, s_t carries P_t - pi_t >= 0 and o_t carries Q_t - om_t >= 0, so both are best at 0, and each
site is left alone with v_c = cost_c - (pi - om).kw_c + sum_u m_iu change_cu, m_iu = sum of mu_nu over the
nodes above the site. With om, the over-delivery term, the allowance must be a constant that does not depend on x:

    bound = sum_i min(0, min_c v_c) + pi.request - om.(request + allowance) - mu.headroom

It holds for ANY prices in those ranges (weak duality; Everett 1963, generalised Lagrange multipliers).
"""

import hashlib
from dataclasses import dataclass
from typing import Final

import numpy as np

from fleet.errors import FleetError
from sites.units import Bools, Floats, Ints, Strings

STEERING_PER_CALL: Final = 1e-4
"""Most money by which a tie between two sites is broken: far below the minor unit of a currency."""


@dataclass(frozen=True)
class Offers:
    """What there is to choose from: C candidates of N sites, E event and T horizon intervals, J nodes."""

    site: Ints
    """(C,) index of the site"""
    site_count: int
    cost: Floats
    """(C,) money and steering of choosing it"""
    kw: Floats
    """(C, E) at the requested node, positive in the event's direction"""
    change_kw: Floats
    """(C, T) event less usual"""
    below: Bools
    """(J, N)"""


@dataclass(frozen=True)
class Terms:
    """What is asked and what missing or overdoing it costs, per event interval (E); room per node (J, T)."""

    request_kw: Floats
    allowance_kw: Floats
    """Over-delivery that costs nothing, beyond request_kw"""
    shortfall_price_per_kw: Floats
    over_price_per_kw: Floats
    headroom_kw: Floats
    """inf where there is no limit"""


@dataclass(frozen=True)
class Prices:
    """Lagrange prices in money per kW and interval: shed (E,), over (E,), importing (J, T)."""

    shed: Floats
    over: Floats
    importing: Floats


@dataclass(frozen=True)
class Bound:
    """The bound at some prices, each site's best value (N,) and each candidate's value (C,)."""

    value: float
    best: Floats
    candidate_value: Floats

    def regret(self, site: Ints) -> Floats:
        """(C,) what choosing a candidate costs at least above its site's best answer.

        Every allocation that holds candidate c costs at least value + regret_c.
        """
        regret: Floats = self.candidate_value - self.best[site]
        return regret


def bound_from_prices(offers: Offers, terms: Terms, prices: Prices) -> Bound:
    """The bound of the module's head over all candidates of `offers`, float64.

    Raises FleetError where a price is out of its range: the bound would not hold.
    """
    _check(terms, prices)
    net = prices.shed - prices.over
    value = offers.cost - offers.kw @ net
    active = np.flatnonzero(prices.importing.any(axis=0))
    if active.size:
        by_site = offers.below.T.astype(np.float64) @ prices.importing[:, active]
        value = value + np.einsum("ct,ct->c", offers.change_kw[:, active], by_site[offers.site])
    best = np.zeros(offers.site_count)
    np.minimum.at(best, offers.site, value)
    priced = prices.importing > 0.0
    room = float(np.sum(prices.importing[priced] * terms.headroom_kw[priced]))
    asked = float(prices.shed @ terms.request_kw - prices.over @ (terms.request_kw + terms.allowance_kw))
    return Bound(float(best.sum()) + asked - room, best, value)


def node_gaps(offers: Offers, terms: Terms, prices: Prices, chosen: Ints) -> Floats:
    """(J,) money by which each node's part of a choice lies above its part of the bound.

    Sites at or below: what the chosen answer (staying out is one) is worth above the best one at these prices. And the
    node's own room that has a price but is not used.
    """
    bound = bound_from_prices(offers, terms, prices)
    lack = -bound.best
    lack[offers.site[chosen]] = bound.regret(offers.site)[chosen]
    change = np.zeros((offers.site_count, offers.change_kw.shape[1]))
    np.add.at(change, offers.site[chosen], offers.change_kw[chosen])
    below = offers.below.astype(np.float64)
    unused = np.where(prices.importing > 0.0, terms.headroom_kw - below @ change, 0.0)
    result: Floats = below @ lack + (prices.importing * unused).sum(axis=1)
    return result


def worst_node(
    offers: Offers, terms: Terms, prices: Prices, chosen: Ints, gross: Floats
) -> tuple[int, float]:
    """Index of the limited node with the largest gap, relative to the gross cost (chosen,) of the sites below, and it.

    -1 and 0 where no limited node has a called site that costs anything.
    """
    below = offers.below[:, offers.site[chosen]].astype(np.float64) @ gross
    real = np.isfinite(terms.headroom_kw).any(axis=1) & (below > 0.0)
    if not real.any():
        return -1, 0.0
    gaps = np.divide(
        node_gaps(offers, terms, prices, chosen), below, out=np.full(below.size, -1.0), where=real
    )
    return int(gaps.argmax()), max(float(gaps.max()), 0.0)


def steering(
    site_id: Strings, per_call: float = 0.0, include: Strings | None = None, bonus: float = 0.0
) -> Floats:
    """(N,) money, 0 to STEERING_PER_CALL, that makes two equal sites unequal: a hash of the id (BLAKE2b).

    Without it identical sites answer the same prices together and no price calls just one of them. Wishes add to
    it: money for each call where few are wanted, a bonus off for sites that must be in.
    """
    digests = [hashlib.blake2b(str(name).encode(), digest_size=6).digest() for name in site_id]
    shares = np.array([int.from_bytes(digest, "big") for digest in digests], dtype=np.float64) / 2.0**48
    wanted = np.zeros(shares.size) if include is None else np.isin(site_id.astype(str), include.astype(str))
    return np.asarray(STEERING_PER_CALL * shares + per_call - bonus * wanted, dtype=np.float64)


def _check(terms: Terms, prices: Prices) -> None:
    """Refuses prices outside the ranges for which the bound holds."""
    ranges = {
        "shed": (prices.shed, terms.shortfall_price_per_kw),
        "over": (prices.over, terms.over_price_per_kw),
        "import": (prices.importing, np.where(np.isfinite(terms.headroom_kw), np.inf, 0.0)),
    }
    for kind, (price, most) in ranges.items():
        wrong = ~((price >= 0.0) & (price <= most * (1.0 + 1e-12)))
        if wrong.any():
            at = tuple(int(axis) for axis in np.argwhere(wrong)[0])
            raise FleetError(
                f"{kind} price {float(price[at]):g} at {at} is not within 0 to {float(most[at]):g}; "
                "a bound from such prices does not hold: use prices within their range"
            )
