"""The load regression against the full matrix of dummies, published limits, and a typical year's weather."""

from pathlib import Path

import numpy as np
import pvlib
import pytest

from sites.errors import SitesError
from sites.load import cv_rmse, segments_k
from sites.load_fit import SEGMENT_BOUNDS_C, WEEK_HOURS, LoadFit, fit_load


def past(sites: int = 3, weeks: int = 6, seed: int = 3) -> tuple[np.ndarray, ...]:
    """Invented loads of some weeks with gaps, their hours of the week, occupancy and dry bulb."""
    rng = np.random.default_rng(seed)
    count = weeks * WEEK_HOURS
    hour = np.arange(count) % WEEK_HOURS
    dry = 22.0 + 8.0 * np.sin(np.arange(count) / 24.0 * 2 * np.pi) + rng.normal(0, 3, (sites, count))
    occupied = np.tile((hour % 24 >= 7) & (hour % 24 < 19) & (hour < 120), (sites, 1))
    level = rng.uniform(100, 300, (sites, WEEK_HOURS))[:, hour]
    load = level + np.where(occupied, 9.0, 4.0) * np.maximum(dry - 12.0, 0.0) + rng.normal(0, 10, dry.shape)
    load[:, rng.random(count) < 0.05] = np.nan
    dry[0, :30] = np.nan
    return load, hour, occupied, dry


def test_it_is_least_squares_on_the_full_matrix_of_dummies() -> None:
    load, hour, occupied, dry = past()
    fitted = fit_load(load, hour, occupied, dry)
    predicted = fitted.at(hour, occupied, np.nan_to_num(dry))
    for row in range(3):
        held = np.isfinite(load[row]) & np.isfinite(dry[row])
        parts = segments_k(dry[row, held], SEGMENT_BOUNDS_C)
        on = occupied[row, held][:, None]
        dummies = np.eye(WEEK_HOURS)[hour[held]]
        matrix = np.concatenate([dummies, parts * ~on, parts * on], axis=1)
        solution, _, rank, _ = np.linalg.lstsq(matrix, load[row, held], rcond=1e-10)
        expected = matrix @ solution
        np.testing.assert_allclose(predicted[row, held], expected, rtol=1e-7)
        error = load[row, held] - expected
        assert fitted.parameters[row] == rank
        assert fitted.hours[row] == held.sum()
        assert fitted.spread_kw_th[row] == pytest.approx(np.sqrt((error**2).sum() / (held.sum() - rank)))
        assert fitted.cv_rmse[row] == pytest.approx(float(cv_rmse(load[row, held], expected, int(rank))))
        assert abs(fitted.nmbe[row]) < 1e-9
    assert fitted.is_good.all()


def test_slopes_levels_and_spread_that_were_put_in_are_found() -> None:
    fitted = fit_load(*past(weeks=30))
    # The segments between 18.3 and 32.2 degC, where most hours lie, unoccupied and occupied; noise of 10 kW_th.
    np.testing.assert_allclose(fitted.slope_kw_th_per_k[:, 0, 4:6], 4.0, atol=0.5)
    np.testing.assert_allclose(fitted.slope_kw_th_per_k[:, 1, 4:6], 9.0, atol=0.5)
    np.testing.assert_allclose(fitted.spread_kw_th, 10.0, rtol=0.05)


def test_many_sites_equal_each_alone() -> None:
    load, hour, occupied, dry = past()
    together = fit_load(load, hour, occupied, dry)
    for row in range(3):
        one = slice(row, row + 1)
        alone = fit_load(load[one], hour, occupied[one], dry[one])
        for name in LoadFit.__dataclass_fields__:
            np.testing.assert_allclose(
                getattr(alone, name)[0], getattr(together, name)[row], rtol=1e-8, atol=1e-9
            )


def test_how_far_a_forecast_lies_beyond_the_training_range() -> None:
    fitted = fit_load(*past())
    inside = np.full((3, 4), 22.0)
    assert (fitted.beyond_k(inside) == 0.0).all()
    hot = inside.copy()
    hot[:, 2] = fitted.highest_c + 3.5
    np.testing.assert_allclose(fitted.beyond_k(hot), 3.5)
    hot[:, 3] = fitted.lowest_c - 5.0
    np.testing.assert_allclose(fitted.beyond_k(hot), 5.0)


def test_little_history_has_no_goodness_and_unseen_hours_take_the_mean_level() -> None:
    load, hour, occupied, dry = past(weeks=1)
    fitted = fit_load(load[:, :24], hour[:24], occupied[:, :24], dry[:, :24])
    assert np.isnan(fitted.cv_rmse).all()
    assert not fitted.is_good.any()
    assert np.isfinite(fitted.at(np.array([160]), np.zeros((3, 1), bool), np.full((3, 1), 20.0))).all()
    nothing = fit_load(np.full_like(load, np.nan), hour, occupied, dry)
    assert (nothing.hours == 0).all()
    assert np.isnan(nothing.highest_c).all()
    assert (nothing.at(hour, occupied, np.nan_to_num(dry)) == 0.0).all()


def test_an_hour_outside_the_week_is_refused() -> None:
    load, hour, occupied, dry = past()
    with pytest.raises(SitesError, match="week_hour: came 1 to 168; expected 0 to 167"):
        fit_load(load, hour + 1, occupied, dry)


def test_a_typical_summer_in_the_piedmont_predicts_the_next_month() -> None:
    """TMY3 of Greensboro NC, in pvlib's wheel: trained on June and July, held against August."""
    path = Path(pvlib.__file__).parent / "data" / "723170TYA.CSV"
    frame, _ = pvlib.iotools.read_tmy3(str(path), map_variables=True, coerce_year=1990)
    dry = frame["temp_air"].to_numpy()[None, :]
    clock = np.arange(8760)
    hour = clock % WEEK_HOURS
    occupied = ((hour % 24 >= 7) & (hour % 24 < 19) & (hour < 120))[None, :]
    load = np.where(occupied, 200.0, 40.0) + np.where(occupied, 25.0, 8.0) * np.maximum(dry - 14.0, 0.0)
    train, test = slice(151 * 24, 212 * 24), slice(212 * 24, 243 * 24)
    fitted = fit_load(load[:, train], hour[train], occupied[:, train], dry[:, train])
    told = fitted.at(hour[test], occupied[:, test], dry[:, test])
    assert fitted.is_good.all()
    assert fitted.beyond_k(dry[:, test])[0] < 2.0
    assert float(cv_rmse(load[0, test], told[0], 0)) < 0.03
    assert fitted.beyond_k(dry)[0] > 15.0
