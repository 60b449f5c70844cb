"""The core by itself: a multiple-choice knapsack on plain arrays, with a bound; no fleet, no quotes, no time.

Owns how any such problem is put as offers and terms: an at-least row is what is asked in one interval, an at-most
row a node that all groups hang below. Search and bound are those of an allocation.

    minimise   cost.x                    x in {0,1}
    subject to at_most x  <= at_most_right
               at_least x >= at_least_right
               sum of a group's x <= 1, or = 1
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from fleet.answer import Answer, best_answer
from fleet.bound import Offers, Terms
from fleet.choices import Status
from fleet.effort import within
from fleet.errors import FleetError
from sites.units import Bools, Floats, Ints

LARGE: Final = 1000.0
"""Each row is scaled by a power of two so that its largest coefficient lies between half of this and this."""
FIRM_SHARE: Final = 10.0
ROUNDING: Final = 1e-9
"""A row is kept to within this share of its coefficients' sum."""


@dataclass(frozen=True)
class Picked:
    """Answer and proof."""

    chosen: Ints
    """Indices of the columns that are 1, sorted; empty and not `status.is_ok` where no answer was found"""
    objective: float
    """Sum of their cost, recomputed; inf where there is no answer"""
    bound: float
    """No answer costs less"""
    status: Status
    """proven (bound and objective within target_gap), feasible_cut_short, infeasible (proven), failed (none found)"""

    @property
    def gap(self) -> float:
        """Objective less bound, relative to the objective; 0 where both are equal."""
        lack = self.objective - self.bound
        return 0.0 if lack <= 0.0 else lack / abs(self.objective) if self.objective else np.inf


def choose(
    cost: Floats,
    group: Ints,
    at_most: Any = None,
    at_most_right: Any = (),
    at_least: Any = None,
    at_least_right: Any = (),
    *,
    exactly_one: bool = False,
    target_gap: float = 0.0,
    seconds: float | None = None,
) -> Picked:
    """The cheapest choice found and a bound that no choice can beat.

    cost (C,), group (C,) any integers: of equal ones at most one column is chosen, with exactly_one exactly one.
    at_most (L, C) and at_least (K, C): dense arrays, or anything sparse with `tocoo()`; their right sides (L,), (K,).
    target_gap: relative, where to stop. seconds None: counted work, the same arrays give the same answer.

    Raises FleetError where shapes do not fit together or a value is no finite number.
    """
    order = np.argsort(np.asarray(group), kind="stable")
    cost = np.asarray(cost, dtype=np.float64)
    most, least = _dense(at_most, cost.size), _dense(at_least, cost.size)
    most_right, least_right = (
        np.asarray(part, dtype=np.float64).ravel() for part in (at_most_right, at_least_right)
    )
    _check(cost, np.asarray(group), most, most_right, least, least_right)
    names, number = np.unique(np.asarray(group)[order], return_inverse=True)
    if cost.size == 0:
        kept = bool((most_right >= 0.0).all() and (least_right <= 0.0).all())
        nothing = np.zeros(0, dtype=np.int64)
        return Picked(nothing, 0.0, 0.0, Status.PROVEN) if kept else _none(np.inf, Status.INFEASIBLE)
    most, least, rest = most[:, order], least[:, order], np.zeros(0, dtype=np.int64)
    if exactly_one:
        rest = _reference(number, cost[order], most, most_right, least, least_right)
    offers, terms, base = _posed(cost[order], number, names.size, most, most_right, least, least_right, rest)
    answer = best_answer(offers, terms, np.abs(cost[order]), target_gap, within(seconds))
    chosen = answer.chosen
    if exactly_one:
        chosen = np.concatenate([chosen, rest[~np.isin(number[rest], number[chosen])]])
    kept = _keeps(most, most_right, chosen, 1.0) and _keeps(least, least_right, chosen, -1.0)
    return _picked(np.sort(order[chosen]), cost, answer, base, kept, target_gap)


def _picked(chosen: Ints, cost: Floats, answer: Answer, base: float, kept: bool, target_gap: float) -> Picked:
    """The answer with its bound; a choice that breaks a row of the arrays given is no answer."""
    bound = max(answer.searched.bound.value, answer.bound_solver) + base
    if not kept:
        dearest = float(np.abs(cost).sum())
        return _none(bound, Status.INFEASIBLE if bound > dearest * (1.0 + ROUNDING) else Status.FAILED)
    objective = float(cost[chosen].sum())
    bound = min(bound, objective)
    proven = (
        objective - bound
        <= target_gap * abs(objective) + ROUNDING * float(np.abs(cost).max()) * cost.size**0.5
    )
    return Picked(chosen, objective, bound, Status.PROVEN if proven else Status.FEASIBLE_CUT_SHORT)


