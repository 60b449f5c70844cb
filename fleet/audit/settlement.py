"""Rules on a settlement: what was delivered, how it was performed, what is paid, and what is posted.

Baselines are baselines.py's. Money is worked out with the frozen rule and settings by money.py's functions,
to the cent. Shapes: S called sites sorted by id, T shown intervals.
"""

from decimal import Decimal
from typing import Final

import numpy as np
import pandas as pd

from fleet.audit import baselines
from fleet.audit.evidence import utc_naive
from fleet.audit.findings import Findings, Sheet
from fleet.audit.settled import Settled, days_of, local_day
from fleet.money import Prices, earned, firm_level_charge, netted, performance_factor
from fleet.request import outermost
from sites.units import AnyArray, Floats, Ints

MONEY: Final = ("capacity_payment", "energy_payment", "penalty", "total")


def rows(made: Settled, found: Findings) -> None:
    """Every called site has every interval shown, in order; one row a site, one an event interval, one a posting."""
    count = made.clock.count
    starts = pd.DatetimeIndex(made.clock.starts).tz_localize("UTC")
    keys = {
        "intervals": (np.repeat(made.site_id, count), np.tile(starts, len(made.site_id))),
        "sites": (made.site_id, None),
        "fleet": (None, starts[made.in_event]),
    }
    for table, (site_id, times) in keys.items():
        sheet = made.sheet(table)
        wanted = len(site_id) if site_id is not None else len(times) if times is not None else 0
        if len(sheet.frame) != wanted:
            found.tell("rows of the table", sheet.file, None, f"{len(sheet.frame)} rows", f"{wanted} rows")
            continue
        if site_id is not None:
            found.same("rows of the table", sheet, "site_id", site_id)
        if times is not None:
            found.same("rows of the table", sheet, "interval_start", pd.DatetimeIndex(times))
    for table, frame in made.record.frames.items():
        sheet = made.sheet(table)
        found.same("rows of the table", sheet, "event_id", made.record.event_id)
        for name in ("revision", "to_revision"):
            if name in frame.columns:
                found.equal("rows of the table", sheet, name, np.full(len(frame), made.record.revision))
    slots = made.sheet("day_intervals")
    twice = slots.frame.duplicated(["site_id", "day", "slot"], keep=False).to_numpy()
    found.wrong("rows of the table", slots, "slot", twice, slots.numbers("slot"), "each slot of a day once")
    _slots_whole(made, slots, found)


def _slots_whole(made: Settled, slots: Sheet, found: Findings) -> None:
    """A recorded day has exactly the slots that its local day has."""
    days = days_of(made)
    site = pd.Index(made.site_id).get_indexer(pd.Index(slots.frame["site_id"]))
    at = (slots.frame["day"].to_numpy().astype("datetime64[D]") - days.day[0]).astype(np.int64)
    slot = slots.frame["slot"].to_numpy(dtype=np.int64)
    placed = (site >= 0) & (at >= 0) & (at < len(days.day)) & (slot >= 0) & (slot < days.exists.shape[1])
    exists = np.zeros(len(slot), dtype=np.bool_)
    exists[placed] = days.exists[at[placed], slot[placed]]
    found.wrong("rows of the table", slots, "slot", ~exists, slot, "a slot of that day and site")
    held = np.zeros(days.kw.shape, dtype=np.bool_)
    held[site[placed], at[placed], slot[placed]] = True
    lost = days.recorded & (held.sum(axis=2) != days.exists.sum(axis=1)[None, :])
    names = [f"{made.site_id[s]} {days.day[d]}" for s, d in np.argwhere(lost)[:5]]
    if names:
        found.tell(
            "rows of the table",
            slots.file,
            "slot",
            f"days with slots missing: {', '.join(names)}",
            "whole days",
        )


