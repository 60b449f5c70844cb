"""What a command says: lines for a person and one document for a machine, from the same objects.

Owns wording and layout of the terminal's text but a quote's (quote_text.py, quote_page.py); figures are others'. Units
are SI unless tons are asked for; times are local with their offset.
"""

from decimal import Decimal
from typing import Any

from fleet.calling import Call
from fleet.desk import Survey
from fleet.explained_text import explained_json, explained_lines
from fleet.ordering import Written
from fleet.pages.book import Written as Pages
from fleet.quote_page import site_lines
from fleet.quote_text import event_line, iso, money, quote_json, quote_lines
from fleet.rehearsal import Rehearsed
from fleet.schema import describe
from fleet.settling import Settled
from sites.direction import Direction

__all__ = ["quote_json", "quote_lines", "site_lines"]


def call_lines(survey: Survey, made: Call) -> list[str]:
    """A call that was made."""
    allocation, proof = made.allocation, made.proof
    windows = len(allocation.chosen)
    gap = "-" if proof["gap"] is None else f"{proof['gap']:.2%}"
    lines = [
        event_line(survey),
        f"asked {allocation.requested_kw.max():,.1f} kW; expected {allocation.expected_kw.min():,.1f} to "
        f"{allocation.expected_kw.max():,.1f} kW from {windows} of {int(survey.under_node.sum())} sites",
        f"net cost {money(proof['money'], survey)}; with over-delivery priced {proof['objective']:,.2f}, which no "
        f"choice can bring below {proof['bound']:,.2f} (by {proof['bound_by']}); gap {gap} of gross cost; "
        f"{proof['status'].replace('_', ' ')}",
    ]
    if not allocation.met:
        lines.append(f"SHORT by {proof['shortfall_kwh']:,.1f} kWh, accepted as asked")
    lines += explained_lines(survey, made)
    lines += [f"note: {note}" for note in made.notes]
    lines += [f"record: {made.path}", f"next: shedwright orders {made.path.parents[2]} {made.event_id}"]
    return lines


def call_json(survey: Survey, made: Call) -> dict[str, Any]:
    """The same as a document."""
    return {
        "event_id": made.event_id,
        "path": str(made.path),
        "node_id": survey.node_id,
        "called_sites": sorted(str(name) for name in made.chosen.site_id),
        "requested_kw": made.allocation.requested_kw.tolist(),
        "expected_kw": made.allocation.expected_kw.tolist(),
        "explained": explained_json(survey, made),
        "proof": made.proof,
        "notes": list(made.notes),
    }


def orders_lines(written: Written) -> list[str]:
    """Orders that were written."""
    texts = sum(name.endswith(".txt") for name in written.files)
    notes = [f"note: {note}" for note in written.notes]
    return [f"{texts} orders in {written.path}, each as text and as JSON", *notes]


def orders_json(written: Written) -> dict[str, Any]:
    """The same as a document."""
    return {"path": str(written.path), "files": list(written.files), "notes": list(written.notes)}


def pages_lines(written: Pages) -> list[str]:
    """Pages that were written, and where to start."""
    count = sum(name.endswith(".html") for name in written.files)
    return [f"{count} pages in {written.path}; start at {written.index}"]


def pages_json(written: Pages) -> dict[str, Any]:
    """The same as a document."""
    return {"path": str(written.path), "index": str(written.index), "files": list(written.files)}


def settle_lines(settled: Settled) -> list[str]:
    """A settlement that was written: its statement's text, and where it lies."""
    text = (settled.path / "statement.txt").read_text(encoding="utf-8").rstrip("\n").split("\n")
    said = [f"note: {note}" for note in settled.notes if note not in settled.settlement.notes]
    return [*text, *said, f"settlement: {settled.path}"]


def settle_json(settled: Settled) -> dict[str, Any]:
    """The same as a document."""
    sites = settled.settlement.sites
    return {
        "path": str(settled.path),
        "revision": settled.revision,
        "delivered_kwh": float(sites["delivered_kwh"].sum()),
        "committed_kwh": float(sites["committed_kwh"].sum()),
        "total": str(sum(sites["total"], Decimal(0))),
        "states": {str(key): int(count) for key, count in sites["state"].value_counts().items()},
        "notes": list(settled.notes),
    }


def audit_lines(found: Any) -> list[str]:
    """An audit: holds or every fault kept."""
    checked = sum(found.checked.values())
    head = f"audit: {checked:,} values under {len(found.checked)} rules"
    if found.holds:
        return [f"{head}; the record holds", *[f"note: {note}" for note in found.notes]]
    hidden = sum(found.hidden.values())
    more = [f"... and {hidden} more of the same rules"] if hidden else []
    return [f"{head}; {len(found.faults) + hidden} faults", *[str(fault) for fault in found.faults], *more]


