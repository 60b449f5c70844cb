"""The finer model's parts: chiller, tank, zone, weather."""

import numpy as np
import psychrolib
import pytest
from scipy.integrate import quad, solve_ivp
from scipy.optimize import brentq

from demo_fleet import machine, room, store, weather

AIR = np.array([[True, False]])


def at_rating() -> np.ndarray:
    return np.array([[machine.AIR_REFERENCE_C, machine.TOWER_REFERENCE_C]])


def test_rating_is_reproduced_exactly() -> None:
    leaving = np.array([machine.LEAVING_REFERENCE_C])
    np.testing.assert_allclose(machine.capacity_fraction(AIR, leaving, at_rating()), 1.0, rtol=1e-14)
    np.testing.assert_allclose(machine.eir_fraction(AIR, leaving, at_rating()), 1.0, rtol=1e-14)
    np.testing.assert_allclose(machine.part_load_fraction(AIR, np.array([[1.0, 1.0]])), 1.0, rtol=1e-12)


def test_part_load_rises_from_nothing_and_cycles_below_a_tenth() -> None:
    load = np.linspace(0.0, 1.0, 101)[:, None] * np.ones((1, 2))
    power = machine.part_load_fraction(AIR, load)
    assert (power[0] == 0.0).all()
    assert (np.diff(power, axis=0) > 0.0).all()
    np.testing.assert_allclose(power[5], 0.5 * power[10], rtol=1e-12)


def test_ice_making_costs_capacity_and_power() -> None:
    brine, slope = np.array([-5.0]), np.full((1, 2), 0.037)
    share = machine.ice_capacity_fraction(AIR, brine, at_rating(), slope)
    at_five = machine.capacity_fraction(AIR, np.array([5.0]), at_rating())
    np.testing.assert_allclose(share / at_five, 0.63, rtol=1e-12)
    dearer = machine.ice_eir_fraction(AIR, brine, at_rating(), np.full((1, 2), 0.028))
    np.testing.assert_allclose(
        dearer / machine.eir_fraction(AIR, np.array([5.0]), at_rating()), 1 / 0.72, rtol=1e-12
    )


def test_cold_air_below_head_pressure_control_gains_nothing() -> None:
    feel = [
        machine.condenser_c(AIR, np.full((1, 2), 4.0), np.array([dry]), np.array([wet]))[0, 0]
        for dry, wet in ((10.0, 8.0), (26.0, 15.0), (30.0, 18.0))
    ]
    assert feel == [26.0, 26.0, 30.0]


@pytest.mark.parametrize("share", [0.9, 0.5, 0.2])
def test_tank_and_brine_loop_are_solved_together(share: float) -> None:
    """Q = UA LMTD = m cp (T_in - T_out): the closed form against a root search on the two equations."""
    capacity, inlet, supply, flow = 4000.0, 12.0, 5.0, 180.0
    ua = float(store.melt_ua_kw_per_k(np.array(0), np.array(capacity), np.array(share * capacity)))

    def gap(outlet: float) -> float:
        return ua * (inlet - outlet) / np.log(inlet / outlet) - flow * (inlet - outlet)

    outlet = brentq(gap, 1e-9, inlet - 1e-6)
    allowed = supply + store.WARM_BY_K
    expected = (
        flow * (inlet - outlet) if outlet <= allowed else ua * (inlet - allowed) / np.log(inlet / allowed)
    )
    given = store.melt_kw_th(np.array(ua), np.array(inlet), np.array(supply), np.array(flow))
    assert float(given) == pytest.approx(expected, rel=1e-9)


