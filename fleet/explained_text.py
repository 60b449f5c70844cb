"""What is told of a call that was made: marginal prices, what more would cost, who was left out.

Owns the wording only; the figures are explained.py's. Part of show.py's texts.
"""

from typing import Any

import numpy as np

from fleet.calling import Call
from fleet.desk import Survey
from fleet.explained import MORE_SHARE, FullNode
from fleet.wall_time import local_text

EACH_LINE = 6


def explained_lines(survey: Survey, made: Call) -> list[str]:
    """Why the choice is as it is; nothing where the request is not met."""
    why, currency = made.explained, survey.folder.settings.currency
    if why is None:
        return []
    ask = made.chosen.request
    lines = []
    worst = made.proof["worst_node"]
    if worst is not None:
        lines.append(f"largest gap of a single feeder: {made.proof['worst_node_gap']:.2%}, at node {worst}")
    for node, prices in zip(ask.node_ids, why.marginal_per_kwh.reshape(len(ask.node_ids), -1), strict=True):
        lines.append(f"one more kWh at node {node} would cost ({currency}/kWh):")
        cells = [
            f"{local_text(t, survey.folder.settings.timezone)[11:16]} {price:.3f}"
            for t, price in zip(ask.interval_starts, prices, strict=True)
        ]
        lines += ["  " + "   ".join(cells[k : k + EACH_LINE]) for k in range(0, len(cells), EACH_LINE)]
    lines += [_full_line(survey, made, full) for full in why.full_nodes]
    if why.more_cost is not None and why.more_cost < 0.0:
        lines.append(f"{MORE_SHARE:.0%} more would cost less than the gap of this choice")
    elif why.more_cost is not None:
        lines.append(f"{MORE_SHARE:.0%} more would cost {why.more_cost:,.2f} {currency} on top")
    elif why.more_tried:
        lines.append(f"{MORE_SHARE:.0%} more could not be given")
    site_id = survey.fleet.roster.buildings.site_id
    lines += [
        f"left out: {site_id[one.site]}, {one.per_kwh:.3f} {currency}/kWh where {one.worth_per_kwh:.3f} would be paid: "
        f"{one.reason}"
        for one in why.left_out
    ]
    return lines


def _full_line(survey: Survey, made: Call, full: FullNode) -> str:
    """Which node's limit holds the choice down, and what more room would save."""
    node = survey.feeders.node_id[full.node]
    starts = made.chosen.quoted.quotes.clock.starts
    when = local_text(starts[full.dearest], survey.folder.settings.timezone)
    often = "1 interval" if full.intervals == 1 else f"{full.intervals} intervals"
    return (
        f"the limit of node {node} binds in {often}: one more kWh of room under it would save up to "
        f"{full.per_kwh:.3f} {survey.folder.settings.currency} ({when})"
    )


def explained_json(survey: Survey, made: Call) -> dict[str, Any] | None:
    """The same as a document; null where the request is not met."""
    why = made.explained
    if why is None:
        return None
    ask, starts = made.chosen.request, made.chosen.quoted.quotes.clock.starts
    site_id = survey.fleet.roster.buildings.site_id
    prices = why.marginal_per_kwh.reshape(len(ask.node_ids), -1)
    return {
        "marginal_per_kwh": [
            {"node_id": node, "interval_start": f"{np.datetime_as_string(t, 's')}Z", "price": float(price)}
            for node, row in zip(ask.node_ids, prices, strict=True)
            for t, price in zip(ask.interval_starts, row, strict=True)
        ],
        "full_nodes": [
            {
                "node_id": str(survey.feeders.node_id[one.node]),
                "intervals": one.intervals,
                "dearest_interval_start": f"{np.datetime_as_string(starts[one.dearest], 's')}Z",
                "price": one.per_kwh,
            }
            for one in why.full_nodes
        ],
        "more_share": MORE_SHARE,
        "more_cost": why.more_cost,
        "left_out": [
            {
                "site_id": str(site_id[one.site]),
                "per_kwh": one.per_kwh,
                "worth_per_kwh": one.worth_per_kwh,
                "reason": one.reason,
            }
            for one in why.left_out
        ],
    }
