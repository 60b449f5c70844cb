import dataclasses
import time

import numpy as np
import pandas as pd
import pytest
from fleet_folders import SETTINGS, STARTS, set_cell, small_tables, write_small_fleet

from fleet.assemble import assemble, roster_of
from fleet.errors import Refused
from fleet.folder import open_folder
from fleet.resolve import resolve
from fleet.schema import table
from fleet.series import on_clock
from fleet.standing import usual_fraction
from fleet.tables import read_parquet, write_parquet
from sites.clock import span
from sites.roster import CHILLER_KINDS, LAYOUTS, STRATEGIES, TANK_KINDS
from sites.weather import wet_bulb_c

START, END = np.datetime64("2026-07-14T10:00"), np.datetime64("2026-07-15T21:00")  # 13:00 local to midnight


@pytest.fixture(scope="module")
def fleet(tmp_path_factory):
    return assemble(open_folder(write_small_fleet(tmp_path_factory.mktemp("small"))), START, END)


def of(tmp_path, start=START, end=END, settings=SETTINGS, **changes):
    return assemble(open_folder(write_small_fleet(tmp_path, settings=settings, **changes)), start, end)


def refused(tmp_path, **changes):
    with pytest.raises(Refused) as caught:
        of(tmp_path, **changes)
    return [str(problem) for problem in caught.value.problems]


def test_machines_are_in_loading_order_and_padded(fleet):
    chillers = fleet.roster.chillers
    assert chillers.chiller_id.tolist() == [["CH-2", "CH-1"], ["CH-1", ""], ["CH-1", "CH-2"]]
    assert chillers.exists.tolist() == [[True, True], [True, False], [True, True]]
    assert chillers.capacity_kw_th[1].tolist() == [pytest.approx(150 * 3.516853), 0.0]
    assert [CHILLER_KINDS[kind] for kind in chillers.kind[2]] == ["water_cooled_centrifugal"] * 2
    assert chillers.rated_cop[2].tolist() == [6.28, 6.28]
    assert chillers.makes_ice.tolist() == [[True, True], [True, False], [False, False]]
    assert np.isinf(chillers.starts_left).all()
    assert chillers.dedicated_aux_kw[2].tolist() == [pytest.approx(0.033 * 800), pytest.approx(0.033 * 900)]


def test_buildings_and_tanks_carry_their_values_and_defaults(fleet):
    buildings, tanks = fleet.roster.buildings, fleet.roster.tanks
    assert [STRATEGIES[code] for code in buildings.strategy] == small_tables()["sites"]["strategy"].tolist()
    assert {LAYOUTS[code] for code in buildings.layout} == {"parallel"}
    assert buildings.floor_area_m2.tolist() == [9000.0, 6000.0, 15000.0]
    assert buildings.peak_cooling_kw_th.tolist() == [900.0, 600.0, 1500.0]
    assert buildings.critical_kw_th.tolist() == [0.0, 0.0, 400.0]
    assert buildings.air_kwh_per_k == pytest.approx([54.0, 36.0, 90.0])
    assert buildings.shared_aux_kw == pytest.approx([13.5, 9.0, 22.5])
    assert buildings.notice_minutes.tolist() == [120.0] * 3
    assert [TANK_KINDS[kind] for kind in tanks.kind[:, 0]] == list(TANK_KINDS[:3])
    assert tanks.discharge_limit_kw_th[:, 0].tolist() == [np.inf, np.inf, 1000.0]


def test_every_field_of_the_roster_is_finite_or_a_stated_none(fleet):
    for part in (fleet.roster.buildings, fleet.roster.chillers, fleet.roster.tanks):
        for field in dataclasses.fields(part):
            values = getattr(part, field.name)
            assert len(values) == 3
            if values.dtype == np.float64:
                assert not np.isnan(values).any(), field.name


def test_outlook_on_the_clock(fleet):
    outlook, tables = fleet.outlook, small_tables()
    assert outlook.clock.count == 35 * 4
    assert outlook.local_hour[0] == 13.0
    assert outlook.local_weekday[0] == 1  # 14 July 2026 is a Tuesday
    first = list(STARTS).index(pd.Timestamp(START, tz="UTC"))
    dry = tables["weather"]["dry_bulb_c"].to_numpy()[first : first + 140]
    assert outlook.dry_bulb_c.tolist() == [dry.tolist()] * 3
    assert outlook.wet_bulb_c[0] == pytest.approx(wet_bulb_c(dry, np.full(140, 45.0)))
    harbour = tables["loads"].query("site_id == 'harbour'").iloc[first : first + 140]
    assert outlook.cooling_load_kw_th[0].tolist() == harbour["cooling_load_kw_th"].tolist()
    assert outlook.rest_kw[0].tolist() == harbour["rest_kw"].tolist()
    assert outlook.rest_kw[1].tolist() == [0.0] * 140
    assert outlook.billed_peak_kw.tolist() == [420.0, 260.0, 0.0]


