"""Whole or not at all, whatever fails or is killed when; and what a seal shows afterwards."""

import json
import shutil
import subprocess
import sys
from datetime import date
from pathlib import Path

import numpy as np
import pytest
from breaking import EVENT, Breaker, breaking, full_disk, made_frames, write

from fleet import seals
from fleet.errors import FleetError
from fleet.records import read_call, read_settlement, verify_seals, write_orders
from fleet.schema import tables

HERE = Path(__file__).parent
CALL_FILES = {
    "seal.json",
    "proof.json",
    "frozen/settings.json",
    *(f"{name}.parquet" for name in tables("call")),
    *(f"frozen/{name}.parquet" for name in ("sites", "chillers", "tanks")),
}


@pytest.fixture(scope="module")
def made():
    return made_frames()


@pytest.fixture
def event(tmp_path, made):
    """An event with a call, orders and two settlements."""
    write(tmp_path, "call", made)
    write_orders(tmp_path, EVENT, {"001-a.txt": "stop\n"})
    write(tmp_path, "settlement", made)
    second = {name: frame.copy() for name, frame in made["settlement"].items()}
    for frame in second.values():
        if "revision" in frame:
            frame["revision"] = frame["revision"] + 1
    write(tmp_path, "settlement", {"settlement": second})
    return tmp_path / "events" / EVENT


def files(folder: Path) -> set[str]:
    return {str(path.relative_to(folder)) for path in folder.rglob("*") if path.is_file()}


def hidden(fleet: Path) -> list[Path]:
    return list(fleet.rglob(".making-*"))


def outcome_of_full_disk(fleet: Path, kind: str, made, at: int) -> str:
    """What a run whose write operation number `at` fails says of itself."""
    with breaking(Breaker(at, full_disk)) as breaker:
        try:
            write(fleet, kind, made)
        except FleetError as error:
            said = str(error)
        else:
            return "unharmed" if breaker.count < at else "holder not named"
    assert "No space left on device" in said
    endings = {
        "not locked": "cannot be locked for writing",
        "nothing left": "nothing was left behind; free some space or mend the permissions, then run the same",
        "not confirmed": "was written, but the disk did not confirm it",
    }
    (outcome,) = [name for name, words in endings.items() if words in said]
    return outcome


@pytest.mark.parametrize("kind", ["call", "settlement"])
def test_an_error_at_any_write_leaves_whole_or_nothing(tmp_path, made, kind):
    outcomes, start = [], tmp_path / "start"
    start.mkdir()
    if kind == "settlement":
        write(start, "call", made)
    while not outcomes or outcomes[-1] != "unharmed":
        fleet = tmp_path / str(len(outcomes) + 1)
        shutil.copytree(start, fleet)
        outcomes.append(outcome_of_full_disk(fleet, kind, made, len(outcomes) + 1))
        folder = fleet / "events" / EVENT / f"{kind}-001"
        assert hidden(fleet) == []
        assert folder.exists() == (outcomes[-1] in ("unharmed", "holder not named", "not confirmed"))
        if folder.exists():
            assert verify_seals(folder.parent) == []
        elif kind == "call":
            assert not (fleet / "events").exists()
    assert outcomes.count("nothing left") > 15
    assert {"not confirmed", "not locked"} <= set(outcomes)
    assert outcomes.count("not confirmed") == 1


@pytest.mark.parametrize("kind", ["call", "settlement"])
def test_a_kill_at_any_write_leaves_whole_or_nothing_and_the_next_run_sweeps(tmp_path, kind):
    done = subprocess.run(
        [sys.executable, str(HERE / "breaking.py"), str(tmp_path), kind],
        capture_output=True,
        text=True,
        check=True,
        timeout=300,
    )
    runs = json.loads(done.stdout)
    assert [run["killed"] for run in runs] == [True] * (len(runs) - 1) + [False]
    assert len(runs) > 20
    swept = 0
    for run in runs:
        fleet = tmp_path / f"{run['at']:03d}"
        swept += any(".making-" in name for name in run["left"])
        assert run["again"] == 0
        assert hidden(fleet) == []
        event = fleet / "events" / EVENT
        assert (event / f"{kind}-001").exists() == run["whole"]
        assert event.exists() == (kind == "settlement" or run["whole"])
        if event.exists():
            assert verify_seals(event) == []
            assert files(event / "call-001") == CALL_FILES
        if kind == "settlement" and run["whole"]:
            assert len(read_settlement(fleet, EVENT).frames["sites"]) == 1
    assert swept > 10
    whole = [run["at"] for run in runs if f"events/{EVENT}/{kind}-001" in run["left"]]
    assert whole == [runs[-2]["at"], runs[-1]["at"]], "only the kill after the rename leaves it, and no kill"


