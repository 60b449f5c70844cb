"""Recoveries: the same window with its recharge at another time, and never over the building's own peak if capped."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from test_quote import made_ground, made_terms

from sites.quote import Quoted, detail, quote
from sites.recovery import CAPPED, MIDDAY, RECOVERIES, cap_kw, recovery_hours


@cache
def every_recovery() -> Quoted:
    return quote(made_ground(), made_terms(6, recoveries=RECOVERIES, earliest=np.full(6, 14)))


def recovered(name: str) -> np.ndarray:
    return np.flatnonzero(every_recovery().recovery == RECOVERIES.index(name))


def extra_charge(pick: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Charge beyond the usual case's after each window (row, interval), and the local hour."""
    quoted = every_recovery()
    base, site = quoted.ground, quoted.quotes.site[pick]
    more = detail(quoted, pick).charge_kw_th.sum(axis=1) - base.usual.charge_kw_th[site].sum(axis=1)
    after = np.arange(more.shape[1])[None, :] >= quoted.quotes.window_end[pick][:, None]
    return np.where(after, more, 0.0), base.outlook.local_hour


def test_one_recovery_unless_more_are_asked_for() -> None:
    plain = quote(made_ground(), made_terms(6))
    assert set(plain.recovery) == {0}
    assert not any("-" in str(name) for name in plain.quotes.quote_id)
    many = every_recovery()
    assert many.tried == len(RECOVERIES) * quote(made_ground(), made_terms(6, earliest=np.full(6, 14))).tried


def test_quote_ids_tell_the_recovery_and_occur_once() -> None:
    quoted = every_recovery()
    ids = [str(name) for name in quoted.quotes.quote_id]
    assert len(set(ids)) == len(ids)
    for name, code in zip(ids, quoted.recovery, strict=True):
        assert name.endswith(f"-{RECOVERIES[code]}") == (code != 0)


def test_the_window_itself_is_the_same_whatever_the_recovery() -> None:
    quotes, code = every_recovery().quotes, every_recovery().recovery
    usual = {
        (
            int(quotes.site[k]),
            int(quotes.window_start[k]),
            int(quotes.window_end[k]),
            tuple(quotes.stages.load_limit_fraction[k, 0]),
        ): k
        for k in recovered("usual")
    }
    compared = 0
    for k in np.flatnonzero(code > 0):
        key = (
            int(quotes.site[k]),
            int(quotes.window_start[k]),
            int(quotes.window_end[k]),
            tuple(quotes.stages.load_limit_fraction[k, 0]),
        )
        if key in usual:
            inside = slice(key[1], key[2])
            np.testing.assert_allclose(
                quotes.change_kw[k, inside], quotes.change_kw[usual[key], inside], atol=1e-9
            )
            compared += 1
    assert compared > 100


def test_midday_and_delayed_make_up_in_their_hours_only() -> None:
    more, hour = extra_charge(recovered("midday"))
    outside = (hour < MIDDAY[0]) | (hour >= MIDDAY[1])
    assert more[:, outside].max() <= 1e-6
    assert more[:, ~outside].max() > 50.0
    base = made_ground()
    late = recovery_hours(base.roster.buildings, base.outlook, base.here.charge_hours)[
        RECOVERIES.index("delayed")
    ]
    first = np.flatnonzero(base.here.charge_hours[1])[0]
    np.testing.assert_array_equal(np.flatnonzero(late[1])[0], first + 8)
    more, _ = extra_charge(recovered("delayed"))
    assert more[:, first : first + 8].max() <= 1e-6


def test_now_starts_sooner_than_usual() -> None:
    quoted = every_recovery()
    quotes = quoted.quotes
    for name, sooner in (("now", True), ("usual", False)):
        pick = recovered(name)
        pick = pick[(quotes.site[pick] == 3) & (quotes.window_end[pick] <= 22)]
        more, _ = extra_charge(pick)
        assert len(pick) > 0
        assert (more[:, :30].max() > 10.0) == sooner


def test_capped_keeps_the_building_within_its_own_peak_and_costs_no_demand() -> None:
    quoted = every_recovery()
    base, pick = quoted.ground, recovered("capped")
    quotes = quoted.quotes
    assert len(pick) > 50
    site = quotes.site[pick]
    room = cap_kw(base.outlook.rest_kw, base.outlook.billed_peak_kw, base.usual.power_kw)[site]
    after = np.arange(room.shape[1])[None, :] >= quotes.window_end[pick][:, None]
    charged = detail(quoted, pick).charge_kw_th.sum(axis=1) > 0.0
    over = (base.usual.power_kw[site] + quotes.change_kw[pick] - room) * (after & charged)
    assert over.max() <= 1e-6
    assert quotes.cost[pick, 3].max() <= 5.0 * 1e-6 + quotes.cost[recovered("usual"), 3].max()


def test_a_cap_that_bites_holds_power_down_where_the_same_recharge_at_once_does_not() -> None:
    base = made_ground()
    tight = replace(base, here=replace(base.here, billed_peak_kw=np.zeros(6)))
    quoted = quote(tight, made_terms(6, recoveries=("now", "capped"), earliest=np.full(6, 14)))
    quotes = quoted.quotes
    room = cap_kw(base.outlook.rest_kw, np.zeros(6), base.usual.power_kw)[quotes.site]
    power = base.usual.power_kw[quotes.site] + quotes.change_kw
    charged = detail(quoted, np.arange(len(quotes.site))).charge_kw_th.sum(axis=1) > 0.0
    after = np.arange(140)[None, :] >= quotes.window_end[:, None]
    over = np.where(after & charged, power - room, 0.0)
    capped = quoted.recovery == CAPPED
    assert over[capped].max() <= 1e-6
    assert over[~capped].max() > 1.0


@pytest.mark.parametrize("name", RECOVERIES[1:])
def test_conservation_holds_under_every_recovery(name: str) -> None:
    """Event less usual: machine cooling = inventory + losses - zone storage - envelope (first law)."""
    quoted = every_recovery()
    base, pick = quoted.ground, recovered(name)[::5]
    site = quoted.quotes.site[pick]
    run, usual, buildings = detail(quoted, pick), base.usual, base.roster.buildings.take(site)
    chiller = (run.chiller_kw_th - usual.chiller_kw_th[site]).sum(axis=1) * 0.25
    stored = (run.inventory_kwh_th - usual.inventory_kwh_th[site])[:, :, -1].sum(axis=1)
    lost = (run.loss_kw_th - usual.loss_kw_th[site]).sum(axis=(1, 2)) * 0.25
    zone = buildings.air_kwh_per_k * run.air_rise_k[:, -1] + buildings.mass_kwh_per_k * run.mass_rise_k[:, -1]
    walls = buildings.envelope_kw_per_k * run.air_mean_rise_k.sum(axis=1) * 0.25
    np.testing.assert_allclose(chiller, stored + lost - zone - walls, atol=1e-6)
