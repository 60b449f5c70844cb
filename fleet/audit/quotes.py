"""Rules on quotes: every candidate's kW and cost parts, worked out again from its change of load.

Cost parts rest on the frozen tariffs, bills, fees and machines. Shapes: C candidates, N sites, T intervals, E event
intervals.
"""

from typing import Final

import numpy as np
import pandas as pd

from fleet.audit.case import Case, over_sites
from fleet.audit.evidence import utc_naive
from fleet.audit.findings import Findings
from sites.units import Bools, Floats, Ints

PARTS: Final = ("before", "during", "recovery", "demand", "fee", "comfort")
DEMAND_LIMITS: Final = (1.0, 0.75, 0.5)
"""Demand limits that are offered to machines that stay on."""
LEAST_KW: Final = 1.0
"""A candidate gives at least this in every interval of its window."""


def ids(case: Case, found: Findings) -> None:
    """One row per candidate: ids once, and no two alike in site, window, machines, limit and recovery."""
    sheet = case.evidence.sheets["quotes"]
    frame = sheet.frame
    twice = frame["quote_id"].duplicated(keep=False).to_numpy()
    found.wrong("quote ids", sheet, "quote_id", twice, frame["quote_id"].to_numpy(), "an id given once")
    machines = frame["chiller_ids"].map(lambda tags: " ".join(sorted(tags)))
    alike = frame[["site_id", "window_start", "window_end", "load_limit_fraction", "recovery"]].assign(
        machines=machines
    )
    found.wrong("quote ids", sheet, "window_start", alike.duplicated(keep=False).to_numpy(), "twice", "once")
    lost = ~frame["site_id"].isin(case.evidence.site_id).to_numpy()
    found.wrong("quote ids", sheet, "site_id", lost, frame["site_id"].to_numpy(), "a frozen site")
    called = case.evidence.sheets["windows"]
    unquoted = ~called.frame["site_id"].isin(frame["site_id"]).to_numpy()
    found.wrong(
        "quote ids", called, "site_id", unquoted, "a site without quotes", "quotes of every called site"
    )


def machines(case: Case, found: Findings) -> None:
    """Machines of a candidate are the last in loading order of those in service, of an absorb none; limits are those
    offered."""
    book, sheet = case.evidence, case.evidence.sheets["quotes"]
    limit = sheet.numbers("load_limit_fraction")
    offered = np.isclose(limit[:, None], np.array(DEMAND_LIMITS)[None, :], rtol=0.0, atol=1e-12).any(axis=1)
    found.wrong("quoted limit", sheet, "load_limit_fraction", ~offered, limit, "1, 0.75 or 0.5")
    up = book.machine_facts[case.machine_up].groupby("site_id", sort=False)["chiller_id"].agg(list)
    ready = sheet.frame["site_id"].map(up)
    pairs = zip(sheet.frame["chiller_ids"], ready, strict=True)
    if case.absorb:
        right = np.array([len(off) == 0 for off, _ in pairs], dtype=np.bool_)
    else:
        right = np.array(
            [len(off) > 0 and list(off) == _last(there, len(off)) for off, there in pairs], dtype=np.bool_
        )
    found.wrong(
        "quoted machines",
        sheet,
        "chiller_ids",
        ~right,
        sheet.frame["chiller_ids"].to_numpy(),
        "none" if case.absorb else "the last of those up",
    )


def recoveries(case: Case, found: Findings) -> None:
    """A candidate's recovery is one of those the proof says its site was offered, and its id ends with it unless
    usual."""
    sheet = case.evidence.sheets["quotes"]
    code = sheet.frame["recovery"]
    offered, varied = recoveries_offered(case)
    every = sheet.frame["site_id"].isin(case.evidence.site_id[varied]).to_numpy(dtype=np.bool_)
    unknown = ~(code == offered[0]).to_numpy() & ~(every & code.isin(offered).to_numpy())
    found.wrong("recovery", sheet, "recovery", unknown, code.to_numpy(), "one of " + ", ".join(offered))
    pairs = zip(sheet.frame["quote_id"], code, strict=True)
    named = np.array([_recovery_of(str(name)) == one for name, one in pairs], dtype=np.bool_)
    found.wrong(
        "recovery", sheet, "quote_id", ~named, sheet.frame["quote_id"].to_numpy(), "an id with its recovery"
    )


