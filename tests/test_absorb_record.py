"""An absorb's record: the audit holds on it, every rule has its counterpart, one changed number is named."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from audited import EVENT_ID, made_event
from test_audit import cells, change_call, change_settlement, faults_of_call, frozen

from fleet.audit import audit
from fleet.orders import orders, text
from fleet.records import CallRecord, SettlementRecord, read_call, read_settlement

COUNTERPARTS = {
    "minimum off time": "minimum on time",
    "no charging in the window": "charging in the window",
}
"""Rules of a shed that say nothing of an absorb, which stops no machine and charges, and what stands for them."""


@pytest.fixture(scope="module")
def home(tmp_path_factory: pytest.TempPathFactory) -> Path:
    made = tmp_path_factory.mktemp("absorbed")
    made_event(made, direction="absorb")
    return made


@pytest.fixture(scope="module")
def call(home: Path) -> CallRecord:
    return read_call(home, EVENT_ID)


@pytest.fixture(scope="module")
def settlements(home: Path) -> list[SettlementRecord]:
    return [read_settlement(home, EVENT_ID, revision) for revision in (1, 2)]


def test_the_record_holds_and_no_rule_is_skipped(home: Path, tmp_path: Path) -> None:
    found = audit(home, EVENT_ID)
    assert [str(fault) for fault in found.faults] == []
    assert {rule for rule, count in found.checked.items() if count == 0} == set()
    made_event(tmp_path)
    shed = set(audit(tmp_path, EVENT_ID).checked)
    assert shed - set(found.checked) == set(COUNTERPARTS)
    assert set(found.checked) - shed == set(COUNTERPARTS.values())


def test_the_event_calls_on_what_the_rules_are_about(call: CallRecord) -> None:
    windows, machines = call.frames["windows"], call.frames["machines"]
    assert len(windows) >= 3
    assert set(windows["recovery"]) == {"usual", "capped"}
    assert windows["chiller_ids"].map(len).max() == 0
    assert windows["net_cost"].max() < 0.0
    assert windows["recovery_energy_kwh"].max() < -100.0
    during = machines["interval_start"].between(
        windows["window_start"].min(), windows["window_end"].min(), inclusive="left"
    )
    assert machines.loc[during & machines["making_ice"], "charge_kw_th"].max() > 50.0
    assert machines.loc[during & ~machines["making_ice"], "charge_kw_th"].max() > 50.0


def test_signs_are_those_of_an_absorb(call: CallRecord) -> None:
    frame = call.frames["intervals"].merge(
        call.frames["windows"][["site_id", "window_start", "window_end"]], on="site_id"
    )
    start = frame["interval_start"]
    inside = (start >= frame["window_start"]) & (start < frame["window_end"])
    change = frame["event_kw"] - frame["usual_kw"]
    np.testing.assert_array_equal(frame["expected_kw"], change)
    np.testing.assert_array_equal(frame["committed_kw"], np.where(inside, np.maximum(change, 0.0), 0.0))
    assert frame.loc[inside, "committed_kw"].min() >= 1.0


@pytest.mark.parametrize(("of", "column"), cells("call")[3::12], ids=str)
def test_one_changed_number_of_a_call_is_named(call, of, column):
    change_call(call, of, column, seed=1)


@pytest.mark.parametrize(("of", "column"), cells("settlement")[4::12], ids=str)
def test_one_changed_number_of_a_settlement_is_named(call, settlements, of, column):
    change_settlement(call, settlements, of, column, seed=1)


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(2))
@pytest.mark.parametrize(("of", "column"), cells("call"), ids=str)
def test_every_number_of_a_call_is_pinned(call, of, column, seed):
    change_call(call, of, column, seed)


@pytest.mark.slow
@pytest.mark.parametrize(("of", "column"), cells("settlement"), ids=str)
def test_every_number_of_a_settlement_is_pinned(call, settlements, of, column):
    change_settlement(call, settlements, of, column, seed=0)


@pytest.mark.parametrize(
    ("table", "column", "value", "rule"),
    [
        ("chillers", "min_on_minutes", 200.0, "minimum on time"),
        ("chillers", "starts_left", 0, "starts left"),
        ("chillers", "capacity_kw_th", 60.0, "machine capability"),
        ("chillers", "makes_ice", False, "charging in the window"),
        ("tanks", "capacity_kwh_th", 800.0, "tank within capacity"),
        ("tanks", "charge_limit_kw_th", 5.0, "charge within its limit"),
        ("tanks", "charge_limit_kw_th", 5.0, "charging in the window"),
        ("sites", "notice_minutes", 200.0, "notice"),
        ("nodes", "import_limit_kw", 900.0, "frozen network"),
    ],
)
def test_a_limit_that_was_lower_is_seen_to_be_broken(call, table, column, value, rule):
    assert rule in {fault.rule for fault in faults_of_call(frozen(call, table, column, value))}


def test_a_tank_charged_less_than_it_could_be_is_named(call: CallRecord) -> None:
    """Not only too much is seen: an absorb whose window charges nothing is no absorb."""
    frame = call.frames["intervals"].copy()
    start = call.frames["windows"]["window_start"].iloc[0]
    row = int(np.flatnonzero((frame["interval_start"] == start) & (frame["charge_kw_th"] > 50.0))[0])
    frame.loc[row, "charge_kw_th"] = 0.0
    record = replace(call, frames={**call.frames, "intervals": frame})
    told = [fault for fault in faults_of_call(record) if fault.rule == "charging in the window"]
    assert [(fault.row, fault.found) for fault in told] == [(row, "0")]


def test_another_recovery_than_the_quotes_is_named(call: CallRecord) -> None:
    windows = call.frames["windows"].copy()
    row = int(np.flatnonzero(windows["recovery"] == "capped")[0])
    windows.loc[row, "recovery"] = "usual"
    told = faults_of_call(replace(call, frames={**call.frames, "windows": windows}))
    assert ("window of its quote", row, "recovery") in {(f.rule, f.row, f.column) for f in told}


def test_a_recovery_that_was_not_offered_and_one_of_another_name_are_named(call: CallRecord) -> None:
    quotes = call.frames["quotes"].copy()
    first = int(np.flatnonzero(quotes["recovery"] == "night")[0])
    quotes.loc[first, "recovery"] = "midday"
    told = faults_of_call(replace(call, frames={**call.frames, "quotes": quotes}))
    assert {(f.rule, f.row, f.column) for f in told if f.rule == "recovery"} == {
        ("recovery", first, "recovery"),
        ("recovery", first, "quote_id"),
    }
    fewer = {**call.proof, "recoveries": ["usual"]}
    told = faults_of_call(replace(call, proof=fewer))
    assert {"recovery", "candidates tried"} <= {fault.rule for fault in told}


def test_charging_outside_the_recoverys_hours_is_named(call: CallRecord) -> None:
    """18:45 of the second day is no charging hour of the ice plants (22:00 to 07:00)."""
    assert call.frames["windows"]["recovery"].iloc[0] == "usual"
    intervals = call.frames["intervals"].copy()
    own = intervals["site_id"] == call.frames["windows"]["site_id"].iloc[0]
    row = int(np.flatnonzero(own)[-21])
    assert f"{intervals['interval_start'].iloc[row]:%H:%M}" == "18:45"
    intervals.loc[row, "charge_kw_th"] = 50.0
    told = faults_of_call(replace(call, frames={**call.frames, "intervals": intervals}))
    assert [(f.row, f.column) for f in told if f.rule == "recovery hours"] == [(row, "charge_kw_th")]


WATER_PAGE = """\
REAL EVENT
ORDER EV-1/003, revision 1, replaces nothing: take up load, Wed 15 Jul 2026
Site S04, 16:00 to 18:45, UTC (UTC+00:00)
Ring your programme desk: say yes or no when you have read this. You may refuse
by ringing until 16:00, and stop at any time after it.

