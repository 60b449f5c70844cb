"""From a two-site workbook to a called and audited event, by the commands of "Your first fleet in 30 minutes"."""

import csv
import json
import re
import subprocess
from pathlib import Path

import pandas as pd
import pytest
from conftest import shedwright
from made_workbook import write_workbook


def told(folder: Path, *arguments: str, code: int = 0) -> dict:
    ran = shedwright(*arguments, "--json", cwd=folder)
    assert ran.returncode == code, ran.stdout + ran.stderr
    return json.loads(ran.stdout)


README = (Path(__file__).resolve().parents[1] / "README.md").read_text(encoding="utf-8")


def lines() -> list[str]:
    """The section's commands, as README has them."""
    section = README.split("## Your first fleet in 30 minutes")[1].split("\n## ")[0]
    blocks = re.findall(r"```sh\n(.*?)```", section, flags=re.DOTALL)
    return [line.removeprefix("shedwright ") for block in blocks for line in block.strip().split("\n")]


@pytest.fixture(scope="module")
def played(
    tmp_path_factory: pytest.TempPathFactory,
) -> tuple[Path, dict[str, subprocess.CompletedProcess[str]]]:
    """A place with the workbook alone, after README's commands in their order; what each said, by its first word."""
    place = tmp_path_factory.mktemp("first")
    write_workbook(place / "towers.xlsx")
    said = {}
    for line in lines():
        suggests = line == "begin towers --from towers.xlsx"
        ran = shedwright(*line.split(), cwd=place)
        assert ran.returncode == (2 if suggests else 0), f"{line}: {ran.stderr}"
        assert (place / "towers").exists() is not suggests, "a suggestion alone makes no folder"
        said["suggest" if suggests else line.split()[0]] = ran
    return place, said


@pytest.fixture(scope="module")
def folder(played) -> Path:
    return played[0]


def test_the_section_goes_from_a_workbook_to_an_audited_event(played):
    _, said = played
    assert list(said) == ["suggest", "begin", "check", "quote", "call", "orders", "audit"]
    assert said["suggest"].stdout.endswith(
        "  shedwright begin towers --from towers.xlsx --mapping towers.mapping.csv\n"
    )
    assert said["begin"].stdout.startswith("towers: 5 files written\n  sites: 2 rows\n  chillers: 4 rows\n")
    assert said["begin"].stdout.endswith("next: shedwright check towers\n")


def test_the_folder_is_in_our_columns_and_units(folder):
    sites = pd.read_csv(folder / "towers/sites.csv").set_index("site_id")
    assert list(sites.index) == ["Maple Court", "River Annex"]
    assert sites.loc["Maple Court", "floor_area_m2"] == pytest.approx(180000 * 0.09290304)
    assert sites.loc["River Annex", "peak_cooling_kw_th"] == pytest.approx(310 * 3.516853)
    assert sites["building_type"].tolist() == ["courthouse", "office"]
    tanks = pd.read_csv(folder / "towers/tanks.csv")
    assert tanks["capacity_kwh_th"].tolist() == pytest.approx([1400 * 3.516853, 1250.5 * 3.516853])
    assert tanks["tank_id"].tolist() == ["TES-1", "TES-1"]
    chillers = pd.read_csv(folder / "towers/chillers.csv")
    assert chillers["rated_cop"].tolist()[2:] == pytest.approx([3.516853 / 0.58] * 2)
    weather = pd.read_csv(folder / "towers/weather.csv")
    assert weather.loc[0].tolist() == [
        "station",
        "2026-07-14T00:00:00",
        pytest.approx(23.7778, abs=1e-4),
        48.5,
    ]
    with (folder / "towers/sites.csv").open() as lines:
        # a blank line stands for the sheet's blank row, so that River Annex is two lines below Maple Court
        assert [row[:1] for row in csv.reader(lines)][1:] == [
            ["site_id"],
            ["Maple Court"],
            [],
            ["River Annex"],
        ]


def test_check_says_what_can_be_done_and_what_is_assumed(folder):
    found = told(folder, "check", "towers")
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


def test_quote_call_orders_and_audit(played):
    place, said = played
    for name in ("Maple Court", "River Annex"):
        assert name in said["quote"].stdout
    event = place / "towers/events/first"
    called = pd.read_parquet(event / "call-001/windows.parquet")["site_id"].tolist()
    assert called
    assert set(called) <= {"Maple Court", "River Annex"}
    assert pd.read_parquet(event / "call-001/request.parquet")["expected_kw"].min() >= 150.0 * (1 - 1e-9)
    assert len(list((event / "orders-001").glob("*.txt"))) == len(called)
    assert "the record holds" in said["audit"].stdout
