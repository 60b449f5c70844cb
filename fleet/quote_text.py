"""A quote in words: what fleet and sites can give, for how long, at what cost, and one site's reckoning line by line.

Owns wording and layout; figures are others'. Units are SI unless tons are asked for; times are local.
"""

from typing import Any, Final

import numpy as np

from fleet.check import assumed_lines
from fleet.desk import Survey
from fleet.quoting import Offer
from fleet.wall_time import local_text
from sites.quotes import COST_PARTS, LIMITED_BY
from sites.units import KW_TH_PER_TON, Floats

LIMIT_WORDS: Final = {
    "none": "nothing: its machines are off, no limit is reached",
    "already_off": "its machines are off anyway",
    "inventory": "the tank runs out",
    "discharge_rate": "the tank cannot give faster",
    "comfort": "the rooms would get too warm",
    "minimum_run": "its machines' minimum times leave no window",
    "availability": "its machines are out of service",
    "held_back": "the tank's reserve is held back",
    "recovery": "the tank would not be back in time",
    "notice": "the notice is too short",
    "call_limit": "it may not be called again",
    "full": "the tank is full",
    "already_on": "its machines run anyway",
}
"""What limits a site, in plain words."""
MERIT_SHOWN: Final = 12


def _zone(survey: Survey) -> str:
    return survey.folder.settings.timezone


def iso(time: np.datetime64) -> str:
    """A UTC instant as 2026-07-15T13:00:00Z."""
    return f"{np.datetime_as_string(time, 's')}Z"


def money(value: float, survey: Survey) -> str:
    """An amount with the fleet's currency."""
    return f"{value:,.2f} {survey.folder.settings.currency}"


def event_line(survey: Survey) -> str:
    """What was asked, where and when."""
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
        event_line(survey),
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
    lines += ["", *_held_lines(survey, offer), "", *_merit_lines(survey, offer), *_notes(survey)]
    return lines


def _site_line(survey: Survey, offer: Offer, i: int, tons: bool) -> str:
    roster, quotes = survey.fleet.roster, survey.quoted.quotes
    name = f"{str(roster.buildings.site_id[i])[:13]:<14}{offer.usual_kw[i]:>8,.0f}"
    reason = LIMIT_WORDS[LIMITED_BY[int(quotes.site_limited_by[i])]]
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


def _held_lines(survey: Survey, offer: Offer) -> list[str]:
    """How much each site holds up for how long, and all of them at the same time."""
    held, below = offer.held, np.flatnonzero(survey.under_node)
    some = below[np.isfinite(held.kw[below, 0])]
    order = some[np.argsort(-np.nan_to_num(held.kw[some]).sum(axis=1), kind="stable")]
    head = "".join(f"{f'{hours:g} h':>9}" for hours in held.hours)
    lines = [
        "how much for how long: kW held up in every interval of so many hours of this event, one window each",
        f"{'site':<14}{head}{'cost/kWh':>10}  machines off for the longest",
    ]
    lines += [f"{_name(survey, i):<14}{_cells(held.kw[i])}{_longest(survey, offer, i)}" for i in order]
    lines.append(
        f"{'together':<14}{_cells(offer.held_together_kw)}{'':>10}  at the same time, before feeder limits"
    )
    return lines


def _name(survey: Survey, i: int) -> str:
    return str(survey.fleet.roster.buildings.site_id[i])[:13]


def _cells(kw: Floats) -> str:
    return "".join(f"{value:>9,.0f}" if np.isfinite(value) else f"{'-':>9}" for value in kw)


def _longest(survey: Survey, offer: Offer, i: int) -> str:
    """Cost per kWh and machines off of the candidate that holds up the longest."""
    column = int(np.flatnonzero(np.isfinite(offer.held.kw[i]))[-1])
    off = machines_off(survey, int(offer.held.candidate[i, column]))
    return f"{offer.held.cost_per_kwh[i, column]:>10.3f}  {' '.join(off)}"


def machines_off(survey: Survey, c: int) -> list[str]:
    """Ids of the machines that a candidate switches off."""
    quotes, chillers = survey.quoted.quotes, survey.fleet.roster.chillers
    i = int(quotes.site[c])
    off = (quotes.stages.load_limit_fraction[c, 0] <= 0.0) & chillers.exists[i]
    return [str(name) for name in chillers.chiller_id[i][off]]


def _merit_lines(survey: Survey, offer: Offer) -> list[str]:
    """Sites by the cost of their cheapest kWh, and what has come together by then."""
    quotes, below = survey.quoted.quotes, np.flatnonzero(survey.under_node & (offer.cheapest >= 0))
    order = below[np.argsort(offer.cheapest_per_kwh[below], kind="stable")]
    step_h, lines, so_far = quotes.clock.step_h, [], 0.0
    for i in order[:MERIT_SHOWN]:
        expected = quotes.expected_kw[offer.cheapest[i]]
        so_far += float(expected.sum() * step_h)
        lines.append(
            f"{_name(survey, i):<14}{offer.cheapest_per_kwh[i]:>10.3f}{expected.max():>9,.0f}"
            f"{expected.sum() * step_h:>10,.0f}{so_far:>12,.0f}"
        )
    more = f"... and {len(order) - MERIT_SHOWN} dearer sites" if len(order) > MERIT_SHOWN else None
    return [
        "merit order: each site's cheapest window, dearest last",
        f"{'site':<14}{'cost/kWh':>10}{'kW':>9}{'kWh':>10}{'kWh so far':>12}",
        *lines,
        *([more] if more else []),
    ]


def _wrapped(cells: list[str], each: int = 6) -> list[str]:
    return ["  " + "   ".join(cells[k : k + each]) for k in range(0, len(cells), each)]


def _notes(survey: Survey) -> list[str]:
    clipped = survey.quoted.ground.here.clipped_count
    notes = [*survey.notes]
    notes += [note for note in survey.fleet.notes if "plant meter" in note]
    fitted = [one for one in survey.fleet.assumed if one.why.startswith("fitted")]
    notes += assumed_lines(fitted)
    if len(survey.fleet.assumed) > len(fitted):
        count = len(survey.fleet.assumed) - len(fitted)
        notes.append(f"{count} values are assumed; `shedwright check` lists them")
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
                "window_start": iso(edges[quotes.window_start[c]]),
                "window_end": iso(edges[quotes.window_end[c]]),
                "expected_kw": quotes.expected_kw[c].tolist(),
                "net_cost": float(quotes.net_cost[c]),
                "cost": dict(zip(COST_PARTS, quotes.cost[c].tolist(), strict=True)),
                "recovery_energy_kwh": float(
                    quotes.change_kw[c, quotes.window_end[c] :].sum() * quotes.clock.step_h
                ),
                "cheapest_per_kwh": float(offer.cheapest_per_kwh[i]),
                "held_kw": [_number(value) for value in offer.held.kw[i]],
                "held_cost_per_kwh": [_number(value) for value in offer.held.cost_per_kwh[i]],
            }
        sites.append(row)
    return {
        "fleet": {
            "available_kw": offer.available.available_kw.tolist(),
            "sustained_kw": offer.available.sustained_kw,
            "proven": offer.available.proven,
        },
        "held": {
            "hours": list(offer.held.hours),
            "together_kw": [_number(value) for value in offer.held_together_kw],
        },
        "node_id": survey.node_id,
        "direction": str(survey.ask.direction),
        "event_from": iso(survey.ask.event_from),
        "event_to": iso(survey.ask.event_to),
        "sites": sites,
        "notes": [line.removeprefix("note: ") for line in _notes(survey)],
    }


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None
