"""Plays what really happens on an event's days, and writes what the meters then say.

Reads an event record's steps and windows as files, runs the finer model with and without them, writes the
readings of the event day and the day after, and beside them the truth, which the fleet never reads.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final

import numpy as np
import pandas as pd

from demo_fleet import calendar, readings, truth
from demo_fleet import course as course_file
from demo_fleet import days as dayfile
from demo_fleet import hidden as hidden_file
from demo_fleet.days import Days
from demo_fleet.files import DemoError, naive, read_settings, read_table, utc, write_parquet
from demo_fleet.orders import Acts, acts
from demo_fleet.plant import rested
from sites.units import Bools, Floats, Ints, Times

Progress = Callable[[str, float], None]
READINGS: Final = "meters-event.parquet"
GAP_INTERVALS: Final = (2, 3)
"""Missing readings of one called site: so many before its window's start, so many after."""


@dataclass(frozen=True)
class Played:
    """What was played and written."""

    readings: Path
    truth: Path
    called: int
    declined: str
    late: tuple[str, ...]
    gap: str
    """the site whose building meter has a gap"""
    true_kwh: float


def play(
    folder: Path, record: Path, out: Path, seed: int | None = None, progress: Progress | None = None
) -> Played:
    """Play the call in `record` (steps.parquet, windows.parquet) on the fleet in `folder`; write to `out`.

    A folder without `.truth`, or an event outside its days, gets hidden parameters drawn from its own tables by
    `seed`; what those leave open is as the record's `frozen` tables resolved it.
    Raises DemoError where tables do not reach over the days.
    """
    tell = progress or (lambda text, share: None)
    steps, windows = (pd.read_parquet(record / f"{name}.parquet") for name in ("steps", "windows"))
    if windows.empty:
        raise DemoError(f"{record} calls no site; there is nothing to play")
    tell("the fleet as it really is", 0.0)
    days = truth_of(
        folder,
        naive(windows["window_start"]).min(),
        naive(windows["window_end"]).max(),
        seed,
        record / "frozen",
    )
    order = acts(days, steps, windows)
    tell("the days, with and without the event", 0.1)
    with_event, without = _both(days, order, windows)
    tell("readings", 0.9)
    event_day = _day(days, naive(windows["window_start"]).min())
    kept = days.times >= event_day
    gap = _gap_site(days, order, windows)
    frame = _readings(folder, days, with_event, kept)
    frame = _with_gap(folder, frame, gap, windows)
    write_parquet(frame, out / READINGS)
    write_parquet(_truth(days, with_event, without), out / ".truth" / "truth.parquet")
    sign = 1.0 if (steps["action"] == "charge_to").any() else -1.0
    spans = windows[["site_id", "window_start", "window_end"]].assign(sign=sign)
    write_parquet(spans, out / ".truth" / "windows.parquet")
    late = days.hidden[days.hidden["site_id"].isin(windows["site_id"]) & (days.hidden["late_minutes"] > 0)]
    tell("done", 1.0)
    return Played(
        readings=out / READINGS, truth=out / ".truth" / "truth.parquet", called=int(windows["site_id"].nunique()),
        declined=order.declined, late=tuple(late["site_id"]), gap=gap, true_kwh=true_kwh(out)[1],
    )  # fmt: skip


def true_kwh(out: Path) -> tuple["pd.Series[Any]", float]:
    """Energy [kWh] each called site really shed (or absorbed) in its window (index site_id), and the sum."""
    frame = pd.read_parquet(out / ".truth" / "truth.parquet")
    windows = pd.read_parquet(out / ".truth" / "windows.parquet")
    joined = frame.merge(windows, on="site_id")
    inside = (joined["interval_start"] >= joined["window_start"]) & (
        joined["interval_start"] < joined["window_end"]
    )
    joined = joined[inside]
    change = (joined["with_event_kw"] - joined["without_event_kw"]) * calendar.STEP_MINUTES / 60.0
    each = (joined["sign"] * change).groupby(joined["site_id"]).sum().rename("true_kwh")
    return each, float(each.sum())


def truth_of(
    folder: Path, start: np.datetime64, end: np.datetime64, seed: int | None, frozen: Path | None = None
) -> Days:
    """The folder's own `.truth` where it reaches over the event and no other seed is asked, else drawn."""
    secret = folder / ".truth"
    if seed is None and (secret / "hidden.parquet").exists():
        hidden = pd.read_parquet(secret / "hidden.parquet")
        made = _made(folder, hidden)
        days = dayfile.read(made, hidden, secret, *_place(folder))
        if days.times[0] <= start - np.timedelta64(12, "h") and end <= days.times[-1]:
            return days
    return truth_from_folder(folder, 1 if seed is None else seed, start, frozen)


