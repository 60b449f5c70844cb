"""The statement pages: one for the fleet, one for each site, from a settlement's record.

Owns what stands on them; every figure is a row of the settlement or a sum of rows.
"""

from collections.abc import Sequence
from decimal import Decimal
from typing import Any, Final

import numpy as np
import pandas as pd
from markupsafe import Markup

from fleet.pages import figures, vocabulary
from fleet.pages.settled import Settled
from fleet.pages.sheet import (
    Fact,
    Figure,
    Link,
    Table,
    clock,
    figure,
    money,
    name,
    number,
    page,
    percent,
    short,
)
from fleet.pages.vocabulary import word
from fleet.rules import SettlementRule
from fleet.words import plain

BEFORE_H, AFTER_H = 5.0, 3.0
"""What a site's chart shows before the event and after it."""
MONEY: Final = ("capacity_payment", "energy_payment", "penalty", "total")
GOOD: Final = ("measured", "edited")


def statement_page(settled: Settled, links: Sequence[Link], stems: dict[str, str]) -> str:
    """The fleet's statement; stems: site_id -> name of its own page."""
    case, sites = settled.case, settled.sites
    fleet = settled.record.frames["fleet"].sort_values("interval_start")
    delivered = float(fleet["delivered_kw"].sum()) * case.step_h
    asked = float(fleet["requested_kw"].sum()) * case.step_h
    states = sites["state"].value_counts()
    return page(
        "statement.html.j2",
        title=f"{case.record.event_id}: statement, revision {settled.record.revision}",
        banner="REHEARSAL: nobody is paid by this" if case.purpose == "rehearsal" else "",
        heading="Statement",
        under=f"{case.period}. Event {case.record.event_id}, settlement revision {settled.record.revision}.",
        level=0.5,
        facts=[
            Fact("asked", f"{number(asked)} kWh"),
            Fact(
                "delivered",
                f"{number(delivered)} kWh",
                f"at the node over the whole event, {percent(delivered / asked if asked else None)} of what was asked",
            ),
            Fact("committed", f"{number(sites['committed_kwh'].sum())} kWh", "at the sites' meters"),
            Fact("paid", f"{_total(settled, 'total')} {case.currency}", "from the sites' side"),
            Fact(
                "sites",
                str(len(sites)),
                ", ".join(f"{n} {word(vocabulary.STATE, s).split(':')[0]}" for s, n in states.items()),
            ),
        ],
        links=links,
        source=_source(settled),
        course=_fleet_figure(settled, fleet),
        table=_site_table(settled, stems),
        quality=_quality_table(settled),
        revisions=_revision_table(settled),
        changed=_changes(settled),
    )


def site_page(settled: Settled, site_id: str, links: Sequence[Link]) -> str:
    """One site's statement, line by line."""
    case = settled.case
    row = next(row for row in settled.sites.to_dict("records") if row["site_id"] == site_id)
    rule = _rule(settled, site_id)
    return page(
        "site_statement.html.j2",
        title=f"{case.record.event_id}: statement of {short(site_id)}",
        banner="REHEARSAL: nobody is paid by this" if case.purpose == "rehearsal" else "",
        heading=f"Statement of {short(site_id)}",
        under=f"{case.period}. Event {case.record.event_id}, settlement revision {settled.record.revision}.",
        level=0.5,
        facts=[
            Fact("committed", f"{number(row['committed_kwh'])} kWh"),
            Fact(
                "delivered",
                f"{number(row['delivered_kwh'])} kWh",
                f"factor {number(row['performance_factor'], 3)}",
            ),
            Fact(
                "total",
                f"{money(row['total'], case.currency)} {case.currency}",
                word(vocabulary.STATE, row["state"]),
            ),
        ],
        links=links,
        source=_source(settled),
        chart=_site_figure(settled, site_id),
        said=_how(row, rule),
        intervals=_interval_table(settled, site_id),
        money=_money_table(settled, row),
        rounding=rule.order_of_rounding,
        days=_day_table(settled, site_id),
        changed=_change_items(settled.changed.get(site_id)),
        first=not settled.before,
    )


