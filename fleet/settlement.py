"""The tables of a settlement revision, built from arrays; nothing is computed here but sums over sites.

Owns the shape of the six tables (see the table of columns, folder settlement) and the postings between revisions.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from decimal import Decimal
from typing import Any

import numpy as np
import pandas as pd

from fleet.baseline import METHODS, REASONS, USED, Baseline
from fleet.callfacts import Plan, microseconds
from fleet.meters import QUALITIES, Codes, LocalGrid
from fleet.money import Lines
from sites.units import AnyArray, Bools, Floats, Strings, Times

UNREAD = [REASONS.index(name) for name in ("other_day_type", "holiday")]
"""Days whose readings are not looked at, and not recorded."""
STATES = ("final", "provisional", "no_baseline", "meter_missing", "excused")


@dataclass(frozen=True)
class SiteResult:
    """What each site delivered and earns; arrays over (site,) or (site, shown interval)."""

    metered_kw: Floats
    quality: Codes
    delivered_kw: Floats
    in_event: Bools
    """(interval,)"""
    in_window: Bools
    """(site, interval)"""
    committed_kwh: Floats
    delivered_kwh: Floats
    factor: Floats
    paid_share: Floats
    state: Strings
    why: Strings
    """(site,) None where the site is not excused"""
    guard: Strings
    dry_bulb_c: Floats
    """(site, interval) NaN where the rule needs none"""
    until_midnight_kwh: Floats
    """(site,) energy taken back after the own window; NaN where not known"""
    until_full_kwh: Floats
    netted_kwh: Floats
    """(site,) what the rule takes off of it; NaN where not known"""
    money: Lines


@dataclass(frozen=True)
class Trace:
    """The days that were considered: readings by local day, modes, and what the event day showed."""

    grid: LocalGrid
    event_day: int
    kw: Floats
    """(site, day, slot)"""
    quality: Codes
    modes: Strings
    """(site, day)"""
    window_kw: Floats
    """(site,) the event day's mean over the adjustment window; NaN where there is none"""
    charging_kw: Floats
    """(site, day) what is taken out of that mean as charging"""
    dry_bulb_c: Floats
    """(site, day, slot)"""
    peak_dry_bulb_c: Floats
    """(site, day)"""
    step_h: float
    starts: Times
    """(interval,) of the whole period read"""


@dataclass(frozen=True)
class Settlement:
    """One revision: tables in the columns of the settlement folder, a summary and notes in words."""

    intervals: pd.DataFrame
    days: pd.DataFrame
    day_intervals: pd.DataFrame | None
    """None where they were given away part by part; see settle.settle."""
    sites: pd.DataFrame
    fleet: pd.DataFrame
    postings: pd.DataFrame
    summary: Mapping[str, object]
    notes: tuple[str, ...]

    @property
    def frames(self) -> dict[str, pd.DataFrame]:
        """The tables by name, as a record writes them."""
        names = ("intervals", "days", "day_intervals", "sites", "fleet", "postings")
        held = {name: getattr(self, name) for name in names}
        return {name: frame for name, frame in held.items() if frame is not None}


def interval_table(
    event_id: str, revision: int, plan: Plan, found: Baseline, result: SiteResult
) -> pd.DataFrame:
    """Event and recovery of every called site, sorted by site and time."""
    shape = result.metered_kw.shape
    names = ("building", "plant")
    stream = [names.index(rule.stream) for rule in plan.rules]
    return pd.DataFrame(
        {
            "event_id": _coded(np.zeros(shape[0] * shape[1], dtype=np.int8), (event_id,)),
            "revision": revision,
            "site_id": _coded(np.repeat(np.arange(shape[0]), shape[1]), plan.site_ids),
            "stream": _coded(np.repeat(stream, shape[1]), names),
            "interval_start": _utc(np.tile(plan.clock.starts, shape[0])),
            "in_event": np.tile(result.in_event, shape[0]),
            "in_window": result.in_window.ravel(),
            "baseline_kw": found.baseline_kw.ravel(),
            "adjusted_baseline_kw": found.adjusted_kw.ravel(),
            "metered_kw": result.metered_kw.ravel(),
            "delivered_kw": result.delivered_kw.ravel(),
            "committed_kw": plan.committed_kw.ravel(),
            "quality": _coded(result.quality.ravel(), QUALITIES),
            "dry_bulb_c": result.dry_bulb_c.ravel(),
        }
    )


