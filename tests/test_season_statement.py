"""The season's statement: hours, not events, are averaged; test events apart; what is not known stays out."""

import json
from decimal import Decimal

import numpy as np
import pandas as pd
import pytest
from conftest import Practice

from fleet import records
from fleet.pages import season_statement as season
from fleet.rules import SettlementRule


def event(
    event_id: str, day: int, delivered: dict[str, list[float]], purpose: str = "real", **known: float
) -> season._Event:
    """An event of a site's hours, 100 kWh committed in each; known: a site's factor where it is not defined."""
    rows = [(site, kwh, 100.0) for site, hours in delivered.items() for kwh in hours]
    sites = pd.DataFrame(
        {
            "site_id": list(delivered),
            "rule": "own",
            "state": "final",
            "performance_factor": [known.get(site, 1.0) for site in delivered],
            "netted_kwh": 0.0,
            "total": [Decimal("10.50")] * len(delivered),
        }
    )
    rules = {"own": SettlementRule(name="own", cap_intervals=True)}
    hours = pd.DataFrame(rows, columns=["site_id", "delivered_kwh", "committed_kwh"])
    start = pd.Timestamp(2026, 7, day, 13, tz="UTC")
    return season._Event(event_id, purpose, "EUR", start, hours, sites, rules)


def test_an_event_of_four_hours_weighs_four_times_one_of_a_single_hour() -> None:
    """By hand: a has 100, 100, 100, 150 (capped to 100) and 0 of 100 each: 400 / 500, not (1 + 0) / 2."""
    found = season._together(
        [
            event("e2", 9, {"a": [0.0], "b": [50.0]}, b=np.nan),
            event("e1", 2, {"a": [100.0, 100.0, 100.0, 150.0]}),
        ]
    )
    a, b = found["sites"]
    assert (a["hours"], a["events"], a["committed_kwh"], a["delivered_kwh"]) == (5, 2, 500.0, 450.0)
    assert (a["factor"], a["paid"]) == (pytest.approx(0.8), "21.00")
    # Undefined in its only event: no hours, no factor, and nothing of it in the sum.
    assert (b["hours"], b["settled_events"], b["delivered_kwh"], b["factor"]) == (0, 0, 0.0, None)
    assert found["all"] == {"committed_kwh": 500.0, "delivered_kwh": 450.0, "factor": 0.8, "paid": "31.50"}
    assert found["events"] == ["e1", "e2"]


def test_all_together_weigh_by_what_was_committed() -> None:
    """a 1 of 100, b 0.5 and 0.5 of 200: 200 of 300."""
    found = season._together([event("e1", 2, {"a": [100.0], "b": [50.0, 50.0]})])
    assert [row["factor"] for row in found["sites"]] == [1.0, 0.5]
    assert found["all"]["factor"] == pytest.approx(200.0 / 300.0)


def test_the_practised_fleet_is_told_as_a_rehearsal_and_adds_up(practice: Practice) -> None:
    files = season.season_statement(practice.fleet)
    told = json.loads(files["season.json"])
    assert not {"real", "test"} & set(told)
    sites = records.read_settlement(practice.fleet, "practice").frames["sites"].set_index("site_id")
    rows = {row["site_id"]: row for row in told["rehearsal"]["sites"]}
    assert set(rows) == set(sites.index)
    for site, row in rows.items():
        # One event alone: the season's factor is the event's own.
        assert row["factor"] == pytest.approx(sites.loc[site, "performance_factor"])
        assert row["delivered_kwh"] == pytest.approx(sites.loc[site, "delivered_kwh"])
        assert Decimal(row["paid"]) == sites.loc[site, "total"]
    assert Decimal(told["rehearsal"]["all"]["paid"]) == sum(sites["total"], Decimal(0))
    text = files["season.txt"]
    assert "rehearsal events, settled: 1 (practice)" in text
    assert max(len(line) for line in text.splitlines()) <= 90


def test_nothing_settled_is_no_statement(tmp_path) -> None:
    assert season.season_statement(tmp_path) == {}
