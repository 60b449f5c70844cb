"""The season: every event, delivered against committed, fatigue and slipping by site, money, one table for the
regulator.

Owns what stands on the page, and `season.csv`. Nothing is typed in: all of it is read from the records of events
and their newest settlements. Real and test events count; rehearsals bind nobody and stand apart.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal
from pathlib import Path
from typing import Any, Final

import numpy as np
import pandas as pd
from markupsafe import Markup

from fleet import records
from fleet.harmless import csv_text
from fleet.pages import vocabulary
from fleet.pages.sheet import NOTHING, Fact, Link, Table, money, name, number, page, percent, stamp
from fleet.pages.vocabulary import word
from fleet.seals import digest

COUNTED: Final = ("real", "test")
SLIPS_BELOW_FRACTION: Final = 0.9
"""Delivered over committed under which a site is named as slipping (common practice, no source)."""
SHORT_NOTICE_TIMES: Final = 2.0
"""A call at less than this many times the site's own notice counts as short."""
MOST_EVENTS_NAMED: Final = 200
WHERE: Final = (
    ("asked, kWh", "call-…/request.parquet", "sum of requested_kw × interval"),
    ("expected, kWh", "call-…/request.parquet", "sum of expected_kw × interval"),
    ("committed, kWh", "call-…/windows.parquet", "sum of committed_kwh"),
    ("delivered, kWh", "settlement-…/sites.parquet", "sum of delivered_kwh"),
    ("paid", "settlement-…/sites.parquet", "sum of total"),
    ("plan's net cost", "call-…/windows.parquet", "sum of net_cost"),
    ("gap", "call-…/proof.json", "gap"),
    ("sites", "call-…/windows.parquet", "rows"),
    ("seal", "the newest folder's seal.json", "SHA-256, its first 12 digits; the seals are chained"),
)


@dataclass(frozen=True)
class Season:
    """What the records of a fleet folder say together; frames in order of the events' starts."""

    zone: str
    currency: str
    events: pd.DataFrame
    """event_id, purpose, direction, node_id, start, asked_kwh, expected_kwh, committed_kwh, delivered_kwh, paid
    (Decimal or None), net_cost, gap, sites, hours, call, settlement (folders), seal"""
    calls: pd.DataFrame
    """One row per event and called site: event_id, purpose, site_id, window_start, hours, rise_k, notice_times,
    committed_kwh, delivered_kwh"""

    @property
    def counted(self) -> "Season":
        """Real and test events alone; all of them where there is none."""
        if not self.events["purpose"].isin(COUNTED).any():
            return self
        events = self.events[self.events["purpose"].isin(COUNTED)]
        return Season(
            self.zone, self.currency, events, self.calls[self.calls["event_id"].isin(events["event_id"])]
        )


def read_season(home: Path) -> Season | None:
    """Read every event's newest call and settlement; None where there is no event."""
    found = [_read(home, event_id) for event_id in records.event_ids(home)]
    if not found:
        return None
    events = pd.DataFrame([row for row, _, _ in found]).sort_values(["start", "event_id"], ignore_index=True)
    calls = pd.concat([frame for _, frame, _ in found], ignore_index=True)
    settings = found[-1][2]
    return Season(str(settings["timezone"]), str(settings["currency"]), events, calls)


def season_files(home: Path) -> dict[str, str]:
    """The season's page and its table as CSV; nothing where there is no event."""
    season = read_season(home)
    if season is None:
        return {}
    return {"season.html": season_page(season), "season.csv": season_csv(season)}


