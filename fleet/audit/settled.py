"""What a settlement's record says, as arrays: called sites sorted by id, intervals shown, local days and slots.

Owns turning a settlement and the call it settles into arrays; owns no rule. Shapes: S called sites, T intervals from
the event's (or the first window's) start to the horizon's end, D local days, L slots a day.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.audit.evidence import local, utc_naive
from fleet.audit.findings import Sheet
from fleet.records import CallRecord, SettlementRecord
from fleet.rules import SettlementRule
from sites.clock import Clock, span
from sites.units import AnyArray, Bools, Floats, Ints, Strings, Times

MEASURED: Final = ("measured", "edited")


@dataclass(frozen=True)
class Settled:
    """One settlement beside the call it settles, the settlement before it, and meters where there are any."""

    call: CallRecord
    record: SettlementRecord
    folder: str
    before: SettlementRecord | None
    meters: pd.DataFrame | None

    def sheet(self, table: str) -> Sheet:
        """A table of the settlement."""
        return Sheet(f"{self.folder}/{table}.parquet", self.record.frames[table])

    @cached_property
    def settings(self) -> Mapping[str, Any]:
        """Frozen settings of the fleet."""
        found: Mapping[str, Any] = self.call.frozen_json["settings"]
        return found

    @cached_property
    def windows(self) -> pd.DataFrame:
        """The call's windows, sites sorted by id."""
        return self.call.frames["windows"].sort_values("site_id", kind="stable", ignore_index=True)

    @cached_property
    def site_id(self) -> Strings:
        """(S,)"""
        return self.windows["site_id"].to_numpy(dtype=object)

    @cached_property
    def rules(self) -> list[SettlementRule]:
        """(S,) each site's frozen rule."""
        frozen = self.call.frozen_json["rules"]
        known = {name: SettlementRule.model_validate(rule) for name, rule in frozen["rules"].items()}
        return [known[frozen["site"][site]] for site in self.site_id.tolist()]

    @cached_property
    def sign(self) -> float:
        """delivered = sign x (adjusted baseline - metered)."""
        return 1.0 if self.call.frames["request"]["direction"].iloc[0] == "shed" else -1.0

    @cached_property
    def event(self) -> tuple[np.datetime64, np.datetime64]:
        """Start and end of the event."""
        request = self.call.frames["request"]
        return utc_naive(request["interval_start"]).min(), utc_naive(request["interval_end"]).max()

    @cached_property
    def clock(self) -> Clock:
        """Intervals shown: from the first of event and windows to the end of the call's horizon."""
        step = int(self.settings["interval_minutes"])
        first = min(self.event[0], utc_naive(self.windows["window_start"]).min())
        last = utc_naive(self.call.frames["intervals"]["interval_start"]).max() + np.timedelta64(step, "m")
        return span(first, max(last, self.event[1]), step)

    @cached_property
    def in_event(self) -> Bools:
        """(T,)"""
        return (self.clock.starts >= self.event[0]) & (self.clock.starts < self.event[1])

    @cached_property
    def in_window(self) -> Bools:
        """(S, T)"""
        start, end = (utc_naive(self.windows[name])[:, None] for name in ("window_start", "window_end"))
        return (self.clock.starts >= start) & (self.clock.starts < end)

    @cached_property
    def committed_kw(self) -> Floats:
        """(S, T) of the call's intervals."""
        frame = self.call.frames["intervals"]
        values = frame.set_index(["site_id", "interval_start"])["committed_kw"]
        starts = pd.DatetimeIndex(self.clock.starts).tz_localize("UTC").as_unit("us")
        keys = pd.MultiIndex.from_product([self.site_id, starts])
        found: Floats = values.reindex(keys).to_numpy(dtype=np.float64).reshape(len(self.site_id), -1)
        return found

    @property
    def whole(self) -> bool:
        """The settlement's intervals have as many rows as sites and intervals make."""
        return len(self.record.frames["intervals"]) == len(self.site_id) * self.clock.count

    def grid(self, column: str) -> Floats:
        """A number column of intervals as (S, T)."""
        return self.sheet("intervals").numbers(column).reshape(len(self.site_id), -1)

    def measured(self) -> Bools:
        """(S, T) the metered value is a reading, no estimate."""
        quality = self.record.frames["intervals"]["quality"].isin(MEASURED).to_numpy(dtype=np.bool_)
        return quality.reshape(len(self.site_id), -1)

    def sites(self, column: str) -> AnyArray:
        """A column of sites as it stands, (S,), by site id."""
        values = self.record.frames["sites"].set_index("site_id")[column].reindex(self.site_id)
        return values.to_numpy()

    def site_numbers(self, column: str) -> Floats:
        """A number column of sites, (S,), by site id."""
        values: Floats = pd.to_numeric(
            self.record.frames["sites"].set_index("site_id")[column].reindex(self.site_id)
        ).to_numpy(dtype=np.float64, na_value=np.nan)
        return values


