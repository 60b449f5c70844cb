"""What an assumed value is worth in kW: every assumed cell of a column moved to another plausible value, quoted again.

Owns the values tried, the trial event and the difference. The figure is the most that each site can sustain over the
whole trial event, summed over the sites, before feeder limits and call limits. Cells that were given are never moved.
All changes are quoted together, as if each were a fleet of its own beside the others.
"""

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, fields, replace
from datetime import date, timedelta
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet import limits
from fleet.assemble import Fleet, assemble
from fleet.errors import FleetError
from fleet.folder import FleetFolder
from fleet.resolve import Resolved, resolve
from fleet.wall_time import local_day, local_day_start, local_text, utc_timestamp
from sites.quote import ground, quote
from sites.roster import Rows
from sites.units import Bools, Floats, Strings

SHARE: Final = 0.2
"""A number is tried this share lower and higher: the spread of such defaults (an assumption)."""
HOURS: Final = 2.0
EVENT_HOURS: Final = (16, 18)
"""Local hours of the trial event."""
_MOST_SITES: Final = 1500
"""Sites quoted together, changes counted as sites of their own; memory goes with it."""
_COARSEST: Final = pd.Timedelta(hours=1)
_SERIES: Final = (
    ("weather", "station_id", "dry_bulb_c"),
    ("tariffs", "tariff_id", "price_per_kwh"),
    ("loads", "site_id", "cooling_load_kw_th"),
)
_OTHER: Final = {
    "chiller_priority": "storage_priority",
    "storage_priority": "chiller_priority",
    "load_levelling": "chiller_priority",
    "full_storage": "chiller_priority",
}
_SHARES: Final = (
    ("sites", "peak_cooling_kw_th"),
    ("sites", "floor_area_m2"),
    ("sites", "mass_kwh_per_k"),
    ("sites", "coupling_kw_per_k"),
    ("sites", "rise_limit_k"),
    ("sites", "shared_aux_kw"),
    ("chillers", "rated_cop"),
    ("chillers", "dedicated_aux_kw"),
    ("tanks", "discharge_limit_kw_th"),
)

Tried = tuple[str, str, str, FleetFolder, Callable[[Fleet], Fleet]]
"""table, column, what was tried, the folder to assemble, what to do to the fleet then"""


@dataclass(frozen=True)
class Effect:
    """What one change of a column's assumed cells does to what the fleet can give."""

    table: str
    column: str
    tried: str
    change_kw: float
    most_site: str
    most_kw: float
    """the site it moves most, and by how much"""


@dataclass(frozen=True)
class Effects:
    """All effects on one trial event, the largest first; each column's changes stand together."""

    event: str
    base_kw: float
    effects: tuple[Effect, ...]