def audit_json(found: Any) -> dict[str, Any]:
    """The same as a document."""
    return {
        "holds": found.holds,
        "faults": [vars(fault) for fault in found.faults],
        "notes": list(found.notes),
        "checked": dict(found.checked),
    }


def rehearsal_lines(played: Rehearsed) -> list[str]:
    """The summary a manager reads."""
    survey, call, settled = played.survey, played.call, played.settled
    allocation = call.allocation
    step_h = survey.quoted.quotes.clock.step_h
    sites = settled.settlement.sites
    committed, delivered = float(sites["committed_kwh"].sum()), float(sites["delivered_kwh"].sum())
    paid = sum(sites["total"], Decimal(0))
    home = played.home
    way = " --direction absorb" if survey.ask.direction is Direction.ABSORB else ""
    return [
        f"REHEARSAL  {event_line(survey)}",
        "",
        f"  asked      {allocation.requested_kw.max():>10,.0f} kW in every interval "
        f"({allocation.requested_kw.sum() * step_h:,.0f} kWh)",
        f"  can give   {played.offer.available.sustained_kw:>10,.0f} kW sustained",
        f"  expected   {allocation.expected_kw.min():>10,.0f} kW at least, from {len(allocation.chosen)} of "
        f"{int(survey.under_node.sum())} sites under the node",
        f"  committed  {committed:>10,.0f} kWh at the sites' meters",
        f"  delivered  {delivered:>10,.0f} kWh settled from the meters",
        f"  true       {played.played.true_kwh:>10,.0f} kWh in the simulation behind the meters",
        f"  net cost   {call.proof['money']:>10,.2f} {survey.folder.settings.currency} expected; "
        f"gap to the bound {call.proof['gap'] or 0.0:.2%}, by {call.proof['bound_by']}",
        f"  payments   {paid:>10,} {survey.folder.settings.currency} to the sites",
        f"  audit      {'holds' if played.audit.holds else 'FAULTS: see shedwright audit'}",
        "",
        f"  fleet      {played.fleet}",
        f"  record     {call.path}",
        f"  orders     {played.orders.path}",
        f"  meters     {played.played.readings}",
        f"  settlement {settled.path}",
        f"  pages      {played.pages.index}",
        "",
        f"look further: shedwright quote {played.fleet}{way} --from {iso(survey.ask.event_from)} "
        f"--to {iso(survey.ask.event_to)} --at {iso(survey.ask.at)}",
        f"              shedwright audit {home} {call.event_id}",
        f"done in {played.seconds:.0f} s",
    ]


def rehearsal_json(played: Rehearsed) -> dict[str, Any]:
    """The same as a document."""
    return {
        "home": str(played.home),
        "call": call_json(played.survey, played.call),
        "orders": orders_json(played.orders),
        "readings": str(played.played.readings),
        "true_kwh": played.played.true_kwh,
        "settlement": settle_json(played.settled),
        "audit": audit_json(played.audit),
        "pages": pages_json(played.pages),
        "sustained_kw": played.offer.available.sustained_kw,
    }


def sample_lines(facts: Any) -> list[str]:
    """A sample that was written."""
    return [f"an invented fleet of {facts.sites} sites in {facts.path} (seed {facts.seed})"]


def sample_json(facts: Any) -> dict[str, Any]:
    """The same as a document."""
    return {"path": str(facts.path), "sites": facts.sites, "seed": facts.seed}


def columns_lines(name: str | None) -> list[str]:
    """The table of columns, a block a table."""
    lines: list[str] = []
    heading = ""
    for row in describe(name):
        here = f"{row['folder']}/{row['table']}"
        lines += [*([""] if heading else []), here] if here != heading else []
        heading = here
        lines.append(_column_line(row))
    return lines


def _column_line(row: dict[str, str]) -> str:
    low, high = row["low"], row["high"]
    span = f" {low or 'any'} to {high or 'any'}" if low or high else ""
    unit = f" {row['unit']}" if row["unit"] else ""
    default = f", default {row['default']}" if row["default"] else ""
    closed = f" [{', '.join(row['choices'].split())}]" if row["choices"] else ""
    where = f" (found in: {row['where']})" if row["where"] else ""
    need = {"yes": "required", "size": "one size required", "no": "optional"}[row["required"]]
    return f"  {row['name']}: {row['type']}{unit}{span}, {need}{default}. {row['meaning']}{closed}{where}"


def columns_json(name: str | None) -> list[dict[str, str]]:
    """One object a column, all as text."""
    return describe(name)