def test_hourly_prices_hold_for_their_hour_and_are_counted(fleet):
    hour = fleet.outlook.local_hour
    expected = np.where((hour >= 8.0) & (hour < 22.0), 0.24, 0.11)
    assert fleet.outlook.price_per_kwh.tolist() == [expected.tolist()] * 3
    assert fleet.notes == ("tariffs: 105 intervals take the value of the coarser row they lie in",)
    assert fleet.shortfall_price_per_kwh == pytest.approx(2.4)
    assert fleet.over_delivery_price_per_kwh == pytest.approx(expected.max())


def test_a_site_without_loads_gets_a_marked_profile_within_its_peak(fleet):
    load = fleet.outlook.cooling_load_kw_th[1]
    assert 0.0 <= load.min() < 0.2 * 600.0
    assert 0.6 * 600.0 < load.max() <= 600.0
    marked = {(one.table, one.key, one.column): one for one in fleet.assumed}
    assert marked["loads", "library", "cooling_load_kw_th"].value == "up to 600"
    assert marked["loads", "library", "rest_kw"].value == "0"
    assert ("loads", "harbour", "cooling_load_kw_th") not in marked
    assert ("bills", "ward", "billed_peak_kw") not in marked, "ward has no demand charge"


def test_everything_assumed_is_listed_with_its_reason(fleet):
    marked = {(one.table, one.key, one.column): (one.value, one.why) for one in fleet.assumed}
    assert marked["sites", "ward", "floor_area_m2"] == ("15000", "0.1 kW_th of peak cooling per m2")
    assert marked["sites", "harbour", "air_kwh_per_k"] == ("54", "0.006 per m2 of floor area")
    assert marked["chillers", "ward/CH-1", "rated_cop"] == (
        "6.28",
        "ASHRAE 90.1-2019 path A minimum of its kind",
    )
    assert marked["chillers", "library/CH-1", "makes_ice"] == ("true", "true where the site has ice")
    assert marked["sites", "harbour", "no_unmet"] == ("false", "default")
    assert marked["sites", "library", "occupied_to_hour"] == ("17", "usual for type courthouse")
    assert marked["sites", "ward", "occupied_all_week"] == ("true", "usual for type hospital")
    assert marked["sites", "library", "mass_kwh_per_k"] == (
        "210",
        "0.035 per m2 of floor area, usual for type courthouse",
    )
    assert ("sites", "harbour", "floor_area_m2") not in marked
    assert ("sites", "harbour", "calls_per_week") not in marked
    assert len(marked) == len(fleet.assumed)


def test_status_the_newest_reading_ages_and_an_unavailable_machine(fleet):
    stands = fleet.standing
    # harbour: 2800 read at 11:00, two hours old: 3000 x (5 % + 2 x 1 %) = 210; library: three hours, 2500 x 8 % = 200
    assert stands.best_kwh_th[:2, 0].tolist() == [2800.0, 2400.0]
    assert stands.low_kwh_th[:2, 0] == pytest.approx([2590.0, 2200.0])
    assert stands.high_kwh_th[:2, 0].tolist() == [3000.0, 2500.0]
    assert stands.chiller_available.tolist() == [[True, True], [True, False], [True, False]]
    assert stands.tank_available.all()


def test_a_tank_never_read_is_assumed_and_marked(fleet):
    # load levelling: full at 06:00, used until midnight (a hospital); at 13:00 11/18 of 5000 are left
    assert fleet.standing.best_kwh_th[2, 0] == pytest.approx(3055.5556)
    assert fleet.standing.low_kwh_th[2, 0] == pytest.approx(0.8 * 3055.5556)
    assert fleet.standing.high_kwh_th[2, 0] == pytest.approx(1.2 * 3055.5556)
    (one,) = [one for one in fleet.assumed if one.table == "status"]
    assert (one.key, one.value) == ("ward/CW-1", "3055.56")
    assert one.why == (
        "no reading at or before 2026-07-14 13:00 +03:00: full by the end of usual charging, "
        "used up over the hours of usual discharge"
    )


@pytest.mark.parametrize(
    ("hour", "shares"),
    [
        # harbour: 07 to 19; library (storage priority): 12 to 18; both charge from 22 to 06;
        # ward (a hospital, people around the clock): from the end of charging, 06, to midnight, charged from then
        (6.0, [1.0, 1.0, 1.0]),
        (7.0, [1.0, 1.0, 17 / 18]),
        (13.0, [0.5, 5 / 6, 11 / 18]),
        (18.0, [1 / 12, 0.0, 6 / 18]),
        (21.0, [0.0, 0.0, 3 / 18]),
        (2.0, [0.5, 0.5, 2 / 6]),
        (5.99, [0.99875, 0.99875, 5.99 / 6]),
    ],
)
def test_assumed_course_of_a_usual_day(fleet, hour, shares):
    assert usual_fraction(fleet.roster, hour) == pytest.approx(shares)


