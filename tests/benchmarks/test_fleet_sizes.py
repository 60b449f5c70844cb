"""Check, quote and call over fleets of several sizes, each in a process of its own; the answers are asserted.

SHEDWRIGHT_SIZES sets the sizes ("100 1000 5000"). Prints wall seconds, the peak of memory, the gap and where the
time of a call goes. Run as a script it measures one size: `python test_fleet_sizes.py SITES DIR` prints JSON.
"""

import json
import os
import resource
import subprocess
import sys
import time
from collections.abc import Callable
from contextlib import ExitStack
from pathlib import Path
from typing import Any
from unittest import mock

import pytest

SIZES = [int(size) for size in os.environ.get("SHEDWRIGHT_SIZES", "100 1000 5000").split()]
SHARE = 0.6
"""Of what the fleet can sustain, that much is asked."""
PARTS = (
    "desk.open_folder", "desk.assemble", "desk.ground", "desk.recharge.quoted", "calling._allocate",
    "calling.event.chosen", "calling.event.frames", "calling.steps", "calling.records.write_call",
)  # fmt: skip
"""Functions that make up a call, as the modules that use them name them."""


class Stopwatch:
    """Wall and processor seconds by name; a busy machine shows in the first and hardly in the second."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self.cpu: dict[str, float] = {}

    def timed(self, name: str, work: Callable[..., Any]) -> Callable[..., Any]:
        def run(*arguments: Any, **named: Any) -> Any:
            started, busy = time.perf_counter(), time.process_time()
            try:
                return work(*arguments, **named)
            finally:
                self.seconds[name] = self.seconds.get(name, 0.0) + time.perf_counter() - started
                self.cpu[name] = self.cpu.get(name, 0.0) + time.process_time() - busy

        return run


def measured(sites: int, base: Path) -> dict[str, Any]:
    """One size: an invented fleet made, checked, quoted, called and its record audited."""
    from demo_fleet import calendar
    from demo_fleet.sample import sample
    from fleet import calling, check, desk, quoting
    from fleet.audit import audit
    from fleet.wall_time import parse_time
    from sites.direction import Direction

    watch, parts, fleet = Stopwatch(), Stopwatch(), base / "fleet"
    watch.timed("sample", sample)(fleet, sites=sites, seed=1, history_days=4)
    before_gb = _peak_gb()
    found = watch.timed("check", check.report)(fleet)
    checked_gb = _peak_gb()
    at, start, end = (parse_time(f"{calendar.EVENT_DAY}T{hour}:00", "Europe/Athens") for hour in (13, 16, 19))
    ask = desk.Ask(None, Direction.SHED, at, start, end)

    def quoted() -> Any:
        survey = desk.survey(fleet, ask)
        return survey, quoting.offer(survey)

    survey, offer = watch.timed("quote", quoted)()
    quoted_gb = _peak_gb()
    kw = round(SHARE * float(offer.available.sustained_kw), 1)

    def called() -> Any:
        return calling.call(desk.survey(fleet, ask, asked_kw=kw), kw, "sized", "test", fleet)

    with ExitStack() as stack:
        for name in PARTS:
            module, _, rest = name.partition(".")
            target = {"desk": desk, "calling": calling}[module]
            *way, last = rest.split(".")
            for one in way:
                target = getattr(target, one)
            stack.enter_context(mock.patch.object(target, last, parts.timed(name, getattr(target, last))))
        call = watch.timed("call", called)()
    called_gb = _peak_gb()
    audited = watch.timed("audit", audit)(fleet, "sized")
    return {
        "sites": sites,
        "kw": kw,
        "ok": found.is_ok,
        "quoted_sites": len(survey.fleet.roster.buildings.site_id),
        "least_kw": float(call.allocation.expected_kw.min()),
        "met": call.allocation.met,
        "gap": call.proof["gap"],
        "status": call.proof["status"],
        "chosen": len(call.allocation.chosen),
        "faults": [str(fault) for fault in audited.faults[:3]],
        "seconds": watch.seconds,
        "cpu": watch.cpu | parts.cpu,
        "parts": parts.seconds,
        "gb": {"sample": before_gb, "check": checked_gb, "quote": quoted_gb, "call": called_gb},
    }


def _peak_gb() -> float:
    """The peak of this process so far; it never falls."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6


@pytest.mark.benchmark_run
@pytest.mark.parametrize("sites", SIZES)
def test_a_fleet_is_checked_quoted_and_called(tmp_path: Path, sites: int) -> None:
    ran = subprocess.run(
        [sys.executable, __file__, str(sites), str(tmp_path)], capture_output=True, text=True, check=False
    )
    assert ran.returncode == 0, ran.stderr
    found = json.loads(ran.stdout)
    print(told(found))
    assert found["ok"]
    assert found["quoted_sites"] == sites
    assert found["met"]
    assert found["least_kw"] >= found["kw"] * (1.0 - 1e-9)
    assert 0.0 <= found["gap"] < 0.01
    assert found["faults"] == []


def told(found: dict[str, Any]) -> str:
    """The figures of one size, as a person reads them."""
    seconds, cpu, gb = found["seconds"], found["cpu"], found["gb"]
    lines = [f"{found['sites']} sites, {found['kw']:,.0f} kW asked, {found['chosen']} sites called:"]
    lines += [
        f"  {name:6} {seconds[name]:7.1f} s ({cpu[name]:.1f} s of a processor), peak so far {gb[name]:.2f} GB"
        for name in gb
    ]
    lines += [f"  audit  {seconds['audit']:7.1f} s ({cpu['audit']:.1f} s)"]
    lines += [f"  gap {found['gap']:.4%}, {found['status']}; of the call:"]
    lines += [f"    {name:28} {took:7.1f} s ({cpu[name]:.1f} s)" for name, took in found["parts"].items()]
    return "\n".join(lines)


if __name__ == "__main__":
    print(json.dumps(measured(int(sys.argv[1]), Path(sys.argv[2]))))
