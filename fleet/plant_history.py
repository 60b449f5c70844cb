"""What plant meters of past days say of a fleet: loads where no table gives any, and each plant's efficiency.

Owns which days are read and what is made of them for one horizon. The regression and the comparison are those of
sites/load_fit.py and sites/past.py; a given load table always wins. Readings that cannot be used leave the fleet as it
is, with a note.
"""

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
import pandas as pd

from fleet.assemble import Fleet
from fleet.errors import FleetError, Refused
from fleet.folder import FleetFolder, local_parts, read_meters
from fleet.meters import EDITED, streams
from fleet.resolve import Assumption
from fleet.series import on_clock
from fleet.standing import usual_fraction
from sites.clock import Clock, span
from sites.conditions import conditions
from sites.ground import usual_course
from sites.load_fit import CV_LIMIT, LoadFit, fit_load
from sites.outlook import Outlook
from sites.past import YARDSTICK_CV, Match, compare, compressor_kw, implied_load_kw_th
from sites.roster import Standing
from sites.units import Bools, Floats, Ints, Strings
from sites.weather import wet_bulb_c

HISTORY_DAYS: Final = 14
DAY_ENDS_AT: Final = 4.0
"""Local hour at which the past's days end: no plant is on peak then, whose tank would be spent by the day's end."""
LEAST_DAYS: Final = 5
"""Fewer counted days than this say nothing."""
SETTLING_DAYS: Final = 1
"""Days in which a course forgets the tank's level it was started with; not compared."""
LEAST_COVER: Final = 0.98
"""Share of the past that the load table covers; gaps hold the site's mean and are not compared."""


@dataclass(frozen=True)
class Past:
    """Plant power of past days on a clock that ends in the night before the horizon, of the sites that have it."""

    site: Ints
    """(S,) index of the site"""
    clock: Clock
    kw: Floats
    """(S, T); NaN where not read, estimated, or the plant ran unusually that local day"""
    outlook: Outlook
    """(S, T) weather, and the load table's loads (NaN where it has none)"""
    weather_known: Bools
    """(S, T)"""


def with_history(folder: FleetFolder, fleet: Fleet, busy: pd.DataFrame) -> Fleet:
    """The fleet with loads and efficiencies that its plant meters' past says; `busy` are past windows of calls."""
    try:
        past = _past(folder, fleet, busy)
    except (Refused, FleetError) as error:
        note = f"plant meters' past is not used: {error}".split("\n")[0]
        return replace(fleet, notes=(*fleet.notes, note))
    if past is None:
        return fleet
    fleet = _with_fitted_loads(fleet, past)
    return _with_efficiency(fleet, past)


