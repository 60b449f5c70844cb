"""Tank models against published forms, second tools and values worked by hand."""

import numpy as np
import pytest
from model_arrays import tanks
from numpy.polynomial.polynomial import polyval
from scipy.integrate import quad

from sites import tank
from sites.errors import SitesError
from sites.units import LATENT_HEAT_OF_ICE_KJ_PER_KG

TANK_KWH_TH = 370.61
"""4000 L of water frozen through, 1 kg per litre."""
BRINE_12_TO_4_K = 7.28191


def model(kind, way, soc, lmtd):
    """The model that a curve must stay under, share of capacity per hour."""
    y = 1.0 - soc if way == "discharge" else soc
    if kind == "ice_internal_melt" and way == "discharge":
        return tank.strand_fraction_per_h(y, lmtd)
    polynomial = tank.EXTERNAL_MELT_DISCHARGE if way == "discharge" else tank.INTERNAL_MELT
    return tank.ua_fraction_per_h(y, lmtd, polynomial)


def curve(kind, way, soc, lmtd):
    """The piecewise-linear limit of a tank of 1 kWh_th at every charged fraction."""
    one = tanks(kind, capacity=1.0)
    curves = tank.discharge_curves(one) if way == "discharge" else tank.charge_curves(one)
    knots = tank.knots_kw_th(curves, one.capacity_kwh_th, one.discharge_limit_kw_th, lmtd)
    return tank.limit_kw_th(soc[:, None], one.capacity_kwh_th, knots)[:, 0]


def test_lmtd_by_hand_and_at_its_limits():
    assert tank.lmtd_k(12.0, 4.0) == pytest.approx(8.0 / np.log(3.0), rel=1e-14)
    assert tank.lmtd_k(12.0, 4.0) == pytest.approx(BRINE_12_TO_4_K, abs=5e-6)
    # No change in the brine: the difference to freezing itself, approached without a jump.
    assert tank.lmtd_k(8.0, 8.0) == 8.0
    assert tank.lmtd_k(8.0, 8.0 * (1.0 + 1e-9)) == pytest.approx(8.0 * (1.0 + 0.5e-9), rel=1e-13)
    # Charging: -5 in, -2 out is the mirror of 5 in, 2 out.
    assert tank.lmtd_k(-5.0, -2.0) == tank.lmtd_k(5.0, 2.0) == pytest.approx(3.0 / np.log(2.5), rel=1e-14)
    # Touching the ice, or on either side of it: no difference to work with, and no warning.
    np.testing.assert_array_equal(
        tank.lmtd_k(np.array([12.0, 0.0, -5.0, 1e-30]), np.array([0.0, 4.0, 2.0, 4.0])), 0
    )


def test_lmtd_of_many_equals_each():
    inlet, outlet = np.meshgrid(np.linspace(-8, 14, 23), np.linspace(-7, 13, 21))
    many = tank.lmtd_k(inlet, outlet)
    each = [float(tank.lmtd_k(float(a), float(b))) for a, b in zip(inlet.flat, outlet.flat, strict=True)]
    np.testing.assert_array_equal(many.ravel(), each)


def test_set_a_at_brine_12_to_4():
    # Strand form, set A, LMTD 7.28191 K, computed outside this code.
    depth = np.array([0.0, 0.25, 0.5, 0.75, 0.9])
    rate = tank.strand_fraction_per_h(depth, BRINE_12_TO_4_K)
    np.testing.assert_allclose(rate, [0.44565, 0.38996, 0.29586, 0.16335, 0.06541], atol=5e-6)


def test_set_a_by_hand():
    # d = 0.5, LMTD 10 K: 0.045 - 0.0375 + 0.612 - 0.162 - 0.054
    assert tank.strand_fraction_per_h(0.5, 10.0) == pytest.approx(0.4035, rel=1e-14)
    assert tank.strand_fraction_per_h(1.0, 5.0) == 0.0


