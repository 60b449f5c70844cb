"""A call: quotes and a request become an allocation and, if it meets the request, an event record.

Owns what a record holds besides its tables: the proof and the frozen inputs. Reading and quoting is desk.py's,
the choice allocate.py's, the tables event.py's and steps.py's, writing records.py's.
"""

from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from fleet import event, records, rules
from fleet.allocate import Allocation, allocate
from fleet.desk import Progress, Survey
from fleet.errors import FleetError
from fleet.explained import MORE_SHARE, Explained, explain
from fleet.limits import COUNTED
from fleet.refusal import cannot, cannot_cap, cannot_include, not_callable
from fleet.request import Request, default_event_id, request
from fleet.steps import steps
from fleet.wishes import NONE, Wishes, check, named
from sites.units import Floats

PACKAGES = ("shedwright", "numpy", "pandas", "pulp", "highspy", "pyarrow")


@dataclass(frozen=True)
class Call:
    """A call that was made: where its record lies, and what it came to."""

    path: Path
    event_id: str
    allocation: Allocation
    chosen: event.Chosen
    proof: dict[str, Any]
    notes: tuple[str, ...]
    explained: Explained | None


def call(
    survey: Survey,
    requested_kw: float | Floats,
    event_id: str | None,
    purpose: str,
    home: Path,
    accept_less: bool = False,
    within: float | None = None,
    wishes: Wishes = NONE,
    node_ids: Sequence[str | None] | None = None,
    notes: Sequence[str] = (),
    progress: Progress = lambda text: None,
) -> Call:
    """Allocate a request over a survey's quotes and write the event record below `home`.

    requested_kw: one for all intervals, or (node, interval) for several node_ids. notes: of
    whoever asks, told with the rest. within: seconds after which the best
    answer found counts, also one that is short. Raises Refused for a request that makes no sense, FleetError for an
    event that exists and for wishes that contradict each other, CannotBeMet where the fleet cannot give it and
    `accept_less` is False; nothing is written then.
    """
    ask = _request(survey, requested_kw, event_id, purpose, node_ids)
    records.check_free(home, ask.event_id)
    check(wishes, survey.fleet.roster.buildings.site_id)
    progress("allocating")
    allocation = _allocate(survey, ask, within, wishes)
    _check_answer(survey, ask, allocation, wishes, accept_less or within is not None)
    progress("writing the record")
    choice = event.chosen(ask, survey.quoted, survey.feeders, allocation.chosen)
    frames = _frames(survey, choice, allocation)
    proof = proof_of(survey, allocation)
    with records.lock(home) as swept:
        _check_nothing_new(survey, home)
        path = records.write_call(
            home, ask.event_id, frames, proof, frozen_tables(survey), frozen_json(survey)
        )
    told = (*swept, *survey.notes, *not_callable(survey))
    why = _explained(survey, ask, allocation, wishes, within)
    return Call(path, ask.event_id, allocation, choice, proof, (*notes, *told), why)


def _check_answer(
    survey: Survey, ask: Request, allocation: Allocation, wishes: Wishes, less_will_do: bool
) -> None:
    """CannotBeMet where the answer is not what was asked for, or a wish did not come true."""
    if not allocation.met and not (less_will_do and len(allocation.chosen)):
        raise cannot(survey, ask, allocation, wishes)
    called = set(survey.fleet.roster.buildings.site_id[allocation.called].tolist())
    lacking = [name for name in wishes.include if name not in called]
    if lacking:
        raise cannot_include(survey, lacking)
    if wishes.over_cap_kw is not None and allocation.over_kw.max() > 1e-6:
        raise cannot_cap(allocation, wishes.over_cap_kw)


def _frames(survey: Survey, choice: event.Chosen, allocation: Allocation) -> dict[str, pd.DataFrame]:
    """All tables of the record."""
    frames = event.frames(choice)
    resolved = survey.fleet.resolved
    frames["steps"] = steps(
        frames["windows"],
        resolved["chillers"],
        resolved["sites"],
        frames["machines"],
        frames["tanks"],
        survey.folder.settings.interval_minutes,
        str(survey.ask.direction),
    )
    frames["prices"] = prices_frame(choice, allocation)
    return frames


