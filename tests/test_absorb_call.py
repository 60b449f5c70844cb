"""Absorb from a fleet folder through the command: numbers worked out by hand, limits, refusals, later calls.

One building with a steady load of 300 kW_th, one air-cooled machine of 720 kW_th at COP 3 and a loss-free
chilled-water tank of 2,000 kWh_th that takes 300 kW_th, half full. Air of 35 degC and supply of 6.67 degC are the
machine's rating point, and its part-load curve is straight, so 3 kW_th cost 1 kW at every hour.
"""

import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from commands import Ran, run
from fleet_folders import TEXTS

from fleet.desk import Ask, survey
from fleet.records import read_call, read_settlement
from sites.direction import Direction

SETTINGS = """name = "One Hall"
timezone = "Europe/Athens"
currency = "EUR"
settlement_rule = "meter_before_after"
energy_payment_per_kwh = 0.10
"""
SPAN = ("--from", "2026-07-14T12:00", "--to", "2026-07-14T14:00", "--at", "2026-07-14T09:00")
ASK = ("--direction", "absorb", *SPAN)
HOUR = (np.arange(len(TEXTS)) % 96) / 4.0


def written(
    path: Path, level: float = 1000.0, high: float | None = None, limit_kw: float | None = None
) -> Path:
    """The folder; `level` and `high` of the tank, `limit_kw` of the only feeder."""
    path.mkdir()
    (path / "fleet.toml").write_text(SETTINGS, encoding="utf-8")
    site = {
        "site_id": "hall",
        "node_id": "quay",
        "peak_cooling_kw_th": 600.0,
        "strategy": "chiller_priority",
        "supply_c": 6.67,
        "return_c": 13.0,
        "shared_aux_kw": 0.0,
        "tank_pump_kw": 0.0,
        "demand_price_per_kw": 5.0,
    }
    chiller = {
        "site_id": "hall",
        "chiller_id": "CH",
        "kind": "air_cooled_screw",
        "capacity_kw_th": 720.0,
        "rated_cop": 3.0,
    }
    tank = {
        "site_id": "hall",
        "tank_id": "TK",
        "kind": "chilled_water",
        "capacity_kwh_th": 2000.0,
        "charge_limit_kw_th": 300.0,
        "loss_fraction_per_h": 0.0,
    }
    status = {
        "site_id": "hall",
        "unit_id": "TK",
        "time": "2026-07-14T09:00+03:00",
        "inventory_kwh_th": level,
        "inventory_low_kwh_th": level,
        "inventory_high_kwh_th": level if high is None else high,
        "quality": "measured",
    }
    price = np.select([(HOUR >= 12.0) & (HOUR < 14.0), HOUR < 7.0, HOUR >= 22.0], [-0.05, 0.10, 0.10], 0.20)
    tables: dict[str, Any] = {
        "sites": [site],
        "chillers": [chiller],
        "tanks": [tank],
        "status": [status],
        "bills": [
            {
                "site_id": "hall",
                "cycle_start": "2026-07-01",
                "cycle_end": "2026-07-31",
                "billed_peak_kw": 250.0,
            }
        ],
        "nodes": [
            {"node_id": "town", "parent_id": "", "import_limit_kw": None},
            {"node_id": "quay", "parent_id": "town", "import_limit_kw": limit_kw},
        ],
        "weather": {"station_id": "a", "interval_start": TEXTS, "dry_bulb_c": 35.0, "wet_bulb_c": 24.0},
        "loads": {
            "site_id": "hall",
            "interval_start": TEXTS,
            "cooling_load_kw_th": 300.0,
            "rest_kw": 40.0,
        },
        "tariffs": {"tariff_id": "t", "interval_start": TEXTS, "price_per_kwh": price},
        "meters": {"meter_id": "hall", "interval_start": TEXTS, "kw": _metered(), "quality": "measured"},
    }
    for name, rows in tables.items():
        pd.DataFrame(rows).to_csv(path / f"{name}.csv", index=False)
    return path


