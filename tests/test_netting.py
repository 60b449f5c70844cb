"""Energy taken back after the window: told apart, and taken off what was delivered where the rule says so."""

import pandas as pd
import pytest
from made_settlement import NEW_YORK, worked_call, worked_readings

from fleet.rules import SettlementRule
from fleet.settle import settle


def test_energy_taken_back_is_netted_where_the_rule_says_so_and_only_then() -> None:
    """Worked by hand on the worked case: D 145.5, 155.5, 135.5 (436.5 kWh), and a rebound of 60 kW at 18 and 19 h.

    Like days read 200 kW at those hours. Netted: 436.5 - 120 = 316.5 kWh of 450 committed, factor 0.703333...;
    capacity 0.5 x 450 x 0.703333 = 158.25, energy 0.2 x 316.5 = 63.30, penalty 0.3 x (450 - 316.5) = 40.05.
    """
    plain = SettlementRule(name="own", look_back_days=16)
    frame = worked_readings(383.0)
    hour = frame["interval_start"].dt.tz_convert(NEW_YORK)
    late = (hour.dt.strftime("%Y-%m-%d") == "2025-07-10") & hour.dt.hour.isin((18, 19))
    frame.loc[late, "kw"] = 260.0
    lines = {}
    for netting in ("none", "until_midnight", "until_full"):
        facts = worked_call(plain.model_copy(update={"recovery_netting": netting}))
        row = settle(facts, frame).sites.iloc[0]
        assert row["delivered_kwh"] == pytest.approx(436.5)
        assert row["recovery_until_midnight_kwh"] == pytest.approx(120.0)
        names = ("netted_kwh", "performance_factor", "capacity_payment", "energy_payment", "penalty")
        lines[netting] = [None if pd.isna(row[name]) else round(float(row[name]), 6) for name in names]
    assert lines["none"] == [0.0, 0.97, 218.25, 87.3, -4.05]
    assert lines["until_midnight"] == [120.0, 0.703333, 158.25, 63.3, -40.05]
    # The call does not say when the tank is full again: not known, and nothing is paid or charged on it.
    assert lines["until_full"] == [None, None, 0.0, 0.0, 0.0]


def test_energy_given_beyond_the_window_is_never_added() -> None:
    rule = SettlementRule(name="own", look_back_days=16, recovery_netting="until_midnight")
    frame = worked_readings(383.0)
    hour = frame["interval_start"].dt.tz_convert(NEW_YORK)
    late = (hour.dt.strftime("%Y-%m-%d") == "2025-07-10") & (hour.dt.hour == 18)
    frame.loc[late, "kw"] = 150.0
    row = settle(worked_call(rule), frame).sites.iloc[0]
    assert row["recovery_until_midnight_kwh"] == pytest.approx(-50.0)
    assert (row["netted_kwh"], row["performance_factor"]) == (0.0, pytest.approx(436.5 / 450))
