"""How long an allocation takes on a thousand sites; answers asserted.

The fleet is the demo's mix scaled up: quotes of its 40 sites for a four-hour event (windows of an hour and more), laid
down again and again with kW and money of each copy at 0.5 to 1.5 times. A third of what all sites could give together
is asked. Limited nodes hold the sites, drawn at random.

How tight they are: the room of each limited node, in every interval of event and recovery, is `tightness` times the
largest change of load that its sites cause in the answer without any limit. 1.5 is easy: nothing binds. 0.9 is
tight: every feeder has to be kept below what the sites would do by themselves.

    .venv/bin/python -m pytest -n 0 -s -m benchmark_run tests/benchmarks/test_allocation_speed.py
"""

import resource
import time
from dataclasses import dataclass, replace
from functools import cache

import numpy as np
import pandas as pd
import pytest
from demo_folders import moment, short_fleet
from made_quotes import kept

from fleet import desk
from fleet.allocate import Allocation, allocate
from fleet.bound import Offers, Terms, bound_from_prices, steering
from fleet.feeders import Feeders, feeders
from fleet.request import Request, request
from sites.candidate import Stages
from sites.direction import Direction
from sites.quotes import LIMITED_BY, DenseQuotes

WINDOWS = 91
SHORTFALL, OVER = 2.0, 0.05
SHARE = 1.0 / 3.0
EASY, TIGHT = 1.5, 0.9
LIMITS = {"tank": ("inventory", "discharge_rate", "held_back"), "comfort": ("comfort",), "none": ("none",)}


@dataclass(frozen=True)
class Case:
    """A fleet, its network and a request."""

    quotes: DenseQuotes
    network: Feeders
    headroom: np.ndarray
    ask: Request
    ids: np.ndarray

    def run(self, **options) -> tuple[Allocation, float, float]:
        """The allocation, seconds and processor seconds."""
        count = self.quotes.site_count
        began, used = time.perf_counter(), time.process_time()
        found = allocate(
            self.quotes,
            self.network,
            self.headroom,
            self.ask,
            np.ones(count),
            SHORTFALL,
            OVER,
            np.ones(count, dtype=np.bool_),
            site_ids=self.ids,
            **options,
        )
        return found, time.perf_counter() - began, time.process_time() - used


@cache
def demo_quotes() -> DenseQuotes:
    """The demo's 40 sites for four hours, at most WINDOWS candidates a site."""
    ask = desk.Ask(
        None, Direction.SHED, *(moment(hour).tz_localize(None).to_datetime64() for hour in (11, 15, 19))
    )
    quotes = desk.survey(short_fleet(40).path, ask).quoted.quotes
    firsts = np.flatnonzero(np.r_[True, np.diff(quotes.site) != 0])
    rank = np.arange(quotes.site.size) - np.repeat(firsts, np.diff(np.r_[firsts, quotes.site.size]))
    many = np.bincount(quotes.site, minlength=quotes.site_count)[quotes.site]
    # Evenly over a site's candidates, not its first ones.
    step = rank * WINDOWS // np.maximum(many, 1)
    keep = (many <= WINDOWS) | (np.r_[-1, step[:-1]] != step) | (rank == 0)
    return kept(quotes, keep)


