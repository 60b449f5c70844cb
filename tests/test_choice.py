"""The choice against enumeration, another solver and its own prices."""

import subprocess
import sys
import warnings
from dataclasses import replace

import highspy
import numpy as np
import pytest
from made_quotes import as_offers, by_enumeration, made_choices, objective_of

from fleet import choice
from fleet.bound import Prices, bound_from_prices
from fleet.choice import HIGHS_OPTIONS, integer, most_kw, relaxation
from fleet.choices import Choices, Status, Work

scipy_optimize = pytest.importorskip("scipy.optimize")


@pytest.mark.parametrize("seed", range(12))
def test_integer_equals_enumeration_of_all_choices(seed):
    choices = made_choices(seed, sites=6, candidates=6, share=0.3 + 0.06 * seed)
    answer = integer(choices, gap=0.0)
    assert answer.status is Status.PROVEN
    assert objective_of(choices, answer.chosen) == pytest.approx(by_enumeration(choices), abs=1e-6)
    assert answer.bound_solver <= by_enumeration(choices) + 1e-6


@pytest.mark.parametrize("seed", range(3))
def test_integer_equals_scipy_milp(seed):
    choices = made_choices(100 + seed, sites=12, candidates=20, intervals=6, rows=3)
    answer = integer(choices, gap=0.0)
    assert answer.status is Status.PROVEN
    assert objective_of(choices, answer.chosen) == pytest.approx(by_scipy(choices), rel=1e-6)


def by_scipy(choices):
    count, intervals = choices.kw.shape
    groups = (choices.site == np.unique(choices.site)[:, None]).astype(float)
    eye, none = np.eye(intervals), np.zeros((intervals, intervals))
    empty = np.zeros((len(groups), 2 * intervals)), np.zeros((len(choices.room), 2 * intervals))
    matrix = np.block(
        [[choices.kw.T, eye, none], [choices.kw.T, none, -eye], [groups, empty[0]], [choices.rows, empty[1]]]
    )
    ceiling = choices.request_kw + choices.allowance_kw
    low = np.r_[choices.request_kw, np.full(intervals + len(groups) + len(choices.room), -np.inf)]
    high = np.r_[np.full(intervals, np.inf), ceiling, np.ones(len(groups)), choices.room]
    solved = scipy_optimize.milp(
        np.r_[choices.cost, choices.shortfall_price_per_kw, choices.over_price_per_kw],
        constraints=scipy_optimize.LinearConstraint(matrix, low, high),
        integrality=np.r_[np.ones(count), np.zeros(2 * intervals)],
        bounds=scipy_optimize.Bounds(0.0, np.r_[np.ones(count), np.full(2 * intervals, np.inf)]),
        options={"mip_rel_gap": 1e-9, "time_limit": 60.0},
    )
    assert solved.status == 0
    return solved.fun


@pytest.mark.parametrize("solver", ["highs", "cbc"])
@pytest.mark.parametrize("seed", range(6))
def test_prices_of_the_relaxation_reproduce_its_objective(seed, solver):
    choices = made_choices(seed, share=0.2 + 0.15 * seed)
    relaxed = relaxation(choices, solver)
    assert relaxed.status is Status.PROVEN
    offers, terms = as_offers(choices, 6)
    prices = Prices(
        np.clip(relaxed.price_shed, 0.0, choices.shortfall_price_per_kw),
        np.clip(relaxed.price_over, 0.0, choices.over_price_per_kw),
        np.diag(np.maximum(relaxed.price_rows, 0.0)),
    )
    tolerance = 1e-6 if solver == "highs" else 1e-3
    assert bound_from_prices(offers, terms, prices).value == pytest.approx(relaxed.objective, abs=tolerance)
    assert relaxed.price_shed.max() > 0.0
    fractional = choices.cost @ relaxed.x
    short = np.maximum(choices.request_kw - choices.kw.T @ relaxed.x, 0.0)
    over = np.maximum(choices.kw.T @ relaxed.x - choices.request_kw - choices.allowance_kw, 0.0)
    total = fractional + choices.shortfall_price_per_kw @ short + choices.over_price_per_kw @ over
    assert total == pytest.approx(relaxed.objective, abs=tolerance)


