"""Levels of tanks worked out again from plant meters since each was last certainly full, beside what gauges say.

Owns which sites can be reckoned, what is told of a level that does not fit, and how much it widens what quotes start
from. The balance is sites/balance.py's. Nothing is put right in silence: a level given stays the best estimate.
"""

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
import pandas as pd

from fleet.assemble import Fleet
from fleet.folder import FleetFolder
from fleet.gauges import read_levels
from fleet.past_days import LEAST_DAYS, Past, filled, hourly, hourly_outlook, resting
from fleet.resolve import Assumption
from fleet.standing import READING_FRACTION
from fleet.wall_time import local_text
from sites.balance import LONGEST_H, Reckoned, reckon, unused
from sites.clock import Clock
from sites.conditions import Conditions, conditions
from sites.outlook import Outlook
from sites.roster import STRATEGIES, Roster, Standing
from sites.units import Bools, Floats, Ints

HOUR: Final = np.timedelta64(1, "h")
LEAK_H: Final = 12.0
"""A tank that loses more than stated may lose that for so long before a window ends: taken off its low estimate."""
MARGIN: Final = 1.25
"""A level is told to be apart beyond this many times what gauge and balance may be off by together (set on invented
fleets whose gauges are sound, seen through a different model: none of 41 levels lies further)."""
UNKNOWN: Final = "the level of these tanks cannot be worked out from their plant meter"


@dataclass(frozen=True)
class Levels:
    """Tanks of S sites by energy balance, hour by hour, beside the readings of their levels."""

    site: Ints
    """(S,) index of the site in the fleet"""
    roster: Roster
    clock: Clock
    reckoned: Reckoned
    unused: Bools
    """(S,)"""
    apart_kwh_th: Floats
    """(S,) newest readings less the balance at their times; NaN where either is missing"""
    half_width_kwh_th: Floats
    """(S,) how far apart the two may be, by the gauges' class and the balance's spread"""
    apart_since: Ints
    """(S,) hour of the first reading from which on all were apart the same way; -1 where the newest is not"""

    @property
    def apart(self) -> Bools:
        """(S,) the newest level reported does not fit the balance."""
        return np.asarray(self.apart_since >= 0)


def with_levels(folder: FleetFolder, fleet: Fleet, past: Past) -> Fleet:
    """The fleet with the levels of its tanks held against their plant meters: wider where they do not fit, worked out
    where none was ever read, and told."""
    found = levels(folder, fleet, past)
    unknown = _unknown(fleet, past, found)
    notes = [] if not unknown else [f"{UNKNOWN}: {_named(unknown)}"]
    if not len(found.site):
        return replace(fleet, notes=(*fleet.notes, *notes))
    notes = [*findings(found, folder.settings.timezone), *notes]
    standing, assumed = _standing(fleet, found, folder.settings.timezone)
    return replace(fleet, standing=standing, assumed=assumed, notes=(*fleet.notes, *notes))


def levels(folder: FleetFolder, fleet: Fleet, past: Past) -> Levels:
    """Energy balance of every site with tanks, a plant meter and a load table, over the hours before the horizon."""
    rows = _rows(fleet, past)
    site, outlook = past.site[rows], hourly_outlook(past.outlook.take(rows))
    roster, load = fleet.roster.take(site), outlook.cooling_load_kw_th
    whole = replace(outlook, cooling_load_kw_th=filled(load, np.isfinite(load)))
    here = _here(roster, whole, resting(fleet, site, float(outlook.local_hour[0])), load)
    power = hourly(np.where(past.weather_known[rows], past.kw[rows], np.nan), past.clock)
    reckoned = reckon(roster, here, power, load)
    apart, half_width, since = _beside_readings(folder, roster, outlook.clock, reckoned)
    idle = unused(roster, here, load, reckoned.net_kw_th)
    return Levels(site, roster, outlook.clock, reckoned, idle, apart, half_width, since)


