"""From a fleet folder to quotes: reads what a request needs and quotes every site under it.

Owns the order of the steps and the horizon. Every figure comes from the rooms below; what is done with the
quotes (show them, call on them) is quoting's and calling's business.
"""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from fleet import feeders as network
from fleet import in_force, limits, recharge, records
from fleet.assemble import Fleet, assemble
from fleet.errors import FleetError
from fleet.folder import FleetFolder, open_folder
from fleet.plant_history import with_history
from fleet.wall_time import local_day, local_day_start, local_text, on_grid, up_to_grid, utc_timestamp
from sites import compiled
from sites.blocks import Terms
from sites.direction import Direction
from sites.quote import Ground, Quoted, ground
from sites.units import Bools, Floats

Progress = Callable[[str], None]


@dataclass(frozen=True)
class Ask:
    """When and where something is asked of a fleet; times UTC, datetime64[us]."""

    node_id: str | None
    """None: the whole fleet"""
    direction: Direction
    at: np.datetime64
    event_from: np.datetime64
    event_to: np.datetime64
    recoveries: tuple[str, ...] = ()
    """Which of sites.recovery.RECOVERIES every site is offered; (): as needed (recharge.py)"""


@dataclass(frozen=True)
class Survey:
    """What every site of a fleet can give to an ask, with all that it rests on."""

    folder: FleetFolder
    fleet: Fleet
    ask: Ask
    node_id: str
    feeders: network.Feeders
    headroom: network.Headroom
    terms: Terms
    eligible: limits.Eligible
    past: pd.DataFrame
    quoted: Quoted

    @property
    def under_node(self) -> Bools:
        """(site,) below the requested node."""
        return self.feeders.sites_below(self.node_id)

    @property
    def notes(self) -> tuple[str, ...]:
        """What was taken as it is though it may surprise: of the folder, the network, its limits and the prices."""
        zone, clock = self.folder.settings.timezone, self.fleet.outlook.clock
        prices = self.fleet.outlook.price_per_kwh
        found = []
        for mask, said in ((prices < 0.0, "below zero"), (prices == 0.0, "of zero")):
            some = np.flatnonzero(mask.any(axis=0))
            if some.size:
                sites = int(mask.any(axis=1).sum())
                first = local_text(clock.starts[some[0]], zone)
                found.append(
                    f"energy prices {said} at {sites} of {len(prices)} sites, first at {first}: taken as they are"
                )
        return (*self.folder.notes, *self.feeders.notes, *self.headroom.notes, *found)


def survey(
    path: Path, ask: Ask, progress: Progress = lambda text: None, asked_kw: float | None = None
) -> Survey:
    """Read a fleet folder and quote every site for an ask; `asked_kw`, where given, is held against the rated
    electric total of the chillers under the node before anything is quoted.

    Raises Refused and FleetError for anything wrong with folder or ask.
    """
    progress("reading the fleet")
    folder = open_folder(path, without=("meters",))
    settings = folder.settings
    for time in (ask.event_from, ask.event_to):
        on_grid(time, settings.interval_minutes, settings.timezone)
    check_order(ask.at, ask.event_from, ask.event_to)
    start = up_to_grid(ask.at, settings.interval_minutes)
    last_day = local_day(ask.event_to - np.timedelta64(1, "us"), settings.timezone)
    end = local_day_start(last_day + np.timedelta64(2, "D"), settings.timezone)
    past = records.events(path)
    fleet = with_history(folder, assemble(folder, start, end), past[past["purpose"].isin(limits.COUNTED)])
    buildings = fleet.roster.buildings
    tree = network.feeders(
        folder.frames["nodes"],
        folder.frames["node_loads"],
        buildings.node_id,
        fleet.outlook.clock,
        buildings.site_id,
    )
    node_id = tree.root if ask.node_id is None else ask.node_id
    tree.index(node_id)
    _check_rated(fleet, tree, node_id, asked_kw)
    resolved = fleet.resolved["sites"]
    event = (utc_timestamp(ask.event_from), utc_timestamp(ask.event_to))
    eligible = limits.eligible_sites(resolved, past, utc_timestamp(ask.at), event, settings.timezone)
    clock = fleet.outlook.clock
    terms = limits.terms(
        resolved, eligible, clock, ask.at, (clock.index(ask.event_from), clock.index(ask.event_to))
    )
    first = "" if compiled.is_kept() else ", compiling the plant model, once"
    progress(f"quoting {fleet.roster.count} sites{first}")
    base = ground(fleet.roster, fleet.outlook, fleet.standing, *in_force.in_force(path, fleet, past, start))
    headroom = network.headroom_kw(tree, _building_kw(base))
    terms, quoted = recharge.quoted(base, terms, ask.direction, ask.recoveries, tree, headroom.kw)
    return Survey(folder, fleet, ask, node_id, tree, headroom, terms, eligible, past, quoted)


def _check_rated(fleet: Fleet, tree: network.Feeders, node_id: str, asked_kw: float | None) -> None:
    """FleetError where more is asked than the chillers under the node draw at rating: a wrong unit."""
    chillers = fleet.roster.chillers
    none = np.zeros_like(chillers.rated_cop)
    kw = np.divide(chillers.capacity_kw_th, chillers.rated_cop, out=none, where=chillers.exists)
    rated_kw = float(kw[tree.sites_below(node_id)].sum())
    if asked_kw is not None and asked_kw > rated_kw:
        raise FleetError(
            f"--kw {asked_kw:,.1f} is more than the rated electric total of all chillers under node "
            f"{node_id}, {rated_kw:,.1f} kW: check the unit (kW, not W) or the node"
        )


def _building_kw(base: Ground) -> Floats:
    building: Floats = base.usual.power_kw + base.outlook.rest_kw
    return building


def check_order(at: np.datetime64, event_from: np.datetime64, event_to: np.datetime64) -> None:
    """FleetError for an event that ends before it starts, or starts before it is called."""
    if event_to <= event_from:
        raise FleetError(
            "--to is not after --from: an event ends after it starts; exchange them or move the end"
        )
    if event_from < at:
        raise FleetError(
            "--from lies before --at: an event cannot start before it is called; move --from, "
            "or give --at the time of the call"
        )
