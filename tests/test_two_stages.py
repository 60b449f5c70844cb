"""Sheds in two stages: more machines off while the tank is quick, one back as its rate falls."""

from dataclasses import replace
from functools import cache

import numpy as np
from made_sites import made_outlook, made_roster, made_standing
from test_quote import EVENT, made_terms

from sites.candidate import Stages
from sites.quote import Quoted, detail, ground, quote
from sites.roster import TANK_KINDS

WHOLE = EVENT[1] - EVENT[0]


@cache
def quoted(two_stages: bool) -> Quoted:
    """Two plants of three machines of 300 kW_th, external-melt tanks of 1,700 and 1,900 kWh_th, nearly full; only the
    whole event of three hours is offered."""
    roster = made_roster((1, 1))
    kind = np.full((2, 2), TANK_KINDS.index("ice_external_melt"))
    every = np.ones((2, 3), dtype=np.bool_)
    roster = replace(
        roster,
        buildings=replace(roster.buildings, peak_cooling_kw_th=np.full(2, 850.0)),
        chillers=replace(
            roster.chillers, exists=every, capacity_kw_th=np.full((2, 3), 300.0), makes_ice=every
        ),
        tanks=replace(
            roster.tanks,
            exists=np.array([[True, False]] * 2),
            kind=kind,
            capacity_kwh_th=np.array([[1700.0, 0.0], [1900.0, 0.0]]),
        ),
    )
    base = ground(roster, made_outlook(roster), made_standing(roster, 0.95))
    return quote(base, made_terms(2, two_stages=two_stages, minimum_intervals=np.full(2, WHOLE)))


def staged(stages: Stages) -> np.ndarray:
    """Candidates with two stages that differ."""
    return (stages.end > stages.start).sum(axis=1) == 2


def test_one_block_cannot_hold_the_window_where_two_stages_can() -> None:
    """All three machines off for three hours is not quoted, for the tank's rate falls; off at first, with one back
    later, they are, and the plant gives a tenth more energy than by the best block there is."""
    one, two = quoted(False).quotes, quoted(True).quotes
    blocks, pick = one.site == 1, staged(two.stages) & (two.site == 1)
    off = (one.stages.load_limit_fraction[:, 0] <= 0.0).sum(axis=1)
    assert off[blocks].max() == 2
    first = (two.stages.load_limit_fraction[pick, 0] <= 0.0).sum(axis=1)
    energy = two.expected_kw[pick].sum(axis=1)
    assert first[np.argmax(energy)] == 3
    assert energy.max() > 1.1 * one.expected_kw[blocks].sum(axis=1).max()


def test_the_machine_that_comes_back_is_the_first_in_loading_order_of_those_off() -> None:
    two = quoted(True)
    pick = np.flatnonzero(staged(two.quotes.stages))
    assert len(pick) >= 2
    stages = two.quotes.stages.take(pick)
    off = stages.load_limit_fraction <= 0.0
    assert (off[:, 0].sum(axis=1) == off[:, 1].sum(axis=1) + 1).all()
    assert (off[:, 0] | ~off[:, 1]).all()
    assert (stages.end[:, 0] == stages.start[:, 1]).all()
    run = detail(two, pick)
    for row in range(len(pick)):
        for part in range(2):
            inside = slice(int(stages.start[row, part]), int(stages.end[row, part]))
            assert run.direct_kw_th[row, off[row, part], inside].max(initial=0.0) == 0.0


def test_what_was_offered_before_is_offered_still_and_little_is_added() -> None:
    one, two = quoted(False), quoted(True)
    plain = ~staged(two.quotes.stages)
    np.testing.assert_array_equal(two.quotes.change_kw[plain], one.quotes.change_kw)
    np.testing.assert_array_equal(two.quotes.site[plain], one.quotes.site)
    assert two.tried - one.tried <= 3 * 2 * 2
    named = list(zip(two.quotes.site.tolist(), two.quotes.quote_id.tolist(), strict=True))
    assert len(set(named)) == len(named)