def _rows(fleet: Fleet, past: Past) -> Ints:
    """Rows of the past that have tanks, and loads and readings of LEAST_DAYS."""
    tanked = fleet.roster.tanks.exists[past.site].any(axis=1)
    known = np.isfinite(past.kw) & np.isfinite(past.outlook.cooling_load_kw_th) & past.weather_known
    days = known.sum(axis=1) * past.clock.step_h / 24.0
    return np.flatnonzero(tanked & (days >= LEAST_DAYS))


def _unknown(fleet: Fleet, past: Past, found: Levels) -> dict[str, str]:
    """Why the levels of other plant-metered sites with tanks are not worked out."""
    names = fleet.roster.buildings.site_id
    tanked = past.site[fleet.roster.tanks.exists[past.site].any(axis=1)]
    lacking = {str(names[site]): f"fewer than {LEAST_DAYS} days of power and load" for site in tanked}
    for row, site in enumerate(found.site.tolist()):
        del lacking[str(names[site])]
        if found.reckoned.since[row, -1] < 0 and not found.unused[row]:
            lacking[str(names[site])] = f"not certainly full in the last {LONGEST_H:.0f} h"
    return lacking


def _named(reasons: dict[str, str]) -> str:
    each: dict[str, list[str]] = {}
    for name, why in reasons.items():
        each.setdefault(why, []).append(name)
    return "; ".join(
        f"{', '.join(names[:5])}{f' and {len(names) - 5} more' if len(names) > 5 else ''} ({why})"
        for why, names in each.items()
    )


def _here(roster: Roster, outlook: Outlook, ready: Standing, load: Floats) -> Conditions:
    """Conditions of the past's hours; load levelling runs at the mean of all that is known."""
    here = conditions(roster, outlook, ready)
    tanks = roster.tanks
    mean = np.where(np.isfinite(load), load, 0.0).sum(axis=1) / np.maximum(np.isfinite(load).sum(axis=1), 1)
    rate = mean + (tanks.capacity_kwh_th * tanks.loss_fraction_per_h * tanks.exists).sum(axis=1)
    level = roster.buildings.strategy == STRATEGIES.index("load_levelling")
    return replace(here, level_kw_th=np.where(level, rate, 0.0))


def _beside_readings(
    folder: FleetFolder, roster: Roster, clock: Clock, reckoned: Reckoned
) -> tuple[Floats, Floats, Ints]:
    """How far the newest readings lie above the balance, how far they may, and since which hour they do; each (S,)."""
    count, width = roster.tanks.exists.shape
    read = read_levels(folder.frames["status"], roster.buildings.site_id, roster.tanks.tank_id)
    hour = (read["time"].to_numpy() - clock.start.astype(np.int64)) / (3600.0 * 1e6)
    inside = (hour >= 1.0) & (hour <= clock.count)
    read, hour = read[inside], hour[inside]
    unit = read["unit"].to_numpy()
    site = unit // width
    before = np.minimum(np.floor(hour).astype(np.int64) - 1, clock.count - 1)
    after, part = np.minimum(before + 1, clock.count - 1), hour - np.floor(hour)
    capacity = roster.tanks.capacity_kwh_th.ravel()[unit]
    share = capacity / np.maximum(
        np.where(roster.tanks.exists, roster.tanks.capacity_kwh_th, 0.0).sum(axis=1)[site], 1e-9
    )
    level = reckoned.level_kwh_th[site, before] * (1.0 - part) + reckoned.level_kwh_th[site, after] * part
    off = read["kwh_th"].to_numpy() - share * level
    given = np.where(off > 0.0, read["kwh_th"] - read["low"], read["high"] - read["kwh_th"])
    gauge = np.where(np.isnan(given), READING_FRACTION * capacity, given)
    half = MARGIN * (gauge + share * reckoned.spread_kwh_th[site, before])
    rows = pd.DataFrame({"site": site, "unit": unit, "hour": hour, "off": off, "half": half})[
        np.isfinite(off)
    ]
    newest = rows.groupby("unit").tail(1).groupby("site")[["off", "half"]].sum().reindex(np.arange(count))
    apart, half_width = newest["off"].to_numpy(), newest["half"].to_numpy()
    return apart, half_width, _since(rows, apart, half_width)


