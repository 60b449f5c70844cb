"""Which candidates a site is quoted for: one contiguous block of the event, some machines off and the
rest limited, or the tanks made to charge."""

from dataclasses import dataclass, replace

import numpy as np

from sites.candidate import Stages
from sites.direction import Direction
from sites.recovery import RECOVERIES
from sites.roster import ICE_KINDS, TANK_KINDS, Roster, Rows, Standing, kind_is
from sites.units import Bools, Floats, Ints

SWITCHES = (0.25, 0.5, 0.75)
"""Shares of a window of two stages after which one machine comes back: three for each number of machines off, and
only for a site's longest window, so that they add a handful of candidates a site."""
LOAD_LIMITS = (1.0, 0.75, 0.5)
"""Demand limits offered to the machines that stay on, as a share of what each could give."""


@dataclass(frozen=True)
class Terms:
    """What the call allows each site; all (site,) but the event's two clock indices and the step."""

    event_from: int
    event_to: int
    step_minutes: int
    earliest: Ints
    """First clock index at which a window may start, by notice"""
    minimum_intervals: Ints
    most_intervals: Ints
    """Longest window, by the hours left to call"""
    allowed: Bools
    """False: over a call limit, or already in a call"""
    recoveries: tuple[str, ...] = ("usual",)
    """Which of RECOVERIES each window is offered with"""
    varied: Bools | None = None
    """(site,) sites offered all of `recoveries`, the others the first only; None: all sites"""
    two_stages: bool = False
    """Sheds are offered in two stages besides: one machine comes back as the tank's rate falls. A call's record tells
    of one stage only, so calls do not ask for them."""


@dataclass(frozen=True)
class Candidates(Rows):
    """C candidates sorted by site, start, end; windows [start, end) as clock indices."""

    site: Ints
    start: Ints
    end: Ints
    load_limit_fraction: Floats
    """(C,) demand limit on what stays on"""
    recovery: Ints
    """(C,) index into RECOVERIES"""
    stages: Stages


def candidates(
    roster: Roster, standing: Standing, terms: Terms, direction: Direction = Direction.SHED
) -> Candidates:
    """Every block of the event that a site's notice and minimum times allow.

    Shed: with its last k machines in loading order off and a demand limit on the others, for every k. Absorb: with
    the tanks made to charge and a demand limit on all machines.
    """
    if direction is Direction.ABSORB:
        return _charging(roster, standing, terms)
    ready = roster.chillers.exists & standing.chiller_available
    from_end = np.cumsum(ready[:, ::-1], axis=1)[:, ::-1]
    count = ready.sum(axis=1)
    parts = []
    for off_count in range(1, int(count.max(initial=0)) + 1):
        off = ready & (from_end <= off_count)
        shortest = np.maximum(
            terms.minimum_intervals, _least_intervals(off, roster.chillers.min_off_minutes, terms)
        )
        startable = np.where(off, roster.chillers.starts_left >= 1, True).all(axis=1)
        for limit in LOAD_LIMITS:
            has = terms.allowed & startable & (count >= off_count)
            if limit < 1.0:
                has = has & (count > off_count)
            site, first, last = _blocks(terms, has, shortest)
            machine_limit = np.where(off[site], 0.0, limit)
            parts.append((site, first, last, np.full(len(site), limit), machine_limit))
    found = _sorted(parts, roster.chillers.exists.shape[1], terms)
    return _with_two_stages(found, roster, ready, terms) if terms.two_stages else found


def _with_two_stages(found: Candidates, roster: Roster, ready: Bools, terms: Terms) -> Candidates:
    """The candidates, and each site's longest window with k machines off and k - 1 from one of SWITCHES on."""
    chillers = roster.chillers
    from_end = np.cumsum(ready[:, ::-1], axis=1)[:, ::-1]
    count = ready.sum(axis=1)
    first = np.maximum(terms.earliest, terms.event_from)
    last = np.minimum(first + terms.most_intervals, terms.event_to)
    parts = [_of_one_stage(found)]
    for off_count in range(2, int(count.max(initial=0)) + 1):
        more, fewer = ready & (from_end <= off_count), ready & (from_end < off_count)
        back = more & ~fewer
        rests = _least_intervals(more, chillers.min_off_minutes, terms)
        runs = _least_intervals(back, chillers.min_on_minutes, terms)
        startable = np.where(more, chillers.starts_left >= 1, True).all(axis=1)
        for share in SWITCHES:
            switch = first + np.round(share * (last - first)).astype(np.int64)
            has = terms.allowed & startable & (count >= off_count) & (last - first >= terms.minimum_intervals)
            has &= (switch - first >= np.maximum(rests, 1)) & (last - switch >= np.maximum(runs, 1))
            site = np.flatnonzero(has)
            row, recovery = _with_recoveries(site, terms)
            site = site[row]
            starts, ends = (np.stack(pair, axis=1)[site] for pair in ((first, switch), (switch, last)))
            machine = np.stack([np.where(mask[site], 0.0, 1.0) for mask in (more, fewer)], axis=1)
            stages = Stages(starts, ends, machine)
            parts.append(Candidates(site, first[site], last[site], np.ones(len(site)), recovery, stages))
    return _merged(parts)


