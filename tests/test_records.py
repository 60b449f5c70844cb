"""Event records: written, found again, revisions, past calls, refusals told as text."""

import json

import duckdb
import pandas as pd
import polars as pl
import pytest
from made_record import END, START, call_frames, frozen_frames, settlement_frames

from fleet import records
from fleet.errors import FleetError

SETTINGS = {"settings": {"timezone": "Europe/Athens", "interval_minutes": 15}}
PROOF = {"status": "proven", "gap": 0.0, "bound_by": "prices"}


def called(fleet, event_id="EV-1", frames=None):
    frames = call_frames(event_id) if frames is None else frames
    return records.write_call(fleet, event_id, frames, PROOF, frozen_frames(), SETTINGS)


def test_a_call_comes_back_as_it_was_written(tmp_path):
    frames = call_frames()
    path = called(tmp_path, frames=frames)
    assert path == tmp_path / "events" / "EV-1" / "call-001"
    found = records.read_call(tmp_path, "EV-1")
    assert (found.path, found.event_id, found.revision) == (path, "EV-1", 1)
    assert set(found.frames) == set(frames)
    for name, frame in frames.items():
        pd.testing.assert_frame_equal(found.frames[name], frame, check_dtype=False)
    for name, frame in frozen_frames().items():
        pd.testing.assert_frame_equal(found.frozen[name], frame)
    told = dict(found.proof)
    assert set(told.pop("frozen_sha256")) == {file.name for file in (path / "frozen").iterdir()}
    assert told == PROOF
    assert found.frozen_json == SETTINGS


def test_only_some_tables_are_read_where_only_some_are_asked_for(tmp_path):
    called(tmp_path)
    assert set(records.read_call(tmp_path, "EV-1", only=("windows", "steps")).frames) == {"windows", "steps"}


def test_pandas_duckdb_and_polars_read_the_record_with_no_help(tmp_path):
    path = called(tmp_path) / "windows.parquet"
    plain = pd.read_parquet(path)
    assert plain["window_start"].tolist() == [START, START]
    assert str(plain["window_end"].dt.tz) == "UTC"
    assert pl.read_parquet(path)["chiller_ids"].to_list() == [["CH-2"], ["W-1"]]
    counted = duckdb.sql(f"select count(*), sum(inventory_low_start_kwh_th) from '{path}'").fetchall()
    assert counted == [(2, 3258.4265)]


def test_json_in_the_record_is_sorted_utf8_with_an_end_of_line(tmp_path):
    path = called(tmp_path)
    text = (path / "proof.json").read_text(encoding="utf-8")
    assert text.endswith("}\n")
    assert list(json.loads(text)) == ["bound_by", "frozen_sha256", "gap", "status"]


def test_an_event_is_never_written_over(tmp_path):
    path = called(tmp_path)
    before = {found: found.read_bytes() for found in path.rglob("*") if found.is_file()}
    with pytest.raises(FleetError) as refused:
        called(tmp_path)
    assert str(refused.value) == (
        f"{path.parent}: there is an event EV-1 already, and an event is never written over; "
        "choose another id with --event"
    )
    assert {found: found.read_bytes() for found in path.rglob("*") if found.is_file()} == before


def test_a_nan_in_the_proof_is_refused_and_nothing_is_written(tmp_path):
    with pytest.raises(FleetError) as refused:
        records.write_call(tmp_path, "EV-1", call_frames(), {"gap": float("nan")}, frozen_frames(), SETTINGS)
    assert str(refused.value) == "proof.json: gap: is not a finite number; write null where there is none"
    assert not (tmp_path / "events").exists()


def test_missing_and_unknown_tables_are_named(tmp_path):
    frames = call_frames()
    frames["machine"] = frames.pop("machines")
    with pytest.raises(FleetError) as refused:
        called(tmp_path, frames=frames)
    assert str(refused.value) == "tables of a call record do not match; missing: machines; unknown: machine"


@pytest.mark.parametrize("event_id", ["", "..", "a/b", "EV 1", "é", "x" * 65, ".hidden", "EV-1\n"])
def test_an_event_id_that_is_no_folder_name_is_refused(tmp_path, event_id):
    with pytest.raises(FleetError) as refused:
        called(tmp_path, event_id, call_frames())
    assert str(refused.value) == (
        f"event id {event_id!r} cannot be a folder's name; use 1 to 64 ASCII letters, digits, - and _"
    )
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("name", ["../x", "a/b", "seal.json", ".hidden", "", "a\nb"])
def test_a_file_name_that_leads_elsewhere_is_refused(tmp_path, name):
    called(tmp_path)
    with pytest.raises(FleetError) as refused:
        records.write_orders(tmp_path, "EV-1", {name: "x"})
    assert str(refused.value) == (
        f"file name {name!r} cannot be used in a record; use letters, digits, dot, - and _"
    )


def test_an_unknown_event_names_the_nearest(tmp_path):
    with pytest.raises(FleetError) as refused:
        records.read_call(tmp_path, "EV-1")
    assert str(refused.value) == (
        f"{tmp_path}: no event 'EV-1'; there are no events yet: `shedwright call` makes one"
    )
    called(tmp_path, "north-0716")
    called(tmp_path, "south-0717")
    with pytest.raises(FleetError) as refused:
        records.read_call(tmp_path, "nort-0716")
    assert str(refused.value) == f"{tmp_path}: no event 'nort-0716'; nearest of 2: north-0716, south-0717"