def _since(rows: pd.DataFrame, apart: Floats, half_width: Floats) -> Ints:
    """(S,) hour of the first of the last readings that all lie apart on the newest's side; -1 where the newest fits."""
    sign = np.sign(apart)[rows["site"].to_numpy()]
    fits = rows[(rows["off"] * sign <= rows["half"]).to_numpy()]
    last_fit = fits.groupby("site")["hour"].max().reindex(np.arange(len(apart))).fillna(-1.0).to_numpy()
    later = rows[rows["hour"].to_numpy() > last_fit[rows["site"].to_numpy()]]
    first = later.groupby("site")["hour"].min().reindex(np.arange(len(apart))).fillna(-1.0).to_numpy()
    wide = np.nan_to_num(np.abs(apart)) > np.nan_to_num(half_width, nan=np.inf)
    # Tanks read at different times: the sum may be apart where no reading is by itself.
    return np.where(wide, np.maximum(np.floor(first), 0.0), -1.0).astype(np.int64)


def findings(found: Levels, timezone: str) -> list[str]:
    """One summary, then tanks out of use, tanks that lose more than stated, and levels that do not fit."""
    told = found.reckoned
    known = told.since[:, -1] >= 0
    notes = [
        f"levels of tanks by energy balance of their plant meter since each was last certainly full: {known.sum()} of "
        f"{len(known)} sites, {int(found.apart.sum())} apart from what is reported"
    ]
    leaks = told.leaks & (told.unexplained_kw_th * 24.0 > READING_FRACTION * _capacity(found))
    for row, name in enumerate(found.roster.buildings.site_id.tolist()):
        if found.unused[row]:
            notes.append(
                f"{name}: by its plant meter its tanks have given hardly anything in {_days(found, row):.0f} days in "
                "which the strategy would have used them: a tank out of service, or another way of running; nothing is "
                "promised from them (their level may be 0)"
            )
            continue
        if leaks[row]:
            notes.append(_leak_words(found, row, name))
        if found.apart[row]:
            notes.append(_apart_words(found, row, name, bool(leaks[row]), timezone))
    return notes


def _capacity(found: Levels) -> Floats:
    tanks = found.roster.tanks
    return np.asarray(np.where(tanks.exists, tanks.capacity_kwh_th, 0.0).sum(axis=1))


def _days(found: Levels, row: int) -> float:
    return float(np.isfinite(found.reckoned.net_kw_th[row]).sum() / 24.0)


def _leak_words(found: Levels, row: int, name: str) -> str:
    told, tanks = found.reckoned, found.roster.tanks
    stated = float((tanks.capacity_kwh_th[row] * tanks.loss_fraction_per_h[row] * tanks.exists[row]).sum())
    more, error = float(told.unexplained_kw_th[row]), float(told.unexplained_spread_kw_th[row])
    return (
        f"{name}: by its plant meter {more:.1f} kW_th (+/- {error:.1f}) more goes into its tanks than comes out, over "
        f"{told.cycles[row]} times from full to full, {more * 24.0:,.0f} kWh_th a day beside a stated loss of "
        f"{stated:.1f} kW_th: a leak, a valve that passes, or a loss above the stated one (loss_fraction_per_h)"
    )