def test_a_status_after_the_start_is_not_yet_known(tmp_path):
    fleet = of(tmp_path, start=np.datetime64("2026-07-14T05:00"))
    assert fleet.standing.best_kwh_th[0, 0] == 2950.0  # read at 06:00; 2800 follows at 11:00
    assert fleet.standing.chiller_available[2].tolist() == [True, True]
    assert ("status", "library/ICE-1") in {(one.table, one.key) for one in fleet.assumed}


def test_given_bounds_of_a_reading_are_kept(tmp_path):
    status = set_cell("status", 3, "inventory_low_kwh_th", 2700)
    status.loc[1, "inventory_high_kwh_th"] = 2850
    fleet = of(tmp_path, status=status)
    assert fleet.standing.low_kwh_th[0, 0] == 2700.0
    assert fleet.standing.high_kwh_th[0, 0] == 2850.0


def test_availability_and_level_may_come_in_different_rows(tmp_path):
    status = small_tables()["status"]
    status.loc[len(status)] = ["harbour", "ICE-1", "2026-07-14T12:00+03:00", None, "false", "reported"]
    fleet = of(tmp_path, status=status)
    assert fleet.standing.best_kwh_th[0, 0] == 2800.0
    assert fleet.standing.tank_available[:, 0].tolist() == [False, True, True]


def test_what_does_not_cover_the_horizon_is_refused_with_its_times(tmp_path):
    assert refused(tmp_path, end=np.datetime64("2026-07-17T21:00")) == [
        f"{name}.csv, column {column}: came no value for {key} in 96 intervals from 2026-07-17 00:00 +03:00 to "
        "2026-07-18 00:00 +03:00; expected values over the horizon, 2026-07-14 13:00 +03:00 to "
        "2026-07-18 00:00 +03:00; add the rows, or ask for a time that is covered"
        for name, column, key in [
            ("weather", "dry_bulb_c", "pier"),
            ("tariffs", "price_per_kwh", "day-night"),
            ("loads", "cooling_load_kw_th", "harbour"),
            ("loads", "cooling_load_kw_th", "ward"),
        ]
    ]


def test_a_hole_inside_is_never_filled(tmp_path):
    weather = small_tables()["weather"].drop(index=[60, 61])
    loads = small_tables()["loads"].astype({"cooling_load_kw_th": object})
    loads.loc[70, "cooling_load_kw_th"] = None
    found = refused(tmp_path, weather=weather, loads=loads)
    assert found[0].startswith(
        "weather.csv, column dry_bulb_c: came no value for pier in 2 intervals from "
        "2026-07-14 15:00 +03:00 to 2026-07-14 15:30 +03:00; "
    )
    assert found[1].startswith(
        "loads.csv, column cooling_load_kw_th: came no value for harbour in 1 intervals "
    )
    assert len(found) == 2


def test_a_missing_hour_of_hourly_prices_is_refused(tmp_path):
    tariffs = small_tables()["tariffs"].drop(index=16)
    assert refused(tmp_path, tariffs=tariffs)[0].startswith(
        "tariffs.csv, column price_per_kwh: came no value for day-night in 4 intervals from "
        "2026-07-14 16:00 +03:00 to 2026-07-14 17:00 +03:00; "
    )


def test_only_stations_that_a_site_names_must_cover(tmp_path):
    weather = small_tables()["weather"]
    other = weather.iloc[:4].assign(station_id="hill")
    fleet = of(tmp_path, weather=pd.concat([weather, other]), sites={"station_id": "pier"})
    assert fleet.outlook.dry_bulb_c.shape == (3, 140)


def test_no_weather_at_all(tmp_path):
    assert refused(tmp_path, weather=None) == [
        "weather.csv: came no rows; expected rows over the horizon; add them"
    ]


def test_prices_that_leave_no_shortfall_price_are_refused_until_one_is_given(tmp_path):
    message = (
        "fleet.toml, column shortfall_price_per_kwh: came nothing, and no energy price of the horizon above 0; "
        "expected a price above 0; add shortfall_price_per_kwh"
    )
    assert refused(tmp_path / "a", tariffs={"price_per_kwh": 0.0}) == [message]
    settings = SETTINGS + "shortfall_price_per_kwh = 3.5\n"
    fleet = of(tmp_path / "b", settings=settings, tariffs={"price_per_kwh": -0.1})
    assert fleet.shortfall_price_per_kwh == 3.5
    assert fleet.over_delivery_price_per_kwh == 0.0