def test_time_to_melt_at_constant_difference():
    # 1.3216 h to half, 3.8135 h to 90 %: dt = dd / rate, integrated by scipy.
    def hours(depth):
        return quad(lambda d: 1.0 / tank.strand_fraction_per_h(d, BRINE_12_TO_4_K), 0.0, depth)[0]

    assert hours(0.5) == pytest.approx(1.3216, abs=5e-5)
    assert hours(0.9) == pytest.approx(3.8135, abs=5e-5)


def test_ua_form_at_its_ends():
    # Henze & Krarti 2002: P(1) of internal melt 0.0435; P(0) is the first coefficient.
    assert tank.ua_fraction_per_h(1.0, 10.0, tank.INTERNAL_MELT) == pytest.approx(0.0435, abs=1e-10)
    assert tank.ua_fraction_per_h(0.0, 5.0, tank.EXTERNAL_MELT_DISCHARGE) == pytest.approx(0.5878, rel=1e-14)
    y = np.linspace(0.0, 1.0, 7)
    each = [tank.ua_fraction_per_h(value, 3.0, tank.INTERNAL_MELT) for value in y]
    np.testing.assert_array_equal(tank.ua_fraction_per_h(y, 3.0, tank.INTERNAL_MELT), each)


@pytest.mark.parametrize("way", ["discharge", "charge"])
@pytest.mark.parametrize("kind", ["ice_internal_melt", "ice_external_melt"])
def test_curve_lies_nowhere_above_the_model_and_close_under_it(kind, way):
    """Worst shortfall from 2 to 12 K, share of capacity per hour: set A 0.0064, UA form 0.0227 (of 0.65).

    Set A, by hand: a chord over 0.25 of SOC misses a parabola by 0.25^2 / 4 x (0.15 + 0.216 x 1.2) = 0.0064.
    Below 2 K keeping set A monotone costs up to 0.0135, in a range where it gives a rate without a difference.
    """
    soc = np.linspace(0.0, 1.0, 4001)
    worst = 0.0
    for lmtd in np.linspace(0.0, 12.0, 61):
        short = model(kind, way, soc, lmtd) - curve(kind, way, soc, lmtd)
        assert short.min() >= -1e-14
        if lmtd >= 2.0:
            worst = max(worst, short.max())
    ua_form = {"discharge": 0.0227, "charge": 0.0203}[way]
    by_hand = 0.25**2 / 4 * (0.15 + 0.216 * 1.2)
    set_a = kind == "ice_internal_melt" and way == "discharge"
    assert worst == pytest.approx(by_hand if set_a else ua_form, abs=1e-4)


@pytest.mark.parametrize("kind", ["ice_internal_melt", "ice_external_melt"])
def test_curves_are_monotone_at_every_difference(kind):
    soc = np.linspace(0.0, 1.0, 401)
    for lmtd in np.linspace(0.0, 12.0, 49):
        assert np.diff(curve(kind, "discharge", soc, lmtd)).min() >= -1e-15
        assert np.diff(curve(kind, "charge", soc, lmtd)).max() <= 1e-15


def test_minorant_is_a_tangent_side_for_convex_and_a_chord_for_concave():
    knots = np.array([0.0, 1.0, 2.0])
    # y^2: the chord over a unit step is above by 1/4; -y^2: the chord is below.
    np.testing.assert_allclose(tank.minorant((0.0, 0.0, 1.0), knots), [-0.25, 0.75, 3.75], atol=1e-14)
    np.testing.assert_allclose(tank.minorant((0.0, 0.0, -1.0), knots), [0.0, -1.0, -4.0], atol=1e-14)


def test_limits_of_one_tank_at_brine_12_to_4():
    # Set A at a tank of 370.61 kWh_th, computed outside this code; the last digit is rounded.
    soc = np.array([0.1, 0.25, 0.5, 0.75, 1.0])
    limits = TANK_KWH_TH * curve("ice_internal_melt", "discharge", soc, BRINE_12_TO_4_K)
    np.testing.assert_allclose(limits, [24.24, 60.54, 109.65, 144.53, 165.16], atol=0.01)


