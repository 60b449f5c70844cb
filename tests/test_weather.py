"""Wet bulb against psychrolib, its limits by hand, and its inverse."""

import numpy as np
import pytest

from sites import weather
from sites.errors import SitesError


def test_wet_bulb_of_one_hot_afternoon():
    # psychrolib GetTWetBulbFromRelHum(35, 0.40, 101325) = 23.934 (its own bisection stops within 0.001 K).
    assert weather.wet_bulb_c(35.0, 40.0) == pytest.approx(23.934, abs=1e-3)


@pytest.mark.parametrize("pressure_pa", [101325.0, 84000.0])
def test_wet_bulb_against_a_second_tool(pressure_pa):
    psychrolib = pytest.importorskip("psychrolib")
    psychrolib.SetUnitSystem(psychrolib.SI)
    dry, humidity = np.meshgrid(np.arange(-25.0, 50.1, 2.5), np.array([2.0, 15, 30, 45, 60, 75, 90, 100]))
    ours = weather.wet_bulb_c(dry, humidity, pressure_pa)
    second = [
        psychrolib.GetTWetBulbFromRelHum(float(t), float(h) / 100.0, pressure_pa)
        for t, h in zip(dry.flat, humidity.flat, strict=True)
    ]
    # The second tool's bracket ends at 0.001 K wide. Near freezing some air has two wet bulbs, over ice and over
    # water, and it takes either; ours is over water there.
    either = np.abs(np.asarray(second) - ours.ravel()) > 1e-3
    assert either.sum() <= 2
    assert (np.abs(ours.ravel()[either]) < 0.7).all()
    back = [
        psychrolib.GetHumRatioFromTWetBulb(float(t), float(w), pressure_pa)
        for t, w in zip(dry.flat, ours.flat, strict=True)
    ]
    held = [
        psychrolib.GetHumRatioFromRelHum(float(t), float(h) / 100.0, pressure_pa)
        for t, h in zip(dry.flat, humidity.flat, strict=True)
    ]
    np.testing.assert_allclose(back, held, atol=1e-11)


def test_air_with_two_wet_bulbs_gets_the_one_over_water():
    # 4 degC, from dry to damp: the wet bulb goes from below freezing to 0.01 degC and on, and never back.
    wet = weather.wet_bulb_c(4.0, np.linspace(30.0, 60.0, 601))
    assert (np.diff(wet) > 0.0).all()
    assert not ((wet > -0.1) & (wet < weather.TRIPLE_POINT_C)).any()
    assert (wet >= weather.TRIPLE_POINT_C).any()


def test_saturation_pressure_against_a_second_tool():
    psychrolib = pytest.importorskip("psychrolib")
    psychrolib.SetUnitSystem(psychrolib.SI)
    temperature = np.array([-40.0, -5.0, 0.0, 0.02, 20.0, 55.0])
    second = [psychrolib.GetSatVapPres(float(t)) for t in temperature]
    np.testing.assert_allclose(weather.saturation_pa(temperature), second, rtol=1e-12)


def test_limits_of_wet_bulb():
    dry = np.array([-20.0, -1.0, 5.0, 30.0, 50.0])
    np.testing.assert_allclose(weather.wet_bulb_c(dry, 100.0), dry, atol=2e-9)
    wet = weather.wet_bulb_c(dry[:, None], np.linspace(0.0, 100.0, 41))
    assert (np.diff(wet, axis=1) > 0.0).all()
    # The driest, hottest, highest air that is let in stays clear of the bracket's end.
    assert 60.0 - weather.wet_bulb_c(60.0, 0.0, 50_000.0) < weather.WIDEST_DEPRESSION_K - 10.0


def test_relative_humidity_is_the_inverse():
    dry, humidity = np.meshgrid(np.linspace(-30, 55, 18), np.linspace(0, 100, 21))
    wet = weather.wet_bulb_c(dry, humidity)
    np.testing.assert_allclose(weather.relative_humidity_pct(dry, wet), humidity, atol=1e-6)


def test_many_equal_each():
    random = np.random.default_rng(4)
    dry, humidity = random.uniform(-30, 50, 40), random.uniform(0, 100, 40)
    each = [float(weather.wet_bulb_c(float(t), float(h))) for t, h in zip(dry, humidity, strict=True)]
    np.testing.assert_array_equal(weather.wet_bulb_c(dry, humidity), each)


@pytest.mark.parametrize(
    ("dry", "humidity", "message"),
    [
        (
            [20.0, 95.0],
            50.0,
            "dry_bulb_c, index (1,): came 95; expected -60 to 60 degC; correct or leave out the reading "
            "(1 such in all)",
        ),
        (
            [20.0, 21.0],
            [np.nan, 101.0],
            "rh_pct, index (0,): came nan; expected 0 to 100 %; correct or leave out the reading (2 such in all)",
        ),
    ],
)
def test_readings_that_cannot_be_are_refused(dry, humidity, message):
    with pytest.raises(SitesError) as refused:
        weather.wet_bulb_c(np.array(dry), np.array(humidity))
    assert str(refused.value) == message


def test_a_wet_bulb_that_cannot_be_is_refused():
    with pytest.raises(SitesError) as refused:
        weather.relative_humidity_pct(np.array([[20.0, 20.0]]), np.array([[15.0, 25.0]]))
    assert str(refused.value) == (
        "wet_bulb_c, index (0, 1): came 25; expected at most dry_bulb_c; check which is which (1 such in all)"
    )
    with pytest.raises(SitesError, match="no less than that of dry air"):
        weather.relative_humidity_pct(30.0, 2.0)
