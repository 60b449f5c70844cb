"""The audit: holds on a record as it was made, and names rule and row for one number that was changed."""

import shutil
from dataclasses import replace
from decimal import Decimal
from functools import partial
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from audited import EVENT_ID, made_event, readings, reseal
from mutations import (
    CHANGED,
    changed,
    columns,
    frozen_columns,
    mutate,
    mutate_proof,
    proof_numbers,
    sealed,
)

from fleet import audit as front
from fleet.audit import audit, limits, proof, settlement
from fleet.audit.case import case
from fleet.audit.evidence import evidence
from fleet.audit.findings import Fault, Findings
from fleet.audit.settled import Settled
from fleet.errors import FleetError
from fleet.records import CallRecord, SettlementRecord, read_call, read_settlement
from fleet.schema import Table, tables
from fleet.tables import read_parquet, write_parquet

PINNED_BY = {
    ("windows", "inventory_low_start_kwh_th"): ("call", "quotes", "inventory_low_start_kwh_th"),
    ("day_intervals", "kw"): ("settlement", "days", "day_kwh"),
}
"""Columns that nothing else in the record holds until this one repeats them."""


@pytest.fixture(scope="module")
def home(tmp_path_factory) -> Path:
    """A fleet folder with one event, called, ordered and settled twice."""
    made = tmp_path_factory.mktemp("audited")
    made_event(made)
    return made


@pytest.fixture(scope="module")
def call(home) -> CallRecord:
    return read_call(home, EVENT_ID)


@pytest.fixture(scope="module")
def settlements(home) -> list[SettlementRecord]:
    return [read_settlement(home, EVENT_ID, revision) for revision in (1, 2)]


@pytest.fixture
def copy(home, tmp_path) -> Path:
    """The same folder, to be changed."""
    shutil.copytree(home, tmp_path / "fleet")
    return tmp_path / "fleet"


def faults_of_call(record: CallRecord, rules=front.CALL_RULES) -> list[Fault]:
    found = Findings()
    book = evidence(record, record.path.name, found)
    if book is not None:
        known = case(book)
        for rule in rules:
            front._tried(found, record.path.name, front._name(rule), partial(rule, known, found))
    return found.faults


def faults_of_settlement(
    call: CallRecord, record: SettlementRecord, before: SettlementRecord | None
) -> list[Fault]:
    found = Findings()
    made = Settled(call, record, record.path.name, before, None)
    for rule in settlement.RULES:
        front._tried(found, record.path.name, front._name(rule), partial(rule, made, found))
    return found.faults


def test_a_record_as_it_was_made_holds(home):
    made = audit(home, EVENT_ID)
    assert [str(fault) for fault in made.faults] == []
    assert made.holds
    assert made.notes == ("the bound is the solver's: it cannot be worked out from the record alone",)


def test_every_rule_looked_at_something(home):
    checked = audit(home, EVENT_ID).checked
    assert {rule for rule, count in checked.items() if count == 0} == set()
    assert len(checked) > 70
    assert checked["machine power"] == 6 * 140
    assert checked["conservation"] == 3


def test_the_event_calls_on_what_the_rules_are_about(call):
    """Otherwise a rule could hold because nothing happens."""
    intervals, windows = call.frames["intervals"], call.frames["windows"]
    assert len(windows) >= 3
    assert intervals["unmet_kw_th"].max() > 1.0
    assert intervals["pull_down_kw_th"].max() > 1.0
    assert intervals["discharge_kw_th"].max() > 50.0
    assert call.frames["machines"]["making_ice"].any()
    assert windows["recovery_energy_kwh"].max() > 10.0
    assert windows["cost_comfort"].max() > 0.0


def test_with_meters_the_metered_values_are_looked_at_too(home):
    assert not audit(home, EVENT_ID, readings(home, 2)).holds
    revision_one = audit(home, EVENT_ID, readings(home, 1))
    assert {(fault.rule, fault.file) for fault in revision_one.faults} == {
        ("metered kW", "settlement-002/intervals.parquet")
    }


def test_an_unknown_event_is_refused(home):
    with pytest.raises(FleetError, match=r"no event 'EV-9'; nearest of 1: EV-1"):
        audit(home, "EV-9")


def cells(kind: str) -> list[tuple[Table, str]]:
    return [
        (of, column.name) for of in tables(kind).values() for column in of.columns if column.type in CHANGED
    ]


def pinned(of: Table, column: str) -> bool:
    by = PINNED_BY.get((of.name, column))
    return by is None or by[2] in tables(by[0])[by[1]].names


