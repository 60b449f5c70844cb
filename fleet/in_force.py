"""Calls in force as a later survey must see them: their stages, and how their sites come back.

Owns reading them from the records of their calls. That they are part of the usual case is sites/ground.py's.
"""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from fleet import limits, records
from fleet.assemble import Fleet
from fleet.records import CallRecord
from fleet.wall_time import utc_timestamp
from sites.candidate import Stages
from sites.direction import Direction
from sites.ground import Recovering
from sites.recovery import RECOVERIES, USUAL
from sites.units import Floats, Ints

TABLES = ("request", "windows", "machines", "intervals")


@dataclass(frozen=True)
class _Call:
    """One call as arrays over sites."""

    stages: Stages
    called: Ints
    """(row,) sites that have a window of it"""
    recovering: Recovering


def in_force(
    path: Path, fleet: Fleet, past: pd.DataFrame, start: np.datetime64
) -> tuple[Stages | None, Recovering | None]:
    """Stages (site, call) of calls whose windows reach into the horizon, and how each site comes back; None where
    there is no such call. A site has one window at a time. A window that has ended is past: its tank stands where its
    status says, and comes back as usual."""
    real = past[past["purpose"].isin(limits.COUNTED)]
    running = real[real["window_end"] > utc_timestamp(start)]
    calls = list(dict.fromkeys(running["event_id"]))
    if not calls:
        return None, None
    read = [_call(records.read_call(path, event_id, only=TABLES), fleet) for event_id in calls]
    stages = read[0].stages
    count = fleet.roster.count
    code, since = np.full(count, USUAL, dtype=np.int64), np.zeros(count, dtype=np.int64)
    level = np.full(count, np.nan)
    for one in read:
        running_now = one.called[one.stages.end[one.called].max(axis=1) > 0]
        code[running_now] = one.recovering.recovery[running_now]
        since[running_now] = one.recovering.recover_from[running_now]
        level[running_now] = one.recovering.level_kwh_th[running_now]
    for one in read[1:]:
        stages = stages.join(one.stages)
    return stages, Recovering(code, since, level)


def _call(record: CallRecord, fleet: Fleet) -> _Call:
    """A call's window of each site, each machine's load limit within it, whether its tanks are made to charge, its
    recovery, and what the tanks would hold without it at the horizon's start where it has begun by then."""
    absorb = record.frames["request"]["direction"].iloc[0] == Direction.ABSORB
    windows = record.frames["windows"].set_index("site_id")
    machines = record.frames["machines"]
    low = machines.groupby(["site_id", "chiller_id"])["load_limit_fraction"].min()
    roster, clock = fleet.roster, fleet.outlook.clock
    site_id = pd.Index(roster.buildings.site_id)
    start, end = (
        _clock_index(windows[name].reindex(site_id), clock.start, clock.step)
        for name in ("window_start", "window_end")
    )
    keys = pd.MultiIndex.from_arrays(
        [np.repeat(site_id, roster.chillers.exists.shape[1]), roster.chillers.chiller_id.ravel()]
    )
    limit = low.reindex(keys).fillna(1.0).to_numpy().reshape(roster.chillers.exists.shape)
    charge = np.full((len(site_id), 1), absorb, dtype=np.bool_)
    names = windows["recovery"].reindex(site_id).fillna("usual")
    code: Ints = names.map({name: code for code, name in enumerate(RECOVERIES)}).to_numpy().astype(np.int64)
    return _Call(
        Stages(start[:, None], end[:, None], limit[:, None, :], charge),
        np.flatnonzero(site_id.isin(windows.index)),
        Recovering(code, end, _level_kwh_th(record, windows, site_id, clock.start, clock.step)),
    )


def _level_kwh_th(
    record: CallRecord, windows: pd.DataFrame, site_id: pd.Index, start: np.datetime64, step: np.timedelta64
) -> Floats:
    """(site,) usual inventory at `start` where the site's window has begun before it, else NaN."""
    rows = record.frames["intervals"]
    before = pd.Timestamp(start - step).tz_localize("UTC")
    begun = windows.index[windows["window_start"] < pd.Timestamp(start).tz_localize("UTC")]
    at = rows[(rows["interval_start"] == before) & rows["site_id"].isin(begun)]
    level: Floats = at.set_index("site_id")["usual_inventory_kwh_th"].reindex(site_id).to_numpy(np.float64)
    return level


def _clock_index(times: pd.Series, start: np.datetime64, step: np.timedelta64) -> Ints:
    """Clock index of each time, 0 where there is none or it lies before the horizon."""
    offset = (times.dt.tz_convert("UTC").dt.tz_localize(None) - pd.Timestamp(start)) / pd.Timedelta(step)
    index: Ints = np.maximum(offset.fillna(0.0).to_numpy(), 0.0).astype(np.int64)
    return index
