"""Invented quotes for tests of the choice: blocks that shed inside the event and draw more afterwards."""

from dataclasses import replace
from itertools import product

import numpy as np

from fleet.bound import Offers, Terms
from fleet.choices import Choices
from sites.candidate import no_stages
from sites.clock import Clock
from sites.direction import Direction
from sites.quotes import COST_PARTS, DenseQuotes

START = np.datetime64("2026-07-15T10:00", "us")


def made_quotes(
    sites=6, candidates=6, intervals=4, horizon=16, event_from=4, seed=1, direction=Direction.SHED, scale=1.0
):
    """DenseQuotes of `sites` x `candidates`; equal for the same seed; kW and money grow with `scale`."""
    rng = np.random.default_rng(seed)
    count = sites * candidates
    site = np.repeat(np.arange(sites), candidates)
    size_kw = rng.uniform(60.0, 600.0, sites)[site]
    start = rng.integers(0, max(intervals - 1, 1), count)
    length = rng.integers(max(intervals // 3, 1), intervals + 1, count)
    end = np.minimum(start + length, intervals)
    slots = np.arange(intervals)
    inside = (slots >= start[:, None]) & (slots < end[:, None])
    level = size_kw * rng.choice([0.5, 0.75, 1.0], count)
    expected = inside * level[:, None] * rng.uniform(0.85, 1.05, (count, intervals))
    rebound = ~inside & (slots >= end[:, None])
    expected = expected - rebound * level[:, None] * rng.uniform(0.0, 0.3, count)[:, None]
    change = np.zeros((count, horizon))
    change[:, event_from : event_from + intervals] = direction.sign * expected
    after = horizon - event_from - intervals
    if after > 0:
        begin = (rng.choice([0.0, 0.2, 0.5], count) * after).astype(int)
        lasting = np.maximum((rng.choice([0.2, 0.35, 0.5], count) * after).astype(int), 1)
        later = np.arange(after)
        block = (later >= begin[:, None]) & (later < (begin + lasting)[:, None])
        spread = block * (inside.sum(axis=1) * level / lasting)[:, None]
        change[:, event_from + intervals :] = -direction.sign * spread
    cost = np.zeros((count, len(COST_PARTS)))
    energy = inside.sum(axis=1) * level * 0.25
    cost[:, COST_PARTS.index("during")] = -0.12 * energy
    cost[:, COST_PARTS.index("recovery")] = energy * rng.uniform(0.15, 0.6, count)
    cost[:, COST_PARTS.index("fee")] = rng.uniform(5.0, 40.0, sites)[site]
    windows = event_from + np.stack([start, end])
    return DenseQuotes(
        clock=Clock(START, 15, horizon),
        direction=direction,
        event_from=event_from,
        event_to=event_from + intervals,
        site=site,
        quote_id=np.array([f"q{i:05d}" for i in range(count)], dtype=object),
        stages=no_stages(count, 1),
        window_start=windows[0],
        window_end=windows[1],
        expected_kw=expected * scale,
        change_kw=change * scale,
        cost=cost * scale,
        unmet_kwh_th=np.zeros(count),
        end_lack_kwh_th=np.zeros(count),
        end_lack_price_per_kwh_th=np.zeros(count),
        limited_by=np.zeros(count, dtype=np.int64),
        site_limited_by=np.full(sites, 3, dtype=np.int64),
    )


def kept(quotes, keep):
    """Quotes of the candidates in `keep` (mask or indices) alone; sites stay."""
    keep = np.flatnonzero(keep) if np.asarray(keep).dtype == np.bool_ else np.asarray(keep)
    names = (
        "site",
        "quote_id",
        "window_start",
        "window_end",
        "expected_kw",
        "change_kw",
        "cost",
        "limited_by",
    )
    names += ("unmet_kwh_th", "end_lack_kwh_th", "end_lack_price_per_kwh_th")
    changes = {name: getattr(quotes, name)[keep] for name in names}
    return replace(quotes, stages=quotes.stages.take(keep), **changes)


def made_choices(seed, sites=6, candidates=6, intervals=4, rows=2, share=0.5):
    """A random model: `share` of what all sites could give is asked; `rows` coupling rows that bind."""
    rng = np.random.default_rng(seed)
    quotes = made_quotes(sites, candidates, intervals, seed=seed)
    best = np.zeros((sites, intervals))
    np.maximum.at(best, quotes.site, quotes.expected_kw)
    matrix = rng.uniform(0.0, 100.0, (rows, quotes.site.size)) * (rng.random((rows, quotes.site.size)) < 0.6)
    request = np.full(intervals, share * best.sum(axis=0).min()) * rng.uniform(0.8, 1.0, intervals)
    return Choices(
        site=quotes.site,
        cost=quotes.net_cost,
        kw=quotes.expected_kw,
        request_kw=request,
        allowance_kw=np.full(intervals, 0.1 * request.max()),
        shortfall_price_per_kw=np.full(intervals, 0.5),
        over_price_per_kw=np.full(intervals, 0.05),
        rows=matrix,
        room=matrix.sum(axis=1) / candidates * 0.4,
    )


def objective_of(choices, chosen):
    """Objective of chosen columns in plain numpy; inf where a coupling row breaks."""
    chosen = np.asarray(chosen, dtype=np.int64)
    if np.any(choices.rows[:, chosen].sum(axis=1) > choices.room + 1e-9):
        return np.inf
    given = choices.kw[chosen].sum(axis=0)
    short = np.maximum(choices.request_kw - given, 0.0)
    over = np.maximum(given - choices.request_kw - choices.allowance_kw, 0.0)
    priced = choices.shortfall_price_per_kw @ short + choices.over_price_per_kw @ over
    return float(choices.cost[chosen].sum() + priced)


def by_enumeration(choices):
    """The least objective over every combination of candidates, all of them tried."""
    options = [[-1, *np.flatnonzero(choices.site == site)] for site in np.unique(choices.site)]
    grid = np.array(list(product(*options)), dtype=np.int64)
    taken = grid >= 0
    rows = np.where(taken[:, :, None], choices.rows.T[grid], 0.0).sum(axis=1)
    given = np.where(taken[:, :, None], choices.kw[grid], 0.0).sum(axis=1)
    cost = np.where(taken, choices.cost[grid], 0.0).sum(axis=1)
    short = np.maximum(choices.request_kw - given, 0.0)
    over = np.maximum(given - choices.request_kw - choices.allowance_kw, 0.0)
    total = cost + short @ choices.shortfall_price_per_kw + over @ choices.over_price_per_kw
    total = np.where((rows <= choices.room + 1e-9).all(axis=1), total, np.inf)
    return float(total.min())


def as_offers(choices, site_count):
    """The same model as offers and terms: each coupling row becomes a node with a limit in one interval."""
    rows = choices.room.size
    offers = Offers(
        choices.site,
        site_count,
        choices.cost,
        choices.kw,
        choices.rows.T.copy(),
        np.ones((rows, site_count), dtype=np.bool_),
    )
    headroom = np.full((rows, rows), np.inf)
    headroom[np.diag_indices(rows)] = choices.room
    terms = Terms(
        choices.request_kw,
        choices.allowance_kw,
        choices.shortfall_price_per_kw,
        choices.over_price_per_kw,
        headroom,
    )
    return offers, terms
