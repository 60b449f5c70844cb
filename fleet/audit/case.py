"""What the frozen rows make of weather, clock and machines: worked out once, read by every rule of a call.

Owns the hours (occupied, charging), energy prices, billed peaks and what every machine could give and draw in each
interval, all from the frozen rows and the model functions of `sites`. Owns no rule.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from fleet.audit.evidence import (
    Evidence,
    available,
    carried,
    chillers_of,
    level_kwh_th,
    local,
    on_clock,
    tanks_of,
)
from fleet.feeders import Feeders, feeders
from sites import chiller
from sites.outlook import in_hours
from sites.roster import ICE_KINDS, TANK_KINDS, Chillers, Tanks, kind_is
from sites.units import Bools, Floats, Ints, Strings
from sites.weather import wet_bulb_c


@dataclass(frozen=True)
class Case:
    """The evidence and what follows from its frozen rows. A machines and K tanks of all N sites, T intervals."""

    evidence: Evidence
    tree: Feeders
    """The network of the frozen rows"""
    price_per_kwh: Floats
    """(N, T)"""
    billed_peak_kw: Floats
    """(N,)"""
    occupied: Bools
    """(N, T)"""
    charge_hours: Bools
    machine_site: Ints
    """(A,)"""
    machine_up: Bools
    """(A,) in service when the call was made"""
    chillers: Chillers
    """(A, 1)"""
    direct_kw_th: Floats
    """(A, T) what each machine could give in direct cooling, 0 where it was out of service"""
    direct_full_kw: Floats
    ice_kw_th: Floats
    ice_full_kw: Floats
    tank_site: Ints
    """(K,)"""
    tanks: Tanks
    """(K, 1)"""
    ice_site: Bools
    """(N,) charging needs machines in ice making"""
    own_machines: Ints
    """(U,) rows among all machines of the called sites' machines, in the order of machines.parquet"""
    own_tanks: Ints
    machine_row: Ints
    """(U,) row among the called sites of each of their machines"""
    tank_row: Ints
    best_kwh_th: Floats
    """(U,) of the called sites' tanks, at the horizon's start"""
    off: Bools
    """(U,) machines that windows.chiller_ids names"""
    demand_limit: Floats
    """(U,) the quote's limit on what stays on"""

    @property
    def absorb(self) -> bool:
        """The event's direction is absorb: tanks are made to charge and no machine is stopped."""
        return self.evidence.sign > 0.0

    @property
    def can_charge(self) -> Bools:
        """(A,) machines in service that could charge their site's tanks: where one holds ice, ice makers only."""
        makes_ice = self.chillers.makes_ice[:, 0]
        able: Bools = self.machine_up & (makes_ice | ~self.ice_site[self.machine_site])
        return able

    @property
    def ready_kw_th(self) -> Floats:
        """(U, T) direct cooling that each machine of a called site may give under its load limit."""
        limit = self.evidence.grid("machines", "load_limit_fraction")
        ready: Floats = self.direct_kw_th[self.own_machines] * limit
        return ready


def case(evidence: Evidence) -> Case:
    """Work out everything that rules read from the frozen rows; FleetError where a row is missing."""
    facts, clock = evidence.machine_facts, evidence.clock
    frozen = evidence.record.frozen
    hours = local(clock.starts, str(evidence.settings["timezone"]))
    hour = (hours.hour + hours.minute / 60.0).to_numpy(dtype=np.float64)
    machine_site = facts["site"].to_numpy(dtype=np.int64)
    chillers, tanks = chillers_of(facts), tanks_of(evidence.tank_facts)
    tank_site = evidence.tank_facts["site"].to_numpy(dtype=np.int64)
    stations = evidence.text("station_id")
    dry, wet = _weather(evidence, stations)
    condenser = chiller.condenser_c(chillers, dry[machine_site], wet[machine_site])
    direct = chiller.direct(chillers, evidence.fact("supply_c", machine_site), condenser)
    ice = chiller.ice(chillers, evidence.fact("charge_brine_c", machine_site), condenser)
    up = available(facts, "chiller_id", evidence.standing)[:, None]
    ice_tank = kind_is(tanks.kind, TANK_KINDS, ICE_KINDS)[:, 0]
    machine_row, tank_row = evidence.of_called(evidence.machines), evidence.of_called(evidence.tanks)
    own_tanks = _rows_of(tank_site, evidence.called)
    off, demand_limit = _orders(evidence, machine_row)
    return Case(
        evidence=evidence,
        tree=_tree(evidence),
        price_per_kwh=on_clock(
            frozen["tariffs"], "tariff_id", evidence.text("tariff_id"), "price_per_kwh", clock
        ),
        billed_peak_kw=_billed_peak(evidence, hours),
        occupied=_occupied(evidence, hours, hour),
        charge_hours=in_hours(hour, evidence.fact("charge_from_hour"), evidence.fact("charge_to_hour")),
        machine_site=machine_site,
        machine_up=up[:, 0],
        chillers=chillers,
        direct_kw_th=direct.available_kw_th[:, 0, :] * up,
        direct_full_kw=direct.full_load_kw[:, 0, :] * up,
        ice_kw_th=ice.available_kw_th[:, 0, :] * up,
        ice_full_kw=ice.full_load_kw[:, 0, :] * up,
        tank_site=tank_site,
        tanks=tanks,
        ice_site=np.bincount(tank_site, ice_tank, len(evidence.sites)) > 0,
        own_machines=_rows_of(machine_site, evidence.called),
        own_tanks=own_tanks,
        machine_row=machine_row,
        tank_row=tank_row,
        best_kwh_th=level_kwh_th(evidence.tank_facts.iloc[own_tanks], evidence.standing, "best"),
        off=off,
        demand_limit=demand_limit,
    )


