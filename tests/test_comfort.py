"""The zone of two nodes against scipy's matrix exponential and closed forms; drift limits by hand."""

from dataclasses import fields

import numpy as np
import pytest
from model_arrays import buildings
from scipy.linalg import expm

from sites import comfort
from sites.errors import SitesError

# 5000 m2 at 165 kJ/m2K = 229.167 kWh/K, H 5 kW/K; all cooling of a load of 5 x 12 + 150 = 210 kW lost.
CAPACITY_KWH_PER_K = 5000.0 * 165.0 / 3600.0
LOST_KW_TH = 210.0


def zone_of(air, mass, coupling, envelope, step_h, count=1):
    return comfort.two_node(
        buildings(
            count,
            air_kwh_per_k=air,
            mass_kwh_per_k=mass,
            coupling_kw_per_k=coupling,
            envelope_kw_per_k=envelope,
        ),
        step_h,
    )


def random_buildings(count, seed=11):
    random = np.random.default_rng(seed)
    return buildings(
        count,
        air_kwh_per_k=random.uniform(5, 60, count),
        mass_kwh_per_k=random.uniform(20, 300, count),
        coupling_kw_per_k=random.uniform(1, 90, count),
        envelope_kw_per_k=np.where(np.arange(count) == 0, 0.0, random.uniform(0, 10, count)),
    )


@pytest.mark.parametrize(("share", "rises"), [(1.0, (0.9064, 1.7933, 3.5101)), (0.45, (1.99, 3.88, 7.40))])
def test_one_node_is_the_case_of_infinite_coupling(share, rises):
    # T(t) = T_inf - (T_inf - T0) exp(-t H / C), T_inf - T0 = 210 / 5 = 42 K; after 1, 2 and 4 h.
    capacity = CAPACITY_KWH_PER_K * share
    for hours, rise in zip((1.0, 2.0, 4.0), rises, strict=True):
        zone = zone_of(0.3 * capacity, 0.7 * capacity, 1e9, 5.0, hours)
        air, mass, _ = comfort.advance(zone, np.zeros(1), np.zeros(1), np.array([LOST_KW_TH]))
        assert 42.0 * -np.expm1(-hours * 5.0 / capacity) == pytest.approx(
            rise, abs=5e-3 if share < 1 else 5e-5
        )
        assert air[0] == pytest.approx(42.0 * -np.expm1(-hours * 5.0 / capacity), rel=1e-6)
        assert mass[0] == pytest.approx(air[0], rel=1e-6)


def test_how_much_may_go_unmet_for_the_four_hour_limit():
    # 3.3 K within 4 h with 45 % of the capacity coupled: 93.6 of 210 kW.
    zone = zone_of(*(CAPACITY_KWH_PER_K * 0.45 * part for part in (0.3, 0.7)), 1e7, 5.0, 4.0)
    net = comfort.net_for_air(zone, np.zeros(1), np.zeros(1), np.array([3.3]))
    assert net[0] == pytest.approx(93.6, abs=0.05)


@pytest.mark.parametrize("step_h", [5 / 60, 0.25, 1.0, 6.0])
def test_step_against_the_matrix_exponential(step_h):
    # x, net and the integral of x as one linear system of five, exponentiated by scipy.
    many = random_buildings(8)
    zone = comfort.two_node(many, step_h)
    for n in range(8):
        air, mass = many.air_kwh_per_k[n], many.mass_kwh_per_k[n]
        coupling, envelope = many.coupling_kw_per_k[n], many.envelope_kw_per_k[n]
        system = np.zeros((5, 5))
        system[0, :3] = -(envelope + coupling) / air, coupling / air, 1.0 / air
        system[1, :2] = coupling / mass, -coupling / mass
        system[3, 0] = system[4, 1] = 1.0
        step = expm(system * step_h)
        np.testing.assert_allclose(zone.transition[n], step[:2, :2], rtol=1e-11, atol=1e-14)
        np.testing.assert_allclose(zone.gain_k_per_kw[n], step[:2, 2], rtol=1e-11, atol=1e-15)
        np.testing.assert_allclose(zone.mean_air[n], step[3, :2] / step_h, rtol=1e-11, atol=1e-14)
        np.testing.assert_allclose(
            zone.mean_air_gain_k_per_kw[n], step[3, 2] / step_h, rtol=1e-11, atol=1e-15
        )


