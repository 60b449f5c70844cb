import numpy as np
from fleet_folders import SETTINGS, set_cell, write_small_fleet

from fleet.assemble import assemble
from fleet.check import lines, report
from fleet.folder import open_folder, problems

PRICED = SETTINGS + "energy_price_per_kwh = 0.19\n"
START, END = np.datetime64("2026-07-14T10:00"), np.datetime64("2026-07-15T21:00")


def test_one_price_stands_for_a_tariffs_table_at_all_times_of_the_weather(tmp_path):
    folder = open_folder(write_small_fleet(tmp_path, settings=PRICED, tariffs=None))
    assert folder.notes == ["tariffs: 0.19 EUR/kWh for every site at all times, from fleet.toml"]
    fleet = assemble(folder, START, END)
    assert np.unique(fleet.outlook.price_per_kwh).tolist() == [0.19]
    assert set(fleet.resolved["sites"]["tariff_id"]) == {"one price"}
    assert fleet.shortfall_price_per_kwh == 1.9


def test_check_says_that_it_can_quote_and_from_where_the_price_comes(tmp_path):
    text = lines(report(write_small_fleet(tmp_path, settings=PRICED, tariffs=None)))
    assert text[0].startswith("quote yes: times from 2026-07-14 00:00 +03:00")
    assert "  tariffs: 0.19 EUR/kWh for every site at all times, from fleet.toml" in text


def test_a_tariffs_table_goes_before_the_one_price_and_says_so(tmp_path):
    folder = open_folder(write_small_fleet(tmp_path, settings=PRICED))
    assert folder.notes == ["fleet.toml: energy_price_per_kwh is not used, for there is a tariffs table"]
    assert set(folder.frames["tariffs"]["price_per_kwh"]) == {0.11, 0.24}


def test_a_site_that_names_a_tariff_is_refused_where_there_is_only_the_one_price(tmp_path):
    sites = set_cell("sites", 3, "tariff_id", "night")
    found = problems(write_small_fleet(tmp_path, settings=PRICED, tariffs=None, sites=sites))
    assert [str(problem) for problem in found] == [
        "sites.csv, row 3, column tariff_id: came 'night'; expected a tariff_id of tariffs; add it to tariffs, "
        "or correct the spelling"
    ]


def test_without_weather_there_are_no_times_to_price(tmp_path):
    folder = open_folder(write_small_fleet(tmp_path, settings=PRICED, tariffs=None, weather=None))
    assert folder.frames["tariffs"].empty