def test_any_other_error_of_a_writer_leaves_nothing(tmp_path):
    def writer(folder: Path) -> None:
        (folder / "a.txt").write_text("half")
        raise RuntimeError("a defect")

    with pytest.raises(RuntimeError, match="a defect"):
        seals.write_folder(tmp_path / "events" / "x", writer)
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_exists_is_never_written_over(tmp_path):
    (tmp_path / "x").mkdir()
    with pytest.raises(FleetError) as refused:
        seals.write_folder(tmp_path / "x", lambda folder: None)
    assert str(refused.value) == f"{tmp_path / 'x'}: exists already; a record is never written over"


def test_a_sound_event_has_no_fault_and_its_chain_is_in_order_of_writing(event):
    assert verify_seals(event) == []
    found = sorted(map(seals.read_seal, seals.record_folders(event)), key=lambda seal: seal.position)
    assert [seal.folder for seal in found] == ["call-001", "orders-001", "settlement-001", "settlement-002"]
    assert [seal.previous for seal in found] == [None, *(seal.digest for seal in found[:-1])]
    content = json.loads((event / "call-001" / "seal.json").read_text())
    assert content["schema_version"] == 1
    assert content["made_by"]
    assert set(content["files"]) == CALL_FILES - {"seal.json"}


def test_one_changed_byte_shows(event):
    path = event / "call-001" / "windows.parquet"
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 1
    path.write_bytes(bytes(content))
    assert verify_seals(event) == ["call-001/windows.parquet: was changed after it was sealed"]


def test_missing_and_added_files_show(event):
    (event / "settlement-002" / "days.parquet").unlink()
    (event / "settlement-002" / "extra.txt").write_text("x")
    assert verify_seals(event) == [
        "settlement-002/days.parquet: is missing",
        "settlement-002/extra.txt: was added after sealing",
    ]


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        (
            "call-001",
            ["call-001: this revision is missing", "call-001: was removed; orders-001 was written after it"],
        ),
        ("orders-001", ["orders-001: was removed; settlement-001 was written after it"]),
        (
            "settlement-001",
            [
                "settlement-001: this revision is missing",
                "settlement-001: was removed; settlement-002 was written after it",
            ],
        ),
    ],
)
def test_a_removed_folder_shows(event, tmp_path, name, expected):
    (event / name).rename(tmp_path / "gone")
    assert verify_seals(event) == expected


def test_a_seal_written_anew_breaks_the_chain(event):
    path = event / "orders-001" / "001-a.txt"
    path.write_text("do not stop\n")
    content = json.loads((event / "orders-001" / "seal.json").read_text())
    content["files"]["001-a.txt"] = seals.digest(path)
    (event / "orders-001" / "seal.json").write_text(seals.json_text(content))
    assert verify_seals(event) == [
        "orders-001: its seal is not the one that settlement-001 was written after"
    ]


def test_a_renamed_or_copied_folder_shows(event):
    (event / "settlement-002").rename(event / "settlement-003")
    assert verify_seals(event) == [
        "settlement-003: its seal.json is not a seal any more (it was written for settlement-002)",
        "settlement-002: this revision is missing",
    ]


@pytest.mark.parametrize("content", ["", "{}", "[]", "null", '{"files": {"../../x": "y"}}', "\x00"])
def test_a_seal_that_is_none_is_a_fault_and_no_crash(event, content):
    (event / "settlement-002" / "seal.json").write_text(content)
    (fault,) = verify_seals(event)
    assert fault.startswith("settlement-002: its seal.json is not a seal any more (")


def test_a_missing_seal_is_a_fault(event):
    (event / "settlement-002" / "seal.json").unlink()
    assert verify_seals(event) == ["settlement-002: its seal.json cannot be read (No such file or directory)"]


def test_other_things_beside_the_records_are_no_fault(event):
    (event / "notes.txt").write_text("ours")
    (event / "meters-event").mkdir()
    assert verify_seals(event) == []
    assert read_call(event.parents[1], EVENT).revision == 1


def test_json_is_sorted_utf8_and_refuses_what_is_no_number():
    assert seals.json_text({"b": np.float64(1.5), "a": "déjà"}) == '{\n "a": "déjà",\n "b": 1.5\n}\n'
    with pytest.raises(FleetError) as refused:
        seals.json_text({"gap": {"parts": [1.0, float("nan")]}})
    assert str(refused.value) == "gap.parts[1]: is not a finite number; write null where there is none"
    with pytest.raises(FleetError, match=r"^bound: is not a finite"):
        seals.json_text({"bound": np.float64("inf")})
    with pytest.raises(TypeError, match="date has no place in JSON"):
        seals.json_text({"day": date(2026, 7, 16)})