def day_table(event_id: str, revision: int, plan: Plan, found: Baseline, trace: Trace) -> pd.DataFrame:
    """Every day considered, oldest first, and the event's own day; see baseline.REASONS."""
    site, day = np.nonzero(_considered(plan, trace))
    age = trace.event_day - day
    own = age == 0
    at = np.maximum(age - 1, 0)
    reason = np.where(own, REASONS.index("event_day"), found.reason[site, at])
    # Days whose readings are not recorded show no figure of them either: nobody could work it out again.
    unread = ~own & np.isin(reason, UNREAD)
    return pd.DataFrame(
        {
            **_head(event_id, revision, _objects(plan.site_ids)[site]),
            "day": trace.grid.days[day].astype("datetime64[s]"),
            "used": reason == USED,
            "reason": _objects(REASONS)[reason],
            "mode": trace.modes[site, day],
            "rank_value": np.where(own | unread, np.nan, found.rank_value[site, at]),
            "window_base_kw": np.where(
                unread, np.nan, np.where(own, trace.window_kw[site], found.day_window_kw[site, at])
            ),
            "window_charging_kw": np.where(
                (own | (reason == USED)) & ~np.isnan(found.adjustment_charged[site]),
                trace.charging_kw[site, day],
                np.nan,
            ),
            "day_kwh": np.where(~unread, np.nansum(trace.kw, axis=2)[site, day] * trace.step_h, np.nan),
            "peak_dry_bulb_c": trace.peak_dry_bulb_c[site, day],
        }
    )


def day_interval_table(
    event_id: str, revision: int, plan: Plan, found: Baseline, trace: Trace
) -> pd.DataFrame:
    """Slot by slot the days whose readings were looked at, and the event's day; slots that exist that day."""
    looked = _considered(plan, trace)
    looked[:, : trace.event_day] &= ~np.isin(found.reason, UNREAD)[:, ::-1]
    site, day = np.nonzero(looked)
    slots = trace.grid.slots
    columns: dict[str, AnyArray] = {
        "site": np.repeat(site, slots),
        "day": np.repeat(trace.grid.days[day].astype("datetime64[s]"), slots),
        "slot": np.tile(np.arange(slots), len(day)),
        "kw": trace.kw[site, day].ravel(),
        "quality": trace.quality[site, day].ravel(),
        "dry_bulb_c": trace.dry_bulb_c[site, day].ravel(),
    }
    there = trace.grid.times[day] > 0
    if not there.all():
        columns = {name: values[there.ravel()] for name, values in columns.items()}
    every = plan.every_site_id or plan.site_ids
    site_code = pd.Index(every).get_indexer(pd.Index(plan.site_ids))[columns["site"]]
    return pd.DataFrame(
        {
            "event_id": _coded(np.zeros(len(site_code), dtype=np.int8), (event_id,)),
            "revision": revision,
            "site_id": _coded(site_code, every),
            "day": columns["day"],
            "slot": columns["slot"],
            "kw": columns["kw"],
            "quality": _coded(columns["quality"], QUALITIES),
            "dry_bulb_c": columns["dry_bulb_c"],
        },
        copy=False,
    )


def _coded(codes: AnyArray, names: Sequence[str]) -> Any:
    """A column of few texts by their numbers: millions of text objects are slow."""
    return pd.Categorical.from_codes(codes, dtype=pd.CategoricalDtype(list(names)), validate=False)


def _considered(plan: Plan, trace: Trace) -> Bools:
    """(site, day): within the rule's look-back, or the event's own day."""
    back = np.array([0 if rule.kind == "before_after" else rule.look_back_days for rule in plan.rules])
    age = trace.event_day - np.arange(len(trace.grid.days))
    considered: Bools = (age >= 0) & (age <= back[:, None])
    return considered


