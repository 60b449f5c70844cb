"""The invented fleet folder: conforms to the table of columns, looks sane, is the same from the same seed."""

import csv
import re
from hashlib import sha256
from importlib.resources import files
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from demo_folders import short_fleet

from demo_fleet import buildings, calendar, course, hidden
from demo_fleet.files import DemoError, read_table
from demo_fleet.sample import _contracts, sample
from fleet.folder import problems

TABLES = (
    "sites", "chillers", "tanks", "nodes", "node_loads", "weather", "loads", "tariffs", "bills", "status",
    "holidays", "plant_days", "meter_map", "meters",
)  # fmt: skip


def columns(table: str) -> dict[str, dict[str, str]]:
    with files("fleet").joinpath("columns.csv").open("r", encoding="utf-8") as stream:
        return {
            row["name"]: row
            for row in csv.DictReader(stream)
            if (row["folder"], row["table"]) == ("fleet", table)
        }


def read(sites: int, table: str) -> pd.DataFrame:
    frame = read_table(short_fleet(sites).path, table)
    assert frame is not None, f"{table} is missing"
    return frame


@pytest.mark.parametrize("table", TABLES)
def test_every_table_conforms_to_the_table_of_columns(table: str) -> None:
    frame, known = read(40, table), columns(table)
    assert set(frame.columns) <= set(known)
    for name, column in known.items():
        if column["required"] == "yes":
            assert frame[name].notna().all() or name == "parent_id", f"{table}.{name} has empty cells"
        if name not in frame:
            continue
        values = frame[name].dropna()
        if column["choices"] and column["type"] == "text":
            assert set(values.astype(str)) <= set(column["choices"].split())
        if column["type"] in ("number", "whole"):
            numbers = pd.to_numeric(values)
            assert np.isfinite(numbers).all()
            assert column["low"] == "" or (numbers >= float(column["low"])).all(), name
            assert column["high"] == "" or (numbers <= float(column["high"])).all(), name
        if column["type"] == "time":
            minutes = values.dt.hour * 60 + values.dt.minute
            assert ((minutes % 15) == 0).all()


def test_defaults_are_those_of_the_table_of_columns() -> None:
    for table, defaults in (
        ("sites", hidden.SITE_DEFAULTS),
        ("chillers", hidden.CHILLER_DEFAULTS),
        ("tanks", hidden.TANK_DEFAULTS),
    ):
        for name, default in defaults.items():
            stated = columns(table)[name]["default"]
            if stated:
                same = stated == str(default).lower() or float(stated) == float(default)
                assert same, f"{name}: table says {stated}, here {default}"
    for name, factor in {**hidden.PER_M2, **hidden.PER_PEAK_KW_TH}.items():
        meaning = columns("sites")[name]["meaning"]
        stated = re.search(r"default (?:by building type, )?([\d.]+)(?: to ([\d.]+))?", meaning)
        assert stated, meaning
        assert float(stated[1]) <= factor <= float(stated[2] or stated[1]), meaning
    assert set(buildings.KINDS) == set(columns("sites")["building_type"]["choices"].split())


def test_references_hold_and_sizes_are_given_once() -> None:
    sites, chillers, tanks = read(40, "sites"), read(40, "chillers"), read(40, "tanks")
    nodes, meters = read(40, "nodes"), read(40, "meter_map")
    assert sites["site_id"].is_unique
    assert set(sites["node_id"]) <= set(nodes["node_id"])
    assert set(nodes["parent_id"].dropna()) <= set(nodes["node_id"])
    assert (nodes["parent_id"].fillna("") == "").sum() == 1
    assert set(sites["tariff_id"]) <= set(read(40, "tariffs")["tariff_id"])
    assert set(sites["station_id"]) <= set(read(40, "weather")["station_id"])
    assert set(chillers["site_id"]) == set(sites["site_id"])
    assert set(tanks["site_id"]) < set(sites["site_id"])
    assert (chillers["capacity_kw_th"].isna() != chillers["capacity_ton"].isna()).all()
    assert (tanks["capacity_kwh_th"].isna() != tanks["capacity_ton_h"].isna()).all()
    assert set(read(40, "meters")["meter_id"].astype(str)) == set(meters["meter_id"])
    units = set(zip(chillers["site_id"], chillers["chiller_id"])) | set(
        zip(tanks["site_id"], tanks["tank_id"])
    )
    status = read(40, "status")
    assert set(zip(status["site_id"], status["unit_id"])) == units


