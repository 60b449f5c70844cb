"""What a call's record says, as arrays: the frozen sites, machines and tanks, the clock, and the tables on it.

Owns turning a CallRecord into arrays and the first rule of all: that every table has the rows it must have, in
their order. Reads the record alone. Machines and tanks are units (U,) with the index of their site, each a row of
its own for the models of `sites`, so that nothing is padded. Site N counts all fleet sites, R the called ones.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.audit.findings import Findings, Sheet
from fleet.errors import FleetError
from fleet.records import CallRecord
from sites.clock import Clock, span
from sites.roster import CHILLER_KINDS, TANK_KINDS, Chillers, Tanks
from sites.units import AnyArray, Bools, Floats, Ints, Strings, Times

ROWS: Final = "rows of the table"


@dataclass(frozen=True)
class Units:
    """Machines or tanks of some sites: site (U,) as an index into the fleet's sites, id, and whether in service."""

    site: Ints
    unit_id: Strings
    available: Bools


@dataclass(frozen=True)
class Evidence:
    """One call's record on arrays. Tables are asked by `grid(table, column)`: (row, interval)."""

    record: CallRecord
    folder: str
    sheets: Mapping[str, Sheet]
    settings: Mapping[str, Any]
    clock: Clock
    event_from: int
    event_to: int
    sites: pd.DataFrame
    """Frozen sites (N)"""
    called: Ints
    """(R,) index of each called site, in the order of windows.parquet"""
    machines: Units
    """(U,) of the called sites, in loading order"""
    tanks: Units
    machine_facts: pd.DataFrame
    """Frozen chillers of all sites (A), in loading order"""
    tank_facts: pd.DataFrame
    standing: Mapping[str, Any]

    @property
    def site_id(self) -> Strings:
        """(N,) ids of all fleet sites."""
        return self.sites["site_id"].to_numpy(dtype=object)

    @property
    def sign(self) -> float:
        """expected = sign x (event - usual)."""
        return -1.0 if self.record.frames["request"]["direction"].iloc[0] == "shed" else 1.0

    @property
    def event(self) -> slice:
        """Event intervals on the clock."""
        return slice(self.event_from, self.event_to)

    def fact(self, name: str, rows: Ints | None = None) -> Floats:
        """A number of the frozen sites, (N,) or of `rows`; NaN for none."""
        values: Floats = pd.to_numeric(self.sites[name]).to_numpy(dtype=np.float64, na_value=np.nan)
        return values if rows is None else values[rows]

    def text(self, name: str, rows: Ints | None = None) -> Strings:
        """A text of the frozen sites, (N,) or of `rows`; "" for none."""
        values = self.sites[name].fillna("").to_numpy(dtype=object)
        return values if rows is None else values[rows]

    def grid(self, table: str, column: str) -> Floats:
        """A number column of a horizon table as (row, interval)."""
        return self.sheets[table].numbers(column).reshape(-1, self.clock.count)

    def window_numbers(self, column: str) -> Floats:
        """(R,) a number column of windows."""
        return self.sheets["windows"].numbers(column)

    def window(self) -> tuple[Ints, Ints]:
        """(R,) first and one past the last interval of each called site's window, as clock indices."""
        frame = self.sheets["windows"].frame
        return self.index(utc_naive(frame["window_start"])), self.index(utc_naive(frame["window_end"]))

    def index(self, times: Times) -> Ints:
        """Clock index of each time, rounded down, held within the horizon."""
        offset = (times - self.clock.start) // self.clock.step
        return np.clip(offset.astype(np.int64), 0, self.clock.count)

    def inside(self) -> Bools:
        """(R, interval) each called site's own window."""
        start, end = self.window()
        hour = np.arange(self.clock.count)[None, :]
        mask: Bools = (hour >= start[:, None]) & (hour < end[:, None])
        return mask

    def per_called(self, units: Units, values: Floats) -> Floats:
        """Sum of (U, interval) over the units of each called site, (R, interval)."""
        member = self.called[:, None] == units.site[None, :]
        total: Floats = member.astype(np.float64) @ values
        return total

    def of_called(self, units: Units) -> Ints:
        """(U,) row among the called sites of each unit."""
        place = np.full(len(self.sites), -1, dtype=np.int64)
        place[self.called] = np.arange(self.called.size)
        return place[units.site]


