"""What happens to a fleet folder when a run is killed, two run at once, the disk is full or a record is old."""

import json
import os
import resource
import shutil
import subprocess
import sys
import traceback
from pathlib import Path
from unittest import mock

import pandas as pd
import pytest
from breaking import EVENT, Breaker, breaking
from commands import ASK, Ran, called_fleet, run
from fleet_folders import write_small_fleet
from permission_bits import heed_permission_bits

from fleet import calling, desk
from fleet.audit import audit
from fleet.errors import FleetError
from fleet.lock import HOLDER, lock
from fleet.records import events, read_call, read_settlement, verify_seals
from fleet.schema import SCHEMA_VERSION
from fleet.wall_time import parse_time
from sites.direction import Direction

HERE = Path(__file__).parent
OLD = HERE / "reference" / "records"
MOMENTS = 50
HOLD = """
import sys
from pathlib import Path
from fleet.lock import lock
with lock(Path(sys.argv[1])):
    print("held", flush=True)
    sys.stdin.readline()
"""
COMMAND = (sys.executable, "-c", "from fleet.cli import main; main()")


def broken(base: Path, *arguments: str) -> list[dict]:
    done = subprocess.run(
        [sys.executable, str(HERE / "breaking.py"), str(base), *arguments],
        capture_output=True,
        text=True,
        check=True,
        timeout=300,
    )
    return json.loads(done.stdout)


def sound(fleet: Path, run_of: dict, kind: str) -> None:
    """After a kill and one more run: nothing hidden, the folder whole or absent, the seals in order."""
    assert run_of["again"] == 0
    assert list(fleet.rglob(".making-*")) == []
    event = fleet / "events" / EVENT
    assert (event / f"{kind}-001").exists() == run_of["whole"]
    assert event.exists() == (kind != "call" or run_of["whole"])
    if event.exists():
        assert verify_seals(event) == []


@pytest.mark.parametrize("kind", ["call", "orders", "settlement"])
def test_a_kill_at_any_of_fifty_moments_leaves_whole_or_nothing(tmp_path, kind):
    runs = broken(tmp_path, kind, str(MOMENTS))
    assert len(runs) == MOMENTS
    for one in runs:
        sound(tmp_path / f"{one['at']:03d}", one, kind)
    assert sum(one["killed"] for one in runs) > MOMENTS // 2, "most were hit while they wrote"
    assert not all(one["whole"] for one in runs)


def test_a_kill_at_any_write_of_orders_leaves_whole_or_nothing(tmp_path):
    runs = broken(tmp_path, "orders")
    assert [one["killed"] for one in runs] == [True] * (len(runs) - 1) + [False]
    assert len(runs) > 20
    for one in runs:
        sound(tmp_path / f"{one['at']:03d}", one, "orders")
    assert sum(any(".making-" in name for name in one["left"]) for one in runs) > 10


def test_what_a_killed_run_left_is_named_by_each_command_that_sweeps_it(tmp_path):
    fleet = called_fleet(tmp_path)
    (fleet / "events" / "A" / ".making-orders-002-0a1b2c3d").mkdir()
    swept = "note: events/A/.making-orders-002-0a1b2c3d: left by a run that was killed; removed"
    assert swept in run("orders", fleet, "A").out.splitlines()
    (fleet / "events" / "A" / ".making-orders-002-0a1b2c3d").mkdir()
    assert swept in run("settle", fleet, "A").out.splitlines()
    (fleet / "events" / ".making-B-0a1b2c3d").mkdir()
    ran = run("call", fleet, "--kw", "10", *ASK, "--event", "C")
    assert "note: events/.making-B-0a1b2c3d: left by a run that was killed; removed" in ran.out.splitlines()


