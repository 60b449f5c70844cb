"""The audit stands alone: it asks none of the rooms that made a record, and says what equal means to it."""

import ast
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import fleet
from fleet.audit import Audit
from fleet.audit.findings import Fault, Findings, Sheet

FORBIDDEN = {
    "fleet.allocate",
    "fleet.choice",
    "fleet.calling",
    "fleet.event",
    "fleet.desk",
    "fleet.steps",
    "fleet.settle",
    "fleet.settling",
    "fleet.settlement",
    "fleet.baseline",
    "fleet.limits",
    "fleet.offers",
    "fleet.prices",
    "fleet.orders",
    "sites.quote",
    "sites.quotes",
    "sites.plant",
    "sites.tally",
    "sites.cost",
    "sites.storage",
    "sites.dispatch",
    "sites.course",
    "sites.blocks",
    "sites.candidate",
    "sites.rows",
}
"""Rooms that make records: an audit that asks them asks the defendant."""


def modules() -> list[Path]:
    found = sorted((Path(next(iter(fleet.__path__))) / "audit").glob("*.py"))
    assert "proof" in {path.stem for path in found}, found
    return found


@pytest.mark.parametrize("path", modules(), ids=lambda path: path.stem)
def test_the_audit_asks_none_of_the_rooms_that_made_the_record(path):
    names = set()
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.ImportFrom) and node.module:
            names |= {node.module} | {f"{node.module}.{alias.name}" for alias in node.names}
        elif isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
    assert names & FORBIDDEN == set()


def test_an_audit_holds_only_without_faults():
    fault = Fault("rule", "file", None, "", None, "1", "2")
    assert Audit("e", (), (), {}, {}).holds
    assert not Audit("e", (fault,), (), {}, {}).holds
    assert str(fault) == "rule: file: found 1; expected 2"


@pytest.mark.parametrize(
    ("found_kw", "expected_kw", "scale", "faults"),
    [
        (1.0, 1.0 + 5e-10, 0.0, 0),
        (1.0, 1.0 + 2e-9, 0.0, 1),
        (1.0, 1.0 + 2e-9, 100.0, 0),
        (1e6, 1e6 * 1.01, 0.0, 1),
        (np.nan, np.nan, 0.0, 0),
        (np.nan, 1.0, 0.0, 1),
        (0.0, np.nan, 0.0, 1),
    ],
)
def test_what_equal_means(found_kw, expected_kw, scale, faults):
    found = Findings()
    found.equal("r", Sheet("f", pd.DataFrame({"kw": [found_kw]})), "kw", np.array([expected_kw]), scale)
    assert len(found.faults) == faults
