"""How much for how long: what each site can hold up over the usual lengths of an event, and at what cost.

Reads quotes only; which lengths fit is a matter of the event that was quoted.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from sites.quotes import DenseQuotes
from sites.units import Bools, Floats, Ints

LENGTHS_H: Final = (0.5, 1.0, 2.0, 3.0, 4.0, 6.0)


@dataclass(frozen=True)
class Sustained:
    """Per site and length, each (site, length); -1 and NaN where no quoted window is that long."""

    hours: tuple[float, ...]
    kw: Floats
    """Most kW that one candidate gives in every interval of that length; NaN = none"""
    candidate: Ints
    cost_per_kwh: Floats
    """Net cost of that candidate over the energy of its whole window"""


def sustained(quotes: DenseQuotes, hours: tuple[float, ...] = LENGTHS_H) -> Sustained:
    """For every site and length the candidate of the highest floor over some stretch of its window.

    The floor of a stretch is its least expected_kw; a stretch is a whole number of intervals, rounded up.
    """
    step_h = quotes.clock.step_h
    hour = np.arange(quotes.event_from, quotes.event_to)[None, :]
    inside = (hour >= quotes.window_start[:, None]) & (hour < quotes.window_end[:, None])
    expected = np.where(inside, quotes.expected_kw, -np.inf)
    energy = np.where(inside, quotes.expected_kw, 0.0).sum(axis=1) * step_h
    per_kwh = np.divide(quotes.net_cost, energy, out=np.full_like(energy, np.nan), where=energy > 0.0)
    shape = (quotes.site_count, len(hours))
    kw, chosen, cost = np.full(shape, np.nan), np.full(shape, -1, dtype=np.int64), np.full(shape, np.nan)
    for column, length in enumerate(hours):
        floor = _floor(expected, int(np.ceil(length / step_h - 1e-9)))
        order = np.lexsort((quotes.net_cost, -floor, quotes.site))
        site, first = np.unique(quotes.site[order], return_index=True)
        pick = order[first]
        some = np.isfinite(floor[pick])
        site, pick = site[some], pick[some]
        kw[site, column], chosen[site, column], cost[site, column] = floor[pick], pick, per_kwh[pick]
    return Sustained(tuple(hours), kw, chosen, cost)


def together_kw(quotes: DenseQuotes, among: Bools, hours: tuple[float, ...] = LENGTHS_H) -> Floats:
    """Most kW (length,) that the sites of `among` (N,) hold up at the same time over some stretch of each length, each
    with one candidate; feeder limits are not in it. NaN where the event is shorter."""
    steps = [int(np.ceil(length / quotes.clock.step_h - 1e-9)) for length in hours]
    found = np.full(len(hours), np.nan)
    for column, length in enumerate(steps):
        if length > quotes.event_to - quotes.event_from:
            continue
        floors = np.lib.stride_tricks.sliding_window_view(quotes.expected_kw, length, axis=1).min(axis=2)
        best = np.zeros((quotes.site_count, floors.shape[1]))
        np.maximum.at(best, quotes.site, floors)
        found[column] = best[among].sum(axis=0).max(initial=0.0)
    return found


def _floor(expected_kw: Floats, steps: int) -> Floats:
    """Highest minimum (row,) over any `steps` intervals on end; -inf where the event is shorter."""
    if steps > expected_kw.shape[1] or not len(expected_kw):
        return np.full(len(expected_kw), -np.inf)
    windows = np.lib.stride_tricks.sliding_window_view(expected_kw, steps, axis=1)
    best: Floats = windows.min(axis=2).max(axis=1)
    return best