def mutated(frames, of: Table, column: str, seed: int):
    """The tables with one value changed, and its row; None where the column is empty."""
    frame = frames[of.name].copy()
    there = np.flatnonzero(frame[column].notna().to_numpy())
    if of.name == "days" and column in ("rank_value", "window_base_kw"):
        # The readings of days of another type are not recorded, so nothing vouches for their means.
        there = there[~frame["reason"].iloc[there].isin(["other_day_type", "holiday"]).to_numpy()]
    if not there.size:
        return None
    rng = np.random.default_rng([seed, *(of.name + column).encode()])
    row = int(rng.choice(there))
    kind = of.column(column).type
    values = frame[column].astype(object).tolist()
    values[row] = changed(values[row], kind, rng)
    plain = ("number", "whole", "flag", "time", "day")
    frame[column] = pd.Series(
        values, index=frame.index, dtype=frame[column].dtype if kind in plain else object
    )
    return dict(frames) | {of.name: frame}, row


def assert_named(faults: list[Fault], of: Table, column: str, row: int) -> None:
    assert faults, f"{of.name}.{column} row {row}: changed, and no fault"
    # A price and an asked kW show in the bound alone, whatever their row.
    by_sum = (of.name, column) in {("prices", "price"), ("request", "requested_kw")}
    assert by_sum or any(fault.row is not None for fault in faults)
    assert all(fault.rule and fault.file for fault in faults)


def change_call(call: CallRecord, of: Table, column: str, seed: int) -> None:
    if not pinned(of, column):
        pytest.skip(f"nothing repeats {of.name}.{column}")
    made = mutated(call.frames, of, column, seed)
    if made is not None:
        assert_named(faults_of_call(replace(call, frames=made[0])), of, column, made[1])


def change_settlement(call, settlements, of: Table, column: str, seed: int) -> None:
    if not pinned(of, column):
        pytest.skip(f"nothing repeats {of.name}.{column}")
    for before, record in ((None, settlements[0]), (settlements[0], settlements[1])):
        made = mutated(record.frames, of, column, seed)
        if made is not None:
            new = replace(record, frames=made[0])
            assert_named(faults_of_settlement(call, new, before), of, column, made[1])


@pytest.mark.parametrize(("of", "column"), cells("call")[::12], ids=str)
def test_one_changed_number_of_a_call_is_named(call, of, column):
    change_call(call, of, column, seed=1)


@pytest.mark.parametrize(("of", "column"), cells("settlement")[::9], ids=str)
def test_one_changed_number_of_a_settlement_is_named(call, settlements, of, column):
    change_settlement(call, settlements, of, column, seed=1)


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize(("of", "column"), cells("call"), ids=str)
def test_every_number_of_a_call_is_pinned(call, of, column, seed):
    change_call(call, of, column, seed)


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize(("of", "column"), cells("settlement"), ids=str)
def test_every_number_of_a_settlement_is_pinned(call, settlements, of, column, seed):
    change_settlement(call, settlements, of, column, seed)


def test_every_number_of_the_proof_is_pinned(call):
    names = proof_numbers(dict(call.proof))
    rules = (*proof.RULES, limits.candidates_tried)
    whole = evidence(call, "call-001", Findings())
    assert whole is not None
    known = case(whole)
    assert len(names) > 15
    for name in names:
        was = call.proof[name]
        kind = "flag" if isinstance(was, bool) else "whole" if isinstance(was, int) else "number"
        now = changed(was, kind, np.random.default_rng(0))
        book = replace(known.evidence, record=replace(call, proof={**call.proof, name: now}))
        found = Findings()
        for rule in rules:
            rule(replace(known, evidence=book), found)
        faults = found.faults
        # A solver's bound shows in the bound that is made of it.
        columns = {name} | ({"bound"} if name == "bound_solver" else set())
        assert any(fault.column in columns and fault.file == "call-001/proof.json" for fault in faults), name


@pytest.mark.parametrize("name", ["horizon_start", "horizon_end"])
def test_a_moved_horizon_is_named(call, name):
    later = (pd.Timestamp(call.proof[name]) + pd.Timedelta(minutes=15)).isoformat()
    faults = faults_of_call(replace(call, proof={**call.proof, name: later}))
    assert {(fault.rule, fault.column) for fault in faults} == {("horizon", name)}


def test_a_change_with_all_seals_made_to_fit_is_still_named(copy):
    """The whole way over files: changed, written, resealed, read and audited."""
    folder = copy / "events" / EVENT_ID / "call-001"
    path, of, column = next(cell for cell in columns(folder, "call") if cell[2] == "zone_rise_k")
    change = sealed(mutate(path, of, column, np.random.default_rng(5)))
    made = audit(copy, EVENT_ID)
    assert any(f.row == change.row and f.column == column and f.rule == "zone rise" for f in made.faults)
    assert "seals" not in {fault.rule for fault in made.faults}