def _explained(
    survey: Survey, ask: Request, allocation: Allocation, wishes: Wishes, within: float | None
) -> Explained | None:
    """Why the choice is as it is; None where it is short. In an emergency nothing more is tried."""
    if not allocation.met:
        return None
    more = None
    if within is None:
        larger = replace(ask, requested_kw=(1.0 + MORE_SHARE) * ask.requested_kw)
        more = _allocate(survey, larger, None, wishes, rough=True)
    site_id = survey.fleet.roster.buildings.site_id
    why = {place: survey.eligible.reason.get(str(name), "") for place, name in enumerate(site_id)}
    left = np.flatnonzero(named(wishes.exclude, site_id)).tolist()
    why |= dict.fromkeys(left, "on the list of sites to leave out")
    below = np.any([survey.feeders.sites_below(name) for name in ask.node_ids], axis=0)
    return explain(allocation, more, survey.quoted.quotes, survey.feeders, below, why, survey.headroom.kw)


def _check_nothing_new(survey: Survey, home: Path) -> None:
    """FleetError where a call that binds sites was written since the survey looked; call it under the lock."""
    if home.resolve() != survey.folder.path.resolve():
        return
    known, now = (_binding(past) for past in (survey.past, records.events(home)))
    if known != now:
        new = ", ".join(sorted({event_id for event_id, _ in now ^ known}))
        raise FleetError(
            f"{home}: another call was written meanwhile ({new}) and may bind the same sites; nothing was "
            "written; run the same command again"
        )


def _binding(past: pd.DataFrame) -> set[tuple[str, int]]:
    counted = past[past["purpose"].isin(COUNTED)]
    return set(zip(counted["event_id"], counted["revision"], strict=True))


def _request(
    survey: Survey,
    requested_kw: float | Floats,
    event_id: str | None,
    purpose: str,
    node_ids: Sequence[str | None] | None,
) -> Request:
    ask = survey.ask
    given = [survey.node_id] if node_ids is None else node_ids
    nodes = [survey.feeders.root if name is None else name for name in given]
    for name in nodes:
        survey.feeders.index(name)
    return request(
        default_event_id(ask.at, nodes[0]) if event_id is None else event_id,
        nodes[0] if len(nodes) == 1 else nodes,
        ask.direction,
        purpose,
        ask.at,
        ask.event_from,
        ask.event_to,
        requested_kw,
        survey.folder.settings.interval_minutes,
    )


def _allocate(
    survey: Survey, ask: Request, within: float | None, wishes: Wishes, rough: bool = False
) -> Allocation:
    buildings = survey.fleet.roster.buildings
    return allocate(
        survey.quoted.quotes,
        survey.feeders,
        survey.headroom.kw,
        ask,
        buildings.delivery_factor,
        survey.fleet.shortfall_price_per_kwh,
        survey.fleet.over_delivery_price_per_kwh,
        survey.eligible.allowed,
        site_ids=buildings.site_id,
        over_delivery_fraction=survey.folder.settings.over_delivery_fraction,
        seconds=within,
        rough=rough,
        wishes=wishes,
    )


def prices_frame(choice: event.Chosen, allocation: Allocation) -> pd.DataFrame:
    """Table prices: every price above zero, from which the bound is worked out again."""
    quotes, prices, feeders = choice.quoted.quotes, allocation.prices, choice.feeders
    in_event = quotes.clock.starts[quotes.event_from : quotes.event_to]
    node, hour = np.nonzero(prices.importing)
    names = np.repeat(np.array(choice.request.node_ids, dtype=object), in_event.size)
    often = np.tile(in_event, len(choice.request.node_ids))
    parts = [
        _prices(names, often, "shed", prices.shed),
        _prices(names, often, "over", prices.over),
        _prices(feeders.node_id[node], quotes.clock.starts[hour], "import", prices.importing[node, hour]),
    ]
    frame = pd.concat(parts, ignore_index=True)
    frame.insert(0, "event_id", choice.request.event_id)
    return frame


def _prices(node_id: Any, starts: Any, kind: str, price: Floats) -> pd.DataFrame:
    times = pd.DatetimeIndex(starts).tz_localize("UTC").astype("datetime64[us, UTC]")
    frame = pd.DataFrame({"node_id": node_id, "interval_start": times, "kind": kind, "price": price})
    return frame.astype({"node_id": object, "kind": object, "price": np.float64})


