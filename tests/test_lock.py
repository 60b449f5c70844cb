"""One writer at a time, across processes; a killed holder frees the folder."""

import json
import os
import signal
import subprocess
import sys
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest

from fleet.errors import FleetError
from fleet.lock import HOLDER, lock

HOLD = """
import sys, time
from pathlib import Path
from fleet.lock import lock
with lock(Path(sys.argv[1])):
    print("held", flush=True)
    sys.stdin.readline()
"""


@pytest.fixture
def holder(tmp_path: Path) -> Iterator[subprocess.Popen[str]]:
    """Another process that holds the fleet folder."""
    process = subprocess.Popen(
        [sys.executable, "-c", HOLD, str(tmp_path), "--node", "North\x1b[31m"],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    assert process.stdout is not None
    assert process.stdout.readline() == "held\n"
    yield process
    process.kill()
    process.wait()


def test_the_second_process_is_told_who_holds_the_folder(tmp_path, holder):
    with pytest.raises(FleetError) as refused, lock(tmp_path, seconds=0.2):
        pass
    held = json.loads((tmp_path / HOLDER).read_text())
    assert held["pid"] == holder.pid
    assert str(refused.value) == (
        f"{tmp_path}: is in use by {held['user']}, process {holder.pid} "
        f"(-c {tmp_path} --node North?[31m), since {held['since']}; "
        "waited 0.2 s; run again when that has finished"
    )


def test_a_killed_holder_frees_the_folder(tmp_path, holder):
    os.kill(holder.pid, signal.SIGKILL)
    holder.wait()
    with lock(tmp_path, seconds=2.0):
        assert json.loads((tmp_path / HOLDER).read_text())["pid"] == os.getpid()
    assert not (tmp_path / HOLDER).exists()


def test_a_holder_that_ends_lets_the_waiting_one_in(tmp_path, holder):
    assert holder.stdin is not None
    later = threading.Timer(0.2, lambda: (holder.stdin.write("\n"), holder.stdin.flush()))
    later.start()
    with lock(tmp_path, seconds=10.0):
        later.join()
        assert json.loads((tmp_path / HOLDER).read_text())["pid"] == os.getpid()


def test_the_holder_may_take_it_again_and_keeps_it_until_the_outer_end(tmp_path):
    with lock(tmp_path):
        with lock(tmp_path, seconds=0.1) as notes:
            assert notes == []
        assert (tmp_path / HOLDER).exists()
        other = subprocess.run(
            [sys.executable, "-c", HOLD.replace("argv[1])", "argv[1]), 0.1"), str(tmp_path)],
            capture_output=True,
            text=True,
        )
        assert "is in use by" in other.stderr
    assert not (tmp_path / HOLDER).exists()


def test_a_holder_without_a_name_is_said_so(tmp_path, holder):
    (tmp_path / HOLDER).write_text("{")
    expected = r"is in use by another process that left no name; waited 0\.1 s"
    with pytest.raises(FleetError, match=expected), lock(tmp_path, seconds=0.1):
        pass


def test_leftovers_of_killed_runs_are_swept_and_named(tmp_path):
    left = tmp_path / "events" / ".making-EV-1-0a1b2c3d"
    deeper = tmp_path / "events" / "EV-0" / ".making-settlement-001-0a1b2c3d"
    for folder in (left, deeper):
        folder.mkdir(parents=True)
        (folder / "half.parquet").write_bytes(b"PAR1")
    with lock(tmp_path) as notes:
        assert notes == [
            "events/.making-EV-1-0a1b2c3d: left by a run that was killed; removed",
            "events/EV-0/.making-settlement-001-0a1b2c3d: left by a run that was killed; removed",
        ]
    assert not left.exists()
    assert (tmp_path / "events" / "EV-0").is_dir()


def test_no_such_fleet_folder_is_no_reason_to_make_one(tmp_path):
    with pytest.raises(FleetError) as refused, lock(tmp_path / "typo"):
        pass
    assert str(refused.value) == f"{tmp_path / 'typo'}: there is no such fleet folder; check the path"
    assert not (tmp_path / "typo").exists()
