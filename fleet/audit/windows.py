"""Rules on who is called when: tables request and windows.

Notice, length and machines of each window; and every number of a window from the courses and from the quote it
names. Call limits are limits.py's. Shapes: R called sites, T intervals.
"""

from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.audit.case import Case, requested_nodes
from fleet.audit.evidence import utc_naive
from fleet.audit.findings import Findings, allowed
from fleet.audit.quotes import lists
from fleet.schema import choices
from sites.units import Bools, Floats

FULL_AGAIN_FRACTION: Final = 1e-3
"""Full again: within this share of capacity of the usual case, or above it."""
QUOTED: Final = (
    "window_start",
    "window_end",
    "net_cost",
    "cost_before",
    "cost_during",
    "cost_recovery",
    "cost_demand",
    "cost_fee",
    "cost_comfort",
    "end_lack_kwh_th",
    "end_lack_price_per_kwh_th",
    "unmet_kwh_th",
    "limited_by",
    "recovery",
    "inventory_low_start_kwh_th",
)
"""Columns a window has from its quote."""


def request(case: Case, found: Findings) -> None:
    """One direction, purpose and time of call; the intervals one after the other on the grid, node after node."""
    book, sheet = case.evidence, case.evidence.sheets["request"]
    frame = sheet.frame
    for name in ("direction", "purpose", "called_at", "effective_from", "supersedes"):
        found.same("request", sheet, name, frame[name].mode(dropna=False).iloc[0])
    for name in ("direction", "purpose"):
        unknown = ~frame[name].isin(choices("call", "request", name)).to_numpy()
        found.wrong("request", sheet, name, unknown, frame[name].to_numpy(), "a word of the closed list")
    starts, nodes = book.clock.starts[book.event], requested_nodes(case)
    stamps = pd.DatetimeIndex(np.tile(starts, len(nodes))).tz_localize("UTC")
    if len(stamps) != len(frame):
        wanted = f"{len(starts)} event intervals of {len(nodes)} node(s)"
        found.tell("request", sheet.file, "interval_start", f"{len(frame)} rows", wanted)
        return
    found.same("request", sheet, "node_id", np.repeat(nodes, len(starts)))
    if "within_node_id" in frame and frame["node_id"].isin(case.tree.node_id).all():
        above = [case.tree.nearest_above(name, nodes.tolist()) for name in nodes]
        found.same("request", sheet, "within_node_id", np.repeat(np.array(above, dtype=object), len(starts)))
    found.same("request", sheet, "interval_start", stamps)
    found.same("request", sheet, "interval_end", stamps + pd.Timedelta(minutes=book.clock.step_minutes))
    called, effective = utc_naive(frame["called_at"]), utc_naive(frame["effective_from"])
    found.wrong("request", sheet, "called_at", called > starts[0], called, f"{starts[0]} or earlier")
    found.wrong("request", sheet, "effective_from", effective < called, effective, called)
    first = book.record.revision == 1
    if first:
        found.wrong("request", sheet, "effective_from", effective != called, effective, called)
    supersedes = pd.array([pd.NA if first else book.record.revision - 1] * len(frame), dtype="Int64")
    found.same("request", sheet, "supersedes", supersedes)
    node = ~frame["node_id"].isin(book.record.frames["nodes"]["node_id"]).to_numpy()
    found.wrong("request", sheet, "node_id", node, frame["node_id"].to_numpy(), "a node of nodes.parquet")


def delivered_as_asked(case: Case, found: Findings) -> None:
    """expected_kw = sum of delivery_factor x expected_kw of the called sites; it meets the request, or says not."""
    book, sheet = case.evidence, case.evidence.sheets["request"]
    factor = book.fact("delivery_factor", book.called)
    below = np.stack([case.tree.sites_below(name)[book.called] for name in requested_nodes(case)])
    expected = ((below * factor) @ book.grid("intervals", "expected_kw")[:, book.event]).ravel()
    found.equal("expected at the node", sheet, "expected_kw", expected, np.abs(expected).max(initial=0.0))
    asked, given = sheet.numbers("requested_kw"), sheet.numbers("promised_kw")
    given = np.where(np.isnan(given), sheet.numbers("expected_kw"), given)
    gap = np.maximum(asked - given, 0.0)
    gap = np.where((gap > 1e-6) & (asked > 0.0), gap, 0.0)
    told = book.record.proof.get("shortfall_kwh", 0.0)
    total = gap.sum() * book.clock.step_h
    if not total and not told:
        return
    found.value("shortfall", f"{book.folder}/proof.json", "shortfall_kwh", told, total, asked.max())
    if book.record.proof.get("met", True) != (total == 0.0):
        found.wrong("request met", sheet, "expected_kw", gap > 0.0, given, asked)


