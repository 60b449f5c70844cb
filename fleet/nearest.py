"""Other terms than those asked for: what the fleet could give then, and the nearest request that it can meet.

Owns quoting a survey's fleet again for other hours or with one kind of limit left aside, and as little of it as
tells: only sites that a limit keeps, only hours in which single intervals could have it. What is told here is a figure
to decide on; a call is made on the terms that hold.
"""

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from fleet import limits
from fleet.bound import Offers
from fleet.desk import Survey
from fleet.most import most_of
from fleet.offers import offered, offers_of
from fleet.request import Request
from fleet.wall_time import local_day, utc_timestamp
from sites.blocks import Terms
from sites.quote import Ground, ground, quote
from sites.quotes import LIMITED_BY, DenseQuotes
from sites.units import Bools, Floats

MOST_SITES: Final = 400
"""Fleets above are not quoted again: it would take longer than the call."""
FAR_K: Final = 100.0
"""A rise of the zone that no case reaches."""
LATER_H: Final = (1, 3)
ROUND_KW: Final = 1.0
ROUND_SHARE: Final = 0.01
ROUGH_WORK: Final = (40, 80)
"""Nodes and checks of a solver for a figure to tell."""


@dataclass(frozen=True)
class Suggestion:
    """A request that the fleet can meet, by the same quotes and limits as a call for it would have."""

    change: str
    """less, shorter or later"""
    kw: Floats
    """(node, event interval)"""
    event_from: np.datetime64
    event_to: np.datetime64


@dataclass(frozen=True)
class Want:
    """What is asked of a survey's fleet, and which sites (N,) are left out by wish."""

    survey: Survey
    ask: Request
    left_out: Bools

    @property
    def allowed(self) -> Bools:
        """(N,) sites that may be called."""
        return np.asarray(self.survey.eligible.allowed & ~self.left_out, dtype=np.bool_)

    @property
    def is_flat(self) -> bool:
        """One node and the same kW in every interval: one figure says it all."""
        return len(self.ask.node_ids) == 1 and bool((self.ask.requested_kw == self.ask.requested_kw[0]).all())

    def offers(self, quotes: DenseQuotes, allowed: Bools) -> Offers:
        """Offers of allowed sites at the nodes asked; no cost."""
        feeders, nodes = self.survey.feeders, self.ask.node_ids
        factor = self.survey.fleet.roster.buildings.delivery_factor
        kept = offered(quotes, feeders, nodes, allowed)
        return offers_of(quotes, feeders, factor, np.zeros(quotes.site_count), kept, nodes)

    def share(self, offers: Offers, headroom_kw: Floats | None = None) -> float:
        """The multiple of the whole request that offers give, feeder limits kept."""
        asked = self.ask.requested_kw
        room = self.survey.headroom.kw if headroom_kw is None else headroom_kw
        return most_of(offers, room, asked, allowed_work=ROUGH_WORK).kw / float(asked.max())


def base_share(want: Want) -> float:
    """The multiple of the request that can be given on the terms that hold."""
    return want.share(want.offers(want.survey.quoted.quotes, want.allowed))


def lifted(want: Want) -> dict[str, float]:
    """The multiple of the request that could be had with one class of limits left aside, by the class's name.

    Only classes that keep any site. Feeder limits and the list of sites to leave out need no new quotes; the others
    are not told for fleets of more than MOST_SITES sites.
    """
    survey = want.survey
    quotes = survey.quoted.quotes
    found: dict[str, float] = {}
    offers = want.offers(quotes, want.allowed)
    if np.isfinite(survey.headroom.kw).any():
        found["feeder limits"] = want.share(offers, np.full_like(survey.headroom.kw, np.inf))
    if want.left_out.any():
        found["the list of sites to leave out"] = want.share(want.offers(quotes, survey.eligible.allowed))
    if survey.fleet.roster.count > MOST_SITES:
        return found
    terms, base = survey.terms, survey.quoted.ground
    event = terms.event_to - terms.event_from
    free = replace(terms, most_intervals=np.full_like(terms.most_intervals, event))
    kept = ~terms.allowed | (terms.most_intervals < event)
    found |= _again(want, "call limits", base, free, kept & ~want.left_out)
    prompt = replace(terms, earliest=np.zeros_like(terms.earliest))
    found |= _again(want, "notice", base, prompt, (terms.earliest > terms.event_from) & want.allowed)
    for name, words, fields in (
        ("comfort limits", ("comfort",), {"rise_limit_k": FAR_K, "supply_cap_c": np.inf}),
        ("storage held back", ("held_back", "inventory"), {"held_back_kwh_th": 0.0}),
    ):
        other = _with(base, fields)
        codes = [LIMITED_BY.index(word) for word in words]
        sites = np.isin(quotes.site_limited_by, codes) & want.allowed & other[1]
        if sites.any():
            changed = ground(other[0].roster, base.outlook, base.standing, base.in_force, base.recovering)
            found |= _again(want, name, changed, terms, sites)
    return found


