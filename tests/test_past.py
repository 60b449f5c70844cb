"""A plant's metered past: the load that its power implies, and the correction that its meter asks for."""

from dataclasses import replace

import numpy as np
import pytest
from made_sites import made_outlook, made_roster, made_standing

from sites.conditions import conditions
from sites.ground import usual_course
from sites.past import MOST_CORRECTED, YARDSTICK_CV, compare, compressor_kw, implied_load_kw_th


def test_a_meter_that_reads_the_model_asks_for_nothing() -> None:
    roster = made_roster()
    course = usual_course(roster, made_outlook(roster), made_standing(roster))
    match = compare(course.power_kw, compressor_kw(roster, course), course.power_kw, 0.25)
    np.testing.assert_array_equal(match.bias, 0.0)
    np.testing.assert_array_equal(match.cv_rmse, 0.0)
    np.testing.assert_array_equal(match.efficiency, 1.0)
    np.testing.assert_array_equal(match.hours, 35.0)


def test_a_plant_of_another_efficiency_is_found_again_and_moves_usual_and_event_alike() -> None:
    """The meter is the same plant with 8 % better machines: the factor is 1.08, and bias and scatter vanish."""
    roster = made_roster((1, 2, 4, 5))
    outlook, standing = made_outlook(roster), made_standing(roster)
    better = replace(roster, chillers=replace(roster.chillers, rated_cop=1.08 * roster.chillers.rated_cop))
    truth = usual_course(better, outlook, standing)
    course = usual_course(roster, outlook, standing)
    metered = truth.power_kw.copy()
    metered[:, 7:19] = np.nan
    match = compare(course.power_kw, compressor_kw(roster, course), metered, 0.25)
    np.testing.assert_allclose(match.efficiency, 1.08, rtol=1e-9)
    np.testing.assert_allclose(match.corrected_cv_rmse, 0.0, atol=1e-12)
    # 8 % of the compressors' energy, less of the plant's with its pumps.
    assert ((match.bias > 0.045) & (match.bias < 0.08)).all()
    assert (match.cv_rmse > match.bias).all()
    np.testing.assert_array_equal(match.hours, 32.0)
    fitted = replace(
        roster,
        chillers=replace(roster.chillers, rated_cop=match.efficiency[:, None] * roster.chillers.rated_cop),
    )
    np.testing.assert_allclose(usual_course(fitted, outlook, standing).power_kw, truth.power_kw, rtol=1e-9)


def test_bias_and_scatter_by_hand() -> None:
    """Meter 100, 100, 80, model 110, 90, 100: bias 20 / 280, root mean square sqrt(600 / 3) over 280 / 3."""
    meter, model = np.array([[100.0, 100.0, 80.0, np.nan]]), np.array([[110.0, 90.0, 100.0, 70.0]])
    match = compare(model, model, meter, 1.0)
    assert match.bias[0] == pytest.approx(20.0 / 280.0)
    assert match.cv_rmse[0] == pytest.approx(np.sqrt(200.0) / (280.0 / 3.0))
    assert match.hours[0] == 3.0
    assert match.efficiency[0] == pytest.approx(300.0 / 280.0)


def test_what_is_no_matter_of_efficiency_is_not_corrected() -> None:
    meter = np.array([[100.0, 100.0, 0.0, 0.0], [0.0, 0.0, 0.0, 0.0], [100.0, 0.0, 100.0, 0.0]])
    model = np.array([[140.0, 140.0, 0.0, 0.0], [9.0, 9.0, 9.0, 9.0], [0.0, 104.0, 0.0, 104.0]])
    match = compare(model, model, meter, 1.0)
    assert match.bias[0] > MOST_CORRECTED
    np.testing.assert_array_equal(match.efficiency, 1.0)
    assert np.isnan(match.bias[1])
    # Energy agrees to 4 %, its hours not at all: a factor would hide that.
    assert abs(match.bias[2]) < 0.05
    assert match.cv_rmse[2] > YARDSTICK_CV
    assert match.corrected_cv_rmse[2] == match.cv_rmse[2]


def test_power_implies_the_load_that_drew_it() -> None:
    """Site without a tank: load in, power out, load back, wherever no machine's start lies between."""
    roster = made_roster((5,), stage_up_fraction=0.9)
    outlook, standing = made_outlook(roster), made_standing(roster)
    here = conditions(roster, outlook, standing)
    course = usual_course(roster, outlook, standing)
    implied = implied_load_kw_th(roster, here, course.power_kw)
    served = course.direct_kw_th.sum(axis=1)
    near_start = np.abs(served - 0.9 * here.direct_kw_th[:, 0, :]) < 0.2 * here.direct_kw_th[:, 0, :]
    assert (~near_start).sum() > 60
    np.testing.assert_allclose(implied[~near_start], served[~near_start], rtol=1e-6)
    power = course.power_kw.copy()
    power[0, 0], power[0, 1], power[0, 2] = np.nan, 0.0, 1e6
    edge = implied_load_kw_th(roster, here, power)
    assert np.isnan(edge[0, 0])
    assert edge[0, 1] == 0.0
    assert edge[0, 2] == pytest.approx(here.direct_kw_th[0, :, 2].sum())