def in_force(made: Settled, found: Findings) -> None:
    """Flags, stream and commitment are the call's."""
    if not made.whole:
        return
    sheet = made.sheet("intervals")
    found.same("flags of the call", sheet, "in_event", np.tile(made.in_event, len(made.site_id)))
    found.same("flags of the call", sheet, "in_window", made.in_window.ravel())
    found.equal("committed kW", sheet, "committed_kw", made.committed_kw.ravel())
    streams = np.array([rule.stream for rule in made.rules], dtype=object)
    found.same("flags of the call", sheet, "stream", np.repeat(streams, made.clock.count))
    sites = made.sheet("sites")
    if len(sites.frame) == len(streams):
        found.same("flags of the call", sites, "stream", streams)
        found.same(
            "flags of the call", sites, "rule", np.array([rule.name for rule in made.rules], dtype=object)
        )


def delivered(made: Settled, found: Findings) -> None:
    """delivered = adjusted baseline - metered for shed, the reverse for absorb; an estimate never counts for a site."""
    if not made.whole:
        return
    sheet = made.sheet("intervals")
    metered, base = made.grid("metered_kw"), made.grid("adjusted_baseline_kw")
    found.equal(
        "delivered kW", sheet, "delivered_kw", _delivered(made).ravel(), np.fmax(metered, base).ravel()
    )
    missing = (sheet.frame["quality"] == "missing").to_numpy() != np.isnan(metered.ravel())
    found.wrong(
        "quality",
        sheet,
        "quality",
        missing,
        sheet.frame["quality"].to_numpy(),
        "missing where there is no value",
    )


def against_meters(made: Settled, found: Findings) -> None:
    """Where meters are given: each measured value is the signed sum of its meters."""
    if made.meters is None or not made.whole:
        return
    mapped = made.call.frozen.get("meter_map")
    if mapped is None or mapped.empty:
        mapped = pd.DataFrame(
            {"meter_id": made.site_id, "site_id": made.site_id, "role": "building", "sign": 1}
        )
    used = mapped.assign(role=mapped["role"].fillna("building"), sign=mapped["sign"].fillna(1).astype(float))
    streams = dict(zip(made.site_id.tolist(), (rule.stream for rule in made.rules), strict=True))
    used = used[used["role"] == used["site_id"].map(streams)]
    read = made.meters.drop_duplicates(["meter_id", "interval_start"]).merge(used, on="meter_id")
    read = read.assign(kw=read["kw"] * read["sign"])
    each = read.groupby(["site_id", "interval_start"])["kw"]
    summed = each.sum().where(each.count() == each.size())
    sheet = made.sheet("intervals")
    keys = pd.MultiIndex.from_frame(sheet.frame[["site_id", "interval_start"]])
    value = summed.reindex(keys).to_numpy(dtype=np.float64)
    expected = np.where(made.measured().ravel(), value, sheet.numbers("metered_kw"))
    found.equal("metered kW", sheet, "metered_kw", expected)


def performance(made: Settled, found: Findings) -> None:
    """Energies over each site's own window, and the performance factor by the frozen rule."""
    sheet = made.sheet("sites")
    if not made.whole or len(sheet.frame) != len(made.site_id):
        return
    step_h = made.clock.step_h
    inside, value = made.in_window, made.grid("delivered_kw")
    known = inside & ~np.isnan(value)
    committed = np.where(inside, made.grid("committed_kw"), 0.0).sum(axis=1) * step_h
    energy = np.where(known, value, 0.0).sum(axis=1) * step_h
    size = np.where(known, np.abs(value), 0.0).sum(axis=1)
    found.equal("energy of the window", sheet, "committed_kwh", committed)
    found.equal(
        "energy of the window", sheet, "delivered_kwh", np.where(known.any(axis=1), energy, np.nan), size
    )
    factor, off = np.full(len(committed), np.nan), np.full(len(committed), np.nan)
    midnight, full = (sheet.numbers(f"recovery_until_{name}_kwh") for name in ("midnight", "full"))
    for row, rule in enumerate(made.rules):
        one = slice(row, row + 1)
        off[one] = netted(midnight[one], full[one], rule)
        factor[one] = performance_factor(
            value[one], made.grid("committed_kw")[one], inside[one], step_h, rule, _hour(made), off[one]
        )
    found.equal("energy netted", sheet, "netted_kwh", off)
    excused = (sheet.frame["state"] == "excused").to_numpy()
    found.equal("performance factor", sheet, "performance_factor", np.where(excused, np.nan, factor))
    reasoned = sheet.frame["why"].notna().to_numpy()
    found.wrong(
        "excused", sheet, "why", reasoned != excused, sheet.frame["why"].to_numpy(dtype=object), "a reason"
    )