def test_a_call_written_after_the_quotes_were_made_is_noticed(tmp_path):
    """Two desks look at the same sites; the second to write must not bind what the first has bound."""
    fleet = write_small_fleet(tmp_path)
    at, start, end = (parse_time(f"2026-07-14T{hour}:00+03:00", "Europe/Athens") for hour in (13, 16, 17))
    seen = desk.survey(fleet, desk.Ask(None, Direction.SHED, at, start, end))
    assert run("call", fleet, "--kw", "100", *ASK, "--event", "first").code == 0
    with pytest.raises(FleetError) as refused:
        calling.call(seen, 100.0, "second", "real", fleet)
    assert str(refused.value) == (
        f"{fleet}: another call was written meanwhile (first) and may bind the same sites; nothing was written; "
        "run the same command again"
    )
    assert sorted(path.name for path in (fleet / "events").iterdir()) == ["first"]
    rehearsal = run("call", fleet, "--kw", "10", *ASK, "--event", "third", "--purpose", "rehearsal")
    assert rehearsal.code == 0, "a rehearsal binds nobody"


def test_two_commands_at_once_write_one_event(tmp_path):
    fleet = write_small_fleet(tmp_path)
    command = [*COMMAND, "call", str(fleet), "--kw", "100", *ASK, "--event", "E"]
    both = [
        subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) for _ in range(2)
    ]
    ends = sorted((one.communicate(timeout=120), one.returncode)[::-1] for one in both)
    assert [code for code, _ in ends] == [0, 2]
    said = ends[1][1][1]
    assert "there is an event E already" in said or "another call was written meanwhile (E)" in said
    assert verify_seals(fleet / "events" / "E") == []
    assert len(events(fleet)["event_id"].unique()) == 1


@pytest.fixture(scope="module")
def just_called(tmp_path_factory):
    """The small fleet with its event A called; everything that writing loads late is loaded by now."""
    fleet = called_fleet(tmp_path_factory.mktemp("called"))
    for later in ("orders-001", "settlement-001"):
        shutil.rmtree(fleet / "events" / "A" / later)
    return fleet


WRITERS = {
    "call": ("call", ("--kw", "10", *ASK, "--event", "E", "--purpose", "rehearsal"), "E"),
    "orders": ("orders", ("A",), "A/orders-001"),
    "settle": ("settle", ("A",), "A/settlement-001"),
}
"""Command, arguments behind the fleet, and the folder below `events` that it makes."""


def child(work, told: Path) -> list:
    """What `work` gives in a forked child, through the file `told`."""
    pid = os.fork()
    if pid == 0:
        try:
            with told.open("w") as out:
                try:
                    given = work()
                except BaseException:
                    given = traceback.format_exc()
                json.dump(given, out)
        finally:
            os._exit(0)
    os.waitpid(pid, 0)
    given = json.loads(told.read_text())
    assert isinstance(given, list), given
    return given


@pytest.mark.parametrize("largest", [700, 2500])
@pytest.mark.parametrize("writer", WRITERS)
def test_a_disk_that_refuses_in_the_middle_leaves_nothing(tmp_path, just_called, writer, largest):
    """The system itself refuses files over a size: in a child, with real writes of Parquet and text."""
    command, rest, made = WRITERS[writer]
    fleet = tmp_path / "fleet"
    shutil.copytree(just_called, fleet)

    def limited() -> list:
        resource.setrlimit(resource.RLIMIT_FSIZE, (largest, resource.RLIM_INFINITY))
        ran = run(command, fleet, *rest)
        resource.setrlimit(resource.RLIMIT_FSIZE, (resource.RLIM_INFINITY, resource.RLIM_INFINITY))
        return [ran.code, ran.out, ran.err]

    code, out, err = child(limited, tmp_path / "told")
    assert (code, out) == (2, ""), (code, out, err)
    if (
        writer == "settle" and ": readings of the days cannot be put by (" in err
    ):  # before the record is begun
        assert err.endswith(
            "nothing was settled; make room, or name another folder for such files in TMPDIR\n"
        )
    else:
        assert err.startswith(f"{fleet}/events/{made}: could not be written (")
        assert err.endswith(
            "nothing was left behind; free some space or mend the permissions, then run the same command again\n"
        )
    assert not (fleet / "events" / made).exists()
    assert list(fleet.rglob(".making-*")) == []
    assert run(command, fleet, *rest).code == 0


