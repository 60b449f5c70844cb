"""An event settled: what every called site delivered against its frozen rule, and what that earns.

Pure: facts of the call and readings in, one Settlement out. Owns the order of work and the money of each rule's
sites; leaves what was delivered to measured.py, money's arithmetic to money.py, tables to settlement.py.
"""

from collections.abc import Callable, Iterable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from typing import Final, TypeAlias

import numpy as np
import pandas as pd

from fleet.callfacts import CallFacts, Plan, arrange
from fleet.errors import Problem, Refused
from fleet.history import period, rows_of
from fleet.measured import Measured, Part, joined, measure
from fleet.money import Lines, earned, firm_level_charge, minor_digits, netted, performance_factor
from fleet.readings import FrameReadings, Readings
from fleet.remarks import named
from fleet.settlement import Settlement, SiteResult, fleet_table, interval_table, posting_table, site_table
from sites.units import Ints

__all__ = ["CallFacts", "Settlement", "settle"]

Sink: TypeAlias = Callable[[pd.DataFrame], None]
"""Takes the rows of day_intervals, some sites at a time, in order."""
SITES_AT_ONCE: Final = 250
"""Sites whose days are laid out together; keeps memory flat as the fleet grows."""
WORKERS: Final = 2
"""Parts of a large fleet worked out side by side; each is on its own, so that their number changes no figure."""


def settle(
    call: CallFacts,
    readings: pd.DataFrame | Readings,
    revision: int = 1,
    previous_sites: pd.DataFrame | None = None,
    sink: Sink | None = None,
) -> Settlement:
    """Settle every called site of `call` on `readings` (meter_id, interval_start, kw, quality).

    previous_sites: the sites table of the revision before, from whose totals the postings start. sink: takes
    day_intervals, by far the largest table, while the next sites are worked out; the settlement holds none then.
    Raises Refused for readings that cannot be placed (see meters.streams) and FleetError for a call that is not
    complete.
    """
    plan = arrange(call)
    source = FrameReadings(readings) if isinstance(readings, pd.DataFrame) else readings
    parts = _parts(call, plan, source, revision, sink)
    measured = joined([part.measured for part in parts])
    result = _result(plan, call, measured)
    head = (call.event_id, revision, plan)
    sites = site_table(*head, measured.base, result)
    fleet = fleet_table(*head, call.request, result)
    names = dict.fromkeys(name for part in parts for name in part.counts)
    counts = {name: sum(part.counts.get(name, 0) for part in parts) for name in names}
    unknown = minor_digits(call.prices.currency)[1]
    return Settlement(
        intervals=interval_table(*head, measured.base, result),
        days=_one([part.days for part in parts]),
        day_intervals=_all_of(part.day_intervals for part in parts),
        sites=sites,
        fleet=fleet,
        postings=posting_table(call.event_id, revision, sites, previous_sites),
        summary=_summary(call, revision, plan, sites, fleet, counts),
        notes=(*([unknown] if unknown else []), *named(plan.site_ids, [part.remarks for part in parts])),
    )


def _parts(call: CallFacts, plan: Plan, readings: Readings, revision: int, sink: Sink | None) -> list[Part]:
    """The sites worked out, some at a time; what is wrong in any of them is refused together."""
    since, until = period(call, plan)
    of_site = _meters(call, plan)
    groups = _groups(readings.pieces([own[0] if own else "" for own in of_site]))
    given = readings.parts([[meter for row in rows for meter in of_site[row]] for rows in groups])

    def work(at: int) -> Part | list[Problem]:
        try:
            return measure(call, plan.of(groups[at]), given[at](), revision, since, until)
        except Refused as refused:
            return list(refused.problems)

    if len(groups) == 1:
        return _good([work(0)], sink)
    with ThreadPoolExecutor(WORKERS) as pool:
        return _good(pool.map(work, range(len(groups))), sink)


def _good(found: Iterable[Part | list[Problem]], sink: Sink | None) -> list[Part]:
    """The parts as they come, their day intervals given to the sink; Refused for what is wrong in any of them."""
    parts: list[Part] = []
    problems: list[Problem] = []
    for one in found:
        if isinstance(one, list):
            problems += one
        elif sink is None or one.day_intervals is None:
            parts.append(one)
        elif not problems:
            sink(one.day_intervals)
            parts.append(replace(one, day_intervals=None))
    if problems:
        raise Refused(list(dict.fromkeys(problems)))
    return parts


