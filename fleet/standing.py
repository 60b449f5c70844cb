"""Where every tank and machine stands at the horizon's start: from the newest status row, or assumed.

Owns how a reading ages and what is taken where there is none. Nothing here moves an inventory forward in time:
an old reading only widens.
"""

from typing import Final

import numpy as np
import pandas as pd

from fleet.resolve import Assumption, assumptions
from fleet.wall_time import age_h, local_text, utc_timestamp
from sites.roster import STRATEGIES, Roster, Standing
from sites.units import Bools, Floats, Ints, Strings

READING_FRACTION: Final = 0.05
"""Half width of a tank reading as a share of capacity (class of a level gauge; common practice, no source)."""
WIDENING_PER_H: Final = 0.01
"""Share of capacity by which it widens for each hour of age (an assumption)."""
ASSUMED_LOW: Final = 0.8
ASSUMED_HIGH: Final = 1.2
"""Bounds of an assumed inventory as shares of it; the upper one is cut at the capacity."""
_BY_PEAK: Final = ("full_storage", "storage_priority")


def standing(
    status: pd.DataFrame, roster: Roster, start: np.datetime64, local_hour: float, timezone: str
) -> tuple[Standing, list[Assumption]]:
    """State at `start` (UTC; its local hour given) from rows of the status table at or before it.

    inventory_kwh_th and available are each taken from their newest row; low and high default to best -/+ 5 % of
    capacity plus 1 % for each hour of age, within [0, capacity]. A tank never read gets the assumed course of a
    usual day; a unit without a row is taken as available. Every such value is listed.
    """
    rows = status[status["time"] <= utc_timestamp(start)].sort_values("time", kind="stable")
    tanks = roster.tanks
    tank_available, _ = _available(rows, roster.buildings.site_id, tanks.tank_id, tanks.exists)
    chillers = roster.chillers
    available, _ = _available(rows, roster.buildings.site_id, chillers.chiller_id, chillers.exists)
    low, best, high, assumed = _inventory(rows, roster, start, local_hour, timezone)
    return Standing(low, best, high, available, tank_available), assumed


def _available(rows: pd.DataFrame, site_id: Strings, unit_id: Strings, exists: Bools) -> tuple[Bools, Bools]:
    """Newest word on each unit, shape (site, unit): available, and whether there was any word; no word = yes."""
    found = _newest(rows, site_id, unit_id)
    word = rows["available"].astype("boolean").fillna(True).to_numpy(dtype=bool)
    told = np.append(word, True)[found]
    return exists & told, found >= 0


def _newest(rows: pd.DataFrame, site_id: Strings, unit_id: Strings) -> Ints:
    """Position of each unit's last row, shape (site, unit); -1 where there is none."""
    keys = pd.MultiIndex.from_arrays([rows["site_id"], rows["unit_id"]])
    last = pd.Series(np.arange(len(rows)), index=keys)
    last = last[~last.index.duplicated(keep="last")]
    units = pd.MultiIndex.from_arrays([np.repeat(site_id, unit_id.shape[1]), unit_id.ravel()])
    found = last.index.get_indexer(units)
    place: Ints = np.where(found >= 0, np.append(last.to_numpy(), -1)[found], -1)
    return place.reshape(unit_id.shape)


def _inventory(
    rows: pd.DataFrame, roster: Roster, start: np.datetime64, local_hour: float, timezone: str
) -> tuple[Floats, Floats, Floats, list[Assumption]]:
    """Low, best and high inventory (site, tank), and what was assumed of it."""
    tanks, site_id = roster.tanks, roster.buildings.site_id
    capacity = tanks.capacity_kwh_th
    read = rows[rows["inventory_kwh_th"].notna()]
    found = _newest(read, site_id, tanks.tank_id)
    known = (found >= 0) & tanks.exists

    def column(name: str) -> Floats:
        values: Floats = np.append(read[name].to_numpy(dtype=np.float64), np.nan)[found]
        return values

    times = read["time"].dt.tz_convert("UTC").dt.tz_localize(None).to_numpy().astype("datetime64[us]")
    age = age_h(np.append(times, np.datetime64("NaT"))[found], start)
    band = capacity * (READING_FRACTION + WIDENING_PER_H * np.nan_to_num(age))
    guess = capacity * usual_fraction(roster, local_hour)[:, None]
    best = np.where(known, column("inventory_kwh_th"), guess)
    given_low, given_high = column("inventory_low_kwh_th"), column("inventory_high_kwh_th")
    low = np.where(known, np.where(np.isnan(given_low), best - band, given_low), ASSUMED_LOW * best)
    high = np.where(known, np.where(np.isnan(given_high), best + band, given_high), ASSUMED_HIGH * best)
    low, best, high = (
        np.where(tanks.exists, np.clip(part, 0.0, capacity), 0.0) for part in (low, best, high)
    )
    keys = pd.Series((site_id[:, None] + "/" + tanks.tank_id)[tanks.exists & ~known], dtype=object)
    why = (
        f"no reading at or before {local_text(start, timezone)}: full by the end of usual charging, "
        "used up over the hours of usual discharge"
    )
    return low, best, high, assumptions("status", keys, "inventory_kwh_th", best[tanks.exists & ~known], why)


def usual_fraction(roster: Roster, local_hour: float) -> Floats:
    """Share of its capacity a tank holds on a usual day at a local hour, shape (site,): an assumption.

    Full at the end of charging; a straight line to empty over the on-peak hours (full storage, storage priority)
    or the occupied hours (the others); empty until charging starts; a straight line to full.
    """
    buildings = roster.buildings
    by_peak = np.isin(buildings.strategy, [STRATEGIES.index(name) for name in _BY_PEAK])
    use_from = np.where(by_peak, buildings.peak_from_hour, buildings.occupied_from_hour)
    use_to = np.where(by_peak, buildings.peak_to_hour, buildings.occupied_to_hour)

    def since_full(hour: Floats | float) -> Floats:
        hours: Floats = np.mod(hour - buildings.charge_to_hour, 24.0)
        return hours

    now, first, last = since_full(local_hour), since_full(use_from), since_full(use_to)
    last = np.where(last == 0.0, 24.0, last)
    # A use that is under way when charging ends (around the clock, say) starts there.
    first = np.where((last <= first) & (use_from != use_to), 0.0, first)
    last = np.maximum(last, first)
    charge = np.maximum(since_full(buildings.charge_from_hour), last)
    used = np.clip((now - first) / np.maximum(last - first, 1e-9), 0.0, 1.0)
    made = np.clip((now - charge) / np.maximum(24.0 - charge, 1e-9), 0.0, 1.0)
    share: Floats = np.clip(1.0 - used + made, 0.0, 1.0)
    return share
