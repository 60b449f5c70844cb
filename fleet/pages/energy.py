"""The page of where each kWh comes back, by site and feeder.

Owns what stands on it; the arithmetic is balance.py's.
"""

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd

from fleet.pages import figures, vocabulary
from fleet.pages.balance import Cooling, Electricity, by_hour, comeback, cooling, electricity
from fleet.pages.case import Case
from fleet.pages.sheet import Fact, Figure, Link, Table, clock, figure, name, number, page, percent
from fleet.pages.vocabulary import word


def energy_page(case: Case, links: Sequence[Link]) -> str:
    """The page; FleetError where the record's cooling does not close."""
    cold, electric = cooling(case), electricity(case)
    return page(
        "energy.html.j2",
        title=f"{case.record.event_id}: where each kWh comes back",
        banner="",
        heading="Where each kWh comes back",
        under=f"{case.period}. Event {case.record.event_id}, {word(vocabulary.PURPOSE, case.purpose)}.",
        level=0.35,
        facts=_facts(case, electric, cold),
        links=links,
        source=(
            f"From the record of event {case.record.event_id}, call revision {case.record.revision}: plans, not "
            f"meters. Times are local ({case.zone})."
        ),
        hours=_hours_figure(case),
        electric=_electric_table(case, electric),
        cold=_cold_table(case, cold),
        cold_said=_cold_said(cold),
        efficiency=_efficiency(electric),
        peak=_peak(case),
        peaks=_peak_table(case),
    )


def _peak(case: Case) -> str:
    back = comeback(case)
    at = clock(_utc(back.planned_at), case.zone, case.start)
    return (
        f"After the windows the plants together draw at most {number(back.planned_kw)} kW more than usual, at {at}. "
        f"With no staggering, every site's own highest in the same moment, it would be {number(back.together_kw)} kW."
    )


def _facts(case: Case, electric: Electricity, cold: Cooling) -> list[Fact]:
    money_less = np.nansum(electric.not_drawn * electric.price_not_drawn)
    money_more = np.nansum(electric.drawn_more * electric.price_drawn_more)
    less, more = electric.not_drawn.sum(), electric.drawn_more.sum()
    return [
        Fact(
            "not drawn",
            f"{number(less)} kWh",
            f"at {number(money_less / less if less else np.nan, 3)} {case.currency}",
        ),
        Fact(
            "drawn more",
            f"{number(more)} kWh",
            f"at {number(money_more / more if more else np.nan, 3)} {case.currency}",
        ),
        Fact(
            "never made", f"{number(cold.never_came_in.sum())} kWh_th", "the zones floated: less heat came in"
        ),
        Fact("left open", f"{number(np.abs(cold.left_over).sum(), 3)} kWh_th", "the cooling closes"),
    ]


def _hours_figure(case: Case) -> Figure:
    hours, less, more = by_hour(case)
    starts = hours.tz_convert("UTC").tz_localize(None).to_numpy("datetime64[us]")
    edges = np.append(starts, starts[-1] + np.timedelta64(3_600_000_000, "us"))
    chart = figures.Chart(
        "Not drawn and drawn more, hour by hour",
        "Drawn more than usual above zero, not drawn below it, kWh in each hour, called sites together.",
        "kWh",
        edges,
        case.zone,
        [figures.Series("drawn more", "later", more), figures.Series("not drawn", "event", -less)],
        case.event,
        "event",
    )
    return figure(chart)


def _grouped(case: Case, cells: Any, total: Any) -> list[list[Any]]:
    """Rows by feeder, each feeder's own sum in its heading row."""
    rows: list[list[Any]] = []
    for node, members in case.by_feeder.items():
        rows.append([name(node)])
        rows += [[name(case.site_ids[row]), *cells(row)] for row in members]
        rows.append(["all of it", *total(members)])
    return rows


