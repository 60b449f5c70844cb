"""What a record knows of each called site: its window, frozen rows, steps and words, gathered once.

Owns reading a CallRecord site by site for orders.py and advice.py; it computes nothing.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime
from typing import Any
from zoneinfo import ZoneInfo

import pandas as pd

from fleet.errors import FleetError
from fleet.records import CallRecord
from fleet.words import Words, words
from sites.roster import ICE_KINDS


@dataclass(frozen=True)
class Step:
    """One row of table call/steps."""

    at: datetime
    unit_id: str
    action: str
    value: float | None


@dataclass(frozen=True)
class CalledSite:
    """What the record knows of one called site."""

    window: Any
    facts: Any
    chillers: tuple[Any, ...]
    tanks: tuple[Any, ...]
    steps: tuple[Step, ...]
    words: Words
    direction: str
    highest_kw: float
    """What the building draws at most in the plan's window, or has been billed for already if that is more"""
    peak_kw: float
    """What the building draws at most with no event, or has been billed for already if that is more"""

    @property
    def capacity_kwh_th(self) -> float:
        """All tanks together, full."""
        return float(sum(tank.capacity_kwh_th for tank in self.tanks))

    @property
    def absorbs(self) -> bool:
        """The tanks are made to charge, and nothing is stopped."""
        return self.direction == "absorb"

    @property
    def has_ice(self) -> bool:
        """Whether any tank holds ice, so that brine below freezing goes round."""
        return any(tank.kind in ICE_KINDS for tank in self.tanks)

    def level(self, kwh_th: float) -> str:
        """An inventory of all tanks together in the site's unit and as a share of their capacity."""
        return f"{self.words.energy(kwh_th)} ({100.0 * kwh_th / self.capacity_kwh_th:.0f} % full)"


def called_sites(record: CallRecord) -> list[CalledSite]:
    """The called sites with their rows, sorted by site_id."""
    zone = ZoneInfo(str(_setting(record, "timezone")))
    facts = {row.site_id: row for row in _rows(record.frozen["sites"])}
    chillers = _by_site(record.frozen["chillers"].sort_values("loading_order", kind="stable"))
    tanks = _by_site(record.frozen["tanks"])
    steps = _by_site(record.frames["steps"])
    windows = record.frames["windows"].sort_values("site_id", kind="stable")
    direction = str(record.frames["request"]["direction"].iloc[0])
    highest = _highest_kw(record) if direction == "absorb" else {}
    peak = _peak_kw(record) if (windows["recovery"] == "capped").any() else {}
    lost = sorted(set(windows["site_id"]) - set(facts))
    if lost:
        raise FleetError(
            f"{record.path}: frozen sites has no row of {', '.join(lost)}; the record is incomplete"
        )
    return [
        CalledSite(
            window=window,
            facts=facts[window.site_id],
            chillers=chillers.get(window.site_id, ()),
            tanks=tanks.get(window.site_id, ()),
            steps=tuple(_step(row) for row in steps.get(window.site_id, ())),
            words=words(
                _text(facts[window.site_id].site_words),
                zone,
                window.window_start.to_pydatetime(),
                _units(chillers.get(window.site_id, ()), tanks.get(window.site_id, ())),
            ),
            direction=direction,
            highest_kw=highest.get(window.site_id, 0.0),
            peak_kw=peak.get(window.site_id, 0.0),
        )
        for window in _rows(windows)
    ]


def _units(chillers: tuple[Any, ...], tanks: tuple[Any, ...]) -> list[str]:
    """Ids of a site's machines and tanks."""
    return [*(str(one.chiller_id) for one in chillers), *(str(one.tank_id) for one in tanks)]


def _highest_kw(record: CallRecord) -> dict[str, float]:
    """Highest kW of each called building in its own window, or its billed peak of the running cycle."""
    windows = record.frames["windows"][["site_id", "window_start", "window_end"]]
    rows = record.frames["intervals"].merge(windows, on="site_id", validate="many_to_one")
    start = rows["interval_start"]
    inside = rows[(start >= rows["window_start"]) & (start < rows["window_end"])]
    return _or_billed(record, (inside["event_kw"] + inside["rest_kw"]).groupby(inside["site_id"]).max())


def _peak_kw(record: CallRecord) -> dict[str, float]:
    """Highest kW of each building in the usual case, or its billed peak of the running cycle: what a capped recovery
    keeps to."""
    usual = record.frames["usual"]
    return _or_billed(record, (usual["usual_kw"] + usual["rest_kw"]).groupby(usual["site_id"]).max())


def _or_billed(record: CallRecord, found: pd.Series) -> dict[str, float]:
    """Each site's kW, or its billed peak of the running cycle where that is more."""
    bills = record.frozen.get("bills")
    if bills is not None and not bills.empty:
        zone = str(_setting(record, "timezone"))
        today = (
            record.frames["intervals"]["interval_start"].min().tz_convert(zone).tz_localize(None).normalize()
        )
        running = bills[(bills["cycle_start"] <= today) & (today <= bills["cycle_end"])]
        billed = running.groupby("site_id")["billed_peak_kw"].max().reindex(found.index).fillna(0.0)
        found = found.where(found >= billed, billed)
    return {str(site): float(kw) for site, kw in found.items()}


def _step(row: Any) -> Step:
    value = None if pd.isna(row.value) else float(row.value)
    return Step(row.at.to_pydatetime(), str(row.unit_id), str(row.action), value)


def _rows(frame: pd.DataFrame) -> Iterator[Any]:
    """Rows as named tuples; their fields have the columns' types, which no checker can know."""
    return iter(frame.itertuples(index=False))


def _by_site(frame: pd.DataFrame) -> dict[str, tuple[Any, ...]]:
    """Rows of each site in their order; one pass, since a frame for each site costs milliseconds."""
    found: dict[str, list[Any]] = {}
    for row in _rows(frame):
        found.setdefault(row.site_id, []).append(row)
    return {site_id: tuple(rows) for site_id, rows in found.items()}


def _text(value: Any) -> str | None:
    return None if value is None or pd.isna(value) else str(value)


def _setting(record: CallRecord, name: str) -> Any:
    found = record.frozen_json.get("settings", {}).get(name)
    if found is None:
        raise FleetError(f"{record.path}: frozen/settings.json has no {name}; the record is incomplete")
    return found
