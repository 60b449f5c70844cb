"""Rules on orders: what was written for the operators is what the call says, step by step.

Reads orders.json of each orders folder; the pages beside it are the same orders as text and are only sealed.
"""

import json
from pathlib import Path
from typing import Any

import pandas as pd

from fleet.audit.findings import Findings, names
from fleet.records import CallRecord
from fleet.words import plain

RULE = "orders"


def orders_say_the_call(folder: Path, calls: list[CallRecord], found: Findings) -> None:
    """Each order's steps are the rows of table steps of its site, its window that of the site; one order a site."""
    file = f"{folder.name}/orders.json"
    orders = json.loads((folder / "orders.json").read_text(encoding="utf-8"))
    by_revision = {call.revision: call for call in calls}
    revisions = {order["revision"] for order in orders}
    if len(revisions) != 1 or not revisions <= set(by_revision):
        found.tell(RULE, file, "revision", names(sorted(revisions)), "one revision of the call")
        return
    call = by_revision[revisions.pop()]
    windows = (
        call.frames["windows"]
        .assign(site_id=call.frames["windows"]["site_id"].map(plain))
        .set_index("site_id")
    )
    sites = [order["site_id"] for order in orders]
    found.value(RULE, file, "site_id", sorted(sites), sorted(windows.index))
    purpose = str(call.frames["request"]["purpose"].iloc[0])
    for order in orders:
        if order["site_id"] not in windows.index:
            continue
        window, place = windows.loc[order["site_id"]], f"order of site {order['site_id']}, "
        for name in ("window_start", "window_end"):
            found.value(RULE, file, place + name, pd.Timestamp(order[name]), window[name])
        found.value(RULE, file, place + "quote_id", order["quote_id"], plain(str(window["quote_id"])))
        found.value(RULE, file, place + "purpose", order["purpose"], purpose)
        _steps(call, order, file, place, found)


def _steps(call: CallRecord, order: dict[str, Any], file: str, place: str, found: Findings) -> None:
    """The steps of one order against the rows of its site."""
    rows = call.frames["steps"]
    rows = rows[rows["site_id"].map(plain) == order["site_id"]]
    wanted = {(row.unit_id, row.action): (row.at, row.value) for row in rows.itertuples(index=False)}
    told = {
        (step["unit_id"], step["action"]): (pd.Timestamp(step["at"]), step["value"])
        for line in order["lines"]
        for step in line["steps"]
    }
    found.value(RULE, file, place + "steps", sorted(map(str, told)), sorted(map(str, wanted)))
    for key in sorted(set(told) & set(wanted), key=str):
        name = f"{place}{key[1]} of {key[0]}"
        found.value(RULE, file, name + ", at", told[key][0], wanted[key][0])
        value = None if pd.isna(wanted[key][1]) else float(wanted[key][1])
        found.value(RULE, file, name + ", value", told[key][1], value)
