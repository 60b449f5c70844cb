"""Why a call is refused as asked: what lacks, what binds, and the nearest request that can be met.

Owns the refusal's sentences and its document. What could be had on other terms is nearest.py's to find out.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from fleet.allocate import Allocation
from fleet.desk import Survey
from fleet.errors import CannotBeMet
from fleet.limits import COUNTED, IN_FORCE
from fleet.nearest import Suggestion, Want, base_share, lifted, nearest
from fleet.request import Request
from fleet.shortage import Shortage, explain
from fleet.wall_time import local_text, utc_timestamp
from fleet.wishes import Wishes, named
from sites.quotes import LIMITED_BY

NAMED = 5
"""Sites that a sentence names; the rest is counted."""
LEAST_GAIN = 1e-3
"""A lifted class that brings less than this share of the request is not told: figures are that rough."""


@dataclass(frozen=True)
class Told:
    """All that a refusal tells."""

    want: Want
    shortage: Shortage
    base_share: float
    """The multiple of the request that can be given in all intervals together"""
    lifted: dict[str, float]
    near: list[Suggestion]

    def rows(self) -> Iterator[tuple[str, np.datetime64, float, float, float, float]]:
        """Node, interval and its kW: asked, most alone, best answer, gap; only where something is asked."""
        ask, told = self.want.ask, self.shortage
        nodes = np.repeat(np.array(ask.node_ids, dtype=object), ask.interval_count)
        starts = np.tile(ask.interval_starts, len(ask.node_ids))
        figures = (told.requested_kw, told.available_kw, told.expected_kw, told.gap_kw)
        for node, start, *kw in zip(nodes, starts, *(one.tolist() for one in figures), strict=True):
            if kw[0] > 0.0:
                yield str(node), start, kw[0], kw[1], kw[2], kw[3]


def cannot(survey: Survey, ask: Request, allocation: Allocation, wishes: Wishes) -> CannotBeMet:
    """The refusal with, per node and interval, what is available; what binds; and what can be met."""
    want = Want(survey, ask, named(wishes.exclude, survey.fleet.roster.buildings.site_id))
    shortage = explain(
        allocation,
        survey.quoted.quotes,
        survey.feeders,
        survey.headroom.kw,
        ask,
        survey.fleet.roster.buildings.delivery_factor,
        want.allowed,
    )
    flat_share = float(shortage.sustained_kw[0]) / float(ask.requested_kw.max())
    base = flat_share if want.is_flat else base_share(want)
    told = Told(want, shortage, base, lifted(want), nearest(want, base, shortage.available_kw))
    return CannotBeMet("\n".join(_lines(told)), _detail(told))


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


def _lines(told: Told) -> list[str]:
    """The refusal's sentences, most general first."""
    survey, ask = told.want.survey, told.want.ask
    lines = ["the request cannot be met as asked:", *told.shortage.sentences(), *not_callable(survey)]
    if not told.want.is_flat:
        lines.append(f"at most {told.base_share:.1%} of every kW asked can be had in all intervals together")
    for name, share in told.lifted.items():
        more = share - told.base_share
        if more > LEAST_GAIN:
            flat = f"{more * float(ask.requested_kw.max()):,.1f} kW"
            lines.append(f"+{flat if told.want.is_flat else f'{more:.1%} of it'} if {name} did not bind")
    lines.append("by interval (kW):")
    for node, start, asked, alone, given, _ in told.rows():
        where = "" if len(ask.node_ids) == 1 else f"{node} "
        when = local_text(start, survey.folder.settings.timezone)
        lines.append(
            f"  {where}{when}  asked {asked:,.1f}, at most {alone:,.1f} alone, best answer {given:,.1f}"
        )
    if told.near:
        lines.append("what can be met:")
    lines += [f"  {one.change}: {_suggested(told.want, one)}" for one in told.near]
    lines.append(
        "ask for less, for a shorter time or at a wider node; or take the best answer with --accept-less"
    )
    return lines


def _suggested(want: Want, one: Suggestion) -> str:
    """A suggestion as options of the call, or as what to change in the request file."""
    when = f"--from {_iso(one.event_from)} --to {_iso(one.event_to)}"
    if want.is_flat:
        return f"--kw {one.kw[0, 0]:g} {when}"
    if one.change == "less":
        return f"every kW of the request times {one.kw.sum() / want.ask.requested_kw.sum():.2f}"
    first, last = (
        local_text(t, want.survey.folder.settings.timezone) for t in (one.event_from, one.event_to)
    )
    return f"the same kW from {first} to {last}"


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


def _detail(told: Told) -> dict[str, object]:
    """The refusal as a document; shares are multiples of every kW asked."""
    ask, shortage = told.want.ask, told.shortage
    found: dict[str, object] = {
        "intervals": [
            {
                "node_id": node,
                "interval_start": _iso(start),
                "requested_kw": asked,
                "available_kw": alone,
                "best_answer_kw": given,
                "gap_kw": gap,
            }
            for node, start, asked, alone, given, gap in told.rows()
        ],
        "sustained_share": told.base_share,
        "sustained_share_if_lifted": told.lifted,
        "can_be_met": [
            {
                "change": one.change,
                "kw": one.kw.tolist(),
                "event_from": _iso(one.event_from),
                "event_to": _iso(one.event_to),
            }
            for one in told.near
        ],
        "sites_limited_by": shortage.limited_by,
        "not_callable": not_callable(told.want.survey),
    }
    if len(ask.node_ids) == 1:
        found["sustained_kw"] = float(shortage.sustained_kw[0])
    return found
