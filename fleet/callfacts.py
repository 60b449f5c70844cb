"""The facts of a call that a settlement reads, and the same on arrays.

Owns the reading of the record's frames into sorted arrays, and refuses a call that is not complete. Knows no
readings, rules' arithmetic or money.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np
import pandas as pd

from fleet.errors import FleetError
from fleet.money import Prices
from fleet.rules import SettlementRule
from sites.clock import Clock, span
from sites.direction import Direction
from sites.units import AnyArray, Bools, Floats, Ints, Strings, Times


@dataclass(frozen=True)
class CallFacts:
    """What a settlement reads of an event record; frames as in the table of columns, times in UTC."""

    event_id: str
    direction: Direction
    request: pd.DataFrame
    """interval_start, interval_end, requested_kw, expected_kw"""
    windows: pd.DataFrame
    """site_id, window_start, window_end, delivery_factor: one row per called site"""
    intervals: pd.DataFrame
    """site_id, interval_start, committed_kw: every called site over the whole horizon"""
    rules: Mapping[str, SettlementRule]
    """site_id -> its frozen rule"""
    prices: Prices
    timezone: str
    step_minutes: int
    meter_map: pd.DataFrame
    """meter_id, site_id, role, sign; empty: meter_id is the site_id"""
    holidays: pd.DataFrame
    """date"""
    plant_days: pd.DataFrame
    """site_id, day, mode"""
    past_event_days: pd.DataFrame
    """site_id, day: local days of the site's earlier events"""
    fleet_site_ids: tuple[str, ...] = ()
    """All sites of the fleet, whose meters may stand in the same file; empty: the called ones"""
    called_at: np.datetime64 | None = None
    weather: pd.DataFrame = field(default_factory=pd.DataFrame)
    """station_id, interval_start, dry_bulb_c; read where a rule needs it"""
    stations: Mapping[str, str] = field(default_factory=dict)
    """site_id -> station_id"""
    excused: Mapping[str, str] = field(default_factory=dict)
    """site_id -> why it earns and owes nothing for this event"""


@dataclass(frozen=True)
class Plan:
    """The call on arrays: sites sorted by id, intervals from the event's start to the horizon's end."""

    site_ids: tuple[str, ...]
    rules: tuple[SettlementRule, ...]
    clock: Clock
    event_start: np.datetime64
    event_end: np.datetime64
    window_start: Times
    """(site,)"""
    window_end: Times
    delivery_factor: Floats
    committed_kw: Floats
    """(site, interval)"""
    full_again_at: Times
    """(site,) NaT where the tank is not full again within the horizon, or the call does not say"""
    every_site_id: tuple[str, ...] = ()
    """All called sites, where this is a plan of some of them"""

    def of(self, rows: Ints) -> "Plan":
        """The same of some of the sites; itself where they are all."""
        if len(rows) == len(self.site_ids):
            return self
        return replace(
            self,
            site_ids=tuple(self.site_ids[row] for row in rows),
            rules=tuple(self.rules[row] for row in rows),
            window_start=self.window_start[rows],
            window_end=self.window_end[rows],
            delivery_factor=self.delivery_factor[rows],
            committed_kw=self.committed_kw[rows],
            full_again_at=self.full_again_at[rows],
            every_site_id=self.site_ids,
        )

    def in_event(self, clock: Clock) -> Bools:
        """(interval,) of that clock: within the whole event."""
        return (clock.starts >= self.event_start) & (clock.starts < self.event_end)

    def in_window(self, clock: Clock) -> Bools:
        """(site, interval): within the site's own window."""
        starts = clock.starts[None, :]
        return (starts >= self.window_start[:, None]) & (starts < self.window_end[:, None])


