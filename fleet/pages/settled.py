"""A settlement's record as pages read it: per site the rows, per revision the postings and what changed.

Owns finding the rows; every figure is the record's. What stands on the pages is statement.py's.
"""

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import pandas as pd

from fleet import records
from fleet.changes import changes
from fleet.pages.case import Case
from fleet.records import SettlementRecord


@dataclass(frozen=True)
class Settled:
    """The newest settlement of an event, those before it, and the call it settles."""

    case: Case
    record: SettlementRecord
    before: tuple[SettlementRecord, ...]
    """Earlier revisions, oldest first"""

    @cached_property
    def sites(self) -> pd.DataFrame:
        """Table sites by site_id."""
        return self.record.frames["sites"].sort_values("site_id", ignore_index=True)

    @cached_property
    def _rows(self) -> dict[str, dict[str, pd.DataFrame]]:
        return {
            name: {str(site): rows for site, rows in self.record.frames[name].groupby("site_id", sort=False)}
            for name in ("intervals", "days", "day_intervals", "postings")
        }

    def rows(self, table: str, site_id: str) -> pd.DataFrame:
        """Rows of a site in a table; none where it has none."""
        return self._rows[table].get(site_id, self.record.frames[table].iloc[:0])

    @cached_property
    def changed(self) -> dict[str, dict[str, Any]]:
        """site_id -> what this revision changed against the one before; empty for the first."""
        if not self.before:
            return {}
        found = changes(self.before[-1].frames, self.record.frames, self.case.currency)
        return {str(entry["site_id"]): entry for entry in found}


def read(home: Path, event_id: str, case: Case) -> Settled | None:
    """The newest settlement of an event with its earlier revisions; None where there is none yet."""
    numbers = records.revisions(home, event_id, "settlement")
    if not numbers:
        return None
    found = [records.read_settlement(home, event_id, number) for number in numbers]
    return Settled(case, found[-1], tuple(found[:-1]))