def fatigue(season: Season) -> pd.DataFrame:
    """Per site, by hours: calls, hours, warmest rise, short notices, longest run of days, committed, delivered."""
    calls = season.calls.assign(short=season.calls["notice_times"] < SHORT_NOTICE_TIMES)
    found = calls.groupby("site_id").agg(
        calls=("event_id", "nunique"),
        hours=("hours", "sum"),
        rise_k=("rise_k", "max"),
        short=("short", "sum"),
        committed_kwh=("committed_kwh", "sum"),
    )
    settled = calls[calls["delivered_kwh"].notna()].groupby("site_id")
    found["settled_kwh"] = settled["committed_kwh"].sum().reindex(found.index)
    found["delivered_kwh"] = settled["delivered_kwh"].sum().reindex(found.index)
    local = calls["window_start"].dt.tz_convert(season.zone).dt.tz_localize(None).dt.normalize()
    found["run_days"] = local.groupby(calls["site_id"]).agg(longest_run)
    return found.sort_values(["hours", "calls"], ascending=False)


def longest_run(days: pd.Series) -> int:
    """Most local days on end among `days`; 0 where there is none."""
    if days.empty:
        return 0
    each = np.unique(days.to_numpy("datetime64[D]")).astype(np.int64)
    breaks = np.flatnonzero(np.diff(each) != 1)
    edges = np.concatenate([[-1], breaks, [each.size - 1]])
    return int(np.diff(edges).max())


def season_csv(season: Season) -> str:
    """The regulator's table as CSV, texts harmless to a spreadsheet."""
    heads, rows = _regulator(season)
    lines = [heads, *rows]
    return "".join(",".join(_csv(cell) for cell in line) + "\r\n" for line in lines)


def season_page(season: Season) -> str:
    """The page of a season."""
    counted = season.counted
    delivered, committed = _settled_sums(counted.events)
    paid = sum((amount for amount in counted.events["paid"] if amount is not None), Decimal(0))
    tired = fatigue(counted)
    only = counted is season and not season.events["purpose"].isin(COUNTED).any()
    return page(
        "season.html.j2",
        title="The season",
        banner="",
        heading="The season",
        under=_span(counted),
        level=0.25,
        facts=[
            Fact("events", str(len(counted.events))),
            Fact("hours", number(counted.events["hours"].sum(), 1)),
            Fact(
                "delivered",
                f"{number(delivered)} kWh",
                f"{percent(delivered / committed if committed else None)} of committed",
            ),
            Fact("paid", f"{money(paid, season.currency)} {season.currency}"),
            Fact("sites called", str(len(tired))),
        ],
        links=[Link("Index", "index.html")],
        source=f"From all records below events/. Times are local ({season.zone}).",
        note="No real or test event was called yet: these are the rehearsals, which count against no limit."
        if only
        else "",
        events=_event_table(season),
        fatigue=_fatigue_table(tired),
        slipping=_slipping_table(tired),
        regulator=_regulator_table(season),
        where=Table(
            "Where each number stands, below events/<event>/",
            [("number", "t"), ("file", "t"), ("how", "t")],
            [list(row) for row in WHERE],
        ),
    )


def _read(home: Path, event_id: str) -> tuple[dict[str, Any], pd.DataFrame, dict[str, Any]]:
    call = records.read_call(home, event_id, only=("request", "windows"), frozen_only=("sites",))
    request, windows = call.frames["request"], call.frames["windows"]
    settings = call.frozen_json["settings"]
    step_h = float(settings["interval_minutes"]) / 60.0
    numbers = records.revisions(home, event_id, "settlement")
    done = records.read_settlement(home, event_id, numbers[-1], ("sites",)) if numbers else None
    delivered, paid = pd.Series(dtype=np.float64), None
    if done is not None:
        delivered = done.frames["sites"].set_index("site_id")["delivered_kwh"]
        paid = sum(done.frames["sites"]["total"], Decimal(0))
    newest = call.path if done is None else done.path
    event = {
        "event_id": event_id,
        "purpose": str(request["purpose"].iloc[0]),
        "direction": str(request["direction"].iloc[0]),
        "node_id": str(request["node_id"].iloc[0]),
        "start": request["interval_start"].min(),
        "hours": len(request) * step_h,
        "asked_kwh": request["requested_kw"].sum() * step_h,
        "expected_kwh": request["expected_kw"].sum() * step_h,
        "committed_kwh": windows["committed_kwh"].sum(),
        "delivered_kwh": np.nan if done is None else delivered.sum(),
        "paid": paid,
        "net_cost": windows["net_cost"].sum(),
        "gap": call.proof.get("gap"),
        "sites": len(windows),
        "call": call.path.name,
        "settlement": "" if done is None else done.path.name,
        "seal": digest(newest / "seal.json")[:12],
    }
    return event, _site_calls(event, request, windows, call.frozen["sites"], delivered), dict(settings)