@pytest.mark.parametrize("where", ["beside it", "in it"])
@pytest.mark.parametrize("writer", WRITERS)
def test_permission_lost_in_the_middle_leaves_no_record(tmp_path, just_called, writer, where):
    """Real permission bits, taken away in the middle by a child without a superuser's rights."""
    command, rest, made = WRITERS[writer]
    at = 9 if writer == "call" else 4
    fleet = tmp_path / "fleet"
    shutil.copytree(just_called, fleet)
    parent = (fleet / "events" / made).parent

    def taken_away() -> None:
        for path in [parent] if where == "beside it" else parent.glob(".making-*/**/"):
            path.chmod(0o500)

    def unprivileged() -> list:
        heed_permission_bits()
        with breaking(Breaker(at, taken_away)):
            ran = run(command, fleet, *rest)
        for path in (parent, *parent.glob(".making-*/**/")):
            path.chmod(0o700)
        return [ran.code, ran.out, ran.err, [path.name for path in parent.glob(".making-*")]]

    code, out, err, left = child(unprivileged, tmp_path / "told")
    assert (code, out, len(left)) == (2, "", 1), err
    assert err.startswith(f"{fleet}/events/{made}: could not be written (Permission denied at ")
    assert err.endswith(
        "a hidden making folder stays and is swept by the next run; free some space or mend the permissions, then "
        "run the same command again\n"
    )
    assert not (fleet / "events" / made).exists()
    again = run(command, fleet, *rest)
    assert again.code == 0, again.err
    swept = f"{(parent / left[0]).relative_to(fleet)}: left by a run that was killed; removed"
    assert swept in again.out
    assert list(fleet.rglob(".making-*")) == []


def test_a_command_that_waits_in_vain_names_the_holder_and_how_long_it_waited(tmp_path, just_called):
    fleet = tmp_path / "fleet"
    shutil.copytree(just_called, fleet)
    holder = subprocess.Popen(
        [sys.executable, "-c", HOLD, str(fleet)], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    assert holder.stdout is not None
    assert holder.stdout.readline() == "held\n"
    held = json.loads((fleet / HOLDER).read_text())
    with mock.patch.object(lock.__wrapped__, "__defaults__", (0.3,)):
        told = {writer: run(command, fleet, *rest) for writer, (command, rest, _) in WRITERS.items()}
    holder.communicate("\n")
    said = (
        f"{fleet}: is in use by {held['user']}, process {holder.pid} (-c {fleet}), since {held['since']}; "
        "waited 0.3 s; run again when that has finished\n"
    )
    assert told == {writer: Ran(2, "", said) for writer in WRITERS}


@pytest.mark.parametrize("version", range(1, SCHEMA_VERSION + 1))
def test_a_record_of_each_schema_version_opens(tmp_path, version):
    fleet = tmp_path / "fleet"
    shutil.copytree(OLD / f"v{version}", fleet)
    event = fleet / "events" / "A"
    assert verify_seals(event) == []
    call, settlement = read_call(fleet, "A"), read_settlement(fleet, "A")
    assert call.frames["windows"]["site_id"].tolist() == ["harbour"]
    assert call.frames["windows"]["window_start"].tolist() == [pd.Timestamp("2026-07-14 13:00", tz="UTC")]
    assert call.proof["horizon_start"] == "2026-07-14T10:00:00Z"
    assert settlement.frames["sites"]["site_id"].tolist() == ["harbour"]
    assert "statement.txt" in settlement.statements
    assert len(events(fleet)) == 1
    assert run("orders", fleet, "A").code == 0
    assert audit(fleet, "A").checked, "the audit looks at it, whatever it finds of rules that came later"


def test_kept_records_are_small():
    kept = [path for path in OLD.rglob("*") if path.is_file()]
    assert sum(path.stat().st_size for path in kept) < 200_000 * SCHEMA_VERSION
