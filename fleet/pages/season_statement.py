"""The season's statement as text and JSON: every site's event hours together, test events and rehearsals apart.

Owns the sums over events. A factor is a mean over event hours, not over events, by the site's newest frozen rule; its
limits are money.py's. Every figure is read from the records of settled events.
"""

import json
from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal
from pathlib import Path
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet import records
from fleet.money import joint_factor, performance_factor, told
from fleet.rules import SettlementRule
from fleet.words import plain
from sites.units import Floats

PURPOSES: Final = ("real", "test", "rehearsal")
"""Never added together: a test shows what could be had, a rehearsal moves no money."""
SITE: Final = ("site_id", "rule", "state", "performance_factor", "netted_kwh", "total")
INTERVAL: Final = ("site_id", "interval_start", "in_window", "delivered_kw", "committed_kw")


@dataclass(frozen=True)
class _Event:
    """A settled event: one row a site and hour of its own window, and one a site."""

    event_id: str
    purpose: str
    currency: str
    start: pd.Timestamp
    hours: pd.DataFrame
    """site_id, delivered_kwh, committed_kwh"""
    sites: pd.DataFrame
    rules: dict[str, SettlementRule]


def season_statement(home: Path) -> dict[str, str]:
    """Files `season.txt` and `season.json`; none where no event is settled."""
    ids = records.event_ids(home)
    settled = [event_id for event_id in ids if records.revisions(home, event_id, "settlement")]
    events = [_read(home, event_id) for event_id in settled]
    if not events:
        return {}
    document: dict[str, Any] = {
        "currency": events[0].currency,
        "first_start": min(event.start for event in events).isoformat(),
        "last_start": max(event.start for event in events).isoformat(),
        "not_settled": sorted(set(ids) - set(settled)),
        "factor": "mean over event hours, one value an hour, by each site's newest frozen rule",
    }
    for purpose in PURPOSES:
        own = [event for event in events if event.purpose == purpose]
        if own:
            document[purpose] = _together(own)
    return {
        "season.txt": _text(document),
        "season.json": json.dumps(document, indent=1, sort_keys=True) + "\n",
    }


def _read(home: Path, event_id: str) -> _Event:
    call = records.read_call(home, event_id, only=("request",), frozen_only=())
    done = records.read_settlement(home, event_id, only=("sites", "intervals"))
    settings, frozen = call.frozen_json["settings"], call.frozen_json["rules"]
    request = call.frames["request"]
    start, step_h = request["interval_start"].min(), float(settings["interval_minutes"]) / 60.0
    rows = done.frames["intervals"]
    rows = rows.loc[rows["in_window"], list(INTERVAL)]
    hour = (rows["interval_start"] - start) // pd.Timedelta(hours=1)
    energy = rows.assign(
        hour=hour, delivered_kwh=rows["delivered_kw"] * step_h, committed_kwh=rows["committed_kw"] * step_h
    )
    hours = energy.groupby(["site_id", "hour"], as_index=False)[["delivered_kwh", "committed_kwh"]].sum()
    return _Event(
        event_id,
        str(request["purpose"].iloc[0]),
        str(settings["currency"]),
        start,
        hours,
        done.frames["sites"][list(SITE)],
        {name: SettlementRule.model_validate(rule) for name, rule in frozen["rules"].items()},
    )


def _together(events: Sequence[_Event]) -> dict[str, Any]:
    """One purpose's events: a row a site, and all of them; sites without a factor in an event stay out of it."""
    ordered = sorted(events, key=lambda event: (event.start, event.event_id))
    rules = {name: rule for event in ordered for name, rule in event.rules.items()}
    every = pd.concat([event.sites.assign(event=at) for at, event in enumerate(ordered)], ignore_index=True)
    counted = every[every["performance_factor"].notna()]
    hours = pd.concat([event.hours.assign(event=at) for at, event in enumerate(ordered)], ignore_index=True)
    hours = hours.merge(counted[["site_id", "event"]], on=["site_id", "event"])
    sums = every.groupby("site_id").agg(
        rule=("rule", "last"),
        events=("event", "nunique"),
        paid=("total", lambda amounts: sum(amounts, Decimal(0))),
    )
    sums["settled_events"] = counted.groupby("site_id")["event"].nunique().reindex(sums.index, fill_value=0)
    sums["netted_kwh"] = counted.groupby("site_id")["netted_kwh"].sum().reindex(sums.index, fill_value=0.0)
    sums["hours"] = hours.groupby("site_id")["event"].size().reindex(sums.index, fill_value=0)
    for name in ("committed_kwh", "delivered_kwh"):
        sums[name] = hours.groupby("site_id")[name].sum().reindex(sums.index, fill_value=0.0)
    sums["factor"], joint = _factors(sums, hours, rules)
    return {
        "events": [event.event_id for event in ordered],
        "provisional": sorted(
            {ordered[at].event_id for at in every.loc[every["state"] == "provisional", "event"]}
        ),
        "sites": [_row(str(site), row) for site, row in sums.to_dict("index").items()],
        "all": {
            "committed_kwh": float(sums["committed_kwh"].sum()),
            "delivered_kwh": float(sums["delivered_kwh"].sum()),
            "factor": joint,
            "paid": str(sum(sums["paid"], Decimal(0))),
        },
    }