def test_a_proof_changed_and_resealed_is_named(copy):
    sealed(mutate_proof(copy / "events" / EVENT_ID / "call-001" / "proof.json", "money"))
    made = audit(copy, EVENT_ID)
    assert ("figures of the proof", "money") in {(fault.rule, fault.column) for fault in made.faults}


def test_every_frozen_number_is_under_a_digest_of_the_proof(copy):
    folder = copy / "events" / EVENT_ID / "call-001"
    path, of, column = next(cell for cell in frozen_columns(folder) if cell[2] == "floor_area_m2")
    sealed(mutate(path, of, column, np.random.default_rng(5)))
    assert [str(fault)[:52] for fault in audit(copy, EVENT_ID).faults] == [
        "frozen files: call-001/frozen/sites.parquet, column "
    ]


def test_a_change_without_resealing_breaks_the_seal(copy):
    path = copy / "events" / EVENT_ID / "call-001" / "proof.json"
    path.write_text(path.read_text() + "\n")
    assert [str(fault) for fault in audit(copy, EVENT_ID).faults] == [
        "seals: call-001/proof.json: found was changed after it was sealed; expected the record as it was sealed"
    ]


def test_rows_that_are_missing_are_told_and_nothing_further_is_said(copy):
    path = copy / "events" / EVENT_ID / "call-001" / "machines.parquet"
    of = tables("call")["machines"]
    write_parquet(read_parquet(path, of).iloc[1:].reset_index(drop=True), path, of)
    reseal(path.parent.parent)
    made = audit(copy, EVENT_ID)
    told = [fault for fault in made.faults if fault.file == "call-001/machines.parquet"]
    assert [str(fault) for fault in told] == [
        "rows of the table: call-001/machines.parquet: found 839 rows; "
        "expected 6 x 140 intervals from 2026-07-15T13:00:00.000000 UTC"
    ]
    assert any("no further rule was looked at" in note for note in made.notes)


def test_a_file_that_cannot_be_read_is_a_fault_and_no_error(copy):
    path = copy / "events" / EVENT_ID / "call-001" / "tanks.parquet"
    path.write_bytes(b"not a table")
    reseal(path.parent.parent)
    made = audit(copy, EVENT_ID)
    assert [fault.rule for fault in made.faults] == ["readable"]
    assert "is not a readable Parquet file" in made.faults[0].found


def test_many_faults_of_one_kind_are_counted_not_listed(copy):
    path = copy / "events" / EVENT_ID / "call-001" / "intervals.parquet"
    of = tables("call")["intervals"]
    frame = read_parquet(path, of)
    frame["committed_kw"] += 1.0
    write_parquet(frame, path, of)
    reseal(path.parent.parent)
    made = audit(copy, EVENT_ID)
    kept = [f for f in made.faults if (f.rule, f.file) == ("committed kW", "call-001/intervals.parquet")]
    assert len(kept) == 20
    assert made.hidden["committed kW: call-001/intervals.parquet"] == len(frame) - 20


def frozen(call: CallRecord, table: str, column: str, value: object) -> CallRecord:
    """The call with one frozen column set: the limit is then another, the course the same."""
    frame = call.frozen[table].copy()
    frame[column] = value
    return replace(call, frozen={**call.frozen, table: frame})


LIMITS = [
    ("sites", "notice_minutes", 200.0, "notice"),
    ("sites", "minimum_window_minutes", 200.0, "minimum window"),
    ("chillers", "min_off_minutes", 200.0, "minimum off time"),
    ("sites", "calls_per_season", 0, "call limits"),
    ("sites", "calls_per_week", 0, "call limits"),
    ("sites", "hours_per_season", 0.5, "call limits"),
    ("sites", "rise_limit_k", 0.05, "zone ceiling"),
    ("sites", "supply_cap_c", 5.01, "supply cap"),
    ("sites", "no_unmet", True, "unmet load"),
    ("sites", "critical_kw_th", 900.0, "critical load"),
    ("sites", "held_back_kwh_th", 1900.0, "held-back inventory"),
    ("sites", "restart_gap_minutes", 20.0, "restart order"),
    ("tanks", "capacity_kwh_th", 900.0, "tank within capacity"),
    ("tanks", "discharge_limit_kw_th", 5.0, "discharge within its limit"),
    ("tanks", "charge_limit_kw_th", 5.0, "charge within its limit"),
    ("chillers", "capacity_kw_th", 60.0, "machine capability"),
    ("chillers", "starts_left", 0, "starts left"),
    ("nodes", "import_limit_kw", 900.0, "frozen network"),
]


@pytest.mark.parametrize(("table", "column", "value", "rule"), LIMITS)
def test_a_limit_that_was_lower_is_seen_to_be_broken(call, table, column, value, rule):
    faults = faults_of_call(frozen(call, table, column, value))
    assert rule in {fault.rule for fault in faults}


