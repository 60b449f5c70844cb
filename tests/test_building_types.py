from fleet_folders import small_tables, write_small_fleet

from fleet.building_types import USUAL, USUAL_COLUMNS
from fleet.folder import open_folder
from fleet.resolve import resolve
from fleet.schema import choices, table
from sites.load import PROFILES


def test_every_building_type_has_its_usual_values_within_the_columns_bounds():
    assert set(USUAL) == set(choices("fleet", "sites", "building_type")) == set(PROFILES)
    sites = table("fleet", "sites")
    for one in USUAL.values():
        assert one.strategy in choices("fleet", "sites", "strategy")
        for name in ("occupied_from_hour", "occupied_to_hour"):
            assert sites.column(name).low <= getattr(one, name) <= sites.column(name).high
        assert one.occupied_from_hour < one.occupied_to_hour


def test_a_building_is_taken_as_occupied_whenever_its_load_profile_is_at_its_full(tmp_path):
    for name, profile in PROFILES.items():
        assert USUAL[name].occupied_from_hour <= profile.from_hour, name
        assert USUAL[name].occupied_to_hour >= profile.to_hour, name


def test_an_empty_type_is_an_office_and_given_values_stay(tmp_path):
    sites = small_tables()["sites"].drop(columns=["building_type", "strategy"])
    sites["occupied_from_hour"] = [None, 5, None]
    found = resolve(*_opened(tmp_path, sites))
    assert found.sites["building_type"].tolist() == ["office"] * 3
    assert found.sites["strategy"].tolist() == [USUAL["office"].strategy] * 3
    assert found.sites["occupied_from_hour"].tolist() == [7.0, 5.0, 7.0]
    said = {(one.key, one.column): one.why for one in found.assumed}
    assert said["library", "building_type"] == "default"
    assert said["library", "strategy"] == "usual for type office"
    assert ("library", "occupied_from_hour") not in said
    assert {column for _, column in said} >= set(USUAL_COLUMNS)


def _opened(tmp_path, sites):
    folder = open_folder(write_small_fleet(tmp_path, sites=sites))
    return folder.frames, folder.settings