def test_a_billing_cycle_counts_by_the_local_day(tmp_path):
    bills = "site_id,cycle_start,cycle_end,billed_peak_kw\n"
    bills += "harbour,2026-07-01,2026-07-14,420\nward,2026-07-15,2026-08-14,9\n"
    late = np.datetime64("2026-07-14T20:45")
    assert of(tmp_path, start=late, bills=bills).outlook.billed_peak_kw.tolist() == [420.0, 0.0, 0.0]
    midnight = np.datetime64("2026-07-14T21:00")
    fleet = of(tmp_path, start=midnight, bills=bills)
    assert fleet.outlook.billed_peak_kw.tolist() == [0.0, 0.0, 9.0]
    assert [one.key for one in fleet.assumed if one.table == "bills"] == ["harbour", "library"]


def test_resolved_tables_can_be_frozen_and_read_again_as_the_same_fleet(tmp_path, fleet):
    frames = {}
    for name, frame in fleet.resolved.items():
        write_parquet(frame, tmp_path / f"{name}.parquet", table("fleet", name))
        frames[name] = read_parquet(tmp_path / f"{name}.parquet", table("fleet", name))
    folder = open_folder(write_small_fleet(tmp_path / "small"))
    again = resolve(folder.frames | frames, folder.settings)
    assert again.assumed == ()
    roster = roster_of(again)
    for part in ("buildings", "chillers", "tanks"):
        for field in dataclasses.fields(getattr(roster, part)):
            given = getattr(getattr(fleet.roster, part), field.name)
            assert getattr(getattr(roster, part), field.name).tolist() == given.tolist(), field.name


def test_a_site_with_neither_chiller_nor_tank_stands_as_padding(tmp_path):
    fleet = of(
        tmp_path,
        tanks=small_tables()["tanks"].iloc[:2],
        chillers=small_tables()["chillers"].iloc[:3],
        status=None,
    )
    assert fleet.roster.chillers.exists.tolist() == [[True, True], [True, False], [False, False]]
    assert fleet.roster.tanks.exists.tolist() == [[True], [True], [False]]
    assert fleet.standing.best_kwh_th[2, 0] == 0.0


def test_series_one_key_equals_many():
    clock = span(STARTS[4].to_datetime64(), STARTS[100].to_datetime64(), 15)
    loads = small_tables()["loads"]
    loads["interval_start"] = pd.to_datetime(loads["interval_start"], utc=True).astype("datetime64[us, UTC]")
    many = on_clock(
        loads, "site_id", ("rest_kw",), np.array(["ward", "none", "harbour"], dtype=object), clock
    )
    one = on_clock(loads, "site_id", ("rest_kw",), np.array(["ward"], dtype=object), clock)
    assert many.values["rest_kw"][0].tolist() == one.values["rest_kw"][0].tolist()
    assert many.has_rows.tolist() == [True, False, True]
    assert not many.covered[1].any()
    assert np.isnan(many.values["rest_kw"][1]).all()


def test_series_half_hour_rows_stand_for_half_an_hour():
    starts = pd.to_datetime(["2026-07-14T00:00Z", "2026-07-14T00:30Z", "2026-07-14T01:30Z"]).astype(
        "datetime64[us, UTC]"
    )
    frame = pd.DataFrame({"k": ["a"] * 3, "interval_start": starts, "v": [1.0, 2.0, 3.0]})
    clock = span(np.datetime64("2026-07-14T00:15"), np.datetime64("2026-07-14T02:15"), 15)
    found = on_clock(frame, "k", ("v",), np.array(["a"], dtype=object), clock)
    assert found.values["v"][0, [0, 1, 2, 5, 6]].tolist() == [1.0, 2.0, 2.0, 3.0, 3.0]
    assert np.flatnonzero(~found.covered[0]).tolist() == [3, 4, 7]
    assert found.carried == 3


def test_a_thousand_sites_are_assembled_within_seconds(tmp_path):
    small, copies = small_tables(), 334
    many = {
        name: pd.concat(
            [small[name].assign(site_id=small[name]["site_id"] + f"-{copy}") for copy in range(copies)]
        )
        for name in ("sites", "chillers", "tanks", "status", "bills")
    }
    folder = open_folder(write_small_fleet(tmp_path, **many, loads=None, meters=None, plant_days=None))
    before = time.perf_counter()
    fleet = assemble(folder, STARTS[0].to_datetime64(), STARTS[200].to_datetime64())
    seconds = time.perf_counter() - before
    assert fleet.outlook.cooling_load_kw_th.shape == (3 * copies, 200)
    assert fleet.standing.best_kwh_th[3 * 200, 0] == fleet.standing.best_kwh_th[0, 0]
    assert seconds < 20.0, f"{seconds:.1f} s"
