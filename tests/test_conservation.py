"""First law over a whole horizon, for every kind of tank under every strategy, in both layouts and directions.

Event less usual: machine cooling = inventory + losses - zone storage - envelope, each case with loss, drift and
recharge really in it; then what must not change when time, order, prices or sign are changed.
"""

from dataclasses import replace
from functools import cache
from itertools import product

import numpy as np
import pytest
from made_sites import made_outlook, made_roster, made_standing
from test_quote import made_terms

from sites.candidate import Stages
from sites.course import Course
from sites.ground import Ground, ground
from sites.plant import at_rest, simulate
from sites.quote import Quoted, detail, quote
from sites.roster import ICE_KINDS, LAYOUTS, STRATEGIES, TANK_KINDS, Roster
from sites.rows import plants

STEP_H = 0.25
CASES = tuple(product(STRATEGIES, TANK_KINDS, LAYOUTS))


def every_roster() -> Roster:
    """One site for every strategy, kind and layout: 800 kW_th at its peak, two machines of 450, 2,000 kWh_th."""
    roster = made_roster(tuple([1] * len(CASES)))
    strategy, kind, layout = (np.array(column) for column in zip(*CASES, strict=True))
    tank_kind = np.array([TANK_KINDS.index(name) for name in kind])[:, None].repeat(2, axis=1)
    n = len(CASES)
    buildings = replace(
        roster.buildings,
        strategy=np.array([STRATEGIES.index(name) for name in strategy]),
        layout=np.array([LAYOUTS.index(name) for name in layout]),
        peak_cooling_kw_th=np.full(n, 800.0),
    )
    chillers = replace(
        roster.chillers,
        exists=np.tile([True, True, False], (n, 1)),
        capacity_kw_th=np.tile([450.0, 450.0, 0.0], (n, 1)),
        makes_ice=np.isin(kind, ICE_KINDS)[:, None] & np.array([True, True, False]),
    )
    tanks = replace(
        roster.tanks,
        exists=np.tile([True, False], (n, 1)),
        kind=tank_kind,
        capacity_kwh_th=np.tile([2000.0, 0.0], (n, 1)),
    )
    return Roster(buildings, chillers, tanks)


@cache
def ran(charge: bool = False) -> tuple[Course, Ground]:
    """Machines off from 16:00 to 17:30, or tanks made to charge from 20:30, beside the usual case."""
    roster = every_roster()
    standing = made_standing(roster, 0.9)
    base = ground(roster, made_outlook(roster), standing)
    n = roster.count
    first, last, limit = (30, 36, 1.0) if charge else (12, 18, 0.0)
    stages = Stages(
        np.full((n, 1), first),
        np.full((n, 1), last),
        np.full((n, 1, 3), limit),
        np.full((n, 1), charge),
    )
    rows = plants(roster, base.here, standing.tank_available, np.arange(n))
    run = simulate(rows, base.here, stages, at_rest(standing.best_kwh_th), base.usual.as_usual)
    return run, base


@pytest.mark.parametrize("charge", [False, True])
def test_what_machines_make_more_is_stored_lost_or_gained(charge: bool) -> None:
    run, base = ran(charge)
    usual, zone = base.usual, base.roster.buildings
    chiller = ((run.chiller_kw_th - usual.chiller_kw_th) * STEP_H).sum(axis=1)
    stored = (run.inventory_kwh_th - usual.inventory_kwh_th)[:, :, -1].sum(axis=1)
    lost = ((run.loss_kw_th - usual.loss_kw_th) * STEP_H).sum(axis=(1, 2))
    nodes = zone.air_kwh_per_k * run.air_rise_k[:, -1] + zone.mass_kwh_per_k * run.mass_rise_k[:, -1]
    walls = zone.envelope_kw_per_k * (run.air_mean_rise_k * STEP_H).sum(axis=1)
    scale = np.maximum((run.chiller_kw_th * STEP_H).sum(axis=1), 1.0)
    np.testing.assert_array_less(np.abs(chiller - (stored + lost - nodes - walls)) / scale, 1e-9)


def test_every_case_has_loss_drift_and_recharge_in_it() -> None:
    run, base = ran()
    recharge = run.charge_kw_th[:, :, 18:].sum(axis=(1, 2)) * STEP_H
    beyond = (run.charge_kw_th - base.usual.charge_kw_th).clip(min=0.0).sum(axis=(1, 2)) * STEP_H
    # A tank that is spent either way is refilled alike; in the other cases the event adds to the refill.
    assert (beyond > 1.0).sum() >= 30
    for row, case in enumerate(CASES):
        assert run.loss_kw_th[row].sum() * STEP_H > 5.0, case
        assert run.air_rise_k[row].max() > 0.2, case
        assert run.air_mean_rise_k[row].sum() > 0.0, case
        assert run.discharge_kw_th[row].sum() > 0.0, case
        assert recharge[row] > 100.0, case
    made, _ = ran(charge=True)
    assert ((made.charge_kw_th - base.usual.charge_kw_th)[:, :, 30:36].sum(axis=(1, 2)) > 0.0).sum() > 20


def test_the_interval_balance_holds_in_every_case() -> None:
    for charge in (False, True):
        run, _ = ran(charge)
        step = (run.charge_kw_th - run.discharge_kw_th - run.loss_kw_th) * STEP_H
        np.testing.assert_allclose(
            run.inventory_kwh_th - run.inventory_start_kwh_th, step, atol=1e-9 * 2000.0
        )
        given = run.direct_kw_th.sum(axis=1) + run.discharge_kw_th.sum(axis=1) + run.unmet_kw_th
        np.testing.assert_allclose(given, run.load_kw_th + run.pull_down_kw_th, atol=1e-9)


