"""Invented distribution network: one district, two substations, eight feeders, a few of them tight.

Owns nodes, node_loads and where each site hangs. Axes: feeder F, interval T.
"""

from typing import Final

import numpy as np
import pandas as pd

from demo_fleet.calendar import Local
from demo_fleet.files import utc
from sites.units import Floats, Ints, Times

ROOT: Final = "Oramene"
SUBSTATIONS: Final = ("North", "Saltmarsh")
FEEDERS: Final = ("N1", "N2", "N3", "N4", "N5", "S1", "S2", "S3")
NORTH_FEEDERS: Final = 5
HEADROOM: Final = (1.35, 1.05, 1.30, 1.02, 1.40, 1.35, 1.05, 1.30)
"""Feeder limit over the hot-day peak of everything on it."""


def feeder_of(peak_kw_th: Floats, rng: np.random.Generator) -> Ints:
    """Feeder of each site, (N,): about two thirds of the cooling load under North, spread over its feeders."""
    order = np.argsort(-peak_kw_th, kind="stable")
    chosen = np.zeros(len(peak_kw_th), dtype=np.int64)
    load = np.zeros(len(FEEDERS))
    weight = np.array([1.4, 1.2, 1.3, 1.1, 1.2, 1.0, 0.9, 1.1])
    for site in order:
        feeder = int(np.argmin((load + peak_kw_th[site]) / weight + rng.uniform(0.0, 1.0, len(FEEDERS))))
        chosen[site] = feeder
        load[feeder] += peak_kw_th[site]
    return chosen


def other_kw(local: Local, dry_bulb_c: Floats, fleet_peak_kw: Floats) -> Floats:
    """Homes and shops on each feeder, (F, T): an evening hump, and air conditioners on hot days."""
    hour = local.hour
    evening = np.exp(-(((hour - 19.5) / 3.0) ** 2))
    day = 0.45 + 0.2 * np.clip(np.sin(np.pi * (hour - 6.0) / 15.0), 0.0, 1.0) + 0.3 * evening
    shape = day + 0.016 * np.clip(dry_bulb_c - 22.0, 0.0, None)
    return 1.3 * np.maximum(fleet_peak_kw, 200.0)[:, None] * shape[None, :]


def nodes(fleet_peak_kw: Floats, others_kw: Floats) -> pd.DataFrame:
    """Nodes table with import limits from the hot-day peaks, (F,) and (F, T)."""
    limit = np.array(HEADROOM) * (fleet_peak_kw + others_kw.max(axis=1))
    under = [limit[:NORTH_FEEDERS].sum(), limit[NORTH_FEEDERS:].sum()]
    rows: list[tuple[str, str, float | None]] = [(ROOT, "", None)]
    rows += [(name, ROOT, float(np.round(0.97 * total, -1))) for name, total in zip(SUBSTATIONS, under)]
    rows += [
        (name, SUBSTATIONS[int(i >= NORTH_FEEDERS)], float(np.round(limit[i], -1)))
        for i, name in enumerate(FEEDERS)
    ]
    return pd.DataFrame(rows, columns=["node_id", "parent_id", "import_limit_kw"])


def node_loads(times: Times, others_kw: Floats) -> pd.DataFrame:
    """node_loads table: of the whole subtree of every feeder, substation and the root."""
    north, south = others_kw[:NORTH_FEEDERS].sum(axis=0), others_kw[NORTH_FEEDERS:].sum(axis=0)
    rows = [(ROOT, north + south), (SUBSTATIONS[0], north), (SUBSTATIONS[1], south)]
    rows += list(zip(FEEDERS, others_kw))
    frames = [
        pd.DataFrame({"node_id": name, "interval_start": utc(times), "other_kw": np.round(kw, 1)})
        for name, kw in rows
    ]
    return pd.concat(frames, ignore_index=True)
