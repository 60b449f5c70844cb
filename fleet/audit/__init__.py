"""Audit: every limit and every sum of an event worked out again, from its record alone.

Owns the order of work and the list of rules. Believes nobody: of the rooms that made the record it imports none,
only what a record is made of (tables, seals), the rules of the trade as data, and the model functions of machines,
tanks and zones. A rule is a function that compares and tells; adding one is a line in its file's RULES.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import TypeVar

import pandas as pd

from fleet.audit import (
    charging,
    courses,
    limits,
    network,
    proof,
    quotes,
    settlement,
    steps,
    tanks,
    windows,
    zones,
)
from fleet.audit.case import Case, case
from fleet.audit.evidence import evidence
from fleet.audit.findings import Fault, Findings
from fleet.audit.inputs import changed_inputs, frozen_digests
from fleet.audit.orders import orders_say_the_call
from fleet.audit.settled import Settled
from fleet.records import CallRecord, SettlementRecord, event_folder, read_call, read_settlement, verify_seals
from fleet.seals import record_folders

__all__ = ["Audit", "Fault", "audit"]

Found = TypeVar("Found")
Rule = Callable[[Case, Findings], None]

CALL_RULES: Sequence[Rule] = (
    *windows.RULES,
    *limits.RULES,
    *courses.RULES,
    *charging.RULES,
    *tanks.RULES,
    *zones.RULES,
    *quotes.RULES,
    *network.RULES,
    *proof.RULES,
    *steps.RULES,
)


@dataclass(frozen=True)
class Audit:
    """What an audit found. It holds where there is no fault."""

    event_id: str
    faults: tuple[Fault, ...]
    notes: tuple[str, ...]
    checked: Mapping[str, int]
    """Rule -> values looked at"""
    hidden: Mapping[str, int]
    """Rule and file -> further faults of the same kind that are not listed"""

    @property
    def holds(self) -> bool:
        """Nothing is wrong with the record."""
        return not self.faults


def audit(fleet_path: Path, event_id: str, meters: pd.DataFrame | None = None) -> Audit:
    """Re-check every call, order and settlement of an event; with `meters`, metered values too.

    meters: meter_id, interval_start, kw, quality. Raises FleetError where there is no such event; a record that
    cannot be read is a fault, not an error.
    """
    folder = event_folder(fleet_path, event_id)
    found = Findings()
    for fault in verify_seals(folder):
        place, _, what = fault.partition(": ")
        found.tell("seals", place, None, what or fault, "the record as it was sealed")
    found.looked_at("seals", sum(1 for path in folder.rglob("*") if path.is_file()))
    calls = _calls(fleet_path, event_id, folder, found)
    for one in calls:
        _audit_call(one, found)
        found.notes += changed_inputs(fleet_path, one)
    for path in record_folders(folder):
        if calls and path.name.startswith("orders-"):
            _tried(found, path.name, "orders", partial(orders_say_the_call, path, calls, found))
    if calls:
        _audit_settlements(fleet_path, event_id, folder, calls[-1], meters, found)
    notes = tuple(dict.fromkeys(found.notes))
    return Audit(event_id, tuple(found.faults), notes, dict(found.checked), dict(found.hidden))


def _revisions(folder: Path, kind: str) -> list[int]:
    """Revision numbers of a kind of record that lie in an event's folder, rising."""
    parts = [path.name.rsplit("-", 1) for path in record_folders(folder)]
    return sorted(int(number) for name, number in parts if name == kind)


def _calls(fleet_path: Path, event_id: str, folder: Path, found: Findings) -> list[CallRecord]:
    """Every call revision that can be read, the newest last."""
    read = [
        _tried(found, f"call-{number:03d}", "readable", partial(read_call, fleet_path, event_id, number))
        for number in _revisions(folder, "call")
    ]
    return [record for record in read if record is not None]


def _audit_call(record: CallRecord, found: Findings) -> None:
    """All rules of one call; a rule that cannot be worked out is a fault of its own."""
    folder = record.path.name
    frozen_digests(record, folder, found)
    book = _tried(found, folder, "rows of the table", lambda: evidence(record, folder, found))
    if book is None:
        found.notes.append(
            f"{folder}: rows are missing or cannot be placed, so no further rule was looked at"
        )
        return
    known = _tried(found, folder, "frozen rows", lambda: case(book))
    if known is None:
        return
    for rule in CALL_RULES:
        _tried(found, folder, _name(rule), partial(rule, known, found))


def _audit_settlements(
    fleet_path: Path,
    event_id: str,
    folder: Path,
    call: CallRecord,
    meters: pd.DataFrame | None,
    found: Findings,
) -> None:
    """Every settlement, each against the call in force and the revision before."""
    before: SettlementRecord | None = None
    for number in _revisions(folder, "settlement"):
        name = f"settlement-{number:03d}"
        record = _tried(found, name, "readable", partial(read_settlement, fleet_path, event_id, number))
        if record is None:
            continue
        made = Settled(call, record, name, before, meters)
        for rule in settlement.RULES:
            _tried(found, name, _name(rule), partial(rule, made, found))
        before = record


def _name(rule: Callable[..., None]) -> str:
    return rule.__name__.replace("_", " ")


def _tried(found: Findings, file: str, rule: str, work: Callable[[], Found]) -> Found | None:
    """What `work` gives; None, and a fault, where the record does not let it be worked out."""
    try:
        return work()
    except (ValueError, KeyError, IndexError, TypeError, AttributeError) as error:
        found.tell(rule, file, None, f"{type(error).__name__}: {error}", "a record that can be worked out")
        return None
