"""Which recoveries a call offers, and that a feeder's limit moves the recharge and not the shed."""

from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from commands import ASK, run
from fleet_folders import TEXTS, small_tables, write_small_fleet
from test_allocate import Case, hand_quotes
from test_audit import faults_of_call
from test_quote import made_ground, made_terms

from fleet.desk import Ask, survey
from fleet.errors import FleetError
from fleet.recharge import could_meet_a_limit, named
from fleet.records import CallRecord, read_call
from sites.direction import Direction
from sites.quote import quote, together
from sites.recovery import RECOVERIES

FULL_EVENING_KW = 2200.0
"""Other load under node north from 22:00 to 24:00 local: with what its two buildings draw usually, over the limit."""


def full_evening() -> dict[str, object]:
    times = pd.to_datetime(pd.Series(TEXTS))
    late = times.between(pd.Timestamp("2026-07-14T19:00Z"), pd.Timestamp("2026-07-14T21:00Z"), "left")
    return {"other_kw": small_tables()["node_loads"]["other_kw"].where(~late, FULL_EVENING_KW).to_numpy()}


@pytest.fixture(scope="module")
def fleet(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The small fleet with its feeder full in the evening: free/A is called before, A with the full feeder."""
    home = tmp_path_factory.mktemp("recharge")
    write_small_fleet(home / "free")
    write_small_fleet(home / "full", node_loads=full_evening())
    for name in ("free", "full"):
        ran = run("call", home / name, "--kw", 100, *ASK, "--event", "A")
        assert ran.code == 0, ran.err
    return home


def call(path: Path) -> CallRecord:
    return read_call(path, "A")


def test_a_feeders_limit_moves_the_recharge_and_not_the_shed(fleet: Path) -> None:
    free, full = call(fleet / "free").frames, call(fleet / "full").frames
    one, other = (frames["windows"].iloc[0] for frames in (free, full))
    assert (len(free["windows"]), len(full["windows"])) == (1, 1)
    for name in ("site_id", "window_start", "window_end", "committed_kwh", "cost_during"):
        assert one[name] == other[name]
    assert list(one["chiller_ids"]) == list(other["chiller_ids"])
    assert (one["recovery"], other["recovery"]) == ("usual", "delayed")
    late = free["intervals"]["interval_start"].between(
        pd.Timestamp("2026-07-14T19:00Z"), pd.Timestamp("2026-07-14T21:00Z"), "left"
    )
    more = [(frames["intervals"]["event_kw"] - frames["intervals"]["usual_kw"]) for frames in (free, full)]
    assert more[0][late].min() > 50.0
    assert more[1][late].max() <= 1e-9
    assert more[1][full["intervals"]["interval_start"] >= pd.Timestamp("2026-07-14T21:00Z")].max() > 100.0
    assert other["end_lack_kwh_th"] == 0.0


def test_the_record_says_who_was_offered_what_and_holds(fleet: Path) -> None:
    free, full = call(fleet / "free"), call(fleet / "full")
    assert (free.proof["recoveries"], free.proof["recoveries_sites"]) == (["usual"], None)
    assert set(free.frames["quotes"]["recovery"]) == {"usual"}
    assert full.proof["recoveries"] == list(RECOVERIES)
    assert full.proof["recoveries_sites"] == ["harbour"]
    by_site = full.frames["quotes"].groupby("site_id")["recovery"].agg(set)
    assert by_site["library"] == {"usual"}
    assert {"usual", "now", "delayed"} <= by_site["harbour"]
    for name in ("free", "full"):
        ran = run("audit", fleet / name, "A")
        assert ran.code == 0, ran.out


def test_who_was_offered_what_is_held_against_the_quotes(fleet: Path) -> None:
    full = call(fleet / "full")
    for sites in ([], ["library"], None):
        told = faults_of_call(replace(full, proof={**full.proof, "recoveries_sites": sites}))
        assert "candidates tried" in {fault.rule for fault in told}
        assert ("recovery" in {fault.rule for fault in told}) == (sites is not None)


def test_the_usual_recovery_alone_cannot_give_it(fleet: Path, tmp_path: Path) -> None:
    write_small_fleet(tmp_path / "fleet", node_loads=full_evening())
    ran = run("call", tmp_path / "fleet", "--kw", 100, *ASK, "--event", "A", "--recovery", "usual")
    assert ran.code == 3
    assert "if feeder limits did not bind" in ran.err
    assert not (tmp_path / "fleet" / "events").exists()


def test_the_order_says_when_and_the_call_that_the_limit_is_below_usual(fleet: Path, tmp_path: Path) -> None:
    assert run("orders", fleet / "full", "A").code == 0
    page = next((fleet / "full" / "events" / "A" / "orders-001").glob("*.txt")).read_text()
    assert (
        "RECHARGE What the event took is put back in the usual charging hours, but not in the first two of them; "
        "charging of the usual plan stays as it is. First charging 22:00, not before; at most ICE-1 "
    ) in " ".join(page.split())
    note = (
        "note: node north is over its limit of 2,500 kW before anything is called, by up to 65.9 kW in 6 intervals; "
        "held to no worse than usual there"
    )
    arguments = (*ASK, "--recovery", "usual", "--recovery", "night")
    free = write_small_fleet(tmp_path / "fleet", node_loads=full_evening())
    assert note in run("quote", free, *arguments).out.splitlines()
    called = run("call", free, "--kw", 100, *arguments, "--event", "A", "--accept-less")
    assert note in called.out.splitlines()
    assert call(free).proof["recoveries"] == ["usual", "night"]
    assert call(free).proof["recoveries_sites"] is None
    assert run("audit", free, "A").code == 0
    page = run("pages", free, *ASK)
    assert page.code == 0, page.err
    assert note.removeprefix("note: ") in (free / "pages" / "offer.html").read_text()


def test_prices_of_zero_and_below_are_taken_and_told(tmp_path: Path) -> None:
    tariffs = small_tables()["tariffs"]
    price = tariffs["price_per_kwh"].to_numpy(copy=True)
    at = pd.to_datetime(tariffs["interval_start"])
    price[at == pd.Timestamp("2026-07-14T13:00Z")] = -0.02
    price[at == pd.Timestamp("2026-07-15T09:00Z")] = 0.0
    home = write_small_fleet(tmp_path / "fleet", tariffs={"price_per_kwh": price})
    notes = {
        "note: energy prices below zero at 3 of 3 sites, first at 2026-07-14 16:00 +03:00: taken as they are",
        "note: energy prices of zero at 3 of 3 sites, first at 2026-07-15 12:00 +03:00: taken as they are",
    }
    assert notes <= set(run("quote", home, *ASK).out.splitlines())
    called = run("call", home, "--kw", 100, *ASK, "--event", "A", "--within", 0.001)
    assert called.code == 0, called.err
    assert notes <= set(called.out.splitlines())
    assert run("audit", home, "A").code == 0


def test_words_of_the_option() -> None:
    assert named([]) == ()
    assert named(["every"]) == RECOVERIES
    assert named(["night", "usual"]) == ("usual", "night")
    with pytest.raises(FleetError) as caught:
        named(["nite", "usual", ""])
    assert str(caught.value) == (
        "--recovery: came 'nite', ''; expected usual, now, delayed, night, midday, capped or every; leave it out for "
        "what limits call for"
    )


def three_sites(late_kw: list[float], demand: float = 0.0) -> Case:
    """Three sites of 10 kW in one event interval and of late_kw in one after it; demand charge of the first."""
    quotes = hand_quotes([10.0, 10.0, 10.0], [1.0, 2.0, 3.0])
    change = np.stack([np.full(3, -10.0), np.array(late_kw)], axis=1)
    cost = quotes.cost.copy()
    cost[0, 3] = demand
    window = np.zeros(3, dtype=np.int64), np.ones(3, dtype=np.int64)
    return Case(
        replace(
            quotes,
            change_kw=change,
            event_from=0,
            event_to=1,
            window_start=window[0],
            window_end=window[1],
            cost=cost,
        ),
        kw=10.0,
    )


def test_which_sites_could_meet_a_limit_by_hand() -> None:
    """8 + 7 kW and one site that draws nothing later, all below one node: 15 kW of room are enough, 14 are not."""
    case = three_sites([8.0, 7.0, 0.0])
    room = np.full_like(case.headroom, np.inf)
    top = int(np.flatnonzero(case.feeders.below.all(axis=1))[0])
    for kw, met in ((15.0, [False] * 3), (14.0, [True, True, False])):
        room[top] = kw
        assert could_meet_a_limit(case.quotes, case.feeders, room).tolist() == met
    room[top, 1], room[top, 0] = np.inf, 0.0
    assert not could_meet_a_limit(case.quotes, case.feeders, room).any()
    free = np.full_like(room, np.inf)
    charged = three_sites([8.0, 7.0, 0.0], demand=4.0)
    assert could_meet_a_limit(charged.quotes, case.feeders, free).tolist() == [True, False, False]
    absorb = replace(charged.quotes, direction=Direction.ABSORB)
    assert not could_meet_a_limit(absorb, case.feeders, free).any()


@cache
def halves() -> tuple[object, object]:
    terms = made_terms(6, earliest=np.full(6, 14))
    return quote(made_ground(), terms), quote(
        made_ground(), replace(terms, recoveries=("night", "capped"), allowed=np.arange(6) % 2 == 0)
    )


def test_quotes_together_are_those_of_one_run() -> None:
    """Quoted apart and put together, or at once with `varied`: the same candidates but for the numbers in their ids."""
    one, other = halves()
    both = together(one, other)
    varied = np.arange(6) % 2 == 0
    terms = made_terms(6, earliest=np.full(6, 14), recoveries=("usual", "night", "capped"), varied=varied)
    whole = quote(made_ground(), terms)
    assert both.tried == whole.tried
    assert set(whole.quotes.site[whole.recovery > 0]) <= set(np.flatnonzero(varied))

    def sorted_rows(quoted):
        quotes = quoted.quotes
        limits = quotes.stages.load_limit_fraction[:, 0].sum(axis=1)
        order = np.lexsort(
            [
                quoted.recovery,
                quoted.load_limit_fraction,
                limits,
                quotes.window_end,
                quotes.window_start,
                quotes.site,
            ]
        )
        return quotes.site[order], quoted.recovery[order], quotes.change_kw[order], quotes.cost[order]

    for left, right in zip(sorted_rows(both), sorted_rows(whole), strict=True):
        np.testing.assert_array_equal(left, right)
    assert (np.diff(both.quotes.site) >= 0).all()
    assert len(set(both.quotes.quote_id)) == len(both.quotes.quote_id)


def test_a_recovery_that_does_not_bring_the_tank_back_is_none(fleet: Path) -> None:
    """Around the next midday harbour's machines have nothing to spare: that recovery is not offered."""
    quotes = call(fleet / "full").frames["quotes"]
    assert "midday" not in set(quotes["recovery"])
    tried = quote(made_ground(), made_terms(6, earliest=np.full(6, 14), recoveries=RECOVERIES))
    assert (tried.full_again[tried.recovery > 0] >= 0).all()
    assert (tried.recovery > 0).sum() > 100


def usual_of_harbour(home: Path, at: str, start: str, end: str) -> pd.DataFrame:
    """Usual kW and inventory of harbour as a survey sees them, by interval."""
    times = (np.datetime64(time, "us") for time in (at, start, end))
    seen = survey(home, Ask(None, Direction.SHED, *times))
    place = int(np.flatnonzero(seen.fleet.roster.buildings.site_id == "harbour")[0])
    usual = seen.quoted.ground.usual
    return pd.DataFrame(
        {
            "interval_start": pd.DatetimeIndex(seen.quoted.quotes.clock.starts).tz_localize("UTC"),
            "kw": usual.power_kw[place],
            "charge": usual.charge_kw_th[place].sum(axis=0),
            "held": usual.inventory_kwh_th[place].sum(axis=0),
        }
    )


def test_a_later_call_sees_the_recovery_of_one_in_force(fleet: Path) -> None:
    """Before the window of the call in force the usual case of its site is that call's event case, to the kW."""
    seen = usual_of_harbour(fleet / "full", "2026-07-14T10:00", "2026-07-14T15:00", "2026-07-14T16:00")
    record = call(fleet / "full").frames["intervals"]
    both = seen.merge(record[record["site_id"] == "harbour"], on="interval_start")
    assert len(both) == len(record)
    np.testing.assert_allclose(both["kw"], both["event_kw"], atol=1e-6)
    np.testing.assert_allclose(both["held"], both["inventory_kwh_th"], atol=1e-6)


def test_and_sees_it_from_the_middle_of_the_window(fleet: Path) -> None:
    """Half an hour into the window the tank is still to be left alone for the first two charging hours."""
    seen = usual_of_harbour(fleet / "full", "2026-07-14T13:30", "2026-07-14T15:00", "2026-07-14T16:00")
    record = call(fleet / "full").frames["intervals"]
    both = seen.merge(record[record["site_id"] == "harbour"], on="interval_start")
    late = both["interval_start"].between(
        pd.Timestamp("2026-07-14T19:00Z"), pd.Timestamp("2026-07-14T21:00Z"), "left"
    )
    assert (both["charge"] - both["charge_kw_th"])[late].abs().max() < 40.0
    rate = both.set_index("interval_start")["charge"]
    last, first = pd.Timestamp("2026-07-14T20:45Z"), pd.Timestamp("2026-07-14T21:00Z")
    assert rate[first] > 1.3 * rate[last]
    assert (rate[late.to_numpy()].diff().dropna() <= 0.0).all()