def promised(case: Case, found: Findings) -> None:
    """Where no probability is asked nothing is promised; where one is, never more than expected."""
    sheet = case.evidence.sheets["request"]
    value = sheet.numbers("promised_kw")
    if case.evidence.record.proof.get("probability") is None:
        found.equal("promised kW", sheet, "promised_kw", np.full(len(value), np.nan))
    else:
        found.wrong("promised kW", sheet, "promised_kw", np.isnan(value), value, "a number")
        found.most("promised kW", sheet, "promised_kw", sheet.numbers("expected_kw"))


def window_terms(case: Case, found: Findings) -> None:
    """Windows on the grid, inside the event, after the site's notice, as long as site and machines need."""
    book, sheet = case.evidence, case.evidence.sheets["windows"]
    start, end = (utc_naive(sheet.frame[name]) for name in ("window_start", "window_end"))
    for name, times in (("window_start", start), ("window_end", end)):
        off_grid = (times - book.clock.start) % book.clock.step != np.timedelta64(0)
        found.wrong("window on the grid", sheet, name, off_grid, times, "a time on the grid")
    edges = np.append(book.clock.starts, book.clock.end)
    early, late = start < edges[book.event_from], end > edges[book.event_to]
    found.wrong(
        "window in the event",
        sheet,
        "window_start",
        early,
        start,
        edges[book.event_from : book.event_from + 1].repeat(len(start)),
    )
    found.wrong(
        "window in the event",
        sheet,
        "window_end",
        late,
        end,
        edges[book.event_to : book.event_to + 1].repeat(len(end)),
    )
    called_at = utc_naive(book.record.frames["request"]["called_at"]).max()
    notice = called_at + _minutes(book.fact("notice_minutes", book.called))
    found.wrong("notice", sheet, "window_start", start < notice, start, notice)
    least = book.fact("minimum_window_minutes", book.called)
    switched, minutes = _switched(case)
    longest = np.zeros(book.called.size)
    np.maximum.at(longest, case.machine_row[switched], minutes[switched])
    machine_rule = "minimum on time" if case.absorb else "minimum off time"
    for rule, needed in (("minimum window", least), (machine_rule, longest)):
        soonest = start + _minutes(needed)
        found.wrong(rule, sheet, "window_end", end < soonest, end, soonest)
    starts_left = case.chillers.starts_left[case.own_machines, 0]
    none_left = np.bincount(case.machine_row[switched & (starts_left < 1)], minlength=book.called.size) > 0
    found.wrong(
        "starts left", sheet, "chiller_ids", none_left, "a machine with no start left", "one start each"
    )


def _switched(case: Case) -> tuple[Bools, Floats]:
    """Machines (U,) that an order stops, or of an absorb starts (those in service that can charge), and the least
    minutes that each then stays so."""
    own = case.own_machines
    if not case.absorb:
        return case.off, case.chillers.min_off_minutes[own, 0]
    return case.can_charge[own], case.chillers.min_on_minutes[own, 0]


def machines_named(case: Case, found: Findings) -> None:
    """chiller_ids are the machines at load limit 0 in the window; all of them are the site's own, in service."""
    book, sheet = case.evidence, case.evidence.sheets["windows"]
    limit = book.grid("machines", "load_limit_fraction")
    zero = ((limit == 0.0) & book.inside()[case.machine_row]).any(axis=1)
    named = sheet.frame["chiller_ids"].map(lambda tags: sorted(map(str, tags))).tolist()
    stopped: list[list[str]] = [[] for _ in named]
    for row, tag in zip(case.machine_row[zero].tolist(), book.machines.unit_id[zero].tolist(), strict=True):
        stopped[row].append(str(tag))
    wrong = np.array([a != sorted(b) for a, b in zip(named, stopped, strict=True)], dtype=np.bool_)
    found.wrong("machines off", sheet, "chiller_ids", wrong, named, stopped)