def test_a_colder_inlet_in_series_takes_a_fifth_of_the_limit():
    # At half empty: 109.7 kW with 12 degC brine, 87.5 kW with 8 degC from a machine upstream.
    half = np.array([0.5])
    for inlet_c, expected in ((12.0, 109.7), (8.0, 87.5)):
        limit = TANK_KWH_TH * curve("ice_internal_melt", "discharge", half, tank.lmtd_k(inlet_c, 4.0))
        assert limit[0] == pytest.approx(expected, abs=0.05)


def test_how_long_a_flat_rate_can_be_held():
    # 120 kW from full: 1.345 h by the model; straight lines between 0.01/.10/.25/.50/.75/1 give 1.315 h.
    def held_h(soc_needed):
        return TANK_KWH_TH * (1.0 - soc_needed) / 120.0

    soc = np.linspace(0.3, 0.9, 60001)
    by_model = soc[
        np.searchsorted(TANK_KWH_TH * model("ice_internal_melt", "discharge", soc, BRINE_12_TO_4_K), 120)
    ]
    lines = TANK_KWH_TH * curve("ice_internal_melt", "discharge", soc, BRINE_12_TO_4_K)
    by_lines = soc[np.searchsorted(lines, 120)]
    assert held_h(by_model) == pytest.approx(1.345, abs=1e-3)
    assert held_h(by_lines) == pytest.approx(1.315, abs=2e-3)


def test_curves_of_water_are_flat_and_follow_the_flow_limit():
    water = tanks("chilled_water", capacity=1000.0, shape=(2, 1), discharge_limit_kw_th=[[np.inf], [125.0]])
    curves = tank.discharge_curves(water)
    knots = tank.knots_kw_th(
        curves, water.capacity_kwh_th, water.discharge_limit_kw_th, np.array([[0.0], [9.0]])
    )
    np.testing.assert_allclose(knots[:, 0], [[200.0] * len(tank.KNOT_SOC), [125.0] * len(tank.KNOT_SOC)])


def test_an_outside_limit_caps_the_curve():
    one = tanks(capacity=TANK_KWH_TH, discharge_limit_kw_th=50.0)
    knots = tank.knots_kw_th(
        tank.discharge_curves(one), one.capacity_kwh_th, one.discharge_limit_kw_th, BRINE_12_TO_4_K
    )
    full, low = np.array([[TANK_KWH_TH]]), np.array([[0.1 * TANK_KWH_TH]])
    assert tank.limit_kw_th(full, one.capacity_kwh_th, knots)[0, 0] == 50.0
    assert tank.limit_kw_th(low, one.capacity_kwh_th, knots)[0, 0] == pytest.approx(24.24, abs=0.01)


def test_padding_gives_and_takes_nothing():
    none, zero = tanks(capacity=0.0, exists=False), np.zeros((1, 1))
    for curves, most in (
        (tank.discharge_curves(none), tank.most_discharge_kw_th),
        (tank.charge_curves(none), tank.most_charge_kw_th),
    ):
        knots = tank.knots_kw_th(curves, none.capacity_kwh_th, none.discharge_limit_kw_th, BRINE_12_TO_4_K)
        assert tank.limit_kw_th(zero, none.capacity_kwh_th, knots)[0, 0] == 0.0
        assert most(zero, zero, none.capacity_kwh_th, knots, 0.25)[0, 0] == 0.0


