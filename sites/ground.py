"""What quotes stand on: conditions and the usual case of every site, worked out once for all candidates."""

from dataclasses import dataclass, fields, replace

import numpy as np

from sites.candidate import Stages, no_stages
from sites.conditions import Conditions, conditions, level_kw_th
from sites.course import Course
from sites.dispatch import plant_power_kw, staged_load_kw_th
from sites.outlook import Outlook
from sites.plant import at_rest, simulate
from sites.recovery import USUAL
from sites.roster import Roster, Standing
from sites.rows import Plants, plants
from sites.units import Floats, Ints, total

STAGE_BAND = 0.03
"""Least width of the band above a machine's start in which it may be off for part of an interval, of the load."""


@dataclass(frozen=True)
class Ground:
    """All that quotes stand on: the sites, what is expected, where they stand, and the usual case."""

    roster: Roster
    outlook: Outlook
    standing: Standing
    here: Conditions
    plants: Plants
    """One row a site; `pick` takes candidates"""
    usual: Course
    usual_low: Course
    overstated_kw: Floats
    """(site, interval) by how much the usual power may be too high: its tanks are held to their limits at the END
    of each interval, and a machine that starts in the middle of an interval counts for all of it"""
    overheld_kwh_th: Floats
    """(site, interval) by how much the usual inventory may be too high at an interval's start, for
    the same reason: tanks held to their limits at the END of each interval have given too little before"""
    in_force: Stages
    """Stages of other calls in force, one row a site: part of the usual case"""
    recovering: "Recovering | None" = None
    """How the sites of these calls come back; None: all as usual"""


@dataclass(frozen=True)
class Recovering:
    """Recoveries of calls in force, each (site,)."""

    recovery: Ints
    """Index into RECOVERIES"""
    recover_from: Ints
    """Clock index at which the call's window ends"""
    level_kwh_th: Floats
    """What the tanks would hold together at the horizon's start without the call, NaN where the call has not begun"""


def ground(
    roster: Roster,
    outlook: Outlook,
    standing: Standing,
    in_force: Stages | None = None,
    recovering: Recovering | None = None,
) -> Ground:
    """Work out conditions and the usual case (other calls in force carried out, their recoveries included) from best
    and low inventory."""
    here = conditions(roster, outlook, standing)
    machines = roster.chillers.exists.shape[1]
    stages = in_force if in_force is not None else no_stages(roster.count, machines)
    rows = plants(roster, here, standing.tank_available, np.arange(roster.count))
    usual, low = (
        _usual(rows, roster, here, standing, stages, start, recovering)
        for start in (standing.best_kwh_th, standing.low_kwh_th)
    )
    overstated = _by_tank_kw(here, usual) + _by_staging_kw(roster, here, usual)
    overheld = np.cumsum(_withheld_kw_th(here, usual), axis=1) * here.step_h
    overheld = np.pad(overheld, ((0, 0), (1, 0)))[:, :-1]
    return Ground(roster, outlook, standing, here, rows, usual, low, overstated, overheld, stages, recovering)


def usual_course(roster: Roster, outlook: Outlook, standing: Standing, level_from: int = 0) -> Course:
    """Usual operation alone, from the best estimate of the inventory, no call in force; load levelling runs at the flat
    rate of the 24 h from interval `level_from` on."""
    none = no_stages(roster.count, roster.chillers.exists.shape[1])
    here = conditions(roster, outlook, standing)
    here = replace(here, level_kw_th=level_kw_th(roster, outlook, level_from))
    rows = plants(roster, here, standing.tank_available, np.arange(roster.count))
    return simulate(rows, here, none, at_rest(standing.best_kwh_th), None)


def usual_high(base: Ground) -> Course:
    """The usual case from the high inventory, which an absorb is held against."""
    start = base.standing.high_kwh_th
    return _usual(base.plants, base.roster, base.here, base.standing, base.in_force, start, base.recovering)