@dataclass(frozen=True)
class Days:
    """Local days (D,), oldest first and the event's last, and the recorded readings in them."""

    day: Times
    """(D,) datetime64[D]"""
    kw: Floats
    """(S, D, L) as recorded, NaN where there is no row"""
    measured: Bools
    exists: Bools
    """(D, L) the slot exists that day, by the clock of the zone"""
    recorded: Bools
    """(S, D) the day's readings stand in the record"""
    used: Bools
    """(S, D)"""
    row: Ints
    """(S, D) row of table days, -1 where there is none"""
    holiday: Bools
    """(D,)"""
    weekend: Bools

    @property
    def readings(self) -> Floats:
        """(S, D, L) readings that are no estimate, else NaN."""
        return np.where(self.measured, self.kw, np.nan)


def days_of(made: Settled) -> Days:
    """The recorded days and their readings on arrays."""
    zone, step = str(made.settings["timezone"]), made.clock.step_minutes
    event_day = local_day(made.event[:1], zone)[0]
    table, slots = made.record.frames["days"], made.record.frames["day_intervals"]
    own = table["day"].to_numpy().astype("datetime64[D]")
    first = min(own.min(), event_day) if len(own) else event_day
    day = np.arange(first, event_day + np.timedelta64(1, "D"))
    count, length = len(made.site_id), 1440 // step
    known = pd.Index(made.site_id)
    row = np.full((count, len(day)), -1, dtype=np.int64)
    site, at = known.get_indexer(pd.Index(table["site_id"])), (own - first).astype(np.int64)
    held = (site >= 0) & (at >= 0) & (at < len(day))
    row[site[held], at[held]] = np.flatnonzero(held)
    used = np.zeros(row.shape, dtype=np.bool_)
    used[site[held], at[held]] = table["used"].to_numpy(dtype=np.bool_)[held]
    kw, measured = np.full((*row.shape, length), np.nan), np.zeros((*row.shape, length), dtype=np.bool_)
    site = known.get_indexer(pd.Index(slots["site_id"]))
    at = (slots["day"].to_numpy().astype("datetime64[D]") - first).astype(np.int64)
    slot = slots["slot"].to_numpy(dtype=np.int64)
    held = (site >= 0) & (at >= 0) & (at < len(day)) & (slot < length)
    place = (site[held], at[held], slot[held])
    recorded = np.zeros(row.shape, dtype=np.bool_)
    recorded[place[:2]] = True
    kw[place] = slots["kw"].to_numpy(dtype=np.float64, na_value=np.nan)[held]
    measured[place] = slots["quality"].isin(MEASURED).to_numpy(dtype=np.bool_)[held]
    holidays = made.call.frozen.get("holidays")
    dates = np.zeros(0, dtype="datetime64[D]")
    if holidays is not None:
        dates = holidays["date"].to_numpy().astype("datetime64[D]")
    # Day 0 of the calendar, 1970-01-01, was a Thursday.
    weekend = (day.astype(np.int64) + 3) % 7 >= 5
    return Days(
        day, kw, measured, _exists(day, zone, step), recorded, used, row, np.isin(day, dates), weekend
    )


def local_day(times: Any, zone: str) -> Times:
    """Local calendar day of UTC times, datetime64[D]."""
    stamps = local(np.atleast_1d(np.asarray(times)), zone).tz_localize(None)
    found: Times = stamps.to_numpy().astype("datetime64[D]")
    return found


def slots_of(times: Times, zone: str, step_minutes: int) -> Ints:
    """Local wall-time slot of UTC times, 0 = midnight."""
    stamps = local(times, zone)
    return ((stamps.hour * 60 + stamps.minute) // step_minutes).to_numpy(dtype=np.int64)


def _exists(day: Times, zone: str, step_minutes: int) -> Bools:
    """(D, L) wall times that the clock of the zone shows."""
    length = 1440 // step_minutes
    wall = day.astype("datetime64[m]")[:, None] + np.arange(length) * np.timedelta64(step_minutes, "m")
    index = pd.DatetimeIndex(wall.ravel()).tz_localize(zone, ambiguous="NaT", nonexistent="shift_forward")
    shown = index.tz_localize(None).to_numpy()
    there: Bools = (np.isnat(shown) | (shown == wall.ravel())).reshape(len(day), length)
    return there