def evidence(record: CallRecord, folder: str, found: Findings) -> Evidence | None:
    """The record on arrays; None, with faults told, where rows are missing and nothing further can be said."""
    sheets = {name: Sheet(f"{folder}/{name}.parquet", frame) for name, frame in record.frames.items()}
    settings = record.frozen_json.get("settings")
    standing = record.frozen_json.get("standing")
    lost = [
        f"{name}.json" for name, there in (("settings", settings), ("standing", standing)) if there is None
    ]
    lost += [
        f"{name}.parquet"
        for name in ("sites", "chillers", "tanks", "weather", "tariffs")
        if name not in record.frozen
    ]
    if lost or record.frames["request"].empty:
        what = ", ".join(lost) or "a row of request.parquet"
        found.tell(ROWS, f"{folder}/frozen", None, f"no {what}", "all that the call stands on")
        return None
    assert settings is not None and standing is not None
    clock = _clock(record, settings)
    request = record.frames["request"]
    bounds = utc_naive(request["interval_start"]).min(), utc_naive(request["interval_end"]).max()
    sites = record.frozen["sites"].reset_index(drop=True)
    windows = record.frames["windows"]
    called = pd.Index(sites["site_id"]).get_indexer(pd.Index(windows["site_id"])).astype(np.int64)
    if (called < 0).any() or len(set(called.tolist())) < called.size:
        found.wrong(
            ROWS, sheets["windows"], "site_id", called < 0, windows["site_id"].to_numpy(), "a frozen site"
        )
        twice = windows["site_id"].duplicated().to_numpy()
        found.wrong(
            ROWS, sheets["windows"], "site_id", twice, windows["site_id"].to_numpy(), "one window a site"
        )
        return None
    machine_facts = _units_of(record.frozen["chillers"], sites, ["loading_order"])
    tank_facts = _units_of(record.frozen["tanks"], sites, [])
    made = Evidence(
        record=record,
        folder=folder,
        sheets=sheets,
        settings=settings,
        clock=clock,
        event_from=int((bounds[0] - clock.start) // clock.step),
        event_to=int((bounds[1] - clock.start) // clock.step),
        sites=sites,
        called=called,
        machines=_units(machine_facts, "chiller_id", called, standing),
        tanks=_units(tank_facts, "tank_id", called, standing),
        machine_facts=machine_facts,
        tank_facts=tank_facts,
        standing=standing,
    )
    return made if _complete(made, found) else None


def utc_naive(times: pd.Series) -> Times:
    """A time column as datetime64[us] in UTC, (row,)."""
    utc: Times = times.dt.tz_convert("UTC").dt.tz_localize(None).to_numpy().astype("datetime64[us]")
    return utc


def local(times: Times, zone: str) -> pd.DatetimeIndex:
    """UTC times (row,) in local wall time."""
    return pd.DatetimeIndex(times).tz_localize("UTC").tz_convert(zone)


def _clock(record: CallRecord, settings: Mapping[str, Any]) -> Clock:
    """The horizon: from the call, rounded up to the grid, to the end of the local day after the event's last."""
    step = int(settings["interval_minutes"])
    request = record.frames["request"]
    called_at = pd.Timestamp(utc_naive(request["called_at"]).min())
    last = utc_naive(request["interval_end"]).max() - np.timedelta64(1, "us")
    day = local(np.array([last]), str(settings["timezone"]))[0].tz_localize(None).normalize()
    after = (day + pd.Timedelta(days=2)).tz_localize(
        str(settings["timezone"]), nonexistent="shift_forward", ambiguous=True
    )
    end = after.tz_convert("UTC").tz_localize(None)
    return span(called_at.ceil(f"{step}min").to_datetime64(), end.to_datetime64(), step)


def _units_of(frame: pd.DataFrame, sites: pd.DataFrame, order: list[str]) -> pd.DataFrame:
    """Frozen units of all sites in the order of the sites, then of `order`, then of their rows."""
    place = pd.Index(sites["site_id"]).get_indexer(pd.Index(frame["site_id"]))
    keyed = frame.assign(site=place)
    ordered: pd.DataFrame = keyed[place >= 0].sort_values(["site", *order], kind="stable", ignore_index=True)
    return ordered


def _units(facts: pd.DataFrame, name: str, called: Ints, standing: Mapping[str, Any]) -> Units:
    """Units of the called sites, called site by called site."""
    rank = {int(site): place for place, site in enumerate(called)}
    row = facts["site"].map(rank)
    own = facts[row.notna()].assign(row=row[row.notna()]).sort_values("row", kind="stable", ignore_index=True)
    return Units(
        own["site"].to_numpy(dtype=np.int64), own[name].to_numpy(dtype=object), available(own, name, standing)
    )


def available(facts: pd.DataFrame, name: str, standing: Mapping[str, Any]) -> Bools:
    """(U,) in service when the call was made, by the frozen standing."""
    keys = zip(facts["site_id"], facts[name], strict=True)
    return np.array([bool(standing[site][unit]["available"]) for site, unit in keys], dtype=np.bool_)


def level_kwh_th(facts: pd.DataFrame, standing: Mapping[str, Any], which: str) -> Floats:
    """(U,) inventory of tanks at the horizon's start, `which` of low, best, high."""
    keys = zip(facts["site_id"], facts["tank_id"], strict=True)
    return np.array([float(standing[site][unit][f"{which}_kwh_th"]) for site, unit in keys], dtype=np.float64)


def chillers_of(facts: pd.DataFrame) -> Chillers:
    """Frozen machines as model rows of one machine each, (A, 1)."""

    def numbers(name: str) -> Floats:
        return _column(facts[name], np.nan)

    return Chillers(
        chiller_id=facts["chiller_id"].to_numpy(dtype=object)[:, None],
        exists=np.ones((len(facts), 1), dtype=np.bool_),
        kind=_codes(facts["kind"], CHILLER_KINDS),
        capacity_kw_th=numbers("capacity_kw_th"),
        rated_cop=numbers("rated_cop"),
        makes_ice=facts["makes_ice"].astype("boolean").fillna(False).to_numpy(dtype=np.bool_)[:, None],
        ice_capacity_slope_per_k=numbers("ice_capacity_slope_per_k"),
        ice_cop_slope_per_k=numbers("ice_cop_slope_per_k"),
        tower_approach_k=numbers("tower_approach_k"),
        dedicated_aux_kw=numbers("dedicated_aux_kw"),
        min_on_minutes=numbers("min_on_minutes"),
        min_off_minutes=numbers("min_off_minutes"),
        start_to_start_minutes=numbers("start_to_start_minutes"),
        starts_left=_column(facts["starts_left"], np.inf),
    )


def tanks_of(facts: pd.DataFrame) -> Tanks:
    """Frozen tanks as model rows of one tank each, (A, 1)."""
    return Tanks(
        tank_id=facts["tank_id"].to_numpy(dtype=object)[:, None],
        exists=np.ones((len(facts), 1), dtype=np.bool_),
        kind=_codes(facts["kind"], TANK_KINDS),
        capacity_kwh_th=_column(facts["capacity_kwh_th"], np.nan),
        loss_fraction_per_h=_column(facts["loss_fraction_per_h"], np.nan),
        discharge_limit_kw_th=_column(facts["discharge_limit_kw_th"], np.inf),
        charge_limit_kw_th=_column(facts["charge_limit_kw_th"], np.inf),
    )


def on_clock(frame: pd.DataFrame, key: str, names: Strings, column: str, clock: Clock) -> Floats:
    """Frozen rows of `key` on the clock, (name, interval): each row holds for the intervals of its hour.

    An empty name means the only one there is. FleetError where an interval has no value.
    """
    value = carried(frame, key, names, column, clock)
    if np.isnan(value).any():
        raise FleetError(
            f"frozen {column}: {int(np.isnan(value).sum())} intervals of the horizon have no value"
        )
    return value


def carried(frame: pd.DataFrame, key: str, names: Strings, column: str, clock: Clock) -> Floats:
    """The same with NaN where an interval has no value."""
    known = frame[key].unique()
    wanted = [name if name else known[0] if len(known) == 1 else None for name in names.tolist()]
    unique = pd.Index(sorted(set(map(str, wanted))))
    code = unique.get_indexer(pd.Index(frame[key].astype(str)))
    at = (utc_naive(frame["interval_start"]) - clock.start) // clock.step
    own_hour = int(np.timedelta64(1, "h") // clock.step)
    grid = np.full((len(unique), clock.count + own_hour), np.nan)
    held = (code >= 0) & (at >= -own_hour) & (at < clock.count)
    grid[code[held], at[held] + own_hour] = frame[column].to_numpy(dtype=np.float64, na_value=np.nan)[held]
    within = _place_in_hour(clock, own_hour)
    # A value is carried on within its own hour, a step at a time.
    for turn in range(1, own_hour):
        before = np.roll(grid, 1, axis=1)
        grid = np.where(np.isnan(grid) & (within >= turn)[None, :], before, grid)
    return grid[unique.get_indexer(pd.Index(list(map(str, wanted)))), own_hour:]


def _place_in_hour(clock: Clock, own_hour: int) -> Ints:
    """Which interval of its hour each interval is, for the clock with an hour before it."""
    first = int((clock.start - clock.start.astype("datetime64[h]")) // clock.step)
    place: Ints = (first + np.arange(clock.count + own_hour)) % own_hour
    return place


def _column(series: pd.Series, none: float) -> Floats:
    """A number column as (U, 1), `none` where empty."""
    values: Floats = pd.to_numeric(series).to_numpy(dtype=np.float64, na_value=np.nan)[:, None]
    return np.where(np.isnan(values), none, values)


def _codes(series: pd.Series, known: tuple[str, ...]) -> Ints:
    place = {name: code for code, name in enumerate(known)}
    codes: AnyArray = series.map(place).to_numpy(dtype=np.int64)[:, None]
    return codes


def _complete(made: Evidence, found: Findings) -> bool:
    """Every horizon table holds each of its keys in each interval, in order; False where rows are missing."""
    frames = made.record.frames
    keys: dict[str, dict[str, AnyArray]] = {
        "intervals": {"site_id": made.site_id[made.called]},
        "machines": {"site_id": made.site_id[made.machines.site], "chiller_id": made.machines.unit_id},
        "tanks": {"site_id": made.site_id[made.tanks.site], "tank_id": made.tanks.unit_id},
        "usual": {"site_id": made.site_id},
        "nodes": {"node_id": frames["nodes"]["node_id"].drop_duplicates().to_numpy(dtype=object)},
    }
    whole = True
    for name, columns in keys.items():
        sheet, count = made.sheets[name], len(next(iter(columns.values())))
        if len(sheet.frame) != count * made.clock.count:
            said = f"{len(sheet.frame)} rows"
            wanted = f"{count} x {made.clock.count} intervals from {made.clock.start} UTC"
            found.tell(ROWS, sheet.file, None, said, wanted)
            whole = False
            continue
        for column, ids in columns.items():
            found.same(ROWS, sheet, column, np.repeat(ids, made.clock.count))
        starts = pd.DatetimeIndex(np.tile(made.clock.starts, count)).tz_localize("UTC")
        found.same(ROWS, sheet, "interval_start", starts)
    for sheet in made.sheets.values():
        found.same(ROWS, sheet, "event_id", made.record.event_id)
    return whole