def test_relaxation_is_no_dearer_than_whole_candidates():
    choices = made_choices(3)
    assert relaxation(choices).objective <= by_enumeration(choices) + 1e-9


def test_cbc_gives_the_same_answer():
    choices = made_choices(5)
    answer = integer(choices, 0.0, solver="cbc")
    assert objective_of(choices, answer.chosen) == pytest.approx(by_enumeration(choices), abs=1e-6)
    assert answer.bound_solver == -np.inf


def test_two_rows_by_hand():
    """10 kW asked for one hour; a 6 kW site at 1, a 5 kW site at 2, shortfall 9 per kW: both, at 3."""
    hand = Choices(
        site=np.array([0, 1]),
        cost=np.array([1.0, 2.0]),
        kw=np.array([[6.0], [5.0]]),
        request_kw=np.array([10.0]),
        allowance_kw=np.array([0.0]),
        shortfall_price_per_kw=np.array([9.0]),
        over_price_per_kw=np.array([0.0]),
        rows=np.zeros((0, 2)),
        room=np.zeros(0),
    )
    answer = integer(hand, 0.0)
    assert answer.chosen.tolist() == [0, 1]
    assert answer.objective == pytest.approx(3.0)
    relaxed = relaxation(hand)
    assert relaxed.objective == pytest.approx(1.0 + 2.0 * 4.0 / 5.0)
    assert relaxed.price_shed == pytest.approx([0.4])


def test_over_delivery_has_its_price():
    """A 10 kW site that earns 3, 4 kW asked, 1 more free, 0.2 per kW beyond: taken whole for -3 + 5 x 0.2 = -2."""
    hand = Choices(
        site=np.array([0]),
        cost=np.array([-3.0]),
        kw=np.array([[10.0]]),
        request_kw=np.array([4.0]),
        allowance_kw=np.array([1.0]),
        shortfall_price_per_kw=np.array([9.0]),
        over_price_per_kw=np.array([0.2]),
        rows=np.zeros((0, 1)),
        room=np.zeros(0),
    )
    relaxed = relaxation(hand)
    assert relaxed.objective == pytest.approx(-2.0)
    assert relaxed.price_over == pytest.approx([0.2])
    assert integer(hand, 0.0).objective == pytest.approx(-2.0)
    dear = replace(hand, over_price_per_kw=np.array([5.0]))
    assert relaxation(dear).price_over == pytest.approx([0.3])


def test_merit_order_is_not_optimal():
    """10 kW asked; 9 kW for 9.00, 9 kW for 9.09, 10 kW for 10.20: the last alone wins."""
    hand = Choices(
        site=np.array([0, 1, 2]),
        cost=np.array([9.0, 9.09, 10.2]),
        kw=np.array([[9.0], [9.0], [10.0]]),
        request_kw=np.array([10.0]),
        allowance_kw=np.array([10.0]),
        shortfall_price_per_kw=np.array([100.0]),
        over_price_per_kw=np.array([100.0]),
        rows=np.zeros((0, 3)),
        room=np.zeros(0),
    )
    assert integer(hand, 0.0).chosen.tolist() == [2]


def test_start_is_kept_when_there_is_no_time():
    choices = made_choices(7, sites=16, candidates=30, intervals=8, rows=4)
    first = integer(choices, 0.0, Work(checks=40))
    again = integer(choices, 0.0, Work(checks=1), start=first.chosen)
    assert again.status.is_ok
    assert objective_of(choices, again.chosen) <= objective_of(choices, first.chosen) + 1e-6


def test_time_out_is_told_as_cut_short():
    choices = made_choices(7, sites=40, candidates=100, intervals=12, rows=6)
    answer = integer(choices, 0.0, Work(seconds=0.5))
    assert answer.status is not Status.PROVEN


def test_counted_work_ends_at_the_same_place():
    choices = made_choices(7, sites=16, candidates=30, intervals=8, rows=4)
    first, second = (integer(choices, 0.0, Work(nodes=5, checks=40)) for _ in range(2))
    assert first.status is Status.FEASIBLE_CUT_SHORT
    assert first.chosen.tolist() == second.chosen.tolist()
    assert first.bound_solver == second.bound_solver
    assert first.bound_solver <= objective_of(choices, first.chosen)