def _apart_words(found: Levels, row: int, name: str, leaks: bool, timezone: str) -> str:
    told, apart = found.reckoned, float(found.apart_kwh_th[row])
    full = local_text(found.clock.start + (int(told.since[row, -1]) + 1) * HOUR, timezone)
    since = local_text(found.clock.start + int(found.apart_since[row]) * HOUR, timezone)
    why = "drift of the level sensor"
    if leaks and apart < 0.0:
        why = "the loss named above, or drift of the level sensor"
    elif apart < 0.0:
        why = "drift of the level sensor, a part of the tanks out of service, or a new leak"
    return (
        f"{name}: the level reported is {abs(apart):,.0f} kWh_th {'above' if apart > 0.0 else 'below'} what its plant "
        f"meter leaves since the tanks were certainly full ({full}; {found.half_width_kwh_th[row]:,.0f} could be "
        f"chance), apart since {since}: {why}; quotes hold for both levels"
    )


def _standing(fleet: Fleet, found: Levels, timezone: str) -> tuple[Standing, tuple[Assumption, ...]]:
    """Where tanks stand, wider where the balance says another level, and what was assumed of it."""
    told, tanks, site = found.reckoned, found.roster.tanks, found.site
    capacity = np.where(tanks.exists, tanks.capacity_kwh_th, 0.0)
    share = capacity / np.maximum(_capacity(found)[:, None], 1e-9)
    level, spread = (share * values[:, -1:] for values in (told.level_kwh_th, told.spread_kwh_th))
    keys = found.roster.buildings.site_id[:, None] + "/" + tanks.tank_id
    never = {one.key for one in fleet.assumed if (one.table, one.column) == ("status", "inventory_kwh_th")}
    guessed = np.isin(keys.astype(str), sorted(never)) & tanks.exists & np.isfinite(level)
    wide = tanks.exists & found.apart[:, None] & np.isfinite(level)
    less = np.where(told.leaks, told.unexplained_kw_th * LEAK_H, 0.0)[:, None] * share
    low, best, high = (
        values[site]
        for values in (fleet.standing.low_kwh_th, fleet.standing.best_kwh_th, fleet.standing.high_kwh_th)
    )
    new_best = np.where(guessed, level, best)
    new_low = np.where(guessed, level - spread, np.where(wide, np.minimum(low, level - spread), low)) - less
    new_high = np.where(guessed, level + spread, np.where(wide, np.maximum(high, level + spread), high))
    new_low = np.clip(np.where(found.unused[:, None], 0.0, new_low), 0.0, capacity)
    new_high = np.clip(new_high, 0.0, capacity)
    stands = [
        values.copy()
        for values in (fleet.standing.low_kwh_th, fleet.standing.best_kwh_th, fleet.standing.high_kwh_th)
    ]
    for kept, values in zip(stands, (new_low, new_best, new_high), strict=True):
        kept[site] = values
    assumed = _assumed(
        fleet, keys, (guessed, new_best), ((new_low, new_low < low - 0.5), (new_high, new_high > high + 0.5))
    )
    return replace(
        fleet.standing, low_kwh_th=stands[0], best_kwh_th=stands[1], high_kwh_th=stands[2]
    ), assumed


def _assumed(
    fleet: Fleet, keys: np.ndarray, guessed: tuple[Bools, Floats], edges: tuple[tuple[Floats, Bools], ...]
) -> tuple[Assumption, ...]:
    """Levels worked out in place of a usual day's, and estimates widened where readings and balance do not fit."""
    value = {
        str(key): f"{level:.6g}" for key, level in zip(keys[guessed[0]], guessed[1][guessed[0]], strict=True)
    }
    why = "no reading; worked out from its plant meter since the tanks were last certainly full"
    assumed = [
        replace(one, value=value[one.key], why=why)
        if (one.table, one.column) == ("status", "inventory_kwh_th") and one.key in value
        else one
        for one in fleet.assumed
    ]
    names, reason = (
        ("inventory_low_kwh_th", "inventory_high_kwh_th"),
        "widened by what its plant meter says of it",
    )
    for name, (level, changed) in zip(names, edges, strict=True):
        mask = changed & ~guessed[0]
        assumed += [
            Assumption("status", str(key), name, f"{one:.6g}", reason)
            for key, one in zip(keys[mask], level[mask], strict=True)
        ]
    return tuple(assumed)
