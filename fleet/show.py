"""What a command says: lines for a person and one document for a machine, from the same objects.

Owns wording and layout of the terminal's text; figures are others'. Units are SI unless tons are asked for;
times are local with their offset.
"""

from decimal import Decimal
from typing import Any

import numpy as np

from fleet.calling import Call
from fleet.desk import Survey
from fleet.explained_text import explained_json, explained_lines
from fleet.ordering import Written
from fleet.quoting import Offer
from fleet.rehearsal import Rehearsed
from fleet.schema import describe
from fleet.settling import Settled
from fleet.wall_time import local_text
from fleet.words import limit_words
from sites.direction import Direction
from sites.quotes import COST_PARTS, LIMITED_BY
from sites.units import KW_TH_PER_TON


def _zone(survey: Survey) -> str:
    return survey.folder.settings.timezone


def _iso(time: np.datetime64) -> str:
    return f"{np.datetime_as_string(time, 's')}Z"


def _money(value: float, survey: Survey) -> str:
    return f"{value:,.2f} {survey.folder.settings.currency}"


def _event_line(survey: Survey) -> str:
    ask, zone = survey.ask, _zone(survey)
    return (
        f"{ask.direction} under node {survey.node_id}, {local_text(ask.event_from, zone)} to "
        f"{local_text(ask.event_to, zone)}, seen from {local_text(ask.at, zone)}"
    )


def quote_lines(survey: Survey, offer: Offer, tons: bool) -> list[str]:
    """What the fleet and each site can give, dearest limits last."""
    zone, quotes = _zone(survey), survey.quoted.quotes
    starts = quotes.clock.starts[quotes.event_from : quotes.event_to]
    lines = [
        _event_line(survey),
        f"sustained over all of it: {offer.available.sustained_kw:,.1f} kW"
        + ("" if offer.available.proven else " (callable; a little more may be possible)"),
        "most in each interval alone (kW):",
        *_wrapped(
            [
                f"{local_text(t, zone)[11:16]} {kw:,.0f}"
                for t, kw in zip(starts, offer.available.available_kw, strict=True)
            ]
        ),
        "",
        f"{'site':<14}{'usual':>8}{survey.ask.direction:>8}{'window':>14}{'off':>5}{'limit':>7}{'cost/kWh':>10}"
        f"{'recovery':>10}{'tank':>16}{'rise':>6}  what limits it",
        f"{'':<14}{'kW':>8}{'kW':>8}{'':>14}{'':>5}{'':>7}{survey.folder.settings.currency:>10}"
        f"{'kWh':>10}{'ton-h' if tons else 'kWh_th':>16}{'K':>6}",
    ]
    below = np.flatnonzero(survey.under_node)
    energy = (
        np.where(offer.best >= 0, quotes.expected_kw[offer.best].sum(axis=1), 0.0)
        if len(quotes.site)
        else offer.usual_kw * 0
    )
    lines += [
        _site_line(survey, offer, int(i), tons) for i in below[np.argsort(-energy[below], kind="stable")]
    ]
    lines += _notes(survey)
    return lines


def _site_line(survey: Survey, offer: Offer, i: int, tons: bool) -> str:
    roster, quotes = survey.fleet.roster, survey.quoted.quotes
    name = f"{str(roster.buildings.site_id[i])[:13]:<14}{offer.usual_kw[i]:>8,.0f}"
    reason = limit_words(LIMITED_BY[int(quotes.site_limited_by[i])]).replace("_", " ")
    why = survey.eligible.reason.get(str(roster.buildings.site_id[i]))
    if offer.best[i] < 0:
        return f"{name}{'-':>8}{'':>68}  {why or reason}"
    c = int(offer.best[i])
    start, end = int(quotes.window_start[c]), int(quotes.window_end[c])
    edges = np.append(quotes.clock.starts, quotes.clock.end)
    window = "-".join(local_text(edges[k], _zone(survey))[11:16] for k in (start, end))
    mean = quotes.expected_kw[c, start - quotes.event_from : end - quotes.event_from].mean()
    off = int(((quotes.stages.load_limit_fraction[c, 0] <= 0.0) & roster.chillers.exists[i]).sum())
    after = quotes.change_kw[c, end:].sum() * quotes.clock.step_h
    size = KW_TH_PER_TON if tons else 1.0
    usual = survey.quoted.ground.usual.inventory_kwh_th[i].sum(axis=0)
    full = survey.fleet.roster.tanks.capacity_kwh_th[i].sum()
    tank = f"{usual[start - 1] / size:,.0f}/{full / size:,.0f}" if full > 0.0 else "-"
    limit = float(survey.quoted.load_limit_fraction[c])
    rise = f"{survey.quoted.peak_rise_k[c]:.1f}"
    return (
        f"{name}{mean:>8,.0f}{window:>14}{off:>5}{limit:>7.0%}{offer.cheapest_per_kwh[i]:>10.3f}"
        f"{after:>10,.0f}{tank:>16}{rise:>6}  {reason}"
    )


