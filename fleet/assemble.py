"""From a checked fleet folder to what quotes are made of: roster, outlook and standing over one horizon.

Owns the way from tables to arrays, and what must cover the horizon. Defaults are resolve.py's, states
standing.py's, pivots series.py's; nothing is read from disk here.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd

from fleet.errors import Problem, Refused
from fleet.folder import FleetFolder
from fleet.resolve import Assumption, Resolved, assumptions, resolve
from fleet.series import Series, gaps, on_clock
from fleet.settings import FILE, Settings
from fleet.standing import standing
from fleet.wall_time import local_parts
from sites.clock import Clock, span
from sites.load import profile_kw_th
from sites.outlook import Outlook
from sites.roster import (
    CHILLER_KINDS,
    LAYOUTS,
    STRATEGIES,
    TANK_KINDS,
    Buildings,
    Chillers,
    Roster,
    Standing,
    Tanks,
)
from sites.units import AnyArray, Bools, Floats, Ints
from sites.weather import wet_bulb_c

SHORTFALL_FACTOR: Final = 10.0
"""Default price of a kWh not delivered: this many times the dearest energy price of the horizon."""
LEAST_DESIGN_C: Final = 33.0
"""Outdoor temperature that a default load profile takes for the design day, unless the weather table is hotter."""


@dataclass(frozen=True)
class Fleet:
    """A fleet over one horizon; arrays in the order of the sites table."""

    settings: Settings
    roster: Roster
    outlook: Outlook
    standing: Standing
    assumed: tuple[Assumption, ...]
    resolved: dict[str, pd.DataFrame]
    """sites, chillers, tanks with defaults filled in, columns in the order of the table of columns"""
    shortfall_price_per_kwh: float
    over_delivery_price_per_kwh: float
    notes: tuple[str, ...]
    """what was counted: values carried forward, empty values taken as 0"""


def assemble(folder: FleetFolder, horizon_start: np.datetime64, horizon_end: np.datetime64) -> Fleet:
    """The fleet over [horizon_start, horizon_end), UTC on the fleet's grid.

    Raises Refused where weather, tariffs or loads do not cover the horizon, with from when to when.
    """
    settings = folder.settings
    clock = span(horizon_start, horizon_end, settings.interval_minutes)
    resolved = resolve(folder.frames, settings)
    roster = roster_of(resolved)
    outlook, assumed, notes = _outlook(folder, resolved, roster, clock)
    stands, guessed = standing(
        folder.frames["status"], roster, clock.start, float(outlook.local_hour[0]), settings.timezone
    )
    dear = float(outlook.price_per_kwh.max())
    return Fleet(
        settings,
        roster,
        outlook,
        stands,
        (*resolved.assumed, *assumed, *guessed),
        resolved.frames,
        _shortfall_price(settings, dear),
        settings.over_delivery_price_per_kwh
        if settings.over_delivery_price_per_kwh is not None
        else max(dear, 0.0),
        tuple(notes),
    )


def _shortfall_price(settings: Settings, dearest: float) -> float:
    if settings.shortfall_price_per_kwh is not None:
        return settings.shortfall_price_per_kwh
    if dearest <= 0.0:
        came = f"nothing, and no energy price of the horizon above {dearest:g}"
        advice = "add shortfall_price_per_kwh"
        raise Refused([Problem(FILE, None, "shortfall_price_per_kwh", came, "a price above 0", advice)])
    return SHORTFALL_FACTOR * dearest


def roster_of(resolved: Resolved) -> Roster:
    """Frozen arrays over sites; machines in loading order, machines and tanks padded."""
    sites = resolved.sites
    place = pd.Index(sites["site_id"])
    return Roster(_buildings(sites), _chillers(resolved.chillers, place), _tanks(resolved.tanks, place))


def _buildings(sites: pd.DataFrame) -> Buildings:
    special: dict[str, AnyArray] = {
        "site_id": sites["site_id"].to_numpy(dtype=object),
        "node_id": sites["node_id"].to_numpy(dtype=object),
        "strategy": _index_of(sites["strategy"], STRATEGIES),
        "layout": _index_of(sites["layout"], LAYOUTS),
        "no_unmet": sites["no_unmet"].to_numpy(dtype=bool),
        "occupied_all_week": sites["occupied_all_week"].to_numpy(dtype=bool),
    }
    names = [name for name in Buildings.__dataclass_fields__ if name not in special]
    numbers = {name: sites[name].to_numpy(dtype=np.float64) for name in names}
    cap_c = numbers["supply_cap_c"]
    numbers["supply_cap_c"] = np.where(np.isnan(cap_c), np.inf, cap_c)
    return Buildings(**special, **numbers)


def _index_of(names: pd.Series, known: tuple[str, ...]) -> Ints:
    return pd.Index(known).get_indexer(pd.Index(names)).astype(np.int64)


def _chillers(chillers: pd.DataFrame, sites: pd.Index) -> Chillers:
    ordered = chillers.sort_values("loading_order", kind="stable")
    pad = _padder(ordered, sites)
    numbers = {
        name: pad(ordered[name].to_numpy(dtype=np.float64, na_value=np.nan), 0.0)
        for name in Chillers.__dataclass_fields__
        if name not in ("chiller_id", "exists", "kind", "makes_ice", "rated_cop", "starts_left")
    }
    starts = ordered["starts_left"].to_numpy(dtype=np.float64, na_value=np.inf)
    return Chillers(
        chiller_id=pad(ordered["chiller_id"].to_numpy(dtype=object), ""),
        exists=pad(np.ones(len(ordered), dtype=bool), False),
        kind=pad(_index_of(ordered["kind"], CHILLER_KINDS), 0),
        makes_ice=pad(ordered["makes_ice"].to_numpy(dtype=bool), False),
        rated_cop=pad(ordered["rated_cop"].to_numpy(dtype=np.float64), 1.0),
        starts_left=pad(starts, np.inf),
        **numbers,
    )


def _tanks(tanks: pd.DataFrame, sites: pd.Index) -> Tanks:
    pad = _padder(tanks, sites)

    def limit(name: str) -> Floats:
        """A column by (site, tank); no value is no limit."""
        values = tanks[name].to_numpy(dtype=np.float64)
        return pad(np.where(np.isnan(values), np.inf, values), 0.0)

    return Tanks(
        tank_id=pad(tanks["tank_id"].to_numpy(dtype=object), ""),
        exists=pad(np.ones(len(tanks), dtype=bool), False),
        kind=pad(_index_of(tanks["kind"], TANK_KINDS), 0),
        capacity_kwh_th=pad(tanks["capacity_kwh_th"].to_numpy(dtype=np.float64), 0.0),
        loss_fraction_per_h=pad(tanks["loss_fraction_per_h"].to_numpy(dtype=np.float64), 0.0),
        discharge_limit_kw_th=limit("discharge_limit_kw_th"),
        charge_limit_kw_th=limit("charge_limit_kw_th"),
    )


def _padder(units: pd.DataFrame, sites: pd.Index) -> Callable[[AnyArray, object], AnyArray]:
    """A function that spreads values of the units' rows to (site, unit), at least one unit wide."""
    row = sites.get_indexer(pd.Index(units["site_id"]))
    column = units.groupby("site_id", sort=False).cumcount().to_numpy()
    width = int(column.max()) + 1 if len(column) else 1

    def pad(values: AnyArray, fill: object) -> AnyArray:
        spread = np.full((len(sites), width), fill, dtype=values.dtype)
        spread[row, column] = values
        return spread

    return pad