@pytest.mark.parametrize("step_h", [5 / 60, 0.25, 1.0, 6.0])
def test_what_comes_in_is_stored_or_lost(step_h):
    many = random_buildings(200)
    random = np.random.default_rng(2)
    zone = comfort.two_node(many, step_h)
    air, mass = random.uniform(-1, 3, 200), random.uniform(-1, 3, 200)
    for _ in range(20):
        net = random.uniform(-200, 200, 200)
        air_end, mass_end, mean = comfort.advance(zone, air, mass, net)
        stored = many.air_kwh_per_k * (air_end - air) + many.mass_kwh_per_k * (mass_end - mass)
        lost = many.envelope_kw_per_k * mean * step_h
        scale = np.abs(net * step_h) + np.abs(stored) + np.abs(lost) + many.mass_kwh_per_k
        assert (np.abs(net * step_h - stored - lost) / scale).max() < 1e-12
        air, mass = air_end, mass_end


def test_two_half_steps_are_one():
    many = random_buildings(50)
    whole, half = comfort.two_node(many, 0.5), comfort.two_node(many, 0.25)
    air, mass, net = np.linspace(0, 2, 50), np.linspace(1, 0, 50), np.linspace(-50, 50, 50)
    once = comfort.advance(whole, air, mass, net)
    first = comfort.advance(half, air, mass, net)
    second = comfort.advance(half, first[0], first[1], net)
    np.testing.assert_allclose(second[:2], once[:2], rtol=1e-12, atol=1e-13)
    np.testing.assert_allclose((first[2] + second[2]) / 2.0, once[2], rtol=1e-12, atol=1e-13)


def test_without_envelope_all_is_kept():
    # H = 0: 60 kW for 1 h into 10 + 50 kWh/K settles at 1 K in both nodes.
    zone = zone_of(10.0, 50.0, 20.0, 0.0, 1.0)
    air, mass, _ = comfort.advance(zone, np.zeros(1), np.zeros(1), np.array([60.0]))
    assert 10.0 * air[0] + 50.0 * mass[0] == pytest.approx(60.0, rel=1e-13)
    for _ in range(40):
        air, mass, _ = comfort.advance(zone, air, mass, np.zeros(1))
    np.testing.assert_allclose([air[0], mass[0]], 1.0, rtol=1e-12)


def test_air_feels_the_first_quarter_hour_and_one_node_does_not():
    # 100 kW into 5000 m2: air alone 0.006 kWh/K per m2 rises 0.83 K at most, all in one node 0.11 to 0.2 K.
    two = zone_of(30.0, 100.0, 45.0, 5.0, 0.25)
    one = zone_of(30.0, 100.0, 1e7, 5.0, 0.25)
    start, net = np.zeros(1), np.array([100.0])
    fast, slow = comfort.advance(two, start, start, net)[0][0], comfort.advance(one, start, start, net)[0][0]
    assert slow == pytest.approx(25.0 / 130.0, rel=0.01)
    assert 3.0 * slow < fast < 25.0 / 30.0


def test_net_for_air_hits_its_target():
    many = random_buildings(30)
    zone = comfort.two_node(many, 0.25)
    air, mass, target = np.linspace(0, 3, 30), np.linspace(2, 0, 30), np.linspace(1, 0, 30)
    net = comfort.net_for_air(zone, air, mass, target)
    np.testing.assert_allclose(comfort.advance(zone, air, mass, net)[0], target, atol=1e-12)


def test_many_zones_equal_each_alone():
    many = random_buildings(6)
    together = comfort.two_node(many, 0.25)
    for n in range(6):
        alone = comfort.two_node(many.take(np.array([n])), 0.25)
        for field in fields(comfort.TwoNode):
            np.testing.assert_array_equal(
                getattr(together.take(np.array([n])), field.name), getattr(alone, field.name)
            )
        one = comfort.advance(alone, np.array([1.0]), np.array([0.5]), np.array([20.0]))
        all_of_them = comfort.advance(together, np.full(6, 1.0), np.full(6, 0.5), np.full(6, 20.0))
        np.testing.assert_array_equal([value[n] for value in all_of_them], [value[0] for value in one])