def proof_of(survey: Survey, allocation: Allocation) -> dict[str, Any]:
    """proof.json: how good the allocation is, over which horizon, from which inputs, made by what."""
    clock = survey.quoted.quotes.clock
    return asdict(allocation.proof) | {
        "met": allocation.met,
        "horizon_start": f"{np.datetime_as_string(clock.start, 's')}Z",
        "horizon_end": f"{np.datetime_as_string(clock.end, 's')}Z",
        "interval_minutes": clock.step_minutes,
        "probability": None,
        "over_delivery_fraction": survey.folder.settings.over_delivery_fraction,
        "requested_kwh": float(allocation.requested_kw.sum()) * clock.step_h,
        "quoted_unmet_kwh_th": float(survey.quoted.quotes.unmet_kwh_th.sum()),
        "recoveries": list(survey.terms.recoveries),
        "recoveries_sites": _varied_sites(survey),
        "candidates_tried": survey.quoted.tried,
        "candidates_quoted": len(survey.quoted.quotes.site),
        "versions": {name: version(name) for name in PACKAGES},
        "sha256": dict(survey.folder.digests),
    }


def _varied_sites(survey: Survey) -> list[str] | None:
    """Sites that were offered every one of the recoveries, the others the first only; None: all sites were."""
    varied = survey.terms.varied
    return None if varied is None else survey.fleet.roster.buildings.site_id[varied].tolist()


def frozen_tables(survey: Survey) -> dict[str, pd.DataFrame]:
    """Input rows the event rests on: sites, chillers and tanks with defaults resolved, the horizon's series."""
    frames, resolved = survey.folder.frames, survey.fleet.resolved
    clock = survey.quoted.quotes.clock
    start, end = (pd.Timestamp(time).tz_localize("UTC") for time in (clock.start, clock.end))
    whole = ("nodes", "bills", "holidays", "plant_days", "meter_map", "status")
    series = ("node_loads", "weather", "loads", "tariffs")
    first = start.floor("h")
    inside = {
        name: frames[name][(frames[name]["interval_start"] >= first) & (frames[name]["interval_start"] < end)]
        for name in series
    }
    return dict(resolved) | {name: frames[name] for name in whole} | inside


def frozen_json(survey: Survey) -> dict[str, dict[str, Any]]:
    """Settings, settlement rule per site, where every unit stood, and the past calls that counted."""
    settings = survey.folder.settings
    sites = survey.fleet.resolved["sites"]
    named = sites["settlement_rule"].where(sites["settlement_rule"].notna(), settings.settlement_rule)
    used = {str(name): rules.rule(str(name), settings.rules) for name in named.unique()}
    past = survey.past.copy()
    for name in past.select_dtypes("datetimetz"):
        past[name] = past[name].map(lambda time: time.isoformat())
    return {
        "settings": settings.model_dump(mode="json"),
        "rules": {
            "rules": {name: rule.model_dump(mode="json") for name, rule in used.items()},
            "site": dict(zip(sites["site_id"], named, strict=True)),
        },
        "standing": _standing(survey),
        "calls": {"calls": past.astype(object).to_dict("records")},
    }


def _standing(survey: Survey) -> dict[str, Any]:
    """Inventory and availability of every unit at the horizon's start, by site and unit."""
    roster, standing = survey.fleet.roster, survey.fleet.standing
    tanks, chillers = roster.tanks, roster.chillers
    site_id = roster.buildings.site_id
    found: dict[str, dict[str, Any]] = {str(name): {} for name in site_id}
    for row, unit in zip(*np.nonzero(tanks.exists), strict=True):
        found[site_id[row]][tanks.tank_id[row, unit]] = {
            "low_kwh_th": float(standing.low_kwh_th[row, unit]),
            "best_kwh_th": float(standing.best_kwh_th[row, unit]),
            "high_kwh_th": float(standing.high_kwh_th[row, unit]),
            "available": bool(standing.tank_available[row, unit]),
        }
    for row, unit in zip(*np.nonzero(chillers.exists), strict=True):
        found[site_id[row]][chillers.chiller_id[row, unit]] = {
            "available": bool(standing.chiller_available[row, unit])
        }
    return found
