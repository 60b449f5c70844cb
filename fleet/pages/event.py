"""The event page: asked, expected, promised, cost; courses, windows, tanks, feeders, standby sites, proof.

Owns what stands on it. Figures are rows of the call's record or sums of them.
"""

from collections.abc import Sequence
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.pages import figures, vocabulary
from fleet.pages.case import Case
from fleet.pages.sheet import (
    Fact,
    Figure,
    Link,
    Table,
    clock,
    figure,
    name,
    number,
    page,
    percent,
    sentence,
    short,
    stamp,
)
from fleet.pages.vocabulary import word
from fleet.words import plain

STANDBY_SHOWN: Final = 20
COST_COLUMNS: Final = tuple(vocabulary.COST_PARTS)


def event_page(case: Case, links: Sequence[Link]) -> str:
    """The page of one call revision."""
    return page(
        "event.html.j2",
        title=f"{case.record.event_id}: {word(vocabulary.DIRECTION, case.direction)} {case.period}",
        banner=_banner(case),
        heading=f"{word(vocabulary.DIRECTION, case.direction)} at {short(case.node_id)}",
        under=f"{case.period}. Event {case.record.event_id}, {word(vocabulary.PURPOSE, case.purpose)}.",
        level=0.6,
        facts=_facts(case),
        links=links,
        source=_source(case),
        request=_request_figure(case),
        summary=_summary(case),
        plants=_plants_figure(case),
        came_back=_came_back(case),
        windows=_windows(case),
        tanks=_tanks(case),
        feeders=_feeders(case),
        worst=_worst(case),
        standby=_standby(case),
        costs=_costs(case),
        proof=_proof(case),
    )


def _banner(case: Case) -> str:
    """What must be seen first where it is not a real event."""
    if case.purpose == "rehearsal":
        return "REHEARSAL: nothing on this page was switched"
    return "TEST EVENT" if case.purpose == "test" else ""


def _source(case: Case) -> str:
    """Where the page's figures come from."""
    called = case.request["called_at"].iloc[0]
    return (
        f"From the record of event {case.record.event_id}, call revision {case.record.revision}, called "
        f"{stamp(called, case.zone)}. Times are local ({case.zone})."
    )


def _promised(case: Case) -> tuple[pd.Series, str]:
    """kW relied on per interval, and how sure that is."""
    probability = case.record.proof.get("probability")
    if probability is None or case.request["promised_kw"].isna().all():
        return case.request["expected_kw"], "no probability was asked: held against the expected"
    return case.request["promised_kw"], f"relied on at a probability of {percent(probability)}"


def _facts(case: Case) -> list[Fact]:
    request, money = case.request, float(case.record.proof["money"])
    promised, sure = _promised(case)
    asked = request["requested_kw"]
    level = (
        number(asked.max())
        if asked.max() - asked.min() < 0.5
        else f"{number(asked.min())} to {number(asked.max())}"
    )
    least = number(request["expected_kw"].min())
    sites = len(case.site_ids)
    cost = "earns" if money < 0 else "costs"
    return [
        Fact("asked", f"{level} kW", f"{number(asked.sum() * case.step_h)} kWh"),
        Fact("expected", f"{least} kW", "in the weakest interval"),
        Fact("promised", f"{number(promised.min())} kW", sure),
        Fact(
            "net cost", f"{number(money, 2)} {case.currency}", f"the plan {cost} this at day and night prices"
        ),
        Fact("called", f"{sites} sites", f"of {len(case.sites_under)} under {short(case.node_id)}"),
    ]


def _summary(case: Case) -> str:
    short_kw = np.maximum(case.request["requested_kw"] - case.request["expected_kw"], 0.0)
    if short_kw.max() > 0.5:
        count = int((short_kw > 0.5).sum())
        return (
            f"The plan falls short in {count} of {len(short_kw)} intervals, by up to {number(short_kw.max())} kW "
            f"({number(short_kw.sum() * case.step_h)} kWh in all)."
        )
    over = (case.request["expected_kw"] - case.request["requested_kw"]).to_numpy()
    return (
        f"The plan meets the request in every interval, with {number(over.min())} to {number(over.max())} kW more "
        "than asked."
    )


def _request_figure(case: Case) -> Figure:
    request = case.request
    edges = np.append(_naive(request["interval_start"]), _naive(request["interval_end"])[-1:])
    promised, _ = _promised(case)
    series = [
        figures.Series("asked", "asked", request["requested_kw"].to_numpy(np.float64)),
        figures.Series("expected", "event", request["expected_kw"].to_numpy(np.float64)),
    ]
    if case.request["promised_kw"].notna().any():
        series.append(figures.Series("promised", "later", promised.to_numpy(np.float64)))
    chart = figures.Chart(
        "Asked and expected",
        f"kW at {short(case.node_id)} by interval of the event.",
        "kW",
        edges,
        case.zone,
        series,
    )
    return figure(chart)


