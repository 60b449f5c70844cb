"""Other terms than those asked for: what the fleet could give then, and the nearest request that it can meet.

Owns quoting a survey's fleet again for other hours or with one kind of limit left aside. What is told here is a
figure to decide on; a call is made on the terms that hold.
"""

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from fleet import limits
from fleet.desk import Survey
from fleet.most import most_of, sustained
from fleet.offers import offered, offers_of
from fleet.wall_time import local_day, utc_timestamp
from sites.quote import Ground, ground, quote
from sites.quotes import DenseQuotes
from sites.units import Bools

MOST_SITES: Final = 400
"""Fleets above are not quoted again: it would take longer than the call."""
FAR_K: Final = 100.0
"""A rise of the zone that no case reaches."""
LATER_H: Final = (1, 2, 3)
ROUND_KW: Final = 1.0


@dataclass(frozen=True)
class Suggestion:
    """A request that the fleet can meet, by the same quotes and limits as a call for it would have."""

    change: str
    """less, shorter or later"""
    kw: float
    event_from: np.datetime64
    event_to: np.datetime64


def lifted(survey: Survey) -> dict[str, float]:
    """kW that could be had in all intervals together with one class of limits left aside, by the class's name.

    Empty for fleets of more than MOST_SITES sites.
    """
    if survey.fleet.roster.count > MOST_SITES:
        return {}
    every = np.ones_like(survey.eligible.allowed)
    terms, base = survey.terms, survey.quoted.ground
    longest = np.full_like(terms.most_intervals, terms.event_to)
    free = replace(terms, allowed=every, most_intervals=longest)
    prompt = replace(terms, earliest=np.zeros_like(terms.earliest))
    direction = survey.ask.direction
    return {
        "call limits": _most(survey, quote(base, free, direction).quotes, every),
        "notice": _most(survey, quote(base, prompt, direction).quotes, survey.eligible.allowed),
        "comfort limits": _of_roster(survey, rise_limit_k=FAR_K),
        "storage held back": _of_roster(survey, held_back_kwh_th=0.0),
    }


def nearest(survey: Survey, kw: float, sustained_kw: float) -> list[Suggestion]:
    """Requests close to `kw` in every interval that can be met: less kW, a shorter event, a later one."""
    ask = survey.ask
    found = []
    less = float(np.floor(min(sustained_kw, kw) / ROUND_KW) * ROUND_KW)
    if less > 0.0:
        found.append(Suggestion("less", less, ask.event_from, ask.event_to))
    if survey.fleet.roster.count > MOST_SITES:
        return found
    for change, hours in (("shorter", _shorter(survey)), ("later", _later(survey))):
        for event_from, event_to in hours:
            if _can(survey, kw, event_from, event_to):
                found.append(Suggestion(change, kw, event_from, event_to))
                break
    return found


def _shorter(survey: Survey) -> Iterator[tuple[np.datetime64, np.datetime64]]:
    """The same start, three quarters, half and a quarter as long."""
    ask, step = survey.ask, survey.quoted.quotes.clock.step
    count = int((ask.event_to - ask.event_from) // step)
    for length in dict.fromkeys((3 * count // 4, count // 2, count // 4)):
        if length > 0:
            yield ask.event_from, ask.event_from + length * step


def _later(survey: Survey) -> Iterator[tuple[np.datetime64, np.datetime64]]:
    """The same length some hours later, as long as it ends on the same local day and so has the same horizon."""
    ask, zone = survey.ask, survey.folder.settings.timezone
    last = np.timedelta64(1, "us")
    for hours in LATER_H:
        shift = np.timedelta64(hours, "h")
        if local_day(ask.event_to + shift - last, zone) == local_day(ask.event_to - last, zone):
            yield ask.event_from + shift, ask.event_to + shift


def _can(survey: Survey, kw: float, event_from: np.datetime64, event_to: np.datetime64) -> bool:
    """Whether the fleet gives `kw` in every interval of other hours, quoted as a call for these would be."""
    resolved, clock = survey.fleet.resolved["sites"], survey.quoted.quotes.clock
    hours = utc_timestamp(event_from), utc_timestamp(event_to)
    zone, at = survey.folder.settings.timezone, survey.ask.at
    eligible = limits.eligible_sites(resolved, survey.past, utc_timestamp(at), hours, zone)
    edges = clock.index(event_from), clock.index(event_from) + int((event_to - event_from) // clock.step)
    terms = limits.terms(resolved, eligible, clock, at, edges)
    quotes = quote(survey.quoted.ground, terms, survey.ask.direction).quotes
    kept = offered(quotes, survey.feeders, [survey.node_id], eligible.allowed)
    factor = survey.fleet.roster.buildings.delivery_factor
    offers = offers_of(quotes, survey.feeders, factor, np.zeros(quotes.site_count), kept)
    asked = np.full(offers.kw.shape[1], kw)
    able = most_of(offers, survey.headroom.kw, asked, enough=kw)
    return bool((offers.kw[able.chosen].sum(axis=0) >= kw).all())


def _of_roster(survey: Survey, **fields: float) -> float:
    """The most with one field of every building at another value."""
    base: Ground = survey.quoted.ground
    buildings = base.roster.buildings
    changed = {name: np.full_like(getattr(buildings, name), value) for name, value in fields.items()}
    if all((getattr(buildings, name) == value).all() for name, value in changed.items()):
        return _most(survey, survey.quoted.quotes, survey.eligible.allowed)
    roster = replace(base.roster, buildings=replace(buildings, **changed))
    again = ground(roster, base.outlook, base.standing, base.in_force)
    quotes = quote(again, survey.terms, survey.ask.direction).quotes
    return _most(survey, quotes, survey.eligible.allowed)


def _most(survey: Survey, quotes: DenseQuotes, allowed: Bools) -> float:
    factor = survey.fleet.roster.buildings.delivery_factor
    return sustained(quotes, survey.feeders, survey.headroom.kw, survey.node_id, factor, allowed).kw
