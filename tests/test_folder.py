import hashlib

import numpy as np
import pandas as pd
import pytest
from fleet_folders import SETTINGS, TEXTS, set_cell, small_tables, write_small_fleet, wrong

from fleet.errors import FleetError, Refused
from fleet.folder import open_folder, problems, read_meters


def test_the_small_fleet_is_accepted_with_stable_types(tmp_path):
    folder = open_folder(write_small_fleet(tmp_path))
    assert problems(tmp_path) == []
    assert folder.settings.name == "Amber Coast Power"
    assert folder.frames["sites"]["site_id"].tolist() == ["harbour", "library", "ward"]
    assert str(folder.frames["weather"]["interval_start"].dtype) == "datetime64[us, UTC]"
    assert folder.frames["weather"]["interval_start"][0] == pd.Timestamp("2026-07-13T21:00Z")
    assert str(folder.frames["bills"]["cycle_start"].dtype) == "datetime64[s]"
    assert folder.frames["chillers"]["loading_order"].tolist()[:2] == [2, 1]
    assert folder.frames["status"]["available"].tolist()[3] is False
    assert folder.frames["meter_map"].empty
    assert list(folder.frames["meter_map"].columns) == ["meter_id", "site_id", "role", "sign"]
    assert folder.notes == []


def test_digests_are_those_of_the_files(tmp_path):
    folder = open_folder(write_small_fleet(tmp_path), without=("meters",))
    assert set(folder.digests) == {f"{n}.csv" for n in small_tables() if n != "meters"} | {"fleet.toml"}
    content = (tmp_path / "sites.csv").read_bytes()
    assert folder.digests["sites.csv"] == hashlib.sha256(content).hexdigest()


def test_parquet_file_and_folder_give_what_csv_gives(tmp_path):
    plain = open_folder(write_small_fleet(tmp_path / "csv"))
    write_small_fleet(tmp_path / "mixed", weather=None, meters=None, sites=None)
    tables = small_tables()
    weather = tables["weather"]
    weather["interval_start"] = pd.to_datetime(weather["interval_start"], utc=True)
    weather.to_parquet(tmp_path / "mixed" / "weather.parquet")
    tables["sites"].to_parquet(tmp_path / "mixed" / "sites.parquet")
    (tmp_path / "mixed" / "meters").mkdir()
    for part, rows in enumerate(np.array_split(np.arange(len(tables["meters"])), 3)):
        tables["meters"].iloc[rows].to_parquet(tmp_path / "mixed" / "meters" / f"{part}.parquet")
    mixed = open_folder(tmp_path / "mixed")
    for name in ("weather", "sites", "meters"):
        pd.testing.assert_frame_equal(mixed.frames[name], plain.frames[name])
    assert "meters/0.parquet" in mixed.digests


def test_byte_order_mark_spaces_blank_rows_and_other_orders_change_nothing(tmp_path):
    plain = open_folder(write_small_fleet(tmp_path / "plain"))
    text = small_tables()["sites"].to_csv(index=False)
    first, *rows = text.splitlines()
    untidy = "\ufeff" + first.replace(",", " , ") + "\r\n\r\n" + "\r\n , , \r\n".join(rows) + "\r\n"
    untidy = untidy.replace(" , , ", "," * first.count(","))
    folder = open_folder(write_small_fleet(tmp_path / "untidy", sites=untidy.replace(",north,", ", north ,")))
    pd.testing.assert_frame_equal(folder.frames["sites"], plain.frames["sites"])


def test_all_problems_come_at_once_in_the_order_of_tables(tmp_path):
    sites = set_cell("sites", 3, "building_type", "castle")
    path = write_small_fleet(
        tmp_path,
        settings=SETTINGS,
        meters=set_cell("meters", 2, "kw", "x"),
        tanks=set_cell("tanks", 2, "kind", "ice"),
        sites=sites,
        loads="site_id,interval_start\nharbour,soon\n",
    )
    found = wrong(path)
    assert [text.split(",")[0] for text in found] == ["sites.csv", "tanks.csv", "loads.csv", "meters.csv"]
    with pytest.raises(Refused) as caught:
        open_folder(path)
    assert str(caught.value) == "\n".join(found)


def test_only_the_first_five_are_spelled_out_and_long_runs_are_counted(tmp_path):
    path = write_small_fleet(tmp_path, meters={"kw": "x"})
    assert len(problems(path)) == 21
    assert wrong(path)[-1].startswith(
        "meters.csv, row 22, column kw: came 844 more rows like this; expected "
    )
    with pytest.raises(Refused) as caught:
        open_folder(path)
    assert str(caught.value).splitlines()[-1] == "... and 16 more; `shedwright check` lists all of them"