def test_draining_a_tank_by_minutes_follows_the_integral() -> None:
    """Four hours at full draw in steps of a minute against scipy's integration of dE/dt = -Q(E): within a
    thousandth of capacity, and half the step halves the error (first order)."""
    capacity, inlet, supply, flow = 4000.0, 12.0, 5.0, 400.0

    def draw(inventory: float) -> float:
        ua = store.melt_ua_kw_per_k(np.array(0), np.array(capacity), np.array(inventory))
        return float(store.melt_kw_th(ua, np.array(inlet), np.array(supply), np.array(flow)))

    exact = solve_ivp(lambda _, held: [-draw(held[0])], (0.0, 4.0), [capacity], rtol=1e-9, atol=1e-6).y[0, -1]

    def drained(steps: int) -> float:
        held = capacity
        for _ in range(steps):
            held -= draw(held) * 4.0 / steps
        return held

    error, half = exact - drained(240), exact - drained(480)
    assert 0.0 < error < 1e-3 * capacity
    assert error / half == pytest.approx(2.0, rel=0.02)
    hours, _ = quad(lambda inventory: 1.0 / draw(inventory), exact, capacity)
    assert hours == pytest.approx(4.0, rel=1e-6)


def test_more_ice_never_melts_slower_nor_freezes_faster() -> None:
    held = np.linspace(0.0, 1000.0, 201)
    for kind in (0, 1):
        assert (np.diff(store.melt_ua_kw_per_k(np.array(kind), np.array(1000.0), held)) >= 0.0).all()
    assert (np.diff(store.freeze_ua_kw_per_k(np.array(1000.0), held)) <= 0.0).all()
    assert float(store.melt_ua_kw_per_k(np.array(0), np.array(1000.0), np.array(0.0))) == 0.0
    assert float(store.freeze_ua_kw_per_k(np.array(1000.0), np.array(1000.0))) == 0.0


def test_chilled_water_holds_its_flow_limit_until_the_thermocline() -> None:
    held = np.array([1000.0, 60.0, 30.0, 0.0])
    np.testing.assert_allclose(store.water_kw_th(np.array(1000.0), held, np.array(200.0)), [200, 200, 100, 0])


def test_loss_is_of_capacity_for_ice_of_inventory_for_water_and_never_more_than_is_there() -> None:
    kinds, held = np.array([0, 2, 0]), np.array([500.0, 500.0, 0.001])
    loss = store.loss_kw_th(kinds, np.full(3, 1000.0), held, np.full(3, 3e-4), 0.25)
    np.testing.assert_allclose(loss, [0.3, 0.15, 0.004], rtol=1e-12)


def test_zone_keeps_its_energy() -> None:
    rng = np.random.default_rng(3)
    air, mass = rng.uniform(0, 2, 50), rng.uniform(0, 2, 50)
    capacity, heavy, coupling, envelope = (rng.uniform(low, 5 * low, 50) for low in (20.0, 80.0, 40.0, 3.0))
    net = rng.uniform(-200, 300, 50)
    after, mass_after = room.advance(air, mass, net, capacity, heavy, coupling, envelope, 1 / 60)
    stored = capacity * (after - air) + heavy * (mass_after - mass)
    np.testing.assert_allclose(net / 60, stored + envelope * after / 60, rtol=1e-9, atol=1e-9)


def test_zone_without_coupling_follows_the_exponential() -> None:
    """C dT/dt = net - H T: T = net / H (1 - exp(-t H / C)), one minute steps within one per cent."""
    air, mass, one = np.zeros(1), np.zeros(1), np.ones(1)
    for _ in range(60):
        air, mass = room.advance(air, mass, 60.0 * one, 30.0 * one, one, 0.0 * one, 10.0 * one, 1 / 60)
    assert air[0] == pytest.approx(6.0 * (1.0 - np.exp(-10.0 / 30.0)), rel=0.01)
    assert mass[0] == 0.0


def test_wet_bulb_is_near_the_psychrometric_one() -> None:
    psychrolib.SetUnitSystem(psychrolib.SI)
    for dry in (15.0, 25.0, 35.0):
        for humidity in (20.0, 40.0, 70.0, 95.0):
            exact = psychrolib.GetTWetBulbFromRelHum(dry, humidity / 100.0, 101325.0)
            assert float(weather.wet_bulb_c(np.array(dry), np.array(humidity))) == pytest.approx(
                exact, abs=1.0
            )
