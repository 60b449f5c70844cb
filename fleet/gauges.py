"""Tank levels that the status table holds of the past: what gauges read, and when.

Owns the passage from rows to levels at given times. What a level of now is taken for is standing.py's.
"""

from typing import Final

import numpy as np
import pandas as pd

from sites.units import Floats, Strings, Times

LONGEST_GAP_H: Final = 2.0
"""Between two readings no further apart than this a level is taken to move on a straight line."""


def read_levels(status: pd.DataFrame, site_id: Strings, tank_id: Strings) -> pd.DataFrame:
    """Rows of the status table with a level of a tank of tank_id (S, K), in order: unit = s K + k, time (us),
    kwh_th, low, high (NaN where not given)."""
    rows = status[status["inventory_kwh_th"].notna()]
    units = pd.MultiIndex.from_arrays([np.repeat(site_id, tank_id.shape[1]), tank_id.ravel()])
    # Padding has an id of its own kind, ("site", ""), which no row names; of doubles the first stands.
    first = ~units.duplicated()
    row_unit = units[first].get_indexer(pd.MultiIndex.from_arrays([rows["site_id"], rows["unit_id"]]))
    times = rows["time"].dt.tz_convert("UTC").dt.tz_localize(None).to_numpy().astype("datetime64[us]")
    frame = pd.DataFrame(
        {
            "unit": np.append(np.flatnonzero(first), -1)[row_unit],  # -1 is left out below
            "time": times.astype(np.int64),
            **{
                name: rows[column].to_numpy(dtype=np.float64, na_value=np.nan)
                for name, column in (
                    ("kwh_th", "inventory_kwh_th"),
                    ("low", "inventory_low_kwh_th"),
                    ("high", "inventory_high_kwh_th"),
                )
            },
        }
    )[row_unit >= 0]
    return frame.sort_values(["unit", "time"], kind="stable").drop_duplicates(["unit", "time"], keep="last")


def levels_at(read: pd.DataFrame, units: int, times: Times) -> Floats:
    """Level (unit, time) on the line between the readings before and after; NaN where those lie further apart than
    LONGEST_GAP_H, or on one side only."""
    at = times.astype("datetime64[us]").astype(np.int64)
    own, moment, level = (read[name].to_numpy() for name in ("unit", "time", "kwh_th"))
    if not len(own):
        return np.full((units, len(at)), np.nan)
    start = min(int(at[0]), int(moment.min()))
    width = max(int(at[-1]), int(moment.max())) - start + 1
    key = own.astype(np.int64) * width + (moment - start)
    wanted = np.arange(units)[:, None] * width + (at - start)[None, :]
    after = np.searchsorted(key, wanted, side="left")
    exact = np.append(key, -1)[after] == wanted
    before = np.where(exact, after, after - 1)
    there = (before >= 0) & (after < len(key))
    left, right = np.where(there, before, 0), np.where(there, after, 0)
    number = np.arange(units)[:, None]
    there &= (own[left] == number) & (own[right] == number)
    apart = moment[right] - moment[left]
    there &= apart <= LONGEST_GAP_H * 3600e6
    share = np.divide(at[None, :] - moment[left], apart, out=np.zeros(there.shape), where=apart > 0)
    return np.where(there, level[left] + share * (level[right] - level[left]), np.nan)
