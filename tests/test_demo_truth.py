"""The finer model as a whole: energy kept, strategies as named, step length, one row like many."""

import ast
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from demo_folders import short_fleet

import demo_fleet
from demo_fleet import buildings, days, events, history, plant, plants, truth

EVENT = (np.datetime64("2026-07-15T13:00"), np.datetime64("2026-07-15T16:00"))


@pytest.fixture(scope="module")
def hot() -> days.Days:
    """The days around the event of forty sites, cut to a day and a half."""
    return events.truth_of(short_fleet(40).path, *EVENT, seed=None).until(140)


@pytest.fixture(scope="module")
def kept(hot: days.Days) -> dict[str, np.ndarray]:
    return days.run(hot)


def test_tanks_keep_their_energy(hot: days.Days, kept: dict[str, np.ndarray]) -> None:
    start = hot.state.inventory_kwh_th.sum(axis=1)
    flow = (kept["charge"] - kept["discharge"] - kept["loss"]) * 0.25
    np.testing.assert_allclose(
        start[:, None] + np.cumsum(flow, axis=1), kept["inventory"], rtol=1e-9, atol=1e-6
    )


def test_zones_keep_their_energy(hot: days.Days, kept: dict[str, np.ndarray]) -> None:
    """Load less cooling = heat stored in air and mass + heat to outdoors, over the whole run.

    The outdoor term needs the air's mean; bounded by its largest rise.
    """
    made, own = hot.made.plant, kept
    net = (hot.course.cooling_load_kw_th - own["direct"] - own["discharge"]).sum(axis=1) * 0.25
    stored = made.air_kwh_per_k * own["air_k"][:, -1] + made.mass_kwh_per_k * own["mass_k"][:, -1]
    out = net - stored
    most = made.envelope_kw_per_k * own["air_k"].max(axis=1).clip(0.0) * 35.0
    assert (out >= -1e-6 * np.maximum(np.abs(net), 1.0)).all()
    assert (out <= most + 1e-6 * np.maximum(np.abs(net), 1.0)).all()


def test_cooling_that_is_asked_for_is_direct_or_from_tanks_or_unmet(kept: dict[str, np.ndarray]) -> None:
    np.testing.assert_allclose(
        kept["direct"] + kept["discharge"] + kept["unmet"], kept["demand"], rtol=1e-9, atol=1e-6
    )


def test_inventory_stays_between_empty_and_full(hot: days.Days, kept: dict[str, np.ndarray]) -> None:
    capacity = hot.made.plant.tank_kwh_th.sum(axis=1)[:, None]
    assert (kept["inventory"] >= -1e-6).all()
    assert (kept["inventory"] <= capacity + 1e-6).all()


def rows_of(hot: days.Days, strategy: str) -> np.ndarray:
    return np.flatnonzero(hot.made.plant.strategy == plant.STRATEGIES.index(strategy))


def test_full_storage_runs_no_machine_on_peak(hot: days.Days, kept: dict[str, np.ndarray]) -> None:
    rows = rows_of(hot, "full_storage")
    on_peak = (hot.local.hour >= 14.0) & (hot.local.hour < 19.0)
    assert len(rows) == 2
    assert kept["direct"][rows][:, on_peak].max() < 0.02 * hot.made.plant.design_kw_th[rows].max()
    assert (kept["direct"][rows][:, (hot.local.hour >= 10) & (hot.local.hour < 13)] > 0.0).all()


def test_chiller_priority_draws_on_tanks_only_when_machines_run_at_capacity(
    hot: days.Days, kept: dict[str, np.ndarray]
) -> None:
    rows = rows_of(hot, "chiller_priority")
    part = (kept["direct"] / hot.made.plant.capacity_kw_th.sum(axis=1)[:, None])[rows]
    drawing = kept["discharge"][rows] > 0.05 * hot.made.plant.design_kw_th[rows][:, None]
    assert drawing.sum() > 100
    assert part[drawing].min() > 0.8


def test_storage_priority_spreads_its_tank_over_the_peak(hot: days.Days, kept: dict[str, np.ndarray]) -> None:
    rows = [row for row in rows_of(hot, "storage_priority") if hot.made.plant.peak_from_hour[row] == 12.0]
    middle = (hot.local.hour >= 13.0) & (hot.local.hour < 17.0)
    drawn = kept["discharge"][rows][:, middle]
    assert (drawn.std(axis=1) < 0.1 * drawn.mean(axis=1)).all()


