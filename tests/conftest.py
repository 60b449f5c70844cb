"""One rehearsal for all tests that look at what the installed command leaves behind; do not write to it."""

import json
import os
import shutil
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
from filelock import FileLock

os.environ.setdefault(
    "OPENBLAS_NUM_THREADS", "1"
)  # a test process a core: more threads only wait for each other


@dataclass(frozen=True)
class Practice:
    """Where the rehearsal ran, its fleet folder, and what the command printed."""

    folder: Path
    fleet: Path
    told: dict[str, Any]


def shedwright(*arguments: str, cwd: Path) -> subprocess.CompletedProcess[str]:
    """Run the installed command."""
    command = Path(sys.executable).with_name("shedwright")
    return subprocess.run([str(command), *arguments], cwd=cwd, capture_output=True, text=True, check=False)


@pytest.fixture(scope="session")
def practice(tmp_path_factory: pytest.TempPathFactory) -> Practice:
    """`shedwright rehearse --json` in an empty folder, run once for all test processes; each has a copy of its own."""
    own = tmp_path_factory.getbasetemp()
    shared = own.parent if "PYTEST_XDIST_WORKER" in os.environ else own
    folder, told = shared / "rehearsed", shared / "rehearsed.json"
    with FileLock(shared / "rehearsed.lock"):
        if not told.exists():
            folder.mkdir()
            ran = shedwright("rehearse", "--json", cwd=folder)
            assert ran.returncode == 0, ran.stderr
            told.write_text(ran.stdout, encoding="utf-8")
    copied = shutil.copytree(folder, own / "practice")
    return Practice(copied, copied / "rehearsal", json.loads(told.read_text(encoding="utf-8")))
