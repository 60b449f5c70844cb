"""The plant through a horizon: balances, limits and strategies, for every kind of made-up site."""

from functools import cache

import numpy as np
import pytest
from made_sites import SITES, made_outlook, made_roster, made_standing

from sites.candidate import Stages, no_stages
from sites.conditions import conditions
from sites.course import Course
from sites.plant import at_rest, simulate
from sites.quote import ground
from sites.roster import STRATEGIES
from sites.rows import plants

STEP_H = 0.25


@cache
def usual_course() -> tuple[Course, object, object]:
    roster = made_roster()
    outlook = made_outlook(roster)
    base = ground(roster, outlook, made_standing(roster))
    return base.usual, roster, outlook


@cache
def event_course(fraction: float = 0.9) -> tuple[Course, Course, object]:
    """Every site with all machines off from 16:00 to 17:30, beside its usual case."""
    roster = made_roster()
    outlook = made_outlook(roster)
    standing = made_standing(roster, fraction)
    base = ground(roster, outlook, standing)
    rows = np.arange(roster.count)
    stages = Stages(
        np.full((roster.count, 1), 12), np.full((roster.count, 1), 18), np.zeros((roster.count, 1, 3))
    )
    taken = plants(roster, base.here, standing.tank_available, rows)
    run = simulate(taken, base.here, stages, at_rest(standing.best_kwh_th), base.usual.as_usual)
    return run, base.usual, roster


def test_cooling_and_inventory_balance_in_every_interval() -> None:
    run, _, _ = event_course()
    given = run.direct_kw_th.sum(axis=1) + run.discharge_kw_th.sum(axis=1) + run.unmet_kw_th
    np.testing.assert_allclose(given, run.load_kw_th + run.pull_down_kw_th, rtol=1e-12, atol=1e-9)
    step = (run.charge_kw_th - run.discharge_kw_th - run.loss_kw_th) * STEP_H
    np.testing.assert_allclose(run.inventory_kwh_th - run.inventory_start_kwh_th, step, atol=1e-9)
    np.testing.assert_allclose(run.into_tank_kw_th.sum(axis=1), run.charge_kw_th.sum(axis=1), atol=1e-9)


def test_tank_limits_hold_at_end_of_interval_inventory() -> None:
    run, _, roster = event_course()
    capacity = roster.tanks.capacity_kwh_th[:, :, None]
    assert (run.discharge_kw_th <= run.discharge_limit_kw_th + 1e-9).all()
    assert (run.inventory_kwh_th >= -1e-9).all()
    assert (run.inventory_kwh_th <= capacity + 1e-9).all()
    assert run.discharge_kw_th.max() > 100.0


def test_conservation_identity_with_loss_drift_and_recharge_present() -> None:
    """Event less usual: machine cooling = inventory + losses - zone storage - envelope (first law)."""
    run, usual, roster = event_course()
    chiller = ((run.chiller_kw_th - usual.chiller_kw_th) * STEP_H).sum(axis=1)
    stored = (run.inventory_kwh_th - usual.inventory_kwh_th)[:, :, -1].sum(axis=1)
    lost = ((run.loss_kw_th - usual.loss_kw_th) * STEP_H).sum(axis=(1, 2))
    zone = (
        roster.buildings.air_kwh_per_k * run.air_rise_k[:, -1]
        + roster.buildings.mass_kwh_per_k * run.mass_rise_k[:, -1]
    )
    walls = roster.buildings.envelope_kw_per_k * (run.air_mean_rise_k * STEP_H).sum(axis=1)
    terms = np.abs(np.stack([chiller, stored, lost, zone, walls])).max(axis=0)
    np.testing.assert_array_less(
        np.abs(chiller - (stored + lost - zone - walls)), 1e-9 * np.maximum(terms, 1.0)
    )
    has_tank = roster.tanks.exists.any(axis=1)
    recharge = run.charge_kw_th.sum(axis=(1, 2)) - usual.charge_kw_th.sum(axis=(1, 2))
    assert (run.loss_kw_th.sum(axis=(1, 2))[has_tank] > 0.0).all()
    assert (np.abs(recharge[has_tank]) > 0.0).any()
    assert run.air_rise_k.max() > 0.5


@pytest.mark.parametrize("row", range(len(SITES)))
def test_one_site_alone_is_the_same_as_among_others(row: int) -> None:
    together, _, _ = usual_course()
    roster = made_roster((row,))
    alone = ground(roster, made_outlook(roster), made_standing(roster)).usual
    np.testing.assert_allclose(alone.power_kw[0], together.power_kw[row], rtol=1e-12)
    np.testing.assert_allclose(alone.inventory_kwh_th[0], together.inventory_kwh_th[row], atol=1e-9)


def test_full_storage_keeps_its_machines_off_on_peak() -> None:
    usual, roster, outlook = usual_course()
    on_peak = (outlook.local_hour >= 12) & (outlook.local_hour < 20) & (np.arange(140) < 40)
    full = roster.buildings.strategy == STRATEGIES.index("full_storage")
    assert usual.chiller_kw_th[full][:, on_peak].max() == 0.0
    assert usual.power_kw[full][:, on_peak].max() < 0.05 * roster.chillers.capacity_kw_th.sum(axis=1)[full][0]


