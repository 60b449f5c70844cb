"""Quotes of fleets of several sizes, each in a process of its own; the answers are asserted.

SHEDWRIGHT_QUOTING_SIZES sets the sizes ("100 1000 10000"). The demo's mix of 100 sites is taken over and over; every
site is quoted for all windows of 13 quarter hours (91), with one machine off and the usual recovery, over the demo's
horizon; then with one staging and one recovery more. Prints wall and processor seconds, the peak of memory, what the
candidates lean on, and the share of a plain copy's bandwidth that the loop's own data come to. Run as a script it
measures one size: `python test_quoting_speed.py SITES` prints JSON.
"""

import itertools
import json
import math
import os
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any
from unittest import mock

import numpy as np
import pytest

SIZES = [int(size) for size in os.environ.get("SHEDWRIGHT_QUOTING_SIZES", "100 1000 10000").split()]
MIX = 100
WINDOWS = 91


def timed(work: Callable[[], Any]) -> tuple[Any, float, float]:
    started, busy = time.perf_counter(), time.process_time()
    result = work()
    return result, round(time.perf_counter() - started, 3), round(time.process_time() - busy, 3)


def peak_gb() -> float:
    return round(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6, 3)


def demo_mix() -> tuple[Any, ...]:
    """Roster, outlook, standing and terms of the demo's 100 sites for 16:00 to 19:15, notice and minimum times left
    out so that every window is on offer."""
    from demo_fleet import calendar
    from demo_fleet.sample import sample
    from fleet import desk
    from fleet.wall_time import parse_time
    from sites.direction import Direction

    at, start, end = (
        parse_time(f"{calendar.EVENT_DAY}T{hour}", "Europe/Athens") for hour in ("13:00", "16:00", "19:15")
    )
    with tempfile.TemporaryDirectory() as folder:
        sample(Path(folder) / "fleet", sites=MIX, seed=1, history_days=4)
        survey = desk.survey(Path(folder) / "fleet", desk.Ask(None, Direction.SHED, at, start, end))
    terms = replace(
        survey.terms,
        earliest=np.zeros(MIX, dtype=np.int64),
        minimum_intervals=np.ones(MIX, dtype=np.int64),
        most_intervals=np.full(MIX, 99),
        allowed=np.ones(MIX, dtype=np.bool_),
    )
    return survey.fleet.roster, survey.fleet.outlook, survey.fleet.standing, terms


def stagings(offered: Any, machines_off: tuple[int, ...]) -> Any:
    """The candidates of those numbers of machines off, the others free; a site without so many takes what it has."""
    off = (offered.stages.load_limit_fraction == 0.0).sum(axis=(1, 2))
    return offered.take(np.flatnonzero(np.isin(off, machines_off) & (offered.load_limit_fraction == 1.0)))


def copied_gb_per_s() -> float:
    """What a plain copy of 400 MB reads and writes in a second."""
    source, target = np.ones(50_000_000), np.ones(50_000_000)
    _, wall, _ = timed(lambda: np.copyto(target, source))
    return 0.8 / wall


def measured(sites: int) -> dict[str, Any]:
    """One size, its answers held against the quotes of the mix alone."""
    from sites import blocks, quote
    from sites.candidate import Stages
    from sites.course import MADE, STORED
    from sites.rows import ABLE, HOUR, USUAL

    mix = demo_mix()
    index = np.arange(sites) % MIX
    roster, outlook, standing = (part.take(index) for part in mix[:3])
    per_site = ("earliest", "minimum_intervals", "most_intervals", "allowed")
    terms = replace(mix[3], **{name: getattr(mix[3], name)[index] for name in per_site})
    alone = quote.ground(*mix[:3])
    whole = blocks.candidates
    facts: dict[str, Any] = {"sites": sites, "intervals": outlook.clock.count, "gb_before": peak_gb()}

    def run(name: str, machines_off: tuple[int, ...], recoveries: tuple[str, ...]) -> Any:
        with mock.patch.object(blocks, "candidates", lambda *given: stagings(whole(*given), machines_off)):
            few = quote.quote(alone, replace(mix[3], recoveries=recoveries))
            asked = replace(terms, recoveries=recoveries)
            found, wall, cpu = timed(lambda: quote.quote(base, asked))
        facts[name] = {"wall_s": wall, "cpu_s": cpu, "tried": found.tried, "quoted": len(found.quotes.site)}
        count = len(few.quotes.site)
        first, last = found.quotes.change_kw[:count], found.quotes.change_kw[-count:]
        np.testing.assert_array_equal(first, few.quotes.change_kw)
        np.testing.assert_array_equal(last, few.quotes.change_kw)
        assert len(found.quotes.site) == count * sites // MIX
        np.testing.assert_array_equal(found.quotes.cost[-count:], few.quotes.cost)
        return found

    base, facts["ground_wall_s"], facts["ground_cpu_s"] = timed(
        lambda: quote.ground(roster, outlook, standing)
    )
    found = run("one", (1,), ("usual",))
    facts["gb"] = peak_gb()
    assert found.tried == sites * WINDOWS
    leans = np.bincount(found.quotes.limited_by, minlength=len(quote.LIMITED_BY)) / len(found.quotes.site)
    facts["leans_on"] = {
        name: round(float(share), 3) for name, share in zip(quote.LIMITED_BY, leans, strict=True) if share
    }
    held = np.bincount(found.quotes.site_limited_by, minlength=len(quote.LIMITED_BY)) / sites
    facts["sites_held_by"] = {
        name: round(float(share), 3) for name, share in zip(quote.LIMITED_BY, held, strict=True) if share
    }
    per_step = HOUR.itemsize + 2 * USUAL.itemsize + 16 + roster.tanks.exists.shape[1] * STORED.itemsize
    per_step += roster.chillers.exists.shape[1] * (ABLE.itemsize + MADE.itemsize)
    steps = found.tried * outlook.clock.count
    facts["copy_gb_per_s"] = round(copied_gb_per_s(), 2)
    facts["of_bandwidth"] = round(per_step * steps / 1e9 / facts["one"]["wall_s"] / facts["copy_gb_per_s"], 2)
    del found
    assert isinstance(base.in_force, Stages)
    run("two_stagings", (1, 2), ("usual",))
    run("two_recoveries", (1,), ("usual", "night"))
    return facts


@pytest.mark.benchmark_run
def test_quotes_of_growing_fleets() -> None:
    found = []
    for size in SIZES:
        ran = subprocess.run(
            [sys.executable, __file__, str(size)], capture_output=True, text=True, check=False
        )
        assert ran.returncode == 0, ran.stderr
        found.append(json.loads(ran.stdout))
        print(json.dumps(found[-1]))
    for small, large in itertools.pairwise(found):
        grown = math.log(large["one"]["cpu_s"] / small["one"]["cpu_s"]) / math.log(
            large["sites"] / small["sites"]
        )
        print(f"growth exponent {small['sites']} to {large['sites']}: {grown:.2f}")
        assert large["one"]["quoted"] * small["sites"] == small["one"]["quoted"] * large["sites"]
        assert large["leans_on"] == small["leans_on"]


if __name__ == "__main__":
    print(json.dumps(measured(int(sys.argv[1]))))
