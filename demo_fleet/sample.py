"""Writes an invented fleet folder: tables, months of meter history up to the call, and the hidden truth.

Owns the order of work and which table gets what; every noun has its own file. All from one seed.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Final

import numpy as np
import pandas as pd

from demo_fleet import calendar, course, history, network, papers, readings
from demo_fleet import days as dayfile
from demo_fleet import hidden as hidden_file
from demo_fleet import weather as weather_file
from demo_fleet.buildings import buildings, mix, rest_kw
from demo_fleet.calendar import Local
from demo_fleet.days import Days
from demo_fleet.files import DemoError, naive, utc, write_csv, write_parquet, write_text
from demo_fleet.hidden import Made
from demo_fleet.plant import State, rested
from demo_fleet.plants import chillers, habits, size, tanks
from sites.units import Bools, Floats, Ints, Times

Progress = Callable[[str, float], None]
BLOCK: Final = 40
"""Sites whose history is made at once."""
RECENT_DAYS: Final = 14
"""Load forecasts are quarter-hourly, and loads of nodes given, from so many days before the event."""
LARGE: Final = 100
"""Fleets of more sites carry no load forecasts older than RECENT_DAYS."""


@dataclass(frozen=True)
class SampleFacts:
    """What was written, for a first call."""

    path: Path
    sites: int
    seed: int
    event_day: str
    called_at: np.datetime64
    event_from: np.datetime64
    event_to: np.datetime64
    node_id: str
    """a node with about two thirds of the fleet"""
    meter_rows: int
    plant_peak_kw: float
    """highest quarter-hour of all plants together in the history"""


@dataclass(frozen=True)
class _World:
    """Everything drawn before any history is run."""

    seed: int
    scene: calendar.Scene
    times: Times
    local: Local
    called: int
    """index of the first interval at or after the call"""
    finer: int
    """index from which the one-minute model takes over"""
    made: Made
    sites: pd.DataFrame
    """as written"""
    hidden: pd.DataFrame
    station: Ints
    weather: weather_file.Weather
    city: Floats
    tank_out: int
    machine_out: int

    @property
    def days(self) -> int:
        return self.finer // history.QUARTERS_A_DAY


def sample(
    path: Path,
    sites: int = 40,
    seed: int = 1,
    progress: Progress | None = None,
    history_days: int | None = None,
    scene: calendar.Scene = calendar.EVENING,
) -> SampleFacts:
    """Write a fleet folder of `sites` invented sites to `path`, ready for the call of `scene`; DemoError where it is
    not empty.

    The history starts on calendar.HISTORY_FROM, or `history_days` before the event (at least 3).
    """
    if path.exists() and any(path.iterdir()):
        raise DemoError(f"{path} is not empty; name a new folder, nothing was written")
    if sites < 1:
        raise DemoError(f"a fleet of {sites} sites cannot be made; ask for 1 or more")
    first = calendar.HISTORY_FROM
    if history_days is not None:
        first = calendar.next_day(calendar.EVENT_DAY, -max(history_days, 3))
    tell = progress or (lambda text, share: None)
    tell("buildings and plants", 0.0)
    world, tables = _world(sites, seed, first, scene)
    billed, rows, peak, last = _histories(path, world, tell)
    tell("the last hours in minutes", 0.85)
    late = _finer(path, world, last)
    rows += late[1]
    tell("tables", 0.93)
    july = np.maximum(billed, late[0].max(axis=1))
    _write_tables(path, world, tables, july, late[2])
    tell("done", 1.0)
    return SampleFacts(
        path=path, sites=sites, seed=seed, event_day=calendar.EVENT_DAY,
        called_at=calendar.moment(calendar.EVENT_DAY, scene.call_hour),
        event_from=calendar.moment(calendar.EVENT_DAY, scene.from_hour),
        event_to=calendar.moment(calendar.EVENT_DAY, scene.to_hour),
        node_id=network.SUBSTATIONS[0], meter_rows=rows, plant_peak_kw=float(peak),
    )  # fmt: skip


def _world(
    count: int, seed: int, first: str, scene: calendar.Scene
) -> tuple[_World, dict[str, pd.DataFrame]]:
    rng = np.random.default_rng([seed, 1])
    plan = mix(count)
    sites = pd.concat([buildings(plan, rng), habits(plan)], axis=1)
    sized = size(sites, plan, rng)
    machines, vessels = chillers(sites, plan, sized, rng), tanks(sites, plan, sized)
    peak = sites["peak_cooling_kw_th"].to_numpy(dtype=np.float64)
    feeder = network.feeder_of(peak, rng)
    station = np.arange(count) % len(weather_file.STATIONS)
    sites = _contracts(sites, plan, feeder, station, rng)
    hidden = hidden_file.draw(sites["site_id"], seed)
    start = calendar.midnight(first)
    end = calendar.midnight(calendar.next_day(calendar.EVENT_DAY, 2))
    times = calendar.quarters(start, end)
    called_at = calendar.moment(calendar.EVENT_DAY, scene.call_hour)
    before = calendar.midnight(calendar.next_day(calendar.EVENT_DAY, -1))
    finer = (
        -(-int((before - start) / np.timedelta64(15, "m")) // history.QUARTERS_A_DAY) * history.QUARTERS_A_DAY
    )
    stored = np.flatnonzero(
        (plan["strategy"] == "chiller_priority") & (plan["tanks"] > 0) & ~sites["no_unmet"]
    )
    spare = sized.machines_kw_th * (1.0 - 1.0 / plan["chillers"].to_numpy()) / peak
    spare = np.where(sites["no_unmet"], 0.0, spare)
    world = _World(
        seed=seed, scene=scene, times=times, local=calendar.local(times),
        called=int((called_at - start) / np.timedelta64(15, "m")), finer=finer,
        made=hidden_file.made(sites, machines, vessels, hidden), sites=sites, hidden=hidden, station=station,
        weather=weather_file.weather(times, called_at, np.random.default_rng([seed, 2]), scene.peak_c),
        city=course.city_noise(len(times), np.random.default_rng([seed, 3])),
        tank_out=int(stored[min(5, len(stored) - 1)]) if len(stored) else 0,
        machine_out=int(np.argmax(spare)),
    )  # fmt: skip
    return world, {"chillers": machines, "tanks": vessels}


def _contracts(
    sites: pd.DataFrame, plan: pd.DataFrame, feeder: Ints, station: Ints, rng: np.random.Generator
) -> pd.DataFrame:
    """The rest of the sites table: where a site hangs, what it is paid, its limits; some cells stay empty."""
    number = np.arange(len(sites))
    midday, stored = (plan["charging"] == "midday").to_numpy(), (plan["tanks"] > 0).to_numpy()
    peak = sites["peak_cooling_kw_th"].to_numpy(dtype=np.float64)
    full = sites.assign(
        node_id=np.array(network.FEEDERS)[feeder],
        tariff_id=np.where(midday, "solar", np.where(number % 4 == 3, "large", "general")),
        station_id=np.array(weather_file.STATIONS)[station],
        held_back_kwh_th=np.where((number % 9 == 5) & stored, np.round(0.1 * peak, -1), 0.0),
        notice_minutes=np.where(number % 10 == 6, 60, 120),
        calls_per_season=pd.array(np.where(number % 6 == 2, 10.0, np.nan)).astype("Int64"),
        hours_per_season=np.where(number % 7 == 4, 40.0, np.nan),
        call_fee=rng.choice([0.0, 25.0, 40.0], len(sites)),
        comfort_payment_per_kwh_th=rng.choice([0.0, 0.05, 0.10], len(sites)),
        demand_price_per_kw=rng.choice([4.5, 6.0, 8.0], len(sites)),
        delivery_factor=np.round(rng.uniform(1.02, 1.06, len(sites)), 3),
        site_words=np.where(
            number % 8 == 4, "units=us; contact=duty engineer, extension 4107", "contact=plant desk"
        ),
    )
    full.loc[number % 5 == 4, ["coupling_kw_per_k", "envelope_kw_per_k"]] = np.nan
    full.loc[(number % 12 == 8) & (number > 8), "floor_area_m2"] = np.nan
    first = ["site_id", "node_id", "tariff_id", "station_id"]
    return full[first + [name for name in full.columns if name not in first]]


def _block_course(world: _World, block: Ints) -> tuple[course.Course, Floats, Floats]:
    """True course of a block of sites over all times, and dry and wet bulb there, (N, T)."""
    dry, wet = world.weather.dry_bulb_c[world.station[block]], world.weather.wet_bulb_c[world.station[block]]
    rng = np.random.default_rng([world.seed, 4, int(block[0])])
    sites = world.made.sites.iloc[block].reset_index(drop=True)
    return course.course(sites, world.hidden, world.local, dry, world.city, rng), dry, wet


def _outages(world: _World, block: Ints) -> tuple[Bools, Bools]:
    """Tanks (N, D) and machines (N, M, D) that stood still in the history."""
    day = world.local.day[0].astype("datetime64[D]") + np.arange(world.days)
    out_from = np.datetime64(calendar.TANK_OUT_FROM, "D")
    week = (day >= out_from) & (day < out_from + calendar.TANK_OUT_DAYS)
    lately = day >= np.datetime64(calendar.next_day(calendar.EVENT_DAY, -1), "D")
    last = world.made.chiller_id.shape[1] - 1
    machine = np.zeros((len(block), last + 1, world.days), dtype=np.bool_)
    used = (world.made.plant.capacity_kw_th[world.machine_out] > 0.0).sum() - 1
    machine[:, used] = (block == world.machine_out)[:, None] & lately
    return (block == world.tank_out)[:, None] & week, machine


def _histories(path: Path, world: _World, tell: Progress) -> tuple[Floats, int, float, State]:
    """Run and write the history of all sites, block by block.

    Returns each site's July peak of the building, rows written, the fleet's plant peak and the end state.
    """
    table = readings.meter_map(world.sites["site_id"])
    count, rows = len(world.sites), 0
    total = np.zeros(world.finer)
    july = world.local.day[: world.finer] >= np.datetime64(calendar.CYCLE_START, "D").astype(np.int64)
    billed: list[Floats] = []
    last: list[State] = []
    for start in range(0, count, BLOCK):
        tell("history of the meters", 0.05 + 0.8 * start / count)
        block = np.arange(start, min(start + BLOCK, count))
        true, dry, wet = _block_course(world, block)
        past = true.part(0, world.finer)
        driven = history.drive(
            world.local.hour[: world.finer], past, dry[:, : world.finer], wet[:, : world.finer], world.days
        )
        run = history.history(world.made.plant.take(block), driven, world.days, *_outages(world, block))
        plant = run.plant_kw * past.plant_factor
        ids = world.sites["site_id"].iloc[block]
        frame = readings.meters(table, ids, world.times[: world.finer], plant, past.rest_kw)
        write_parquet(frame, path / "meters" / f"history-{start // BLOCK:03d}.parquet")
        _write_loads(path, world, block, true)
        window = true.part(world.finer, len(world.times))
        write_parquet(
            course.table(ids, world.times[world.finer :], window),
            path / ".truth" / f"course-{start // BLOCK:03d}.parquet",
        )
        rows += len(frame)
        total += plant.sum(axis=0)
        billed.append((plant + past.rest_kw)[:, july].max(axis=1))
        last.append(run.last)
    state = State(**{name: np.concatenate([getattr(one, name) for one in last]) for name in last[0].__dict__})
    return np.concatenate(billed), rows, float(total.max()), state


def _write_loads(path: Path, world: _World, block: Ints, true: course.Course) -> None:
    """Forecast loads of a block: hourly up to a fortnight before the event, quarter-hourly from there."""
    rng = np.random.default_rng([world.seed, 5, int(block[0])])
    sites = world.made.sites.iloc[block].reset_index(drop=True)
    dry = world.weather.forecast_dry_bulb_c[world.station[block]]
    load = course.forecast(sites, world.local, dry, rng)
    load[(block % 13 == 5) | (block % 13 == 12)] = np.nan
    rest = rest_kw(sites, world.local)
    recent = calendar.midnight(calendar.next_day(calendar.EVENT_DAY, -RECENT_DAYS))
    late = world.times >= recent
    hourly = ~late & (world.times.astype("datetime64[h]") == world.times)
    if len(world.sites) > LARGE:
        hourly[:] = False
    kept = late | hourly
    mean = np.where(hourly, _hour_means(load), load)[:, kept]
    mean_rest = np.where(hourly, _hour_means(rest), rest)[:, kept]
    frame = pd.DataFrame(
        {
            "site_id": pd.Categorical.from_codes(  # type: ignore[call-overload]
                np.repeat(np.arange(len(block)), kept.sum()), categories=sites["site_id"].to_list()
            ),
            "interval_start": utc(np.tile(world.times[kept], len(block))),
            "cooling_load_kw_th": np.round(mean.ravel(), 1),
            "rest_kw": np.round(mean_rest.ravel(), 1),
        }
    )
    write_parquet(frame, path / "loads" / f"forecast-{int(block[0]) // BLOCK:03d}.parquet")


def _hour_means(values: Floats) -> Floats:
    """Mean of the four quarters from each interval on, (N, T)."""
    padded = np.concatenate([values, np.repeat(values[:, -1:], 3, axis=1)], axis=1)
    return np.asarray(sum(padded[:, i : i + values.shape[1]] for i in range(4)) / 4.0)


def _days(path: Path, world: _World, last: State) -> Days:
    """The days around the event, the machine that is out included."""
    frames = [pd.read_parquet(file) for file in sorted((path / ".truth").glob("course-*.parquet"))]
    times, true = course.from_table(pd.concat(frames, ignore_index=True), world.sites["site_id"])
    dry, wet = (
        values[world.station][:, world.finer :]
        for values in (world.weather.dry_bulb_c, world.weather.wet_bulb_c)
    )
    plant = world.made.plant
    up = plant.machine_up.copy()
    up[world.machine_out, (plant.capacity_kw_th[world.machine_out] > 0.0).sum() - 1] = False
    made = replace(world.made, plant=replace(plant, machine_up=up))
    state = replace(rested(plant), inventory_kwh_th=last.inventory_kwh_th)
    return Days(made, world.hidden, times, calendar.local(times), true, dry, wet, state)


def _finer(path: Path, world: _World, last: State) -> tuple[Floats, int, Floats]:
    """One-minute run up to the call: building kW (N, T), meter rows written, inventory (N, T)."""
    whole = _days(path, world, last)
    days = whole.until(world.called - world.finer)
    kept = dayfile.run(days)
    table = readings.meter_map(world.sites["site_id"])
    frame = readings.meters(table, days.site_ids, days.times, kept["power_kw"], days.course.rest_kw)
    write_parquet(frame, path / "meters" / "recent.parquet")
    weather = weather_file.table(world.weather, forecast=False)
    weather = weather[naive(weather["interval_start"]) >= world.times[world.finer]]
    dayfile.write(whole, path / ".truth", world.seed, weather)
    return kept["power_kw"] + days.course.rest_kw, len(frame), kept["inventory"]


def _write_tables(
    path: Path, world: _World, tables: dict[str, pd.DataFrame], july_kw: Floats, inventory_kwh_th: Floats
) -> None:
    sites, ids = world.sites, world.sites["site_id"]
    rng = np.random.default_rng([world.seed, 6])
    window, until = world.times[world.finer :], world.called - world.finer
    station = world.weather.forecast_dry_bulb_c[0]
    fleet_peak = np.zeros(len(network.FEEDERS))
    np.add.at(fleet_peak, pd.Index(network.FEEDERS).get_indexer(pd.Index(sites["node_id"])), july_kw)
    recent = world.times >= calendar.midnight(calendar.next_day(calendar.EVENT_DAY, -RECENT_DAYS))
    near = Local(**{name: values[recent] for name, values in world.local.__dict__.items()})
    others = network.other_kw(near, station[recent], fleet_peak)
    machine_out = (
        world.machine_out if (world.made.plant.capacity_kw_th[world.machine_out] > 0.0).sum() > 1 else -1
    )
    write_csv(sites, path / "sites.csv")
    write_csv(tables["chillers"], path / "chillers.csv")
    if len(tables["tanks"]):
        write_csv(tables["tanks"], path / "tanks.csv")
    write_csv(network.nodes(fleet_peak, others), path / "nodes.csv")
    write_csv(network.node_loads(world.times[recent], others), path / "node_loads.csv")
    write_csv(weather_file.table(world.weather, forecast=True), path / "weather.csv")
    write_csv(papers.tariffs(world.times, world.local, world.scene.sun_price_per_kwh), path / "tariffs.csv")
    write_csv(papers.bills(ids, july_kw), path / "bills.csv")
    write_csv(
        papers.status(world.made, inventory_kwh_th, window, until, machine_out, rng), path / "status.csv"
    )
    write_csv(papers.holidays(), path / "holidays.csv")
    write_csv(papers.plant_days(ids[world.tank_out], ids[world.machine_out]), path / "plant_days.csv")
    write_csv(readings.meter_map(ids).drop(columns="part"), path / "meter_map.csv")
    write_text(papers.fleet_toml(world.scene), path / "fleet.toml")
