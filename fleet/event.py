"""The tables of a call's record, from arrays: what was asked, who was chosen, and every course behind it.

Owns the shape of the call's tables (columns.csv, folder `call`). Leaves writing them to records.py, what the
operator is told to steps.py, and the prices and proof to allocate.py.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from fleet.feeders import Feeders
from fleet.request import Request
from sites.course import Course
from sites.quote import Quoted, detail, windows_of
from sites.quotes import COST_PARTS, LIMITED_BY
from sites.recovery import RECOVERIES
from sites.units import AnyArray, Floats, Ints, Strings, Times


@dataclass(frozen=True)
class Chosen:
    """The call's choice with all that its tables are made from; rows are called sites in site order."""

    request: Request
    quoted: Quoted
    feeders: Feeders
    candidate: Ints
    """(row,) index of the chosen candidate over all quotes"""
    course: Course
    """(row, ...) the chosen candidates in full"""

    @property
    def site(self) -> Ints:
        """(row,) index of each called site."""
        return self.quoted.quotes.site[self.candidate]

    @property
    def site_id(self) -> Strings:
        """(row,) id of each called site."""
        return self.quoted.ground.roster.buildings.site_id[self.site]

    @property
    def starts(self) -> Times:
        """(interval,) starts of the horizon's intervals."""
        return self.quoted.quotes.clock.starts

    @property
    def change_kw(self) -> Floats:
        """(row, interval) event less usual."""
        return self.course.power_kw - self.quoted.ground.usual.power_kw[self.site]

    @property
    def expected_kw(self) -> Floats:
        """(row, interval) in the event's direction."""
        return self.request.direction.sign * self.change_kw

    @property
    def committed_kw(self) -> Floats:
        """(row, interval) max(expected, 0) inside each site's own window, 0 elsewhere."""
        inside = windows_of(self.quoted.quotes, self.candidate)
        return np.where(inside, np.maximum(self.expected_kw, 0.0), 0.0)


def chosen(request: Request, quoted: Quoted, feeders: Feeders, candidate: Ints) -> Chosen:
    """Expand the chosen candidates (row,) to whole courses."""
    ordered = np.sort(candidate)
    return Chosen(request, quoted, feeders, ordered, detail(quoted, ordered))


def frames(call: Chosen) -> dict[str, pd.DataFrame]:
    """All tables that follow from the choice alone; `prices` and `steps` come from elsewhere."""
    return {
        "request": request_frame(call),
        "windows": windows_frame(call),
        "intervals": intervals_frame(call),
        "tanks": tanks_frame(call),
        "machines": machines_frame(call),
        "usual": usual_frame(call),
        "quotes": quotes_frame(call),
        "nodes": nodes_frame(call),
    }


def _utc(times: Times) -> pd.Series:
    return pd.Series(pd.DatetimeIndex(times.astype("datetime64[us]")).tz_localize("UTC")).astype(
        "datetime64[us, UTC]"
    )


def _grid(call: Chosen, keys: dict[str, AnyArray], values: dict[str, AnyArray]) -> pd.DataFrame:
    """Rows x intervals as a long table: keys (row,) repeated, values (row, interval) flattened."""
    rows, count = next(iter(values.values())).shape
    columns: dict[str, object] = {"event_id": np.full(rows * count, call.request.event_id, dtype=object)}
    columns |= {name: np.repeat(key, count) for name, key in keys.items()}
    columns["interval_start"] = _utc(np.tile(call.starts, rows))
    columns |= {name: value.reshape(-1) for name, value in values.items()}
    return pd.DataFrame(columns)


def request_frame(call: Chosen) -> pd.DataFrame:
    """Table request: one row per requested node and event interval."""
    ask, quotes = call.request, call.quoted.quotes
    factor = call.quoted.ground.roster.buildings.delivery_factor[call.site]
    event = slice(quotes.event_from, quotes.event_to)
    below = np.stack([call.feeders.sites_below(name)[call.site] for name in ask.node_ids])
    count, nodes = ask.interval_count, len(ask.node_ids)
    rows = count * nodes
    return pd.DataFrame(
        {
            "event_id": ask.event_id,
            "node_id": np.repeat(np.array(ask.node_ids, dtype=object), count),
            "within_node_id": np.repeat(_within(call), count),
            "direction": str(ask.direction),
            "purpose": ask.purpose,
            "called_at": _utc(np.full(rows, ask.called_at)),
            "effective_from": _utc(np.full(rows, ask.called_at)),
            "supersedes": pd.array([None] * rows, dtype="Int64"),
            "interval_start": _utc(np.tile(ask.interval_starts, nodes)),
            "interval_end": _utc(np.tile(ask.interval_ends, nodes)),
            "requested_kw": ask.requested_kw,
            "promised_kw": np.full(rows, np.nan),
            "expected_kw": ((below * factor) @ call.expected_kw[:, event]).ravel(),
        }
    )