def test_load_levelling_runs_flat_while_its_tank_is_neither_full_nor_empty() -> None:
    """Energy Management Handbook ch. 19: a levelled plant makes the day's ton-hours / 24 in every hour."""
    usual, roster, outlook = usual_course()
    row = int(np.flatnonzero(roster.buildings.strategy == STRATEGIES.index("load_levelling"))[0])
    level = outlook.cooling_load_kw_th[row, :96].mean() + 3e-4 * roster.tanks.capacity_kwh_th[row].sum()
    held = usual.inventory_kwh_th[row].sum(axis=0)
    free = (held > 0.1 * roster.tanks.capacity_kwh_th[row].sum()) & (
        held < 0.95 * roster.tanks.capacity_kwh_th[row].sum()
    )
    assert free.sum() > 40
    np.testing.assert_allclose(usual.chiller_kw_th[row][free], level, rtol=1e-9)


def test_a_levelled_tank_comes_back_to_the_usual_level_and_not_beyond_it() -> None:
    """Overshooting it would be waited out in the next interval, and the machines would come and go with each."""
    run, usual, roster = event_course()
    row = int(np.flatnonzero(roster.buildings.strategy == STRATEGIES.index("load_levelling"))[0])
    after = slice(18, None)
    more = run.power_kw[row, after] - usual.power_kw[row, after]
    above = run.inventory_kwh_th[row].sum(axis=0)[after] - usual.inventory_kwh_th[row].sum(axis=0)[after]
    assert more.max() > 20.0
    assert more.min() > -1.0
    assert above[0] < -50.0
    assert above.max() < 1e-6


def test_storage_priority_spreads_its_tank_over_the_on_peak_hours() -> None:
    usual, roster, outlook = usual_course()
    row = 2
    inside = np.flatnonzero((outlook.local_hour >= 13) & (outlook.local_hour < 20) & (np.arange(140) < 28))
    drawn = usual.discharge_kw_th[row].sum(axis=0)[inside]
    flat = 0.9 * roster.tanks.capacity_kwh_th[row].sum() / 7.0
    np.testing.assert_allclose(drawn[:12], flat, rtol=0.02)
    assert usual.inventory_kwh_th[row].sum(axis=0)[inside[-1]] < 0.1 * roster.tanks.capacity_kwh_th[row].sum()


def test_chiller_priority_uses_the_tank_only_for_what_machines_cannot() -> None:
    usual, roster, _ = usual_course()
    row = 1
    drawn = usual.discharge_kw_th[row].sum(axis=0)
    short = usual.load_kw_th[row] - usual.direct_kw_th[row].sum(axis=0)
    np.testing.assert_allclose(drawn, short, atol=1e-9)
    assert drawn.max() > 0.0
    assert roster.tanks.exists[row].any()


def test_one_of_two_half_loaded_machines_off_is_hardly_a_shed() -> None:
    """Two equal centrifugals at half load, one off: the other takes the load and power hardly moves."""
    roster = made_roster((4,), stage_up_fraction=0.4, aux=0.0)
    chillers = roster.chillers
    for name, value in (("capacity_kw_th", [[500.0, 500.0, 0.0]]), ("exists", [[True, True, False]])):
        object.__setattr__(chillers, name, np.array(value))
    object.__setattr__(roster.tanks, "capacity_kwh_th", np.zeros((1, 2)))
    object.__setattr__(roster.tanks, "exists", np.zeros((1, 2), dtype=np.bool_))
    object.__setattr__(roster.buildings, "strategy", np.array([STRATEGIES.index("chiller_priority")]))
    outlook = made_outlook(roster)
    outlook.cooling_load_kw_th[:] = 460.0
    standing = made_standing(roster)
    here = conditions(roster, outlook, standing)
    rows = plants(roster, here, standing.tank_available, np.array([0]))
    both = simulate(rows, here, no_stages(1, 3), at_rest(standing.best_kwh_th), None)
    one_off = Stages(np.array([[12]]), np.array([[24]]), np.array([[[1.0, 0.0, 1.0]]]))
    one = simulate(rows, here, one_off, at_rest(standing.best_kwh_th), both.as_usual)
    assert (both.direct_kw_th[0, :2, 12] > 0.0).all()
    assert one.direct_kw_th[0, 1, 12] == 0.0
    assert one.unmet_kw_th.max() == 0.0
    change = one.power_kw[0, 12:24] - both.power_kw[0, 12:24]
    assert np.abs(change).max() < 0.06 * both.power_kw[0, 12]


def test_pull_down_brings_the_zone_back_without_a_step() -> None:
    run, _, _ = event_course()
    warm = run.air_rise_k[:, 17] > 0.3
    assert warm.any()
    assert (run.air_rise_k[warm, -1] < 0.05).all()
    assert (np.diff(run.air_rise_k[warm, 17:24], axis=1) <= 1e-9).all()
