"""Sizes that give a wrong unit away: refused with the whole message, or counted in a note."""

import numpy as np
import pandas as pd
import pytest
from fleet_folders import set_cell, small_tables, write_small_fleet, wrong

from fleet.folder import open_folder


def in_mega(name, column):
    return small_tables()[name].assign(**{column: lambda frame: frame[column] / 1000.0})


def as_tons():
    """Machines of 500, 500, 527, 800 and 900 kW_th written into the column of tons."""
    return small_tables()["chillers"].assign(capacity_kw_th=None, capacity_ton=[500, 500, 527, 800, 900])


LIGHT_HARBOUR = small_tables()["chillers"].assign(capacity_kw_th=[0.5, 0.5, None, 800.0, 900.0])

CASES = {
    "a peak over 3 kW_th per m2": (
        {"sites": set_cell("sites", 2, "floor_area_m2", 250.0)},
        [
            "sites.csv, row 2, column peak_cooling_kw_th: came 900 for 250 m2; expected at most 3 kW_th per m2, "
            "750; correct one of the two (kW, not W; m2, not ft2)"
        ],
    ),
    "a peak in MW": (
        {"sites": set_cell("sites", 2, "peak_cooling_kw_th", 8.9), "loads": None},
        [
            "sites.csv, row 2, column peak_cooling_kw_th: came 8.9 for 9000 m2; expected at least 0.001 kW_th per "
            "m2, 9; is it in MW? give it in kW"
        ],
    ),
    "a COP over 15": (
        {"chillers": set_cell("chillers", 2, "rated_cop", 15.1)},
        [
            "chillers.csv, row 2, column rated_cop: came '15.1'; expected a number from 1 to 15; correct it "
            "(digits and a decimal point only), or leave it empty if it is not required"
        ],
    ),
    "a reserve over the tank": (
        {"sites": set_cell("sites", 3, "held_back_kwh_th", 2500.1)},
        [
            "sites.csv, row 3, column held_back_kwh_th: came 2500.1; expected at most the capacity of the site's "
            "tanks, 2500 kWh_th; correct one of the two"
        ],
    ),
    "a reserve without a tank": (
        {"sites": set_cell("sites", 2, "held_back_kwh_th", 1.0), "tanks": None, "status": None},
        [
            "sites.csv, row 2, column held_back_kwh_th: came 1; expected at most the capacity of the site's tanks, "
            "0 kWh_th; correct one of the two"
        ],
    ),
    "machines in MW": (
        {"chillers": LIGHT_HARBOUR},
        [
            "chillers.csv, row 2, column capacity_kw_th: came '0.5'; expected a number from 1 to 50000 kW_th; "
            "correct it (digits and a decimal point only), or leave it empty if it is not required",
            "chillers.csv, row 3, column capacity_kw_th: came '0.5'; expected a number from 1 to 50000 kW_th; "
            "correct it (digits and a decimal point only), or leave it empty if it is not required",
        ],
    ),
    "large machines in MW": (
        {"chillers": LIGHT_HARBOUR.assign(capacity_kw_th=[2.0, 2.0, None, 800.0, 900.0])},
        [
            "chillers.csv, row 2, column capacity_kw_th: came 4 kW_th in all machines of harbour; expected at least "
            "1% of the site's peak cooling load, 900 kW_th; is it in MW? give it in kW"
        ],
    ),
    "kW in the column of tons": (
        {"chillers": as_tons()},
        [
            "chillers.csv, row 2, column capacity_ton: came tons that make 3516.85 kW_th in all machines of "
            "harbour; expected at most 3 times the site's peak cooling load, 900 kW_th; if they are kW, name the "
            "column capacity_kw_th; if they are tons, give them there in kW_th",
            "chillers.csv, row 5, column capacity_ton: came tons that make 5978.65 kW_th in all machines of ward; "
            "expected at most 3 times the site's peak cooling load, 1500 kW_th; if they are kW, name the column "
            "capacity_kw_th; if they are tons, give them there in kW_th",
        ],
    ),
    "a tank in MWh": (
        {"tanks": set_cell("tanks", 4, "capacity_kwh_th", 5.0)},
        [
            "tanks.csv, row 4, column capacity_kwh_th: came 5; expected at least 0.01 hours of the site's peak "
            "cooling load, 15 kWh_th; is it in MWh? give it in kWh"
        ],
    ),
    "a limit in MW": (
        {"nodes": set_cell("nodes", 3, "import_limit_kw", 2.5)},
        [
            "nodes.csv, row 3, column import_limit_kw: came 2.5; expected 0, or at least 1% of the rated power of "
            "the chillers below, 3.05506 kW; is it in MW? give it in kW; empty = no limit"
        ],
    ),
    "a limit of the root in MW": (
        {"nodes": set_cell("nodes", 2, "import_limit_kw", 5.0)},
        [
            "nodes.csv, row 2, column import_limit_kw: came 5; expected 0, or at least 1% of the rated power of "
            "the chillers below, 6.45506 kW; is it in MW? give it in kW; empty = no limit"
        ],
    ),
    "loads in MW": (
        {"loads": in_mega("loads", "cooling_load_kw_th")},
        [
            "loads.csv, row 54, column cooling_load_kw_th: came 0.85 as the highest of harbour; expected at least "
            "0.2% of the site's peak cooling load, 900 kW_th; is it in MW? give it in kW, or 0 if there is none",
            "loads.csv, row 342, column cooling_load_kw_th: came 1.4 as the highest of ward; expected at least "
            "0.2% of the site's peak cooling load, 1500 kW_th; is it in MW? give it in kW, or 0 if there is none",
        ],
    ),
    "a load in W": (
        {"loads": set_cell("loads", 2, "cooling_load_kw_th", 90001.0)},
        [
            "loads.csv, row 2, column cooling_load_kw_th: came 90001 as the highest of harbour; expected at most "
            "100 times the site's peak cooling load, 900 kW_th; is it in W? give it in kW"
        ],
    ),
    "meters in MW": (
        {"meters": in_mega("meters", "kw")},
        [
            f"meters.csv, row {row}, column kw: came {came} as the highest of {meter}; expected at least 0.5% of "
            f"the rated power of its chillers, {least} kW; is it in MW? give it in kW"
            for row, came, meter, least in (
                (2, "0.532", "harbour", "1"),
                (290, "0.336", "library", "0.527528"),
                (578, "0.868", "ward", "1.7"),
            )
        ],
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", CASES)
def test_an_impossible_magnitude_is_refused_with_the_whole_message(tmp_path, case):
    changes, expected = CASES[case]
    found = [
        text for text in wrong(write_small_fleet(tmp_path, **changes)) if not text.startswith("status.csv")
    ]
    assert found == expected


def test_values_at_the_bounds_pass(tmp_path):
    sites = set_cell("sites", 2, "floor_area_m2", 300.0)  # 900 kW_th: 3 kW_th per m2
    sites["held_back_kwh_th"] = [3000.0, 2500.0, 5000.0]
    chillers = set_cell("chillers", 2, "rated_cop", 15.0)
    assert wrong(write_small_fleet(tmp_path, sites=sites, chillers=chillers)) == []


def test_a_plant_that_is_off_all_winter_is_no_wrong_unit(tmp_path):
    loads = small_tables()["loads"].assign(cooling_load_kw_th=0.0)
    meters = small_tables()["meters"].assign(kw=0.0)
    assert wrong(write_small_fleet(tmp_path, loads=loads, meters=meters)) == []


def test_unlikely_values_are_counted_in_notes(tmp_path):
    sites = set_cell("sites", 2, "floor_area_m2", 1000.0)
    chillers = small_tables()["chillers"].assign(rated_cop=[12.0, None, 1.5, None, None])
    chillers["capacity_kw_th"] = [128.0, 128.0, None, 800.0, 900.0]
    tanks = set_cell("tanks", 4, "capacity_kwh_th", 60000.0)
    weather = small_tables()["weather"]
    weather["dry_bulb_c"] = np.minimum(weather["dry_bulb_c"] * 1.8 + 1.0, 60.0)
    loads = set_cell("loads", 2, "cooling_load_kw_th", 1400.0)
    path = write_small_fleet(
        tmp_path, sites=sites, chillers=chillers, tanks=tanks, weather=weather, loads=loads
    )
    end = "; correct it or let it stand"
    assert open_folder(path).notes == [
        "sites.csv: 1 unlikely peak_cooling_kw_th per floor_area_m2, usual 0.015 to 0.5 kW_th per m2: "
        "harbour 0.9" + end,
        "chillers.csv: 1 unlikely capacity of a site's machines, usual 0.3 to 3 times the peak cooling load (below: "
        "tons in a kW column?): harbour 0.2844" + end,
        "chillers.csv: 2 unlikely rated_cop, usual 2 to 9 kW_th per kW: harbour/CH-1 12, library/CH-1 1.5"
        + end,
        "tanks.csv: 1 unlikely capacity, usual 0.3 to 36 hours of the peak cooling load: ward/CW-1 40" + end,
        "loads.csv: 1 unlikely highest cooling_load_kw_th, usual 0 to 1.5 times the peak: harbour 1.556"
        + end,
        "weather.csv: 1 unlikely highest dry_bulb_c, usual up to 52 degC (degrees Fahrenheit?): pier 60"
        + end,
    ]


def test_many_unlikely_values_are_named_by_the_first_five(tmp_path):
    one = small_tables()["sites"].iloc[[0]]
    sites = pd.concat([one.assign(site_id=f"s{n}", floor_area_m2=1500.0) for n in range(7)])
    names = ("chillers", "tanks", "loads", "bills", "status", "plant_days", "meters")
    path = write_small_fleet(tmp_path, sites=sites, **dict.fromkeys(names))
    (note,) = open_folder(path).notes
    assert note.endswith(
        "per m2: s0 0.6, s1 0.6, s2 0.6, s3 0.6, s4 0.6 and 2 more; correct it or let it stand"
    )
    assert note.startswith("sites.csv: 7 unlikely ")
