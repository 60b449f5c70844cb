"""One suite over every kind of tank: what a tank must do whatever its model.

A tank of 300 kWh_th is run for a day against brine of 12 to 4 degC (discharge) or -6 to -2 degC (charge), at the
greatest rate, at half of it, or standing.
"""

import numpy as np
import pytest
from model_arrays import tanks

from sites import tank
from sites.roster import FREEZING_KINDS, TANK_KINDS

CAPACITY = 300.0
STEPS_H = (5 / 60, 0.25, 0.5, 1.0)
DISCHARGE_K = float(tank.lmtd_k(12.0, 4.0))
CHARGE_K = float(tank.lmtd_k(-6.0, -2.0))
WAYS = ("discharge", "charge")

every_kind = pytest.mark.parametrize("kind", TANK_KINDS)
every_way = pytest.mark.parametrize("way", WAYS)
every_step = pytest.mark.parametrize("step_h", STEPS_H)


def knots_of(part, way, lmtd=None):
    curves = tank.discharge_curves(part) if way == "discharge" else tank.charge_curves(part)
    ceiling = part.discharge_limit_kw_th if way == "discharge" else part.charge_limit_kw_th
    difference = (DISCHARGE_K if way == "discharge" else CHARGE_K) if lmtd is None else lmtd
    return tank.knots_kw_th(curves, part.capacity_kwh_th, ceiling, difference)


def run(part, way, step_h, start_soc, hours=24.0, share=1.0):
    """Inventory at interval ends (T + 1, ...), rate and loss (T, ...), at `share` of the greatest rate."""
    most = tank.most_discharge_kw_th if way == "discharge" else tank.most_charge_kw_th
    sign = -1.0 if way == "discharge" else 1.0
    knots, capacity = knots_of(part, way), part.capacity_kwh_th
    inventory, rates, losses = [start_soc * capacity], [], []
    for _ in range(round(hours / step_h)):
        now = inventory[-1]
        loss = tank.standing_loss_kw_th(part.kind, now, capacity, part.loss_fraction_per_h, step_h)
        rate = share * most(now, loss, capacity, knots, step_h)
        inventory.append(now + (sign * rate - loss) * step_h)
        rates.append(rate)
        losses.append(loss)
    return np.array(inventory), np.array(rates), np.array(losses), knots


@every_step
@every_way
@every_kind
def test_inventory_is_conserved_and_no_limit_is_passed(kind, way, step_h):
    # From empty, nearly empty, part full and full, at the greatest rate, half of it, and none: twelve rows at once.
    part = tanks(kind, capacity=CAPACITY, shape=(12, 1))
    start_soc, share = (grid.reshape(12, 1) for grid in np.meshgrid([0.0, 0.003, 0.4, 1.0], [1.0, 0.5, 0.0]))
    inventory, rate, loss, knots = run(part, way, step_h, start_soc, share=share)
    assert (inventory >= -1e-9).all()
    assert (inventory <= CAPACITY + 1e-9).all()
    assert (rate >= 0.0).all()
    limit = tank.limit_kw_th(inventory[1:], part.capacity_kwh_th, knots)
    assert (rate <= limit + 1e-9).all()
    moved = (-rate if way == "discharge" else rate).sum(axis=0) * step_h
    kept = inventory[-1] - inventory[0] - moved + loss.sum(axis=0) * step_h
    assert np.abs(kept).max() < 1e-9
    if way == "discharge":
        assert (rate <= inventory[:-1] / step_h + 1e-9).all()


@every_kind
def test_limits_use_up_what_they_allow(kind):
    # Greatest means greatest: the end inventory sits on the limit, or at empty or full.
    for way in WAYS:
        part = tanks(kind, capacity=CAPACITY)
        inventory, rate, _, knots = run(part, way, 0.25, 0.6, hours=12.0)
        limit = tank.limit_kw_th(inventory[1:], part.capacity_kwh_th, knots)
        bound = (inventory[1:] < 1e-9) if way == "discharge" else (inventory[1:] > CAPACITY - 1e-9)
        assert ((np.abs(rate - limit) < 1e-8) | bound).all()


@every_way
@every_kind
def test_more_inventory_is_never_a_lower_discharge_rate_nor_a_higher_charge_rate(kind, way):
    soc = np.linspace(0.0, 1.0, 501)[:, None]
    many = tanks(kind, capacity=CAPACITY, shape=(501, 1))
    sign = 1.0 if way == "discharge" else -1.0
    most = tank.most_discharge_kw_th if way == "discharge" else tank.most_charge_kw_th
    for lmtd in (0.0, 0.5, 2.0, 5.0, 12.0):
        knots = knots_of(many, way, np.full((501, 1), lmtd))
        for step_h in STEPS_H:
            inventory = soc * CAPACITY
            loss = tank.standing_loss_kw_th(
                many.kind, inventory, many.capacity_kwh_th, many.loss_fraction_per_h, step_h
            )
            assert (
                sign * np.diff(most(inventory, loss, many.capacity_kwh_th, knots, step_h)[:, 0])
            ).min() > -1e-9
        assert (
            sign * np.diff(tank.limit_kw_th(soc * CAPACITY, many.capacity_kwh_th, knots)[:, 0])
        ).min() > -1e-10