def test_greatest_rates_by_hand():
    # Limit E/h of a 100 kWh_th tank (straight from 0 to 100 kW): E_end + E_end dt = E - loss dt.
    capacity, inventory, loss = np.array([[100.0]]), np.array([[60.0]]), np.array([[4.0]])
    rising = (100.0 * tank.KNOT_SOC)[None, None, :]
    discharge = tank.most_discharge_kw_th(inventory, loss, capacity, rising, 0.5)
    assert discharge[0, 0] == pytest.approx((60.0 - 2.0) / 1.5, rel=1e-14)
    # Charge limit 100 - E: E_end - (100 - E_end) dt = E - loss dt.
    charge = tank.most_charge_kw_th(inventory, loss, capacity, 100.0 - rising, 0.5)
    assert 60.0 + (charge[0, 0] - 4.0) * 0.5 == pytest.approx((58.0 + 50.0) / 1.5, rel=1e-14)
    # A flat limit empties the tank, and fills it, but no further.
    flat = np.full((1, 1, len(tank.KNOT_SOC)), 1000.0)
    assert tank.most_discharge_kw_th(inventory, loss, capacity, flat, 0.5)[0, 0] == pytest.approx(116.0)
    assert tank.most_charge_kw_th(inventory, loss, capacity, flat, 0.5)[0, 0] == pytest.approx(84.0)


def test_greatest_rate_agrees_with_a_root_finder():
    from scipy.optimize import brentq

    random = np.random.default_rng(3)
    many = tanks(capacity=random.uniform(50, 500, (40, 2)), shape=(40, 2))
    capacity, lmtd = many.capacity_kwh_th, random.uniform(0.5, 12.0, (40, 2))
    inventory = random.uniform(0, 1, (40, 2)) * capacity
    loss = tank.standing_loss_kw_th(many.kind, inventory, capacity, many.loss_fraction_per_h, 0.25)
    knots = tank.knots_kw_th(tank.discharge_curves(many), capacity, many.discharge_limit_kw_th, lmtd)
    most = tank.most_discharge_kw_th(inventory, loss, capacity, knots, 0.25)
    for n in range(40):
        at, cap, start = knots[n, 1], capacity[n, 1], inventory[n, 1] - loss[n, 1] * 0.25

        def short(end, at=at, cap=cap, start=start):
            return end + 0.25 * max(0.0, np.interp(end / cap, tank.KNOT_SOC, at)) - start

        end = 0.0 if short(0.0) >= 0.0 else brentq(short, 0.0, cap, xtol=1e-12)
        assert most[n, 1] == pytest.approx((start - end) / 0.25, abs=1e-8)


def test_many_tanks_equal_each_alone():
    random = np.random.default_rng(5)
    kinds = ["ice_internal_melt", "ice_external_melt", "chilled_water"]
    many = tanks(kinds, capacity=random.uniform(50, 500, (6, 3)), shape=(6, 3))
    lmtd, soc = random.uniform(0, 12, (6, 3)), random.uniform(0, 1, (6, 3))

    def everything(part, lmtd, soc):
        capacity = part.capacity_kwh_th
        inventory = soc * capacity
        loss = tank.standing_loss_kw_th(part.kind, inventory, capacity, part.loss_fraction_per_h, 0.25)
        out = tank.knots_kw_th(tank.discharge_curves(part), capacity, part.discharge_limit_kw_th, lmtd)
        into = tank.knots_kw_th(tank.charge_curves(part), capacity, part.charge_limit_kw_th, lmtd)
        return np.stack(
            [
                loss,
                tank.limit_kw_th(inventory, capacity, out),
                tank.most_discharge_kw_th(inventory, loss, capacity, out, 0.25),
                tank.most_charge_kw_th(inventory, loss, capacity, into, 0.25),
            ]
        )

    together = everything(many, lmtd, soc)
    for n in range(6):
        alone = everything(many.take(np.array([n])), lmtd[n : n + 1], soc[n : n + 1])
        np.testing.assert_array_equal(together[:, n : n + 1], alone)