@dataclass(frozen=True)
class _Tables:
    """Series of a horizon on the clock: weather by station, prices by tariff, loads by site."""

    weather: Series
    tariffs: Series
    loads: Series
    station: Ints
    """(site,) row of weather"""
    tariff: Ints
    """(site,) row of tariffs"""

    @property
    def named_by_sites(self) -> tuple[tuple[Series, Ints], tuple[Series, Ints]]:
        """The series that sites refer to, each with the row of every site."""
        return (self.weather, self.station), (self.tariffs, self.tariff)


def _outlook(
    folder: FleetFolder, resolved: Resolved, roster: Roster, clock: Clock
) -> tuple[Outlook, list[Assumption], list[str]]:
    settings, sites = folder.settings, resolved.sites
    found = _tables(folder, sites, clock)
    profiled = _check_cover(folder, found, clock)
    hour, weekday, day, holiday = local_parts(clock, settings.timezone, folder.frames["holidays"])
    dry_bulb_c = found.weather.values["dry_bulb_c"][found.station]
    load = found.loads.values["cooling_load_kw_th"]
    if profiled.any():
        hottest = folder.frames["weather"].groupby("station_id")["dry_bulb_c"].max()
        design_c = np.maximum(hottest.reindex(found.weather.key).to_numpy(), LEAST_DESIGN_C)[found.station]
        load[profiled] = profile_kw_th(
            roster.buildings.peak_cooling_kw_th[profiled],
            sites["building_type"].to_numpy(dtype=object)[profiled],
            hour,
            weekday,
            holiday,
            dry_bulb_c[profiled],
            design_c[profiled],
        )
    peak, unbilled = _billed_peak_kw(folder.frames["bills"], sites["site_id"], int(day[0]))
    outlook = Outlook(
        clock=clock,
        local_hour=hour,
        local_weekday=weekday,
        local_day=day,
        holiday=holiday,
        dry_bulb_c=dry_bulb_c,
        wet_bulb_c=_wet_bulb_c(found.weather)[found.station],
        cooling_load_kw_th=load,
        rest_kw=np.nan_to_num(found.loads.values["rest_kw"]),
        price_per_kwh=found.tariffs.values["price_per_kwh"][found.tariff],
        billed_peak_kw=peak,
    )
    return outlook, _assumed(sites, found, profiled, unbilled), _notes(found)