def truth_from_folder(folder: Path, seed: int, event_from: np.datetime64, frozen: Path | None = None) -> Days:
    """Days around an event, hidden parameters drawn from `seed`, loads and weather from the folder's tables.

    Runs from local midnight of the day before to the end of the day after; the forecast weather carries a
    shared error of up to 0.7 K. Tanks start seven tenths full. `frozen` is a folder of the same tables with their
    defaults resolved, preferred where it holds every site.
    """
    zone, holidays = _place(folder)
    day = str(calendar.local(np.array([event_from]), zone, holidays).day.astype("datetime64[D]")[0])
    times = calendar.quarters(
        calendar.midnight(calendar.next_day(day, -1), zone),
        calendar.midnight(calendar.next_day(day, 2), zone),
    )
    hidden = hidden_file.draw(_table(folder, "sites")["site_id"], seed)
    made = _made(folder, hidden, frozen)
    rng = np.random.default_rng([seed, 8])
    weather = _table(folder, "weather")
    _covers(folder, "weather", naive(weather["interval_start"]), times)
    dry, wet = dayfile.at_stations(weather, made.sites["station_id"], times)
    error = rng.uniform(0.4, 0.7) * rng.choice([-1.0, 1.0])
    local = calendar.local(times, zone, holidays)
    loads = read_table(folder, "loads")
    expected, rest = (
        _wide(loads, name, made.sites["site_id"], times) for name in ("cooling_load_kw_th", "rest_kw")
    )
    city = course_file.city_noise(len(times), rng)
    true = course_file.course(made.sites, hidden, local, dry + error, city, rng, expected, rest)
    return Days(made, hidden, times, local, true, dry + error, wet + 0.4 * error, rested(made.plant, 0.7))


def _place(folder: Path) -> tuple[str, tuple[str, ...]]:
    """Zone and holiday dates of a folder."""
    holidays = read_table(folder, "holidays")
    dates = () if holidays is None else tuple(holidays["date"].astype(str))
    return str(read_settings(folder)["timezone"]), dates


def _table(folder: Path, name: str) -> pd.DataFrame:
    frame = read_table(folder, name)
    if frame is None or frame.empty:
        raise DemoError(f"{folder} has no rows of {name}; a rehearsal plays on the folder's own {name}")
    return frame


def _made(folder: Path, hidden: pd.DataFrame, frozen: Path | None = None) -> hidden_file.Made:
    """The folder's plants, what is out of service by its newest status left out."""
    plates = _plates(folder, hidden, frozen)
    made = hidden_file.made(
        _table(plates, "sites"), _table(plates, "chillers"), read_table(plates, "tanks"), hidden
    )
    machine, tank = hidden_file.outages(made, read_table(folder, "status"))
    return replace(made, plant=replace(made.plant, machine_up=machine, tank_up=tank))


def _plates(folder: Path, hidden: pd.DataFrame, frozen: Path | None) -> Path:
    """Where sites, chillers and tanks are read: `frozen` where it holds every site, else the folder itself."""
    resolved = read_table(frozen, "sites") if frozen else None
    whole = resolved is not None and set(resolved["site_id"]) == set(hidden["site_id"])
    return frozen if frozen and whole else folder


def _covers(folder: Path, name: str, have: Times, times: Times) -> None:
    if have.min() > times[0] or have.max() < times[-1] - np.timedelta64(1, "h"):
        raise DemoError(
            f"{folder}: {name} reaches from {have.min()}Z to {have.max()}Z; playing this event needs "
            f"{times[0]}Z to {times[-1]}Z; add rows or choose another day"
        )


def _wide(loads: pd.DataFrame | None, column: str, site_ids: "pd.Series[Any]", times: Times) -> Floats:
    """A column of loads as (N, T), carried forward within the hour, NaN where there is nothing."""
    if loads is None or column not in loads or loads.empty:
        return np.full((len(site_ids), len(times)), np.nan)
    near = loads.assign(start=naive(loads["interval_start"]), value=pd.to_numeric(loads[column]))
    near = near[(near["start"] >= times[0]) & (near["start"] <= times[-1])]
    wide = near.pivot_table(index="start", columns="site_id", values="value", observed=False)
    wide = wide.reindex(pd.DatetimeIndex(times)).ffill(limit=3)
    return np.asarray(wide.reindex(columns=pd.Index(site_ids)).to_numpy(dtype=np.float64).T)


