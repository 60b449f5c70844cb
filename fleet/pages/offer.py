"""Before the call: what the fleet can give, for how long, at what cost, what limits it and what is assumed.

Owns the page's sums over a survey's quotes. Made from the fleet folder, since no record exists yet.
"""

from collections.abc import Sequence
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.desk import Survey
from fleet.pages import figures, vocabulary
from fleet.pages.sheet import Fact, Figure, Link, Table, curve_figure, name, number, page, short, stamp
from fleet.pages.vocabulary import word
from fleet.quoting import Offer
from fleet.words import plain
from sites.quotes import LIMITED_BY
from sites.sustained import sustained
from sites.units import Bools, Floats

ASSUMED_SHOWN: Final = 40


def offer_page(survey: Survey, offer: Offer, asked_kw: float | None, links: Sequence[Link]) -> str:
    """The page of one survey; asked_kw: the request beside it, None where none is known."""
    ask, zone = survey.ask, survey.folder.settings.timezone
    sustained_kw = offer.available.sustained_kw
    facts = [
        Fact("can be held", f"{number(sustained_kw)} kW", "in all intervals together, feeders kept"),
        Fact("most in one interval", f"{number(offer.available.available_kw.max())} kW", "taken alone"),
        Fact(
            "sites",
            f"{int(_in(survey, offer).sum())} of {int(survey.under_node.sum())}",
            "under the node have a quote",
        ),
    ]
    if asked_kw is not None:
        facts.insert(0, Fact("asked", f"{number(asked_kw)} kW", _beside(asked_kw, sustained_kw)))
    return page(
        "offer.html.j2",
        title=f"What {short(survey.node_id)} can give",
        banner="",
        heading=f"What {short(survey.node_id)} can give",
        under=(
            f"{word(vocabulary.DIRECTION, ask.direction)}, {stamp(_utc(ask.event_from), zone)} to "
            f"{stamp(_utc(ask.event_to), zone)}, seen from {stamp(_utc(ask.at), zone)}."
        ),
        level=1.0,
        facts=facts,
        links=links,
        source="From the fleet folder as it stood; shedwright quote shows every site.",
        said=_said(offer, asked_kw),
        duration=_duration_figure(survey, offer, asked_kw),
        minus=word(vocabulary.MINUS, ask.direction),
        merit=_merit_figure(survey, offer, asked_kw),
        feeders=_feeder_table(survey, offer),
        limits=_limit_table(survey, offer),
        out=_out_table(survey, offer),
        assumed=_assumed_table(survey),
        notes=[plain(note) for note in survey.notes],
    )


def best_kw(survey: Survey, offer: Offer) -> Floats:
    """(site,) mean kW at the node over the whole event of each site's most energetic candidate; 0 = none."""
    factor = survey.fleet.roster.buildings.delivery_factor
    some = offer.best >= 0
    kw = np.zeros(len(offer.best))
    kw[some] = survey.quoted.quotes.expected_kw[offer.best[some]].mean(axis=1) * factor[some]
    return np.where(_in(survey, offer), kw, 0.0)


def duration_kw(survey: Survey, offer: Offer) -> tuple[tuple[float, ...], Floats]:
    """Lengths in hours and (length,) kW that sites under the node can each hold that long, summed at the node.

    A sum of sites one by one: feeder limits are not in it.
    """
    found = sustained(survey.quoted.quotes)
    factor = survey.fleet.roster.buildings.delivery_factor
    kw = np.nan_to_num(found.kw) * (factor * _in(survey, offer))[:, None]
    event_h = (survey.ask.event_to - survey.ask.event_from) / np.timedelta64(1, "h")
    kept = [place for place, hours in enumerate(found.hours) if hours <= event_h + 1e-9]
    return tuple(found.hours[place] for place in kept), kw[:, kept].sum(axis=0)


def _in(survey: Survey, offer: Offer) -> Bools:
    """(site,) under the node, allowed, with a quote."""
    found: Bools = survey.under_node & survey.eligible.allowed & (offer.best >= 0)
    return found


def _beside(asked_kw: float, sustained_kw: float) -> str:
    left = sustained_kw - asked_kw
    return f"{number(left)} kW to spare" if left >= 0.0 else f"{number(-left)} kW more than can be held"


def _said(offer: Offer, asked_kw: float | None) -> str:
    can = f"The fleet can hold {number(offer.available.sustained_kw)} kW through the whole event"
    proven = "" if offer.available.proven else "; a little more may be possible"
    if asked_kw is None:
        return f"{can}{proven}."
    met = (
        "so the request can be met"
        if asked_kw <= offer.available.sustained_kw
        else "so the request cannot be met as asked"
    )
    return f"{can}{proven}; {number(asked_kw)} kW is asked, {met}."


def _duration_figure(survey: Survey, offer: Offer, asked_kw: float | None) -> Figure:
    hours, kw = duration_kw(survey, offer)
    event_h = float((survey.ask.event_to - survey.ask.event_from) / np.timedelta64(1, "h"))
    together = float(offer.available.sustained_kw)
    marks = [("relieving each other", "later", event_h, together), *_asked(asked_kw, event_h, asked_kw)]
    curve = figures.Curve(
        "kW against duration",
        "The line sums what each site can hold by itself for so long, feeder limits left aside; relieving each other, "
        "the sites hold the marked kW through the whole event, feeder limits kept.",
        "hours",
        "kW",
        [("each site by itself", "event", np.array(hours), kw)],
        marked=marks,
    )
    rows = [[f"{length:g} h", number(value)] for length, value in zip(hours, kw)]
    rows.append([f"{event_h:g} h, relieving each other", number(together)])
    return curve_figure(curve, Table("Numbers of “kW against duration”", [("for", "w"), ("kW", "n")], rows))