def _none(bound: float, status: Status) -> Picked:
    return Picked(np.zeros(0, dtype=np.int64), np.inf, bound, status)


def _dense(rows: Any, columns: int) -> Floats:
    """Rows as a dense array."""
    if rows is None:
        return np.zeros((0, columns))
    if hasattr(rows, "tocoo"):
        sparse = rows.tocoo()
        full = np.zeros(sparse.shape)
        np.add.at(full, (sparse.row, sparse.col), sparse.data)
        return full
    return np.atleast_2d(np.asarray(rows, dtype=np.float64))


def _check(
    cost: Floats, group: Ints, most: Floats, most_right: Floats, least: Floats, least_right: Floats
) -> None:
    """FleetError naming what does not fit."""
    if cost.ndim != 1 or group.shape != cost.shape:
        raise FleetError(f"cost {cost.shape} and group {group.shape}: expected one of each a column")
    for name, rows, right in (("at_most", most, most_right), ("at_least", least, least_right)):
        if rows.shape != (right.size, cost.size):
            raise FleetError(
                f"{name} {rows.shape} with {right.size} right sides and {cost.size} columns: expected "
                f"({right.size}, {cost.size})"
            )
        if not (np.isfinite(rows).all() and np.isfinite(right).all()):
            raise FleetError(f"{name}: a coefficient or right side is no finite number")
    if not np.isfinite(cost).all():
        raise FleetError("cost: a value is no finite number")


def _reference(
    number: Ints, cost: Floats, most: Floats, most_right: Floats, least: Floats, least_right: Floats
) -> Ints:
    """One column of each group to start from: what uses least of the rows, then what costs least."""
    weight = sum(
        (
            sign * rows[row] / max(abs(float(right[row])), float(np.abs(rows[row]).max()), 1e-300)
            for sign, rows, right in ((1.0, most, most_right), (-1.0, least, least_right))
            for row in range(right.size)
        ),
        np.zeros(cost.size),
    )
    order = np.lexsort((cost, weight, number))
    _, first = np.unique(number[order], return_index=True)
    return np.asarray(order[first], dtype=np.int64)


def _posed(
    cost: Floats,
    number: Ints,
    groups: int,
    most: Floats,
    most_right: Floats,
    least: Floats,
    least_right: Floats,
    rest: Ints,
) -> tuple[Offers, Terms, float]:
    """The problem as offers and terms, and the cost that every choice has anyway.

    With references `rest` a column stands for changing from its group's reference to it, so that staying out means
    the reference: exactly one becomes at most one without a penalty, and bounds shift by a constant.
    """
    own = rest[number] if rest.size else None
    base = float(cost[rest].sum())
    change, kw = most.T.copy(), least.T.copy()
    room, asked = most_right - most[:, rest].sum(axis=1), least_right - least[:, rest].sum(axis=1)
    if own is not None:
        cost, change, kw = cost - cost[own], change - change[own], kw - kw[own]
    scales = [_power(np.abs(part).max(axis=0, initial=0.0)) for part in (change, kw)]
    change, kw, room, asked = change * scales[0], kw * scales[1], room * scales[0], asked * scales[1]
    # One row of each kind at least, without a limit or anything asked: the search knows no problem without.
    headroom = np.full((most_right.size + 1,) * 2, np.inf)
    headroom[np.diag_indices(most_right.size)] = room
    change = np.concatenate([change, np.zeros((cost.size, 1))], axis=1)
    kw, asked = np.concatenate([kw, np.zeros((cost.size, 1))], axis=1), np.r_[asked, 0.0]
    spread = float(np.ptp(cost)) + float(np.abs(cost).max())
    price = np.full(asked.size, FIRM_SHARE * groups * max(spread, 1e-9) / LARGE)
    price[-1] = 0.0
    none = np.zeros(asked.size)
    below = np.ones((most_right.size + 1, groups), dtype=np.bool_)
    offers = Offers(number, groups, cost, kw, change, below)
    return offers, Terms(asked, none, price, none, headroom), base


def _power(largest: Floats) -> Floats:
    """The power of two that brings a row's largest coefficient to between LARGE / 2 and LARGE."""
    sound = np.where(largest > 0.0, largest, LARGE)
    return np.asarray(2.0 ** np.floor(np.log2(LARGE / sound)), dtype=np.float64)


def _keeps(rows: Floats, right: Floats, chosen: Ints, sign: float) -> bool:
    """Rows of the arrays given are kept by the chosen columns, to within rounding."""
    slack: Bools = sign * (rows[:, chosen].sum(axis=1) - right) <= ROUNDING * (1.0 + np.abs(rows).sum(axis=1))
    return bool(slack.all())
