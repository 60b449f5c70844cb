import json

import pytest
from fleet_folders import set_cell, write_small_fleet

from fleet.check import document, lines, report
from fleet.errors import FleetError


def test_a_good_folder_says_what_can_be_done_and_what_is_assumed(tmp_path):
    found = report(write_small_fleet(tmp_path))
    assert found.is_ok
    text = lines(found)
    assert text[:3] == [
        "quote yes: times from 2026-07-14 00:00 +03:00 to the interval of 2026-07-16 23:00 +03:00",
        "call yes: times from 2026-07-14 00:00 +03:00 to the interval of 2026-07-16 23:00 +03:00",
        "settle yes: events with readings from 2026-07-14 00:00 +03:00 to the interval of 2026-07-16 23:45 +03:00",
    ]
    assert "  notice_minutes = 120.0" in text
    assert "  sites.air_kwh_per_k (0.006 per m2 of floor area): harbour 54, library 36, ward 90" in text
    assert "  sites.supply_c = 5 (default): harbour, library, ward" in text
    assert "  loads.cooling_load_kw_th = a profile from peak and weather (no row): library" in text
    assert "  status.inventory_kwh_th = the course of a usual day (no reading): ward/CW-1" in text


def test_without_meters_it_settles_not(tmp_path):
    found = report(write_small_fleet(tmp_path, meters=None))
    assert [ability.is_ok for ability in found.abilities] == [True, True, False]
    assert "settle no: meters missing" in lines(found)


def test_without_weather_and_tariffs_it_quotes_not(tmp_path):
    text = lines(report(write_small_fleet(tmp_path, weather=None, tariffs=None)))
    assert text[0] == "quote no: weather and tariffs missing"
    assert text[2].startswith("settle yes: ")


def test_problems_come_by_file_and_nothing_can_be_done(tmp_path):
    sites = set_cell("sites", 3, "strategy", "luck")
    sites.loc[0, "call_fee"] = -1
    found = report(write_small_fleet(tmp_path, sites=sites, holidays="date\nsoon\n"))
    assert not found.is_ok
    assert lines(found)[:9] == [
        "3 problems:",
        "  sites.csv",
        "    row 3, column strategy: came 'luck'; expected one of full_storage, load_levelling, "
        "chiller_priority, storage_priority; correct the spelling",
        "    row 2, column call_fee: came '-1.0'; expected a number of 0 money or more; correct it (digits and "
        "a decimal point only), or leave it empty if it is not required",
        "  holidays.csv",
        "    row 2, column date: came 'soon'; expected a date (YYYY-MM-DD); correct it",
        "quote no: 3 problems to mend",
        "call no: 3 problems to mend",
        "settle no: 3 problems to mend",
    ]
    assert found.assumed == ()


def test_unreadable_settings_stop_everything_else(tmp_path):
    found = report(write_small_fleet(tmp_path, settings="name ="))
    assert lines(found) == [
        "1 problem:",
        "  fleet.toml",
        "    row 1: came Invalid value; expected a TOML file; mend that line",
        "quote no: 1 problem",
        "call no: 1 problem",
        "settle no: 1 problem",
    ]


def test_no_folder_is_an_error(tmp_path):
    with pytest.raises(FleetError, match=r"there is no such fleet folder; `shedwright begin "):
        report(tmp_path / "none")


def test_the_document_holds_all_of_it_as_plain_values(tmp_path):
    good = document(report(write_small_fleet(tmp_path / "good", meters=None)))
    assert json.loads(json.dumps(good)) == good
    assert good["ok"] is True
    assert good["abilities"]["settle"] == {"ok": False, "reasons": ["meters missing"]}
    assert good["settings_not_given"]["season"] == "calendar year"
    assert {
        "table": "sites",
        "key": "ward",
        "column": "floor_area_m2",
        "value": "15000",
        "why": "0.1 kW_th of peak cooling per m2",
    } in good["assumed"]
    bad = document(report(write_small_fleet(tmp_path / "bad", holidays="date\nsoon\n")))
    assert bad["problems"] == [
        {
            "file": "holidays.csv",
            "row": 2,
            "column": "date",
            "came": "'soon'",
            "expected": "a date (YYYY-MM-DD)",
            "advice": "correct it",
        }
    ]