def nearest(want: Want, share: float, available_kw: Floats) -> list[Suggestion]:
    """Requests close to the one asked that can be met: less kW, a shorter event, a later one.

    share: the multiple of the request that can be given; available_kw (node x interval,): the most in each alone.
    """
    ask, kw = want.ask, want.ask.by_node_kw
    found = []
    less = _rounded_down(want, share)
    if less > 0.0:
        found.append(Suggestion("less", less * kw, ask.event_from, ask.event_to))
    if want.survey.fleet.roster.count > MOST_SITES:
        return found
    could: Bools = np.all((available_kw >= ask.requested_kw).reshape(kw.shape), axis=0)
    tries = [("shorter", *hours, kw[:, :length]) for length, hours in _shorter(ask, could)]
    tries += [("later", *hours, kw) for hours in _later(want)]
    for change, event_from, event_to, part in tries:
        if change not in {one.change for one in found} and _can(want, part, event_from, event_to):
            found.append(Suggestion(change, part, event_from, event_to))
    return found


def _rounded_down(want: Want, share: float) -> float:
    """A share below 1, rounded down to whole kW, or to a hundredth where kW differ."""
    share = min(share, 1.0)
    if not want.is_flat:
        return float(np.floor(share / ROUND_SHARE + 1e-9) * ROUND_SHARE)
    asked = float(want.ask.requested_kw[0])
    return float(np.floor(share * asked / ROUND_KW + 1e-9) * ROUND_KW) / asked


def _shorter(ask: Request, could: Bools) -> Iterator[tuple[int, tuple[np.datetime64, np.datetime64]]]:
    """The same start, three quarters, half and a quarter as long: the longest whose intervals could alone."""
    count = ask.interval_count
    for length in dict.fromkeys((3 * count // 4, count // 2, count // 4)):
        if length > 0 and could[:length].all() and ask.by_node_kw[:, :length].any(axis=1).all():
            yield length, (ask.event_from, ask.event_from + length * ask.step)


def _later(want: Want) -> Iterator[tuple[np.datetime64, np.datetime64]]:
    """The same length some hours later, as long as it ends on the same local day and so has the same horizon."""
    ask, zone = want.ask, want.survey.folder.settings.timezone
    last = np.timedelta64(1, "us")
    for hours in LATER_H:
        shift = np.timedelta64(hours, "h")
        if local_day(ask.event_to + shift - last, zone) == local_day(ask.event_to - last, zone):
            yield ask.event_from + shift, ask.event_to + shift


def _can(want: Want, kw: Floats, event_from: np.datetime64, event_to: np.datetime64) -> bool:
    """Whether the fleet gives kw (node, interval) in other hours, quoted as a call for these would be."""
    survey = want.survey
    resolved, clock = survey.fleet.resolved["sites"], survey.quoted.quotes.clock
    hours = utc_timestamp(event_from), utc_timestamp(event_to)
    zone, at = survey.folder.settings.timezone, survey.ask.at
    eligible = limits.eligible_sites(resolved, survey.past, utc_timestamp(at), hours, zone)
    edges = clock.index(event_from), clock.index(event_from) + kw.shape[1]
    terms = limits.terms(resolved, eligible, clock, at, edges)
    terms = replace(terms, recoveries=survey.ask.recoveries or terms.recoveries)
    inside = np.any([survey.feeders.sites_below(name) for name in want.ask.node_ids], axis=0)
    allowed = eligible.allowed & ~want.left_out & inside
    quotes = quote(
        survey.quoted.ground, replace(terms, allowed=terms.allowed & allowed), survey.ask.direction
    ).quotes
    offers, asked = want.offers(quotes, allowed), kw.ravel()
    able = most_of(offers, survey.headroom.kw, asked, enough=float(asked.max()))
    return bool((offers.kw[able.chosen].sum(axis=0) >= asked).all())


def _with(base: Ground, fields: dict[str, float]) -> tuple[Ground, Bools]:
    """The ground with some fields of every building at another value, and the sites (N,) that this changes."""
    buildings = base.roster.buildings
    changed = {name: np.full_like(getattr(buildings, name), value) for name, value in fields.items()}
    other = np.any([getattr(buildings, name) != value for name, value in changed.items()], axis=0)
    roster = replace(base.roster, buildings=replace(buildings, **changed))
    return replace(base, roster=roster), np.asarray(other, dtype=np.bool_)


def _again(want: Want, name: str, base: Ground, terms: Terms, sites: Bools) -> dict[str, float]:
    """The share by the class's name once these sites are quoted on other terms, the rest as before; or nothing."""
    survey = want.survey
    inside = np.any([survey.feeders.sites_below(node) for node in want.ask.node_ids], axis=0)
    sites = sites & inside
    if not sites.any():
        return {}
    quotes = quote(base, replace(terms, allowed=sites), survey.ask.direction).quotes
    old = want.offers(survey.quoted.quotes, want.allowed & ~sites)
    return {name: want.share(_joined(old, want.offers(quotes, sites)))}


def _joined(one: Offers, other: Offers) -> Offers:
    """Offers of both, sorted by site."""
    site = np.concatenate([one.site, other.site])
    order = np.argsort(site, kind="stable")
    return replace(
        one,
        site=site[order],
        cost=np.concatenate([one.cost, other.cost])[order],
        kw=np.concatenate([one.kw, other.kw])[order],
        change_kw=np.concatenate([one.change_kw, other.change_kw])[order],
    )