def test_ice_tanks_have_machines_that_make_ice() -> None:
    tanks, chillers = read(40, "tanks"), read(40, "chillers")
    iced = set(tanks.loc[tanks["kind"].str.startswith("ice"), "site_id"])
    able = set(chillers.loc[chillers["makes_ice"], "site_id"])
    assert iced <= able


def test_the_mix_is_what_a_city_has() -> None:
    sites, tanks = read(40, "sites"), read(40, "tanks")
    assert set(sites["building_type"]) >= {
        "office", "school", "hotel", "courthouse", "concert_hall", "hospital", "laboratory", "retail",
    }  # fmt: skip
    strategies = sites["strategy"].value_counts()
    assert set(strategies.index) == set(columns("sites")["strategy"]["choices"].split())
    assert strategies["full_storage"] <= 3
    assert set(sites["layout"]) == {"parallel", "series"}
    assert set(tanks["kind"]) == {"ice_internal_melt", "ice_external_melt", "chilled_water"}
    assert set(tanks.groupby("site_id").size()) == {1, 2}
    hospitals = sites[sites["building_type"] == "hospital"]
    assert (hospitals["critical_kw_th"] > 0.0).all()
    assert hospitals["no_unmet"].all()
    assert sites["peak_cooling_kw_th"].between(300, 4000).all()
    north = sites["node_id"].str.startswith("N")
    assert 0.5 < sites.loc[north, "peak_cooling_kw_th"].sum() / sites["peak_cooling_kw_th"].sum() < 0.8


def test_one_machine_is_out_and_one_tank_was() -> None:
    status, days = read(40, "status"), read(40, "plant_days")
    assert (status["available"].astype(str).str.lower() == "false").sum() == 1
    out = days[days["mode"] == "tank_out"]
    assert len(out) == 7
    (site,) = set(out["site_id"])
    assert site in set(read(40, "tanks")["site_id"])


def test_status_is_older_than_the_call_and_within_capacity() -> None:
    status, tanks = read(40, "status"), read(40, "tanks")
    called = pd.Timestamp(short_fleet(40).called_at).tz_localize("UTC")
    assert (status["time"] <= called).all()
    assert status["time"].nunique() > 5
    capacity = tanks["capacity_kwh_th"].fillna(tanks["capacity_ton_h"] * 3.516853)
    held = tanks.assign(capacity=capacity).merge(
        status, left_on=["site_id", "tank_id"], right_on=["site_id", "unit_id"]
    )
    assert (held["inventory_kwh_th"] <= held["capacity"] + 1.0).all()
    assert held["inventory_kwh_th"].mean() > 0.6 * held["capacity"].mean()


def test_tables_cover_the_days_that_follow_the_call() -> None:
    end = pd.Timestamp(calendar.midnight(calendar.next_day(calendar.EVENT_DAY, 2))).tz_localize("UTC")
    for table, last in (("weather", 15), ("loads", 15), ("node_loads", 15), ("tariffs", 60)):
        assert read(40, table)["interval_start"].max() == end - pd.Timedelta(minutes=last), table
    meters = read(40, "meters")
    called = pd.Timestamp(short_fleet(40).called_at).tz_localize("UTC")
    assert meters["interval_start"].max() == called - pd.Timedelta(minutes=15)
    assert not meters.duplicated(["meter_id", "interval_start"]).any()
    count = meters.groupby("meter_id", observed=True).size()
    assert set(count) == {count.iloc[0]}
    first = meters["interval_start"].min()
    assert count.iloc[0] == (called - first) / pd.Timedelta(minutes=15)


