"""The page of a settlement: per site and for the fleet, as text and as JSON.

Owns the layout only; every figure is a row of the settlement's tables.
"""

import json
from collections.abc import Hashable, Iterator, Mapping, Sequence
from decimal import Decimal
from typing import Any

import pandas as pd

from fleet.callfacts import CallFacts
from fleet.changes import change_lines, changes
from fleet.money import told
from fleet.settlement import Settlement
from fleet.words import plain

WIDTH = 118


def statements(
    settlement: Settlement, facts: CallFacts, before: Mapping[str, pd.DataFrame] | None = None
) -> dict[str, str]:
    """Files of a settlement's folder: statement.txt and statement.json; before: the revision before's tables."""
    changed = [] if before is None else changes(before, settlement.frames, facts.prices.currency)
    document = statement_json(settlement, facts, changed)
    return {
        "statement.txt": statement_text(settlement, facts, changed),
        "statement.json": json.dumps(document, indent=1, sort_keys=True) + "\n",
    }


def statement_text(settlement: Settlement, facts: CallFacts, changed: Sequence[dict[str, Any]] = ()) -> str:
    """Statement as plain text, one line per called site, then the fleet, what changed and how it was worked out."""
    sites, currency = settlement.sites, facts.prices.currency
    revision = int(sites["revision"].iloc[0])
    lines = [
        f"STATEMENT  event {facts.event_id}  settlement revision {revision}  amounts in {currency}, "
        "from the site's side",
        "",
        f"{'site':<14}{'rule':<20}{'state':<13}{'committed':>11}{'delivered':>11}{'factor':>8}{'adjust':>8}"
        f"{'capacity':>11}{'energy':>10}{'penalty':>10}{'total':>11}",
        f"{'':<47}{'kWh':>11}{'kWh':>11}",
    ]
    lines += [_site_line(row) for row in sites.to_dict("records")]
    total = sum(sites["total"], Decimal(0))
    delivered = settlement.fleet["delivered_kw"].sum() * facts.step_minutes / 60.0
    asked = settlement.fleet["requested_kw"].sum() * facts.step_minutes / 60.0
    lines += [
        "",
        f"fleet: asked {asked:,.1f} kWh, delivered {delivered:,.1f} kWh over the event "
        f"(rebounds inside it netted); paid {total} {currency}",
        "",
        *_recovery_lines(sites),
        *_guard_lines(sites),
        *[f"excused: {plain(str(row.site_id))}: {plain(str(row.why))}" for row in _excused(sites)],
    ]
    if settlement.postings["from_revision"].notna().any():
        posted = sum(settlement.postings["amount"], Decimal(0))
        lines += [f"changed against revision {revision - 1}, posting {told(posted, currency)} {currency}:"]
        lines += change_lines(list(changed)) or ["  nothing"]
    lines += ["", "how it was worked out:"]
    used = {str(facts.rules[str(site)].name): facts.rules[str(site)] for site in sites["site_id"]}
    lines += [f"  {name}: {rule.order_of_rounding}" for name, rule in sorted(used.items())]
    lines += [f"  {name}: {rule.source}" for name, rule in sorted(used.items()) if rule.source]
    lines += [f"note: {plain(note)}" for note in settlement.notes]
    return "\n".join(lines) + "\n"


def _excused(sites: pd.DataFrame) -> Iterator[Any]:
    return sites[sites["why"].notna()].itertuples()


def _recovery_lines(sites: pd.DataFrame) -> list[str]:
    """Energy taken back after the windows, beside what was delivered and not netted."""
    midnight, full = sites["recovery_until_midnight_kwh"], sites["recovery_until_full_kwh"]
    return [
        f"energy taken back after the own windows, not netted: {midnight.sum():,.1f} kWh until midnight "
        f"({int(midnight.notna().sum())} sites), {full.sum():,.1f} kWh until the tank is full "
        f"({int(full.notna().sum())} sites)"
    ]


def _guard_lines(sites: pd.DataFrame) -> list[str]:
    """Both adjustments of the sites whose charging was taken out of the adjustment window."""
    return [
        f"adjustment without charging ({row.guard} meter taken out): {plain(str(row.site_id))} "
        f"{row.adjustment:.3f}, with it {row.adjustment_charged:.3f} ({row.adjustment_kind})"
        for row in sites[(sites["guard"] != "none") & (sites["adjustment_kind"] != "none")].itertuples()
    ]


def _site_line(row: Mapping[Hashable, Any]) -> str:
    def number(name: str, width: int, digits: int) -> str:
        value = row[name]
        return f"{'-':>{width}}" if pd.isna(value) else f"{value:>{width},.{digits}f}"

    return (
        f"{plain(str(row['site_id']))[:13]:<14}{str(row['rule'])[:19]:<20}{row['state']!s:<13}"
        f"{number('committed_kwh', 11, 1)}{number('delivered_kwh', 11, 1)}{number('performance_factor', 8, 3)}"
        f"{number('adjustment', 8, 3)}{row['capacity_payment']!s:>11}{row['energy_payment']!s:>10}"
        f"{row['penalty']!s:>10}{row['total']!s:>11}"
    )


def statement_json(
    settlement: Settlement, facts: CallFacts, changed: Sequence[dict[str, Any]] = ()
) -> dict[str, object]:
    """Statement as one JSON document; money as text, so that no cent is lost."""
    sites = settlement.sites.astype(object).where(settlement.sites.notna(), None)
    rows = [
        {name: str(value) if isinstance(value, Decimal) else value for name, value in row.items()}
        for row in sites.to_dict("records")
    ]
    return {
        "event_id": facts.event_id,
        "currency": facts.prices.currency,
        "sites": rows,
        "total": str(sum(settlement.sites["total"], Decimal(0))),
        "notes": list(settlement.notes),
        "changes": list(changed),
        "sources": {rule.name: rule.source for rule in facts.rules.values()},
        "order_of_rounding": {
            rule.name: rule.order_of_rounding for rule in facts.rules.values() if rule is not None
        },
    }
