"""The page of a settlement: per site and for the fleet, as text and as JSON.

Owns the layout only; every figure is a row of the settlement's tables.
"""

import json
from collections.abc import Iterator, Mapping, Sequence
from decimal import Decimal
from textwrap import wrap
from typing import Any, Final

import pandas as pd

from fleet.callfacts import CallFacts
from fleet.changes import change_lines, changes
from fleet.money import told
from fleet.settlement import Settlement
from fleet.words import plain

WIDTH: Final = 90


def statements(
    settlement: Settlement, facts: CallFacts, before: Mapping[str, pd.DataFrame] | None = None
) -> dict[str, str]:
    """Files of a settlement's folder: statement.txt and statement.json; before: the revision before's tables."""
    changed = [] if before is None else changes(before, settlement.frames, facts.prices.currency)
    document = statement_json(settlement, facts, changed)
    return {
        "statement.txt": statement_text(settlement, facts, changed),
        "statement.json": _json(document) + "\n",
    }


def _json(document: Mapping[str, Any]) -> str:
    """The document with a line a site: thousands of sites, each in a short line, are written at once."""
    sites = ",\n  ".join(json.dumps(row, sort_keys=True) for row in document["sites"])
    text = json.dumps({**document, "sites": []}, indent=1, sort_keys=True)
    return text.replace('\n "sites": []', f'\n "sites": [\n  {sites}\n ]', 1)


def statement_text(settlement: Settlement, facts: CallFacts, changed: Sequence[dict[str, Any]] = ()) -> str:
    """Statement as plain text, one line per called site, then the fleet, what changed and how it was worked out."""
    sites, currency = settlement.sites, facts.prices.currency
    revision = int(sites["revision"].iloc[0])
    lines = [
        f"STATEMENT  event {facts.event_id}, settlement revision {revision}",
        f"amounts in {currency}, from the site's side",
        "",
        *_energy_table(sites),
        "",
        *_money_table(sites, currency),
        "",
        *_wrapped(_fleet_line(settlement, facts)),
        *_wrapped(_recovery_line(sites)),
        *_unknown_recovery(sites),
        *_guard_lines(sites),
        *[
            line
            for row in _excused(sites)
            for line in _wrapped(f"excused: {plain(str(row.site_id))}: {plain(str(row.why))}")
        ],
    ]
    if settlement.postings["from_revision"].notna().any():
        posted = sum(settlement.postings["amount"], Decimal(0))
        lines += [
            "",
            f"changed against revision {revision - 1}, posting {told(posted, currency)} {currency}:",
        ]
        lines += [part for line in change_lines(list(changed)) or ["  nothing"] for part in _wrapped(line)]
    lines += ["", "how it was worked out:"]
    used = {str(facts.rules[str(site)].name): facts.rules[str(site)] for site in sites["site_id"]}
    for name, rule in sorted(used.items()):
        lines += _wrapped(f"  {name}: {rule.order_of_rounding}")
        lines += _wrapped(f"  {name}: {rule.source}") if rule.source else []
    lines += [line for note in settlement.notes for line in _wrapped(f"note: {plain(note)}")]
    return "\n".join(lines) + "\n"


def _wrapped(text: str) -> list[str]:
    """A long line in pieces no wider than WIDTH, the later ones set in; words longer than that stay whole."""
    indent = " " * (len(text) - len(text.lstrip()) + 4)
    return wrap(text, WIDTH, subsequent_indent=indent, break_long_words=False, break_on_hyphens=False)


def _fleet_line(settlement: Settlement, facts: CallFacts) -> str:
    total = sum(settlement.sites["total"], Decimal(0))
    hours = facts.step_minutes / 60.0
    delivered, asked = (settlement.fleet[name].sum() * hours for name in ("delivered_kw", "requested_kw"))
    currency = facts.prices.currency
    return (
        f"fleet: asked {asked:,.1f} kWh, delivered {delivered:,.1f} kWh over the event (rebounds inside it netted); "
        f"paid {told(total, currency)} {currency}"
    )


def _excused(sites: pd.DataFrame) -> Iterator[Any]:
    return sites[sites["why"].notna()].itertuples()


