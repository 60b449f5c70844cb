"""The order sheet: what one site's operator reads, on one page, and the list that leads to all of them.

Owns the sheet's layout; every word on it is an Order's (orders.py), which is made of the record alone.
"""

from collections.abc import Sequence
from typing import Any, Final

import pandas as pd
from markupsafe import Markup

from fleet.called import CalledSite
from fleet.orders import Order
from fleet.pages import vocabulary
from fleet.pages.case import Case
from fleet.pages.diary import Withdrawn
from fleet.pages.sheet import Fact, Link, Table, clock, name, page, sentence, short
from fleet.pages.vocabulary import word
from fleet.words import plain

ROOMY, TIGHT = 1250, 2100
"""Characters of an order up to which its printed sheet is set roomy, tight; above, dense."""
DENSITIES: Final = ("roomy", "tight", "dense")
LINE_WORTH: Final = 90
"""Characters that a line to act on counts for besides its own: its row, its blanks."""


def sheet_page(order: Order, links: Sequence[Link], site: CalledSite) -> str:
    """One order as one printed page; on a phone it scrolls downwards only."""
    replaces = "nothing" if order.replaces is None else f"revision {order.replaces}"
    machines = [site.words.tag(str(one.chiller_id)) for one in site.chillers]
    return page(
        "order.html.j2",
        title=f"Order {order.number}, revision {order.revision}: {short(order.site_id)}",
        order=order,
        site_name=name(order.site_id),
        links=links,
        density=density(order),
        replaces=replaces,
        readings=[*(site.words.tag(str(tank.tank_id)) for tank in site.tanks), *machines][:6],
        ice=site.has_ice,
    )


def density(order: Order) -> str:
    """How closely the printed sheet is set: by how much stands on it."""
    said = [
        order.site_id,
        order.contact,
        order.notes,
        order.restart,
        order.recharge,
        *order.before,
        *order.stop,
    ]
    said += [part for line in order.lines for part in (line.do, line.see, line.if_not)]
    worth = sum(map(len, said)) + LINE_WORTH * len(order.lines)
    return DENSITIES[(worth > ROOMY) + (worth > TIGHT)]


def orders_page(
    case: Case, orders: Sequence[tuple[Order, str]], withdrawn: Sequence[Withdrawn], links: Sequence[Link]
) -> str:
    """All sheets of an event with their calendar files; orders: (order, name of its files)."""
    rows: list[list[Any]] = []
    for order, stem in orders:
        files = Markup('<a href="orders/{0}.html">sheet</a>, <a href="orders/{0}.ics">calendar</a>').format(
            stem
        )
        window = (pd.Timestamp(order.window_start), pd.Timestamp(order.window_end))
        rows.append(
            [
                name(order.site_id),
                files,
                f"{clock(window[0], case.zone)} – {clock(window[1], case.zone, case.end)}",
                sentence(
                    [
                        plain(step.unit_id)
                        for line in order.lines
                        for step in line.steps
                        if step.action == "off"
                    ]
                )
                or "none",
            ]
        )
    for gone in withdrawn:
        link = Markup('<a href="orders/{}.ics">cancelled in the calendar</a>').format(gone.stem)
        rows.append([name(gone.site_id), link, "withdrawn", ""])
    return page(
        "orders.html.j2",
        title=f"{case.record.event_id}: orders",
        banner="REHEARSAL: these orders are not to be acted on" if case.purpose == "rehearsal" else "",
        heading="Orders",
        under=f"{case.period}. Event {case.record.event_id}, {word(vocabulary.PURPOSE, case.purpose)}.",
        level=0.6,
        facts=[
            Fact("sheets", str(len(orders))),
            Fact("call revision", str(case.record.revision)),
            Fact("withdrawn", str(len(withdrawn))),
        ],
        links=links,
        source=f"From the record of event {case.record.event_id}, call revision {case.record.revision}.",
        table=Table(
            "A sheet for each called site",
            [("site", ""), ("files", "t"), ("window", "w"), ("off", "t")],
            rows,
        ),
        withdrawn=len(withdrawn),
    )
