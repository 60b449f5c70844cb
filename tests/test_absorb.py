"""Absorb: tanks made to charge, what they take beside the usual case, what limits them, and what it costs."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from made_sites import made_outlook, made_roster, made_standing
from test_quote import flat, made_terms

from sites.blocks import Terms
from sites.direction import Direction
from sites.outlook import Outlook
from sites.quote import Ground, Quoted, detail, ground, quote
from sites.quotes import LIMITED_BY
from sites.roster import CHILLER_KINDS, Roster


def limits_of(quoted: Quoted) -> list[str]:
    return [LIMITED_BY[code] for code in quoted.quotes.site_limited_by]


def mild(roster: Roster) -> Outlook:
    """From 8:00 of a day with two fifths of the design load: machines have cooling to spare at midday."""
    outlook = made_outlook(roster, start_hour=8.0)
    return replace(outlook, cooling_load_kw_th=0.4 * outlook.cooling_load_kw_th)


@cache
def made_ground(fraction: float = 0.4) -> Ground:
    roster = made_roster()
    return ground(roster, mild(roster), made_standing(roster, fraction))


def midday(count: int = 6) -> Terms:
    """11:00 to 14:00 on a clock that starts at 8:00."""
    return made_terms(count)


@cache
def absorbed() -> Quoted:
    return quote(made_ground(), midday(), Direction.ABSORB)


def test_expected_is_event_less_usual_and_positive_in_all_of_the_window() -> None:
    quotes = absorbed().quotes
    assert len(quotes.site) > 100
    assert set(quotes.site) >= {1, 3}
    np.testing.assert_array_equal(quotes.expected_kw, quotes.change_kw[:, 12:24])
    hour = np.arange(12, 24)[None, :]
    inside = (hour >= quotes.window_start[:, None]) & (hour < quotes.window_end[:, None])
    assert quotes.expected_kw[inside].min() >= 1.0
    before = np.arange(140)[None, :] < quotes.window_start[:, None]
    assert np.abs(quotes.change_kw[before]).max() == 0.0


def test_what_is_absorbed_is_in_the_tank_and_later_charging_falls() -> None:
    quoted = absorbed()
    pick = np.arange(0, len(quoted.quotes.site), 5)
    run, usual = detail(quoted, pick), quoted.ground.usual
    site = quoted.quotes.site[pick]
    hour = np.arange(140)[None, :]
    start, end = quoted.quotes.window_start[pick][:, None], quoted.quotes.window_end[pick][:, None]
    inside = (hour >= start) & (hour < end)
    held = run.inventory_kwh_th.sum(axis=1) - usual.inventory_kwh_th[site].sum(axis=1)
    at_end = np.take_along_axis(held, end - 1, axis=1)[:, 0]
    charged = np.where(inside, run.charge_kw_th.sum(axis=1), 0.0).sum(axis=1) * 0.25
    spared = np.where(inside, usual.discharge_kw_th[site].sum(axis=1), 0.0).sum(axis=1) * 0.25
    assert (at_end > 5.0).all()
    assert (charged + spared > 5.0).all()
    assert charged.max() > 300.0
    made = np.where(hour >= end, run.chiller_kw_th - usual.chiller_kw_th[site], 0.0).sum(axis=1)
    assert (made < 0.0).all()
    assert np.where(inside, run.unmet_kw_th - usual.unmet_kw_th[site], 0.0).max() <= 1e-6


def test_tank_and_machine_limits_hold_in_every_course() -> None:
    quoted = absorbed()
    pick = np.arange(len(quoted.quotes.site))
    run = detail(quoted, pick)
    site = quoted.quotes.site
    capacity = quoted.ground.roster.tanks.capacity_kwh_th[site]
    assert (run.inventory_kwh_th <= capacity[:, :, None] + 1e-9).all()
    here = quoted.ground.here
    able = np.where(run.making_ice, here.ice_kw_th[site], here.direct_kw_th[site]) * run.limit_fraction
    assert (run.direct_kw_th + run.into_tank_kw_th <= able + 1e-6).all()
    given = run.direct_kw_th.sum(axis=1) + run.discharge_kw_th.sum(axis=1) + run.unmet_kw_th
    np.testing.assert_allclose(given, run.load_kw_th + run.pull_down_kw_th, atol=1e-9)


def test_a_site_without_a_tank_or_with_full_ones_says_so() -> None:
    assert limits_of(absorbed())[5] == "availability"
    full = quote(made_ground(1.0), midday(), Direction.ABSORB)
    assert limits_of(full)[1] == "full"
    assert not (full.quotes.site == 1).any()


def test_headroom_is_that_of_the_high_inventory() -> None:
    """A tank that may be full already is not promised room: high at capacity, best well below."""
    roster = made_roster((1,))
    outlook = mild(roster)
    standing = made_standing(roster, 0.6)
    sure_standing = replace(standing, high_kwh_th=standing.best_kwh_th)
    sure = quote(ground(roster, outlook, sure_standing), midday(1), Direction.ABSORB)
    unsure_standing = replace(standing, high_kwh_th=roster.tanks.capacity_kwh_th.copy())
    unsure = quote(ground(roster, outlook, unsure_standing), midday(1), Direction.ABSORB)
    assert len(sure.quotes.site) > 0
    assert len(unsure.quotes.site) == 0
    assert limits_of(unsure) == ["full"]


def mirror() -> tuple[Roster, Ground]:
    """One machine, a loss-free water tank whose limits are the load: what a stop sheds, a charge absorbs."""
    roster = made_roster((4,), aux=0.0)
    buildings, chillers, tanks = roster.buildings, roster.chillers, roster.tanks
    object.__setattr__(buildings, "strategy", np.array([2]))
    object.__setattr__(chillers, "capacity_kw_th", np.array([[900.0, 0.0, 0.0]]))
    object.__setattr__(chillers, "kind", np.full((1, 3), CHILLER_KINDS.index("air_cooled_screw")))
    object.__setattr__(tanks, "loss_fraction_per_h", np.zeros((1, 2)))
    object.__setattr__(tanks, "discharge_limit_kw_th", np.full((1, 2), 300.0))
    object.__setattr__(tanks, "charge_limit_kw_th", np.full((1, 2), 300.0))
    outlook = flat(roster, made_outlook(roster, start_hour=8.0))
    outlook.cooling_load_kw_th[:] = 300.0
    return roster, ground(roster, outlook, made_standing(roster, 0.5))


def test_absorb_is_the_mirror_of_shed_on_a_loss_free_tank_of_equal_limits() -> None:
    _, base = mirror()
    shed, absorb = quote(base, midday(1)), quote(base, midday(1), Direction.ABSORB)
    windows = {}
    for quoted in (shed, absorb):
        quotes = quoted.quotes
        for k in np.flatnonzero(quoted.load_limit_fraction == 1.0):
            key = (int(quotes.window_start[k]), int(quotes.window_end[k]))
            windows.setdefault(key, []).append(quotes.change_kw[k, key[0] : key[1]])
    pairs = [both for both in windows.values() if len(both) == 2]
    assert len(pairs) > 20
    for down, up in pairs:
        np.testing.assert_allclose(down, -up, rtol=1e-9)
        assert up.min() > 50.0


def test_a_negative_price_at_midday_makes_the_cost_negative() -> None:
    base = made_ground()
    price = base.outlook.price_per_kwh.copy()
    price[:, 12:24] = -0.20
    sunny = replace(base, outlook=replace(base.outlook, price_per_kwh=price, billed_peak_kw=np.full(6, 1e6)))
    quotes = quote(sunny, midday(), Direction.ABSORB).quotes
    assert quotes.net_cost.min() < -10.0
    assert quotes.cost[:, 1].max() < 0.0


def test_a_peak_over_the_bill_is_in_the_cost() -> None:
    low, high = (
        quote(
            replace(made_ground(), outlook=replace(made_ground().outlook, billed_peak_kw=np.full(6, peak))),
            midday(),
            Direction.ABSORB,
        ).quotes
        for peak in (0.0, 1e6)
    )
    assert high.cost[:, 3].max() == 0.0
    building = made_ground().usual.power_kw + made_ground().outlook.rest_kw
    reached = (building[low.site] + low.change_kw).max(axis=1)
    over = np.maximum(reached - building[low.site].max(axis=1), 0.0)
    np.testing.assert_allclose(low.cost[:, 3], 5.0 * over, atol=1e-9)


@pytest.mark.parametrize("site", [1, 2, 3, 4])
def test_conservation_holds(site: int) -> None:
    quoted = absorbed()
    pick = np.flatnonzero(quoted.quotes.site == site)[::4]
    if not len(pick):
        assert limits_of(quoted)[site] != "none"
        return
    run, usual = detail(quoted, pick), quoted.ground.usual
    chiller = (run.chiller_kw_th - usual.chiller_kw_th[[site]]).sum(axis=1) * 0.25
    stored = (run.inventory_kwh_th - usual.inventory_kwh_th[[site]])[:, :, -1].sum(axis=1)
    lost = (run.loss_kw_th - usual.loss_kw_th[[site]]).sum(axis=(1, 2)) * 0.25
    assert run.air_rise_k.max() <= 1e-9
    np.testing.assert_allclose(chiller, stored + lost, atol=1e-6)