def test_plants_draw_what_their_name_plates_allow() -> None:
    """Peak of a plant meter between 0.5 and 1.35 of rated capacity over rated COP, with its auxiliaries."""
    meters = read(40, "meters")
    plants = meters[meters["meter_id"].astype(str).str.startswith("P-")]
    peak = plants.groupby(plants["meter_id"].astype(str).str[2:])["kw"].max()
    chillers = read(40, "chillers")
    capacity = chillers["capacity_kw_th"].fillna(chillers["capacity_ton"] * 3.516853)
    cop = chillers["rated_cop"].fillna(chillers["kind"].map(hidden.RATED_COP))
    rated = (capacity / cop + chillers["dedicated_aux_kw"]).groupby(chillers["site_id"]).sum()
    sites = read(40, "sites").set_index("site_id")
    share = peak / (rated + 0.023 * sites["peak_cooling_kw_th"]).reindex(peak.index)
    assert len(share) == 14
    assert share.between(0.5, 1.35).all(), share
    assert (plants["kw"] >= 0.0).all()


def test_a_building_draws_at_least_its_plant() -> None:
    meters, table = read(40, "meters"), read(40, "meter_map")
    wide = meters.pivot_table(index="interval_start", columns="meter_id", values="kw", observed=True)
    for site in table.loc[table["role"] == "plant", "site_id"]:
        mains = table.loc[(table["site_id"] == site) & (table["role"] == "building"), "meter_id"].to_list()
        assert (wide[mains].sum(axis=1) >= wide[f"P-{site}"]).all()


def test_the_event_day_is_hot_and_the_forecast_a_little_wrong() -> None:
    path = short_fleet(40).path
    weather, truth = read(40, "weather"), pd.read_parquet(path / ".truth" / "weather.parquet")
    both = weather.merge(truth, on=["station_id", "interval_start"], suffixes=("", "_true"))
    called = pd.Timestamp(short_fleet(40).called_at).tz_localize("UTC")
    error = (both["dry_bulb_c_true"] - both["dry_bulb_c"]).where(
        both["interval_start"] > called + pd.Timedelta("6h")
    )
    past = both[both["interval_start"] <= called]
    assert len(past) > 200
    np.testing.assert_allclose(past["dry_bulb_c"], past["dry_bulb_c_true"], atol=0.00501)
    assert 0.3 < abs(error.mean()) < 0.75
    local = weather["interval_start"].dt.tz_convert(calendar.ZONE)
    today = weather[local.dt.strftime("%Y-%m-%d") == calendar.EVENT_DAY]
    assert 34.0 < today.loc[today["station_id"] == "Quay", "dry_bulb_c"].max() < 40.0
    assert pd.Timestamp(calendar.EVENT_DAY).day_of_week in (1, 2, 3)
    assert (weather["wet_bulb_c"] <= weather["dry_bulb_c"]).all()


def test_forecast_loads_are_near_the_true_ones() -> None:
    """Mean absolute error of a site's forecast on the event day between 1 and 12 per cent of its mean."""
    path = short_fleet(40).path
    true = pd.concat([pd.read_parquet(file) for file in sorted((path / ".truth").glob("course-*.parquet"))])
    both = read(40, "loads").merge(true, on=["site_id", "interval_start"], suffixes=("", "_true"))
    known = both.dropna(subset="cooling_load_kw_th")
    error = (
        (known["cooling_load_kw_th"] - known["cooling_load_kw_th_true"]).abs().groupby(known["site_id"]).sum()
    )
    share = error / known.groupby("site_id")["cooling_load_kw_th_true"].sum()
    assert share.between(0.01, 0.12).all(), share
    assert known["site_id"].nunique() == 34
    assert both["rest_kw"].notna().all()


