"""The core on plain arrays: generated instances against dynamic programming and scipy.

Kinds of instances after Kellerer, Pferschy & Pisinger, "Knapsack Problems" (Springer 2004), chapter 11, from memory:
weights uniform in 1 to R; profits uniform in 1 to R (uncorrelated), within 10 of the weight (weakly correlated),
summed up in order from weights w and w + 10 (strongly correlated), equal to the weight (subset sum); capacity half of
the sum of each class's least and largest weight.
"""

import numpy as np
import pytest

from fleet.choices import Status
from fleet.errors import FleetError
from fleet.knapsack import choose

KINDS = ("uncorrelated", "weakly correlated", "strongly correlated", "subset sum")
RANGE = 100


def instance(kind: str, classes: int, items: int, seed: int):
    """profit and weight (classes, items) and capacity."""
    rng = np.random.default_rng(seed)
    weight = rng.integers(1, RANGE + 1, (classes, items))
    if kind == "uncorrelated":
        profit = rng.integers(1, RANGE + 1, (classes, items))
    elif kind == "weakly correlated":
        profit = np.maximum(weight + rng.integers(-10, 11, (classes, items)), 1)
    elif kind == "strongly correlated":
        weight = np.sort(weight, axis=1)
        profit, weight = np.cumsum(weight + 10, axis=1), np.cumsum(weight, axis=1)
    else:
        profit = weight.copy()
    capacity = int((weight.min(axis=1) + weight.max(axis=1)).sum() // 2)
    return profit, weight, capacity


def by_dynamic_programming(profit, weight, capacity, exactly_one: bool) -> int:
    """Largest profit, over all capacities."""
    best = np.zeros(capacity + 1)
    for values, sizes in zip(profit, weight, strict=True):
        options = [] if exactly_one else [best]
        for value, size in zip(values, sizes, strict=True):
            moved = np.full(capacity + 1, -np.inf)
            if size <= capacity:
                moved[size:] = best[: capacity + 1 - size] + value
            options.append(moved)
        best = np.max(options, axis=0)
    return int(best[-1])


@pytest.mark.parametrize("exactly_one", [True, False])
@pytest.mark.parametrize("kind", KINDS)
def test_one_row_equals_dynamic_programming(kind, exactly_one):
    profit, weight, capacity = instance(kind, classes=15, items=6, seed=3)
    group = np.repeat(np.arange(15), 6)
    found = choose(
        -profit.ravel().astype(float), group, weight.reshape(1, -1), [capacity], exactly_one=exactly_one
    )
    best = by_dynamic_programming(profit, weight, capacity, exactly_one)
    assert found.objective == -best
    assert found.bound <= -best
    # Profits that follow the weights by a constant are the hard kind: counted work ends before the proof does.
    assert found.status is Status.PROVEN or kind == "strongly correlated"
    assert found.gap <= (2e-3 if kind == "strongly correlated" else 1e-9)
    assert weight.ravel()[found.chosen].sum() <= capacity
    assert np.unique(group[found.chosen]).size == found.chosen.size
    assert found.chosen.size == 15 or not exactly_one


@pytest.mark.parametrize("kind", KINDS)
def test_a_hundred_classes_are_within_a_thousandth_and_the_bound_holds(kind):
    profit, weight, capacity = instance(kind, classes=100, items=10, seed=5)
    group = np.repeat(np.arange(100), 10)
    found = choose(
        -profit.ravel().astype(float),
        group,
        weight.reshape(1, -1),
        [capacity],
        exactly_one=True,
        target_gap=1e-3,
    )
    best = by_dynamic_programming(profit, weight, capacity, exactly_one=True)
    assert found.status is Status.PROVEN
    assert found.bound <= -best <= found.objective
    assert found.gap <= 1e-3
    assert found.objective == pytest.approx(-best, rel=1e-3)


def several_rows(seed: int, classes: int, items: int):
    rng = np.random.default_rng(seed)
    cost = rng.uniform(1.0, 100.0, classes * items)
    uses = rng.integers(0, 50, (3, classes * items)) * (rng.random((3, classes * items)) < 0.7)
    gives = rng.integers(0, 50, (2, classes * items))
    group = rng.permutation(np.repeat(np.arange(classes), items)) * 7 - 3
    return cost, group, uses, 0.4 * uses.sum(axis=1) / items, gives, 0.9 * gives.sum(axis=1) / items


def by_scipy(cost, group, uses, room, gives, asked, exactly_one):
    optimize = pytest.importorskip("scipy.optimize")
    one = (group == np.unique(group)[:, None]).astype(float)
    solved = optimize.milp(
        cost,
        constraints=[
            optimize.LinearConstraint(uses, -np.inf, room),
            optimize.LinearConstraint(gives, asked, np.inf),
            optimize.LinearConstraint(one, 1.0 if exactly_one else -np.inf, 1.0),
        ],
        integrality=np.ones(cost.size),
        bounds=optimize.Bounds(0.0, 1.0),
        options={"mip_rel_gap": 1e-9, "time_limit": 60.0},
    )
    assert solved.status == 0
    return solved.fun


@pytest.mark.parametrize("exactly_one", [True, False])
@pytest.mark.parametrize("seed", range(3))
def test_several_rows_dense_and_sparse_equal_scipy(seed, exactly_one):
    sparse = pytest.importorskip("scipy.sparse")
    cost, group, uses, room, gives, asked = several_rows(seed, classes=10, items=6)
    found = choose(cost, group, uses, room, gives, asked, exactly_one=exactly_one)
    best = by_scipy(cost, group, uses, room, gives, asked, exactly_one)
    assert found.status is Status.PROVEN
    assert found.objective == pytest.approx(best, rel=1e-6)
    assert found.objective == pytest.approx(cost[found.chosen].sum())
    assert (uses[:, found.chosen].sum(axis=1) <= room).all()
    assert (gives[:, found.chosen].sum(axis=1) >= asked).all()
    again = choose(
        cost, group, sparse.csr_array(uses), room, sparse.coo_array(gives), asked, exactly_one=exactly_one
    )
    assert again.chosen.tolist() == found.chosen.tolist()


def test_what_nobody_can_give_is_no_answer():
    cost, group = np.array([1.0, 2.0, 3.0]), np.array([0, 0, 1])
    found = choose(cost, group, at_least=[[5.0, 6.0, 7.0]], at_least_right=[14.0])
    assert found.status in (Status.INFEASIBLE, Status.FAILED)
    assert found.chosen.size == 0
    assert found.objective == np.inf
    found = choose(cost, group, at_least=[[5.0, 6.0, 7.0]], at_least_right=[13.0])
    assert found.chosen.tolist() == [1, 2]
    assert found.objective == found.bound == 5.0


def test_no_rows_and_no_columns():
    free = choose(np.array([1.0, -2.0, -3.0, 4.0]), np.array([0, 0, 0, 1]))
    assert (free.chosen.tolist(), free.objective, free.status) == ([2], -3.0, Status.PROVEN)
    one = choose(np.array([1.0, -2.0, -3.0, 4.0]), np.array([0, 0, 0, 1]), exactly_one=True)
    assert (one.chosen.tolist(), one.objective, one.gap) == ([2, 3], 1.0, 0.0)
    nothing = choose(np.zeros(0), np.zeros(0, dtype=int), at_least=np.zeros((1, 0)), at_least_right=[1.0])
    assert nothing.status is Status.INFEASIBLE


def test_arrays_that_do_not_fit_are_refused():
    with pytest.raises(FleetError) as caught:
        choose(np.ones(3), np.arange(3), np.ones((2, 3)), [1.0])
    assert str(caught.value) == "at_most (2, 3) with 1 right sides and 3 columns: expected (1, 3)"
    with pytest.raises(FleetError) as caught:
        choose(np.array([1.0, np.nan]), np.arange(2))
    assert str(caught.value) == "cost: a value is no finite number"
