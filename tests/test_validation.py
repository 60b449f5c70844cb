"""Readings that look wrong: each test of the event day by hand, and the notes a settlement makes of them."""

import numpy as np
import pandas as pd
from made_settlement import NEW_YORK, worked_call, worked_readings

from fleet.rules import PRESETS
from fleet.settle import settle
from fleet.validation import negative, shifted_h, stuck

SHAPE = 300.0 + 100.0 * np.sin((np.arange(24) - 6) / 12 * np.pi)


def test_below_zero_counts_where_nothing_can_deliver_backwards() -> None:
    day = np.array([[5.0, -1.0], [5.0, -1.0], [5.0, np.nan]])
    assert negative(day, np.array([False, True, False])).tolist() == [True, False, False]


def test_a_value_that_stands_still_for_four_hours_unless_it_is_zero() -> None:
    still = np.arange(24.0)
    still[6:10] = 7.5
    short = np.arange(24.0)
    short[6:9] = 7.5
    assert stuck(np.stack([still, short, np.zeros(24)]), 1.0).tolist() == [True, False, False]


def test_a_day_an_hour_late_or_early_is_told_and_a_hotter_one_is_not() -> None:
    days = np.stack([np.roll(SHAPE, 1), np.roll(SHAPE, -1), SHAPE, SHAPE * 1.2, np.full(24, np.nan)])
    usual = np.repeat(SHAPE[None], 5, axis=0)
    assert shifted_h(days, usual, 15, 1.0).tolist() == [1.0, -1.0, 0.0, 0.0, 0.0]
    assert shifted_h(days, usual, 6, 1.0).tolist() == [0.0] * 5


def test_a_settlement_names_the_sites_whose_readings_look_wrong() -> None:
    frame = worked_readings(383.0)
    local = frame["interval_start"].dt.tz_convert(NEW_YORK)
    kw = SHAPE[local.dt.hour.to_numpy()]
    today = (local.dt.strftime("%Y-%m-%d") == "2025-07-10").to_numpy()
    kw[today] = np.roll(SHAPE, 1)
    notes = settle(worked_call(PRESETS["ten_of_ten"]), frame.assign(kw=kw)).notes
    assert "the event day fits its like days better when shifted by an hour: a" in notes
    kw[today & (local.dt.hour == 2).to_numpy()] = -5.0
    kw[today & (local.dt.hour >= 18).to_numpy()] = 100.0
    out = pd.DataFrame({"site_id": ["a"], "day": [pd.Timestamp("2025-07-09")], "mode": ["tank_out"]})
    rule = PRESETS["ten_of_ten"].model_copy(update={"exclude_unusual_modes": False})
    notes = settle(worked_call(rule, plant_days=out), frame.assign(kw=kw)).notes
    assert "readings below zero on a meter that only delivers: a" in notes
    assert "one value unchanged for 4 h or longer on the event day: a" in notes
    assert "the rule lets days count on which the plant ran unusually (tank out, recovery, ...): a" in notes