def test_a_row_with_a_price_may_be_broken_in_a_search():
    """10 kW asked, room 6 for a site that adds 10: at 0.5 a kW the row is broken by 4, for 1 + 2."""
    hand = Choices(
        site=np.array([0]),
        cost=np.array([1.0]),
        kw=np.array([[10.0]]),
        request_kw=np.array([10.0]),
        allowance_kw=np.array([0.0]),
        shortfall_price_per_kw=np.array([9.0]),
        over_price_per_kw=np.array([0.0]),
        rows=np.array([[10.0]]),
        room=np.array([6.0]),
    )
    assert integer(hand, 0.0).objective == pytest.approx(90.0)
    assert integer(replace(hand, row_price=0.5), 0.0).objective == pytest.approx(3.0)
    assert relaxation(replace(hand, row_price=0.5)).price_rows == pytest.approx([0.5])


def test_most_of_two_intervals_together():
    """Two sites of two windows each: 10 kW in both intervals together, 15 and 14 in each alone."""
    hand = Choices(
        site=np.array([0, 0, 1, 1]),
        cost=np.zeros(4),
        kw=np.array([[10.0, 0.0], [4.0, 4.0], [0.0, 10.0], [5.0, 4.0]]),
        request_kw=np.zeros(2),
        allowance_kw=np.zeros(2),
        shortfall_price_per_kw=np.zeros(2),
        over_price_per_kw=np.zeros(2),
        rows=np.zeros((0, 4)),
        room=np.zeros(0),
    )
    together = most_kw(hand, np.ones(2))
    assert (together.kw, together.chosen.tolist()) == (10.0, [0, 2])
    assert most_kw(hand, np.array([1.0, 0.0])).kw == 15.0
    assert most_kw(hand, np.array([0.0, 1.0])).kw == 14.0
    tight = replace(hand, rows=np.array([[10.0, 4.0, 10.0, 5.0]]), room=np.array([9.5]))
    assert most_kw(tight, np.ones(2)).kw == 8.0
    rounded = replace(hand, kw=hand.kw / 3.0)
    assert most_kw(rounded, np.ones(2)).kw == 3.333


def test_units_do_not_matter():
    choices = made_choices(9)
    scaled = replace(
        choices,
        kw=choices.kw * 1000.0,
        request_kw=choices.request_kw * 1000.0,
        allowance_kw=choices.allowance_kw * 1000.0,
        shortfall_price_per_kw=choices.shortfall_price_per_kw / 1000.0,
        over_price_per_kw=choices.over_price_per_kw / 1000.0,
    )
    assert integer(choices, 0.0).chosen.tolist() == integer(scaled, 0.0).chosen.tolist()


def test_impossible_rows_are_told():
    choices = replace(made_choices(1, rows=1), room=np.array([-1.0]))
    answer = integer(choices, 0.0)
    assert answer.status is Status.INFEASIBLE
    assert not answer.status.is_ok
    assert answer.chosen.size == 0


def test_every_option_is_known_to_highs():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        known = highspy.Highs()
        known.setOptionValue("output_flag", False)
        states = {name: known.getOptionValue(name)[0] for name in HIGHS_OPTIONS}
        assert set(states.values()) == {highspy.HighsStatus.kOk}
        assert known.getOptionValue("mip_real_gap")[0] == highspy.HighsStatus.kError


def test_an_option_not_in_the_list_is_refused():
    with pytest.raises(ValueError, match="options mip_real_gap are not in the checked list of HiGHS options"):
        choice._highs(True, {"mip_real_gap": 0.1}, None)


def test_nothing_is_printed():
    code = (
        "import sys; sys.path.insert(0, 'tests')\n"
        "from made_quotes import made_choices\n"
        "from fleet.choice import integer\n"
        "assert integer(made_choices(1), 0.0).status.is_ok"
    )
    ran = subprocess.run(
        [sys.executable, "-W", "error", "-c", code], capture_output=True, text=True, check=True
    )
    assert (ran.stdout, ran.stderr) == ("", "")