@every_way
@every_kind
@pytest.mark.parametrize("loss", [0.0, 3e-4])
def test_half_the_step_is_never_less_energy(kind, way, loss):
    part = tanks(kind, capacity=CAPACITY, loss=loss)
    start = 1.0 if way == "discharge" else 0.0
    for hours in (1.0, 4.0):
        moved = [
            run(part, way, step_h, start, hours=hours)[1].sum() * step_h
            for step_h in (1.0, 0.5, 0.25, 0.125, 0.0625)
        ]
        assert (np.diff(moved) >= -1e-9).all()


@every_kind
def test_coarse_is_never_more_than_fine_and_close_to_it(kind):
    # A quarter hour against a minute, over the first hour from full: 3 % less for SET_A; 7 % for external melt,
    # and 8 % for capsules, whose limits fall steeply from full; nothing where the limit is flat.
    part = tanks(kind, capacity=CAPACITY, loss=0.0)
    coarse, fine = (
        run(part, "discharge", step_h, 1.0, hours=1.0)[1].sum() * step_h for step_h in (0.25, 1 / 60)
    )
    assert coarse <= fine + 1e-9
    expected = {"ice_internal_melt": 0.03, "ice_external_melt": 0.07, "chilled_water": 0.0}
    expected |= {"ice_encapsulated": 0.08, "eutectic_salt": 0.0}
    assert 1.0 - coarse / fine == pytest.approx(expected[kind], abs=0.005)


@every_step
@every_way
@every_kind
def test_two_equal_half_tanks_are_one_tank(kind, way, step_h):
    one = tanks(kind, capacity=CAPACITY, discharge_limit_kw_th=50.0, charge_limit_kw_th=40.0)
    two = tanks(
        kind, capacity=CAPACITY / 2, shape=(1, 2), discharge_limit_kw_th=25.0, charge_limit_kw_th=20.0
    )
    for free in (one, two):
        assert (knots_of(free, way) <= free.discharge_limit_kw_th[..., None]).all()
    for whole, halves in (
        (one, two),
        (tanks(kind, capacity=CAPACITY), tanks(kind, capacity=150.0, shape=(1, 2))),
    ):
        inventory, rate, loss, _ = run(whole, way, step_h, 0.7)
        parts = run(halves, way, step_h, 0.7)
        for total, split in zip((inventory, rate, loss), parts[:3], strict=True):
            np.testing.assert_allclose(split.sum(axis=-1), total[..., 0], atol=1e-9)


@every_step
@every_kind
def test_standing_loss_is_as_stated(kind, step_h):
    part = tanks(kind, capacity=CAPACITY, loss=0.002)
    inventory, _, loss, _ = run(part, "discharge", step_h, 0.5, share=0.0)
    if kind in FREEZING_KINDS:
        # A share of capacity, as long as ice is left: 0.6 kW_th, 14.4 kWh_th a day.
        np.testing.assert_allclose(loss, 0.6, rtol=1e-12)
        assert inventory[-1, 0, 0] == pytest.approx(150.0 - 14.4, rel=1e-12)
    else:
        assert inventory[-1, 0, 0] == pytest.approx(
            150.0 * (1.0 - 0.002 * step_h) ** (24.0 / step_h), rel=1e-12
        )


@every_step
@every_kind
def test_an_empty_tank_gives_nothing_and_a_full_one_takes_only_its_loss(kind, step_h):
    part = tanks(kind, capacity=CAPACITY)
    inventory, rate, loss, _ = run(part, "discharge", step_h, 0.0)
    assert (inventory == 0.0).all()
    assert (rate == 0.0).all()
    assert (loss == 0.0).all()
    inventory, rate, loss, _ = run(part, "charge", step_h, 1.0)
    assert (rate <= loss + 1e-9).all()
    still = tanks(kind, capacity=CAPACITY, loss=0.0)
    inventory, rate, _, _ = run(still, "charge", step_h, 1.0)
    assert (rate == 0.0).all()
    assert (inventory == CAPACITY).all()


@every_kind
def test_a_last_remnant_never_goes_faster_than_it_is_there(kind):
    part = tanks(kind, capacity=CAPACITY)
    for step_h in STEPS_H:
        for lmtd in (DISCHARGE_K, 12.0):
            knots = knots_of(part, "discharge", lmtd)
            for inventory in (1e-6, 0.5, 3.0):
                now = np.full((1, 1), inventory)
                loss = tank.standing_loss_kw_th(
                    part.kind, now, part.capacity_kwh_th, part.loss_fraction_per_h, step_h
                )
                most = tank.most_discharge_kw_th(now, loss, part.capacity_kwh_th, knots, step_h)
                assert 0.0 <= most[0, 0] <= (now - loss * step_h)[0, 0] / step_h + 1e-12


@every_way
@every_kind
def test_no_flow_gives_and_takes_nothing(kind, way):
    # A stopped pump: the limit of pump and exchanger is 0, whatever the tank could do.
    part = tanks(kind, capacity=CAPACITY, loss=0.0, discharge_limit_kw_th=0.0, charge_limit_kw_th=0.0)
    inventory, rate, _, _ = run(part, way, 0.25, 0.5)
    assert (rate == 0.0).all()
    assert (inventory == 0.5 * CAPACITY).all()