def _tables(folder: FleetFolder, sites: pd.DataFrame, clock: Clock) -> _Tables:
    """Pivots every series once; Refused where there is no weather or no tariff at all."""
    frames = folder.frames
    empty = [name for name in ("weather", "tariffs") if frames[name].empty]
    if empty:
        raise Refused(
            [
                Problem(folder.file(n), None, None, "no rows", "rows over the horizon", "add them")
                for n in empty
            ]
        )
    stations = frames["weather"]["station_id"].unique().astype(object)
    tariffs = frames["tariffs"]["tariff_id"].unique().astype(object)
    wanted = sites["site_id"].to_numpy(dtype=object)
    return _Tables(
        on_clock(frames["weather"], "station_id", ("dry_bulb_c", "wet_bulb_c", "rh_pct"), stations, clock),
        on_clock(frames["tariffs"], "tariff_id", ("price_per_kwh",), tariffs, clock),
        on_clock(frames["loads"], "site_id", ("cooling_load_kw_th", "rest_kw"), wanted, clock),
        pd.Index(stations).get_indexer(pd.Index(sites["station_id"])).astype(np.int64),
        pd.Index(tariffs).get_indexer(pd.Index(sites["tariff_id"])).astype(np.int64),
    )


def _check_cover(folder: FleetFolder, found: _Tables, clock: Clock) -> Bools:
    """Which sites get a default load profile, shape (site,); Refused where a series has a gap."""
    loads = folder.frames["loads"]
    measured = loads.loc[loads["cooling_load_kw_th"].notna(), "site_id"].unique()
    profiled = ~np.isin(found.loads.key.astype(str), np.asarray(measured, dtype=str))
    used = [np.isin(np.arange(len(series.key)), at) for series, at in found.named_by_sites]
    no_load = np.isnan(found.loads.values["cooling_load_kw_th"]) & ~profiled[:, None]
    no_row = ~found.loads.covered & (found.loads.has_rows & profiled)[:, None]
    zone = folder.settings.timezone
    lacking = (
        (found.weather, ~found.weather.covered & used[0][:, None], "weather", "dry_bulb_c"),
        (found.tariffs, ~found.tariffs.covered & used[1][:, None], "tariffs", "price_per_kwh"),
        (found.loads, no_load, "loads", "cooling_load_kw_th"),
        (found.loads, no_row, "loads", "rest_kw"),
    )
    problems = [
        problem
        for series, mask, name, column in lacking
        for problem in gaps(mask, series.key, clock, folder.file(name), column, zone)
    ]
    if problems:
        raise Refused(problems)
    return profiled


def _wet_bulb_c(weather: Series) -> Floats:
    """Wet bulb (station, interval): as given, else from dry bulb and relative humidity."""
    given, rh_pct = weather.values["wet_bulb_c"], weather.values["rh_pct"]
    missing = np.isnan(given) & weather.covered
    worked_out = given.copy()
    if missing.any():
        worked_out[missing] = wet_bulb_c(weather.values["dry_bulb_c"][missing], rh_pct[missing])
    return worked_out


def _billed_peak_kw(bills: pd.DataFrame, site_id: pd.Series, day: int) -> tuple[Floats, Bools]:
    """Highest demand of the billing cycle that holds the local day (site,), and where no bill says it: 0."""
    today = np.datetime64(day, "D").astype("datetime64[s]")
    current = bills[(bills["cycle_start"] <= today) & (bills["cycle_end"] >= today)]
    peak = current.groupby("site_id")["billed_peak_kw"].max().reindex(site_id).to_numpy(dtype=np.float64)
    return np.nan_to_num(peak), np.isnan(peak)


def _assumed(sites: pd.DataFrame, found: _Tables, profiled: Bools, unbilled: Bools) -> list[Assumption]:
    keys = sites["site_id"]
    no_rest = ~found.loads.has_rows
    charged = unbilled & (sites["demand_price_per_kw"].to_numpy() > 0.0)
    peak = sites["peak_cooling_kw_th"].to_numpy()
    profile = "profile of its building type, from peak and weather"
    return [
        *assumptions(
            "loads",
            keys[profiled],
            "cooling_load_kw_th",
            np.array([f"up to {value:.6g}" for value in peak[profiled]], dtype=object),
            profile,
        ),
        *assumptions("loads", keys[no_rest], "rest_kw", np.zeros(int(no_rest.sum())), "no row"),
        *assumptions(
            "bills",
            keys[charged],
            "billed_peak_kw",
            np.zeros(int(charged.sum())),
            "no bill of the current cycle",
        ),
    ]


def _notes(found: _Tables) -> list[str]:
    notes = []
    for name, series in (("weather", found.weather), ("tariffs", found.tariffs), ("loads", found.loads)):
        if series.carried:
            notes.append(f"{name}: {series.carried} intervals take the value of the coarser row they lie in")
    blank = int((np.isnan(found.loads.values["rest_kw"]) & found.loads.covered).sum())
    if blank:
        notes.append(f"loads: rest_kw is empty in {blank} intervals and taken as 0")
    return notes
