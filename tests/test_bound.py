"""The bound from prices: below every choice whatever the prices, and honest about what the models never saw."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from made_quotes import as_offers, by_enumeration, made_choices

from fleet.bound import STEERING_PER_CALL, Offers, Prices, Terms, bound_from_prices, steering
from fleet.errors import FleetError

CASES = {
    seed: made_choices(seed, sites=4, candidates=4, intervals=3, share=0.2 + 0.1 * seed) for seed in range(6)
}
BEST = {seed: by_enumeration(choices) for seed, choices in CASES.items()}


@settings(max_examples=300, deadline=None)
@given(
    st.sampled_from(sorted(CASES)),
    st.lists(st.floats(0.0, 1.0), min_size=6, max_size=6),
    st.lists(st.floats(0.0, 2.0), min_size=2, max_size=2),
)
def test_any_prices_in_range_give_a_bound(seed, shares, importing):
    choices = CASES[seed]
    offers, terms = as_offers(choices, 4)
    prices = Prices(
        np.array(shares[:3]) * terms.shortfall_price_per_kw,
        np.array(shares[3:]) * terms.over_price_per_kw,
        np.diag(importing),
    )
    assert bound_from_prices(offers, terms, prices).value <= BEST[seed] + 1e-6


@settings(max_examples=60, deadline=None)
@given(st.sampled_from(sorted(CASES)), st.floats(0.0, 1.0))
def test_over_price_alone_bounds_where_candidates_earn_money(seed, share):
    """Candidates that save money are wanted beyond the request: only the over-delivery term holds them back."""
    earning = made_choices(seed, sites=4, candidates=4, intervals=3, share=0.05)
    earning = type(earning)(**(vars(earning) | {"cost": earning.cost - 200.0}))
    offers, terms = as_offers(earning, 4)
    prices = Prices(np.zeros(3), share * terms.over_price_per_kw, np.zeros((2, 2)))
    assert bound_from_prices(offers, terms, prices).value <= by_enumeration(earning) + 1e-6


def one_site():
    """One site of two candidates (10 kW for 5, 20 kW for 12), 15 kW asked, shortfall 2 per kW, a limit of 6 kW."""
    offers = Offers(
        np.array([0, 0]),
        1,
        np.array([5.0, 12.0]),
        np.array([[10.0], [20.0]]),
        np.array([[4.0], [8.0]]),
        np.array([[True], [True]]),
    )
    terms = Terms(
        np.array([15.0]), np.array([3.0]), np.array([2.0]), np.array([1.0]), np.array([[np.inf], [6.0]])
    )
    return offers, terms


def test_bound_by_hand():
    """At shed 1, over 0.1, import 0.5: values 5 - 9 + 2 = -2 and 12 - 18 + 4 = -2; -2 + 15 - 1.8 - 3 = 8.2."""
    bound = bound_from_prices(*one_site(), Prices(np.array([1.0]), np.array([0.1]), np.array([[0.0], [0.5]])))
    assert bound.value == pytest.approx(8.2)
    assert bound.candidate_value == pytest.approx([-2.0, -2.0])
    assert bound.best == pytest.approx([-2.0])


def test_prices_are_summed_along_the_path():
    offers, terms = one_site()
    both = Terms(**(vars(terms) | {"headroom_kw": np.array([[6.0], [6.0]])}))
    split = Prices(np.array([1.0]), np.array([0.0]), np.array([[0.2], [0.3]]))
    lone = Prices(np.array([1.0]), np.array([0.0]), np.array([[0.5], [0.0]]))
    assert bound_from_prices(offers, both, split).value == pytest.approx(
        bound_from_prices(offers, both, lone).value
    )


def test_no_choice_with_a_candidate_costs_less_than_bound_and_regret():
    choices = CASES[2]
    offers, terms = as_offers(choices, 4)
    prices = Prices(0.6 * terms.shortfall_price_per_kw, 0.0 * terms.over_price_per_kw, np.zeros((2, 2)))
    bound = bound_from_prices(offers, terms, prices)
    for candidate in range(choices.site.size):
        keep = (choices.site != choices.site[candidate]) | (np.arange(choices.site.size) == candidate)
        forced = choices.cost.copy()
        forced[candidate] -= 1e6
        part = type(choices)(
            **(
                vars(choices)
                | {
                    "site": choices.site[keep],
                    "cost": forced[keep],
                    "kw": choices.kw[keep],
                    "rows": choices.rows[:, keep],
                }
            )
        )
        with_it = by_enumeration(part) + 1e6
        if with_it < 1e5:
            assert bound.value + bound.regret(choices.site)[candidate] <= with_it + 1e-6


def test_a_planted_cheap_candidate_lowers_the_bound():
    offers, terms = one_site()
    prices = Prices(np.array([1.0]), np.array([0.0]), np.zeros((2, 1)))
    before = bound_from_prices(offers, terms, prices).value
    planted = Offers(
        np.r_[offers.site, 0],
        1,
        np.r_[offers.cost, -50.0],
        np.r_[offers.kw, [[12.0]]],
        np.r_[offers.change_kw, [[0.0]]],
        offers.below,
    )
    assert bound_from_prices(planted, terms, prices).value == pytest.approx(before - 54.0)


@pytest.mark.parametrize(
    ("prices", "message"),
    [
        (
            Prices(np.array([2.5]), np.array([0.0]), np.zeros((2, 1))),
            "shed price 2.5 at (0,) is not within 0 to 2; "
            "a bound from such prices does not hold: use prices within their range",
        ),
        (
            Prices(np.array([1.0]), np.array([-0.1]), np.zeros((2, 1))),
            "over price -0.1 at (0,) is not within 0 to 1; "
            "a bound from such prices does not hold: use prices within their range",
        ),
        (
            Prices(np.array([1.0]), np.array([0.0]), np.array([[0.5], [0.0]])),
            "import price 0.5 at (0, 0) is not within 0 to 0; "
            "a bound from such prices does not hold: use prices within their range",
        ),
        (
            Prices(np.array([np.nan]), np.array([0.0]), np.zeros((2, 1))),
            "shed price nan at (0,) is not within 0 to 2; "
            "a bound from such prices does not hold: use prices within their range",
        ),
    ],
)
def test_prices_out_of_range_are_refused(prices, message):
    with pytest.raises(FleetError) as caught:
        bound_from_prices(*one_site(), prices)
    assert str(caught.value) == message


def test_steering_is_small_fixed_and_by_id():
    ids = np.array([f"site-{i}" for i in range(1000)], dtype=object)
    money = steering(ids)
    assert money.min() >= 0.0
    assert money.max() < STEERING_PER_CALL
    assert np.unique(money).size == 1000
    assert steering(ids[::-1]).tolist() == money[::-1].tolist()
