"""A call: quotes and a request become an allocation and, if it meets the request, an event record.

Owns what a record holds besides its tables: the proof and the frozen inputs. Reading and quoting is desk.py's,
the choice allocate.py's, the tables event.py's and steps.py's, writing records.py's.
"""

from dataclasses import asdict, dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from fleet import event, records, rules
from fleet.allocate import Allocation, allocate
from fleet.desk import Progress, Survey
from fleet.errors import CannotBeMet, FleetError
from fleet.limits import COUNTED, IN_FORCE
from fleet.request import Request, default_event_id, request
from fleet.shortage import Shortage, explain
from fleet.steps import steps
from fleet.wall_time import local_text, utc_timestamp
from sites.units import Floats

NAMED = 5
"""Sites that a sentence names; the rest is counted."""
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


def call(
    survey: Survey,
    requested_kw: float | Floats,
    event_id: str | None,
    purpose: str,
    home: Path,
    accept_less: bool = False,
    within: float | None = None,
    progress: Progress = lambda text: None,
) -> Call:
    """Allocate a request over a survey's quotes and write the event record below `home`.

    Raises Refused for a request that makes no sense, FleetError for an event that exists, CannotBeMet where the
    fleet cannot give it and `accept_less` is False; nothing is written then.
    """
    ask = _request(survey, requested_kw, event_id, purpose)
    records.check_free(home, ask.event_id)
    progress("allocating")
    allocation = _allocate(survey, ask, within)
    if not allocation.met and not (accept_less and len(allocation.chosen)):
        raise _cannot(survey, allocation)
    progress("writing the record")
    choice = event.chosen(ask, survey.quoted, survey.feeders, allocation.chosen)
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
    proof = proof_of(survey, allocation)
    with records.lock(home) as swept:
        _check_nothing_new(survey, home)
        path = records.write_call(
            home, ask.event_id, frames, proof, frozen_tables(survey), frozen_json(survey)
        )
    network = (*survey.feeders.notes, *survey.headroom.notes)
    notes = (*swept, *survey.folder.notes, *network, *not_callable(survey))
    return Call(path, ask.event_id, allocation, choice, proof, notes)


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


def not_callable(survey: Survey) -> list[str]:
    """A sentence for each reason why sites under the node may not be called, calls in force with their end."""
    below = [str(name) for name in survey.fleet.roster.buildings.site_id[survey.under_node]]
    reasons: dict[str, list[str]] = {}
    for name in below:
        if name in survey.eligible.reason:
            reasons.setdefault(survey.eligible.reason[name], []).append(name)
    said = [f"not called: {_few(names)}, which {why}" for why, names in reasons.items() if why != IN_FORCE]
    past = survey.past
    counted = past[past["purpose"].isin(COUNTED) & past["site_id"].isin(reasons.get(IN_FORCE, []))]
    running = counted[counted["window_end"] > utc_timestamp(survey.ask.at)]
    for event_id, windows in running.groupby("event_id"):
        last = windows["window_end"].max().tz_localize(None).to_datetime64()
        until = local_text(last, survey.folder.settings.timezone)
        said.append(
            f"not called: {_few(sorted(windows['site_id']))}, bound by the call in force {event_id} until {until}; "
            "call them again from then on, or ask at a node without them"
        )
    return said


def _few(names: list[str]) -> str:
    """The first names, the rest counted."""
    more = f" and {len(names) - NAMED} more" if len(names) > NAMED else ""
    return ", ".join(names[:NAMED]) + more


def _request(survey: Survey, requested_kw: float | Floats, event_id: str | None, purpose: str) -> Request:
    ask = survey.ask
    return request(
        default_event_id(ask.at, survey.node_id) if event_id is None else event_id,
        survey.node_id,
        ask.direction,
        purpose,
        ask.at,
        ask.event_from,
        ask.event_to,
        requested_kw,
        survey.folder.settings.interval_minutes,
    )


def _allocate(survey: Survey, ask: Request, within: float | None) -> Allocation:
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
    )


def _cannot(survey: Survey, allocation: Allocation) -> CannotBeMet:
    """The refusal with, per interval, what is available and what binds."""
    shortage = explain(
        allocation,
        survey.quoted.quotes,
        survey.feeders,
        survey.headroom.kw,
        survey.node_id,
        survey.fleet.roster.buildings.delivery_factor,
        survey.eligible.allowed,
    )
    return CannotBeMet("\n".join(_shortage_lines(survey, shortage)), _shortage_detail(survey, shortage))


def _shortage_lines(survey: Survey, shortage: Shortage) -> list[str]:
    zone = survey.folder.settings.timezone
    starts = survey.quoted.quotes.clock.starts[survey.quoted.quotes.event_from :]
    lines = ["the request cannot be met as asked:", *shortage.sentences(), *not_callable(survey)]
    lines.append("by interval (kW):")
    rows = zip(
        starts, shortage.requested_kw, shortage.available.available_kw, shortage.expected_kw, strict=False
    )
    for start, asked, alone, given in rows:
        lines.append(
            f"  {local_text(start, zone)}  asked {asked:,.1f}, at most {alone:,.1f} alone, best answer {given:,.1f}"
        )
    lines.append(
        "ask for less, for a shorter time or at a wider node; or take the best answer with --accept-less"
    )
    return lines


def _shortage_detail(survey: Survey, shortage: Shortage) -> dict[str, object]:
    quotes = survey.quoted.quotes
    starts = quotes.clock.starts[quotes.event_from : quotes.event_to]
    return {
        "sustained_kw": shortage.available.sustained_kw,
        "intervals": [
            {
                "interval_start": f"{np.datetime_as_string(start, 's')}Z",
                "requested_kw": float(asked),
                "available_kw": float(alone),
                "best_answer_kw": float(given),
                "gap_kw": float(gap),
            }
            for start, asked, alone, given, gap in zip(
                starts,
                shortage.requested_kw,
                shortage.available.available_kw,
                shortage.expected_kw,
                shortage.gap_kw,
                strict=True,
            )
        ],
        "sustained_kw_if_lifted": {name: found.sustained_kw for name, found in shortage.lifted.items()},
        "sites_limited_by": shortage.limited_by,
        "not_callable": not_callable(survey),
    }


def prices_frame(choice: event.Chosen, allocation: Allocation) -> pd.DataFrame:
    """Table prices: every price above zero, from which the bound is worked out again."""
    quotes, prices, feeders = choice.quoted.quotes, allocation.prices, choice.feeders
    in_event = quotes.clock.starts[quotes.event_from : quotes.event_to]
    node, hour = np.nonzero(prices.importing)
    parts = [
        _prices(choice.request.node_id, in_event, "shed", prices.shed),
        _prices(choice.request.node_id, in_event, "over", prices.over),
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
        "candidates_tried": survey.quoted.tried,
        "candidates_quoted": len(survey.quoted.quotes.site),
        "versions": {name: version(name) for name in PACKAGES},
        "sha256": dict(survey.folder.digests),
    }


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
