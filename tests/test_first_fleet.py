"""From a two-site workbook to a called and audited event, by the commands of "Your first fleet in 30 minutes"."""

import csv
import json
from pathlib import Path

import pandas as pd
import pytest
from conftest import shedwright
from made_workbook import write_workbook

WHEN = ("--from", "2026-07-15T15:00", "--to", "2026-07-15T18:00", "--at", "2026-07-15T12:00")


def told(folder: Path, *arguments: str, code: int = 0) -> dict:
    ran = shedwright(*arguments, "--json", cwd=folder)
    assert ran.returncode == code, ran.stdout + ran.stderr
    return json.loads(ran.stdout)


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Where the fleet `mine` was made from the workbook by the suggested mapping."""
    place = tmp_path_factory.mktemp("first")
    write_workbook(place / "towers.xlsx")
    suggested = shedwright("begin", "mine", "--from", "towers.xlsx", cwd=place)
    assert suggested.returncode == 2
    assert suggested.stdout.endswith(
        "  shedwright begin mine --from towers.xlsx --mapping towers.mapping.csv\n"
    )
    assert not (place / "mine").exists(), "a suggestion alone makes no folder"
    begun = shedwright("begin", "mine", "--from", "towers.xlsx", "--mapping", "towers.mapping.csv", cwd=place)
    assert begun.returncode == 0, begun.stderr
    assert begun.stdout.startswith("mine: 5 files written\n  sites: 2 rows\n  chillers: 4 rows\n")
    assert begun.stdout.endswith("next: shedwright check mine\n")
    return place


def test_the_folder_is_in_our_columns_and_units(folder):
    sites = pd.read_csv(folder / "mine/sites.csv").set_index("site_id")
    assert list(sites.index) == ["Maple Court", "River Annex"]
    assert sites.loc["Maple Court", "floor_area_m2"] == pytest.approx(180000 * 0.09290304)
    assert sites.loc["River Annex", "peak_cooling_kw_th"] == pytest.approx(310 * 3.516853)
    assert sites["building_type"].tolist() == ["courthouse", "office"]
    tanks = pd.read_csv(folder / "mine/tanks.csv")
    assert tanks["capacity_kwh_th"].tolist() == pytest.approx([1400 * 3.516853, 1250.5 * 3.516853])
    assert tanks["tank_id"].tolist() == ["TES-1", "TES-1"]
    chillers = pd.read_csv(folder / "mine/chillers.csv")
    assert chillers["rated_cop"].tolist()[2:] == pytest.approx([3.516853 / 0.58] * 2)
    weather = pd.read_csv(folder / "mine/weather.csv")
    assert weather.loc[0].tolist() == [
        "station",
        "2026-07-14T00:00:00",
        pytest.approx(23.7778, abs=1e-4),
        48.5,
    ]
    with (folder / "mine/sites.csv").open() as lines:
        # a blank line stands for the sheet's blank row, so that River Annex is two lines below Maple Court
        assert [row[:1] for row in csv.reader(lines)][1:] == [
            ["site_id"],
            ["Maple Court"],
            [],
            ["River Annex"],
        ]


def test_check_says_what_can_be_done_and_what_is_assumed(folder):
    found = told(folder, "check", "mine")
    assert (found["ok"], found["problems"]) == (True, [])
    assert {name: one["ok"] for name, one in found["abilities"].items()} == {
        "quote": True,
        "call": True,
        "settle": False,
    }
    assumed = {(one["table"], one["key"], one["column"]): one["value"] for one in found["assumed"]}
    assert assumed["chillers", "Maple Court/CH-1", "rated_cop"] == "2.96"
    assert ("chillers", "River Annex/CH-1", "rated_cop") not in assumed
    assert "tariffs: 0.142 USD/kWh for every site at all times, from fleet.toml" in found["notes"]


def test_quote_call_orders_and_audit(folder):
    offered = shedwright("quote", "mine", *WHEN, cwd=folder)
    assert offered.returncode == 0, offered.stderr
    assert "Maple Court" in offered.stdout
    assert "River Annex" in offered.stdout
    called = told(folder, "call", "mine", "--kw", "150", *WHEN, "--event", "first", "--purpose", "rehearsal")
    assert set(called["called_sites"]) <= {"Maple Court", "River Annex"}
    assert min(called["expected_kw"]) >= 150.0 * (1 - 1e-9)
    assert told(folder, "orders", "mine", "first")
    pages = list((folder / "mine/events/first/orders-001").glob("*.txt"))
    assert len(pages) == len(called["called_sites"])
    audited = told(folder, "audit", "mine", "first")
    assert audited["holds"] is True
