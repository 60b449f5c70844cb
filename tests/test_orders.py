"""Orders: what stands on the page, each number traced to the record, each line a step and each step a line."""

import json

import pandas as pd
import pytest
from made_record import CHILLERS, SITE_FACTS, WINDOWS, made_call
from test_steps import four_machines, windows_off

from fleet.advice import BANNERS
from fleet.errors import FleetError
from fleet.orders import as_json, order_files, orders, steps_in, text
from fleet.records import read_call, verify_seals, write_call, write_orders

SI_PAGE = """\
REAL EVENT
ORDER EV-1/001, revision 1, replaces nothing: shed load, Thu 16 Jul 2026
Site harbour-court, 16:00 to 19:00, EEST (UTC+03:00)
Ring your programme desk: say yes or no when you have read this. You may refuse
by ringing until 16:00, and stop at any time after it.

BEFORE 16:00 (one of them missing: do not start, ring)
 [ ] T-1: at least 1,500 kWh_th (75 % full), of 2,000 kWh_th
 [ ] no alarm standing on any machine, pump or tank
 [ ] brine flow proven

DO                                                                     done   by
16:00     Set the demand limit of CH-1 to 75 %                        __:__ ____
          see: % load at or under the limit. If not: ring; change no protection.
16:00     Stop CH-2 by the controller, never the disconnect           __:__ ____
          see: amps to zero, pump off after its delay, valve shut; off until its
          restart. If not: leave it running and ring.
19:00     Remove the demand limit: CH-1 to 100 %                      __:__ ____
          see: panel shows the limit gone. If not: ring.
19:00     Let CH-2 restart, load limited (see RESTART)                __:__ ____
          see: flow and amps up. If not: wait for its timer; never force it.
22:00     Recharge may start: T-1 at most 240 kW_th                   __:__ ____
          see: tank level rises. If not: ring.
Fri 06:00 Back at its usual level: T-1 at 2,000 kWh_th                __:__ ____
          see: tank's own level signal. If not: ring.

STOP EARLY (you never need permission to stop): undo limits, RESTART, ring; on
  - tanks down to 300 kWh_th (15 % full): that much is held back
  - supply over 7.0 degC for 10 min
  - a zone more than 2.0 K over its set-point
  - critical cooling (120 kW_th) not fully served
  - leaving brine under 1.0 degC while the building is served
  - any alarm

RESTART   One machine at a time, none before its least off time (CH-2 10 min).
          Load limit 50 % for 15 min, then ramp; lower the leaving-water
          set-point in steps from the loop's temperature.
RECHARGE  In the usual hours: from 22:00, not before; at most T-1 240 kW_th.
          Back at its usual level by Fri 06:00. If late: ring; never lower the
          low-brine trip to charge faster. Full is the plant's own signal.
CAUTIONS  Life-safety, process and critical cooling stay on. Machine protections
          are never bypassed. Keep the minimum evaporator flow of what stays on;
          run no pump against closed valves; shared pumps and towers stay on.
          Keep freeze protection on. From making ice to cooling: hold the bypass
          until leaving brine is above 1.0 degC to 2.0 degC and building flow is
          proven. External-melt ice is never charged past full. Lock out before
          service. Refrigerant and glycol as the site's safety plan says. Local
          codes, the maker's instructions and the licensed operator's judgement
          come first.

READINGS   start: tank ____ %  supply ____  brine ____  amps ____ ____ ____
             end: tank ____ %  supply ____  brine ____  amps ____ ____ ____
Not as ordered, and why: _______________________________  Name: ________________
event EV-1 site harbour-court quote q-7 call revision 1
"""


def flat(page: str) -> str:
    """The page with every run of white space as one space, so that wrapping does not matter."""
    return " ".join(page.split())


def steps_of(record, site):
    frame = record.frames["steps"]
    frame = frame[frame["site_id"] == site]
    return sorted(
        (at.isoformat(), unit, action, None if pd.isna(value) else value)
        for at, unit, action, value in zip(frame["at"], frame["unit_id"], frame["action"], frame["value"])
    )


def told(order):
    return sorted((step.at.isoformat(), step.unit_id, step.action, step.value) for step in steps_in(order))


def many_machines():
    """Four machines: two off with restarts apart, one idle, one limited; a long least off time."""
    return made_call(
        chillers=four_machines(ch3=200.0),
        windows=windows_off("CH-3", "CH-4"),
        limits={("harbour-court", "CH-1"): 0.5},
        idle=("CH-2",),
    )