def test_a_column_close_to_a_known_one_is_a_typo_another_is_noted(tmp_path):
    sites = (
        small_tables()["sites"].rename(columns={"floor_area_m2": "floor_area_m"}).assign(architect="unknown")
    )
    sites["peak_cooling_kw_th"] = 900.0
    assert wrong(write_small_fleet(tmp_path / "a", sites=sites)) == [
        "sites.csv, row 1, column floor_area_m: came an unknown column; expected a known column; "
        "rename it to floor_area_m2, or give it a name that is not close to one"
    ]
    noted = small_tables()["sites"].assign(architect="unknown")
    assert open_folder(write_small_fleet(tmp_path / "b", sites=noted)).notes == [
        "sites.csv: column architect is not used"
    ]


def test_missing_and_repeated_headings(tmp_path):
    lean = small_tables()["chillers"].drop(columns="kind")
    assert wrong(write_small_fleet(tmp_path / "a", chillers=lean)) == [
        "chillers.csv, row 1, column kind: came no such column; expected the column in the heading; add it"
    ]
    text = small_tables()["holidays"].to_csv(index=False).replace("source", "name")
    assert wrong(write_small_fleet(tmp_path / "b", holidays=text)) == [
        "holidays.csv, row 1, column name: came the heading twice; expected each heading once; remove one"
    ]


def test_files_two_forms_typos_and_unreadable(tmp_path):
    path = write_small_fleet(tmp_path)
    small_tables()["sites"].to_parquet(path / "sites.parquet")
    (path / "tarifs.csv").write_text("tariff_id\n")
    (path / "notes.txt").write_text("ours")
    (path / "events").mkdir()
    (path / "bills.csv").write_bytes(b"\xff\xfe")
    assert wrong(path) == [
        "bills.csv: came bytes that are not UTF-8 (invalid start byte); expected text in UTF-8; "
        "save it as CSV UTF-8",
        "sites.parquet: came sites.csv and sites.parquet; expected one form of a table; remove one of them",
        "tarifs.csv: came an unknown table; expected a table that is known; "
        "rename it to tariffs.csv, or move it elsewhere",
    ]


def test_no_folder_no_settings_no_sites(tmp_path):
    with pytest.raises(FleetError) as caught:
        open_folder(tmp_path / "nowhere")
    gone = tmp_path / "nowhere"
    assert str(caught.value) == f"{gone}: there is no such fleet folder; `shedwright begin {gone}` starts one"
    with pytest.raises(FleetError) as caught:
        open_folder(tmp_path)
    assert str(caught.value) == f"{tmp_path}: holds no fleet.toml; `shedwright begin {tmp_path}` starts one"
    write_small_fleet(tmp_path, sites=None)
    assert wrong(tmp_path)[0] == "sites.csv: came no such file; expected the table; add it"


def test_several_tariffs_and_an_empty_cell(tmp_path):
    tariffs = pd.concat([small_tables()["tariffs"], small_tables()["tariffs"].assign(tariff_id="flat")])
    assert wrong(write_small_fleet(tmp_path, tariffs=tariffs)) == [
        "sites.csv, row 2, column tariff_id: came nothing; expected one of day-night, flat "
        "(sites like this: 3); fill it in"
    ]


def test_a_cycle_of_three_is_spelled_out(tmp_path):
    nodes = "node_id,parent_id,import_limit_kw\ncoast,,\nnorth,east,\neast,south,\nsouth,north,\n"
    assert wrong(write_small_fleet(tmp_path, nodes=nodes)) == [
        "nodes.csv, row 3, column parent_id: came north above south above east above north; expected a tree; "
        "correct the parent of one of them"
    ]


def test_no_nodes_table_needs_no_nodes(tmp_path):
    path = write_small_fleet(tmp_path, nodes=None, node_loads=None, sites={"node_id": ""})
    assert problems(path) == []


def test_local_times_of_the_repeated_hour_in_file_order_are_counted(tmp_path):
    hours = ["02:00", "03:00", "03:00", "04:00"]
    tariffs = pd.DataFrame(
        {"tariff_id": "t", "interval_start": [f"2026-10-25T{h}" for h in hours], "price_per_kwh": 0.1}
    )
    settings = SETTINGS + '[tables]\ntariffs_time = "local"\n'
    folder = open_folder(write_small_fleet(tmp_path, settings=settings, tariffs=tariffs))
    starts = folder.frames["tariffs"]["interval_start"]
    assert starts.diff().dropna().unique().tolist() == [pd.Timedelta(hours=1)]
    assert starts[0] == pd.Timestamp("2026-10-24T23:00Z")
    assert folder.notes == ["tariffs.csv: 2 rows of the repeated autumn hour told apart by their order"]


def test_local_time_that_does_not_exist_is_refused_with_both_readings(tmp_path):
    tariffs = pd.DataFrame({"tariff_id": "t", "interval_start": ["2026-03-29T03:00"], "price_per_kwh": [0.1]})
    settings = SETTINGS + '[tables]\ntariffs_time = "local"\n'
    assert wrong(write_small_fleet(tmp_path, settings=settings, tariffs=tariffs)) == [
        "tariffs.csv, row 2, column interval_start: came '2026-03-29T03:00'; expected a time that exists; "
        "the clock of Europe/Athens jumps over it: was it 2026-03-29 02:00 +02:00 or 2026-03-29 04:00 +03:00?; "
        "correct it"
    ]