BEFORE 16:00 (one of them missing: do not start, ring)
 [ ] T1: at most 1,154 kWh_th (33 % full), of 3,500 kWh_th
 [ ] the tank's own full signal works
 [ ] no alarm standing on any machine, pump or tank
 [ ] water flow through the tank proven

DO                                                                     done   by
16:00     Start charging: CH1 up to 342 kW_th into the tank           __:__ ____
          see: flow through the tank, % load up, levels as in usual charging. If
          not: wait for its timer, never force it; ring.
16:00     Chillers carry the building first; charge T1 to about       __:__ ____
          1,751 kWh_th at the end
          see: tank level rises. At its full signal: stop charging, serve the
          building. If not: ring.
18:45     End this charging: T1 back to the usual plan                __:__ ____
          see: controller on its own schedule again. If not: ring.
Thu 23:45 Recharge may start: T1 at most 5.3 kW_th                    __:__ ____
          see: tank level rises. If not: ring.
Fri 00:00 Down at its usual level: T1 at 933 kWh_th                   __:__ ____
          see: tank's own level signal. If not: ring.

STOP EARLY (you never need permission to stop): end the charging, undo limits,
           ring; on
  - the tank's own full signal: charging ends, the building is served on
  - the building's meter over 294 kW for 15 min
  - supply over 7.0 degC for 10 min
  - a zone more than 2.0 K over its set-point
  - critical cooling (40.0 kW_th) not fully served
  - any alarm

