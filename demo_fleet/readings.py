"""Meter readings: building and plant meters from what the plants and the rest of the buildings draw.

Owns the meter map, and the passage from (site, interval) arrays to rows of the meters table. Axes: N, T.
"""

from typing import Any

import numpy as np
import pandas as pd

from demo_fleet.files import utc
from sites.units import Floats, Times


def meter_map(site_ids: "pd.Series[Any]") -> pd.DataFrame:
    """A building meter at every site, a second incomer at every thirteenth, a plant meter at every third."""
    number = np.arange(len(site_ids))
    main = pd.DataFrame({"meter_id": "B-" + site_ids, "site_id": site_ids, "role": "building", "sign": 1})
    second = main[number % 13 == 9].assign(meter_id=lambda rows: rows["meter_id"] + "-2")
    plant = main[number % 3 == 0].assign(meter_id=lambda rows: "P-" + rows["site_id"], role="plant")
    return parts(pd.concat([main, second, plant], ignore_index=True))


def meters(
    table: pd.DataFrame, site_ids: "pd.Series[Any]", times: Times, plant_kw: Floats, rest_kw: Floats
) -> pd.DataFrame:
    """Rows of the meters table for the meters of `table` at `site_ids`; plant and rest (N, T)."""
    here = table[table["site_id"].isin(site_ids) & table["role"].isin(["building", "plant"])]
    row = pd.Index(site_ids).get_indexer(pd.Index(here["site_id"]))
    building = (here["role"] == "building").to_numpy()
    part = here["part"].to_numpy(dtype=np.float64) * here["sign"].to_numpy(dtype=np.float64)
    kw = (plant_kw[row] + np.where(building[:, None], rest_kw[row], 0.0)) * part[:, None]
    return pd.DataFrame(
        {
            "meter_id": pd.Categorical.from_codes(  # type: ignore[call-overload]
                np.repeat(np.arange(len(here)), len(times)), categories=here["meter_id"].to_list()
            ),
            "interval_start": utc(np.tile(times, len(here))),
            "kw": np.round(kw.ravel(), 2),
            "quality": pd.Categorical(["measured"]).repeat(kw.size),
        }
    )


def parts(table: pd.DataFrame) -> pd.DataFrame:
    """A meter map with the share of its stream that each meter carries: equal shares."""
    streams = table.assign(role=table.get("role", "building"), sign=table.get("sign", 1))
    streams["sign"] = pd.to_numeric(streams["sign"]).fillna(1).astype(np.int64)
    streams["role"] = streams["role"].fillna("building")
    many = streams.groupby(["site_id", "role"])["meter_id"].transform("count")
    return streams.assign(part=1.0 / many.to_numpy(dtype=np.float64))