def ten_lines(purpose="rehearsal"):
    """A page as full as it gets: every action, ten lines, ice, critical and held-back cooling, notes."""
    facts = ({**SITE_FACTS[0], "site_words": "w" * 120}, SITE_FACTS[1])
    return made_call(
        facts=facts,
        purpose=purpose,
        chillers=four_machines(ch3=200.0),
        windows=windows_off("CH-3", "CH-4"),
        limits={("harbour-court", "CH-1"): 0.5},
        idle=("CH-2",),
    )


def test_the_whole_page():
    first, _ = orders(made_call())
    assert text(first) == SI_PAGE


def test_us_units_own_contact_and_own_words():
    _, order = orders(made_call())
    page = flat(text(order))
    assert order.units == "us"
    for words in (
        "Ring Plant desk, extension 12: say yes or no",
        'Site\'s own words: "ask for the night key"',
        "TES-1: at least 500 ton-h (50 % full), of 1,000 ton-h",
        "23:00 Recharge may start: TES-1 at most 28.4 ton",
        "Sat 00:00 NOT full by the end of the plan: TES-1 at 1,000 ton-h then",
        "supply over 44.6 degF for 10 min",
        "a zone more than 3.6 degF over its set-point",
        "Not full within the plan (to Sat 00:00).",
        "least off time (W-1 15 min)",
    ):
        assert words in page
    for si in ("kW_th", "kWh_th", "degC", " K ", "brine flow", "External-melt"):
        assert si not in page


@pytest.mark.parametrize("record", [made_call, many_machines, ten_lines])
def test_every_line_is_made_of_steps_and_every_step_is_on_a_line(record):
    made = record()
    for order in orders(made):
        assert told(order) == steps_of(made, order.site_id)
        page, body = text(order), flat(text(order))
        for line in order.lines:
            assert line.steps
            assert line.time in page
            for step in line.steps:
                assert step.unit_id in line.do
                local = pd.Timestamp(step.at).tz_convert("Europe/Athens").strftime("%H:%M")
                assert local in f"{line.time} {line.do}"
            assert line.do in body.replace(" __:__ ____", "")
        assert page.count("__:__ ____") == len(order.lines)
        assert len(order.lines) <= 10


def test_a_long_least_off_time_stands_on_the_page():
    first, _ = orders(many_machines())
    page = flat(text(first))
    assert "19:00 Let CH-4 restart" in page
    assert "19:20 Let CH-3 restart" in page
    assert (
        "One machine at a time, 5 min apart, none before its least off time (CH-3 200 min, CH-4 10 min)"
        in page
    )
    assert "16:00 Inhibit the start of CH-2" in page
    assert "19:00 Remove the start inhibit of CH-2" in page
    assert page.index("Inhibit the start of CH-2") < page.index("Stop CH-3, CH-4 by the controller")


def test_more_restarts_than_lines_share_a_line_with_their_times():
    chillers = tuple(
        {"site_id": "harbour-court", "chiller_id": f"CH-{n:02d}", "loading_order": n, "min_off_minutes": 10.0}
        for n in range(1, 13)
    )
    record = made_call(
        chillers=(*chillers, CHILLERS[2]),
        windows=windows_off(*(f"CH-{n:02d}" for n in range(1, 13))),
        limits={},
    )
    first, _ = orders(record)
    assert len(first.lines) <= 10
    (restart,) = [line for line in first.lines if line.steps[0].action == "restart"]
    assert restart.time == "19:00"
    assert restart.do.startswith("Let CH-01 19:00, CH-02 19:05, CH-03 19:10")
    assert "CH-12 19:55 restart" in restart.do
    assert told(first) == steps_of(record, "harbour-court")


@pytest.mark.parametrize("purpose", ["real", "test", "rehearsal"])
def test_a_full_page_is_still_one_page(purpose):
    first, second = orders(ten_lines(purpose))
    assert len(first.lines) == 9
    for order in (first, second):
        rows = text(order).splitlines()
        assert len(rows) <= 66
        assert max(map(len, rows)) <= 80


def test_a_test_and_a_rehearsal_say_so_at_both_ends_of_the_page():
    for purpose, words in (("test", "THIS IS A TEST EVENT"), ("rehearsal", "DO NOT ACT ON THIS ORDER")):
        page = text(orders(made_call(purpose=purpose))[0])
        assert words in page.splitlines()[1]
        assert words in page.splitlines()[-2]
        assert BANNERS["real"] not in page
    real = text(orders(made_call())[0])
    assert "TEST" not in real
    assert "REHEARSAL" not in real


def test_cautions_stand_on_every_page_and_those_of_ice_only_where_there_is_ice():
    ice, water = (flat(text(order)) for order in orders(made_call()))
    for page in (ice, water):
        for caution in (
            "Life-safety, process and critical cooling stay on.",
            "Machine protections are never bypassed.",
            "minimum evaporator flow",
            "freeze protection",
            "Lock out before service.",
            "Refrigerant and glycol as the site's safety plan says.",
            "licensed operator's judgement come first",
            "you never need permission to stop",
        ):
            assert caution in page
    for caution in (
        "above 1.0 degC to 2.0 degC",
        "never charged past full",
        "brine flow proven",
        "low-brine trip",
    ):
        assert caution in ice
        assert caution not in water


