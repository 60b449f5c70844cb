"""The compiled inner loop of annealing: one move of one site after another, taken by chance and temperature.

Owns the arithmetic of a move and nothing else; annealing.py lays out the arrays. Imported only where it runs: numba
comes with it. The chance is an own generator (xorshift64*, Vigna 2016) from a seed: the same arrays, the same answer.
"""

from collections.abc import Callable
from typing import Any, Final, TypeVar

import numba
import numpy as np

from sites.units import Floats, Ints

Function = TypeVar("Function", bound=Callable[..., Any])
KEPT: Final = 1e-7
"""kW by which all feeder rows together may be broken in an answer."""


def _compiler() -> Callable[[Function], Function]:
    """Compiles, and keeps what is compiled on disk where some folder can be written."""
    options = {"error_model": "numpy"}

    def compiled(function: Function) -> Function:
        try:
            made: Function = numba.njit(cache=True, **options)(function)
        except RuntimeError:  # no folder to keep it in
            made = numba.njit(**options)(function)
        return made

    return compiled


_compiled = _compiler()


@_compiled
def _excess(level: float, more: float, most: float) -> float:
    """How much further above `most` a level comes by `more`."""
    return max(level + more - most, 0.0) - max(level - most, 0.0)


@_compiled
def _event_change(
    old: int,
    new: int,
    cost: Floats,
    kw: Floats,
    given: Floats,
    request: Floats,
    ceiling: Floats,
    short_price: Floats,
    search_price: Floats,
    over_price: Floats,
) -> tuple[float, float]:
    """What putting a site from candidate `old` on `new` (-1: out) adds in money, and in the search's money."""
    true = (cost[new] if new >= 0 else 0.0) - (cost[old] if old >= 0 else 0.0)
    sought = true
    for e in range(given.size):
        more = (kw[new, e] if new >= 0 else 0.0) - (kw[old, e] if old >= 0 else 0.0)
        if more != 0.0:
            short = _excess(-given[e], -more, -request[e])
            over = over_price[e] * _excess(given[e], more, ceiling[e])
            true += short_price[e] * short + over
            sought += search_price[e] * short + over
    return true, sought


@_compiled
def _rows_change(
    old: int,
    new: int,
    first: int,
    last: int,
    node_of: Ints,
    row_at: Ints,
    row_column: Ints,
    change: Floats,
    load: Floats,
    room: Floats,
    price: Floats,
) -> tuple[float, float]:
    """kW by which the move breaks the rows of nodes first..last further, and their price."""
    broken, money = 0.0, 0.0
    for at in range(first, last):
        node = node_of[at]
        for row in range(row_at[node], row_at[node + 1]):
            column = row_column[row]
            more = (change[new, column] if new >= 0 else 0.0) - (change[old, column] if old >= 0 else 0.0)
            if more != 0.0:
                excess = _excess(load[row], more, room[row])
                broken += excess
                money += price[row] * excess
    return broken, money


@_compiled
def _move(
    old: int,
    new: int,
    first: int,
    last: int,
    node_of: Ints,
    row_at: Ints,
    row_column: Ints,
    kw: Floats,
    change: Floats,
    given: Floats,
    load: Floats,
) -> None:
    """Carries a move into what is given (E,) and the rows' load."""
    for candidate, sign in ((old, -1.0), (new, 1.0)):
        if candidate < 0:
            continue
        for e in range(given.size):
            given[e] += sign * kw[candidate, e]
        for at in range(first, last):
            node = node_of[at]
            for row in range(row_at[node], row_at[node + 1]):
                load[row] += sign * change[candidate, row_column[row]]


@_compiled
def _draw(seed: Any) -> tuple[Any, float]:
    """The generator's next state and a number in (0, 1)."""
    seed ^= seed >> np.uint64(12)
    seed ^= seed << np.uint64(25)
    seed ^= seed >> np.uint64(27)
    return seed, (float((seed * np.uint64(2685821657736338717)) >> np.uint64(32)) + 0.5) / 4294967296.0


@_compiled
def cool(
    event: tuple[Floats, Floats, Floats, Floats, Floats, Floats],
    short_guess: Floats,
    sites: tuple[Ints, Ints, Ints],
    rows: tuple[Ints, Ints, Ints, Floats, Floats, Floats],
    state: tuple[Ints, Floats, Floats],
    sums: Floats,
    best: Ints,
    heat: tuple[float, float],
    weight: tuple[float, float],
    hard: bool,
    steps: int,
    seed: Any,
) -> Any:
    """Cools from heat[0] to heat[1] in `steps` moves; changes state, sums and best; returns the generator's state.

    event: cost (M,), kW (M, E), request, ceiling, shortfall and over price (E,). short_guess (E,): the shortfall's
    price in the search, times a weight. sites: first candidate, candidates, first of its nodes. rows: node_of,
    row_at, row_column, change (M, columns), room, price. state: each site's candidate (-1: out), given kW, load of
    rows. sums: objective, kW broken, objective of `best`. hard: no move breaks a row further.
    """
    cost, kw, request, ceiling, short_price, over_price = event
    start, size, node_at = sites
    node_of, row_at, row_column, change, room, row_price = rows
    current, given, load = state
    cooling, growth = (heat[1] / heat[0]) ** (1.0 / steps), (weight[1] / weight[0]) ** (1.0 / steps)
    heat_now, weight_now = heat[0], weight[0]
    search_price = np.minimum(weight_now * short_guess, short_price)
    for step in range(steps):
        heat_now, weight_now = heat_now * cooling, weight_now * growth
        if step % 256 == 0:
            search_price = np.minimum(weight_now * short_guess, short_price)
        seed, by_site = _draw(seed)
        seed, by_rank = _draw(seed)
        seed, chance = _draw(seed)
        site = int(by_site * start.size)
        rank = int((size[site] + 1) * by_rank * by_rank * by_rank)
        old, new = current[site], start[site] + rank - 1 if rank > 0 else -1
        if new == old:
            continue
        limit = -heat_now * np.log(chance)
        true, sought = _event_change(
            old, new, cost, kw, given, request, ceiling, short_price, search_price, over_price
        )
        if hard and sought > limit:
            continue
        first, last = node_at[site], node_at[site + 1]
        broken, money = _rows_change(
            old, new, first, last, node_of, row_at, row_column, change, load, room, row_price
        )
        if (hard and broken > 0.0) or sought + weight_now * money > limit:
            continue
        _move(old, new, first, last, node_of, row_at, row_column, kw, change, given, load)
        current[site] = new
        sums[0] += true
        sums[1] += broken
        if sums[1] <= KEPT and sums[0] < sums[2] - 1e-9:
            sums[2] = sums[0]
            best[:] = current
    return seed
