"""Why a call is refused as asked: what lacks, what binds, and the nearest request that can be met.

Owns the refusal's sentences and its document. What could be had on other terms is nearest.py's to find out.
"""

import numpy as np

from fleet.allocate import Allocation
from fleet.desk import Survey
from fleet.errors import CannotBeMet
from fleet.limits import COUNTED, IN_FORCE
from fleet.nearest import Suggestion, lifted, nearest
from fleet.request import Request
from fleet.shortage import Shortage, explain
from fleet.wall_time import local_text, utc_timestamp
from fleet.wishes import Wishes
from sites.quotes import LIMITED_BY

NAMED = 5
"""Sites that a sentence names; the rest is counted."""


def cannot(survey: Survey, ask: Request, allocation: Allocation, wishes: Wishes) -> CannotBeMet:
    """The refusal with, per interval, what is available and what binds."""
    if len(ask.node_ids) > 1:
        return _several(survey, ask, allocation)
    allowed = survey.eligible.allowed & ~np.isin(survey.fleet.roster.buildings.site_id, wishes.exclude)
    shortage = explain(
        allocation,
        survey.quoted.quotes,
        survey.feeders,
        survey.headroom.kw,
        survey.node_id,
        survey.fleet.roster.buildings.delivery_factor,
        allowed,
    )
    asked, sustained = float(ask.requested_kw.max()), shortage.available.sustained_kw
    plain = not wishes.exclude
    more = lifted(survey) if plain else {}
    near = nearest(survey, asked, sustained) if plain else []
    lines = _lines(survey, shortage, more, near)
    return CannotBeMet("\n".join(lines), _detail(survey, shortage, more, near))


def cannot_include(survey: Survey, names: list[str]) -> CannotBeMet:
    """The refusal where sites that must be called cannot be, with each one's reason and the way out."""
    quotes, site_id = survey.quoted.quotes, survey.fleet.roster.buildings.site_id
    offered = set(site_id[np.unique(quotes.site)].tolist())
    lines, reasons = [], {}
    for name in names:
        place = int(np.flatnonzero(site_id == name)[0])
        if name in survey.eligible.reason:
            why = survey.eligible.reason[name]
        elif not survey.under_node[place]:
            why = f"is not under node {survey.node_id}"
        elif name not in offered:
            limit = LIMITED_BY[int(quotes.site_limited_by[place])].replace("_", " ")
            why = f"has nothing to give in these hours: {limit}"
        else:
            why = "fits into no choice that keeps the feeder limits and the request"
        reasons[name] = why
        lines.append(f"  {name} {why}")
    text = "the call cannot be made with every site that must be in:"
    return CannotBeMet(
        "\n".join([text, *lines, "take it off --include, or change hours, node or kW"]),
        {"cannot_include": reasons},
    )


def cannot_cap(allocation: Allocation, cap_kw: float) -> CannotBeMet:
    """The refusal where no choice was found that keeps over-delivery under its cap."""
    over = float(allocation.over_kw.max())
    return CannotBeMet(
        f"no choice found gives at most {cap_kw:,.1f} kW too much in every interval; the closest lies {over:,.1f} kW "
        f"above that: try --most-over {np.ceil(cap_kw + over):,.0f}",
        {"over_cap_kw": cap_kw, "beyond_cap_kw": over},
    )


def _several(survey: Survey, ask: Request, allocation: Allocation) -> CannotBeMet:
    """The refusal of a request at several nodes: what lacks at each, interval by interval."""
    zone = survey.folder.settings.timezone
    lines, rows = ["the request cannot be met as asked:"], []
    given = allocation.expected_kw.reshape(len(ask.node_ids), -1)
    gap = allocation.shortfall_kw.reshape(len(ask.node_ids), -1)
    for node, asked, got, lack in zip(ask.node_ids, ask.by_node_kw, given, gap, strict=True):
        for start, a, g, short in zip(ask.interval_starts, asked, got, lack, strict=True):
            rows.append(
                {
                    "node_id": node,
                    "interval_start": f"{np.datetime_as_string(start, 's')}Z",
                    "requested_kw": float(a),
                    "best_answer_kw": float(g),
                    "gap_kw": float(short),
                }
            )
            if short > 0.0:
                lines.append(f"  {node} {local_text(start, zone)}  asked {a:,.1f}, best answer {g:,.1f}")
    lines += [*not_callable(survey), "ask each node alone with --node for what it can give"]
    return CannotBeMet("\n".join(lines), {"intervals": rows, "not_callable": not_callable(survey)})