def recoveries_offered(case: Case) -> tuple[list[str], Bools]:
    """The recoveries of the call, and the sites (N,) that were offered all of them; the others the first only."""
    book = case.evidence
    offered = list(book.record.proof.get("recoveries") or ["usual"])
    sites = book.record.proof.get("recoveries_sites")
    every = np.ones(len(book.site_id), dtype=np.bool_)
    return offered, every if sites is None else np.isin(book.site_id.astype(str), np.array(sites, dtype=str))


def windows(case: Case, found: Findings) -> None:
    """Windows on the grid and inside the event; nothing changes before one; at least 1 kW in all of it."""
    book, sheet = case.evidence, case.evidence.sheets["quotes"]
    start, end = window(case)
    for name in ("window_start", "window_end"):
        times = utc_naive(sheet.frame[name])
        off_grid = (times - book.clock.start) % book.clock.step != np.timedelta64(0)
        found.wrong("quoted window", sheet, name, np.asarray(off_grid), times, "a time on the grid")
    outside = (start < book.event_from) | (end > book.event_to) | (start >= end)
    found.wrong(
        "quoted window",
        sheet,
        "window_start",
        outside,
        utc_naive(sheet.frame["window_start"]),
        "in the event",
    )
    change, expected = change_kw(case), lists(sheet.frame["expected_kw"], book.event_to - book.event_from)
    hour = np.arange(book.clock.count)[None, :]
    early = (np.abs(change) > 1e-9) & (hour < start[:, None])
    found.wrong(
        "as usual before the window",
        sheet,
        "change_kw",
        np.asarray(early.any(axis=1)),
        change[:, : book.event_to].tolist(),
        "0",
    )
    in_event = np.arange(book.event_from, book.event_to)[None, :]
    inside = (in_event >= start[:, None]) & (in_event < end[:, None])
    least = np.where(inside, expected, np.inf).min(axis=1, initial=np.inf)
    found.wrong("least kW", sheet, "expected_kw", least < LEAST_KW - 1e-9, least, f"{LEAST_KW:g} or more")


def expected_kw(case: Case, found: Findings) -> None:
    """expected = sign x change in every event interval; both lists as long as event and horizon."""
    book, sheet = case.evidence, case.evidence.sheets["quotes"]
    for name, count in (("expected_kw", book.event_to - book.event_from), ("change_kw", book.clock.count)):
        length = sheet.frame[name].map(len).to_numpy()
        found.wrong("quoted kW", sheet, name, length != count, length, f"{count} values")
    change = change_kw(case)
    target = book.sign * change[:, book.event]
    expected = lists(sheet.frame["expected_kw"], target.shape[1])
    apart = np.abs(expected - target)
    wrong = ~(apart <= 1e-9 * np.maximum(np.abs(target), 1.0))
    at = np.argmax(wrong, axis=1)
    row = np.arange(len(at))
    values = (
        [f"{a:.9g} in event interval {k}" for a, k in zip(expected[row, at], at, strict=True)]
        if len(at)
        else []
    )
    found.wrong(
        "quoted kW",
        sheet,
        "expected_kw",
        np.asarray(wrong.any(axis=1)),
        values,
        target[row, at] if len(at) else "",
    )


def cost_parts(case: Case, found: Findings) -> None:
    """Each part from change_kw and frozen prices; net_cost their sum; the price of a lack from the machines."""
    book, sheet = case.evidence, case.evidence.sheets["quotes"]
    site, (start, end) = site_of(case), window(case)
    change = change_kw(case)
    energy = change * case.price_per_kwh[site] * book.clock.step_h
    scale = np.abs(energy).sum(axis=1)
    hour = np.arange(book.clock.count)[None, :]
    lack, price = sheet.numbers("end_lack_kwh_th"), lack_price_per_kwh_th(case)[site]
    found.equal("price of a lack", sheet, "end_lack_price_per_kwh_th", price)
    usual = book.grid("usual", "usual_kw") + book.grid("usual", "rest_kw")
    reached = (usual[site] + change).max(axis=1)
    paid = np.maximum(case.billed_peak_kw, usual.max(axis=1))[site]
    parts = {
        "before": np.where(hour < start[:, None], energy, 0.0).sum(axis=1),
        "during": np.where((hour >= start[:, None]) & (hour < end[:, None]), energy, 0.0).sum(axis=1),
        "recovery": np.where(hour >= end[:, None], energy, 0.0).sum(axis=1) + lack * price,
        "demand": book.fact("demand_price_per_kw", site) * np.maximum(reached - paid, 0.0),
        "fee": book.fact("call_fee", site),
        "comfort": book.fact("comfort_payment_per_kwh_th", site) * sheet.numbers("unmet_kwh_th"),
    }
    for name, value in parts.items():
        # A demand charge rests on a peak of kW: its rounding is the peak's.
        size = book.fact("demand_price_per_kw", site) * np.abs(reached) if name == "demand" else scale
        found.equal("cost parts", sheet, f"cost_{name}", value, size)
    net = sum(sheet.numbers(f"cost_{name}") for name in PARTS)
    found.equal("net cost", sheet, "net_cost", np.asarray(net), scale)