def _both(days: Days, order: Acts, windows: pd.DataFrame) -> tuple[dict[str, Floats], dict[str, Floats]]:
    """Quarter-hour results (N, T) with and without the event, run side by side; sites not called run once."""
    count = len(days.site_ids)
    called = np.flatnonzero(days.site_ids.isin(windows["site_id"]))
    rows = np.concatenate([np.arange(count), called])
    acting = np.concatenate([np.full(count, -1), called])
    plant = days.made.plant.take(rows)
    driven = truth.Drive(
        hour=np.broadcast_to(days.local.hour, (len(rows), len(days.times))),
        load_kw_th=days.course.cooling_load_kw_th[rows],
        dry_bulb_c=days.dry_bulb_c[rows],
        wet_bulb_c=days.wet_bulb_c[rows],
        level_kw_th=days.course.level_kw_th[rows],
    )
    _, kept = truth.run(
        plant, driven, days.state.take(rows), dayfile.STEP_MINUTES, lambda step: order.at(step, acting)
    )
    kept["power_kw"] = kept["power_kw"] * days.course.plant_factor[rows]
    without = {name: values[:count] for name, values in kept.items()}
    with_event = {name: values.copy() for name, values in without.items()}
    for name, values in kept.items():
        with_event[name][called] = values[count:]
    return with_event, without


def _day(days: Days, instant: np.datetime64) -> np.datetime64:
    """Start of the local day that holds `instant`."""
    at = int(np.searchsorted(days.times, instant, side="right")) - 1
    same: Ints = np.flatnonzero(days.local.day == days.local.day[at])
    return np.datetime64(days.times[same[0]])


def _gap_site(days: Days, order: Acts, windows: pd.DataFrame) -> str:
    able = days.hidden[
        days.hidden["site_id"].isin(windows["site_id"]) & (days.hidden["site_id"] != order.declined)
    ]
    return str(able.sort_values("gap_rank")["site_id"].iloc[0])


def _map(folder: Path, days: Days) -> pd.DataFrame:
    table = read_table(folder, "meter_map")
    if table is None:
        return pd.DataFrame(
            {"meter_id": days.site_ids, "site_id": days.site_ids, "role": "building", "sign": 1, "part": 1.0}
        )
    return readings.parts(table)


def _readings(folder: Path, days: Days, with_event: dict[str, Floats], kept: Bools) -> pd.DataFrame:
    return readings.meters(
        _map(folder, days), days.site_ids, days.times[kept], with_event["power_kw"][:, kept],
        days.course.rest_kw[:, kept],
    )  # fmt: skip


def _with_gap(folder: Path, frame: pd.DataFrame, site: str, windows: pd.DataFrame) -> pd.DataFrame:
    """Readings with the building meters of `site` missing over the start of its window."""
    start = windows.set_index("site_id").loc[[site], "window_start"].iloc[0]
    step = pd.Timedelta(minutes=calendar.STEP_MINUTES)
    table = read_table(folder, "meter_map")
    if table is None:
        meters = [site]
    else:
        meters = table.loc[(table["site_id"] == site) & (table["role"] == "building"), "meter_id"].to_list()
    gone = frame["meter_id"].isin(meters) & frame["interval_start"].between(
        start - GAP_INTERVALS[0] * step, start + (GAP_INTERVALS[1] - 1) * step
    )
    quality = frame["quality"].astype(object).where(~gone, "missing")
    return frame.assign(kw=frame["kw"].where(~gone), quality=quality)


def _truth(days: Days, with_event: dict[str, Floats], without: dict[str, Floats]) -> pd.DataFrame:
    count = len(days.times)
    columns = {
        "with_event_kw": with_event["power_kw"] + days.course.rest_kw,
        "without_event_kw": without["power_kw"] + days.course.rest_kw,
        "plant_with_event_kw": with_event["power_kw"],
        "plant_without_event_kw": without["power_kw"],
        "inventory_with_event_kwh_th": with_event["inventory"],
        "inventory_without_event_kwh_th": without["inventory"],
        "zone_rise_with_event_k": with_event["air_k"],
        "zone_rise_without_event_k": without["air_k"],
    }
    keys = {
        "site_id": np.repeat(days.site_ids.to_numpy(), count),
        "interval_start": utc(np.tile(days.times, len(days.site_ids))),
    }
    return pd.DataFrame({**keys, **{name: values.ravel() for name, values in columns.items()}})