def scaled_up(sites: int, seed: int = 1) -> DenseQuotes:
    """Copies of the demo's sites, each at its own size."""
    base, rng = demo_quotes(), np.random.default_rng(seed)
    copies = -(-sites // base.site_count)
    site = (np.arange(copies)[:, None] * base.site_count + base.site[None, :]).ravel()
    rows = np.tile(np.arange(base.site.size), copies)
    rows, site = rows[site < sites], site[site < sites]
    factor = rng.uniform(0.5, 1.5, sites)[site][:, None]
    return replace(
        kept(base, rows),
        site=site,
        quote_id=np.arange(site.size).astype(object),
        expected_kw=base.expected_kw[rows] * factor,
        change_kw=base.change_kw[rows] * factor,
        cost=base.cost[rows] * factor * rng.uniform(0.8, 1.2, sites)[site][:, None],
        site_limited_by=np.tile(base.site_limited_by, copies)[:sites],
        stages=Stages(
            *(np.zeros((site.size, *part.shape[1:]), dtype=part.dtype) for part in vars(base.stages).values())
        ),
    )


@cache
def case(sites: int, nodes: int, tightness: float) -> Case:
    """The fleet below `nodes` limited nodes; room from the answer without limits."""
    quotes, rng = scaled_up(sites), np.random.default_rng(2)
    names = ["root"] + [f"f{j}" for j in range(nodes)]
    table = pd.DataFrame({"node_id": names, "parent_id": [""] + ["root"] * nodes})
    table["import_limit_kw"] = [np.nan] + [1.0] * nodes
    hangs = np.array([f"f{j}" for j in rng.integers(0, nodes, sites)], dtype=object)
    network = feeders(table, None, hangs, quotes.clock)
    best = np.zeros((sites, quotes.event_to - quotes.event_from))
    np.maximum.at(best, quotes.site, quotes.expected_kw)
    starts, step = quotes.clock.starts, quotes.clock.step
    begin = starts[quotes.event_from]
    times = starts[0], begin, begin + best.shape[1] * step
    kw = SHARE * float(best.sum(axis=0).min())
    ask = request("e1", "root", quotes.direction, "real", *times, kw, quotes.clock.step_minutes)
    ids = np.array([f"site-{i:06d}" for i in range(sites)], dtype=object)
    free = Case(quotes, network, np.full((nodes + 1, quotes.clock.count), np.inf), ask, ids)
    change = free.run(rough=True)[0].node_change_kw[1:]
    headroom = free.headroom.copy()
    headroom[1:] = tightness * np.maximum(change.max(axis=1), 0.0)[:, None]
    return replace(free, headroom=headroom)


def checked(made: Case, found: Allocation) -> float:
    """The gap, once answer and bound are put together again from the quotes."""
    quotes, proof = made.quotes, found.proof
    kw = quotes.expected_kw[found.chosen].sum(axis=0)
    assert (kw >= made.ask.requested_kw - 1e-6).all()
    change = np.zeros((quotes.site_count, quotes.clock.count))
    change[quotes.site[found.chosen]] = quotes.change_kw[found.chosen]
    assert (made.network.below.astype(float) @ change <= made.headroom + 1e-6).all()
    value = bound_from_prices(*posed(made, found), found.prices).value
    assert value == pytest.approx(proof.bound_prices, rel=1e-9)
    assert proof.bound <= proof.objective
    assert proof.gap is not None
    return proof.gap


def posed(made: Case, found: Allocation) -> tuple[Offers, Terms]:
    """The problem as the proof's prices state it."""
    quotes, step_h = made.quotes, made.quotes.clock.step_h
    cost = quotes.net_cost + steering(made.ids)[quotes.site]
    every = np.ones(made.ask.interval_count) * step_h
    offers = Offers(
        quotes.site, quotes.site_count, cost, quotes.expected_kw, quotes.change_kw, made.network.below
    )
    proof = found.proof
    prices = proof.shortfall_price_per_kwh * every, proof.over_price_per_kwh * every
    return offers, Terms(made.ask.requested_kw, found.allowance_kw, *prices, made.headroom)


def limited(quotes: DenseQuotes) -> str:
    """Share of sites by what keeps them from giving more."""
    codes = quotes.site_limited_by
    told = {
        name: np.isin(codes, [LIMITED_BY.index(w) for w in words]).mean() for name, words in LIMITS.items()
    }
    return ", ".join(f"{name} {share:.0%}" for name, share in told.items())


def report(name: str, made: Case, found: Allocation, seconds: float, used: float, gap: float) -> None:
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    tight = int((found.prices.importing > 0.0).any(axis=1).sum())
    print(
        f"\n{name}: {len(made.ids):,} sites, {made.quotes.site.size:,} candidates; gap {gap:.3%} by "
        f"{found.proof.bound_by}, {seconds:.1f} s, {used:.1f} processor s, {peak:.1f} GB at most; {found.called.size} "
        f"called; {tight} of {len(made.headroom) - 1} feeders with a price; limited by: {limited(made.quotes)}"
    )


@pytest.mark.benchmark_run
def test_a_thousand_sites_below_easy_feeders():
    """Target: 0.2 % in 2 s."""
    made = case(1000, 20, EASY)
    found, seconds, used = made.run()
    gap = checked(made, found)
    report("easy", made, found, seconds, used, gap)
    assert gap <= 0.002


@pytest.mark.benchmark_run
def test_a_thousand_sites_below_tight_feeders():
    """Target: 1 % in 15 s. The gap is held to what was reached, so that it does not grow unseen."""
    made = case(1000, 20, TIGHT)
    found, seconds, used = made.run()
    gap = checked(made, found)
    report("tight", made, found, seconds, used, gap)
    assert (found.prices.importing > 0.0).any(axis=1).sum() >= 10
    assert gap <= 0.025
