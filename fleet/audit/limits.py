"""Rules on how often a site may be called, and on how many candidates that leaves to be tried.

Past calls are the frozen list; real and test calls count, a rehearsal binds nobody. Shapes: N sites.
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.audit.case import Case
from fleet.audit.evidence import available, utc_naive
from fleet.audit.findings import Findings
from fleet.audit.quotes import DEMAND_LIMITS, recoveries_offered
from sites.units import Bools, Floats, Ints

COUNTED: Final = ("real", "test")
WEEK: Final = pd.Timedelta(days=7)


@dataclass(frozen=True)
class Used:
    """What each site (N,) has been called for so far: season, busiest seven days, hours; and calls in force."""

    season_calls: Floats
    week_calls: Floats
    season_hours: Floats
    in_force: Bools


def call_limits(case: Case, found: Findings) -> None:
    """Calls and hours of the season, calls of any seven days, and one window at a time, this call included."""
    book, sheet = case.evidence, case.evidence.sheets["windows"]
    used = _used(case)
    length = _hours(sheet.frame["window_end"] - sheet.frame["window_start"])
    own = book.called
    counts = {
        "calls_per_season": used.season_calls[own] + 1,
        "calls_per_week": used.week_calls[own] + 1,
        "hours_per_season": used.season_hours[own] + length,
    }
    for name, count in counts.items():
        most = book.fact(name, own)
        over = count > np.where(np.isnan(most), np.inf, most) + 1e-9
        words = [f"{value:g} {name.replace('_', ' ')}" for value in count]
        found.wrong("call limits", sheet, "window_start", over, words, most)
    found.wrong("one window at a time", sheet, "window_start", used.in_force[own], "a call in force", "none")


def candidates_tried(case: Case, found: Findings) -> None:
    """How many windows, machines and limits the terms of the call let each site be tried for.

    Blocks [a, b) of the event from the site's notice on, at least as long as site and machines need, at most as the
    hours left allow. Shed: the last k machines in service off, for each k; three limits where others stay on. Absorb:
    sites with a tank in service and machines that can charge it; three limits. Each with every recovery of its site.
    """
    book = case.evidence
    step = book.clock.step_minutes
    called_at = utc_naive(book.record.frames["request"]["called_at"]).max()
    wait = (book.clock.start - called_at) / np.timedelta64(1, "m")
    soonest = np.maximum(np.ceil((book.fact("notice_minutes") - wait) / step), 0.0)
    least = np.maximum(np.ceil(book.fact("minimum_window_minutes") / step), 1.0)
    used = _used(case)
    longest = np.floor(np.minimum(_left(book.fact("hours_per_season"), used.season_hours), 1e6) * 60.0 / step)
    free = ~used.in_force
    for name, count in (("calls_per_season", used.season_calls), ("calls_per_week", used.week_calls)):
        free &= _left(book.fact(name), count) >= 1.0
    free &= _left(book.fact("hours_per_season"), used.season_hours) > 0.0
    edges = np.arange(book.event_from, book.event_to + 1)
    first, last = (edge.ravel() for edge in np.meshgrid(edges, edges, indexing="ij"))
    recoveries, varied = recoveries_offered(case)
    often = np.where(varied, len(recoveries), 1)
    total = 0.0
    for site, offered, minutes, startable in [_charges(case)] if case.absorb else _stops(case):
        shortest = np.maximum(least[site], np.ceil(minutes / step))
        long_enough = (last - first >= shortest[:, None]) & (last - first <= longest[site][:, None])
        blocks = (long_enough & (first >= soonest[site][:, None])).sum(axis=1)
        total += float((blocks * offered * often[site] * (free[site] & startable)).sum())
    told = book.record.proof["candidates_tried"]
    found.value("candidates tried", f"{book.folder}/proof.json", "candidates_tried", told, total)


def _stops(case: Case) -> Any:
    """For each k: sites (S,) with k machines in service, limits offered (S,), minutes their rest takes, startable."""
    facts = pd.DataFrame(
        {
            "site": case.machine_site,
            "minutes": case.chillers.min_off_minutes[:, 0],
            "starts": case.chillers.starts_left[:, 0],
        }
    )[case.machine_up]
    facts = facts.assign(count=facts.groupby("site")["site"].transform("size"))
    facts = facts.assign(from_end=facts.groupby("site").cumcount(ascending=False) + 1)
    for k in range(1, int(facts["count"].max() if len(facts) else 0) + 1):
        last = facts[(facts["from_end"] <= k) & (facts["count"] >= k)].groupby("site")
        of = last.agg(minutes=("minutes", "max"), starts=("starts", "min"), count=("count", "first"))
        offered = np.where(of["count"].to_numpy() > k, len(DEMAND_LIMITS), 1)
        yield (
            of.index.to_numpy(dtype=np.int64),
            offered,
            of["minutes"].to_numpy(),
            of["starts"].to_numpy() >= 1.0,
        )


def _charges(case: Case) -> tuple[Ints, Ints, Floats, Bools]:
    """Absorb: sites (S,) that could charge a tank, limits offered (S,), least minutes their machines run, startable."""
    able = case.can_charge
    facts = pd.DataFrame(
        {
            "site": case.machine_site,
            "minutes": case.chillers.min_on_minutes[:, 0],
            "starts": case.chillers.starts_left[:, 0],
        }
    )[able]
    book = case.evidence
    tank_up = available(book.tank_facts, "tank_id", book.standing)
    facts = facts[facts["site"].isin(case.tank_site[tank_up])]
    of = facts.groupby("site").agg(minutes=("minutes", "max"), starts=("starts", "min"))
    site = of.index.to_numpy(dtype=np.int64)
    offered = np.full(site.size, len(DEMAND_LIMITS), dtype=np.int64)
    return site, offered, of["minutes"].to_numpy(dtype=np.float64), of["starts"].to_numpy() >= 1.0


def _left(most: Floats, used: Floats) -> Floats:
    """What a limit leaves; inf where there is none."""
    return np.where(np.isnan(most), np.inf, most) - used


def _used(case: Case) -> Used:
    book = case.evidence
    request = book.record.frames["request"]
    past = past_calls(book.record.frozen_json.get("calls", {}))
    past = past[past["event_id"] != book.record.event_id]
    start, zone = request["interval_start"].min(), str(book.settings["timezone"])
    season = past[past["window_start"].dt.tz_convert(zone).dt.year == start.tz_convert(zone).year]
    hours = pd.Series(_hours(season["window_end"] - season["window_start"]), index=season.index)
    site = book.sites["site_id"]

    def per_site(values: pd.Series) -> Floats:
        found: Floats = site.map(values).fillna(0.0).to_numpy(dtype=np.float64)
        return found

    running = past.loc[past["window_end"] > request["called_at"].max(), "site_id"]
    return Used(
        per_site(season.groupby("site_id").size()),
        per_site(_most_in_a_week(past, start)),
        per_site(hours.groupby(season["site_id"]).sum()),
        site.isin(running).to_numpy(dtype=np.bool_),
    )


def past_calls(calls: Any) -> pd.DataFrame:
    """Past calls of the frozen list that count, times in UTC."""
    columns = ["event_id", "purpose", "site_id", "window_start", "window_end"]
    past = pd.DataFrame(calls.get("calls", [])).reindex(columns=columns)
    for name in ("window_start", "window_end"):
        past[name] = pd.to_datetime(past[name], utc=True).astype("datetime64[us, UTC]")
    return past[past["purpose"].isin(COUNTED)]


def _most_in_a_week(past: pd.DataFrame, start: pd.Timestamp) -> pd.Series:
    """Most earlier calls of each site in any seven days that also hold `start`, begun at a call or at `start`."""
    near = past.loc[(past["window_start"] - start).abs() < WEEK, ["site_id", "window_start"]]
    if near.empty:
        return pd.Series(dtype=np.float64)
    begins = pd.concat([near, near.assign(window_start=start)])
    begins = begins[begins["window_start"] <= start].rename(columns={"window_start": "begin"})
    both = begins.drop_duplicates().merge(near, on="site_id")
    late = both["window_start"] - both["begin"]
    counted = both[(late >= pd.Timedelta(0)) & (late < WEEK)]
    return counted.groupby(["site_id", "begin"]).size().groupby("site_id").max()


def _hours(length: pd.Series) -> Floats:
    hours: Floats = length.dt.total_seconds().to_numpy(dtype=np.float64) / 3600.0
    return hours


RULES = (call_limits, candidates_tried)