def _wrapped(cells: list[str], each: int = 6) -> list[str]:
    return ["  " + "   ".join(cells[k : k + each]) for k in range(0, len(cells), each)]


def _notes(survey: Survey) -> list[str]:
    clipped = survey.quoted.ground.here.clipped_count
    notes = [*survey.folder.notes, *survey.feeders.notes, *survey.headroom.notes]
    if survey.fleet.assumed:
        notes.append(f"{len(survey.fleet.assumed)} values are assumed; `shedwright check` lists them")
    if clipped:
        notes.append(f"{clipped} machine-intervals lie outside the chiller curves' range and were held to it")
    return [f"note: {note}" for note in notes]


def quote_json(survey: Survey, offer: Offer) -> dict[str, Any]:
    """The same as a document: fleet.available_kw, fleet.sustained_kw, and per site."""
    quotes, site_id = survey.quoted.quotes, survey.fleet.roster.buildings.site_id
    edges = np.append(quotes.clock.starts, quotes.clock.end)
    sites = []
    for i in np.flatnonzero(survey.under_node):
        c = int(offer.best[i])
        row: dict[str, Any] = {
            "site_id": site_id[i],
            "usual_kw": float(offer.usual_kw[i]),
            "candidates": int(offer.candidates[i]),
            "limited_by": LIMITED_BY[int(quotes.site_limited_by[i])],
        }
        if c >= 0:
            row |= {
                "quote_id": quotes.quote_id[c],
                "window_start": _iso(edges[quotes.window_start[c]]),
                "window_end": _iso(edges[quotes.window_end[c]]),
                "expected_kw": quotes.expected_kw[c].tolist(),
                "net_cost": float(quotes.net_cost[c]),
                "cost": dict(zip(COST_PARTS, quotes.cost[c].tolist(), strict=True)),
                "recovery_energy_kwh": float(
                    quotes.change_kw[c, quotes.window_end[c] :].sum() * quotes.clock.step_h
                ),
                "cheapest_per_kwh": float(offer.cheapest_per_kwh[i]),
            }
        sites.append(row)
    return {
        "fleet": {
            "available_kw": offer.available.available_kw.tolist(),
            "sustained_kw": offer.available.sustained_kw,
            "proven": offer.available.proven,
        },
        "node_id": survey.node_id,
        "direction": str(survey.ask.direction),
        "event_from": _iso(survey.ask.event_from),
        "event_to": _iso(survey.ask.event_to),
        "sites": sites,
        "notes": [line.removeprefix("note: ") for line in _notes(survey)],
    }


def call_lines(survey: Survey, made: Call) -> list[str]:
    """A call that was made."""
    allocation, proof = made.allocation, made.proof
    windows = len(allocation.chosen)
    gap = "-" if proof["gap"] is None else f"{proof['gap']:.2%}"
    lines = [
        _event_line(survey),
        f"asked {allocation.requested_kw.max():,.1f} kW; expected {allocation.expected_kw.min():,.1f} to "
        f"{allocation.expected_kw.max():,.1f} kW from {windows} of {int(survey.under_node.sum())} sites",
        f"net cost {_money(proof['money'], survey)}; with over-delivery priced {proof['objective']:,.2f}, which no "
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
        f"REHEARSAL  {_event_line(survey)}",
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
        "",
        f"look further: shedwright quote {played.fleet}{way} --from {_iso(survey.ask.event_from)} "
        f"--to {_iso(survey.ask.event_to)} --at {_iso(survey.ask.at)}",
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
