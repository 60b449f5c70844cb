"""One bad cell of an input table, one message in full."""

import pytest
from fleet_folders import TEXTS, set_cell, write_small_fleet, wrong


@pytest.mark.parametrize(
    ("table", "row", "column", "value", "message"),
    [
        (
            "sites", 3, "floor_area_m2", "big",
            "sites.csv, row 3, column floor_area_m2: came 'big'; expected a number from 10 to 2000000 m2; "
            "correct it (digits and a decimal point only), or leave it empty if it is not required",
        ),
        (
            "sites", 2, "peak_cooling_kw_th", "-5",
            "sites.csv, row 2, column peak_cooling_kw_th: came '-5'; expected a number from 1 to 200000 kW_th; "
            "correct it (digits and a decimal point only), or leave it empty if it is not required",
        ),
        (
            "sites", 2, "call_fee", "nan",
            "sites.csv, row 2, column call_fee: came 'nan'; expected a number of 0 money or more; "
            "correct it (digits and a decimal point only), or leave it empty if it is not required",
        ),
        (
            "sites", 2, "call_fee", "inf",
            "sites.csv, row 2, column call_fee: came 'inf'; expected a number of 0 money or more; "
            "correct it (digits and a decimal point only), or leave it empty if it is not required",
        ),
        (
            "sites", 2, "call_fee", "1,5",
            "sites.csv, row 2, column call_fee: came '1,5'; expected a number of 0 money or more; "
            "correct it (digits and a decimal point only), or leave it empty if it is not required",
        ),
        (
            "sites", 2, "calls_per_week", "1.5",
            "sites.csv, row 2, column calls_per_week: came '1.5'; expected a whole number from 0 to 50; "
            "correct it (digits and a decimal point only), or leave it empty if it is not required",
        ),
        (
            "sites", 4, "no_unmet", "maybe",
            "sites.csv, row 4, column no_unmet: came 'maybe'; expected true or false; correct it",
        ),
        (
            "tanks", 2, "kind", "ice",
            "tanks.csv, row 2, column kind: came 'ice'; expected one of ice_internal_melt, ice_external_melt, "
            "chilled_water, ice_encapsulated, eutectic_salt; correct the spelling",
        ),
        (
            "tanks", 3, "kind", "",
            "tanks.csv, row 3, column kind: came nothing; expected one of ice_internal_melt, "
            "ice_external_melt, chilled_water, ice_encapsulated, eutectic_salt; fill it in",
        ),
        (
            "tanks", 4, "capacity_kwh_th", None,
            "tanks.csv, row 4, column capacity_kwh_th: came nothing; expected one of capacity_kwh_th, "
            "capacity_ton_h; give its size",
        ),
        (
            "chillers", 4, "capacity_kw_th", 900.0,
            "chillers.csv, row 4, column capacity_ton: came 150 beside capacity_kw_th 900; expected one size: "
            "150 is 527.528 in capacity_kw_th; give one of the two",
        ),
        (
            "bills", 2, "cycle_end", "31.7.2026",
            "bills.csv, row 2, column cycle_end: came '31.7.2026'; expected a date (YYYY-MM-DD); correct it",
        ),
        (
            "bills", 2, "cycle_start", "2026-08-01",
            "bills.csv, row 2, column cycle_start: came 2026-08-01 and 2026-07-31; "
            "expected cycle_start not after cycle_end; correct one of the two",
        ),
        (
            "sites", 2, "supply_c", "12",
            "sites.csv, row 2, column supply_c: came 12 and 12; expected supply_c below return_c; "
            "correct one of the two",
        ),
        (
            "weather", 4, "interval_start", "2026-07-13T21:07Z",
            "weather.csv, row 4, column interval_start: came '2026-07-13T21:07Z'; "
            "expected a time on the fleet's 15-minute grid; correct it",
        ),
        (
            "weather", 4, "interval_start", "2026-07-14T00:30",
            "weather.csv, row 4, column interval_start: came '2026-07-14T00:30'; expected a time with an offset "
            "(declare [tables] ..._time if all are Europe/Athens or UTC); correct it",
        ),
        (
            "weather", 5, "interval_start", TEXTS[0],
            "weather.csv, row 5, column interval_start: came 'pier, 2026-07-13 21:00:00+00:00'; "
            "expected each station_id, interval_start once; remove one of the rows, or correct its key",
        ),
        (
            "weather", 3, "wet_bulb_c", 40.0,
            "weather.csv, row 3, column wet_bulb_c: came 40; expected at most dry_bulb_c, 21.74 "
            "(rows like this: 1); correct one of the two",
        ),
        (
            "weather", 3, "rh_pct", None,
            "weather.csv, row 3, column wet_bulb_c: came nothing; expected wet_bulb_c or rh_pct in each row "
            "(rows like this: 1); fill one of them in",
        ),
        (
            "sites", 4, "node_id", "nort",
            "sites.csv, row 4, column node_id: came 'nort'; expected a node_id of nodes; "
            "add it to nodes, or correct the spelling",
        ),
        (
            "sites", 4, "tariff_id", "night",
            "sites.csv, row 4, column tariff_id: came 'night'; expected a tariff_id of tariffs; "
            "add it to tariffs, or correct the spelling",
        ),
        (
            "sites", 4, "station_id", "hill",
            "sites.csv, row 4, column station_id: came 'hill'; expected a station_id of weather; "
            "add it to weather, or correct the spelling",
        ),
        (
            "bills", 3, "site_id", "libary",
            "bills.csv, row 3, column site_id: came 'libary'; expected a site_id of sites; "
            "add it to sites, or correct the spelling",
        ),
        (
            "status", 4, "unit_id", "ICE-9",
            "status.csv, row 4, column unit_id: came 'ICE-9'; expected a chiller_id or tank_id of site library; "
            "add the unit, or correct the spelling",
        ),
        (
            "status", 3, "inventory_kwh_th", 3001,
            "status.csv, row 3, column inventory_kwh_th: came 3001; expected at most the tank's capacity, "
            "3000 kWh_th; correct one of the two",
        ),
        (
            "status", 3, "inventory_low_kwh_th", 2900,
            "status.csv, row 3, column inventory_kwh_th: came 2900, 2800, nan; expected low at most best at "
            "most high; put them in order",
        ),
        (
            "tanks", 4, "tank_id", "CH-1",
            "tanks.csv, row 4, column tank_id: came 'CH-1'; expected an id that no chiller of the site has; "
            "rename one",
        ),
        (
            "meters", 2, "meter_id", "harbor",
            "meters.csv, row 2, column meter_id: came 'harbor'; expected a site_id (there is no meter_map); "
            "add it to meter_map, or correct the spelling",
        ),
        (
            "nodes", 3, "parent_id", "east",
            "nodes.csv, row 3, column parent_id: came 'east'; expected a node_id of nodes; "
            "add it to nodes, or correct the spelling",
        ),
        (
            "nodes", 3, "parent_id", None,
            "nodes.csv, row 3, column parent_id: came 2 roots (coast, north); "
            "expected exactly one row without parent_id; give all but one node a parent",
        ),
        (
            "nodes", 3, "parent_id", "north",
            "nodes.csv, row 3, column parent_id: came north above north; expected a tree; "
            "correct the parent of one of them",
        ),
        (
            "chillers", 4, "makes_ice", "no",
            "tanks.csv, row 3, column tank_id: came library/ICE-1 (ice_external_melt); "
            "expected a chiller of the site that can charge it; "
            "add the chiller, set its makes_ice to true, or remove the tank",
        ),
    ],
)  # fmt: skip
def test_one_bad_cell_gives_one_message_in_full(tmp_path, table, row, column, value, message):
    path = write_small_fleet(tmp_path, **{table: set_cell(table, row, column, value)})
    assert wrong(path) == [message]