START     One machine at a time, none before its least off time is over or with
          no start left. Load limit 50 % for 15 min, then ramp.
AFTER     Usual plan again from 18:45; no charging before Thu 23:45, then at any
          hour, but with the building's meter under 294 kW, at most T1 5.3
          kW_th. The tank starts fuller, so less is charged than usual. Full
          early: stop charging and ring; never past full.
CAUTIONS  Life-safety, process and critical cooling stay on. Machine protections
          are never bypassed. Keep the minimum evaporator flow of what stays on;
          run no pump against closed valves; shared pumps and towers stay on.
          Keep freeze protection on. Lock out before service. Refrigerant and
          glycol as the site's safety plan says. Local codes, the maker's
          instructions and the licensed operator's judgement come first.

READINGS   start: tank ____ %  supply ____  brine ____  amps ____ ____ ____
             end: tank ____ %  supply ____  brine ____  amps ____ ____ ____
Not as ordered, and why: _______________________________  Name: ________________
event EV-1 site S04 quote S04.0066-capped call revision 1
"""
ICE_SAYS = (
    "[ ] T1, T2: at most 641 kWh_th (26 % full), of 2,500 kWh_th",
    "[ ] brine flow proven, freeze protection on",
    "16:00 Start charging: CH1 up to 184 kW_th, CH2 up to 147 kW_th",
    "At its full signal: stop charging, serve the building.",
    "19:00 End this charging: T1, T2 back to the usual plan",
    "(you never need permission to stop): end the charging, undo limits, ring; on",
    "- the building's meter over 336 kW for 15 min",
    "- water to the building under 1.0 degC",
    "no charging before 22:00, then in the usual hours, at most T1 225 kW_th, T2 225 kW_th.",
    "never past full, and never lower the low-brine trip to charge faster.",
    "External-melt ice is never charged past full.",
)


def test_the_page_of_a_chilled_water_plant(call: CallRecord) -> None:
    assert text(orders(call)[2]) == WATER_PAGE
    usual, bills = call.frames["usual"], call.frozen["bills"]
    own = usual[usual["site_id"] == "S04"]
    peak = max((own["usual_kw"] + own["rest_kw"]).max(), bills.set_index("site_id")["billed_peak_kw"]["S04"])
    assert int(peak) == 294


def test_the_page_of_an_ice_plant(call: CallRecord) -> None:
    page = text(orders(call)[1])
    assert [said for said in ICE_SAYS if said not in " ".join(page.replace("__:__ ____", "").split())] == []
    assert max(map(len, page.splitlines())) <= 80


def test_no_order_tells_to_pass_by_a_protection(call: CallRecord) -> None:
    """Words of forcing stand on a page only behind "never" or "no"."""
    for order in orders(call):
        page = " ".join(text(order).split())
        for word in ("bypassed", "force", "lower the low-brine", "past full"):
            for before in page.split(word)[:-1]:
                assert before.split()[-2:] and {"never", "no"} & set(before.split()[-3:]), (
                    word,
                    before[-40:],
                )


def test_the_highest_kw_is_the_plans_or_the_bills(call: CallRecord) -> None:
    """The page of S04 names the larger of its billed 294 kW (0.42 x 700) and the plan's own highest."""
    rows = call.frames["intervals"].merge(call.frames["windows"][["site_id", "window_end"]], on="site_id")
    own = rows[(rows["site_id"] == "S04") & (rows["interval_start"] < rows["window_end"])]
    assert (own["event_kw"] + own["rest_kw"]).max() < 294.0
    ice = rows[(rows["site_id"] == "S03") & (rows["interval_start"] < rows["window_end"])]
    assert (ice["event_kw"] + ice["rest_kw"]).max() < 0.42 * 800.0
    high = call.frozen["bills"].assign(billed_peak_kw=0.0)
    lower = replace(call, frozen={**call.frozen, "bills": high})
    assert f"over {(own['event_kw'] + own['rest_kw']).max():,.0f} kW" in text(orders(lower)[2])