def _past(folder: FleetFolder, fleet: Fleet, busy: pd.DataFrame) -> Past | None:
    meters, site_id = folder.frames["meter_map"], fleet.roster.buildings.site_id
    plant = meters[(meters["role"] == "plant") & meters["site_id"].isin(site_id)]
    if plant.empty or "meters" not in folder.files:
        return None
    back = np.mod(fleet.outlook.local_hour[0] - DAY_ENDS_AT, 24.0)
    until = fleet.outlook.clock.start - np.timedelta64(round(back * 60), "m")
    frame = read_meters(folder, until - np.timedelta64(HISTORY_DAYS, "D"), until).frame
    frame = frame[frame["meter_id"].isin(plant["meter_id"])]
    if frame.empty:
        return None
    first = frame["interval_start"].min().tz_convert("UTC").tz_localize(None).to_datetime64()
    days = int((until - first) // np.timedelta64(1, "D"))
    if days <= SETTLING_DAYS:
        return None
    since = until - np.timedelta64(days, "D")
    names = sorted({str(name) for name in plant["site_id"]})
    zone, step = folder.settings.timezone, folder.settings.interval_minutes
    read = streams(frame, plant, names, zone, step, since, until, known_site_ids=site_id.tolist())
    read = read.pick(names, ["plant"] * len(names))
    site = pd.Index(site_id).get_indexer(pd.Index(names)).astype(np.int64)
    clock = span(since, until, step)
    outlook, known = _outlook(folder, fleet, site, clock)
    kw = np.where(read.quality <= EDITED, read.kw, np.nan)
    odd = _unusual(folder, names, outlook) | _called(busy, names, clock)
    return Past(site, clock, np.where(odd, np.nan, kw), outlook, known)


def _outlook(folder: FleetFolder, fleet: Fleet, site: Ints, clock: Clock) -> tuple[Outlook, Bools]:
    """Outlook (S, T) of the past, and where weather is known; gaps of weather hold the site's mean."""
    sites, frames = fleet.resolved["sites"].iloc[site], folder.frames
    stations = sites["station_id"].unique().astype(object)
    found = on_clock(frames["weather"], "station_id", ("dry_bulb_c", "wet_bulb_c", "rh_pct"), stations, clock)
    row = pd.Index(stations).get_indexer(pd.Index(sites["station_id"]))
    dry, wet, rh = (found.values[name][row] for name in ("dry_bulb_c", "wet_bulb_c", "rh_pct"))
    lacking = np.isnan(wet) & np.isfinite(dry) & np.isfinite(rh)
    wet[lacking] = wet_bulb_c(dry[lacking], rh[lacking])
    known = np.isfinite(dry) & np.isfinite(wet)
    loads = on_clock(
        frames["loads"], "site_id", ("cooling_load_kw_th",), sites["site_id"].to_numpy(dtype=object), clock
    )
    hour, weekday, day, holiday = local_parts(clock, folder.settings.timezone, frames["holidays"])
    none = np.zeros(dry.shape)
    outlook = Outlook(
        clock=clock,
        local_hour=hour,
        local_weekday=weekday,
        local_day=day,
        holiday=holiday,
        dry_bulb_c=_filled(dry, known),
        wet_bulb_c=_filled(wet, known),
        cooling_load_kw_th=loads.values["cooling_load_kw_th"],
        rest_kw=none,
        price_per_kwh=none,
        billed_peak_kw=np.zeros(len(site)),
    )
    return outlook, known


def _filled(values: Floats, known: Bools) -> Floats:
    mean = np.where(known, values, 0.0).sum(axis=1) / np.maximum(known.sum(axis=1), 1)
    return np.where(known, values, mean[:, None])


def _unusual(folder: FleetFolder, names: list[str], outlook: Outlook) -> Bools:
    """(S, T) local days on which the operator's log says that the plant did not run as usual."""
    rows = folder.frames["plant_days"]
    rows = rows[(rows["mode"] != "usual") & rows["site_id"].isin(names)]
    day = rows["day"].to_numpy().astype("datetime64[D]").astype(np.int64)
    mask = np.zeros((len(names), outlook.clock.count), dtype=np.bool_)
    for row, which in zip(pd.Index(names).get_indexer(pd.Index(rows["site_id"])), day, strict=True):
        mask[row] |= outlook.local_day == which
    return mask


def _called(busy: pd.DataFrame, names: list[str], clock: Clock) -> Bools:
    """(S, T) from the start of a past window to a day after its end: shed, then recovery."""
    mask = np.zeros((len(names), clock.count), dtype=np.bool_)
    rows = busy[busy["site_id"].isin(names)]
    edges = [
        rows[name].dt.tz_convert("UTC").dt.tz_localize(None).to_numpy().astype("datetime64[us]")
        for name in ("window_start", "window_end")
    ]
    where = pd.Index(names).get_indexer(pd.Index(rows["site_id"]))
    for row, start, end in zip(where, *edges, strict=True):
        mask[row] |= (clock.starts >= start) & (clock.starts < end + np.timedelta64(1, "D"))
    return mask


def _hourly(values: Floats, clock: Clock) -> Floats:
    """(S, hour) means; an hour with a value missing is missing."""
    each = 60 // clock.step_minutes
    whole = values.shape[1] // each * each
    hours: Floats = values[:, :whole].reshape(len(values), -1, each).mean(axis=2)
    return hours


def _with_fitted_loads(fleet: Fleet, past: Past) -> Fleet:
    """Loads of the sites with plant history and no load table: regression on what their power implies.

    Only plants without tanks: behind a tank, power does not tell when the cooling was used.
    """
    profiled = {
        one.key for one in fleet.assumed if (one.table, one.column) == ("loads", "cooling_load_kw_th")
    }
    site_id = fleet.roster.buildings.site_id
    bare = ~np.asarray(fleet.roster.tanks.exists.any(axis=1), dtype=np.bool_)
    rows = np.flatnonzero(np.isin(site_id[past.site].astype(str), sorted(profiled)) & bare[past.site])
    if not len(rows):
        return fleet
    site, outlook = past.site[rows], past.outlook.take(rows)
    roster = fleet.roster.take(site)
    ready = _resting(fleet, site, float(outlook.local_hour[0]))
    measured = implied_load_kw_th(
        roster,
        conditions(roster, replace(outlook, cooling_load_kw_th=np.zeros_like(outlook.dry_bulb_c)), ready),
        np.where(past.weather_known[rows], past.kw[rows], np.nan),
    )
    each = 60 // past.clock.step_minutes
    hourly = np.arange(past.clock.count // each) * each
    week_hour, occupied = _week(fleet, outlook, site)
    fitted = fit_load(
        _hourly(measured, past.clock),
        week_hour[hourly],
        occupied[:, hourly],
        _hourly(outlook.dry_bulb_c, past.clock),
    )
    good = fitted.is_good & (fitted.hours >= LEAST_DAYS * 24)
    week_hour, occupied = _week(fleet, fleet.outlook, site)
    dry = fleet.outlook.dry_bulb_c[site]
    load = fleet.outlook.cooling_load_kw_th.copy()
    load[site[good]] = fitted.at(week_hour, occupied, dry)[good]
    told = _load_assumptions(fleet, site_id[site], good, fitted, fitted.beyond_k(dry))
    return replace(fleet, outlook=replace(fleet.outlook, cooling_load_kw_th=load), assumed=told)


def _week(fleet: Fleet, outlook: Outlook, site: Ints) -> tuple[Ints, Bools]:
    """Hour of the week (T,), a holiday taken as a Sunday, and occupied hours (S, T)."""
    day = np.where(outlook.holiday, 6, outlook.local_weekday)
    week_hour = (day * 24 + np.floor(outlook.local_hour)).astype(np.int64)
    buildings = fleet.roster.buildings.take(site)
    hour = outlook.local_hour[None, :]
    start, end = buildings.occupied_from_hour[:, None], buildings.occupied_to_hour[:, None]
    hours = np.where(start <= end, (hour >= start) & (hour < end), (hour >= start) | (hour < end))
    occupied = hours & ((day < 5)[None, :] | buildings.occupied_all_week[:, None])
    return week_hour, np.asarray(occupied, dtype=np.bool_)


def _load_assumptions(
    fleet: Fleet, names: Strings, good: Bools, fitted: LoadFit, beyond_k: Floats
) -> tuple[Assumption, ...]:
    """What is assumed, with the fitted loads in place of the profiles."""
    told: dict[str, Assumption] = {}
    for row, name in enumerate(names.tolist()):
        words = f"CV(RMSE) {fitted.cv_rmse[row]:.0%} of {CV_LIMIT:.0%}, spread {fitted.spread_kw_th[row]:.0f} kW_th"
        if good[row]:
            far = f"; {beyond_k[row]:.1f} K beyond its past" if beyond_k[row] > 0.0 else ""
            why = f"fitted to {fitted.hours[row] / 24:.0f} days of its plant meter, {words}{far}"
            told[str(name)] = Assumption("loads", str(name), "cooling_load_kw_th", "fitted", why)
    return tuple(
        told.get(one.key, one) if (one.table, one.column) == ("loads", "cooling_load_kw_th") else one
        for one in fleet.assumed
    )


def _resting(fleet: Fleet, site: Ints, local_hour: float) -> Standing:
    """Tanks of the sites at the level of a usual day's hour, every unit in service."""
    roster = fleet.roster.take(site)
    level = roster.tanks.capacity_kwh_th * usual_fraction(roster, local_hour)[:, None]
    return Standing(level, level, level, roster.chillers.exists.copy(), roster.tanks.exists.copy())


def _with_efficiency(fleet: Fleet, past: Past) -> Fleet:
    """Machines' COP corrected where usual operation, run over the past with its load table, is off its meter."""
    match, rows = _match(fleet, past)
    if not len(rows):
        return fleet
    factor = np.ones(fleet.roster.count)
    factor[past.site[rows]] = match.efficiency
    chillers = fleet.resolved["chillers"].copy()
    by_site = pd.Series(factor, index=fleet.roster.buildings.site_id)
    chillers["rated_cop"] = chillers["rated_cop"] * by_site.reindex(chillers["site_id"]).to_numpy()
    machines = replace(fleet.roster.chillers, rated_cop=fleet.roster.chillers.rated_cop * factor[:, None])
    names = fleet.roster.buildings.site_id[past.site[rows]]
    return replace(
        fleet,
        roster=replace(fleet.roster, chillers=machines),
        resolved=fleet.resolved | {"chillers": chillers},
        assumed=(*fleet.assumed, *_efficiency_assumptions(names, match)),
        notes=(*fleet.notes, *_match_notes(names, match)),
    )


def _match(fleet: Fleet, past: Past) -> tuple[Match, Ints]:
    """Usual operation beside the meters, and which rows of the past it is of: those with loads and days enough."""
    per_day = 1440 // past.clock.step_minutes
    load = past.outlook.cooling_load_kw_th
    metered = np.where(np.isfinite(load) & past.weather_known, past.kw, np.nan)
    enough = np.isfinite(metered[:, SETTLING_DAYS * per_day :]).sum(axis=1) >= LEAST_DAYS * per_day
    rows = np.flatnonzero(enough & (np.isfinite(load).mean(axis=1) > LEAST_COVER))
    if not len(rows):
        none = np.zeros((0, 1))
        return compare(none, none, none, 1.0), rows
    usual_kw, compressors_kw = _usual_kw(fleet, past, rows, per_day)
    metered = metered[rows, SETTLING_DAYS * per_day :]
    return compare(usual_kw, compressors_kw, metered, past.clock.step_minutes / 60.0), rows


def _usual_kw(fleet: Fleet, past: Past, rows: Ints, per_day: int) -> tuple[Floats, Floats]:
    """Usual plant power and its compressors' part (row, T but for the first SETTLING_DAYS) of the sites in `rows`.

    Every day is run beside the others, each from SETTLING_DAYS before: load, weather and hour are each
    day's own.
    """
    days = past.clock.count // per_day
    length, settling = (SETTLING_DAYS + 1) * per_day, SETTLING_DAYS * per_day
    blocks = days - SETTLING_DAYS
    taken = (np.arange(blocks)[:, None] * per_day + np.arange(length)[None, :]).ravel()
    outlook = past.outlook.take(rows)
    load = _filled(outlook.cooling_load_kw_th, np.isfinite(outlook.cooling_load_kw_th))

    def by_day(values: Floats) -> Floats:
        return values[:, taken].reshape(-1, length)

    beside = replace(
        outlook,
        clock=replace(past.clock, count=length),
        local_hour=outlook.local_hour[:length],
        local_weekday=outlook.local_weekday[:length],
        local_day=outlook.local_day[:length],
        holiday=outlook.holiday[:length],
        dry_bulb_c=by_day(outlook.dry_bulb_c),
        wet_bulb_c=by_day(outlook.wet_bulb_c),
        cooling_load_kw_th=by_day(load),
        rest_kw=by_day(outlook.rest_kw),
        price_per_kwh=by_day(outlook.price_per_kwh),
        billed_peak_kw=np.zeros(len(rows) * blocks),
    )
    site = np.repeat(past.site[rows], blocks)
    roster = fleet.roster.take(site)
    course = usual_course(roster, beside, _resting(fleet, site, float(outlook.local_hour[0])), settling)
    kept = (course.power_kw, compressor_kw(roster, course))
    power, compressors = (values[:, settling:].reshape(len(rows), -1) for values in kept)
    return power, compressors


def _efficiency_assumptions(names: Strings, match: Match) -> list[Assumption]:
    why = "fitted: factor on the rated COP of its machines that makes usual operation draw what its plant meter read"
    return [
        Assumption("chillers", str(name), "rated_cop", f"x {factor:.3f}", why)
        for name, factor in zip(names.tolist(), match.efficiency.tolist(), strict=True)
        if factor != 1.0
    ]


def _match_notes(names: Strings, match: Match) -> list[str]:
    """How far usual operation is from the plant meters, in one sentence, and whom the correction leaves far off."""
    before, after, days = match.cv_rmse, match.corrected_cv_rmse, match.hours.max() / 24.0
    notes = [
        f"usual operation beside the plant meters of {len(names)} sites over {days:.0f} days: CV(RMSE) "
        f"{np.nanmedian(before):.0%} (median), {np.nanmedian(after):.0%} with each plant's efficiency fitted"
    ]
    far = np.flatnonzero(np.nan_to_num(after) > 2.0 * YARDSTICK_CV)
    if len(far):
        told = ", ".join(
            f"{names[row]} bias {match.bias[row]:+.0%}, CV(RMSE) {after[row]:.0%}" for row in far[:5]
        )
        more = f" and {len(far) - 5} more" if len(far) > 5 else ""
        notes.append(
            f"usual operation does not follow the plant meter: {told}{more}; check strategy, hours, tank"
        )
    return notes