def arrange(call: CallFacts) -> Plan:
    """The call on arrays, sites sorted by id. FleetError names what is missing or does not fit."""
    windows = call.windows.assign(site_id=call.windows["site_id"].astype(str)).sort_values("site_id")
    site_ids = tuple(windows["site_id"])
    if len(set(site_ids)) < len(site_ids) or not site_ids:
        raise FleetError(
            f"event {call.event_id}: windows must hold one row per called site, came {len(site_ids)}"
        )
    lacking = [site for site in site_ids if site not in call.rules]
    if lacking:
        raise FleetError(
            f"event {call.event_id}: no settlement rule for {', '.join(lacking[:5])}; freeze one each"
        )
    strangers = sorted(set(call.excused) - set(site_ids))
    if strangers:
        raise FleetError(
            f"event {call.event_id}: site {', '.join(strangers)} is not called, so it cannot be excused; "
            f"called are {', '.join(site_ids[:5])}{' and more' if len(site_ids) > 5 else ''}"
        )
    event_start = microseconds(call.request["interval_start"]).min()
    event_end = microseconds(call.request["interval_end"]).max()
    _check_request(call, event_start, event_end)
    start, end = microseconds(windows["window_start"]), microseconds(windows["window_end"])
    times = microseconds(call.intervals["interval_start"])
    first = min(event_start, start.min())
    horizon_end = times.max() + np.timedelta64(call.step_minutes, "m")
    clock = span(first, max(horizon_end, event_end), call.step_minutes)
    return Plan(
        site_ids=site_ids,
        rules=tuple(call.rules[site] for site in site_ids),
        clock=clock,
        event_start=event_start,
        event_end=event_end,
        window_start=start,
        window_end=end,
        delivery_factor=windows["delivery_factor"].to_numpy(dtype=np.float64),
        committed_kw=_committed(call, site_ids, clock, times),
        full_again_at=_full_again(windows),
    )


def _full_again(windows: pd.DataFrame) -> Times:
    if "full_again_at" not in windows:
        return np.full(len(windows), np.datetime64("NaT", "us"))
    return microseconds(windows["full_again_at"])


def _check_request(call: CallFacts, event_start: np.datetime64, event_end: np.datetime64) -> None:
    """The request's rows are the event's intervals, each once, with no hole between."""
    whole = span(event_start, event_end, call.step_minutes).starts
    if not np.array_equal(np.sort(microseconds(call.request["interval_start"])), whole):
        raise FleetError(
            f"event {call.event_id}: request has {len(call.request)} rows; expected each of the {len(whole)} "
            f"intervals of {call.step_minutes} minutes from {event_start}Z to {event_end}Z once"
        )


def _committed(call: CallFacts, site_ids: tuple[str, ...], clock: Clock, times: Times) -> Floats:
    """committed_kw (site, interval) on the clock; every called site has every interval once."""
    site = pd.Index(site_ids).get_indexer(pd.Index(call.intervals["site_id"].astype(str)))
    offset = (times - clock.start).astype(np.int64)
    step, rest = np.divmod(offset, int(clock.step.astype(np.int64)))
    held = (step >= 0) & (step < clock.count) & (site >= 0) & (rest == 0)
    committed = np.full((len(site_ids), clock.count), np.nan)
    committed[site[held], step[held]] = call.intervals["committed_kw"].to_numpy(dtype=np.float64)[held]
    lost = int(np.isnan(committed).sum())
    if lost or int(held.sum()) != committed.size:
        raise FleetError(
            f"event {call.event_id}: intervals must hold every called site and interval from "
            f"{clock.start}Z to {clock.end}Z once; {lost} of {committed.size} are missing, "
            f"{int(held.sum()) - committed.size + lost} too many"
        )
    return committed


def microseconds(times: pd.Series) -> Times:
    """UTC times of a column as datetime64[us]."""
    utc = pd.to_datetime(times, utc=True).dt.tz_localize(None)
    found: Times = utc.to_numpy("datetime64[us]")
    return found


def local_days(column: pd.Series) -> Times:
    """Dates of a column as datetime64[D]."""
    found: Times = pd.to_datetime(column).to_numpy("datetime64[D]")
    return found


def marked(frame: pd.DataFrame, site_ids: tuple[str, ...], days: Times) -> Bools:
    """Mask (site, day) of the frame's rows (site_id, day); rows of other sites or days fall outside."""
    site, day, held = _places(frame, site_ids, days)
    mask = np.zeros((len(site_ids), len(days)), dtype=np.bool_)
    mask[site[held], day[held]] = True
    return mask


def modes(frame: pd.DataFrame, site_ids: tuple[str, ...], days: Times) -> Strings:
    """How each plant ran (site, day); no row = usual."""
    found = np.full((len(site_ids), len(days)), "usual", dtype=object)
    if not frame.empty:
        site, day, held = _places(frame, site_ids, days)
        found[site[held], day[held]] = frame["mode"].to_numpy(dtype=object)[held]
    return found


def _places(frame: pd.DataFrame, site_ids: tuple[str, ...], days: Times) -> tuple[AnyArray, AnyArray, Bools]:
    if frame.empty:
        none = np.zeros(0, dtype=np.int64)
        return none, none, np.zeros(0, dtype=np.bool_)
    site = pd.Index(site_ids).get_indexer(pd.Index(frame["site_id"].astype(str)))
    day = (local_days(frame["day"]) - days[0]).astype(np.int64)
    held: Bools = (site >= 0) & (day >= 0) & (day < len(days))
    return site, day, held