def _usual(
    rows: Plants,
    roster: Roster,
    here: Conditions,
    standing: Standing,
    stages: Stages,
    start: Floats,
    recovering: Recovering | None = None,
) -> Course:
    usual = simulate(rows, here, stages, at_rest(start), None)
    if recovering is None or not (recovering.recovery != USUAL).any():
        return usual
    level = _spread(roster, standing, recovering.level_kwh_th, start)
    nothing = no_stages(roster.count, roster.chillers.exists.shape[1])
    without = simulate(rows, here, nothing, at_rest(level), None).as_usual
    site = np.flatnonzero(recovering.recovery != USUAL)
    after = (recovering.recovery[site], recovering.recover_from[site])
    replayed = simulate(rows.pick(site, after), here, stages.take(site), at_rest(start[site]), without)
    for field in fields(Course):
        getattr(usual, field.name)[site] = getattr(replayed, field.name)
    return usual


def _spread(roster: Roster, standing: Standing, level_kwh_th: Floats, start: Floats) -> Floats:
    """Inventory (site, tank) of a level of all tanks together, as a share of capacity; `start` where it is NaN."""
    capacity = np.where(standing.tank_available & roster.tanks.exists, roster.tanks.capacity_kwh_th, 0.0)
    whole = total(capacity)
    share = np.divide(level_kwh_th, whole, out=np.full_like(whole, np.nan), where=whole > 0.0)[:, None]
    return np.where(np.isnan(share) | (capacity <= 0.0), start, np.minimum(share, 1.0) * capacity)


def _withheld_kw_th(here: Conditions, usual: Course) -> Floats:
    """What the tanks could have given beside what they gave, (site, interval): where the usual plan asks them for
    more than their limit, the limit in the interval's middle is higher by about drawn x dt / 2 over the inventory (a
    limit in proportion to inventory)."""
    drawn = usual.discharge_kw_th.sum(axis=1)
    held = np.maximum(usual.inventory_kwh_th.sum(axis=1), 1e-9)
    kw_th = np.minimum(usual.wanted_kw_th - drawn, drawn * drawn * here.step_h / 2.0 / held)
    return np.asarray(np.maximum(kw_th, 0.0))


def _by_tank_kw(here: Conditions, usual: Course) -> Floats:
    """What machines do less where the tanks give more, at their mean full-load power; (site, interval)."""
    made, full = here.direct_kw_th.sum(axis=1), here.direct_full_kw.sum(axis=1)
    specific = np.divide(full, made, out=np.zeros_like(made), where=made > 0.0)
    return np.asarray(_withheld_kw_th(here, usual) * specific)


def _by_staging_kw(roster: Roster, here: Conditions, usual: Course) -> Floats:
    """What the plant draws less where its load comes within the interval as low as a machine's start and that
    machine is left off; (site, interval), in direct cooling. Within an interval the load moves by a quarter of what
    lies between its neighbours either way, and by STAGE_BAND at least."""
    sites, machines, count = usual.direct_kw_th.shape
    chillers = roster.chillers

    def flat(values: Floats) -> Floats:
        """(site, machine, interval) to (site x interval, machine)"""
        return np.moveaxis(values, 1, 2).reshape(-1, machines)

    capacity = flat(here.direct_kw_th * usual.limit_fraction)
    demand = np.minimum(total(flat(usual.direct_kw_th)), total(capacity))
    stage_up = np.repeat(roster.buildings.stage_up_fraction, count)
    moves = np.abs(np.gradient(demand.reshape(sites, count), axis=1)).ravel() / 2.0
    band = np.divide(moves, demand, out=np.zeros_like(demand), where=demand > 0.0)
    later = stage_up * (1.0 + np.clip(band, STAGE_BAND, 1.0))
    kind, own = np.repeat(chillers.kind, count, axis=0), np.repeat(chillers.dedicated_aux_kw, count, axis=0)
    available, full = flat(here.direct_kw_th), flat(here.direct_full_kw)

    def drawn(start: Floats) -> Floats:
        load = staged_load_kw_th(demand, capacity, start)
        return total(plant_power_kw(load, available, full, kind, own))

    less = drawn(stage_up) - drawn(later)
    makes_ice = usual.making_ice.any(axis=1)
    return np.where(makes_ice, 0.0, np.maximum(less, 0.0).reshape(sites, count))
