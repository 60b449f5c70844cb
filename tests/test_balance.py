"""Tanks by energy balance: charge, discharge and load told apart from plant power; fulls, leaks, idle tanks."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from made_sites import made_outlook, made_roster, made_standing

from sites import balance
from sites.conditions import Conditions, conditions, level_kw_th
from sites.course import Course
from sites.ground import usual_course
from sites.outlook import Outlook
from sites.roster import Roster

DAYS = 9
LEAK = 16.0
"""Planted: so many times the stated loss."""


def mild(roster: Roster) -> Outlook:
    """Hourly days on which every tank that is charged overnight is full before the end of its charging hours."""
    outlook = made_outlook(roster, step_minutes=60, hours=24.0 * DAYS, start_hour=12.0)
    return replace(outlook, cooling_load_kw_th=0.6 * outlook.cooling_load_kw_th)


@cache
def past(
    leak: float = 1.0, out: bool = False, **changes: float
) -> tuple[Roster, Outlook, Conditions, Course]:
    """The stated plants, and what plants like them, with `leak` times their loss or without tanks, drew."""
    roster = made_roster((0, 1, 2, 3, 4), charge_from_hour=19.5, **changes)
    outlook, standing = mild(roster), made_standing(roster)
    true = replace(
        roster.tanks,
        loss_fraction_per_h=leak * roster.tanks.loss_fraction_per_h,
        exists=roster.tanks.exists & (not out),
    )
    stands = replace(standing, tank_available=standing.tank_available & (not out))
    course = usual_course(replace(roster, tanks=true), outlook, stands)
    return roster, outlook, conditions(roster, outlook, standing), course


def true_net(course: Course) -> np.ndarray:
    return (course.charge_kw_th - course.discharge_kw_th).sum(axis=1)


def test_charge_and_discharge_are_found_from_power_and_load() -> None:
    """Every hour of ice and storage plants; a levelled plant's small flows near its flat rate are taken for rest,
    as are all that change its power by less than 12 %."""
    roster, outlook, here, course = past()
    net = balance.net_charge_kw_th(roster, here, course.power_kw, outlook.cooling_load_kw_th)
    apart = np.abs(net - true_net(course))
    assert np.abs(true_net(course))[:4].max() > 200.0
    assert apart[:4].max() < 1000.0 * 2.0**-balance.HALVINGS
    off = apart[4] > 0.1
    assert (net[4][off] == 0.0).all()
    assert (apart[4] < 0.3 * outlook.cooling_load_kw_th[4]).all()
    one = balance.net_charge_kw_th(
        roster.take(np.array([2])), _take(here, 2), course.power_kw[2:3], course.load_kw_th[2:3]
    )
    np.testing.assert_allclose(one[0], net[2], atol=1e-9)


def _take(here: Conditions, row: int) -> Conditions:
    one = np.array([row])
    names = (
        "direct_kw_th",
        "direct_full_kw",
        "ice_kw_th",
        "ice_full_kw",
        "on_peak",
        "charge_hours",
        "level_kw_th",
        "ice_site",
    )
    return replace(here, **{name: getattr(here, name)[one] for name in names})


def test_load_is_chillers_and_discharge_less_charge() -> None:
    """Known flows give the load back that the plant served, wherever no machine's start lies between."""
    roster, _, here, course = past()
    found = balance.load_kw_th(roster, here, course.power_kw, true_net(course))
    served = course.load_kw_th - course.unmet_kw_th
    apart = np.abs(found - served)
    # A plant at its tanks alone draws its pumps whatever they carry: their flow is the load.
    assert np.quantile(apart, 0.9) < 0.1
    assert np.median(apart / np.maximum(served, 1.0)) < 1e-4
    power = course.power_kw.copy()
    power[0, 5] = np.nan
    assert np.isnan(balance.load_kw_th(roster, here, power, true_net(course))[0, 5])


def test_without_a_leak_the_balance_follows_the_tank() -> None:
    roster, outlook, here, course = past()
    told = balance.reckon(roster, here, course.power_kw, outlook.cooling_load_kw_th)
    full_storage = told.level_kwh_th[0] - course.inventory_kwh_th[0].sum(axis=0)
    assert told.cycles[0] >= 7
    assert np.isfinite(full_storage).sum() > 150
    assert np.nanmax(np.abs(full_storage)) < 0.015 * 4000.0
    assert not told.leaks.any()
    assert abs(told.unexplained_kw_th[0]) < 0.1


