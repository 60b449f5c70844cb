"""One number of a record changed by one per cent or one unit, and everything resealed: material for the audit.

Times move by one interval, days by one day, flags flip, lists change in one element. Text is left alone.
"""

import json
from collections.abc import Iterator
from dataclasses import dataclass
from decimal import Decimal
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from audited import reseal

from fleet.schema import Table, table, tables
from fleet.seals import json_text
from fleet.tables import read_parquet, write_parquet

CHANGED = ("number", "whole", "flag", "time", "day", "decimal", "list_number")
LEFT_ALONE = ("seconds", "versions", "sha256", "frozen_sha256", "written_at")
"""Fields of the proof that say how long, with what and from where."""


@dataclass(frozen=True)
class Mutation:
    """One change: the file, the column and row (or the field of the proof), what was there and what is."""

    file: Path
    name: str
    row: int | None
    was: Any
    now: Any

    def __str__(self) -> str:
        return (
            f"{self.file.parent.name}/{self.file.name} {self.name} row {self.row}: {self.was} -> {self.now}"
        )


def columns(folder: Path, kind: str) -> Iterator[tuple[Path, Table, str]]:
    """Every column of a record's tables that holds numbers, times or flags."""
    for name, of in tables(kind).items():
        for column in of.columns:
            if column.type in CHANGED:
                yield folder / f"{name}.parquet", of, column.name


def frozen_columns(folder: Path) -> Iterator[tuple[Path, Table, str]]:
    """The same of the frozen tables."""
    for path in sorted((folder / "frozen").glob("*.parquet")):
        of = table("fleet", path.stem)
        for column in of.columns:
            if column.type in CHANGED:
                yield path, of, column.name


def mutate(path: Path, of: Table, column: str, rng: np.random.Generator) -> Mutation | None:
    """Change one value of a column at a random row that has one; None where no row has."""
    frame = read_parquet(path, of)
    there = np.flatnonzero(frame[column].notna().to_numpy())
    if not there.size:
        return None
    row = int(rng.choice(there))
    was = frame[column].iloc[row]
    now = changed(was, of.column(column).type, rng)
    values = frame[column].astype(object).tolist()
    values[row] = now
    frame[column] = pd.Series(values, index=frame.index, dtype=_dtype(of.column(column).type, frame[column]))
    write_parquet(frame, path, of)
    return Mutation(path, column, row, was, now)


def changed(value: Any, kind: str, rng: np.random.Generator) -> Any:
    """The value one per cent or one unit away."""
    if kind == "flag":
        return not bool(value)
    if kind == "time":
        return value + pd.Timedelta(minutes=15)
    if kind == "day":
        return value + pd.Timedelta(days=1)
    if kind == "whole":
        return int(value) + 1
    if kind == "decimal":
        return value + Decimal("0.01")
    if kind == "list_number":
        at = int(rng.integers(len(value)))
        return [changed(item, "number", rng) if k == at else item for k, item in enumerate(value)]
    return float(value) * 1.01 if abs(value) > 1e-6 else float(value) + 1.0


def proof_numbers(proof: dict[str, Any]) -> list[str]:
    """Fields of the proof that hold a number or a flag."""
    return [
        name for name, value in proof.items() if isinstance(value, int | float) and name not in LEFT_ALONE
    ]


def mutate_proof(path: Path, name: str) -> Mutation:
    """Change one field of proof.json."""
    proof = json.loads(path.read_text())
    was = proof[name]
    now: Any = not was if isinstance(was, bool) else was + 1 if isinstance(was, int) else None
    if now is None:
        now = was * 1.01 if abs(was) > 1e-6 else was + 1.0
    proof[name] = now
    path.write_text(json_text(proof))
    return Mutation(path, name, None, was, now)


def sealed(mutation: Mutation) -> Mutation:
    """Reseal the event so that no seal tells of the change."""
    folder = mutation.file.parent
    reseal(folder.parent.parent if folder.name == "frozen" else folder.parent)
    return mutation


def _dtype(kind: str, series: pd.Series) -> Any:
    return series.dtype if kind in ("number", "whole", "flag", "time", "day") else object
