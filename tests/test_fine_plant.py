"""Quotes held against a second judge: whole plants minute by minute (reference/fine_plant.py), 200 cases.

A third of the cases is limited by the tank, a third by comfort; sites, weather, loads and candidates are random.
"""

from functools import cache

import numpy as np
import pytest
from fine_cases import TANK_CAUSES, Cases, Compared, cases, compare
from reference import fine_plant, fine_tanks
from scipy.integrate import solve_ivp

SEED = 2
THIRDS = (67, 67, 66)


@cache
def judged() -> tuple[Cases, Compared]:
    given = cases(SEED, THIRDS)
    return given, compare(given)


def test_a_third_of_the_cases_is_limited_by_the_tank_and_a_third_by_comfort() -> None:
    given, _ = judged()
    assert np.isin(given.cause, TANK_CAUSES).sum() == 67
    assert (given.cause == "comfort").sum() == 67
    assert len(given.cause) == 200


def test_shed_is_within_5_percent_in_nine_of_ten_and_never_3_percent_over() -> None:
    _, both = judged()
    apart = both.shed_kwh / both.fine_shed_kwh - 1.0
    assert (np.abs(apart) <= 0.05).mean() >= 0.9
    assert apart.max() <= 0.03


def test_tank_discharge_is_within_5_percent_in_nine_of_ten() -> None:
    given, both = judged()
    used = both.fine_tank_kwh_th > 0.01 * np.maximum(given.plants.tank_kwh_th.sum(axis=1), 1.0)
    apart = (both.tank_kwh_th / np.maximum(both.fine_tank_kwh_th, 1e-9) - 1.0)[used]
    assert used.sum() > 100
    assert (np.abs(apart) <= 0.05).mean() >= 0.9
    assert apart.max() <= 0.03


@pytest.mark.slow
@pytest.mark.parametrize("seed", [202, 204, 207, 208])
def test_other_cases_are_judged_alike(seed: int) -> None:
    given = cases(seed, THIRDS)
    both = compare(given)
    shed = both.shed_kwh / both.fine_shed_kwh - 1.0
    used = both.fine_tank_kwh_th > 0.01 * np.maximum(given.plants.tank_kwh_th.sum(axis=1), 1.0)
    tank = (both.tank_kwh_th / np.maximum(both.fine_tank_kwh_th, 1e-9) - 1.0)[used]
    for apart in (shed, tank):
        assert (np.abs(apart) <= 0.05).mean() >= 0.9
        assert apart.max() <= 0.03
    assert (both.fine_rise_k - both.rise_k).max() <= 0.3


def test_the_zone_never_gets_more_than_0_3_k_warmer_than_quoted() -> None:
    _, both = judged()
    assert (both.fine_rise_k - both.rise_k).max() <= 0.3
    assert both.fine_rise_k.max() > 1.5


def test_the_judge_keeps_energy_and_knows_published_numbers() -> None:
    """Brine 12 to 4 degC: LMTD 7.28191 K and 165.16 kW from a full 370.61 kWh tank (Strand 1992, set A); the
    centrifugal's 1032.777 kW at 7.0/27.0 degC (DOE-2.1E record); both worked out apart from this code."""
    assert float(fine_plant.lmtd_k(np.array(12.0), np.array(4.0))) == pytest.approx(7.28191, abs=1e-5)
    curves = fine_plant.CURVES["water_cooled_centrifugal"]
    assert 1000.0 * float(fine_plant.surface(curves[2], 7.0, 27.0)) == pytest.approx(1032.777, abs=1e-3)
    given, _ = judged()
    plants = given.plants.until(240)
    never = (np.full(len(given.candidate), -1.0),) * 2
    run = fine_plant.run(plants, given.start_kwh_th, never, np.ones_like(plants.machine_kw_th), None)
    assert (run.held_kwh_th >= -1e-9).all()
    assert (run.held_kwh_th <= plants.tank_kwh_th.sum(axis=1)[:, None] + 1e-9).all()
    fell = given.start_kwh_th.sum(axis=1) - run.held_kwh_th[:, -1]
    drawn = run.discharge_kw_th.sum(axis=1) / 60.0
    lost = plants.loss_per_h.max(axis=1) * plants.tank_kwh_th.sum(axis=1) * 4.0
    idle = ~plants.charge_hours.any(axis=1) & (plants.strategy != "load_levelling")
    assert idle.sum() > 50
    assert (fell - drawn)[idle].min() >= -1e-6
    assert (fell - drawn - lost)[idle].max() <= 1e-6


def test_the_judges_steps_agree_with_an_adaptive_integrator() -> None:
    """Zone and melting tank of one case, minute by minute and by scipy's Runge-Kutta of order 8 at 1e-9."""
    given, _ = judged()
    kind = given.plants.tank_kind[:, 0]
    pick = np.flatnonzero((kind == "ice_internal_melt") & (given.plants.tank_kwh_th[:, 0] > 0.0))[:1]
    one = given.plants.take(pick)
    ca, cm = one.air_kwh_per_k[0], one.mass_kwh_per_k[0]
    k, h = one.coupling_kw_per_k[0], one.envelope_kw_per_k[0]

    def zone(_: float, x: np.ndarray) -> list[float]:
        return [(100.0 - h * x[0] - k * (x[0] - x[1])) / ca, k * (x[0] - x[1]) / cm]

    air, mass = np.zeros(1), np.zeros(1)
    for _ in range(180):
        air, mass = fine_plant.zone_step(one, air, mass, np.array([100.0]))
    exact = solve_ivp(zone, (0.0, 3.0), [0.0, 0.0], method="DOP853", rtol=1e-9, atol=1e-9).y[:, -1]
    np.testing.assert_allclose([air[0], mass[0]], exact, rtol=1e-6)

    tanks, held = fine_tanks.tanks_of(one), 0.9 * one.tank_kwh_th
    inlet, none = one.return_c, np.zeros_like(held)
    lmtd = fine_tanks.lmtd_k(inlet, one.supply_c)

    def melting(_: float, x: np.ndarray) -> np.ndarray:
        return -fine_tanks.melt_limit_kw_th(one, tanks, x[None, :], lmtd)[0]

    exact = solve_ivp(melting, (0.0, 2.0), held[0], method="DOP853", rtol=1e-9, atol=1e-9).y[:, -1]
    for _ in range(120):
        held = held - fine_tanks.most_kw_th(one, tanks, held, none, inlet) * fine_plant.STEP_H
    np.testing.assert_allclose(held[0], exact, rtol=1e-5)
    assert held.sum() < 0.7 * one.tank_kwh_th.sum()


def test_one_plant_alone_is_judged_as_among_others() -> None:
    given, _ = judged()
    plants = given.plants.until(120)
    pick = np.array([5])
    limit = np.ones_like(plants.machine_kw_th)
    window = (np.full(200, 30.0), np.full(200, 90.0))
    every = fine_plant.run(plants, given.start_kwh_th, window, limit * 0.5, None)
    one = fine_plant.run(
        plants.take(pick),
        given.start_kwh_th[pick],
        (window[0][pick], window[1][pick]),
        limit[pick] * 0.5,
        None,
    )
    np.testing.assert_allclose(one.power_kw[0], every.power_kw[5], rtol=1e-12)