def _groups(pieces: Ints) -> list[Ints]:
    """Rows of sites SITES_AT_ONCE at a time at most; cut where the source's pieces change, where that is near."""
    edges = np.append(np.flatnonzero(np.diff(pieces)) + 1, len(pieces))
    groups, first = [], 0
    while first < len(pieces):
        end = min(first + SITES_AT_ONCE, len(pieces))
        edge = edges[np.searchsorted(edges, end, side="right") - 1] if edges[0] <= end else 0
        end = int(edge) if edge > first + SITES_AT_ONCE // 2 else end
        groups.append(np.arange(first, end))
        first = end
    return groups


def _meters(call: CallFacts, plan: Plan) -> list[list[str]]:
    """Ids of each site's meters."""
    of_site: dict[str, list[str]] = {site: [] for site in plan.site_ids}
    if call.meter_map.empty:
        of_site = {site: [site] for site in plan.site_ids}
    else:
        for site, meter in zip(call.meter_map["site_id"].astype(str), call.meter_map["meter_id"].astype(str)):
            of_site.get(site, []).append(meter)
    return [of_site[site] for site in plan.site_ids]


def _all_of(frames: Iterable[pd.DataFrame | None]) -> pd.DataFrame | None:
    """The frames one after the other; None where they were given away."""
    held = [frame for frame in frames if frame is not None]
    return _one(held) if held else None


def _one(frames: Sequence[pd.DataFrame]) -> pd.DataFrame:
    return frames[0] if len(frames) == 1 else pd.concat(frames, ignore_index=True)


def _result(plan: Plan, call: CallFacts, found: Measured) -> SiteResult:
    """Energy over each site's own window, performance and money."""
    clock, delivered = plan.clock, found.delivered_kw
    in_window = plan.in_window(clock)
    known = in_window & ~np.isnan(delivered)
    committed_kwh = np.where(in_window, plan.committed_kw, 0.0).sum(axis=1) * clock.step_h
    energy = np.where(known, delivered, 0.0).sum(axis=1) * clock.step_h
    delivered_kwh = np.where(known.any(axis=1), energy, np.nan)
    excused = np.array([site in call.excused for site in plan.site_ids])
    factor, share, off = (np.full(len(energy), np.nan) for _ in range(3))
    money = np.zeros((len(energy), 4), dtype=object)
    hour = (clock.starts - plan.event_start) // np.timedelta64(1, "h")
    sign = -call.direction.sign
    for rule in dict.fromkeys(plan.rules):
        rows = rows_of(plan.rules, rule)
        inside, out = in_window[rows], excused[rows]
        off[rows] = netted(found.until_midnight_kwh[rows], found.until_full_kwh[rows], rule)
        one = performance_factor(
            delivered[rows], plan.committed_kw[rows], inside, clock.step_h, rule, hour, off[rows]
        )
        charge = firm_level_charge(found.metered_kw[rows], inside, clock.step_h, rule, sign)
        factor[rows] = np.where(out, np.nan, one)
        share[rows], due = earned(
            committed_kwh[rows],
            np.where(out, np.nan, delivered_kwh[rows] - off[rows]),
            factor[rows],
            np.where(out, 0.0, charge),
            rule,
            call.prices,
            [plan.site_ids[row] for row in rows],
        )
        money[rows] = np.stack([due.capacity_payment, due.energy_payment, due.penalty, due.total], axis=1)
    return SiteResult(
        metered_kw=found.metered_kw,
        quality=found.quality,
        delivered_kw=delivered,
        in_event=plan.in_event(clock),
        in_window=in_window,
        committed_kwh=committed_kwh,
        delivered_kwh=delivered_kwh,
        factor=factor,
        paid_share=share,
        state=np.where(excused, "excused", found.state).astype(object),
        why=np.array([call.excused.get(site) for site in plan.site_ids], dtype=object),
        guard=found.guard,
        dry_bulb_c=found.dry_bulb_c,
        until_midnight_kwh=found.until_midnight_kwh,
        until_full_kwh=found.until_full_kwh,
        netted_kwh=off,
        money=Lines(*money.T),
    )


def _summary(
    call: CallFacts,
    revision: int,
    plan: Plan,
    sites: pd.DataFrame,
    fleet: pd.DataFrame,
    counts: Mapping[str, int],
) -> dict[str, object]:
    """The revision in a few figures; kWh of the fleet at the requested node, over the whole event."""
    money = {name: sites[name].sum() for name in ("capacity_payment", "energy_payment", "penalty", "total")}
    return {
        "event_id": call.event_id,
        "revision": revision,
        "currency": call.prices.currency,
        "states": {str(name): int(count) for name, count in sites["state"].value_counts().items()},
        "fleet_committed_kwh": float(fleet["committed_kw"].sum() * plan.clock.step_h),
        "fleet_delivered_kwh": float(fleet["delivered_kw"].sum() * plan.clock.step_h),
        **money,
        "readings": dict(counts),
    }