def test_public_holidays_stand_in_for_a_missing_table(tmp_path):
    folder = open_folder(write_small_fleet(tmp_path, settings=SETTINGS + 'country = "GR"\n', holidays=None))
    days = folder.frames["holidays"]
    assert pd.Timestamp("2026-08-15") in days["date"].tolist()
    assert days["source"].str.startswith("holidays ").all()
    assert folder.notes == [f"holidays: {len(days)} public holidays of GR taken from the holidays library"]


def test_left_out_tables_are_not_read(tmp_path):
    path = write_small_fleet(tmp_path, meters="meter_id\nbroken\n")
    folder = open_folder(path, without=("meters",))
    assert folder.frames["meters"].empty
    assert "meters.csv" not in folder.digests
    assert open_folder(path, names=("sites",)).frames["tanks"].empty


@pytest.mark.parametrize("form", ["csv", "parquet"])
def test_meters_are_read_alone_for_a_span_and_keep_their_rows(tmp_path, form):
    path = write_small_fleet(tmp_path)
    if form == "parquet":
        meters = small_tables()["meters"]
        (path / "meters.csv").unlink()
        meters["interval_start"] = pd.to_datetime(meters["interval_start"], utc=True)
        (path / "meters").mkdir()
        meters.iloc[:300].to_parquet(path / "meters" / "a.parquet")
        meters.iloc[300:].to_parquet(path / "meters" / "b.parquet")
    folder = open_folder(path, without=("meters",))
    since, until = np.datetime64("2026-07-14T13:00"), np.datetime64("2026-07-14T16:00")
    read = read_meters(folder, since, until)
    assert len(read.frame) == 3 * 12
    assert read.frame["interval_start"].min() == pd.Timestamp(since, tz="UTC")
    assert read.frame["interval_start"].max() == pd.Timestamp("2026-07-14T15:45Z")
    first_row = TEXTS.index("2026-07-14T13:00Z") + (2 if form == "csv" else 1)
    assert read.frame.index[0] == first_row
    assert set(read.digests) == (
        {"meters.csv"} if form == "csv" else {"meters/a.parquet", "meters/b.parquet"}
    )


def test_meters_from_another_file_and_their_problems(tmp_path):
    path = write_small_fleet(tmp_path / "fleet", meters=None)
    folder = open_folder(path)
    since, until = np.datetime64("2026-07-14T13:00"), np.datetime64("2026-07-14T16:00")
    with pytest.raises(FleetError) as caught:
        read_meters(folder, since, until)
    expected = f"{path / 'meters.csv'}: there are no meter readings; add them or name a file"
    assert str(caught.value) == expected
    other = tmp_path / "late.csv"
    other.write_text("meter_id,interval_start,kw\nharbour,2026-07-14T13:00Z,10\nport,2026-07-14T13:00Z,x\n")
    with pytest.raises(Refused) as caught:
        read_meters(folder, since, until, other)
    assert [str(problem) for problem in caught.value.problems] == [
        "late.csv, row 3, column kw: came 'x'; expected a number from -500000 to 500000 kW; "
        "correct it (digits and a decimal point only), or leave it empty if it is not required",
        "late.csv, row 3, column meter_id: came 'port'; expected a site_id (there is no meter_map); "
        "add it to meter_map, or correct the spelling",
    ]
    other.write_text("meter_id,interval_start,kw\nharbour,2026-07-14T13:00Z,10\n")
    assert list(read_meters(folder, since, until, other).digests) == ["late.csv"]


def test_long_csv_takes_the_fast_reader_and_gives_the_same(tmp_path):
    meters = small_tables()["meters"]
    many = pd.concat([meters.assign(quality="measured")] * 4)
    quick = write_small_fleet(tmp_path / "quick", meters=many)
    assert (quick / "meters.csv").stat().st_size > 100_000
    quoted = (quick / "meters.csv").read_text().replace("measured", '"measured"', 1)
    careful = write_small_fleet(tmp_path / "careful", meters=quoted)
    assert (careful / "meters.csv").read_text() != (quick / "meters.csv").read_text()
    pd.testing.assert_frame_equal(open_folder(quick).frames["meters"], open_folder(careful).frames["meters"])


def test_nodes_without_any_id_are_refused_for_that(tmp_path):
    found = wrong(write_small_fleet(tmp_path, nodes="parent_id\nx\ny\n"))
    assert [text for text in found if text.startswith("nodes.csv")] == [
        "nodes.csv, row 1, column node_id: came no such column; expected the column in the heading; add it",
        *(
            f"nodes.csv, row {row}, column parent_id: came '{name}'; expected a node_id of nodes; add it to nodes, "
            "or correct the spelling"
            for row, name in ((2, "x"), (3, "y"))
        ),
        "nodes.csv, column parent_id: came 0 roots (none); expected exactly one row without parent_id; "
        "leave parent_id of the root empty",
    ]