def site_table(event_id: str, revision: int, plan: Plan, found: Baseline, result: SiteResult) -> pd.DataFrame:
    """One row per called site, over its own window."""
    money = result.money
    return pd.DataFrame(
        {
            **_head(event_id, revision, _objects(plan.site_ids)),
            "stream": _streams(plan),
            "rule": _objects([rule.name for rule in plan.rules]),
            "method": _objects(METHODS)[found.method],
            "state": result.state,
            "committed_kwh": result.committed_kwh,
            "delivered_kwh": result.delivered_kwh,
            "performance_factor": result.factor,
            "adjustment": found.adjustment,
            "adjustment_raw": found.adjustment_raw,
            "adjustment_kind": found.kind,
            "guard": np.where(np.isnan(found.adjustment_charged), "none", result.guard).astype(object),
            "adjustment_charged": found.adjustment_charged,
            "beyond_training_k": found.beyond_training_k,
            "paid_share": result.paid_share,
            "recovery_until_midnight_kwh": result.until_midnight_kwh,
            "recovery_until_full_kwh": result.until_full_kwh,
            "netted_kwh": result.netted_kwh,
            "why": result.why,
            "capacity_payment": money.capacity_payment,
            "energy_payment": money.energy_payment,
            "penalty": money.penalty,
            "total": money.total,
        }
    )


def fleet_table(
    event_id: str, revision: int, plan: Plan, request: pd.DataFrame, result: SiteResult
) -> pd.DataFrame:
    """Sums over sites at the requested node in every event interval; a site outside its window nets in."""
    asked = request.assign(_at=microseconds(request["interval_start"])).sort_values("_at")
    at = result.in_event
    delivered = result.delivered_kw[:, at]
    known = ~np.isnan(delivered)
    factor = plan.delivery_factor[:, None]
    return pd.DataFrame(
        {
            "event_id": event_id,
            "revision": revision,
            "interval_start": _utc(asked["_at"].to_numpy("datetime64[us]")),
            "requested_kw": asked["requested_kw"].to_numpy(dtype=np.float64),
            "expected_kw": asked["expected_kw"].to_numpy(dtype=np.float64),
            "committed_kw": (factor * plan.committed_kw[:, at]).sum(axis=0),
            "delivered_kw": (factor * np.where(known, delivered, 0.0)).sum(axis=0),
            "sites_settled": known.sum(axis=0),
            "sites_missing": (~known).sum(axis=0),
        }
    )


def posting_table(
    event_id: str, revision: int, sites: pd.DataFrame, before: pd.DataFrame | None
) -> pd.DataFrame:
    """What this revision posts: its totals less those of the revision before, also of sites no longer called."""
    total = pd.Series(sites["total"].to_numpy(dtype=object), index=sites["site_id"].astype(str))
    if before is None:
        earlier = pd.Series(dtype=object)
        from_revision = pd.array([pd.NA] * len(total), dtype="Int64")
        ids = total.index
    else:
        earlier = pd.Series(before["total"].to_numpy(dtype=object), index=before["site_id"].astype(str))
        ids = total.index.union(earlier.index)
        from_revision = pd.array([int(before["revision"].max())] * len(ids), dtype="Int64")
    zero: Any = Decimal(0)
    new, old = (part.reindex(ids, fill_value=zero).to_numpy(dtype=object) for part in (total, earlier))
    return pd.DataFrame(
        {
            "event_id": event_id,
            "site_id": ids.to_numpy(dtype=object),
            "from_revision": from_revision,
            "to_revision": revision,
            "amount": new - old,
        }
    )


def _head(event_id: str, revision: int, site_id: AnyArray) -> dict[str, object]:
    return {"event_id": event_id, "revision": revision, "site_id": site_id}


def _streams(plan: Plan) -> Strings:
    return _objects([rule.stream for rule in plan.rules])


def _objects(names: object) -> Strings:
    return np.array(names, dtype=object)


def _utc(times: Times) -> pd.DatetimeIndex:
    return pd.DatetimeIndex(times).as_unit("us").tz_localize("UTC")
