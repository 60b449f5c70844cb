"""Quotes: what is offered, what is refused and why, and what it costs."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from made_sites import made_outlook, made_roster, made_standing

from sites import blocks, plant, trial
from sites import quote as quoting
from sites.compiled import cores
from sites.outlook import Outlook
from sites.quote import Ground, Quoted, detail, ground, quote, windows_of
from sites.quotes import LIMITED_BY, Answer
from sites.roster import CHILLER_KINDS, Roster

EVENT = (12, 24)
"""16:00 to 19:00 on the made-up clock, which starts at 13:00."""


def made_terms(count: int, **changes: object) -> blocks.Terms:
    terms = blocks.Terms(
        event_from=EVENT[0],
        event_to=EVENT[1],
        step_minutes=15,
        earliest=np.full(count, 8),
        minimum_intervals=np.full(count, 4),
        most_intervals=np.full(count, 99),
        allowed=np.ones(count, dtype=np.bool_),
    )
    return replace(terms, **changes)  # type: ignore[arg-type]


@cache
def made_ground() -> Ground:
    roster = made_roster()
    return ground(roster, made_outlook(roster), made_standing(roster))


@cache
def made_quotes() -> Quoted:
    return quote(made_ground(), made_terms(6))


def limits_of(quoted: Quoted) -> list[str]:
    return [LIMITED_BY[code] for code in quoted.quotes.site_limited_by]


def test_every_quoted_candidate_keeps_its_limits_in_its_whole_course() -> None:
    quoted = made_quotes()
    pick = np.arange(0, len(quoted.quotes.site), 3)
    run = detail(quoted, pick)
    roster = quoted.ground.roster
    site = quoted.quotes.site[pick]
    occupied = quoted.ground.here.occupied[site]
    assert (np.where(occupied, run.air_rise_k, 0.0).max(axis=1) <= roster.buildings.rise_limit_k[site]).all()
    assert (run.discharge_kw_th <= run.discharge_limit_kw_th + 1e-9).all()
    np.testing.assert_allclose(
        run.power_kw - quoted.ground.usual.power_kw[site], quoted.quotes.change_kw[pick], atol=1e-9
    )


def test_a_cap_on_the_supply_water_holds_what_may_go_unmet() -> None:
    """By hand: water at 5 degC mixed with a share s that returns at 13 comes to 5 + 8 s; 6.6 degC allow s = 0.2."""
    roster = made_roster()
    capped = replace(roster, buildings=replace(roster.buildings, supply_cap_c=np.full(6, 6.6)))
    outlook, standing = made_outlook(roster), made_standing(roster)
    np.testing.assert_allclose(roster.buildings.supply_c + 8.0, roster.buildings.return_c)
    free, held = (quote(ground(one, outlook, standing), made_terms(6)) for one in (roster, capped))

    def worst(quoted: Quoted) -> np.ndarray:
        run = detail(quoted, np.arange(len(quoted.quotes.site)))
        inside = windows_of(quoted.quotes, np.arange(len(quoted.quotes.site)))
        return np.where(inside, run.unmet_kw_th / np.maximum(run.load_kw_th, 1e-9), 0.0).max(axis=1)

    assert worst(free).max() > 0.25
    assert 0.1 < worst(held).max() <= 0.2 + 1e-6
    kept = set(free.quotes.quote_id[worst(free) <= 0.2 + 1e-7])
    assert set(held.quotes.quote_id) <= kept
    assert len(kept) - len(held.quotes.quote_id) < 4, (
        "more goes unmet from the low inventory, which must hold too"
    )


def test_expected_is_usual_less_event_and_sheds_in_every_interval_of_the_window() -> None:
    quotes = made_quotes().quotes
    np.testing.assert_array_equal(quotes.expected_kw, -quotes.change_kw[:, EVENT[0] : EVENT[1]])
    hour = np.arange(*EVENT)[None, :]
    inside = (hour >= quotes.window_start[:, None]) & (hour < quotes.window_end[:, None])
    assert quotes.expected_kw[inside].min() >= 1.0
    before = np.arange(140)[None, :] < quotes.window_start[:, None]
    assert np.abs(quotes.change_kw[before]).max() == 0.0


def test_full_storage_is_quoted_nothing_on_peak_because_its_machines_are_off_anyway() -> None:
    quoted = made_quotes()
    assert not (quoted.quotes.site == 0).any()
    assert limits_of(quoted)[0] == "already_off"


def test_a_site_without_a_tank_is_quoted_on_comfort_alone() -> None:
    quoted = made_quotes()
    assert (quoted.quotes.site == 5).any()
    assert limits_of(quoted)[5] == "comfort"
    assert quoted.quotes.unmet_kwh_th[quoted.quotes.site == 5].min() > 0.0


def test_no_unmet_takes_away_what_drifts() -> None:
    roster = made_roster((5,), no_unmet=True)
    quoted = quote(ground(roster, made_outlook(roster), made_standing(roster)), made_terms(1))
    assert len(quoted.quotes.site) == 0
    assert limits_of(quoted) == ["comfort"]


def test_critical_load_is_served_also_with_the_largest_running_machine_lost() -> None:
    """Site 3 sheds one of two machines; with 700 kW_th critical the tank would have to carry that alone."""
    assert (made_quotes().quotes.site == 3).any()
    roster = made_roster((3,), critical_kw_th=700.0)
    quoted = quote(ground(roster, made_outlook(roster), made_standing(roster)), made_terms(1))
    assert len(quoted.quotes.site) == 0
    roster = made_roster((4,), critical_kw_th=600.0)
    quoted = quote(ground(roster, made_outlook(roster), made_standing(roster)), made_terms(1))
    assert len(quoted.quotes.site) > 0


def test_held_back_inventory_is_not_touched_in_the_window() -> None:
    roster = made_roster((3,), held_back_kwh_th=1100.0)
    base = ground(roster, made_outlook(roster), made_standing(roster))
    quoted = quote(base, made_terms(1))
    pick = np.arange(len(quoted.quotes.site))
    held = detail(quoted, pick).inventory_kwh_th.sum(axis=1)
    start, end = quoted.quotes.window_start, quoted.quotes.window_end
    hour = np.arange(held.shape[1])[None, :]
    inside = (hour >= start[:, None]) & (hour < end[:, None])
    before = np.take_along_axis(held, start[:, None] - 1, axis=1)
    floor = np.minimum(before, 1100.0) - 0.02 * roster.tanks.capacity_kwh_th.sum()
    assert (np.where(inside, held, np.inf) >= floor).all()


def test_notice_minimum_window_call_limit_and_outage_say_so() -> None:
    base = made_ground()
    assert set(limits_of(quote(base, made_terms(6, earliest=np.full(6, 30))))) == {"notice"}
    assert set(limits_of(quote(base, made_terms(6, allowed=np.zeros(6, dtype=np.bool_))))) == {"call_limit"}
    assert set(limits_of(quote(base, made_terms(6, minimum_intervals=np.full(6, 13))))) <= {
        "notice",
        "minimum_run",
    }
    roster = made_roster((2,))
    standing = replace(made_standing(roster), chiller_available=np.zeros((1, 3), dtype=np.bool_))
    quoted = quote(ground(roster, made_outlook(roster), standing), made_terms(1))
    assert limits_of(quoted) == ["availability"]


def test_windows_keep_notice_and_least_length() -> None:
    quotes = quote(made_ground(), made_terms(6, earliest=np.full(6, 15))).quotes
    assert quotes.window_start.min() >= 15
    assert (quotes.window_end - quotes.window_start).min() >= 4
    assert quotes.window_end.max() <= EVENT[1]


def test_a_low_tank_never_gives_more_than_a_full_one() -> None:
    roster = made_roster()
    outlook = made_outlook(roster)
    sums = []
    for fraction in (0.5, 0.7, 0.9):
        quoted = quote(ground(roster, outlook, made_standing(roster, fraction)), made_terms(6))
        sums.append(
            [
                quoted.quotes.expected_kw[quoted.quotes.site == row].sum(axis=1).max(initial=0.0)
                for row in (4,)
            ]
        )
    assert np.diff(np.array(sums), axis=0).min() >= -1e-6


def test_cost_parts_recomputed_by_hand() -> None:
    quoted = made_quotes()
    quotes, outlook = quoted.quotes, quoted.ground.outlook
    pick = int(np.flatnonzero(quotes.site == 3)[0])
    site = 3
    change, price = quotes.change_kw[pick], outlook.price_per_kwh[site]
    start, end = int(quotes.window_start[pick]), int(quotes.window_end[pick])
    during = sum(change[t] * price[t] * 0.25 for t in range(start, end))
    after = sum(change[t] * price[t] * 0.25 for t in range(end, 140))
    lack = quotes.end_lack_kwh_th[pick] * quotes.end_lack_price_per_kwh_th[pick]
    building = quoted.ground.usual.power_kw[site] + outlook.rest_kw[site]
    paid = max(outlook.billed_peak_kw[site], building.max())
    demand = 5.0 * max(0.0, (building + change).max() - paid)
    np.testing.assert_allclose(
        quotes.cost[pick],
        [0.0, during, after + lack, demand, 10.0, 0.05 * quotes.unmet_kwh_th[pick]],
        atol=1e-9,
    )
    assert during < 0.0 < after


def flat(roster: Roster, outlook: Outlook) -> Outlook:
    return replace(
        outlook,
        price_per_kwh=np.full_like(outlook.price_per_kwh, 0.1),
        dry_bulb_c=np.full_like(outlook.dry_bulb_c, 35.0),
    )


def test_the_price_gradient_of_a_cost_is_the_change_in_energy() -> None:
    """d(net cost)/d(price[t]) = change_kw[t] dt with the dispatch held: nothing in the dispatch reads prices."""
    base = made_ground()
    raised = base.outlook.price_per_kwh.copy()
    raised[:, 50] += 0.01
    dearer = replace(base, outlook=replace(base.outlook, price_per_kwh=raised))
    one, two = made_quotes().quotes, quote(dearer, made_terms(6)).quotes
    kept = one.end_lack_kwh_th == 0.0
    np.testing.assert_allclose(
        (two.net_cost - one.net_cost)[kept], 0.01 * one.change_kw[kept, 50] * 0.25, atol=1e-9
    )
    assert np.abs(one.change_kw[kept, 50]).max() > 0.0


def test_at_flat_prices_one_cop_and_no_losses_a_shed_costs_nothing() -> None:
    """What is not made now is made later at the same COP and price: no loss, drift, auxiliaries, fee or demand."""
    roster = made_roster(
        (4,), aux=0.0, call_fee=0.0, demand_price_per_kw=0.0, no_unmet=True, stage_up_fraction=0.9
    )
    object.__setattr__(roster.chillers, "kind", np.full((1, 3), CHILLER_KINDS.index("air_cooled_screw")))
    object.__setattr__(roster.tanks, "loss_fraction_per_h", np.zeros((1, 2)))
    outlook = flat(roster, made_outlook(roster))
    quotes = quote(ground(roster, outlook, made_standing(roster, 0.6)), made_terms(1)).quotes
    assert len(quotes.site) > 10
    gross = np.abs(quotes.change_kw).sum(axis=1) * 0.25 * 0.1
    assert gross.min() > 1.0
    assert quotes.unmet_kwh_th.max() == 0.0
    np.testing.assert_allclose(quotes.net_cost / gross, 0.0, atol=1e-9)


def test_permuted_sites_give_permuted_quotes() -> None:
    order = (3, 0, 5, 2, 4, 1)
    roster = made_roster(order)
    other = quote(ground(roster, made_outlook(roster), made_standing(roster)), made_terms(6)).quotes
    mine = made_quotes().quotes
    for place, row in enumerate(order):
        np.testing.assert_allclose(
            other.change_kw[other.site == place], mine.change_kw[mine.site == row], atol=1e-9
        )


def test_a_case_shifted_by_a_day_is_the_same() -> None:
    base = made_ground()
    clock = replace(base.outlook.clock, start=base.outlook.clock.start + np.timedelta64(1, "D"))
    moved = replace(base.outlook, clock=clock, local_day=base.outlook.local_day + 1)
    other = quote(ground(base.roster, moved, base.standing), made_terms(6)).quotes
    np.testing.assert_array_equal(other.change_kw, made_quotes().quotes.change_kw)


def test_answer_is_the_least_over_each_sites_candidates() -> None:
    quotes = made_quotes().quotes
    rng = np.random.default_rng(7)
    shed, change = rng.uniform(0, 0.2, (6, 12)), rng.uniform(0, 0.01, (6, 140))
    told: Answer = quotes.answer(shed, change)
    for row in range(6):
        values = [
            quotes.net_cost[c] - shed[row] @ quotes.expected_kw[c] + change[row] @ quotes.change_kw[c]
            for c in np.flatnonzero(quotes.site == row)
        ]
        best = min([0.0, *values])
        assert told.value[row] == pytest.approx(best, abs=1e-9)
        assert (told.candidate[row] >= 0) == (best < 0.0)
    called = int(np.flatnonzero(told.candidate >= 0)[0])
    full = quotes.expand(called, int(told.candidate[called]))
    assert full.net_cost == pytest.approx(sum(full.cost.values()))


@pytest.mark.parametrize("copies", [10, 1000])
def test_loops_are_not_called_more_often_for_more_sites(copies: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """A Python loop over sites would show here: rows are looped over in compiled code only, all of them at once."""
    calls = {"whole": 0, "tried": 0}

    def counted(name: str, function: object) -> object:
        def wrapped(*given: object) -> object:
            calls[name] += 1
            return function(*given)  # type: ignore[operator]

        return wrapped

    monkeypatch.setattr(plant, "_keep", counted("whole", plant._keep))
    monkeypatch.setattr(trial, "_run", counted("tried", trial._run))
    roster = made_roster(tuple([4] * copies))
    outlook = made_outlook(roster, hours=6.0)
    base = ground(roster, outlook, made_standing(roster))
    quoted = quote(base, made_terms(copies, minimum_intervals=np.full(copies, 10)))
    assert quoted.quotes.site_count == copies
    # The usual case from two inventories, a part of the sites a processor; candidates through event and rest, twice.
    assert calls == {"whole": 2 * cores(), "tried": 4}


def test_the_same_quotes_from_many_small_blocks_as_from_one(monkeypatch: pytest.MonkeyPatch) -> None:
    base = made_ground()
    whole = quote(base, made_terms(6)).quotes
    monkeypatch.setattr(quoting, "ROWS_AT_ONCE", 50)
    parts = quote(base, made_terms(6)).quotes
    assert len(whole.site) > 100
    for name in ("site", "quote_id", "expected_kw", "change_kw", "cost", "limited_by", "site_limited_by"):
        np.testing.assert_array_equal(getattr(parts, name), getattr(whole, name))
