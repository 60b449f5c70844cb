"""Plant meters of past days beside weather and loads of the same time.

Owns which days are read, and which of them count; what is made of them is plant_history.py's, load_history.py's and
level_history.py's.
"""

from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.assemble import Fleet
from fleet.folder import FleetFolder, local_parts, read_meters
from fleet.meters import EDITED, streams
from fleet.series import on_clock
from fleet.standing import usual_fraction
from sites.clock import Clock, span
from sites.outlook import Outlook
from sites.roster import Standing
from sites.units import Bools, Floats, Ints
from sites.weather import wet_bulb_c

HISTORY_DAYS: Final = 14
DAY_ENDS_AT: Final = 4.0
"""Local hour at which the past's days end: no plant is on peak then, whose tank would be spent by the day's end."""
LEAST_DAYS: Final = 5
"""Fewer counted days than this say nothing."""
SETTLING_DAYS: Final = 1
"""Days in which a course forgets the tank's level it was started with; not compared."""

_OVER_TIME: Final = ("local_hour", "local_weekday", "local_day", "holiday")
_BY_SITE: Final = ("dry_bulb_c", "wet_bulb_c", "cooling_load_kw_th", "rest_kw", "price_per_kwh")
"""Fields of an Outlook by their axes."""


@dataclass(frozen=True)
class Past:
    """Plant power of past days up to the horizon, of the sites that have it."""

    site: Ints
    """(S,) index of the site"""
    clock: Clock
    kw: Floats
    """(S, T); NaN where not read, estimated, or the plant ran unusually that local day"""
    outlook: Outlook
    """(S, T) weather, and the load table's loads (NaN where it has none)"""
    weather_known: Bools
    """(S, T)"""
    whole: int
    """intervals up to the night before the horizon: whole days"""

    @property
    def whole_days(self) -> "Past":
        """Without what came after the last night."""
        outlook, kept = self.outlook, slice(0, self.whole)
        clock = replace(self.clock, count=self.whole)
        cut = {name: getattr(outlook, name)[kept] for name in _OVER_TIME}
        cut |= {name: getattr(outlook, name)[:, kept] for name in _BY_SITE}
        return Past(
            self.site,
            clock,
            self.kw[:, kept],
            replace(outlook, clock=clock, **cut),
            self.weather_known[:, kept],
            self.whole,
        )


def read_past(folder: FleetFolder, fleet: Fleet, busy: pd.DataFrame) -> Past | None:
    """Plant power of the fleet's sites up to the horizon; None where no plant meter has read two days."""
    meters, site_id = folder.frames["meter_map"], fleet.roster.buildings.site_id
    plant = meters[(meters["role"] == "plant") & meters["site_id"].isin(site_id)]
    if plant.empty or "meters" not in folder.files:
        return None
    start = fleet.outlook.clock.start
    back = np.mod(fleet.outlook.local_hour[0] - DAY_ENDS_AT, 24.0)
    until = start - np.timedelta64(round(back * 60), "m")
    frame = read_meters(folder, until - np.timedelta64(HISTORY_DAYS, "D"), start).frame
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
    read = streams(frame, plant, names, zone, step, since, start, known_site_ids=site_id.tolist())
    read = read.pick(names, ["plant"] * len(names))
    site = pd.Index(site_id).get_indexer(pd.Index(names)).astype(np.int64)
    clock = span(since, start, step)
    outlook, known = _outlook(folder, fleet, site, clock)
    kw = np.where(read.quality <= EDITED, read.kw, np.nan)
    odd = _unusual(folder, names, outlook) | _called(busy, names, clock)
    whole = days * 1440 // step
    return Past(site, clock, np.where(odd, np.nan, kw), outlook, known, whole)


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
        dry_bulb_c=filled(dry, known),
        wet_bulb_c=filled(wet, known),
        cooling_load_kw_th=loads.values["cooling_load_kw_th"],
        rest_kw=none,
        price_per_kwh=none,
        billed_peak_kw=np.zeros(len(site)),
    )
    return outlook, known


def filled(values: Floats, known: Bools) -> Floats:
    """Values (S, T) with the mean of those known in place of the others."""
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


def hourly(values: Floats, clock: Clock) -> Floats:
    """(S, hour) means; an hour with a value missing is missing."""
    each = 60 // clock.step_minutes
    whole = values.shape[1] // each * each
    hours: Floats = values[:, :whole].reshape(len(values), whole // each, each).mean(axis=2)
    return hours


def resting(fleet: Fleet, site: Ints, local_hour: float) -> Standing:
    """Tanks of the sites at the level of a usual day's hour, every unit in service."""
    roster = fleet.roster.take(site)
    level = roster.tanks.capacity_kwh_th * usual_fraction(roster, local_hour)[:, None]
    return Standing(level, level, level, roster.chillers.exists.copy(), roster.tanks.exists.copy())


def hourly_outlook(outlook: Outlook) -> Outlook:
    """The same in whole hours; an hour with a value missing is missing."""
    clock = outlook.clock
    each = 60 // clock.step_minutes
    hours = replace(clock, step_minutes=60, count=clock.count // each)
    first = np.arange(hours.count) * each
    values: dict[str, Any] = {name: getattr(outlook, name)[first] for name in _OVER_TIME}
    values |= {name: hourly(getattr(outlook, name), clock) for name in _BY_SITE}
    return replace(outlook, clock=hours, **values)