def _within(call: Chosen) -> Strings:
    """(requested node,) the nearest requested node above each, None for an outermost one."""
    names = call.request.node_ids
    found = [call.feeders.nearest_above(name, names) for name in names]
    return np.array(found, dtype=object)


def windows_frame(call: Chosen) -> pd.DataFrame:
    """Table windows: one row per called site."""
    quoted, quotes, pick = call.quoted, call.quoted.quotes, call.candidate
    start, end = quotes.window_start[pick], quotes.window_end[pick]
    edges = np.append(call.starts, quotes.clock.end)
    held = call.course.inventory_kwh_th.sum(axis=1)
    held_before = call.course.inventory_start_kwh_th.sum(axis=1)
    row = np.arange(len(pick))
    step_h = quotes.clock.step_h
    after = np.arange(quotes.clock.count)[None, :] >= end[:, None]
    back = quoted.full_again[pick]
    full_at = _utc(edges[np.maximum(back, 0) + 1]).where(back >= 0)
    buildings = quoted.ground.roster.buildings
    return pd.DataFrame(
        {
            "event_id": call.request.event_id,
            "site_id": call.site_id,
            "quote_id": quotes.quote_id[pick],
            "window_start": _utc(edges[start]),
            "window_end": _utc(edges[end]),
            "chiller_ids": _machines_off(call, pick),
            "recovery": np.array(RECOVERIES, dtype=object)[quoted.recovery[pick]],
            "committed_kwh": call.committed_kw.sum(axis=1) * step_h,
            "net_cost": quotes.net_cost[pick],
            **{f"cost_{part}": quotes.cost[pick, k] for k, part in enumerate(COST_PARTS)},
            "recovery_energy_kwh": np.where(after, call.change_kw, 0.0).sum(axis=1) * step_h,
            "inventory_start_kwh_th": held_before[row, start],
            "inventory_end_kwh_th": held[row, end - 1],
            "inventory_low_start_kwh_th": quoted.inventory_low_start_kwh_th[pick],
            "end_lack_kwh_th": quotes.end_lack_kwh_th[pick],
            "end_lack_price_per_kwh_th": quotes.end_lack_price_per_kwh_th[pick],
            "unmet_kwh_th": quotes.unmet_kwh_th[pick],
            "peak_zone_rise_k": call.course.air_rise_k.max(axis=1, initial=0.0),
            "full_again_at": full_at,
            "delivery_factor": buildings.delivery_factor[call.site],
            "limited_by": np.array(LIMITED_BY, dtype=object)[quotes.limited_by[pick]],
        }
    )


def _machines_off(call: Chosen, pick: Ints) -> list[list[str]]:
    """Tags of every machine off at any time, per candidate."""
    quotes, chillers = call.quoted.quotes, call.quoted.ground.roster.chillers
    off = np.asarray((quotes.stages.load_limit_fraction[pick] <= 0.0).any(axis=1), dtype=np.bool_)
    tags = chillers.chiller_id[quotes.site[pick]]
    return [list(row[mask]) for row, mask in zip(tags, off & chillers.exists[quotes.site[pick]], strict=True)]


def intervals_frame(call: Chosen) -> pd.DataFrame:
    """Table intervals: called sites x horizon."""
    course, ground, site = call.course, call.quoted.ground, call.site
    return _grid(
        call,
        {"site_id": call.site_id},
        {
            "usual_kw": ground.usual.power_kw[site],
            "event_kw": course.power_kw,
            "rest_kw": ground.outlook.rest_kw[site],
            "expected_kw": call.expected_kw,
            "committed_kw": call.committed_kw,
            "cooling_load_kw_th": course.load_kw_th,
            "direct_kw_th": course.direct_kw_th.sum(axis=1),
            "charge_kw_th": course.charge_kw_th.sum(axis=1),
            "discharge_kw_th": course.discharge_kw_th.sum(axis=1),
            "unmet_kw_th": course.unmet_kw_th,
            "pull_down_kw_th": course.pull_down_kw_th,
            "loss_kw_th": course.loss_kw_th.sum(axis=1),
            "inventory_kwh_th": course.inventory_kwh_th.sum(axis=1),
            "usual_inventory_kwh_th": ground.usual.inventory_kwh_th[site].sum(axis=1),
            "usual_loss_kw_th": ground.usual.loss_kw_th[site].sum(axis=1),
            "usual_chiller_kw_th": ground.usual.chiller_kw_th[site],
            "usual_unmet_kw_th": ground.usual.unmet_kw_th[site],
            "discharge_limit_kw_th": course.discharge_limit_kw_th.sum(axis=1),
            "zone_rise_k": course.air_rise_k,
            "zone_mean_rise_k": course.air_mean_rise_k,
            "zone_mass_rise_k": course.mass_rise_k,
        },
    )