def _lines(survey: Survey, shortage: Shortage, more: dict[str, float], near: list[Suggestion]) -> list[str]:
    zone = survey.folder.settings.timezone
    starts = survey.quoted.quotes.clock.starts[survey.quoted.quotes.event_from :]
    lines = ["the request cannot be met as asked:", *shortage.sentences(), *not_callable(survey)]
    for name, kw in more.items():
        gain = kw - shortage.available.sustained_kw
        if gain > 0.0:
            lines.append(f"+{gain:,.1f} kW if {name} did not bind")
    lines.append("by interval (kW):")
    rows = zip(
        starts, shortage.requested_kw, shortage.available.available_kw, shortage.expected_kw, strict=False
    )
    for start, asked, alone, given in rows:
        lines.append(
            f"  {local_text(start, zone)}  asked {asked:,.1f}, at most {alone:,.1f} alone, best answer {given:,.1f}"
        )
    if near:
        lines.append("what can be met:")
    lines += [
        f"  {one.change}: --kw {one.kw:g} --from {_iso(one.event_from)} --to {_iso(one.event_to)}"
        for one in near
    ]
    lines.append(
        "ask for less, for a shorter time or at a wider node; or take the best answer with --accept-less"
    )
    return lines


def _iso(time: np.datetime64) -> str:
    return f"{np.datetime_as_string(time, 's')}Z"


def not_callable(survey: Survey) -> list[str]:
    """A sentence for each reason why sites under the node may not be called, calls in force with their end."""
    below = [str(name) for name in survey.fleet.roster.buildings.site_id[survey.under_node]]
    reasons: dict[str, list[str]] = {}
    for name in below:
        if name in survey.eligible.reason:
            reasons.setdefault(survey.eligible.reason[name], []).append(name)
    said = [f"not called: {_few(names)}, which {why}" for why, names in reasons.items() if why != IN_FORCE]
    past = survey.past
    counted = past[past["purpose"].isin(COUNTED) & past["site_id"].isin(reasons.get(IN_FORCE, []))]
    running = counted[counted["window_end"] > utc_timestamp(survey.ask.at)]
    for event_id, windows in running.groupby("event_id"):
        last = windows["window_end"].max().tz_localize(None).to_datetime64()
        until = local_text(last, survey.folder.settings.timezone)
        said.append(
            f"not called: {_few(sorted(windows['site_id']))}, bound by the call in force {event_id} until {until}; "
            "call them again from then on, or ask at a node without them"
        )
    return said


def _few(names: list[str]) -> str:
    """The first names, the rest counted."""
    more = f" and {len(names) - NAMED} more" if len(names) > NAMED else ""
    return ", ".join(names[:NAMED]) + more


def _detail(
    survey: Survey, shortage: Shortage, more: dict[str, float], near: list[Suggestion]
) -> dict[str, object]:
    quotes = survey.quoted.quotes
    starts = quotes.clock.starts[quotes.event_from : quotes.event_to]
    return {
        "sustained_kw": shortage.available.sustained_kw,
        "intervals": [
            {
                "interval_start": f"{np.datetime_as_string(start, 's')}Z",
                "requested_kw": float(asked),
                "available_kw": float(alone),
                "best_answer_kw": float(given),
                "gap_kw": float(gap),
            }
            for start, asked, alone, given, gap in zip(
                starts,
                shortage.requested_kw,
                shortage.available.available_kw,
                shortage.expected_kw,
                shortage.gap_kw,
                strict=True,
            )
        ],
        "sustained_kw_if_lifted": shortage.lifted | more,
        "can_be_met": [
            {
                "change": one.change,
                "kw": one.kw,
                "event_from": _iso(one.event_from),
                "event_to": _iso(one.event_to),
            }
            for one in near
        ],
        "sites_limited_by": shortage.limited_by,
        "not_callable": not_callable(survey),
    }