def test_standing_loss_of_ice_is_of_capacity_and_of_water_is_of_inventory():
    # 3e-4 per hour = 0.72 % a day.
    both = tanks(["ice_internal_melt", "chilled_water"], capacity=1000.0, shape=(1, 2))
    half, last, empty = (np.full((1, 2), value) for value in (500.0, 0.06, 0.0))

    def loss(inventory):
        return tank.standing_loss_kw_th(
            both.kind, inventory, both.capacity_kwh_th, both.loss_fraction_per_h, 0.25
        )

    np.testing.assert_allclose(loss(half), [[0.3, 0.15]], rtol=1e-14)
    np.testing.assert_allclose(loss(last), [[0.24, 1.8e-5]], rtol=1e-14)
    np.testing.assert_array_equal(loss(empty), [[0.0, 0.0]])
    assert 24 * loss(half)[0, 0] / 1000.0 == pytest.approx(0.0072, rel=1e-12)


def test_latent_heat_against_the_properties_of_water_and_ice():
    # IAPWS-06 ice against IAPWS-95 water at 0 degC and 1 atm: 333.43 kJ/kg; the constant is within 0.05 %.
    iapws = pytest.importorskip("iapws")
    water = iapws.IAPWS95(T=273.1525, P=0.101325)
    ice = iapws._iapws._Ice(273.1525, 0.101325)
    latent = water.h - ice["h"]
    assert latent == pytest.approx(333.43, abs=0.01)
    assert pytest.approx(latent, rel=5e-4) == LATENT_HEAT_OF_ICE_KJ_PER_KG
    # 4000 L at 1 kg per litre: 370.61 kWh, "about 371" in the trade.
    held_kwh_th = 4000.0 * LATENT_HEAT_OF_ICE_KJ_PER_KG / 3600.0
    assert held_kwh_th == pytest.approx(TANK_KWH_TH, abs=0.005)


def test_usable_water_against_coolprop():
    # 1000 m3, 5 to 13 degC, figure of merit 0.9: 8391.9 kWh_th with CoolProp's water at 9 degC.
    props = pytest.importorskip("CoolProp.CoolProp").PropsSI
    density = props("D", "T", 282.15, "P", 101325, "Water")
    cp = props("C", "T", 282.15, "P", 101325, "Water") / 1000.0
    second = 1000.0 * density * cp * 8.0 * 0.9 / 3600.0
    assert second == pytest.approx(8391.9, abs=0.05)
    assert tank.usable_water_kwh_th(1000.0, 5.0, 13.0) == pytest.approx(second, rel=2e-5)
    np.testing.assert_allclose(
        tank.usable_water_kwh_th(1000.0, 5.0, np.array([13.0, 9.0])) / second, [1.0, 0.5], rtol=2e-5
    )


@pytest.mark.parametrize(
    ("values", "message"),
    [
        (
            (3.5, 13.0, 0.9),
            "supply_c: came 3.5 degC; expected 4 degC or more; a stratified tank turns over below that",
        ),
        ((5.0, 5.0, 0.9), "return_c: came 0 K above supply_c; expected above 0; check both"),
        ((5.0, 13.0, 90.0), "figure_of_merit: came 90.0; expected above 0 to 1; 0.85 to 0.95 is usual"),
    ],
)
def test_water_that_cannot_stratify_is_refused(values, message):
    with pytest.raises(SitesError) as refused:
        tank.usable_water_kwh_th(1000.0, *values)
    assert str(refused.value) == message


def test_brine_used_for_charging_stays_liquid():
    # 25 % ethylene glycol by mass: cp 3.763 kJ/kgK at 0 degC, freezes at -10.97 degC (CoolProp, INCOMP::MEG).
    props = pytest.importorskip("CoolProp.CoolProp").PropsSI
    assert props("C", "T", 273.15, "P", 101325, "INCOMP::MEG[0.25]") / 1000.0 == pytest.approx(
        3.763, abs=5e-4
    )
    freezing = props("T_FREEZE", "T", 273.15, "P", 101325, "INCOMP::MEG[0.25]") - 273.15
    assert freezing == pytest.approx(-10.97, abs=5e-3)
    # A brine of -7 degC, the coldest usual for charging, can still be pumped; its LMTD to -4 degC is 5.36 K.
    assert freezing < -7.0
    assert tank.lmtd_k(-7.0, -4.0) == pytest.approx(3.0 / np.log(7.0 / 4.0), rel=1e-14)