def _site_calls(
    event: dict[str, Any],
    request: pd.DataFrame,
    windows: pd.DataFrame,
    sites: pd.DataFrame,
    delivered: pd.Series,
) -> pd.DataFrame:
    notice = sites.set_index("site_id")["notice_minutes"].reindex(windows["site_id"]).to_numpy(np.float64)
    called_at = pd.Timestamp(request["called_at"].iloc[0])
    given = (windows["window_start"] - called_at).dt.total_seconds().to_numpy(np.float64) / 60.0
    return pd.DataFrame(
        {
            "event_id": event["event_id"],
            "purpose": event["purpose"],
            "site_id": windows["site_id"].astype(str),
            "window_start": windows["window_start"],
            "hours": (windows["window_end"] - windows["window_start"]).dt.total_seconds() / 3600.0,
            "rise_k": windows["peak_zone_rise_k"],
            "notice_times": np.divide(given, notice, out=np.full(len(windows), np.inf), where=notice > 0.0),
            "committed_kwh": windows["committed_kwh"],
            "delivered_kwh": delivered.reindex(windows["site_id"]).to_numpy(np.float64),
        }
    )


def _settled_sums(events: pd.DataFrame) -> tuple[float, float]:
    """kWh delivered and committed of the settled events."""
    done = events[events["delivered_kwh"].notna()]
    return float(done["delivered_kwh"].sum()), float(done["committed_kwh"].sum())


def _span(season: Season) -> str:
    first, last = (
        stamp(at, season.zone) for at in (season.events["start"].min(), season.events["start"].max())
    )
    return first if first == last else f"{first} to {last}"


def _event_table(season: Season) -> Table:
    rows = []
    for event in season.events.tail(MOST_EVENTS_NAMED).to_dict("records"):
        known = not pd.isna(event["delivered_kwh"])
        share = event["delivered_kwh"] / event["committed_kwh"] if known and event["committed_kwh"] else None
        rows.append(
            [
                name(event["event_id"]),
                stamp(event["start"], season.zone),
                word(vocabulary.PURPOSE, event["purpose"]),
                number(event["hours"], 1),
                number(event["committed_kwh"]),
                number(event["delivered_kwh"]) if known else "not settled",
                percent(share),
                "" if event["paid"] is None else money(event["paid"], season.currency),
            ]
        )
    heads = [
        ("event", ""),
        ("from", "t"),
        ("kind", "t"),
        ("hours", "n"),
        ("committed, kWh", "n"),
        ("delivered, kWh", "n"),
        ("of committed", "n"),
        (f"paid, {season.currency}", "n"),
    ]
    return Table("Events, oldest first", heads, rows)


def _fatigue_table(tired: pd.DataFrame) -> Table:
    rows = [
        [
            name(site),
            number(row["calls"]),
            number(row["hours"], 1),
            number(row["rise_k"], 1),
            number(row["short"]),
            number(row["run_days"]),
        ]
        for site, row in tired.iterrows()
    ]
    heads = [
        ("site", ""),
        ("calls", "n"),
        ("hours", "n"),
        ("warmest rise, K", "n"),
        ("short notices", "n"),
        ("most days on end", "n"),
    ]
    return Table(
        f"Fatigue by site, most hours first; short: under {SHORT_NOTICE_TIMES:g} times the site's own notice",
        heads,
        rows,
    )


