"""Quotes: every candidate of every site simulated, held against its limits, and priced.

Each candidate is run twice: from the best estimate of the inventory and from the low one (an absorb: the high
one). Limits must hold in both; kW and cost are the best estimate's, and a candidate that would give less from the
other inventory is not quoted at all, so that no promise rests on the better level.
"""

from collections.abc import Iterable
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np

from sites import blocks
from sites.candidate import Stages
from sites.compiled import each
from sites.cost import cost_parts, lack_price_per_kwh_th
from sites.course import Course
from sites.direction import Direction
from sites.ground import Ground, ground
from sites.plant import at_rest, simulate
from sites.quotes import LIMITED_BY, DenseQuotes
from sites.recovery import RECOVERIES, USUAL
from sites.roster import Roster
from sites.trial import Tried, sides_of, try_all
from sites.units import AnyArray, Bools, Floats, Ints, Strings

__all__ = ["Ground", "Quoted", "detail", "ground", "quote", "together", "windows_of"]

ROWS_AT_ONCE = 8192
"""Candidates run together by one thread: what they need over the horizon stays within tens of MB."""


@dataclass(frozen=True)
class Quoted:
    """Quotes with the ground they stand on; `detail` expands chosen candidates to whole courses."""

    ground: Ground
    quotes: DenseQuotes
    load_limit_fraction: Floats
    """(C,) demand limit on what stays on"""
    recovery: Ints
    """(C,) index into RECOVERIES"""
    inventory_low_start_kwh_th: Floats
    """(C,) inventory at window start in the course from the low inventory; of an absorb, from the high one"""
    peak_rise_k: Floats
    """(C,) highest rise of the zone's air above the usual case"""
    full_again: Ints
    """(C,) clock index, -1 = not within the horizon"""
    tried: int
    """Candidates simulated, quoted or not"""