def test_load_levelling_keeps_its_machines_flat_by_day(hot: days.Days, kept: dict[str, np.ndarray]) -> None:
    rows = rows_of(hot, "load_levelling")
    busy = (hot.local.hour >= 11.0) & (hot.local.hour < 16.0) & (np.arange(len(hot.times)) < 90)
    cooling = (kept["direct"] + kept["charge"])[rows][:, busy]
    assert (cooling.std(axis=1) < 0.03 * cooling.mean(axis=1)).all()


def test_one_row_is_like_many(hot: days.Days, kept: dict[str, np.ndarray]) -> None:
    row = 9
    few = hot.until(40)
    alone = replace(
        few,
        made=replace(few.made, plant=few.made.plant.take(np.array([row]))),
        course=type(few.course)(**{name: values[[row]] for name, values in few.course.__dict__.items()}),
        dry_bulb_c=few.dry_bulb_c[[row]],
        wet_bulb_c=few.wet_bulb_c[[row]],
        state=few.state.take(np.array([row])),
    )
    np.testing.assert_allclose(days.run(alone)["power_kw"][0], kept["power_kw"][row, :40], rtol=1e-9)


def test_history_step_and_event_step_give_the_same_energy(hot: days.Days) -> None:
    """Five-minute and one-minute steps over a day and a half: plant energy within one per cent a site."""
    driven = truth.Drive(
        np.broadcast_to(hot.local.hour, hot.dry_bulb_c.shape),
        hot.course.cooling_load_kw_th,
        hot.dry_bulb_c,
        hot.wet_bulb_c,
        hot.course.level_kw_th,
    )
    fine, coarse = (
        truth.run(hot.made.plant, driven, hot.state, minutes)[1]["power_kw"].sum(axis=1) for minutes in (1, 5)
    )
    np.testing.assert_allclose(coarse, fine, rtol=0.01)


def test_plants_serve_their_design_day_and_are_refilled() -> None:
    rng = np.random.default_rng(5)
    plan = buildings.mix(40)
    sites = pd.concat([buildings.buildings(plan, rng), plants.habits(plan)], axis=1)
    sized = plants.size(sites, plan, rng)
    _, _, load = buildings.design_day(sites)
    np.testing.assert_allclose(load.max(axis=1), sites["peak_cooling_kw_th"], rtol=1e-9)
    assert sized.worst_unmet_fraction.max() < 0.01
    assert sized.refilled_fraction.min() > 0.97
    smaller = plants.single(sites, plan, sized.machines_kw_th * 0.75, sized.tanks_kwh_th * 0.75)
    unmet, refilled = plants.try_design_day(sites, smaller, load)
    partial = (plan["strategy"] == "chiller_priority").to_numpy()
    assert ((unmet > 0.01) | (refilled < 0.97))[partial].mean() > 0.8


def test_days_of_history_follow_on_each_other(hot: days.Days) -> None:
    """Two days run as two rows against the same two days run through: power within two per cent of the peak."""
    short = hot.until(96)
    twice = type(short.course)(
        **{name: np.tile(values, (1, 2)) for name, values in short.course.__dict__.items()}
    )
    hour, dry, wet = (np.tile(values, 2) for values in (short.local.hour, short.dry_bulb_c, short.wet_bulb_c))
    none = np.zeros((40, 2), dtype=bool)
    driven = history.drive(hour, twice, dry, wet, 2)
    apart = history.history(
        hot.made.plant, driven, 2, none, np.zeros((40, hot.made.plant.capacity_kw_th.shape[1], 2), dtype=bool)
    )
    through = truth.Drive(
        np.broadcast_to(hour, dry.shape), twice.cooling_load_kw_th, dry, wet, twice.level_kw_th
    )
    _, run = truth.run(hot.made.plant, through, plant.rested(hot.made.plant, 0.9), 5)
    worst = np.abs(apart.plant_kw - run["power_kw"])[:, 96:].mean(axis=1) / run["power_kw"].max(axis=1)
    assert np.median(worst) < 0.005
    assert worst.max() < 0.05


def test_this_package_knows_nothing_of_the_fleet_and_only_units_of_sites() -> None:
    for path in Path(demo_fleet.__file__).parent.glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            names = []
            if isinstance(node, ast.ImportFrom):
                names = [node.module or ""]
            elif isinstance(node, ast.Import):
                names = [alias.name for alias in node.names]
            for name in names:
                assert not name.startswith("fleet"), f"{path.name} imports {name}"
                assert not name.startswith("sites") or name == "sites.units", f"{path.name} imports {name}"
