"""Assumed load profiles, temperature segments and goodness of fit; and a year of real weather through all models."""

from pathlib import Path

import numpy as np
import pytest
from model_arrays import CENTRIFUGAL, SCREW, chillers

from fleet import schema
from sites import chiller, load, weather
from sites.errors import SitesError

TYPES = tuple(load.PROFILES)
WEDNESDAY, SATURDAY, SUNDAY = 2, 5, 6


def day(types, weekday=WEDNESDAY, holiday=False, dry_bulb_c=35.0, peak=1000.0, design_c=35.0, step_h=0.25):
    hour = np.arange(0.0, 24.0, step_h)
    count, names = len(hour), np.array(types, dtype=object)
    return load.profile_kw_th(
        np.full(len(names), peak),
        names,
        hour,
        np.full(count, weekday),
        np.full(count, holiday),
        np.broadcast_to(dry_bulb_c, (len(names), count)).astype(np.float64),
        np.full(len(names), design_c),
    )


def test_every_building_type_of_the_table_has_a_profile():
    assert set(schema.choices("fleet", "sites", "building_type")) == set(TYPES)


def test_peak_at_design_temperature_in_the_busiest_hour():
    course = day(TYPES)
    np.testing.assert_allclose(course.max(axis=1), 1000.0, rtol=1e-14)
    assert (course >= 0.0).all()
    # Hotter than design is still the peak, and a mild day is the internal share.
    np.testing.assert_array_equal(day(TYPES, dry_bulb_c=45.0).max(axis=1), 1000.0)
    internal = [profile.internal_fraction * 1000.0 for profile in load.PROFILES.values()]
    np.testing.assert_allclose(day(TYPES, dry_bulb_c=0.0).max(axis=1), internal, rtol=1e-14)


def test_an_office_by_hand():
    # Half way from balance 14 to design 34 degC: 0.45 + 0.55 / 2 = 0.725 of the peak from 7 to 19 h; a tenth of
    # that at night, the mean of both at 6 h and 20 h, on the ramps.
    course = day(["office"], dry_bulb_c=24.0, design_c=34.0)[0]
    at = {hour: course[int(hour * 4)] for hour in (0, 5, 6, 7, 12, 19, 20, 21)}
    expected = {0: 72.5, 5: 72.5, 6: 398.75, 7: 725.0, 12: 725.0, 19: 725.0, 20: 398.75, 21: 72.5}
    assert at == pytest.approx(expected, rel=1e-12)


def test_a_hall_is_still_warm_past_midnight():
    course = day(["concert_hall"])[0]
    assert course[0] == pytest.approx(1000.0 * (0.1 + 0.9 * 0.5))
    assert course[4] == pytest.approx(100.0)


@pytest.mark.parametrize(
    ("weekday", "holiday", "closed"),
    [
        (WEDNESDAY, False, set()),
        (SATURDAY, False, {"office", "school", "courthouse", "other"}),
        (SUNDAY, False, {"office", "school", "courthouse", "other"}),
        (WEDNESDAY, True, {"office", "school", "courthouse", "other"}),
    ],
)
def test_closed_days(weekday, holiday, closed):
    highest = day(TYPES, weekday, holiday).max(axis=1)
    assert {name for name, value in zip(TYPES, highest, strict=True) if value < 999.0} == closed


def test_many_sites_equal_each_alone():
    random = np.random.default_rng(6)
    hour, weekday = np.tile(np.arange(24.0), 3), np.repeat([4, 5, 6], 24)
    names, dry = np.array(random.choice(TYPES, 20), dtype=object), random.uniform(5, 42, (20, 72))
    peak, design, holiday = random.uniform(50, 5000, 20), random.uniform(30, 40, 20), np.zeros(72, dtype=bool)
    together = load.profile_kw_th(peak, names, hour, weekday, holiday, dry, design)
    for n in range(20):
        one = slice(n, n + 1)
        alone = load.profile_kw_th(peak[one], names[one], hour, weekday, holiday, dry[one], design[one])
        np.testing.assert_array_equal(together[one], alone)


@pytest.mark.parametrize(
    ("types", "change", "message"),
    [
        (
            ["office", "ofice"],
            {},
            "building_type, index 1: came ofice; expected one of office, school, hotel, courthouse, concert_hall, "
            "hospital, laboratory, retail, other",
        ),
        (
            ["office"],
            {"design_c": 12.0},
            "design_c, index 0: came 12; expected a design temperature above the balance temperature, 16 or so "
            "(1 such in all)",
        ),
        (
            ["office"],
            {"peak": np.nan},
            "peak_cooling_kw_th, index 0: came nan; expected 0 or more (1 such in all)",
        ),
    ],
)
def test_sites_that_cannot_have_a_profile_are_refused(types, change, message):
    with pytest.raises(SitesError) as refused:
        day(types, **change)
    assert str(refused.value) == message


def test_segments_of_the_published_example():
    # Six bounds make seven segments; T = 80 degF -> 30, 15, 10, 10, 10, 5, 0 (open standard text).
    np.testing.assert_array_equal(load.segments_k(80.0, load.SEGMENT_BOUNDS_F), [30, 15, 10, 10, 10, 5, 0])