def quote(base: Ground, terms: blocks.Terms, direction: Direction = Direction.SHED) -> Quoted:
    """Quote every candidate of every site in a direction: machines off, or tanks made to charge."""
    offered = blocks.candidates(base.roster, base.standing, terms, direction)
    sides = sides_of(base, direction)
    lack_price = lack_price_per_kwh_th(base.here, base.outlook)
    count = -(-len(offered.site) // ROWS_AT_ONCE)
    edges = np.linspace(0, len(offered.site), max(count, 1) + 1).astype(np.int64)

    def part(i: int) -> _Part:
        index = np.arange(edges[i], edges[i + 1])
        event = (terms.event_from, terms.event_to)
        tried = try_all(base, offered.take(index), event, direction, sides)
        return _part(base, offered, index, tried, lack_price)

    found = _joined(each(part, len(edges) - 1))
    kept = found.kept
    site = offered.site[kept]
    quotes = DenseQuotes(
        clock=base.outlook.clock,
        direction=direction,
        event_from=terms.event_from,
        event_to=terms.event_to,
        site=site,
        quote_id=_quote_ids(base.roster, offered, kept),
        stages=offered.stages.take(kept),
        window_start=offered.start[kept],
        window_end=offered.end[kept],
        expected_kw=direction.sign * found.change_kw[:, terms.event_from : terms.event_to],
        change_kw=found.change_kw,
        cost=found.cost,
        unmet_kwh_th=found.sums["unmet_kwh_th"],
        end_lack_kwh_th=found.sums["lack_kwh_th"],
        end_lack_price_per_kwh_th=lack_price[site],
        limited_by=found.limited_by,
        site_limited_by=_site_limits(base, terms, direction, offered.site, found.verdict, found.energy),
    )
    return Quoted(
        ground=base,
        quotes=quotes,
        load_limit_fraction=offered.load_limit_fraction[kept],
        recovery=offered.recovery[kept],
        inventory_low_start_kwh_th=found.low_start_kwh_th,
        peak_rise_k=found.sums["highest_k"],
        full_again=found.sums["full_again"],
        tried=len(offered.site),
    )


@dataclass(frozen=True)
class _Part:
    """What came of some of the candidates on offer: verdict and energy of each, the rest of those that are quoted."""

    verdict: Ints
    energy: Floats
    """Expected kW summed over the event"""
    kept: Ints
    """Index over all on offer"""
    change_kw: Floats
    cost: Floats
    sums: AnyArray
    """tally.SUMS"""
    low_start_kwh_th: Floats
    limited_by: Ints


def _part(base: Ground, offered: blocks.Candidates, index: Ints, tried: Tried, lack_price: Floats) -> _Part:
    """The quoted ones of the candidates `index`, priced."""
    kept = index[tried.kept]
    cost = cost_parts(
        base.outlook,
        base.roster.buildings,
        base.usual.power_kw,
        offered.site[kept],
        tried.change_kw,
        (offered.start[kept], offered.end[kept]),
        tried.sums["unmet_kwh_th"],
        tried.sums["lack_kwh_th"],
        lack_price,
    )
    return _Part(
        verdict=tried.verdict,
        energy=tried.expected_kw.sum(axis=1),
        kept=kept,
        change_kw=tried.change_kw,
        cost=cost,
        sums=tried.sums,
        low_start_kwh_th=tried.low_start_kwh_th,
        limited_by=tried.limited_by,
    )


def _joined(parts: list[_Part]) -> _Part:
    """All parts in one, in their order; each is let go once it is copied, so that memory is not needed twice."""
    ends = np.cumsum([len(part.kept) for part in parts])
    change = np.empty((int(ends[-1]), parts[0].change_kw.shape[1]))
    small = {
        field.name: np.concatenate([getattr(part, field.name) for part in parts])
        for field in fields(_Part)
        if field.name != "change_kw"
    }
    for end in ends[::-1].tolist():
        last = parts.pop().change_kw
        change[end - len(last) : end] = last
    return _Part(change_kw=change, **small)


def together(first: Quoted, second: Quoted) -> Quoted:
    """Quotes of both in order of site, start and end; of one ground, direction and event, no candidate in both.

    What limits a site is told by the quotes that hold its candidate of most energy, the first where they are alike.
    """
    one, other = first.quotes, second.quotes
    order = np.lexsort([np.concatenate([getattr(of, name) for of in (one, other)]) for name in _ORDER])

    def joined(of: Any, more: Any, names: Iterable[str]) -> dict[str, Any]:
        return {name: np.concatenate([getattr(of, name), getattr(more, name)])[order] for name in names}

    better = _most_energy(other) > _most_energy(one)
    quotes = replace(
        one,
        **joined(one, other, _OF_QUOTES),
        stages=Stages(**joined(one.stages, other.stages, _OF_STAGES)),
        site_limited_by=np.where(better, other.site_limited_by, one.site_limited_by),
    )
    tried = first.tried + second.tried
    return replace(first, quotes=quotes, **joined(first, second, _OF_QUOTED), tried=tried)


_ORDER = ("window_end", "window_start", "site")
_OF_STAGES = ("start", "end", "load_limit_fraction", "charge")
_OF_QUOTES = (
    *("site", "quote_id", "window_start", "window_end", "expected_kw", "change_kw", "cost", "unmet_kwh_th"),
    *("end_lack_kwh_th", "end_lack_price_per_kwh_th", "limited_by"),
)
_OF_QUOTED = ("load_limit_fraction", "recovery", "inventory_low_start_kwh_th", "peak_rise_k", "full_again")
"""Fields with a row for each candidate."""


def _most_energy(quotes: DenseQuotes) -> Floats:
    """(N,) sum of expected kW of each site's best candidate, 0 where it has none."""
    best = np.zeros(quotes.site_count)
    np.maximum.at(best, quotes.site, quotes.expected_kw.sum(axis=1))
    return best


def detail(quoted: Quoted, candidate: Ints) -> Course:
    """Whole course of the chosen candidates (row,), from the best estimate of the inventory."""
    base, quotes = quoted.ground, quoted.quotes
    site = quotes.site[candidate]
    rows = base.plants.pick(site, (quoted.recovery[candidate], quotes.window_end[candidate]))
    stages = base.in_force.take(site).join(quotes.stages.take(candidate))
    start = at_rest(base.standing.best_kwh_th[site])
    return simulate(rows, base.here, stages, start, base.usual.as_usual)


def _site_limits(
    base: Ground, terms: blocks.Terms, direction: Direction, site: Ints, verdict: Ints, energy: Floats
) -> Ints:
    """What keeps each site (N,) from giving more: the reason of its largest refused candidate that beats its
    best quoted one, or why it has no candidate at all."""
    count = base.roster.count
    best = np.zeros(count)
    np.maximum.at(best, site[verdict == 0], energy[verdict == 0])
    refused = np.flatnonzero((verdict > 0) & ((energy > best[site]) | (best[site] <= 0.0)))
    limit = np.full(count, LIMITED_BY.index("none"))
    order = refused[np.argsort(energy[refused], kind="stable")]
    limit[site[order]] = verdict[order]
    tried = np.zeros(count, dtype=np.bool_)
    tried[site] = True
    ready = (base.roster.chillers.exists & base.standing.chiller_available).any(axis=1)
    if direction is Direction.ABSORB:
        ready &= (base.roster.tanks.exists & base.standing.tank_available).any(axis=1)
    late = terms.earliest > terms.event_to - terms.minimum_intervals
    untried = np.select(
        [~ready, ~terms.allowed, late],
        [LIMITED_BY.index(name) for name in ("availability", "call_limit", "notice")],
        default=LIMITED_BY.index("minimum_run"),
    )
    result: Ints = np.where(tried, limit, untried).astype(np.int64)
    return result


def _quote_ids(roster: Roster, offered: blocks.Candidates, kept: Ints) -> Strings:
    """Id of the `kept` candidates: the site's id, the candidate's number within the site from 1, and its recovery where
    that is not the usual one."""
    if not len(kept):
        return np.zeros(0, dtype=np.object_)
    site = offered.site[kept]
    first = np.searchsorted(offered.site, np.arange(roster.count), side="left")
    number = np.strings.zfill((kept - first[site] + 1).astype(np.str_), 4)
    named = np.strings.add(np.strings.add(roster.buildings.site_id.astype(np.str_)[site], "."), number)
    suffix = np.array([f"-{name}" if code != USUAL else "" for code, name in enumerate(RECOVERIES)])
    result: Strings = np.strings.add(named, suffix[offered.recovery[kept]]).astype(np.object_)
    return result


def windows_of(quotes: DenseQuotes, candidate: Ints) -> Bools:
    """Mask (row, horizon interval) of each chosen candidate's own window."""
    hour = np.arange(quotes.clock.count)[None, :]
    start, end = quotes.window_start[candidate], quotes.window_end[candidate]
    inside: Bools = (hour >= start[:, None]) & (hour < end[:, None])
    return inside