def test_sites_in_another_order_run_alike() -> None:
    run, base = ran()
    order = np.random.default_rng(5).permutation(len(CASES))
    mixed = ground(base.roster.take(order), base.outlook.take(order), base.standing.take(order))
    np.testing.assert_allclose(mixed.usual.power_kw, base.usual.power_kw[order], rtol=1e-12)
    np.testing.assert_allclose(mixed.usual.inventory_kwh_th, base.usual.inventory_kwh_th[order], rtol=1e-12)
    assert run.power_kw.shape == mixed.usual.power_kw.shape


def test_a_loss_free_water_tank_of_equal_limits_mirrors_charge_and_discharge() -> None:
    """Flat limits both ways: what a full tank gives over some hours, an empty one takes, step for step."""
    from model_arrays import tanks

    from sites import tank

    part = tanks(
        "chilled_water", capacity=1000.0, loss=0.0, discharge_limit_kw_th=120.0, charge_limit_kw_th=120.0
    )
    knots = [
        tank.knots_kw_th(curves(part), part.capacity_kwh_th, limit, 5.0)
        for curves, limit in (
            (tank.discharge_curves, part.discharge_limit_kw_th),
            (tank.charge_curves, part.charge_limit_kw_th),
        )
    ]
    full, empty, none = part.capacity_kwh_th.copy(), np.zeros_like(part.capacity_kwh_th), np.zeros((1, 1))
    moved = 0.0
    for _ in range(48):
        out = tank.most_discharge_kw_th(full, none, part.capacity_kwh_th, knots[0], STEP_H)
        into = tank.most_charge_kw_th(empty, none, part.capacity_kwh_th, knots[1], STEP_H)
        np.testing.assert_allclose(out, into, atol=1e-9)
        full, empty = full - out * STEP_H, empty + into * STEP_H
        moved += float(out.sum()) * STEP_H
    assert moved == pytest.approx(1000.0)


@cache
def costed(flat_price: bool) -> Quoted:
    """Quotes of every plant; flat: one price, weather and COP at any load, no loss, unmet load, auxiliary or fee."""
    roster = every_roster()
    buildings, chillers = roster.buildings, roster.chillers
    outlook = made_outlook(roster)
    if flat_price:
        none, machines = np.zeros(len(CASES)), np.zeros_like(chillers.dedicated_aux_kw)
        money = {name: none for name in ("call_fee", "demand_price_per_kw", "shared_aux_kw", "tank_pump_kw")}
        roster = Roster(
            replace(buildings, **money, no_unmet=np.ones(len(CASES), dtype=np.bool_)),
            replace(chillers, dedicated_aux_kw=machines),
            replace(roster.tanks, loss_fraction_per_h=np.zeros_like(roster.tanks.loss_fraction_per_h)),
        )
        outlook = replace(
            outlook, price_per_kwh=np.full_like(outlook.price_per_kwh, 0.1),
            dry_bulb_c=np.full_like(outlook.dry_bulb_c, 35.0),
            cooling_load_kw_th=0.75 * outlook.cooling_load_kw_th,
        )  # fmt: skip
    return quote(ground(roster, outlook, made_standing(roster, 0.7)), made_terms(len(CASES)))


def test_at_flat_prices_and_one_cop_no_plant_that_charges_with_its_usual_water_pays_for_a_shed() -> None:
    """Screw machines draw in proportion to their load: what is not made now is made later at the same COP and price.

    A tank that ends above its usual level (it was charged because of the event, where usually it was full enough) is
    not paid for that: such a shed costs just what the more is worth. Ice is made at a worse COP, so there a shed costs
    something; never less than nothing.
    """
    found = costed(flat_price=True)
    quotes = found.quotes
    gross = np.abs(quotes.change_kw).sum(axis=1) * STEP_H * 0.1
    water = np.array([kind not in ICE_KINDS for _, kind, _ in CASES])[quotes.site]
    assert {CASES[site][0] for site in quotes.site[water]} >= {"storage_priority", "load_levelling"}
    assert gross.min() > 1.0
    assert quotes.unmet_kwh_th.max() == 0.0
    more = detail(found, np.arange(len(gross))).inventory_kwh_th[:, :, -1].sum(axis=1)
    more = np.maximum(more - found.ground.usual.inventory_kwh_th[quotes.site, :, -1].sum(axis=1), 0.0)
    assert more[water].max() < 0.035 * 2000.0
    unpaid = quotes.net_cost - more * quotes.end_lack_price_per_kwh_th
    np.testing.assert_allclose((unpaid / gross)[water], 0.0, atol=1e-9)
    assert (quotes.net_cost / gross)[~water].min() > -1e-9
    assert (quotes.net_cost / gross)[~water].max() > 0.05


@pytest.mark.parametrize("interval", [14, 60])
def test_the_price_gradient_of_every_plants_cost_is_its_change_in_energy(interval: int) -> None:
    """d(net cost) / d(price of an interval) = change_kw dt, and the dispatch is the same at other prices."""
    one = costed(flat_price=False)
    base = one.ground
    raised = base.outlook.price_per_kwh.copy()
    raised[:, interval] += 0.01
    dearer = replace(base, outlook=replace(base.outlook, price_per_kwh=raised))
    two = quote(dearer, made_terms(len(CASES))).quotes
    np.testing.assert_array_equal(two.change_kw, one.quotes.change_kw)
    whole = one.quotes.end_lack_kwh_th == 0.0
    assert whole.sum() > 100
    np.testing.assert_allclose(
        (two.net_cost - one.quotes.net_cost)[whole],
        0.01 * one.quotes.change_kw[whole, interval] * STEP_H,
        atol=1e-9,
    )