def test_knots_start_and_end_where_a_tank_does():
    assert tank.KNOT_SOC[0] == 0.0
    assert tank.KNOT_SOC[1] == 0.01
    assert tank.KNOT_SOC[-1] == 1.0
    assert (np.diff(tank.KNOT_SOC) > 0).all()
    # Set A gives nothing from the last hundredth at brine 12 to 4.
    last = polyval(0.99, tank.SET_A[:3]) + polyval(0.99, tank.SET_A[3:]) * BRINE_12_TO_4_K / 10.0
    assert last == pytest.approx(0.0, abs=2e-5)


def test_eutectic_limit_is_flat_and_then_falls_to_nothing():
    part = tanks("eutectic_salt", capacity=600.0)
    knots = tank.knots_kw_th(
        tank.discharge_curves(part), part.capacity_kwh_th, part.discharge_limit_kw_th, 7.0
    )
    limits = [
        float(tank.limit_kw_th(np.array([[held]]), part.capacity_kwh_th, knots)[0, 0])
        for held in (600, 300, 0)
    ]
    assert limits == pytest.approx([100.0, 100.0, 0.0])
    assert 0.0 < float(tank.limit_kw_th(np.array([[60.0]]), part.capacity_kwh_th, knots)[0, 0]) <= 25.0


def test_eutectic_salt_holds_a_kwh_in_38_kg():
    """95 kJ/kg (Chen & Sheen 1993): 3600 / 95 = 37.89 kg."""
    assert tank.eutectic_kwh_th(37.8947) == pytest.approx(1.0, rel=1e-5)


def test_encapsulated_ice_melts_by_the_internal_form_in_the_discharged_fraction():
    """P(0) = 1.3879 and P(1) = 0.0435 of Henze & Krarti 2002, at 10 K: shares of capacity per hour."""
    part = tanks("ice_encapsulated", capacity=1000.0)
    knots = tank.knots_kw_th(
        tank.discharge_curves(part), part.capacity_kwh_th, part.discharge_limit_kw_th, 10.0
    )
    # The curve from below gives up a little at the ends of a convex stretch.
    assert 0.985 * 1387.9 <= knots[0, 0, -1] <= 1387.9
    assert 0.0 < knots[0, 0, 0] <= 43.5 + 1e-9


def test_a_colder_return_shrinks_a_chilled_water_tank_in_proportion():
    """1000 m3, 5 to 13 degC: 8391.9 kWh (CoolProp water); back at 11 degC it holds 6/8 of that."""
    assert tank.water_at_return_kwh_th(8391.9, 5.0, 11.0, 13.0) == pytest.approx(8391.9 * 0.75)
    assert tank.water_at_return_kwh_th(8391.9, 5.0, 15.0, 13.0) == pytest.approx(8391.9)
    assert tank.water_at_return_kwh_th(8391.9, 5.0, 4.0, 13.0) == 0.0
    with pytest.raises(
        SitesError, match="design_return_c: came 0 K above supply_c; expected above 0; check both"
    ):
        tank.water_at_return_kwh_th(1.0, 5.0, 9.0, 5.0)


def test_external_melt_is_never_charged_past_full():
    part = tanks("ice_external_melt", capacity=1000.0, loss=0.0)
    knots = tank.knots_kw_th(tank.charge_curves(part), part.capacity_kwh_th, part.charge_limit_kw_th, 5.0)
    for held in (900.0, 999.0, 1000.0):
        for step_h in (0.25, 1.0):
            most = tank.most_charge_kw_th(
                np.array([[held]]), np.zeros((1, 1)), part.capacity_kwh_th, knots, step_h
            )
            assert held + float(most[0, 0]) * step_h <= 1000.0 + 1e-9