def effects(folder: FleetFolder, progress: Callable[[str], None] = lambda text: None) -> Effects:
    """Quote a trial event on the hottest working day the tables cover, once as assumed and once for each change.

    Raises FleetError where no day is covered, and what assembling raises.
    """
    event = trial_event(folder)
    known = resolve(folder.frames, folder.settings)
    base = _fleet(folder, event)
    tried = list(_changes(folder, known, base))
    fleets = (change(base if other is folder else _fleet(other, event)) for *_, other, change in tried)
    kw: list[Floats] = []
    for batch in _batches([base], fleets, max(1, _MOST_SITES // base.roster.count)):
        progress(f"quoting {len(tried)} changes of what is assumed")
        kw += list(_sustained_kw(batch, event))
    names = base.roster.buildings.site_id
    found = []
    for (table, column, words, *_), changed in zip(tried, kw[1:], strict=True):
        moved = changed - kw[0]
        most = int(np.argmax(np.abs(moved)))
        found.append(Effect(table, column, words, float(moved.sum()), str(names[most]), float(moved[most])))
    zone = folder.settings.timezone
    span = f"{local_text(event.start, zone)} to {local_text(event.end, zone)}"
    return Effects(span, float(kw[0].sum()), tuple(_largest_first(found)))


def sustained_kw(folder: FleetFolder) -> Floats:
    """(site,) kW that each site sustains over the whole trial event with everything as it is assumed."""
    event = trial_event(folder)
    site: Floats = _sustained_kw([_fleet(folder, event)], event)[0]
    return site


def _batches(first: list[Fleet], others: Iterable[Fleet], size: int) -> Iterator[list[Fleet]]:
    """All fleets in order, at most `size` at once."""
    batch = first
    for fleet in others:
        if len(batch) >= size:
            yield batch
            batch = []
        batch = [*batch, fleet]
    yield batch


def _largest_first(found: list[Effect]) -> list[Effect]:
    size: dict[tuple[str, str], float] = {}
    for one in found:
        key = one.table, one.column
        size[key] = max(size.get(key, 0.0), abs(one.change_kw))
    return sorted(found, key=lambda one: (-size[one.table, one.column], one.table, one.column))


@dataclass(frozen=True)
class TrialEvent:
    """When it is called, from when to when it lasts, to when it is followed; UTC, datetime64[us]."""

    called_at: np.datetime64
    start: np.datetime64
    end: np.datetime64
    horizon_end: np.datetime64


def trial_event(folder: FleetFolder) -> TrialEvent:
    """The hottest working day (else the hottest day) whose event and the day after the tables cover."""
    weather, settings = folder.frames["weather"], folder.settings
    if weather.empty:
        raise FleetError("effects: there is no weather to try an event on; add the table")
    first, last = _covered(folder)
    local = weather["interval_start"].dt.tz_convert(settings.timezone)
    hottest = weather["dry_bulb_c"].groupby(local.dt.date).max()
    closed = set(folder.frames["holidays"]["date"].dt.date)
    rows = _load_rows(folder)
    ranked = sorted(
        hottest.index,
        key=lambda day: (-rows.get(day, 0), day.weekday() > 4 or day in closed, -float(hottest[day]), day),
    )
    notice = np.timedelta64(int(max(settings.notice_minutes, _notice(folder))), "m")
    for day in ranked:
        event = _event_on(np.datetime64(day, "D"), settings.timezone, notice)
        if utc_timestamp(event.called_at) >= first and utc_timestamp(event.horizon_end) <= last + _COARSEST:
            return event
    raise FleetError(
        f"effects: no day is covered by weather, prices and loads from {int(notice.astype(int))} minutes before "
        f"{EVENT_HOURS[0]}:00 to the end of the day after; add rows"
    )


def _load_rows(folder: FleetFolder) -> dict[date, int]:
    """By local day: rows with a cooling load on it and on the day after; a history may be sparse."""
    loads = folder.frames["loads"]
    times = loads.loc[loads["cooling_load_kw_th"].notna(), "interval_start"]
    count = times.dt.tz_convert(folder.settings.timezone).dt.date.value_counts().to_dict()
    return {day: size + count.get(day + timedelta(days=1), 0) for day, size in count.items()}


def _covered(folder: FleetFolder) -> tuple[pd.Timestamp, pd.Timestamp]:
    """From when to when every station, tariff and site with loads has rows (holes are found in assembling)."""
    spans = []
    for name, key, value in _SERIES:
        filled = folder.frames[name][folder.frames[name][value].notna()]
        spans.append(filled.groupby(key)["interval_start"].agg(["min", "max"]))
    whole = pd.concat(spans)
    return whole["min"].max(), whole["max"].min()


def _notice(folder: FleetFolder) -> float:
    given = folder.frames["sites"]["notice_minutes"].max()
    return 0.0 if pd.isna(given) else float(given)


def _event_on(day: np.datetime64, timezone: str, notice: np.timedelta64) -> TrialEvent:
    midnight = pd.Timestamp(day)
    start, end = (
        (midnight + pd.Timedelta(hours=hour)).tz_localize(timezone).tz_convert("UTC").tz_localize(None)
        for hour in EVENT_HOURS
    )
    begin = start.to_datetime64().astype("datetime64[us]")
    until = local_day_start(local_day(begin, timezone) + np.timedelta64(2, "D"), timezone)
    return TrialEvent(
        (begin - notice).astype("datetime64[us]"), begin, end.to_datetime64().astype("datetime64[us]"), until
    )


def _fleet(folder: FleetFolder, event: TrialEvent) -> Fleet:
    step = np.timedelta64(folder.settings.interval_minutes, "m")
    start = event.start - ((event.start - event.called_at) // step) * step
    return assemble(folder, start, event.horizon_end)


def _sustained_kw(fleets: list[Fleet], event: TrialEvent) -> Floats:
    """(fleet, site) least kW over the whole trial event of each site's best quote for all of it, 0 where none is.

    The fleets are the same sites with other values.
    """
    count, first = fleets[0].roster.count, fleets[0]
    sites = pd.concat([fleet.resolved["sites"] for fleet in fleets], ignore_index=True)
    edges = utc_timestamp(event.start), utc_timestamp(event.end)
    who = limits.eligible_sites(
        sites, _NO_CALLS, utc_timestamp(event.called_at), edges, first.settings.timezone
    )
    clock = first.outlook.clock
    index = clock.index(event.start), clock.index(event.end)
    terms = limits.terms(sites, who, clock, event.called_at, index)
    whole = np.full(len(sites), index[1] - index[0], dtype=np.int64)
    every = np.arange(count)
    load = np.concatenate([fleet.outlook.cooling_load_kw_th for fleet in fleets])
    outlook = replace(first.outlook.take(np.tile(every, len(fleets))), cooling_load_kw_th=load)
    base = ground(
        _beside([fleet.roster for fleet in fleets]), outlook, _beside([fleet.standing for fleet in fleets])
    )
    quotes = quote(base, replace(terms, minimum_intervals=whole)).quotes
    best = np.zeros(len(sites))
    np.maximum.at(best, quotes.site, quotes.expected_kw.min(axis=1))
    return best.reshape(len(fleets), count)


def _beside(parts: list[Any]) -> Any:
    """Frozen arrays over sites, one set after the other; nested sets too."""
    first = parts[0]
    if not isinstance(first, Rows):
        return np.concatenate(parts)
    return type(first)(
        **{one.name: _beside([getattr(part, one.name) for part in parts]) for one in fields(first)}
    )


_TIMES: Final = pd.DatetimeIndex([], dtype="datetime64[us, UTC]")
_NO_CALLS: Final = pd.DataFrame(
    {"event_id": [], "purpose": [], "site_id": [], "window_start": _TIMES, "window_end": _TIMES}
)


def _same(fleet: Fleet) -> Fleet:
    return fleet


def _changes(folder: FleetFolder, known: Resolved, fleet: Fleet) -> Iterator[Tried]:
    """Every change to try: of the assumed cells of a column that has any."""
    for table, column in _SHARES:
        assumed = _assumed(folder, known, table, column)
        for factor in (1.0 - SHARE, 1.0 + SHARE) if assumed.any() else ():
            values = known.frames[table][column] * factor
            yield table, column, _percent(factor), _with(folder, table, column, assumed, values), _same
    assumed = _assumed(folder, known, "sites", "occupied_to_hour")
    for hours in (-HOURS, HOURS) if assumed.any() else ():
        values = (known.sites["occupied_to_hour"] + hours).clip(0.0, 24.0)
        other = _with(folder, "sites", "occupied_to_hour", assumed, values)
        yield "sites", "occupied_to_hour", f"{hours:+g} h", other, _same
    assumed = _assumed(folder, known, "sites", "strategy")
    if assumed.any():
        values = known.sites["strategy"].map(_OTHER)
        other = _with(folder, "sites", "strategy", assumed, values)
        yield "sites", "strategy", "storage for chiller priority, else chiller priority", other, _same
    for factor in (1.0 - SHARE, 1.0 + SHARE):
        if any(one.table == "loads" and one.column == "cooling_load_kw_th" for one in fleet.assumed):
            yield "loads", "cooling_load_kw_th", _percent(factor), folder, _load_by(factor)
        if any(one.table == "status" for one in fleet.assumed):
            yield "status", "inventory_kwh_th", _percent(factor), folder, _level_by(factor)


def _percent(factor: float) -> str:
    return f"{100.0 * (factor - 1.0):+.0f} %"


def _assumed(folder: FleetFolder, known: Resolved, table: str, column: str) -> Bools:
    """Rows whose cell was empty and was filled."""
    mask: Bools = (folder.frames[table][column].isna() & known.frames[table][column].notna()).to_numpy(bool)
    return mask


def _with(folder: FleetFolder, table: str, column: str, rows: Bools, values: "pd.Series[Any]") -> FleetFolder:
    """The folder with the assumed cells of one column given."""
    frame = folder.frames[table].copy()
    frame[column] = frame[column].where(~rows, values)
    return replace(folder, frames=folder.frames | {table: frame})


def _load_by(factor: float) -> Callable[[Fleet], Fleet]:
    def scaled(fleet: Fleet) -> Fleet:
        keys = {
            one.key for one in fleet.assumed if (one.table, one.column) == ("loads", "cooling_load_kw_th")
        }
        rows = _among(fleet.roster.buildings.site_id, keys)
        load = fleet.outlook.cooling_load_kw_th * np.where(rows, factor, 1.0)[:, None]
        return replace(fleet, outlook=replace(fleet.outlook, cooling_load_kw_th=load))

    return scaled


def _level_by(factor: float) -> Callable[[Fleet], Fleet]:
    def scaled(fleet: Fleet) -> Fleet:
        keys = {one.key for one in fleet.assumed if one.table == "status"}
        tanks, stands = fleet.roster.tanks, fleet.standing
        named = fleet.roster.buildings.site_id[:, None] + "/" + tanks.tank_id
        by = np.where(_among(named, keys) & tanks.exists, factor, 1.0)
        low, best, high = (
            np.minimum(level * by, tanks.capacity_kwh_th)
            for level in (stands.low_kwh_th, stands.best_kwh_th, stands.high_kwh_th)
        )
        return replace(fleet, standing=replace(stands, low_kwh_th=low, best_kwh_th=best, high_kwh_th=high))

    return scaled


def _among(names: Strings, keys: set[str]) -> Bools:
    mask: Bools = np.isin(names.astype(str), np.array(sorted(keys), dtype=str))
    return mask
