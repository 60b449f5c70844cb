"""The command as a person runs it, in this process: arguments in, exit code and both streams out."""

import contextlib
import io
import shutil
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from tempfile import mkdtemp
from unittest import mock

from fleet_folders import write_small_fleet

from fleet import cli

EVENT = ("--from", "2026-07-14T16:00", "--to", "2026-07-14T17:00")
"""One hour that the small fleet covers, and by when it may be called."""
ASK = (*EVENT, "--at", "2026-07-14T13:00")


@dataclass(frozen=True)
class Ran:
    """What one run of the command came to."""

    code: int
    out: str
    err: str


def run(*arguments: object) -> Ran:
    """`shedwright` with these arguments; anything but an exit code is let through as it is."""
    out, err = io.StringIO(), io.StringIO()
    code: object = 0
    with (
        mock.patch("sys.argv", ["shedwright", *map(str, arguments)]),
        contextlib.redirect_stdout(out),
        contextlib.redirect_stderr(err),
    ):
        try:
            cli.main()
        except SystemExit as left:
            code = left.code or 0
    assert isinstance(code, int)
    return Ran(code, out.getvalue(), err.getvalue())


@cache
def _called() -> Path:
    """The small fleet with a call A of harbour, its orders and a settlement."""
    fleet = write_small_fleet(Path(mkdtemp()) / "fleet")
    for arguments in (
        ("call", fleet, "--kw", 100, *ASK, "--event", "A"),
        ("orders", fleet, "A"),
        ("settle", fleet, "A"),
    ):
        ran = run(*arguments)
        assert ran.code == 0, ran.err
    return fleet


def called_fleet(path: Path) -> Path:
    """A copy of the small fleet with its event A, to do with as one likes."""
    shutil.copytree(_called(), path / "fleet")
    return path / "fleet"