def test_segments_sum_to_the_temperature():
    temperature = np.linspace(-20.0, 120.0, 29).reshape(1, 29)
    features = load.segments_k(temperature, load.SEGMENT_BOUNDS_F)
    assert features.shape == (1, 29, 7)
    np.testing.assert_allclose(features.sum(axis=-1), temperature, atol=1e-12)
    np.testing.assert_array_equal(
        features[0, 3], load.segments_k(float(temperature[0, 3]), load.SEGMENT_BOUNDS_F)
    )
    np.testing.assert_array_equal(load.segments_k(25.0, (20.0,)), [20.0, 5.0])
    with pytest.raises(SitesError, match=r"expected one or more rising temperatures; sort them"):
        load.segments_k(25.0, (20.0, 10.0))


def test_goodness_of_fit_by_hand():
    # e = 1, -1, 2, 0 over a mean of 10 with one parameter: sqrt(6 / 3) / 10 and 2 / (3 x 10).
    measured, predicted = np.array([11.0, 9.0, 12.0, 8.0]), np.array([10.0, 10.0, 10.0, 8.0])
    assert load.cv_rmse(measured, predicted, 1) == pytest.approx(np.sqrt(2.0) / 10.0, rel=1e-14)
    assert load.nmbe(measured, predicted, 1) == pytest.approx(2.0 / 30.0, rel=1e-14)
    both = np.stack([measured, 2.0 * measured])
    for index in (load.cv_rmse, load.nmbe):
        together = index(both, np.stack([predicted, 2.0 * predicted]), 1)
        np.testing.assert_allclose(together, index(measured, predicted, 1), rtol=1e-14)
        assert index(measured, measured, 3) == 0.0


@pytest.mark.parametrize(
    ("measured", "parameters", "message"),
    [
        ([1.0, 2.0], 2, "measured: came 2 values for 2 parameters; expected more values than those"),
        (
            [1.0, np.nan, 2.0],
            1,
            "measured, predicted: came values that are missing; expected numbers; leave those out of both",
        ),
        (
            [1.0, -1.0],
            1,
            "measured: came a mean of 0; expected another; a relative error has no meaning there",
        ),
    ],
)
def test_fits_that_cannot_be_judged_are_refused(measured, parameters, message):
    with pytest.raises(SitesError) as refused:
        load.cv_rmse(np.array(measured), np.zeros(len(measured)), parameters)
    assert str(refused.value) == message


def year(file_name):
    """Dry bulb and humidity (8760,) of a typical year that ships inside pvlib."""
    pvlib = pytest.importorskip("pvlib")
    path = Path(pvlib.__file__).parent / "data" / file_name
    frame, _ = pvlib.iotools.read_tmy3(path, map_variables=True, coerce_year=1990)
    return frame["temp_air"].to_numpy(np.float64), frame["relative_humidity"].to_numpy(np.float64)


def plant_year(dry, humidity, design_c):
    """Load of an office with 1000 kW_th and the power of one machine of each kind that carries it all."""
    wet = weather.wet_bulb_c(dry, humidity)
    hours = np.arange(len(dry))
    cooling = load.profile_kw_th(
        np.array([1000.0]),
        np.array(["office"], dtype=object),
        hours % 24.0,
        hours // 24 % 7,
        np.zeros(len(dry), dtype=bool),
        dry[None, :],
        np.array([design_c]),
    )
    machines = chillers(kind=(SCREW, CENTRIFUGAL), capacity=1600.0, cop=(2.96, 6.28))
    capable = chiller.direct(
        machines, np.array([6.67]), chiller.condenser_c(machines, dry[None, :], wet[None, :])
    )
    per_hour = [value[0].T for value in (capable.available_kw_th, capable.full_load_kw)]
    power = chiller.part_load_power_kw(cooling[0][:, None], *per_hour, machines.kind[0])
    return wet, cooling[0], power, capable


def test_a_typical_year_in_the_piedmont():
    dry, humidity = year("723170TYA.CSV")
    # The file's own figures: 35.6 degC at most, 20 958 Kh above 18 degC.
    assert dry.max() == pytest.approx(35.6)
    assert np.maximum(dry - 18.0, 0.0).sum() == pytest.approx(20958.0, abs=1.0)
    wet, cooling, power, capable = plant_year(dry, humidity, 35.6)
    assert (wet <= dry + 1e-9).all()
    # The hottest hour need not be a working hour: the load comes close to its peak, and never passes it.
    assert 900.0 < cooling.max() <= 1000.0
    assert (cooling[None, :] <= capable.available_kw_th[0]).all()
    air, water = power.sum(axis=0)
    seasonal_cop = cooling.sum() / np.array([air, water])
    # Most hours are milder than the rating: air-cooled does better than it; water-cooled suffers at low load.
    assert 2.96 < seasonal_cop[0] < 1.4 * 2.96
    assert 2.0 * seasonal_cop[0] > seasonal_cop[1] > seasonal_cop[0]
    # Many cool hours lie under the ranges of the curves: they are held at the edge and counted.
    assert 8760 < capable.clipped_count < 2 * 8760


def test_a_typical_year_on_an_arctic_shore_needs_hardly_any_outdoor_cooling():
    dry, humidity = year("703165TY.csv")
    assert np.maximum(dry - 18.0, 0.0).sum() == pytest.approx(6.0, abs=0.5)
    _, cooling, power, _ = plant_year(dry, humidity, 35.6)
    # 19.4 degC at most is a quarter of the way from balance 14 to design 35.6 degC: internal + a quarter of the rest.
    assert dry.max() == pytest.approx(19.4)
    assert cooling.max() <= 450.0 + 550.0 / 4.0 + 1e-9
    assert (power[cooling == 0.0] == 0.0).all()
    outdoor = cooling - plant_year(np.minimum(dry, 14.0), humidity, 35.6)[1]
    assert outdoor.sum() < 0.01 * cooling.sum()