def taken_back(made: Settled, found: Findings) -> None:
    """Energy given back from the own window's end until local midnight, and until the call's tank is full again."""
    sheet = made.sheet("sites")
    if not made.whole or len(sheet.frame) != len(made.site_id):
        return
    starts, zone = made.clock.starts, str(made.settings["timezone"])
    ends = utc_naive(made.windows["window_end"])[:, None]
    last = local_day((ends - made.clock.step).ravel(), zone)[:, None]
    value, after = made.grid("delivered_kw"), starts >= ends
    full = utc_naive(made.windows["full_again_at"])[:, None]
    spans = {
        "recovery_until_midnight_kwh": (after & (local_day(starts, zone) == last), np.zeros(len(last))),
        "recovery_until_full_kwh": (after & (starts < full), np.where(np.isnat(full[:, 0]), np.nan, 0.0)),
    }
    for name, (held, base) in spans.items():
        energy = base - np.where(held, value, 0.0).sum(axis=1) * made.clock.step_h
        size = np.where(held, np.abs(np.nan_to_num(value)), 0.0).sum(axis=1)
        found.equal("energy taken back", sheet, name, energy, size)


def payments(made: Settled, found: Findings) -> None:
    """Each line to the cent from the row's energies and factor, the frozen rule and prices; the total their sum."""
    sheet = made.sheet("sites")
    if len(sheet.frame) != len(made.site_id):
        return
    told = made.settings
    names = (
        "capacity_payment_per_kwh",
        "energy_payment_per_kwh",
        "penalty_per_kwh",
        "performance_floor",
        "performance_cap",
    )
    prices = Prices(str(told["currency"]), *(float(told[name]) for name in names))
    factor, committed = sheet.numbers("performance_factor"), sheet.numbers("committed_kwh")
    excused = (sheet.frame["state"] == "excused").to_numpy()
    delivered_kwh = np.where(excused, np.nan, sheet.numbers("delivered_kwh") - sheet.numbers("netted_kwh"))
    share = np.full(len(factor), np.nan)
    due = np.zeros((len(factor), 3), dtype=object)
    for rule in dict.fromkeys(made.rules):
        rows = np.flatnonzero([other == rule for other in made.rules])
        charge = np.zeros(len(rows))
        if made.whole:
            charge = firm_level_charge(
                made.grid("metered_kw")[rows], made.in_window[rows], made.clock.step_h, rule, made.sign
            )
        share[rows], lines = earned(
            committed[rows],
            delivered_kwh[rows],
            factor[rows],
            np.where(excused[rows], 0.0, charge),
            rule,
            prices,
            made.site_id[rows].tolist(),
        )
        due[rows] = np.stack([getattr(lines, name) for name in MONEY[:3]], axis=1)
    found.equal("payments", sheet, "paid_share", share)
    for place, name in enumerate(MONEY[:3]):
        _amounts("payments", sheet, name, due[:, place], found)
    own = [sheet.frame[name].to_numpy(dtype=object) for name in MONEY[:3]]
    _amounts("total", sheet, "total", own[0] + own[1] + own[2], found)