def unmet_and_reason(case: Case, found: Findings) -> None:
    """A candidate that leaves load unmet says what it leans on."""
    sheet = case.evidence.sheets["quotes"]
    silent = (sheet.numbers("unmet_kwh_th") > 0.0) & (sheet.frame["limited_by"] == "none").to_numpy()
    found.wrong("limited by", sheet, "limited_by", silent, "none", "what limits it, for load goes unmet")
    for name in ("unmet_kwh_th", "end_lack_kwh_th"):
        found.least("not negative", sheet, name, 0.0)


def low_level(case: Case, found: Findings) -> None:
    """Candidates of a site that start together start from one low inventory (of an absorb: one high), and the window
    repeats it."""
    sheet = case.evidence.sheets["quotes"]
    if "inventory_low_start_kwh_th" not in sheet.frame.columns:
        return
    keys = [sheet.frame["site_id"], sheet.frame["window_start"]]
    shared = sheet.frame["inventory_low_start_kwh_th"].groupby(keys).transform("median")
    found.equal("low inventory", sheet, "inventory_low_start_kwh_th", shared.to_numpy(dtype=np.float64))


def site_of(case: Case) -> Ints:
    """(C,) index of each candidate's site among the frozen ones."""
    known = pd.Index(case.evidence.site_id)
    return known.get_indexer(pd.Index(case.evidence.record.frames["quotes"]["site_id"])).astype(np.int64)


def window(case: Case) -> tuple[Ints, Ints]:
    """(C,) each candidate's window as clock indices."""
    frame = case.evidence.record.frames["quotes"]
    start, end = (case.evidence.index(utc_naive(frame[name])) for name in ("window_start", "window_end"))
    return start, end


def change_kw(case: Case) -> Floats:
    """(C, T) change of load of every candidate."""
    return lists(case.evidence.record.frames["quotes"]["change_kw"], case.evidence.clock.count)


def lists(column: pd.Series, count: int) -> Floats:
    """A column of lists as (row, count); lists of another length come as NaN."""
    none = np.full(count, np.nan)
    kept = [np.asarray(value, dtype=np.float64) if len(value) == count else none for value in column.tolist()]
    return np.stack(kept) if kept else np.zeros((0, count))


def lack_price_per_kwh_th(case: Case) -> Floats:
    """(N,) what making a kWh_th in charging hours draws, at those hours' mean price; never below 0."""
    count = len(case.evidence.sites)
    ice = case.ice_site[:, None]
    made, drawn = (
        np.where(ice, over_sites(case.machine_site, cold, count), over_sites(case.machine_site, warm, count))
        for cold, warm in ((case.ice_kw_th, case.direct_kw_th), (case.ice_full_kw, case.direct_full_kw))
    )
    each = np.divide(drawn, made, out=np.zeros_like(made), where=made > 0.0)
    hours = case.charge_hours | ~case.charge_hours.any(axis=1, keepdims=True)
    price: Floats = (each * case.price_per_kwh * hours).sum(axis=1) / hours.sum(axis=1)
    return np.maximum(price, 0.0)


def _recovery_of(quote_id: str) -> str:
    """The recovery that an id names behind its number: site.0012-night; usual where none is."""
    return quote_id.rpartition(".")[2].partition("-")[2] or "usual"


def _last(tags: object, count: int) -> list[str]:
    return tags[-count:] if isinstance(tags, list) else []


RULES = (ids, machines, recoveries, windows, expected_kw, cost_parts, unmet_and_reason, low_level)