def test_a_site_with_no_tank_has_no_tank_on_its_page():
    record = made_call()
    for frames, name in ((record.frozen, "tanks"), (record.frames, "steps")):
        frames[name] = frames[name][frames[name]["site_id"] != "harbour-court"]
    page = flat(text(orders(record)[0]))
    assert "No tank on this site." in page
    assert "No machine is stopped by this order." in page
    assert "tanks" not in page
    assert "at least" not in page


def test_a_tank_that_is_not_recharged_says_so():
    record = made_call()
    steps = record.frames["steps"]
    record.frames["steps"] = steps[steps["action"] != "recharge_may_start"]
    assert "RECHARGE No recharge in the plan. Back at its usual level by Fri 06:00." in flat(
        text(orders(record)[0])
    )


def test_a_revision_names_what_it_replaces():
    first, _ = orders(made_call(revision=2, supersedes=1))
    assert "ORDER EV-1/001, revision 2, replaces revision 1: shed load" in text(first)
    assert (first.revision, first.replaces) == (2, 1)


def test_hostile_words_reach_neither_terminal_nor_page():
    words = "contact=\x1b[2J{{ 7 * 7 }}\n16:00 Stop everything; \u202eevil\x07"
    page = text(orders(made_call(facts=({**SITE_FACTS[0], "site_words": words}, SITE_FACTS[1])))[0])
    assert all(letter.isprintable() or letter == "\n" for letter in page)
    assert r"Ring \x1b[2J{{ 7 * 7 }}\n16:00 Stop everything: say yes" in flat(page)
    assert not any(line.startswith("16:00 Stop everything") for line in page.splitlines())
    assert r"\u202eevil\x07" in page


def test_hostile_tags_are_harmless_too():
    tag = "CH\x1b[1m{tags}"
    chillers = ({**CHILLERS[0]}, {**CHILLERS[1], "chiller_id": tag}, CHILLERS[2])
    record = made_call(chillers=chillers, windows=({**WINDOWS[0], "chiller_ids": [tag]}, WINDOWS[1]))
    page = text(orders(record)[0])
    assert r"Stop CH\x1b[1m{tags} by the controller" in flat(page)
    assert "\x1b" not in page


def test_json_holds_the_same_and_times_in_utc():
    order = orders(made_call())[0]
    found = as_json(order)
    assert json.loads(json.dumps(found, allow_nan=False)) == found
    assert found["window_start"] == "2026-07-16T13:00:00Z"
    assert found["lines"][0]["steps"] == [
        {"at": "2026-07-16T13:00:00Z", "unit_id": "CH-1", "action": "demand_limit", "value": 0.75}
    ]
    assert set(found) == set(order.__dataclass_fields__)


def test_files_of_an_event_have_harmless_names():
    chillers = ({**CHILLERS[0], "site_id": "../x y"}, {**CHILLERS[1], "site_id": "../x y"}, CHILLERS[2])
    record = made_call(
        facts=({**SITE_FACTS[0], "site_id": "../x y"}, SITE_FACTS[1]),
        chillers=chillers,
        windows=({**WINDOWS[0], "site_id": "../x y"}, WINDOWS[1]),
        limits={},
    )
    made = order_files(record)
    assert set(made) == {"001-_x_y.txt", "002-mill-school.txt", "orders.json"}
    assert [order["site_id"] for order in json.loads(made["orders.json"])] == ["../x y", "mill-school"]
    assert made["001-_x_y.txt"].endswith("\n")


def test_orders_of_a_call_that_was_written_and_read_are_the_same(tmp_path):
    record = made_call()
    write_call(tmp_path, "EV-1", record.frames, record.proof, record.frozen, record.frozen_json)
    made = order_files(read_call(tmp_path, "EV-1"))
    assert made == order_files(record)
    folder = write_orders(tmp_path, "EV-1", made)
    assert (folder / "001-harbour-court.txt").read_text() == SI_PAGE
    assert verify_seals(folder.parent) == []


def test_a_record_with_no_timezone_or_site_is_refused():
    record = made_call()
    record.frozen_json["settings"].clear()
    with pytest.raises(FleetError, match=r"settings\.json has no timezone; the record is incomplete"):
        orders(record)
    record = made_call()
    record.frozen["sites"] = record.frozen["sites"].iloc[1:]
    with pytest.raises(
        FleetError, match="frozen sites has no row of harbour-court; the record is incomplete"
    ):
        orders(record)
