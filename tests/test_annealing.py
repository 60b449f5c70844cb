"""Annealing: what it brings back is a choice within the limits, no dearer than it began, and the same every time."""

from functools import cache

import numpy as np
import pytest
from made_quotes import by_enumeration, made_quotes
from test_allocate import Case

import fleet.annealing
from fleet.annealing import annealed
from fleet.effort import STEADY
from fleet.improve import repaired, score
from fleet.narrow import rounded
from fleet.prices import can_bind, priced


@cache
def posed(sites=40, candidates=12, seed=3, tight=0.2):
    """A fleet below tight feeders: offers, terms, search, gross cost, a choice to start from, rows that can bind."""
    quotes = made_quotes(sites=sites, candidates=candidates, intervals=6, horizon=30, seed=seed)
    case = Case(quotes, share=0.4, tight=tight)
    found = case.run(target_gap=1.0)
    offers, terms = case.terms(found)
    searched = priced(offers, terms, STEADY)
    gross = np.maximum(quotes.cost, 0.0).sum(axis=1)
    start = repaired(offers, terms, rounded(offers, searched.x))
    return case.choices(found), offers, terms, searched, gross, start, can_bind(offers, terms)


def test_better_than_the_start_within_the_limits_and_the_same_again():
    _, offers, terms, searched, gross, start, coupled = posed()
    before = score(offers, terms, start)
    assert before.keeps_limits and coupled.any()
    first, again = (annealed(offers, terms, searched, gross, start, coupled) for _ in range(2))
    after = score(offers, terms, first)
    assert after.keeps_limits
    assert searched.bound.value <= after.objective < before.objective
    np.testing.assert_array_equal(first, again)


def test_finds_the_best_of_all_choices_of_five_sites():
    for seed in range(4):
        model, offers, terms, searched, gross, start, coupled = posed(5, 4, seed)
        found = annealed(offers, terms, searched, gross, start, coupled)
        best = by_enumeration(model)
        assert score(offers, terms, found).objective == pytest.approx(best, abs=1e-6), seed


def test_the_loops_running_sums_are_those_of_its_choice():
    """What the loop adds up move by move is what the choice comes to, worked out from nothing."""
    from fleet.annealing_loop import cool

    _, offers, terms, searched, _, start, coupled = posed(tight=0.05)
    layout = fleet.annealing._layout(offers, terms, searched, start, coupled)
    state, sums = fleet.annealing._state(offers, terms, layout, start)
    best = state[0].copy()
    heat, weight = (500.0, 500.0), (0.1, 0.1)
    cool(
        layout.event,
        layout.short_guess,
        layout.sites,
        layout.rows,
        state,
        sums,
        best,
        heat,
        weight,
        False,
        5000,
        np.uint64(7),
    )
    held = np.sort(layout.candidate[state[0][state[0] >= 0]])
    assert not np.array_equal(held, np.sort(start))
    there = score(offers, terms, held)
    broken = np.maximum(there.node_kw - terms.headroom_kw, 0.0)[coupled].sum()
    assert sums[0] == pytest.approx(there.objective, rel=1e-9)
    assert sums[1] == pytest.approx(broken, rel=1e-9, abs=1e-6)
    assert sums[1] > 0.0, "hot enough to break a row: else this compares zeros"
    np.testing.assert_allclose(state[1], there.given_kw, atol=1e-6)


def test_nothing_is_done_once_time_is_up():
    _, offers, terms, searched, gross, start, coupled = posed()
    found = annealed(offers, terms, searched, gross, start, coupled, stop=lambda: True)
    np.testing.assert_array_equal(found, start)
