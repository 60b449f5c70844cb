"""Quotes: every candidate of every site simulated, held against its limits, and priced.

Each candidate is run twice: from the best estimate of the inventory and from the low one. Limits must hold in
both; kW and cost are the best estimate's, and a candidate that would shed less from the low inventory is not
quoted at all, so that no promise rests on the better level.
"""

from dataclasses import dataclass

import numpy as np

from sites import blocks
from sites.candidate import Stages, no_stages
from sites.conditions import Conditions, conditions
from sites.cost import cost_parts, lack_price_per_kwh_th
from sites.course import Course, course
from sites.direction import Direction
from sites.errors import SitesError
from sites.outlook import Outlook
from sites.plant import simulate
from sites.quotes import LIMITED_BY, DenseQuotes
from sites.roster import Roster, Standing
from sites.rows import plants
from sites.tally import Tally, broken, tally, tank_cause
from sites.units import Bools, Floats, Ints, Strings

LEAST_SHED_KW = 1.0
"""A candidate sheds at least this much in every interval of its window, else its machines are as good as off."""
LOW_TOLERANCE = 0.01
"""Share by which the low inventory's shed may lie below the best's."""


@dataclass(frozen=True)
class Ground:
    """All that quotes stand on: the sites, what is expected, where they stand, and the usual case."""

    roster: Roster
    outlook: Outlook
    standing: Standing
    here: Conditions
    usual: Course
    usual_low: Course
    in_force: Stages
    """Stages of other calls in force, one row a site: part of the usual case"""


@dataclass(frozen=True)
class Quoted:
    """Quotes with the ground they stand on; `detail` expands chosen candidates to whole courses."""

    ground: Ground
    quotes: DenseQuotes
    load_limit_fraction: Floats
    """(C,) demand limit on what stays on"""
    inventory_low_start_kwh_th: Floats
    """(C,) inventory at window start in the low course"""
    peak_rise_k: Floats
    """(C,) highest rise of the zone's air above the usual case"""
    full_again: Ints
    """(C,) clock index, -1 = not within the horizon"""
    tried: int
    """Candidates simulated, quoted or not"""


def ground(roster: Roster, outlook: Outlook, standing: Standing, in_force: Stages | None = None) -> Ground:
    """Work out conditions and the usual case (other calls in force carried out) from best and low inventory."""
    here = conditions(roster, outlook, standing)
    machines = roster.chillers.exists.shape[1]
    stages = in_force if in_force is not None else no_stages(roster.count, machines)
    rows = plants(roster, here, standing.tank_available, np.arange(roster.count))
    usual, low = (
        course(simulate(rows, here, stages, start, None))
        for start in (standing.best_kwh_th, standing.low_kwh_th)
    )
    return Ground(roster, outlook, standing, here, usual, low, stages)


def quote(base: Ground, terms: blocks.Terms, direction: Direction = Direction.SHED) -> Quoted:
    """Quote every candidate of every site.

    Raises SitesError for Direction.ABSORB, whose candidates are not offered yet.
    """
    if direction is not Direction.SHED:
        raise SitesError("direction absorb cannot be quoted yet; call with direction shed")
    offered = blocks.candidates(base.roster, base.standing, terms)
    best = _run(base, offered, base.usual, base.standing.best_kwh_th)
    low = _run(base, offered, base.usual_low, base.standing.low_kwh_th)
    change = best.power_kw - base.usual.power_kw[offered.site]
    change_low = low.power_kw - base.usual_low.power_kw[offered.site]
    event = slice(terms.event_from, terms.event_to)
    expected = direction.sign * change[:, event]
    verdict = _verdict(base, terms, offered, (best, low), expected, direction.sign * change_low[:, event])
    kept = np.flatnonzero(verdict == 0)
    site = offered.site[kept]
    lack_price = lack_price_per_kwh_th(base.here, base.outlook)[site]
    cost = cost_parts(
        base.outlook.take(site),
        base.roster.buildings.take(site),
        base.usual.power_kw[site],
        change[kept],
        (offered.start[kept], offered.end[kept]),
        best.unmet_kwh_th[kept],
        best.lack_kwh_th[kept],
        lack_price,
    )
    quotes = DenseQuotes(
        clock=base.outlook.clock,
        direction=direction,
        event_from=terms.event_from,
        event_to=terms.event_to,
        site=site,
        quote_id=_quote_ids(base.roster, offered.site)[kept],
        stages=offered.stages.take(kept),
        window_start=offered.start[kept],
        window_end=offered.end[kept],
        expected_kw=expected[kept],
        change_kw=change[kept],
        cost=cost,
        unmet_kwh_th=best.unmet_kwh_th[kept],
        end_lack_kwh_th=best.lack_kwh_th[kept],
        end_lack_price_per_kwh_th=lack_price,
        limited_by=_limited_by(best, kept),
        site_limited_by=_site_limits(base, terms, offered.site, verdict, expected),
    )
    return Quoted(
        ground=base,
        quotes=quotes,
        load_limit_fraction=offered.load_limit_fraction[kept],
        inventory_low_start_kwh_th=low.inventory_at_start_kwh_th[kept],
        peak_rise_k=best.rise_k[kept].max(axis=1, initial=0.0),
        full_again=best.full_again[kept],
        tried=len(offered.site),
    )