def requested_nodes(case: Case) -> Strings:
    """Nodes of the network that the request names for most of its intervals, in the order of its rows.

    A row that names another one is a fault of the rule on the request, and misleads no other rule.
    """
    book = case.evidence
    named = book.record.frames["request"]["node_id"]
    often = named.map(named.value_counts()) * 2 > book.event_to - book.event_from
    kept = named[often & named.isin(case.tree.node_id)].drop_duplicates()
    names: Strings = kept.to_numpy(dtype=object)
    return names if names.size else np.array([case.tree.root], dtype=object)


def over_sites(site: Ints, values: Floats, count: int) -> Floats:
    """Sum of (U, T) over the units of each of `count` sites, (N, T)."""
    total = np.zeros((count, values.shape[1]))
    np.add.at(total, site, values)
    return total


def _weather(evidence: Evidence, stations: Strings) -> tuple[Floats, Floats]:
    """Dry and wet bulb (N, T); the wet bulb from relative humidity where that is what was given."""
    frame, clock = evidence.record.frozen["weather"], evidence.clock
    dry = on_clock(frame, "station_id", stations, "dry_bulb_c", clock)
    wet, rh_pct = (carried(frame, "station_id", stations, name, clock) for name in ("wet_bulb_c", "rh_pct"))
    missing = np.isnan(wet)
    if missing.any():
        wet[missing] = wet_bulb_c(dry[missing], rh_pct[missing])
    return dry, wet


def _tree(evidence: Evidence) -> Feeders:
    """The network; a fleet without a table of nodes is one node."""
    nodes, loads = (evidence.record.frozen.get(name) for name in ("nodes", "node_loads"))
    return feeders(nodes, loads, evidence.text("node_id"), evidence.clock, evidence.site_id)


def _rows_of(unit_site: Ints, called: Ints) -> Ints:
    """Rows of the units of the called sites, called site by called site, each in its own order."""
    rank = np.full(int(max(unit_site.max(initial=-1), called.max(initial=-1))) + 1, -1, dtype=np.int64)
    rank[called] = np.arange(called.size)
    rows = np.flatnonzero(rank[unit_site] >= 0)
    return rows[np.argsort(rank[unit_site[rows]], kind="stable")]


def _orders(evidence: Evidence, row: Ints) -> tuple[Bools, Floats]:
    """Which machines (U,) are to be off, and the demand limit on the others, from windows and the quote it names."""
    windows, quotes = evidence.record.frames["windows"], evidence.record.frames["quotes"]
    named = windows[["chiller_ids"]].assign(row=np.arange(len(windows))).explode("chiller_ids")
    wanted = pd.MultiIndex.from_frame(named[["row", "chiller_ids"]])
    off = pd.MultiIndex.from_arrays([row, evidence.machines.unit_id]).isin(wanted)
    by_id = quotes.drop_duplicates("quote_id").set_index("quote_id")["load_limit_fraction"]
    limit = windows["quote_id"].map(by_id).to_numpy(dtype=np.float64, na_value=np.nan)
    return np.asarray(off, dtype=np.bool_), limit[row]


def _occupied(evidence: Evidence, hours: pd.DatetimeIndex, hour: Floats) -> Bools:
    """Occupied hours (N, T): working days, and weekends and holidays too where a site says so."""
    inside = in_hours(hour, evidence.fact("occupied_from_hour"), evidence.fact("occupied_to_hour"))
    day = hours.tz_localize(None).normalize().to_numpy().astype("datetime64[D]")
    holidays = evidence.record.frozen.get("holidays")
    none = np.zeros(0, dtype="datetime64[D]")
    dates = none if holidays is None else holidays["date"].to_numpy().astype("datetime64[D]")
    workday = (hours.day_of_week.to_numpy() < 5) & ~np.isin(day, dates)
    all_week = evidence.sites["occupied_all_week"].astype("boolean").fillna(False).to_numpy(dtype=np.bool_)
    mask: Bools = inside & (workday[None, :] | all_week[:, None])
    return mask


def _billed_peak(evidence: Evidence, hours: pd.DatetimeIndex) -> Floats:
    """Highest demand so far (N,) in the billing cycle that holds the horizon's start; 0 where there is none."""
    bills = evidence.record.frozen.get("bills")
    if bills is None or bills.empty:
        return np.zeros(len(evidence.sites))
    today = hours[0].tz_localize(None).to_datetime64().astype("datetime64[D]")
    start, end = (bills[name].to_numpy().astype("datetime64[D]") for name in ("cycle_start", "cycle_end"))
    running = bills[(start <= today) & (today <= end)]
    peak = running.groupby("site_id")["billed_peak_kw"].max()
    found: Floats = evidence.sites["site_id"].map(peak).fillna(0.0).to_numpy(dtype=np.float64)
    return found
