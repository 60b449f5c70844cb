"""What a fleet can give: the most in each interval, in all of them together, and each site's best.

Owns the summary of a survey's quotes that `shedwright quote` shows.
"""

from dataclasses import dataclass

import numpy as np

from fleet.desk import Survey
from fleet.most import Available, most
from sites.sustained import Sustained, sustained, together_kw
from sites.units import Floats, Ints


@dataclass(frozen=True)
class Offer:
    """What the sites under the node can give; per-site arrays (site,)."""

    available: Available
    best: Ints
    """(site,) candidate of most energy over the event, -1 = none"""
    candidates: Ints
    """(site,) number of candidates quoted"""
    usual_kw: Floats
    """(site,) mean plant power over the event with no event"""
    cheapest_per_kwh: Floats
    """(site,) least net cost per kWh shed among the site's candidates, NaN = none"""
    cheapest: Ints
    """(site,) that candidate, -1 = none"""
    held: Sustained
    """how much each site holds up for how long"""
    held_together_kw: Floats
    """(length,) how much all sites under the node do at the same time, before feeder limits"""


def offer(survey: Survey, seconds: float | None = None) -> Offer:
    """Summarise a survey; the figures hold feeder limits and call limits."""
    quotes, buildings = survey.quoted.quotes, survey.fleet.roster.buildings
    available = most(
        quotes,
        survey.feeders,
        survey.headroom.kw,
        survey.node_id,
        buildings.delivery_factor,
        survey.eligible.allowed,
        seconds,
    )
    energy = quotes.expected_kw.sum(axis=1) * quotes.clock.step_h
    order = np.lexsort((-energy, quotes.site))
    found, first = np.unique(quotes.site[order], return_index=True)
    best = np.full(quotes.site_count, -1, dtype=np.int64)
    best[found] = order[first]
    per_kwh = np.divide(quotes.net_cost, energy, out=np.full_like(energy, np.inf), where=energy > 0.0)
    order = np.lexsort((per_kwh, quotes.site))
    _, first = np.unique(quotes.site[order], return_index=True)
    cheapest = np.full(quotes.site_count, -1, dtype=np.int64)
    cheapest[found] = order[first]
    known = np.append(np.where(np.isfinite(per_kwh), per_kwh, np.nan), np.nan)
    among = survey.under_node & survey.eligible.allowed
    event = slice(quotes.event_from, quotes.event_to)
    return Offer(
        available=available,
        best=best,
        candidates=np.bincount(quotes.site, minlength=quotes.site_count),
        usual_kw=survey.quoted.ground.usual.power_kw[:, event].mean(axis=1),
        cheapest_per_kwh=known[cheapest],
        cheapest=cheapest,
        held=sustained(quotes),
        held_together_kw=together_kw(quotes, among),
    )