def _plants_figure(case: Case) -> Figure:
    usual, event = case.course("usual_kw").sum(axis=0), case.course("event_kw").sum(axis=0)
    chart = figures.Chart(
        "Cooling plants of the called sites, usual and event",
        f"Usual peak {number(usual.max())} kW, event case peak {number(event.max())} kW; the event is shaded.",
        "kW",
        case.edges,
        case.zone,
        [figures.Series("usual", "usual", usual), figures.Series("event case", "event", event)],
        case.event,
        "event",
    )
    return figure(chart)


def _came_back(case: Case) -> str:
    change = (case.course("event_kw") - case.course("usual_kw")).sum(axis=0) * case.step_h
    inside = case.in_event
    during, after = change[inside].sum(), change[inside.stop :].sum()
    first, back = ("not drawn", "drawn more") if during < 0 else ("drawn more", "drawn less")
    return (
        f"During the event {number(abs(during))} kWh are {first} at the meters; afterwards "
        f"{number(abs(after))} kWh are {back if during * after < 0 else first}, until the day after."
    )


def _windows(case: Case) -> Table:
    step = pd.Timedelta(
        minutes=case.step_minutes
    )  # the event is a small part of the horizon: rows show it alone
    left = min(case.start, case.windows["window_start"].min()) - 2 * step
    right = max(case.end, case.windows["window_end"].max()) + 2 * step
    span = (right - left) / pd.Timedelta(minutes=1)

    def place(at: Any) -> float:
        return float((pd.Timestamp(at) - left) / pd.Timedelta(minutes=1) / span)

    inside = (place(case.start), place(case.end))
    rows: list[list[Any]] = []
    for node, members in case.by_feeder.items():
        rows.append([name(node)])
        for row in members:
            window = case.windows.iloc[row]
            rows.append(
                [
                    name(window["site_id"]),
                    f"{clock(window['window_start'], case.zone)} – {clock(window['window_end'], case.zone, case.end)}",
                    figures.span_cell(place(window["window_start"]), place(window["window_end"]), inside),
                    sentence([plain(str(machine)) for machine in window["chiller_ids"]]) or "none",
                    number(window["committed_kwh"]),
                ]
            )
    heads = [
        ("site, by feeder", ""),
        ("window", "w"),
        ("event shaded", "cell"),
        ("off", "t"),
        ("committed, kWh", "n"),
    ]
    total = ["all", "", "", "", number(case.windows["committed_kwh"].sum())]
    return Table("Windows of all called sites, by feeder", heads, rows, total)


def _tanks(case: Case) -> Table:
    tanks = case.record.frozen["tanks"].groupby("site_id")["capacity_kwh_th"].sum()
    held, usual = case.course("inventory_kwh_th"), case.course("usual_inventory_kwh_th")
    inside = (case.share(case.start), case.share(case.end))
    rows = []
    for row, site in enumerate(case.site_ids):
        full = float(tanks.get(site, 0.0))
        window = case.windows.iloc[row]
        if full <= 0.0:
            rows.append([name(site), "no tank", "", "", "", ""])
            continue
        courses = [("usual", usual[row]), ("event", held[row])]
        rows.append(
            [
                name(site),
                figures.course_cell(courses, full, inside),
                percent(window["inventory_start_kwh_th"] / full),
                percent(held[row].min() / full),
                number(full),
                clock(window["full_again_at"], case.zone, case.start)
                if not pd.isna(window["full_again_at"])
                else "not in the plan",
            ]
        )
    heads = [
        ("site", ""),
        ("inventory over the horizon", "cell"),
        ("at start", "n"),
        ("least", "n"),
        ("full, kWh_th", "n"),
        ("as usual again", "w"),
    ]
    return Table("Tank inventory by site: usual dashed, event case drawn through", heads, rows)


def _loads(case: Case) -> pd.DataFrame:
    """Nodes with their load in both cases, shape as table nodes."""
    frame = case.record.frames["nodes"].sort_values(["node_id", "interval_start"], kind="stable")
    return frame.assign(
        usual=frame["usual_kw"] + frame["other_kw"], event=frame["event_kw"] + frame["other_kw"]
    )