def _factors(
    sums: pd.DataFrame, hours: pd.DataFrame, rules: dict[str, SettlementRule]
) -> tuple[Floats, float | None]:
    """Each site's factor over its hours, and that of all together, weighed by what they had committed."""
    place = hours.groupby("site_id").cumcount().to_numpy()
    site = sums.index.get_indexer(pd.Index(hours["site_id"]))
    shape = (len(sums), int(place.max(initial=-1)) + 1)
    delivered, committed = np.zeros(shape), np.zeros(shape)
    counted = np.zeros(shape, dtype=np.bool_)
    for grid, values in ((delivered, hours["delivered_kwh"]), (committed, hours["committed_kwh"])):
        grid[site, place] = values.to_numpy(dtype=np.float64)
    counted[site, place] = True
    found, netted = np.full(len(sums), np.nan), sums["netted_kwh"].to_numpy(dtype=np.float64)
    for name in sums["rule"].unique():
        rows = np.flatnonzero(sums["rule"] == name)
        found[rows] = performance_factor(
            delivered[rows], committed[rows], counted[rows], 1.0, rules[str(name)], None, netted[rows]
        )
    whole = SettlementRule(name="all")
    joint = joint_factor(found, sums["committed_kwh"].to_numpy(dtype=np.float64), whole)
    known = joint[~np.isnan(joint)]
    return found, float(known[0]) if len(known) else None


def _row(site: str, row: dict[Any, Any]) -> dict[str, Any]:
    factor = None if np.isnan(row["factor"]) else float(row["factor"])
    whole = {name: int(row[name]) for name in ("events", "settled_events", "hours")}
    energy = {name: float(row[name]) for name in ("committed_kwh", "delivered_kwh", "netted_kwh")}
    return {
        "site_id": site,
        "rule": row["rule"],
        **whole,
        **energy,
        "factor": factor,
        "paid": str(row["paid"]),
    }


def _text(document: dict[str, Any]) -> str:
    currency = document["currency"]
    lines = [f"SEASON  amounts in {currency}, from the site's side", f"factor: {document['factor']}"]
    for purpose in PURPOSES:
        if purpose not in document:
            continue
        found = document[purpose]
        lines += [
            "",
            f"{purpose} events, settled: {len(found['events'])} ({', '.join(found['events'])})",
            f"{'site':<25}{'hours':>7}{'committed':>12}{'delivered':>12}{'factor':>9}{'paid':>16}",
            f"{'':<32}{'kWh':>12}{'kWh':>12}",
        ]
        lines += [_line(plain(row["site_id"]), str(row["hours"]), row, currency) for row in found["sites"]]
        lines.append(_line("all", "", found["all"], currency))
        lines += [f"provisional still: {', '.join(found['provisional'])}"] if found["provisional"] else []
    if document["not_settled"]:
        lines += ["", f"not settled yet: {', '.join(document['not_settled'])}"]
    return "\n".join(lines) + "\n"


def _line(site: str, hours: str, row: dict[str, Any], currency: str) -> str:
    factor = "-" if row["factor"] is None else f"{row['factor']:.3f}"
    shown = site if len(site) < 25 else site[:22] + "~"
    return (
        f"{shown:<25}{hours:>7}{row['committed_kwh']:>12,.1f}{row['delivered_kwh']:>12,.1f}{factor:>9}"
        f"{told(Decimal(row['paid']), currency):>16}"
    )