def _metered() -> Any:
    """140 kW, and 92 more from 12:00 to 14:00 of the first day."""
    day = np.arange(len(TEXTS)) // 96
    return 140.0 + np.where((day == 0) & (HOUR >= 12.0) & (HOUR < 14.0), 92.0, 0.0)


def done(*arguments: object) -> Ran:
    ran = run(*arguments)
    assert ran.code == 0, ran.err
    return ran


@pytest.fixture(scope="module")
def hall(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Called for 90 kW, ordered, settled."""
    fleet = written(tmp_path_factory.mktemp("hall") / "fleet")
    done("call", fleet, *ASK, "--kw", 90, "--event", "sun")
    done("orders", fleet, "sun")
    done("settle", fleet, "sun")
    return fleet


def test_what_it_absorbs_and_costs_is_as_by_hand(hall: Path) -> None:
    """300 kW_th into the tank at COP 3: 100 kW for two hours at -0.05 is -10.00. 600 of the 975 kWh_th that a
    night's 13 intervals of 75 put in are there already: 8 intervals less at 100 kW, 200 kWh at 0.10 is -20.00."""
    record = read_call(hall, "sun")
    (window,) = record.frames["windows"].itertuples()
    assert (window.window_end - window.window_start) == pd.Timedelta(hours=2)
    rows = record.frames["intervals"]
    inside = rows["interval_start"].between(window.window_start, window.window_end, inclusive="left")
    np.testing.assert_allclose(rows.loc[inside, "usual_kw"], 100.0)
    np.testing.assert_allclose(rows.loc[inside, "event_kw"], 200.0)
    np.testing.assert_allclose(rows.loc[inside, "committed_kw"], 100.0)
    assert window.committed_kwh == pytest.approx(200.0)
    assert (window.inventory_start_kwh_th, window.inventory_end_kwh_th) == pytest.approx((1000.0, 1600.0))
    assert window.recovery_energy_kwh == pytest.approx(-200.0)
    assert (window.cost_during, window.cost_recovery, window.net_cost) == pytest.approx((-10.0, -20.0, -30.0))
    # The night's charging fills both tanks alike: 01:15, when 13 intervals from 22:00 are over.
    assert window.full_again_at == pd.Timestamp("2026-07-14T22:15", tz="UTC")
    settled = read_settlement(hall, "sun").frames["sites"].iloc[0]
    # 232 kW metered over 140 before and after: 92 of 100 kW, paid at 0.10 per kWh.
    assert settled["delivered_kwh"] == pytest.approx(184.0)
    assert settled["performance_factor"] == pytest.approx(0.92)
    assert float(settled["energy_payment"]) == pytest.approx(18.40)
    done("audit", hall, "sun")


def test_steps_say_what_when_and_how_far(hall: Path) -> None:
    steps = read_call(hall, "sun").frames["steps"]
    local = steps["at"].dt.tz_convert("Europe/Athens").dt.strftime("%d %H:%M")
    told = list(
        zip(local, steps["action"], steps["unit_id"], steps["value"].round(3).fillna(-1.0), strict=True)
    )
    assert told == [
        ("14 12:00", "charge_start", "CH", 300.0),
        ("14 12:00", "charge_to", "TK", 1600.0),
        ("14 14:00", "charge_end", "TK", -1.0),
        ("14 22:00", "recharge_may_start", "TK", 300.0),
        ("15 01:15", "usual_by", "TK", 1975.0),
    ]


def test_the_quote_heads_its_column_by_the_direction(hall: Path) -> None:
    ran = done("quote", hall, *ASK)
    assert "site             usual  absorb        window" in ran.out
    assert "has a call in force" in ran.out


def test_a_full_tank_is_exit_3_and_says_so(tmp_path: Path) -> None:
    fleet = written(tmp_path / "full", level=1980.0)
    assert "the tank is full" in done("quote", fleet, *ASK).out
    ran = run("call", fleet, *ASK, "--kw", 50, "--event", "sun")
    assert ran.code == 3
    assert ran.out == ""
    assert "the request cannot be met as asked:" in ran.err
    assert "tank full, nothing to absorb" in ran.err
    assert not (fleet / "events" / "sun").exists()


def test_room_is_that_of_the_high_estimate(tmp_path: Path) -> None:
    """Best half full, but full at the most by the gauge: nothing can be promised."""
    fleet = written(tmp_path / "unsure", high=1990.0)
    ran = run("call", fleet, *ASK, "--kw", 50, "--event", "sun")
    assert (ran.code, "tank full, nothing to absorb" in ran.err) == (3, True)


def test_a_feeder_binds_upward_while_the_event_lasts(tmp_path: Path) -> None:
    """140 kW are drawn; under a limit of 225 the 100 kW do not fit, but those of three quarters of the machine:
    540 - 300 = 240 kW_th into the tank, 80 kW."""
    fleet = written(tmp_path / "tight", limit_kw=225.0)
    told = json.loads(done("quote", fleet, *ASK, "--json").out)["fleet"]
    assert told["sustained_kw"] == pytest.approx(80.0, abs=0.01)
    done("call", fleet, *ASK, "--kw", 75, "--event", "sun")
    frames = read_call(fleet, "sun").frames
    nodes, request = frames["nodes"], frames["request"]
    event = nodes["interval_start"].isin(request["interval_start"]) & (nodes["node_id"] == "quay")
    np.testing.assert_allclose(nodes.loc[event, "event_kw"], 220.0)
    steps = frames["steps"].set_index("action")["value"]
    assert (steps["demand_limit"], steps["demand_limit_removed"]) == (0.75, 1.0)
    assert steps["charge_start"] == pytest.approx(240.0)
    done("audit", fleet, "sun")
    ran = run("call", fleet, *ASK, "--kw", 90, "--event", "more", "--purpose", "rehearsal")
    assert ran.code == 3


def test_a_peak_over_the_bill_is_paid_for(tmp_path: Path) -> None:
    """With 100 kW in the rest of the building at midday the absorb draws 300 kW: 50 over the bill's 250, while
    every night draws 240. 50 x 5.00."""
    fleet = written(tmp_path / "high")
    loads = pd.read_csv(fleet / "loads.csv")
    loads["rest_kw"] = np.where((HOUR >= 12.0) & (HOUR < 14.0), 100.0, 40.0)
    loads.to_csv(fleet / "loads.csv", index=False)
    done("call", fleet, *ASK, "--kw", 90, "--event", "sun")
    (window,) = read_call(fleet, "sun").frames["windows"].itertuples()
    assert window.cost_demand == pytest.approx(50.0 * 5.0)


def test_a_later_call_finds_the_tank_as_the_absorb_leaves_it(hall: Path) -> None:
    """A real absorb is part of what is usual from then on: it draws 200 kW, and the tank holds 1,600 after it."""
    at, start, end = (np.datetime64(f"2026-07-14T{hour}:00", "us") for hour in ("07", "13", "15"))
    seen = survey(hall, Ask(None, Direction.SHED, at, start, end))
    usual, first = seen.quoted.ground.usual, 8
    np.testing.assert_allclose(usual.power_kw[0, first : first + 8], 200.0)
    np.testing.assert_allclose(usual.power_kw[0, first - 8 : first], 100.0)
    assert usual.inventory_kwh_th[0, 0, first + 7] == pytest.approx(1600.0)


def test_absorb_needs_a_known_word(hall: Path) -> None:
    ran = run("quote", hall, *SPAN, "--direction", "soak")
    assert ran.code == 2
    assert "--direction: came 'soak'; expected one of shed, absorb; choose one" in ran.err
