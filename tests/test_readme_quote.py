"""README's three quotes line by line: shown as the program shows them, and every figure worked out again by hand.

The machines' figures come from the published curves in the second judge's words, the rest from the folder's own tables.
"""

import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from conftest import Practice
from reference import fine_plant

from fleet import quoting, show
from fleet.desk import Ask, Survey, survey
from sites.direction import Direction

README = (Path(__file__).resolve().parents[1] / "README.md").read_text(encoding="utf-8")
SITES = ("hotel-03", "courthouse-01", "school-01")


@pytest.fixture(scope="module")
def surveyed(practice: Practice) -> Survey:
    at, start, end = (np.datetime64(f"2026-07-15T{hour}:00", "us") for hour in (10, 13, 16))
    return survey(practice.fleet, Ask("North", Direction.SHED, at, start, end))


def shown(site: str) -> str:
    """README's block of one site."""
    every = README.split("## A quote, line by line")[1].split("```text\n")[1].split("```")[0]
    found = re.search(rf"^{site}  .*?(?=\n\n|\Z)", every.rstrip("\n"), flags=re.MULTILINE | re.DOTALL)
    assert found, site
    return found.group()


def numbers(text: str) -> list[float]:
    return [float(value.replace(",", "")) for value in re.findall(r"-?\d[\d,]*\.\d+", text)]


def line(site: str, words: str, nth: int = 0) -> list[float]:
    """Figures of the nth line of a site's block that holds `words`."""
    return numbers([row for row in shown(site).split("\n") if words in row][nth])


def rows(site: str, table: str, surveyed: Survey) -> pd.DataFrame:
    frame = surveyed.fleet.resolved[table]
    return frame[frame["site_id"] == site].reset_index(drop=True)


def test_readme_shows_what_the_program_says(surveyed: Survey) -> None:
    told = quoting.offer(surveyed)
    for site in SITES:
        assert shown(site) == "\n".join(show.site_lines(surveyed, told, site, False))


@pytest.mark.parametrize("site", SITES)
def test_the_load_is_machines_tank_and_what_goes_unmet(site: str) -> None:
    load = line(site, "  load ")[0]
    for case in ("usual", "event"):
        text = shown(site)
        if f"  {case} " not in text:
            continue
        part = text.split(f"  {case} ")[1].split("the plant")[0]
        given = [numbers(row)[0] for row in part.split("\n") if " gives " in row or "go unmet" in row]
        assert sum(given) == pytest.approx(load, abs=0.21)


@pytest.mark.parametrize(
    ("site", "case"),
    [("hotel-03", 0), ("hotel-03", 1), ("courthouse-01", 0), ("courthouse-01", 1), ("school-01", 0)],
)
def test_the_plant_is_its_machines_and_its_pumps(site: str, case: int, surveyed: Survey) -> None:
    part = shown(site).split("the plant")[case].rsplit("  usual" if case == 0 else "  event", 1)[1]
    drawn = [numbers(row)[-1] for row in part.split("\n") if "draws" in row]
    pumps, plant = line(site, "pumps draw", case)
    assert sum(drawn) + pumps == pytest.approx(plant, abs=0.26)
    own = rows(site, "sites", surveyed).iloc[0]
    tank = own["tank_pump_kw"] if "tank gives" in part else 0.0
    assert pumps == pytest.approx(own["shared_aux_kw"] + tank, abs=0.06)


@pytest.mark.parametrize("site", ["hotel-03", "courthouse-01"])
def test_a_machine_gives_and_draws_what_its_curves_say(site: str, surveyed: Survey) -> None:
    _, dry, _ = line(site, "  load ")
    (reference, (x_range, y_range), capacity, eir, part_load) = fine_plant.CURVES["air_cooled_screw"]
    x = float(np.clip(rows(site, "sites", surveyed)["supply_c"].iloc[0], *x_range))
    y = float(np.clip(dry, *y_range))
    for nth, machine in rows(site, "chillers", surveyed).iterrows():
        given, able, draws = line(site, f"{machine['chiller_id']} gives")
        ratio = [
            float(fine_plant.surface(c, x, y) / fine_plant.surface(c, *reference)) for c in (capacity, eir)
        ]
        # Dry bulb is shown to a tenth of a degree.
        assert able == pytest.approx(machine["capacity_kw_th"] * ratio[0], rel=2e-3)
        share = sum(c * (given / able) ** k for k, c in enumerate(part_load)) / sum(part_load)
        assert draws == pytest.approx(able * ratio[1] / machine["rated_cop"] * share, rel=3e-3), nth