def window_numbers(case: Case, found: Findings) -> None:
    """Energies, inventories and temperatures of a window from its course."""
    book, sheet = case.evidence, case.evidence.sheets["windows"]
    start, end = book.window()
    row, step_h = np.arange(book.called.size), book.clock.step_h
    change = book.grid("intervals", "event_kw") - book.grid("intervals", "usual_kw")
    after = np.arange(book.clock.count)[None, :] >= end[:, None]
    held = book.grid("intervals", "inventory_kwh_th")
    before = book.per_called(book.tanks, book.grid("tanks", "inventory_start_kwh_th"))
    usual = book.grid("intervals", "usual_inventory_kwh_th")
    extra = book.grid("intervals", "unmet_kw_th") - book.grid("intervals", "usual_unmet_kw_th")
    committed = book.grid("intervals", "committed_kw").sum(axis=1) * step_h
    found.equal("window energy", sheet, "committed_kwh", committed)
    recovery = np.where(after, change, 0.0).sum(axis=1) * step_h
    found.equal("window energy", sheet, "recovery_energy_kwh", recovery, np.abs(change).sum(axis=1))
    first = np.minimum(start, book.clock.count - 1)
    found.equal("window inventory", sheet, "inventory_start_kwh_th", before[row, first])
    found.equal("window inventory", sheet, "inventory_end_kwh_th", held[row, np.maximum(end - 1, 0)])
    lack = np.maximum(usual[:, -1] - held[:, -1], 0.0)
    found.equal("lack at the end", sheet, "end_lack_kwh_th", lack, held[:, -1])
    found.equal("unmet energy", sheet, "unmet_kwh_th", np.maximum(extra, 0.0).sum(axis=1) * step_h)
    peak = book.grid("intervals", "zone_rise_k").max(axis=1, initial=0.0)
    found.equal("peak rise", sheet, "peak_zone_rise_k", peak)
    found.equal("delivery factor", sheet, "delivery_factor", book.fact("delivery_factor", book.called))
    full_again(case, found, held, usual)


def full_again(case: Case, found: Findings, held: Floats, usual: Floats) -> None:
    """full_again_at: the first interval end after the window at which the inventory is back at the usual case's, from
    below after a shed, from above after an absorb; none if never."""
    book, sheet = case.evidence, case.evidence.sheets["windows"]
    _, end = book.window()
    capacity = np.zeros(book.called.size)
    np.add.at(capacity, case.tank_row, case.tanks.capacity_kwh_th[case.own_tanks, 0])
    # After an absorb the tank comes back to the usual level from above.
    above = -1.0 if case.absorb else 1.0
    line = usual - above * FULL_AGAIN_FRACTION * capacity[:, None]
    after = np.arange(book.clock.count)[None, :] >= end[:, None]
    slack = allowed(held, line, capacity[:, None])
    ends = np.append(
        utc_naive(book.record.frames["intervals"]["interval_start"])[: book.clock.count] + book.clock.step,
        np.datetime64("NaT", "us"),
    )
    first = [_first(after & (above * (held - line) >= sign * slack)) for sign in (-1.0, 1.0)]
    told = utc_naive(sheet.frame["full_again_at"])
    times = [ends[at] for at in first]
    alike = [(told == time) | (np.isnat(told) & np.isnat(time)) for time in times]
    found.wrong("full again", sheet, "full_again_at", ~(alike[0] | alike[1]), told, times[0])


def from_its_quote(case: Case, found: Findings) -> None:
    """A window equals the quote it names, and its change of load is that quote's."""
    book, sheet = case.evidence, case.evidence.sheets["windows"]
    quotes = book.record.frames["quotes"]
    by_id = quotes.drop_duplicates("quote_id").set_index("quote_id")
    named = sheet.frame["quote_id"]
    unknown = ~named.isin(by_id.index).to_numpy()
    found.wrong(
        "window of its quote", sheet, "quote_id", unknown, named.to_numpy(), "a row of quotes.parquet"
    )
    if unknown.any():
        return
    own = by_id.loc[named].reset_index()
    found.same("window of its quote", sheet, "site_id", own["site_id"].to_numpy())
    for name in QUOTED:
        if name not in own.columns:
            continue
        if own[name].dtype.kind == "f":
            found.equal("window of its quote", sheet, name, own[name].to_numpy(dtype=np.float64))
        else:
            found.same("window of its quote", sheet, name, own[name].to_numpy())
    tags = zip(sheet.frame["chiller_ids"], own["chiller_ids"], strict=True)
    apart = np.array([list(a) != list(b) for a, b in tags], dtype=np.bool_)
    found.wrong(
        "window of its quote",
        sheet,
        "chiller_ids",
        apart,
        sheet.frame["chiller_ids"].tolist(),
        own["chiller_ids"].tolist(),
    )
    change = lists(own["change_kw"], book.clock.count)
    if not np.isnan(change).any():
        intervals = book.sheets["intervals"]
        usual = book.grid("intervals", "usual_kw")
        found.equal("change of its quote", intervals, "event_kw", (usual + change).ravel(), usual.ravel())


def _minutes(minutes: Floats) -> Any:
    return np.round(np.nan_to_num(minutes) * 60e6).astype(np.int64).astype("timedelta64[us]")


def _first(mask: np.ndarray) -> np.ndarray:
    """First True along the last axis, -1 where there is none."""
    return np.where(mask.any(axis=1), mask.argmax(axis=1), -1)


RULES = (
    request,
    delivered_as_asked,
    promised,
    window_terms,
    machines_named,
    window_numbers,
    from_its_quote,
)