def _electric_table(case: Case, electric: Electricity) -> Table:
    def cells(row: int) -> list[str]:
        return [
            number(electric.not_drawn[row]),
            number(electric.price_not_drawn[row], 3),
            number(electric.drawn_more[row]),
            number(electric.price_drawn_more[row], 3),
            clock(case.windows["window_end"].iloc[row], case.zone, case.start),
            number(case.windows["net_cost"].iloc[row], 2),
        ]

    def total(rows: Sequence[int]) -> list[str]:
        at = list(rows)
        less, more = electric.not_drawn[at], electric.drawn_more[at]
        return [
            number(less.sum()),
            number(np.nansum(less * electric.price_not_drawn[at]) / less.sum() if less.sum() else None, 3),
            number(more.sum()),
            number(np.nansum(more * electric.price_drawn_more[at]) / more.sum() if more.sum() else None, 3),
            "",
            number(case.windows["net_cost"].iloc[at].sum(), 2),
        ]

    heads = [
        ("site, by feeder", ""),
        ("not drawn, kWh", "n"),
        ("at a mean price of", "n"),
        ("drawn more, kWh", "n"),
        ("at a mean price of", "n"),
        ("window ends", "w"),
        (f"net cost, {case.currency}", "n"),
    ]
    everything = ["all", *total(range(len(case.site_ids)))]
    return Table(
        f"Electricity by site and feeder, prices in {case.currency} per kWh",
        heads,
        _grouped(case, cells, total),
        everything,
    )


def _cold_table(case: Case, cold: Cooling) -> Table:
    parts = (
        cold.not_made,
        cold.made_later,
        cold.left_in_tank,
        cold.loss_spared,
        cold.kept_in_zone,
        cold.never_came_in,
        cold.left_over,
    )

    def cells(row: int) -> list[str]:
        return [number(part[row], 1) for part in parts]

    def total(rows: Sequence[int]) -> list[str]:
        return [number(part[list(rows)].sum(), 1) for part in parts]

    heads = [
        ("site, by feeder", ""),
        ("not made", "n"),
        ("made later", "n"),
        ("left in the tank", "n"),
        ("losses spared (− lost)", "n"),
        ("still warm at the end", "n"),
        ("never drawn: zone floated", "n"),
        ("left open", "n"),
    ]
    everything = ["all", *total(range(len(case.site_ids)))]
    return Table("Cooling by site and feeder, kWh_th", heads, _grouped(case, cells, total), everything)


def _cold_said(cold: Cooling) -> str:
    less, more, tank, loss, zone, walls = (
        number(part.sum())
        for part in (
            cold.not_made,
            cold.made_later,
            cold.left_in_tank,
            cold.loss_spared,
            cold.kept_in_zone,
            cold.never_came_in,
        )
    )
    return (
        f"{less} kWh_th are not made when they usually are; {more} kWh_th are made later. The difference is in the "
        f"tanks at the plan's end ({tank} lower), in losses the emptier tanks are spared ({loss}), in rooms still warm "
        f"({zone}), and in heat that never came in through warmer rooms' walls ({walls}). A minus says that it went "
        "the other way: more was lost, or more is held."
    )


def _efficiency(electric: Electricity) -> str:
    less, more = electric.not_drawn.sum(), electric.drawn_more.sum()
    ratio = percent(more / less) if less else "–"
    return (
        f"Of what is not drawn, {ratio} is drawn at other hours: making ice takes more than direct cooling, a cool "
        "night takes less, and pumps run longer."
    )


def _peak_table(case: Case) -> Table:
    rows = []
    for node, members in case.by_feeder.items():
        back = comeback(case, members)
        rows.append(
            [
                name(node),
                number(len(members)),
                number(back.planned_kw),
                clock(_utc(back.planned_at), case.zone, case.start),
                number(back.together_kw),
            ]
        )
    heads = [
        ("feeder", ""),
        ("sites", "n"),
        ("comes back at most, kW", "n"),
        ("when", "w"),
        ("with no staggering, kW", "n"),
    ]
    return Table("The peak that comes back, by feeder", heads, rows)


def _utc(at: np.datetime64) -> Any:
    return pd.Timestamp(at).tz_localize("UTC")