def test_the_tanks_limit_and_balance(surveyed: Survey) -> None:
    tank = rows("hotel-03", "tanks", surveyed).iloc[0]
    assert tank["kind"] == "chilled_water"
    given, most, _ = line("hotel-03", "tank gives", 1)
    assert given == most == pytest.approx(tank["capacity_kwh_th"] / 5.0)
    start, used, lost, end = line("hotel-03", "  tank  ")
    assert start - used - lost == pytest.approx(end, abs=0.11)
    assert used == pytest.approx(3.0 * given, abs=0.2)
    assert lost == pytest.approx(3.0 * tank["loss_fraction_per_h"] * (start + end) / 2.0, rel=0.05)


@pytest.mark.parametrize("site", ["hotel-03", "courthouse-01"])
def test_shed_and_cost_add_up(site: str) -> None:
    usual, event, first, least, mean, *hours, energy = line(site, "  shed ")
    assert usual - event == pytest.approx(first, abs=0.11)
    assert least <= mean <= first
    length = float(re.search(r"mean x ([\d.]+) h", shown(site)).group(1))
    assert mean * length == pytest.approx(energy, abs=0.06 * length)
    (*parts,) = line(site, "  cost ")
    together, each = line(site, "together")[:2]
    assert sum(parts) == pytest.approx(together, abs=0.031)
    assert together / energy == pytest.approx(each, abs=0.0006)
    assert not hours or hours == [length]


def test_a_full_storage_plant_draws_its_pumps_alone(surveyed: Survey) -> None:
    assert rows("school-01", "sites", surveyed)["strategy"].iloc[0] == "full_storage"
    load, given = line("school-01", "  load ")[0], line("school-01", "tank gives")[0]
    assert load == given
    assert "draws" not in shown("school-01")
    assert "nothing to give" in shown("school-01")


def test_figures_in_the_words_below_stand_in_the_blocks() -> None:
    """The prose under the blocks uses their figures: each number with a decimal there is in a block or a sum of its."""
    words = (
        README.split("## A quote, line by line")[1].split("```text\n")[1].split("```")[1].split("\n## ")[0]
    )
    every = {abs(value) for site in SITES for value in numbers(shown(site))} | {3.18, 0.06, 0.10, 0.235}
    told = numbers(words)
    assert len(told) > 15
    assert set(told) <= every
    assert pytest.approx(3.18, abs=0.005) == 489.6 / 154.0
    assert pytest.approx(59.68, abs=0.05) == 597.0 * 0.10


def test_what_is_saved_and_what_the_refill_costs_follow_from_the_tariff(surveyed: Survey) -> None:
    tariff = rows("hotel-03", "sites", surveyed)["tariff_id"].iloc[0]
    prices = surveyed.folder.frames["tariffs"]
    prices = prices[prices["tariff_id"] == tariff].set_index("interval_start")["price_per_kwh"]
    assert (prices["2026-07-15T13:00Z":"2026-07-15T15:00Z"] == 0.235).all()  # type: ignore[misc]
    *_, energy = line("hotel-03", "  shed ")
    before, saved, refill, *_ = line("hotel-03", "  cost ")
    (more,) = line("hotel-03", "  recovery ")
    assert before == 0.0
    assert -saved == pytest.approx(energy * 0.235, abs=0.05)
    # Between all of it at the night price and all at the evening's.
    assert more * 0.085 < refill < 0.5 * more * (0.085 + 0.235)