def test_an_event_id_that_leads_out_of_the_folder_is_no_event(tmp_path):
    called(tmp_path)
    with pytest.raises(FleetError, match=r"no event '\.\./events/EV-1'; nearest of 1: EV-1"):
        records.read_call(tmp_path, "../events/EV-1")


def test_an_unknown_revision_names_those_there_are(tmp_path):
    called(tmp_path)
    with pytest.raises(FleetError, match=r"^event EV-1: has no call revision 2; there are 1$"):
        records.read_call(tmp_path, "EV-1", revision=2)
    with pytest.raises(FleetError, match=r"^event EV-1: has no settlement yet; there is nothing to read$"):
        records.read_settlement(tmp_path, "EV-1")


def test_a_record_with_a_file_gone_says_which(tmp_path):
    path = called(tmp_path)
    (path / "quotes.parquet").unlink()
    with pytest.raises(FleetError, match=r"quotes\.parquet: there is no such file"):
        records.read_call(tmp_path, "EV-1")
    (path / "proof.json").write_text("{")
    with pytest.raises(
        FleetError, match=r"proof\.json: cannot be read \(.*the record is incomplete or was changed"
    ):
        records.read_call(tmp_path, "EV-1", only=("windows",))


def test_orders_are_written_once_and_anew_only_when_they_differ(tmp_path):
    called(tmp_path)
    files = {"001-a.txt": "stop\n", "orders.json": b"[]\n"}
    first = records.write_orders(tmp_path, "EV-1", files)
    assert first.name == "orders-001"
    assert (first / "001-a.txt").read_text() == "stop\n"
    assert records.write_orders(tmp_path, "EV-1", files) == first
    second = records.write_orders(tmp_path, "EV-1", {**files, "001-a.txt": "stop now\n"})
    assert second.name == "orders-002"
    assert records.write_orders(tmp_path, "EV-1", files).name == "orders-003"
    assert records.verify_seals(first.parent) == []


def test_settlements_count_up_and_each_is_read_by_its_number(tmp_path):
    called(tmp_path)
    for revision in (1, 2):
        assert records.next_revision(tmp_path, "EV-1", "settlement") == revision
        path = records.write_settlement(
            tmp_path,
            "EV-1",
            settlement_frames(revision=revision),
            {"statement.txt": f"revision {revision}: 0 €\n"},
        )
        assert path.name == f"settlement-00{revision}"
    assert records.revisions(tmp_path, "EV-1", "settlement") == [1, 2]
    assert records.revisions(tmp_path, "EV-1", "orders") == []
    with pytest.raises(FleetError, match=r"^no kind of record 'bill'; there are call, orders, settlement$"):
        records.revisions(tmp_path, "EV-1", "bill")
    newest, first = records.read_settlement(tmp_path, "EV-1"), records.read_settlement(tmp_path, "EV-1", 1)
    assert (newest.revision, first.revision) == (2, 1)
    assert newest.statements == {"statement.txt": "revision 2: 0 €\n"}
    assert first.frames["sites"]["revision"].tolist() == [1]
    pd.testing.assert_frame_equal(newest.frames["sites"], settlement_frames(revision=2)["sites"])


def test_a_settlement_made_for_another_revision_is_refused(tmp_path):
    called(tmp_path)
    records.write_settlement(tmp_path, "EV-1", settlement_frames(revision=1), {})
    with pytest.raises(FleetError) as refused:
        records.write_settlement(tmp_path, "EV-1", settlement_frames(revision=1), {})
    assert str(refused.value) == (
        "settlement of event EV-1: table intervals was made for revision 1, but 2 is the next; "
        "another settlement was written meanwhile: settle again"
    )


def test_past_calls_are_told_from_the_newest_revision_and_never_from_rehearsals(tmp_path):
    assert records.events(tmp_path).empty
    called(tmp_path, "EV-2", call_frames("EV-2", purpose="test"))
    called(tmp_path, "EV-1")
    rehearsal = tmp_path / "rehearsals" / "1"
    rehearsal.mkdir(parents=True)
    called(rehearsal, "EV-3", call_frames("EV-3", purpose="rehearsal"))
    past = records.events(tmp_path)
    assert list(past.columns) == list(records.PAST_COLUMNS)
    assert list(zip(past["event_id"], past["site_id"], past["purpose"])) == [
        ("EV-1", "harbour-court", "real"),
        ("EV-1", "mill-school", "real"),
        ("EV-2", "harbour-court", "test"),
        ("EV-2", "mill-school", "test"),
    ]
    assert set(past["window_start"]) == {START}
    assert set(past["window_end"]) == {END}
    assert set(past["called_at"]) == {pd.Timestamp("2026-07-16 10:00", tz="UTC")}
    assert (past["revision"] == 1).all()
    empty = records.events(rehearsal / "..")
    assert empty.dtypes["window_start"] == past.dtypes["window_start"] == "datetime64[us, UTC]"


def test_a_past_call_that_cannot_be_read_is_not_left_out(tmp_path):
    path = called(tmp_path)
    (path / "windows.parquet").unlink()
    with pytest.raises(FleetError, match=r"windows\.parquet: there is no such file"):
        records.events(tmp_path)


def test_public_names_resolve():
    assert all(hasattr(records, name) for name in records.__all__)