def test_a_broken_import_limit_is_named_with_node_and_time(call):
    nodes = call.frames["nodes"].copy()
    nodes["import_limit_kw"] = nodes["import_limit_kw"].where(nodes["node_id"] != "north", 1230.0)
    record = frozen(replace(call, frames={**call.frames, "nodes": nodes}), "nodes", "import_limit_kw", 0.0)
    told = [fault for fault in faults_of_call(record) if fault.rule == "import limit"]
    assert told
    assert all("node north, 2026-07-1" in fault.key and fault.column == "event_kw" for fault in told)


def test_a_node_over_its_limit_before_the_call_is_a_note(call):
    found = Findings()
    nodes = call.frames["nodes"].copy()
    # Nothing changes under the limit of a node whose usual case is over it: no worse than usual is kept.
    nodes["import_limit_kw"] = nodes["import_limit_kw"].where(nodes["node_id"] != "grid", 1.0)
    front._audit_call(replace(call, frames={**call.frames, "nodes": nodes}), found)
    assert any(
        note.startswith("node grid is over its limit before anything is called") for note in found.notes
    )


def test_a_call_in_force_elsewhere_forbids_a_second(call):
    site = str(call.frames["windows"]["site_id"].iloc[0])
    running = {
        "event_id": "EV-X",
        "purpose": "real",
        "site_id": site,
        "window_start": "2026-07-15T12:00+00:00",
        "window_end": "2026-07-15T15:00+00:00",
    }
    calls = {"calls": [*call.frozen_json["calls"]["calls"], running]}
    faults = faults_of_call(replace(call, frozen_json={**call.frozen_json, "calls": calls}))
    told = [fault for fault in faults if fault.rule == "one window at a time"]
    assert [fault.key.split(",")[0] for fault in told] == [f"site {site}"]
    rehearsed = {"calls": [*call.frozen_json["calls"]["calls"], running | {"purpose": "rehearsal"}]}
    assert faults_of_call(replace(call, frozen_json={**call.frozen_json, "calls": rehearsed})) == []


def test_a_machine_out_of_service_that_gives_cooling_is_named(call):
    standing = {
        site: {unit: dict(facts) for unit, facts in own.items()}
        for site, own in call.frozen_json["standing"].items()
    }
    standing["S02"]["CH1"]["available"] = False
    faults = faults_of_call(replace(call, frozen_json={**call.frozen_json, "standing": standing}))
    assert "machine capability" in {fault.rule for fault in faults}


def test_a_cheaper_candidate_put_in_later_lowers_the_bound(call):
    quotes = call.frames["quotes"].copy()
    row = int(np.flatnonzero(quotes["site_id"] == "S02")[0])
    for name in ("cost_fee", "net_cost"):
        quotes.loc[row, name] -= 500.0
    faults = faults_of_call(replace(call, frames={**call.frames, "quotes": quotes}))
    assert {"bound from prices", "cost parts"} <= {fault.rule for fault in faults}


def test_how_a_fault_is_told(call):
    frame = call.frames["intervals"].copy()
    row = 17
    frame.loc[row, "committed_kw"] = 5.0
    told = [
        fault
        for fault in faults_of_call(replace(call, frames={**call.frames, "intervals": frame}))
        if fault.rule == "committed kW"
    ]
    site = call.frames["windows"]["site_id"].iloc[0]
    wanted = call.frames["intervals"]["committed_kw"].iloc[row]
    assert str(told[0]) == (
        f"committed kW: call-001/intervals.parquet, row 17 (site {site}, 2026-07-15T17:15Z), "
        f"column committed_kw: found 5; expected {wanted:.9g}"
    )


def test_a_cent_moved_between_lines_is_named(call, settlements):
    frame = settlements[0].frames["sites"].copy()
    frame.loc[0, "capacity_payment"] += Decimal("0.01")
    frame.loc[0, "energy_payment"] -= Decimal("0.01")
    record = replace(settlements[0], frames={**settlements[0].frames, "sites": frame})
    told = faults_of_settlement(call, record, None)
    assert {(f.rule, f.row, f.column) for f in told} == {
        ("payments", 0, "capacity_payment"),
        ("payments", 0, "energy_payment"),
    }


def test_another_choice_of_days_is_named(call, settlements):
    frame = settlements[0].frames["days"].copy()
    row = int(np.flatnonzero(frame["used"])[0])
    frame.loc[row, ["used", "reason"]] = [False, "not_ranked"]
    record = replace(settlements[0], frames={**settlements[0].frames, "days": frame})
    told = faults_of_settlement(call, record, None)
    assert any(fault.rule == "days chosen" and fault.row == row for fault in told)
    assert "baseline" in {fault.rule for fault in told}