def test_a_planted_loss_is_found_to_a_kw() -> None:
    """Sixteen times the stated loss of 1.2 kW_th is 18 kW_th more; the balance of every cycle says so, and with it the
    level stays true. The plant's efficiency, read from its hours at rest, is not mistaken for it."""
    roster, outlook, here, course = past(leak=LEAK)
    told = balance.reckon(roster, here, course.power_kw, outlook.cooling_load_kw_th)
    stated = float((roster.tanks.capacity_kwh_th * roster.tanks.loss_fraction_per_h)[0].sum())
    assert told.leaks[0]
    assert told.unexplained_kw_th[0] == pytest.approx((LEAK - 1.0) * stated, abs=1.0)
    assert told.efficiency[0] == pytest.approx(1.0, abs=1e-3)
    assert np.nanmax(np.abs(told.level_kwh_th[0] - course.inventory_kwh_th[0].sum(axis=0))) < 0.04 * 4000.0


def test_a_less_efficient_plant_is_no_leak() -> None:
    """8 % more compressor power in every hour (no auxiliaries here): read from the hours at rest and taken out."""
    roster, outlook, here, _ = past(aux=0.0)
    worse = replace(roster, chillers=replace(roster.chillers, rated_cop=roster.chillers.rated_cop / 1.08))
    course = usual_course(worse, outlook, made_standing(roster))
    told = balance.reckon(roster, here, course.power_kw, outlook.cooling_load_kw_th)
    assert told.efficiency[0] == pytest.approx(1.0 / 1.08, rel=1e-6)
    assert not told.leaks.any()


def test_a_gap_ends_what_is_known_until_the_next_full() -> None:
    roster, outlook, here, course = past()
    power = course.power_kw.copy()
    power[0, 60] = np.nan
    told = balance.reckon(roster, here, power, outlook.cooling_load_kw_th)
    fulls = np.flatnonzero(told.full[0])
    following = int(fulls[fulls > 60][0])
    assert np.isfinite(told.level_kwh_th[0, 59])
    assert np.isnan(told.level_kwh_th[0, 60:following]).all()
    assert np.isfinite(told.level_kwh_th[0, following])


def test_an_old_full_says_nothing_any_more_and_the_spread_grows_from_full_to_full() -> None:
    roster, outlook, here, course = past()
    told = balance.reckon(roster, here, course.power_kw, outlook.cooling_load_kw_th)
    first = int(np.flatnonzero(told.full[0])[1])
    assert (np.diff(told.spread_kwh_th[0, first : first + 20]) >= 0.0).all()
    assert told.spread_kwh_th[0, first] == pytest.approx(balance.FULL_SPREAD_FRACTION * 4000.0)
    power = course.power_kw.copy()
    rests = np.where(np.arange(power.shape[1]) > first, True, False)
    # From there on the plant serves its load alone, tanks at rest: nothing makes it full again.
    alone = usual_course(
        roster, outlook, replace(made_standing(roster), tank_available=np.zeros_like(roster.tanks.exists))
    ).power_kw
    later = balance.reckon(roster, here, np.where(rests, alone, power), outlook.cooling_load_kw_th)
    last = first + int(balance.LONGEST_H)
    assert not later.full[0, first + 1 :].any()
    assert np.isfinite(later.level_kwh_th[0, last])
    assert np.isnan(later.level_kwh_th[0, last + 1 :]).all()


def test_tanks_that_are_never_used_are_told_from_those_that_are() -> None:
    roster, outlook, here, course = past()
    load = outlook.cooling_load_kw_th
    used = balance.net_charge_kw_th(roster, here, course.power_kw, load)
    assert not balance.unused(roster, here, load, used).any()
    _, _, _, without = past(out=True)
    net = balance.net_charge_kw_th(roster, here, without.power_kw, load)
    idle = balance.unused(roster, here, load, net)
    # Chiller priority in mild weather needs no tank: that it rests says nothing.
    np.testing.assert_array_equal(idle, [True, False, True, True, True])


def test_load_levelling_is_held_against_its_flat_rate() -> None:
    roster, outlook, here, _ = past()
    assert here.level_kw_th[4] == pytest.approx(level_kw_th(roster, outlook)[4])
    assert (here.level_kw_th[:4] == 0.0).all()