def tanks_frame(call: Chosen) -> pd.DataFrame:
    """Table tanks: tanks of called sites x horizon."""
    course, tanks = call.course, call.quoted.ground.roster.tanks
    row, unit = np.nonzero(tanks.exists[call.site])
    names = {
        "charge_kw_th": course.charge_kw_th,
        "discharge_kw_th": course.discharge_kw_th,
        "loss_kw_th": course.loss_kw_th,
        "inventory_kwh_th": course.inventory_kwh_th,
        "inventory_start_kwh_th": course.inventory_start_kwh_th,
        "discharge_limit_kw_th": course.discharge_limit_kw_th,
        "lmtd_k": course.lmtd_k,
    }
    keys = {"site_id": call.site_id[row], "tank_id": tanks.tank_id[call.site[row], unit]}
    return _grid(call, keys, {name: array[row, unit] for name, array in names.items()})


def machines_frame(call: Chosen) -> pd.DataFrame:
    """Table machines: chillers of called sites x horizon."""
    course, chillers = call.course, call.quoted.ground.roster.chillers
    row, unit = np.nonzero(chillers.exists[call.site])
    names = {
        "load_limit_fraction": course.limit_fraction,
        "making_ice": course.making_ice,
        "direct_kw_th": course.direct_kw_th,
        "charge_kw_th": course.into_tank_kw_th,
        "power_kw": course.machine_kw,
    }
    keys = {"site_id": call.site_id[row], "chiller_id": chillers.chiller_id[call.site[row], unit]}
    return _grid(call, keys, {name: array[row, unit] for name, array in names.items()})


def usual_frame(call: Chosen) -> pd.DataFrame:
    """Table usual: every fleet site x horizon."""
    ground = call.quoted.ground
    values = {"usual_kw": ground.usual.power_kw, "rest_kw": ground.outlook.rest_kw}
    return _grid(call, {"site_id": ground.roster.buildings.site_id}, values)


def quotes_frame(call: Chosen) -> pd.DataFrame:
    """Table quotes: every quoted candidate."""
    quoted, quotes = call.quoted, call.quoted.quotes
    edges = np.append(call.starts, quotes.clock.end)
    pick = np.arange(len(quotes.site))
    return pd.DataFrame(
        {
            "event_id": np.full(len(pick), call.request.event_id, dtype=object),
            "site_id": quoted.ground.roster.buildings.site_id[quotes.site],
            "quote_id": quotes.quote_id,
            "window_start": _utc(edges[quotes.window_start]),
            "window_end": _utc(edges[quotes.window_end]),
            "chiller_ids": _machines_off(call, pick),
            "load_limit_fraction": quoted.load_limit_fraction,
            "recovery": np.array(RECOVERIES, dtype=object)[quoted.recovery],
            "expected_kw": list(quotes.expected_kw),
            "change_kw": list(quotes.change_kw),
            "net_cost": quotes.net_cost,
            **{f"cost_{part}": quotes.cost[:, k] for k, part in enumerate(COST_PARTS)},
            "end_lack_kwh_th": quotes.end_lack_kwh_th,
            "end_lack_price_per_kwh_th": quotes.end_lack_price_per_kwh_th,
            "inventory_low_start_kwh_th": quoted.inventory_low_start_kwh_th,
            "unmet_kwh_th": quotes.unmet_kwh_th,
            "limited_by": np.array(LIMITED_BY, dtype=object)[quotes.limited_by],
        }
    )


def nodes_frame(call: Chosen) -> pd.DataFrame:
    """Table nodes: every node x horizon, all fleet buildings below it with and without the event."""
    ground, feeders = call.quoted.ground, call.feeders
    usual = ground.usual.power_kw + ground.outlook.rest_kw
    event = usual.copy()
    event[call.site] += call.change_kw
    below = feeders.below.astype(np.float64)
    limit = np.where(np.isfinite(feeders.limit_kw), feeders.limit_kw, np.nan)
    values = {
        "other_kw": feeders.other_kw,
        "usual_kw": below @ usual,
        "event_kw": below @ event,
        "import_limit_kw": np.repeat(limit[:, None], usual.shape[1], axis=1),
    }
    return _grid(call, {"node_id": feeders.node_id}, values)
