"""What `check` says of tables that lack something, name a stranger or hold a size that cannot be: whole messages."""

import pandas as pd
import pytest
from commands import ASK, run
from fleet_folders import set_cell, small_tables, write_small_fleet

SIZE = "correct it (digits and a decimal point only), or leave it empty if it is not required"
SPELLING = "expected a site_id of sites; add it to sites, or correct the spelling"


def twice(name: str) -> pd.DataFrame:
    """The table with its first row once more at its end."""
    return pd.concat([small_tables()[name], small_tables()[name].iloc[[0]]])


def without(name: str, column: str) -> pd.DataFrame:
    return small_tables()[name].drop(columns=column)


CASES = {
    "a negative capacity": (
        {"chillers": set_cell("chillers", 2, "capacity_kw_th", "-500")},
        [
            "chillers.csv",
            f"row 2, column capacity_kw_th: came '-500'; expected a number from 1 to 50000 kW_th; {SIZE}",
        ],
    ),
    "a capacity that is not a number": (
        {"tanks": set_cell("tanks", 2, "capacity_kwh_th", "NaN"), "status": None},
        [
            "tanks.csv",
            f"row 2, column capacity_kwh_th: came 'NaN'; expected a number from 1 to 2000000 kWh_th; {SIZE}",
        ],
    ),
    "a tank of an unknown site": (
        {"tanks": set_cell("tanks", 3, "site_id", "libary"), "status": None},
        ["tanks.csv", f"row 3, column site_id: came 'libary'; {SPELLING}"],
    ),
    "a meter of an unknown site": (
        {"meter_map": pd.DataFrame({"meter_id": ["m"], "site_id": ["nowhere"]}), "meters": None},
        ["meter_map.csv", f"row 2, column site_id: came 'nowhere'; {SPELLING}"],
    ),
    "a site twice": (
        {"sites": twice("sites")},
        [
            "sites.csv",
            "row 5, column site_id: came 'harbour'; expected each site_id once; remove one of the rows, or correct "
            "its key",
        ],
    ),
    "a tank twice": (
        {"tanks": twice("tanks")},
        [
            "tanks.csv",
            "row 5, column tank_id: came 'harbour, ICE-1'; expected each site_id, tank_id once; remove one of the "
            "rows, or correct its key",
        ],
    ),
    "no column of site ids": (
        {"sites": without("sites", "site_id"), "status": None, "meters": None},
        [
            "sites.csv",
            "row 1, column site_id: came no such column; expected the column in the heading; add it",
        ],
    ),
    "no chillers for the tanks": (
        {"chillers": None, "status": None},
        [
            "chillers.csv",
            "came no rows; expected the chillers that charge the tanks; add the table with a row for each machine",
        ],
    ),
    "no column of times": (
        {"weather": without("weather", "interval_start")},
        [
            "weather.csv",
            "row 1, column interval_start: came no such column; expected the column in the heading; add it",
        ],
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", CASES)
def test_one_thing_wrong_is_one_problem_in_full(tmp_path, case):
    changes, (file, message) = CASES[case]
    ran = run("check", write_small_fleet(tmp_path, **changes))
    assert ran.code == 2
    assert [line.strip() for line in ran.out.splitlines()[:3]] == ["1 problem:", file, message]


@pytest.mark.parametrize("name", ["weather", "tariffs"])
def test_a_table_that_a_quote_needs_is_named(tmp_path, name):
    fleet = write_small_fleet(tmp_path, **{name: None})
    assert f"quote no: {name} missing" in run("check", fleet).out.splitlines()
    ran = run("quote", fleet, *ASK)
    assert (ran.code, ran.out) == (2, "")
    assert ran.err == f"{name}.csv: came no rows; expected rows over the horizon; add them\n"