def _slipping_table(tired: pd.DataFrame) -> Table:
    share = tired["delivered_kwh"] / tired["settled_kwh"].where(tired["settled_kwh"] > 0.0)
    slipping = tired.assign(share=share)[share < SLIPS_BELOW_FRACTION].sort_values("share")
    rows = [
        [name(site), number(row["settled_kwh"]), number(row["delivered_kwh"]), percent(row["share"])]
        for site, row in slipping.iterrows()
    ]
    heads = [("site", ""), ("committed, kWh", "n"), ("delivered, kWh", "n"), ("of committed", "n")]
    return Table(f"Sites under {percent(SLIPS_BELOW_FRACTION)} of what they committed", heads, rows)


def _regulator(season: Season) -> tuple[list[str], list[list[Any]]]:
    """Heads and rows of the regulator's one table; texts, numbers and None."""
    heads = ["event", "kind", "direction", "node", "from", "asked_kwh", "expected_kwh", "committed_kwh"]
    heads += ["delivered_kwh", f"paid_{season.currency}", f"plan_net_cost_{season.currency}", "gap", "sites"]
    heads += ["call", "settlement", "seal"]
    rows = []
    for event in season.events.to_dict("records"):
        local = pd.Timestamp(event["start"]).tz_convert(season.zone)
        paid = (
            None
            if event["paid"] is None
            else money(event["paid"], season.currency).replace(",", "").replace("−", "-")
        )
        rows.append(
            [
                event["event_id"],
                event["purpose"],
                event["direction"],
                event["node_id"],
                local.isoformat(),
                *[
                    None if pd.isna(event[column]) else round(float(event[column]), 3)
                    for column in ("asked_kwh", "expected_kwh", "committed_kwh", "delivered_kwh")
                ],
                None if paid is None else Decimal(paid),
                round(float(event["net_cost"]), 2),
                None if event["gap"] is None or pd.isna(event["gap"]) else round(float(event["gap"]), 6),
                int(event["sites"]),
                f"events/{event['event_id']}/{event['call']}",
                f"events/{event['event_id']}/{event['settlement']}" if event["settlement"] else "",
                event["seal"],
            ]
        )
    return heads, rows


def _regulator_table(season: Season) -> Table:
    """The rows of `_regulator`, what belongs together in one cell so that they fit on paper."""
    heads, rows = _regulator(season)
    shown = []
    for row in rows[-MOST_EVENTS_NAMED:]:
        told = dict(zip(heads, row, strict=True))
        what = Markup("{}<br><small>{}, {}, {}</small>").format(
            name(told["event"]), told["direction"], told["kind"], name(told["node"])
        )
        places = Markup("<br>").join(
            name(told[column]) for column in ("call", "settlement", "seal") if told[column]
        )
        amounts = [_cell(told[head]) for head in heads[heads.index("asked_kwh") : heads.index("call")]]
        shown.append([what, told["from"], *amounts, places])
    numbers = [
        (head.replace("_", " "), "n") for head in heads[heads.index("asked_kwh") : heads.index("call")]
    ]
    columns = [("event", "t"), ("from", "t"), *numbers, ("record and seal", "t")]
    return Table("One table for the regulator; season.csv holds the same, a column each", columns, shown)


def _cell(cell: Any) -> str:
    """A number of the regulator's table at the digits it is stated with."""
    if cell is None:
        return NOTHING
    if isinstance(cell, Decimal):
        return f"{cell:,}".replace("-", "−")
    return number(cell, 6 if 0.0 < abs(cell) < 1.0 else 0 if isinstance(cell, int) else 1)


def _csv(cell: Any) -> str:
    """A cell: numbers as they are, texts harmless and quoted."""
    if cell is None:
        return ""
    if isinstance(cell, int | float | Decimal):
        return str(cell)
    quoted: Sequence[str] = csv_text(str(cell)).split('"')
    return '"' + '""'.join(quoted) + '"'
