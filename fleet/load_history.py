"""Cooling loads of sites with no load table, fitted to what their plant meters' past says.

Owns which past hours a load is known of, and what is told of the fit. The regression is sites/load_fit.py's; a given
load table always wins.
"""

from dataclasses import replace
from typing import Final

import numpy as np

from fleet.assemble import Fleet
from fleet.folder import FleetFolder
from fleet.gauges import levels_at, read_levels
from fleet.past_days import LEAST_DAYS, Past, hourly, hourly_outlook, resting
from fleet.resolve import Assumption
from sites.balance import load_kw_th
from sites.clock import Clock
from sites.conditions import Conditions, conditions
from sites.load_fit import CV_LIMIT, NMBE_LIMIT, LoadFit, fit_load
from sites.outlook import Outlook
from sites.past import implied_load_kw_th
from sites.roster import Roster
from sites.tank import standing_loss_kw_th
from sites.units import Bools, Floats, Ints, Strings

RESTING_FRACTION: Final = 0.01
"""A tank whose level moves by less than this share of its capacity in an hour is taken to rest: what a gauge tells."""


def with_fitted_loads(folder: FleetFolder, fleet: Fleet, past: Past) -> Fleet:
    """Loads of the sites with plant history and no load table: regression on what chillers, and tanks, must have given.

    load = chillers less what went into the tanks, plus what came out, which their levels in the status table tell; of a
    plant whose tanks are not read that often, power does not tell when the cooling was used.
    """
    profiled = {
        one.key for one in fleet.assumed if (one.table, one.column) == ("loads", "cooling_load_kw_th")
    }
    site_id = fleet.roster.buildings.site_id
    rows = np.flatnonzero(np.isin(site_id[past.site].astype(str), sorted(profiled)))
    if not len(rows):
        return fleet
    site, outlook = past.site[rows], past.outlook.take(rows)
    measured = _measured_kw_th(folder, fleet, past, rows)
    each = 60 // past.clock.step_minutes
    first = np.arange(past.clock.count // each) * each
    week_hour, occupied = _week(fleet, outlook, site)
    fitted = fit_load(measured, week_hour[first], occupied[:, first], hourly(outlook.dry_bulb_c, past.clock))
    enough = fitted.hours >= LEAST_DAYS * 24
    good = fitted.is_good & enough
    week_hour, occupied = _week(fleet, fleet.outlook, site)
    dry = fleet.outlook.dry_bulb_c[site]
    load = fleet.outlook.cooling_load_kw_th.copy()
    load[site[good]] = fitted.at(week_hour, occupied, dry)[good]
    tanked: Bools = np.asarray(fleet.roster.tanks.exists[site].any(axis=1), dtype=np.bool_)
    why = _reasons(fitted, good, enough, tanked, fitted.beyond_k(dry))
    told = _load_assumptions(fleet, site_id[site], good, why)
    return replace(fleet, outlook=replace(fleet.outlook, cooling_load_kw_th=load), assumed=told)


def _measured_kw_th(folder: FleetFolder, fleet: Fleet, past: Past, rows: Ints) -> Floats:
    """Cooling load (row, hour) that plant power, and levels where there are tanks, say; NaN where they do not."""
    site, outlook = past.site[rows], past.outlook.take(rows)
    outlook = replace(outlook, cooling_load_kw_th=np.zeros_like(outlook.dry_bulb_c))
    roster, ready = fleet.roster.take(site), resting(fleet, site, float(outlook.local_hour[0]))
    power = np.where(past.weather_known[rows], past.kw[rows], np.nan)
    measured = hourly(implied_load_kw_th(roster, conditions(roster, outlook, ready), power), past.clock)
    tanked = np.flatnonzero(roster.tanks.exists.any(axis=1))
    if not len(tanked):
        return measured
    part, hours = roster.take(tanked), hourly_outlook(outlook.take(tanked))
    here = conditions(part, hours, ready.take(tanked))
    net = _net_by_levels_kw_th(folder, part, here, hours.clock)
    measured[tanked] = load_kw_th(part, here, hourly(power[tanked], past.clock), net)
    return measured


def _net_by_levels_kw_th(folder: FleetFolder, roster: Roster, here: Conditions, clock: Clock) -> Floats:
    """What went into the tanks less what came out (site, hour), from their levels: its change and the stated loss."""
    tanks, shape = roster.tanks, roster.tanks.tank_id.shape
    read = read_levels(folder.frames["status"], roster.buildings.site_id, tanks.tank_id)
    edges = np.append(clock.starts, clock.end)
    level = levels_at(read, shape[0] * shape[1], edges).reshape(*shape, -1)
    start, end = level[..., :-1], level[..., 1:]
    loss = standing_loss_kw_th(
        tanks.kind[..., None], np.nan_to_num(start), tanks.capacity_kwh_th[..., None],
        tanks.loss_fraction_per_h[..., None], here.step_h,
    )  # fmt: skip
    net = np.where(tanks.exists[..., None], (end - start) / here.step_h + loss, 0.0)
    rested = np.abs(net) <= RESTING_FRACTION * tanks.capacity_kwh_th[..., None]
    return np.asarray(np.where(rested, 0.0, net).sum(axis=1))


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


def _reasons(fitted: LoadFit, good: Bools, enough: Bools, tanked: Bools, beyond_k: Floats) -> list[str]:
    """What is told of each fitted load, or why there is none."""
    told = []
    for row, hours in enumerate(fitted.hours.tolist()):
        words = f"CV(RMSE) {fitted.cv_rmse[row]:.0%} of {CV_LIMIT:.0%}, spread {fitted.spread_kw_th[row]:.0f} kW_th"
        if good[row]:
            far = f"; {beyond_k[row]:.1f} K beyond its past" if beyond_k[row] > 0.0 else ""
            told.append(f"fitted to {hours / 24:.0f} days of its plant meter, {words}{far}")
        elif enough[row]:
            told.append(
                f"its plant meter fits too badly: {words}, NMBE {fitted.nmbe[row]:+.0%} of {NMBE_LIMIT:.0%}"
            )
        else:
            lacks = ", where its tanks' levels are read every two hours or closer" if tanked[row] else ""
            told.append(f"its plant meter tells it of {hours} of {LEAST_DAYS * 24} hours needed{lacks}")
    return told


def _load_assumptions(fleet: Fleet, names: Strings, good: Bools, why: list[str]) -> tuple[Assumption, ...]:
    """What is assumed, with the fitted loads in place of the profiles, or why they stay."""
    row_of = {str(name): row for row, name in enumerate(names.tolist())}

    def told(one: Assumption) -> Assumption:
        row = row_of.get(one.key)
        if row is None or (one.table, one.column) != ("loads", "cooling_load_kw_th"):
            return one
        if good[row]:
            return replace(one, value="fitted", why=why[row])
        return replace(one, why=f"{one.why}; {why[row]}")

    return tuple(told(one) for one in fleet.assumed)