def _source(settled: Settled) -> str:
    case = settled.case
    return (
        f"From the record of event {case.record.event_id}, settlement revision {settled.record.revision}; "
        f"shedwright reckon shows one site with all sums. Times are local ({case.zone})."
    )


def _rule(settled: Settled, site_id: str) -> SettlementRule:
    frozen = settled.case.record.frozen_json["rules"]
    return SettlementRule.model_validate(frozen["rules"][frozen["site"][site_id]])


def _total(settled: Settled, column: str) -> str:
    return money(sum(settled.sites[column], Decimal(0)), settled.case.currency)


def _fleet_figure(settled: Settled, fleet: pd.DataFrame) -> Figure:
    step = np.timedelta64(settled.case.step_minutes * 60_000_000, "us")
    starts = _naive(fleet["interval_start"])
    missing = int(fleet["sites_missing"].max())
    lost = (
        f" Called sites whose meter shows nothing in an interval count as zero there: at most {missing} at once."
        if missing
        else ""
    )
    chart = figures.Chart(
        "Asked, expected and delivered at the node",
        f"Delivered as settled from the meters, recoveries inside the event netted.{lost}",
        "kW",
        np.append(starts, starts[-1] + step),
        settled.case.zone,
        [
            figures.Series("asked", "asked", fleet["requested_kw"].to_numpy(np.float64)),
            figures.Series("expected", "usual", fleet["expected_kw"].to_numpy(np.float64)),
            figures.Series("delivered", "event", fleet["delivered_kw"].to_numpy(np.float64)),
        ],
    )
    return figure(chart)


def _site_table(settled: Settled, stems: dict[str, str]) -> Table:
    rows = []
    for row in settled.sites.to_dict("records"):
        site = str(row["site_id"])
        rows.append(
            [
                Markup('<a href="statements/{}.html">{}</a>').format(stems[site], name(site)),
                word(vocabulary.STATE, row["state"]),
                number(row["committed_kwh"]),
                number(row["delivered_kwh"]),
                number(row["performance_factor"], 3),
                *[money(row[column], settled.case.currency) for column in MONEY],
            ]
        )
    heads = [
        ("site", ""),
        ("state", "t"),
        ("committed, kWh", "n"),
        ("delivered, kWh", "n"),
        ("factor", "n"),
        ("capacity", "n"),
        ("energy", "n"),
        ("penalty", "n"),
        ("total", "n"),
    ]
    sites = settled.sites
    foot = [
        "all",
        "",
        number(sites["committed_kwh"].sum()),
        number(sites["delivered_kwh"].sum()),
        "",
        *[_total(settled, column) for column in MONEY],
    ]
    return Table(f"Each site over its own window, amounts in {settled.case.currency}", heads, rows, foot)


def _quality_table(settled: Settled) -> Table:
    """Sites with anything but plain readings in the event or their window."""
    frame = settled.record.frames["intervals"]
    shown = frame[frame["in_event"] | frame["in_window"]]
    counts = pd.crosstab(shown["site_id"], shown["quality"])
    odd = counts[counts.drop(columns=[q for q in ("measured",) if q in counts]).sum(axis=1) > 0]
    names = [quality for quality in vocabulary.QUALITY if quality in counts]
    rows = [[name(site), *[number(odd[quality][site]) for quality in names]] for site in odd.index]
    heads = [("site", ""), *[(vocabulary.QUALITY[quality], "n") for quality in names]]
    return Table("Sites whose readings are not all measured: intervals by quality", heads, rows)


def _revision_table(settled: Settled) -> Table:
    rows = []
    for record in (*settled.before, settled.record):
        posted = sum(record.frames["postings"]["amount"], Decimal(0))
        total = sum(record.frames["sites"]["total"], Decimal(0))
        delivered = record.frames["sites"]["delivered_kwh"].sum()
        rows.append(
            [
                str(record.revision),
                number(delivered, 1),
                money(total, settled.case.currency),
                money(posted, settled.case.currency),
            ]
        )
    heads = [("revision", "w"), ("delivered, kWh", "n"), ("total", "n"), ("posted", "n")]
    return Table(
        f"Settlement revisions; each posts the difference only, {settled.case.currency}", heads, rows
    )