def _of_one_stage(found: Candidates) -> Candidates:
    """Candidates of one stage, with a second that is empty."""
    stages = found.stages
    nothing = Stages(stages.end, stages.end, np.ones_like(stages.load_limit_fraction))
    return replace(found, stages=stages.join(nothing))


def _merged(parts: list[Candidates]) -> Candidates:
    """All parts in order of site, start and end; those of an earlier part first."""
    columns = [
        np.concatenate([getattr(part, name) for part in parts])
        for name in ("site", "start", "end", "load_limit_fraction", "recovery")
    ]
    stages = Stages(
        *(
            np.concatenate([getattr(part.stages, name) for part in parts])
            for name in ("start", "end", "load_limit_fraction", "charge")
        )
    )
    found = Candidates(columns[0], columns[1], columns[2], columns[3], columns[4], stages)
    return found.take(np.lexsort((found.end, found.start, found.site)))


def _charging(roster: Roster, standing: Standing, terms: Terms) -> Candidates:
    """Blocks in which the tanks are made to charge: sites with a tank and machines that can charge it."""
    chillers, tanks = roster.chillers, roster.tanks
    tank = tanks.exists & standing.tank_available
    ice = np.asarray((tanks.exists & kind_is(tanks.kind, TANK_KINDS, ICE_KINDS)).any(axis=1))
    ready = chillers.exists & standing.chiller_available
    able = ready & (chillers.makes_ice | ~ice[:, None])
    startable = np.where(able, chillers.starts_left >= 1, True).all(axis=1)
    shortest = np.maximum(terms.minimum_intervals, _least_intervals(able, chillers.min_on_minutes, terms))
    has = terms.allowed & tank.any(axis=1) & able.any(axis=1) & startable
    parts = []
    for limit in LOAD_LIMITS:
        site, first, last = _blocks(terms, has, shortest)
        machine_limit = np.full(ready[site].shape, limit)
        parts.append((site, first, last, np.full(len(site), limit), machine_limit))
    found = _sorted(parts, chillers.exists.shape[1], terms)
    return replace(
        found, stages=replace(found.stages, charge=np.ones(found.stages.start.shape, dtype=np.bool_))
    )


def _blocks(terms: Terms, has: Bools, shortest: Ints) -> tuple[Ints, Ints, Ints]:
    """Site, start and end of every block of the event, at least `shortest` (site,), of the sites that `has` any."""
    edges = np.arange(terms.event_from, terms.event_to + 1)
    first, last = (grid.ravel() for grid in np.meshgrid(edges, edges, indexing="ij"))
    first, last = first[first < last], last[first < last]
    site, block = np.nonzero(
        has[:, None]
        & (first[None, :] >= terms.earliest[:, None])
        & (last - first >= shortest[:, None])
        & (last - first <= terms.most_intervals[:, None])
    )
    return site, first[block], last[block]


def _least_intervals(which: Bools, minutes: Floats, terms: Terms) -> Ints:
    """Intervals (site,) that keep the longest of the minimum times of `which` machines."""
    longest = np.where(which, minutes, 0.0).max(axis=1, initial=0.0)
    return np.asarray(np.ceil(longest / terms.step_minutes), dtype=np.int64)


def _sorted(parts: list[tuple[Ints, Ints, Ints, Floats, Floats]], machines: int, terms: Terms) -> Candidates:
    """All candidates in order, each once with every recovery that its site is offered."""
    if not parts:
        none = np.zeros(0, dtype=np.int64)
        empty = Stages(none[:, None], none[:, None], np.zeros((0, 1, machines)))
        return Candidates(none, none, none, np.zeros(0), none, empty)
    site, start, end, limit, machine = (np.concatenate(column) for column in zip(*parts, strict=True))
    order = np.lexsort((-limit, (machine == 0.0).sum(axis=1), end, start, site))
    row, recovery = _with_recoveries(site[order], terms)
    site, start, end, limit, machine = (array[order[row]] for array in (site, start, end, limit, machine))
    stages = Stages(start[:, None], end[:, None], machine[:, None, :])
    return Candidates(site, start, end, limit, recovery, stages)


def _with_recoveries(site: Ints, terms: Terms) -> tuple[Ints, Ints]:
    """Rows of `site` (row,), each repeated for every recovery its site is offered, and the recovery of each."""
    codes = np.array([RECOVERIES.index(name) for name in terms.recoveries], dtype=np.int64)
    row = np.repeat(np.arange(len(site)), len(codes))
    place = np.tile(np.arange(len(codes)), len(site))
    if terms.varied is not None:
        kept = (place == 0) | terms.varied[site[row]]
        row, place = row[kept], place[kept]
    return row, codes[place]