def _feeders(case: Case) -> Table:
    inside = (case.share(case.start), case.share(case.end))
    rows = []
    for node, own in _loads(case).groupby("node_id", sort=True):
        limit = own["import_limit_kw"].max()
        usual, event = own["usual"].to_numpy(np.float64), own["event"].to_numpy(np.float64)
        at = own["interval_start"].iloc[int(event.argmax())]
        high = max(usual.max(), event.max(), 0.0 if pd.isna(limit) else float(limit))
        rows.append(
            [
                name(node),
                figures.course_cell(
                    [("usual", usual), ("event", event)],
                    high,
                    inside,
                    None if pd.isna(limit) else float(limit),
                ),
                number(usual.max()),
                number(event.max()),
                clock(at, case.zone, case.start),
                "none" if pd.isna(limit) else number(limit),
                percent(None if pd.isna(limit) else event.max() / limit),
            ]
        )
    heads = [
        ("feeder", ""),
        ("load over the horizon", "cell"),
        ("usual peak, kW", "n"),
        ("event case peak, kW", "n"),
        ("when", "w"),
        ("limit, kW", "n"),
        ("of limit", "n"),
    ]
    return Table("Feeder loading: all load below each node, against its import limit", heads, rows)


def _worst(case: Case) -> str:
    loads = _loads(case)
    limited = loads[loads["import_limit_kw"].notna()]
    if limited.empty:
        return "No feeder has a limit."
    share = limited["event"] / limited["import_limit_kw"]
    row = limited.iloc[int(share.to_numpy().argmax())]
    over = int(
        (limited["event"] > limited["import_limit_kw"] * (1 + 1e-9)).groupby(limited["node_id"]).any().sum()
    )
    said = "No feeder is over its limit" if not over else f"{over} feeders are over their limit"
    return (
        f"{said}; the fullest is {plain(str(row['node_id']))} with {percent(share.max(), 1)} at "
        f"{clock(row['interval_start'], case.zone, case.start)}."
    )


def _standby(case: Case) -> Table:
    """Sites with a quote that were not called, cheapest per kWh first."""
    quotes = case.record.frames["quotes"]
    under = quotes["site_id"].map(lambda site: case.feeder_of.get(str(site)) in case.under_node)
    free = quotes[under & ~quotes["site_id"].isin(case.windows["site_id"])].copy()
    heads = [
        ("site", ""),
        ("feeder", ""),
        ("could give, kW", "n"),
        (f"{case.currency} per kWh", "n"),
        ("window", "w"),
        ("what limits it", "t"),
    ]
    caption = "Standby: sites with a quote that the plan left out, cheapest first"
    if free.empty:
        return Table(caption, heads, [])
    kw = np.array([np.asarray(one, dtype=np.float64) for one in free["expected_kw"]])
    free["kwh"], free["kw"] = kw.sum(axis=1) * case.step_h, kw.max(axis=1)
    free["per_kwh"] = free["net_cost"] / free["kwh"].where(free["kwh"] > 0.0)
    best = free.sort_values(["kwh", "net_cost"], ascending=[False, True]).drop_duplicates("site_id")
    best = best.sort_values(["per_kwh", "site_id"])
    rows: list[list[Any]] = [
        [
            name(row["site_id"]),
            name(case.feeder_of.get(str(row["site_id"]), "")),
            number(row["kw"]),
            number(row["per_kwh"], 3),
            f"{clock(row['window_start'], case.zone)} – {clock(row['window_end'], case.zone, case.end)}",
            word(vocabulary.LIMITED_BY, row["limited_by"]),
        ]
        for _, row in best.head(STANDBY_SHOWN).iterrows()
    ]
    if len(best) > STANDBY_SHOWN:
        rows.append([f"and {len(best) - STANDBY_SHOWN} more in table quotes of the record"])
    return Table(caption, heads, rows)


def _costs(case: Case) -> Table:
    sums = case.windows[list(COST_COLUMNS)].sum()
    rows = [[vocabulary.COST_PARTS[part], number(sums[part], 2)] for part in COST_COLUMNS]
    foot = ["net cost", number(case.windows["net_cost"].sum(), 2)]
    return Table(
        f"What the plan costs, event less usual, in {case.currency}",
        [("part", ""), (case.currency, "n")],
        rows,
        foot,
    )


def _proof(case: Case) -> str:
    """The proof in one line."""
    proof = case.record.proof
    gap = "none" if proof["gap"] is None else percent(proof["gap"], 2)
    bound, reached, lacking = (number(proof[part], 2) for part in ("bound", "objective", "gap_money"))
    return (
        f"No other choice of quotes could bring the objective below {bound} {case.currency}; this one comes to "
        f"{reached}: a gap of {lacking} {case.currency} or {gap} of the gross cost, shown "
        f"{word(vocabulary.BOUND_BY, proof['bound_by'])}; {word(vocabulary.STATUS, proof['status'])}."
    )


def _naive(times: pd.Series) -> Any:
    return times.dt.tz_convert("UTC").dt.tz_localize(None).to_numpy("datetime64[us]")