def _changes(settled: Settled) -> list[tuple[Markup, list[str]]]:
    return [(name(site), _change_items(entry)) for site, entry in settled.changed.items()]


def _change_items(entry: dict[str, Any] | None) -> list[str]:
    """What changed at a site, one sentence each; the intervals counted."""
    if entry is None:
        return []
    said = [
        f"{column.replace('_', ' ')}: {_told(was)}, now {_told(now)}"
        for column, (was, now) in entry["columns"].items()
    ]
    if entry["intervals"]:
        said.append(
            f"{len(entry['intervals'])} intervals differ; the newest statement.json of the record names each"
        )
    return said


def _told(value: Any) -> str:
    if value is None:
        return "nothing"
    return number(value, 3) if isinstance(value, float) else plain(str(value))


def _site_figure(settled: Settled, site_id: str) -> Figure:
    """The one chart of a dispute: like days, baselines, meter, committed line, delivered area."""
    case = settled.case
    step = np.timedelta64(case.step_minutes * 60_000_000, "us")
    start, end = case.event
    first = start - np.timedelta64(int(BEFORE_H * 3600e6), "us")
    count = int((end + np.timedelta64(int(AFTER_H * 3600e6), "us") - first) / step)
    edges = first + np.arange(count + 1) * step
    local = pd.DatetimeIndex(edges[:-1]).tz_localize("UTC").tz_convert(case.zone)
    slot = ((local.hour * 60 + local.minute) // case.step_minutes).to_numpy()
    own = settled.rows("intervals", site_id).set_index("interval_start")
    at = own.reindex(pd.DatetimeIndex(edges[:-1]).tz_localize("UTC"))
    read = settled.rows("day_intervals", site_id)
    days = settled.rows("days", site_id)
    event_day = days.loc[days["reason"] == "event_day", "day"].max()
    meter = _on_slots(read[read["day"] == event_day], slot)
    known = at["metered_kw"].to_numpy(np.float64)
    meter = np.where(np.isfinite(known), known, meter)
    adjusted = at["adjusted_baseline_kw"].to_numpy(np.float64)
    inside = at["in_window"].fillna(False).to_numpy(dtype=bool)
    shown = inside | at["in_event"].fillna(False).to_numpy(dtype=bool)
    committed = np.where(inside, adjusted - _sign(settled) * at["committed_kw"].to_numpy(np.float64), np.nan)
    used = sorted(days.loc[days["used"], "day"])
    series = [
        figures.Series(f"{day:%d %b}", "plain", _on_slots(read[read["day"] == day], slot)) for day in used
    ]
    place = len(series)
    series += [
        figures.Series("baseline", "usual", np.where(shown, at["baseline_kw"].to_numpy(np.float64), np.nan)),
        figures.Series("adjusted baseline", "later", np.where(shown, adjusted, np.nan)),
        figures.Series("committed line", "asked", committed),
        figures.Series("meter", "event", meter),
    ]
    above = (place + 1, place + 3) if _sign(settled) > 0 else (place + 3, place + 1)
    chart = figures.Chart(
        "Baselines, meter and what was delivered",
        "The filled area between adjusted baseline and meter, inside the site's window, is what was delivered; a "
        "meter at the committed line has given all that was committed.",
        "kW",
        edges,
        case.zone,
        series,
        case.event,
        "event",
        (*above, "event"),
        inside.astype(np.float64),
    )
    made = figure(chart, "delivered")
    key = [(f"{len(used)} like days", figures.swatch("plain")), *made.key[place:]] if used else made.key
    return Figure(made.title, made.said, made.svg, key, made.table)


def _on_slots(rows: pd.DataFrame, slot: Any) -> Any:
    """(interval,) reading of a day at each local slot; NaN where it has none."""
    by_slot = dict(zip(rows["slot"], rows["kw"].to_numpy(np.float64)))
    return np.array([by_slot.get(int(one), np.nan) for one in slot], dtype=np.float64)


def _sign(settled: Settled) -> float:
    return -settled.case.direction.sign


def _how(row: Any, rule: SettlementRule) -> str:
    kind = str(row["adjustment_kind"])
    if kind == "none":
        adjusted = "not adjusted"
    else:
        unit, raw = "" if kind == "ratio" else " kW", number(row["adjustment_raw"], 4)
        adjusted = f"adjusted by {number(row['adjustment'], 4)}{unit} ({raw} before the cap)"
    held = "" if pd.isna(row["why"]) else f" Excused: {plain(str(row['why']))}."
    guard = (
        ""
        if row["guard"] == "none"
        else f" Charging was taken out of the adjustment window by the {row['guard']} meter."
    )
    return (
        f"Rule {plain(rule.name)} on the {row['stream']} meter: baseline of {str(row['method']).replace('_', ' ')}, "
        f"{adjusted}.{guard}{held}"
    )


def _interval_table(settled: Settled, site_id: str) -> Table:
    own = settled.rows("intervals", site_id)
    own = own[own["in_event"] | own["in_window"]].sort_values("interval_start")
    rows = [
        [
            clock(row["interval_start"], settled.case.zone, settled.case.start),
            number(row["baseline_kw"], 1),
            number(row["adjusted_baseline_kw"], 1),
            number(row["metered_kw"], 1),
            number(row["delivered_kw"], 1),
            number(row["committed_kw"], 1),
            "in" if row["in_window"] else "outside",
            word(vocabulary.QUALITY, row["quality"]),
        ]
        for row in own.to_dict("records")
    ]
    heads = [
        ("time", "w"),
        ("baseline", "n"),
        ("adjusted", "n"),
        ("meter", "n"),
        ("delivered", "n"),
        ("committed", "n"),
        ("window", "w"),
        ("reading", "t"),
    ]
    return Table("Interval by interval, kW", heads, rows)


def _money_table(settled: Settled, row: Any) -> Table:
    case = settled.case
    prices = case.record.frozen_json["settings"]
    committed, delivered = float(row["committed_kwh"]), row["delivered_kwh"]
    lack = None if pd.isna(delivered) else max(committed - float(delivered), 0.0)
    share = number(row["paid_share"], 6)
    capacity = f"{prices['capacity_payment_per_kwh']:g} × {number(committed, 3)} kWh × share {share}"
    lines = (
        ("capacity payment", capacity, "capacity_payment"),
        (
            "energy payment",
            f"{prices['energy_payment_per_kwh']:g} × {number(delivered, 3)} kWh, not below 0",
            "energy_payment",
        ),
        ("penalty", f"{prices['penalty_per_kwh']:g} × {number(lack, 3)} kWh lacking", "penalty"),
    )
    rows = [[said, how, money(row[column], case.currency)] for said, how, column in lines]
    foot = ["total", "", money(row["total"], case.currency)]
    return Table(
        f"Money line by line, {case.currency}", [("line", "t"), ("how", "t"), ("amount", "n")], rows, foot
    )


def _day_table(settled: Settled, site_id: str) -> Table:
    days = settled.rows("days", site_id).sort_values("day", ascending=False)
    rows = [
        [
            f"{row['day']:%a %d %b %Y}",
            word(vocabulary.REASON, row["reason"]),
            plain(str(row["mode"])).replace("_", " "),
            number(row["rank_value"], 1),
            number(row["window_base_kw"], 1),
        ]
        for row in days.to_dict("records")
    ]
    heads = [
        ("day", "w"),
        ("used, or why not", "t"),
        ("plant", "t"),
        ("event hours, kW", "n"),
        ("adjustment hours, kW", "n"),
    ]
    return Table("Every day considered", heads, rows)


def _naive(times: pd.Series) -> Any:
    return times.dt.tz_convert("UTC").dt.tz_localize(None).to_numpy("datetime64[us]")