def _asked(asked_kw: float | None, x: float | None, y: float | None) -> list[tuple[str, str, float, float]]:
    """The request as a mark of a curve; none where none is known."""
    return [] if asked_kw is None or x is None or y is None else [("asked", "asked", x, y)]


def _merit_figure(survey: Survey, offer: Offer, asked_kw: float | None) -> Figure:
    """Sites' most energetic quotes, cheapest first: net cost per kWh against kW."""
    quotes, kw = survey.quoted.quotes, best_kw(survey, offer)
    rows_in = np.flatnonzero(kw > 0.0)
    energy = quotes.expected_kw[offer.best[rows_in]].sum(axis=1) * quotes.clock.step_h
    per_kwh = quotes.net_cost[offer.best[rows_in]] / energy
    order = np.argsort(per_kwh, kind="stable")
    rows_in, per_kwh = rows_in[order], per_kwh[order]
    currency = survey.folder.settings.currency
    curve = figures.Curve(
        "Merit order",
        "Each site's largest quote, cheapest first: its net cost per kWh against kW in all, mean over the event.",
        "kW",
        f"{currency} per kWh",
        [("net cost per kWh", "event", kw[rows_in].cumsum(), per_kwh)],
        stepped=True,
        marked=_asked(asked_kw, asked_kw, 0.0),
    )
    site_id, total = survey.fleet.roster.buildings.site_id, kw[rows_in].cumsum()
    rows = [
        [name(site_id[site]), number(kw[site]), number(total[place]), number(per_kwh[place], 3)]
        for place, site in enumerate(rows_in)
    ]
    heads = [("site", ""), ("kW", "n"), ("in all", "n"), (f"{currency} per kWh", "n")]
    return curve_figure(curve, Table("Numbers of “Merit order”", heads, rows))


def _feeder_table(survey: Survey, offer: Offer) -> Table:
    kw, feeders = best_kw(survey, offer), survey.feeders
    rows = []
    for place, node in enumerate(feeders.node_id):
        inside = feeders.below[place]
        limit = feeders.limit_kw[place]
        rows.append(
            [
                name(node),
                number((kw[inside] > 0.0).sum()),
                number(kw[inside].sum()),
                number(survey.headroom.kw[place].min()) if np.isfinite(limit) else "no limit",
                number(limit) if np.isfinite(limit) else "no limit",
            ]
        )
    heads = [
        ("feeder", ""),
        ("sites", "n"),
        ("can give, kW", "n"),
        ("least headroom, kW", "n"),
        ("limit, kW", "n"),
    ]
    return Table("By feeder: mean kW over the event, and what may be added before its limit", heads, rows)


def _limit_table(survey: Survey, offer: Offer) -> Table:
    kw, inside = best_kw(survey, offer), _in(survey, offer)
    reason = survey.quoted.quotes.site_limited_by
    rows = [
        [word(vocabulary.LIMITED_BY, LIMITED_BY[int(code)]), number(mine.sum()), number(kw[mine].sum())]
        for code in np.unique(reason[inside])
        for mine in [inside & (reason == code)]
    ]
    return Table(
        "What keeps sites from giving more",
        [("limited by", "t"), ("sites", "n"), ("can give, kW", "n")],
        rows,
    )


def _out_table(survey: Survey, offer: Offer) -> Table:
    site_id, why = survey.fleet.roster.buildings.site_id, survey.eligible.reason
    codes = survey.quoted.quotes.site_limited_by
    rows: list[list[Any]] = [
        [
            name(site_id[row]),
            why.get(str(site_id[row])) or word(vocabulary.LIMITED_BY, LIMITED_BY[int(codes[row])]),
        ]
        for row in np.flatnonzero(survey.under_node & ~_in(survey, offer))
    ]
    return Table("Sites under the node that are out, and why", [("site", ""), ("why", "t")], rows)


def _assumed_table(survey: Survey) -> Table:
    """Assumed values, by table and column."""
    found: dict[tuple[str, str], list[str]] = {}
    for one in survey.fleet.assumed:
        found.setdefault((str(one.table), str(one.column)), []).append(str(one.value))
    ranked = sorted(found.items(), key=lambda item: (-len(item[1]), item[0]))
    rows: list[list[Any]] = [
        [f"{table}.{column}", _values(values), number(len(values))]
        for (table, column), values in ranked[:ASSUMED_SHOWN]
    ]
    if len(ranked) > ASSUMED_SHOWN:
        rows.append([f"and {len(ranked) - ASSUMED_SHOWN} more: shedwright check lists all"])
    return Table("Values the fleet does not give", [("value of", "t"), ("taken", "t"), ("times", "n")], rows)


def _values(values: Sequence[str]) -> str:
    """One assumed value as it is, several by example."""
    different = list(dict.fromkeys(values))
    few = ", ".join(plain(value) for value in different[:3])
    return few if len(different) <= 3 else f"{few} and {len(different) - 3} other values"


def _utc(at: np.datetime64) -> pd.Timestamp:
    return pd.Timestamp(at).tz_localize("UTC")