def _recovery_line(sites: pd.DataFrame) -> str:
    """Energy taken back after the windows, beside what was delivered, and how much of it the rules take off."""
    midnight, full, off = (
        sites[name] for name in ("recovery_until_midnight_kwh", "recovery_until_full_kwh", "netted_kwh")
    )
    taken_off = int((off > 0.0).sum())
    netted = f"; {off.sum():,.1f} kWh netted by rule ({taken_off} sites)" if taken_off else ""
    return (
        f"energy taken back after the own windows{'' if taken_off else ', not netted'}: {midnight.sum():,.1f} kWh "
        f"until midnight ({int(midnight.notna().sum())} sites), {full.sum():,.1f} kWh until the tank is full "
        f"({int(full.notna().sum())} sites){netted}"
    )


def _unknown_recovery(sites: pd.DataFrame) -> list[str]:
    """Sites whose rule nets energy taken back that is not known: nothing is paid or charged on them."""
    held = sites.loc[sites["netted_kwh"].isna(), "site_id"].astype(str)
    return [
        line
        for site in held
        for line in _wrapped(
            f"energy taken back is not known, though the rule nets it, so nothing is paid or charged: {plain(site)}"
        )
    ]


def _guard_lines(sites: pd.DataFrame) -> list[str]:
    """Both adjustments of the sites whose charging was taken out of the adjustment window."""
    rows = sites[(sites["guard"] != "none") & (sites["adjustment_kind"] != "none")]
    return [
        line
        for row in rows.itertuples()
        for line in _wrapped(
            f"adjustment without charging ({row.guard} meter taken out): {plain(str(row.site_id))} "
            f"{row.adjustment:.3f}, with it {row.adjustment_charged:.3f} ({row.adjustment_kind})"
        )
    ]


def _energy_table(sites: pd.DataFrame) -> list[str]:
    """What each site delivered by which rule."""
    head = (
        f"{'site':<15}{'rule':<22}{'state':<14}{'committed':>10}{'delivered':>10}{'factor':>8}{'adjust':>8}"
    )
    units = f"{'':<51}{'kWh':>10}{'kWh':>10}"
    names = ("site_id", "rule", "state", "committed_kwh", "delivered_kwh", "performance_factor", "adjustment")
    rows = [
        f"{_cut(site, 15)}{_cut(rule, 22)}{state!s:<14}{_number(committed, 10, 1)}{_number(delivered, 10, 1)}"
        f"{_number(factor, 8, 3)}{_number(adjustment, 8, 3)}"
        for site, rule, state, committed, delivered, factor, adjustment in _rows(sites, names)
    ]
    return [head, units, *rows]


def _rows(sites: pd.DataFrame, names: Sequence[str]) -> Iterator[tuple[Any, ...]]:
    """Row by row the values of these columns."""
    return zip(*(sites[name].tolist() for name in names), strict=True)


def _money_table(sites: pd.DataFrame, currency: str) -> list[str]:
    """The lines of each site's amount and their sums."""
    names = ("capacity_payment", "energy_payment", "penalty", "total")
    head = f"{'site':<15}{'capacity':>14}{'energy':>14}{'penalty':>14}{'total':>14}"
    rows = [
        _cut(site, 15) + "".join(f"{told(amount, currency):>14}" for amount in amounts)
        for site, *amounts in _rows(sites, ("site_id", *names))
    ]
    sums = [told(sum(sites[name], Decimal(0)), currency) for name in names]
    return [head, *rows, f"{'all':<15}" + "".join(f"{amount:>14}" for amount in sums)]


def _cut(text: object, width: int) -> str:
    """A name in a column of its own width, shortened where it is longer."""
    shown = plain(str(text))
    return f"{shown if len(shown) < width else shown[: width - 2] + '~':<{width}}"


def _number(value: float, width: int, digits: int) -> str:
    return f"{'-':>{width}}" if pd.isna(value) else f"{value:>{width},.{digits}f}"


def statement_json(
    settlement: Settlement, facts: CallFacts, changed: Sequence[dict[str, Any]] = ()
) -> dict[str, object]:
    """Statement as one JSON document; money as text, so that no cent is lost."""
    sites = settlement.sites.astype(object).where(settlement.sites.notna(), None)
    names = [str(name) for name in sites.columns]
    rows = [
        {name: str(value) if isinstance(value, Decimal) else value for name, value in zip(names, row)}
        for row in _rows(sites, names)
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