def detail(quoted: Quoted, candidate: Ints) -> Course:
    """Whole course of the chosen candidates (row,), from the best estimate of the inventory."""
    base, quotes = quoted.ground, quoted.quotes
    site = quotes.site[candidate]
    rows = plants(base.roster, base.here, base.standing.tank_available, site)
    stages = base.in_force.take(site).join(quotes.stages.take(candidate))
    start = base.standing.best_kwh_th[site]
    return course(simulate(rows, base.here, stages, start, base.usual.as_usual))


def _run(base: Ground, offered: blocks.Candidates, usual: Course, inventory: Floats) -> Tally:
    rows = plants(base.roster, base.here, base.standing.tank_available, offered.site)
    stages = base.in_force.take(offered.site).join(offered.stages)
    moments = simulate(rows, base.here, stages, inventory[offered.site], usual.as_usual)
    return tally(moments, rows, base.here, usual, offered.start, offered.end)


def _verdict(
    base: Ground,
    terms: blocks.Terms,
    offered: blocks.Candidates,
    runs: tuple[Tally, Tally],
    expected: Floats,
    expected_low: Floats,
) -> Ints:
    """Why each candidate is refused (C,), as an index into LIMITED_BY; 0 = it is quoted."""
    rows = plants(base.roster, base.here, base.standing.tank_available, offered.site)
    best, low = (broken(run, rows, base.here) for run in runs)
    hour = np.arange(terms.event_from, terms.event_to)[None, :]
    inside = (hour >= offered.start[:, None]) & (hour < offered.end[:, None])
    least = np.where(inside, expected, np.inf).min(axis=1, initial=np.inf)
    slack = LOW_TOLERANCE * np.abs(expected) + LEAST_SHED_KW
    less = (inside & (expected_low < expected - slack)).any(axis=1)
    return np.select(
        [least < LEAST_SHED_KW, best > 0, low > 0, less],
        [
            np.full_like(best, LIMITED_BY.index("already_off")),
            best,
            low,
            np.full_like(best, LIMITED_BY.index("inventory")),
        ],
        default=0,
    )


def _limited_by(best: Tally, kept: Ints) -> Ints:
    """What a quoted candidate leans on: the tank's cause where load goes unmet, else nothing."""
    cause = tank_cause(best)[kept]
    comfort = np.where(best.unmet_kwh_th[kept] > 0.0, LIMITED_BY.index("comfort"), 0)
    return np.where(cause > 0, cause, comfort)


def _site_limits(base: Ground, terms: blocks.Terms, site: Ints, verdict: Ints, expected: Floats) -> Ints:
    """What keeps each site (N,) from giving more: the reason of its largest refused candidate that beats its
    best quoted one, or why it has no candidate at all."""
    count = base.roster.count
    energy = expected.sum(axis=1)
    best = np.zeros(count)
    np.maximum.at(best, site[verdict == 0], energy[verdict == 0])
    refused = np.flatnonzero((verdict > 0) & (energy > best[site]))
    limit = np.where(best > 0.0, LIMITED_BY.index("none"), LIMITED_BY.index("already_off"))
    order = refused[np.argsort(energy[refused], kind="stable")]
    limit[site[order]] = verdict[order]
    tried = np.zeros(count, dtype=np.bool_)
    tried[site] = True
    ready = (base.roster.chillers.exists & base.standing.chiller_available).any(axis=1)
    late = terms.earliest > terms.event_to - terms.minimum_intervals
    untried = np.select(
        [~ready, ~terms.allowed, late],
        [LIMITED_BY.index(name) for name in ("availability", "call_limit", "notice")],
        default=LIMITED_BY.index("minimum_run"),
    )
    result: Ints = np.where(tried, limit, untried).astype(np.int64)
    return result


def _quote_ids(roster: Roster, site: Ints) -> Strings:
    """Id of each candidate: the site's id and the candidate's number within the site, from 1."""
    if not len(site):
        return np.zeros(0, dtype=np.object_)
    first = np.searchsorted(site, site, side="left")
    number = np.strings.zfill((np.arange(len(site)) - first + 1).astype(np.str_), 4)
    named = np.strings.add(np.strings.add(roster.buildings.site_id.astype(np.str_)[site], "."), number)
    result: Strings = named.astype(np.object_)
    return result


def windows_of(quotes: DenseQuotes, candidate: Ints) -> Bools:
    """Mask (row, horizon interval) of each chosen candidate's own window."""
    hour = np.arange(quotes.clock.count)[None, :]
    start, end = quotes.window_start[candidate], quotes.window_end[candidate]
    inside: Bools = (hour >= start[:, None]) & (hour < end[:, None])
    return inside