def states(made: Settled, found: Findings) -> None:
    """How sure each row is: final only where every value of event, window and adjustment was read."""
    sheet = made.sheet("sites")
    if not made.whole or len(sheet.frame) != len(made.site_id):
        return
    inside = made.in_window
    none_read = ~(inside & ~np.isnan(made.grid("metered_kw"))).any(axis=1)
    base = inside & ~np.isnan(made.grid("adjusted_baseline_kw"))
    method = sheet.frame["method"].to_numpy(dtype=object)
    unsure = ((inside | made.in_event) & ~made.measured()).any(axis=1) | base.any(axis=1) & (
        base != inside
    ).any(axis=1)
    told = sheet.frame["state"].to_numpy(dtype=object)
    must = np.select(
        [told == "excused", none_read, (method == "none") | ~base.any(axis=1), unsure],
        ["excused", "meter_missing", "no_baseline", "provisional"],
        "",
    ).astype(object)
    # An unread adjustment window makes a row provisional too: then its adjustment was left out.
    wanted = [rule.adjustment != "none" and rule.kind != "before_after" for rule in made.rules]
    left_out = (sheet.frame["adjustment_kind"] == "none").to_numpy() & np.array(wanted)
    sure = np.where(left_out, "provisional", "final").astype(object)
    loose = (must == "") & (method == "before_after")
    expected = np.where(must != "", must, np.where(loose, told, sure))
    found.same("state", sheet, "state", expected)
    odd = loose & ~np.isin(told.astype(str), ("final", "provisional"))
    found.wrong("state", sheet, "state", odd, told, "final or provisional")


def fleet_sums(made: Settled, found: Findings) -> None:
    """Sums at the requested node in every event interval, rebounds netted; what was asked and expected, the call's."""
    sheet = made.sheet("fleet")
    if not made.whole or len(sheet.frame) != int(made.in_event.sum()):
        return
    request = outermost(made.call.frames["request"])
    for name in ("requested_kw", "expected_kw"):
        found.equal("fleet sums", sheet, name, request[name].to_numpy(dtype=np.float64))
    factor = made.windows["delivery_factor"].to_numpy(dtype=np.float64)
    value = made.grid("delivered_kw")[:, made.in_event]
    known = ~np.isnan(value)
    found.equal("fleet sums", sheet, "committed_kw", factor @ made.grid("committed_kw")[:, made.in_event])
    size = np.abs(factor) @ np.abs(np.where(known, value, 0.0))
    found.equal("fleet sums", sheet, "delivered_kw", factor @ np.where(known, value, 0.0), size)
    found.equal("fleet sums", sheet, "sites_settled", known.sum(axis=0).astype(np.float64))
    found.equal("fleet sums", sheet, "sites_missing", (~known).sum(axis=0).astype(np.float64))


def postings(made: Settled, found: Findings) -> None:
    """Each site's amount is its total less that of the revision before; from_revision is that revision."""
    sheet = made.sheet("postings")
    zero = Decimal(0)
    new = made.record.frames["sites"].set_index("site_id")["total"]
    old = (
        pd.Series(dtype=object)
        if made.before is None
        else made.before.frames["sites"].set_index("site_id")["total"]
    )
    listed = sheet.frame["site_id"]
    amount = [new.get(site, zero) - old.get(site, zero) for site in listed]
    _amounts("postings", sheet, "amount", np.array(amount, dtype=object), found)
    before = np.nan if made.before is None else float(made.before.revision)
    found.equal("postings", sheet, "from_revision", np.full(len(listed), before))
    wanted = sorted(set(new.index) | set(old.index))
    if sorted(listed) != wanted:
        found.tell("postings", sheet.file, "site_id", f"{len(listed)} sites", f"{len(wanted)}, each once")


def _hour(made: Settled) -> Ints:
    """(T,) hour of each interval, counted from the event's start."""
    hour: Ints = (made.clock.starts - made.event[0]) // np.timedelta64(1, "h")
    return hour


def _delivered(made: Settled) -> Floats:
    value = made.sign * (made.grid("adjusted_baseline_kw") - made.grid("metered_kw"))
    watched = made.in_event | made.in_window
    return np.where(watched & ~made.measured() & (value > 0.0), np.nan, value)


def _amounts(rule: str, sheet: Sheet, column: str, expected: AnyArray, found: Findings) -> None:
    """Money columns are equal to the last digit."""
    there = sheet.frame[column].to_numpy(dtype=object)
    wrong = np.array([a != b for a, b in zip(there, expected, strict=True)], dtype=np.bool_)
    found.wrong(rule, sheet, column, wrong, there, expected)


RULES = (
    rows,
    in_force,
    *baselines.RULES,
    delivered,
    against_meters,
    performance,
    taken_back,
    payments,
    states,
    fleet_sums,
    postings,
)