def test_a_zone_that_cannot_be_is_refused():
    with pytest.raises(SitesError) as refused:
        zone_of(np.array([30.0, 30.0]), 100.0, np.array([45.0, 0.0]), 5.0, 0.25, count=2)
    assert str(refused.value) == (
        "zone, index 1: came air 30 and mass 100 kWh/K, coupling 0 and envelope 5 kW/K; expected the first three "
        "above 0 and the last not below; correct them (1 such in all)"
    )


def excess(rises, counted=None, step_h=0.25):
    rise = np.atleast_2d(np.asarray(rises, dtype=np.float64))
    mask = np.ones(rise.shape, dtype=bool) if counted is None else np.atleast_2d(counted)
    return comfort.drift_excess_k(rise, mask, step_h)


def test_limits_are_those_of_the_standard():
    # ASHRAE 55, limits on temperature drifts and ramps (from memory).
    assert comfort.DRIFT_LIMITS == ((0.25, 1.1), (0.5, 1.7), (1.0, 2.2), (2.0, 2.8), (4.0, 3.3))


@pytest.mark.parametrize(
    ("rises", "expected"),
    [
        ([1.0] * 20, -0.1),  # a jump of 1.0 K in the first quarter hour, then still: 1.0 - 1.1
        ([1.1] * 20, 0.0),
        ([1.0, 1.8] + [1.8] * 20, 0.1),  # 1.8 within half an hour: 1.8 - 1.7
        ([0.0] * 4 + [-1.5] + [-1.5] * 10, 0.4),  # on the way down, too
        (list(np.arange(1, 17) * 0.21), 0.06),  # 0.21 K a step, 3.36 within four hours: 3.36 - 3.3
        ([0.0, 0.9, -0.9, 0.9] + [0.9] * 8, 0.7),  # 1.8 within a quarter hour: 1.8 - 1.1
        ([0.0] * 6, -1.1),
    ],
)
def test_drifts_by_hand(rises, expected):
    assert excess(rises)[0] == pytest.approx(expected, abs=1e-12)


def test_only_counted_hours_count():
    # The morning pull-down of 3 K before people come is no drift; from the end of it on, nothing moves.
    rises = [3.0] * 4 + [0.0] * 8
    early = np.array([False] * 5 + [True] * 7)
    assert excess(rises)[0] == pytest.approx(1.9, abs=1e-12)
    assert excess(rises, early)[0] == pytest.approx(-1.1, abs=1e-12)
    # The interval in which it falls counts by both its ends.
    assert excess(rises, np.array([False] * 4 + [True] * 8))[0] == pytest.approx(1.9, abs=1e-12)
    assert excess(rises, np.zeros(12, dtype=bool))[0] == pytest.approx(-1.1, abs=1e-12)


def test_windows_no_longer_than_the_steps_allow():
    # Hourly steps cannot show the .25 and .5 h limits: 2.0 K in an hour is 0.2 under 2.2.
    assert excess([2.0, 2.0, 2.0, 2.0], step_h=1.0)[0] == pytest.approx(-0.2, abs=1e-12)
    # Ten minutes: the quarter hour is widened to twenty, 0.6 + 0.6 - 1.1.
    assert excess([0.6, 1.2, 1.2, 1.2], step_h=1 / 6)[0] == pytest.approx(0.1, abs=1e-12)
    # Five minutes: three steps are a quarter hour.
    assert excess([0.4, 0.8, 1.2, 1.2], step_h=1 / 12)[0] == pytest.approx(0.1, abs=1e-12)


def test_drifts_of_many_rows_against_every_window_written_out(monkeypatch):
    monkeypatch.setattr(comfort, "ROW_BLOCK", 7)
    random = np.random.default_rng(9)
    rise, counted = random.normal(0, 1.5, (30, 40)).cumsum(axis=1) / 3, random.random((30, 40)) < 0.6
    expected = []
    for row, count in zip(rise, counted, strict=True):
        points = np.concatenate([[0.0], row])
        seen = np.concatenate([[False], count]) | np.concatenate([count, [False]])
        worst = -np.inf
        for hours, limit in comfort.DRIFT_LIMITS:
            steps = round(hours / 0.25)
            for first in range(41 - steps):
                inside = points[first : first + steps + 1][seen[first : first + steps + 1]]
                worst = max(worst, (np.ptp(inside) if len(inside) else 0.0) - limit)
        expected.append(worst)
    np.testing.assert_allclose(excess(rise, counted), expected, atol=1e-14)