def test_sites_of_one_city_err_together_at_about_a_quarter() -> None:
    """Residuals of load against weather and time of week; 0.23 to 0.27 was measured in one city's buildings."""
    local = calendar.local(calendar.quarters(np.datetime64("2026-05-01"), np.datetime64("2026-07-01")))
    rng = np.random.default_rng(2)
    made = hidden.filled_sites(read(40, "sites"))
    city = course.city_noise(len(local.hour), rng)
    dry = np.full((40, len(local.hour)), 28.0)
    true = course.course(made, hidden.draw(made["site_id"], 1), local, dry, city, rng)
    residual = true.cooling_load_kw_th / course.expected_load(made, local, dry)
    together = np.corrcoef(residual)[np.triu_indices(40, 1)]
    assert 0.15 < together.mean() < 0.40


@pytest.mark.parametrize("sites", [1, 5, 100])
def test_other_sizes_are_whole_fleets(sites: int, tmp_path: Path) -> None:
    facts = sample(tmp_path / "fleet", sites=sites, seed=3, history_days=3)
    assert len(pd.read_csv(facts.path / "sites.csv")) == sites
    meters = pd.read_parquet(facts.path / "meters")
    assert len(meters) == facts.meter_rows
    assert meters["kw"].notna().all()
    assert facts.plant_peak_kw > 50.0 * sites


def test_no_site_without_a_tank_holds_cooling_back() -> None:
    rng, plan = np.random.default_rng(3), buildings.mix(1000)
    sites, nowhere = buildings.buildings(plan, rng), np.zeros(len(plan), dtype=np.int64)
    held = _contracts(sites, plan, nowhere, nowhere, rng)["held_back_kwh_th"].to_numpy()
    bare = plan["tanks"].to_numpy() == 0
    assert 0 < bare.sum() < len(plan)
    assert (held[bare] == 0.0).all()
    assert (held[~bare] > 0.0).any()


def digests(path: Path) -> dict[str, str]:
    return {
        str(file.relative_to(path)): sha256(file.read_bytes()).hexdigest()
        for file in sorted(path.rglob("*"))
        if file.is_file()
    }


def test_the_same_seed_writes_the_same_bytes_and_another_seed_another_fleet(tmp_path: Path) -> None:
    first, again, other = (
        digests(sample(tmp_path / name, sites=5, seed=seed, history_days=3).path)
        for name, seed in (("a", 7), ("b", 7), ("c", 8))
    )
    assert first == again
    assert first["sites.csv"] != other["sites.csv"]
    assert first["weather.csv"] != other["weather.csv"]


def test_progress_only_rises_to_one(tmp_path: Path) -> None:
    told: list[float] = []
    sample(
        tmp_path / "fleet", sites=2, seed=1, progress=lambda text, share: told.append(share), history_days=3
    )
    assert told == sorted(told)
    assert told[-1] == 1.0


def test_a_folder_with_something_in_it_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "note.txt").write_text("mine", encoding="utf-8")
    with pytest.raises(DemoError) as refused:
        sample(tmp_path)
    assert str(refused.value) == f"{tmp_path} is not empty; name a new folder, nothing was written"
    assert [file.name for file in tmp_path.iterdir()] == ["note.txt"]


def test_a_fleet_of_no_sites_is_refused(tmp_path: Path) -> None:
    with pytest.raises(DemoError) as refused:
        sample(tmp_path / "fleet", sites=0)
    assert str(refused.value) == "a fleet of 0 sites cannot be made; ask for 1 or more"


def test_names_are_kinds_and_numbers_or_coined_words() -> None:
    sites = read(40, "sites")["site_id"]
    kinds = {name.replace("_", "-") for name in buildings.KINDS}
    assert all(re.fullmatch(r"(.+)-\d\d", site) and site[:-3] in kinds for site in sites)
    assert set(read(40, "nodes")["node_id"]) == {
        "Oramene", "North", "Saltmarsh", "N1", "N2", "N3", "N4", "N5", "S1", "S2", "S3",
    }  # fmt: skip


@pytest.mark.parametrize("seed", [1, 2])
def test_the_folder_passes_every_check_on_input(seed: int) -> None:
    """Seed 2 once wrote a level a fraction of a kWh_th above a capacity in whole ton-hours."""
    assert [str(problem) for problem in problems(short_fleet(40, seed).path)] == []
