"""A call's record as pages read it: its courses as arrays, its clock, its feeders; computed once for all pages.

Owns laying tables out as (site, interval) and who hangs below which node. What is made of it is the pages'.
"""

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import pandas as pd

from fleet.errors import FleetError
from fleet.pages.sheet import day
from fleet.records import CallRecord
from fleet.series import on_clock
from sites.clock import Clock
from sites.direction import Direction
from sites.units import Floats, Strings, Times


@dataclass(frozen=True)
class Case:
    """One revision of a call; called sites sorted by id, intervals of the one horizon."""

    record: CallRecord

    @cached_property
    def zone(self) -> str:
        """IANA name of the fleet's local time."""
        return str(self._setting("timezone"))

    @cached_property
    def currency(self) -> str:
        """ISO 4217."""
        return str(self._setting("currency"))

    @cached_property
    def step_minutes(self) -> int:
        """Length of an interval."""
        return int(self._setting("interval_minutes"))

    @property
    def step_h(self) -> float:
        """Length of an interval in hours."""
        return self.step_minutes / 60.0

    @cached_property
    def request(self) -> pd.DataFrame:
        """Table request, in order of time."""
        return self.record.frames["request"].sort_values("interval_start", ignore_index=True)

    @property
    def direction(self) -> Direction:
        """Which way the event goes."""
        return Direction(str(self.request["direction"].iloc[0]))

    @property
    def purpose(self) -> str:
        """real, test or rehearsal."""
        return str(self.request["purpose"].iloc[0])

    @property
    def node_id(self) -> str:
        """Where the request is held."""
        return str(self.request["node_id"].iloc[0])

    @property
    def start(self) -> pd.Timestamp:
        """First moment of the event, UTC."""
        return pd.Timestamp(self.request["interval_start"].min())

    @property
    def end(self) -> pd.Timestamp:
        """Last moment of the event, UTC."""
        return pd.Timestamp(self.request["interval_end"].max())

    @property
    def period(self) -> str:
        """The event in local words: Wed 15 Jul 2026, 16:00 to 19:00 EEST."""
        start, end = self.start.tz_convert(self.zone), self.end.tz_convert(self.zone)
        other = "" if start.date() == end.date() else f"{day(end)} "
        return f"{day(start)}, {start:%H:%M} to {other}{end:%H:%M} {end:%Z}"

    @cached_property
    def windows(self) -> pd.DataFrame:
        """Table windows by site_id."""
        return self.record.frames["windows"].sort_values("site_id", ignore_index=True)

    @property
    def site_ids(self) -> list[str]:
        """Called sites, sorted."""
        return [str(site) for site in self.windows["site_id"]]

    @cached_property
    def edges(self) -> Times:
        """(interval + 1,) UTC edges of the horizon."""
        proof = self.record.proof
        found = pd.date_range(proof["horizon_start"], proof["horizon_end"], freq=f"{self.step_minutes}min")
        return found.tz_convert("UTC").tz_localize(None).to_numpy("datetime64[us]")

    @cached_property
    def _ordered(self) -> pd.DataFrame:
        frame = self.record.frames["intervals"].sort_values(["site_id", "interval_start"], kind="stable")
        if len(frame) != len(self.windows) * (len(self.edges) - 1):
            raise FleetError(
                f"{self.record.path}: table intervals has {len(frame)} rows; expected every interval of the horizon "
                f"for each of {len(self.windows)} called sites; run `shedwright audit`"
            )
        return frame

    @cached_property
    def clock(self) -> Clock:
        """The horizon."""
        return Clock(self.edges[0], self.step_minutes, len(self.edges) - 1)

    def course(self, name: str) -> Floats:
        """(site, interval) of a column of table intervals."""
        values: Floats = self._ordered[name].to_numpy(dtype=np.float64)
        return values.reshape(len(self.windows), len(self.edges) - 1)

    @property
    def event(self) -> tuple[np.datetime64, np.datetime64]:
        """Start and end as the charts take them."""
        return _naive(self.start), _naive(self.end)

    @property
    def in_event(self) -> slice:
        """Intervals of the horizon that are the event's."""
        start, end = np.searchsorted(self.edges, self.event)
        return slice(int(start), int(end))

    def share(self, at: Any) -> float:
        """A time's place along the horizon, 0 to 1."""
        span = (self.edges[-1] - self.edges[0]).astype(np.int64)
        return float((_naive(pd.Timestamp(at)) - self.edges[0]).astype(np.int64) / span)

    @cached_property
    def feeder_of(self) -> dict[str, str]:
        """site_id -> the node it hangs on; the root where it names none."""
        sites = self.record.frozen["sites"]
        nodes = self.record.frozen["nodes"]
        roots = nodes.loc[nodes["parent_id"].isna() | (nodes["parent_id"] == ""), "node_id"]
        root = str(roots.iloc[0]) if len(roots) else self.node_id
        named = sites["node_id"].where(sites["node_id"].notna() & (sites["node_id"] != ""), root)
        return {str(site): str(node) for site, node in zip(sites["site_id"], named)}

    @cached_property
    def under_node(self) -> frozenset[str]:
        """Ids of the requested node and of all nodes below it."""
        nodes = self.record.frozen["nodes"]
        found, fresh = {self.node_id}, {self.node_id}
        while fresh:
            fresh = set(nodes.loc[nodes["parent_id"].isin(fresh), "node_id"].astype(str)) - found
            found |= fresh
        return frozenset(found)

    @property
    def sites_under(self) -> list[str]:
        """Sites of the fleet at or below the requested node."""
        return [site for site, node in self.feeder_of.items() if node in self.under_node]

    @cached_property
    def by_feeder(self) -> dict[str, list[int]]:
        """Node -> rows of its called sites, both sorted."""
        found: dict[str, list[int]] = {}
        for row, site in enumerate(self.site_ids):
            found.setdefault(self.feeder_of[site], []).append(row)
        return dict(sorted(found.items()))

    @cached_property
    def prices(self) -> Floats:
        """(site, interval) energy price of each called site, from the frozen tariffs."""
        sites = self.record.frozen["sites"].set_index("site_id")
        tariffs = self.record.frozen["tariffs"]
        names = tariffs["tariff_id"].unique().astype(object)
        series = on_clock(tariffs, "tariff_id", ("price_per_kwh",), names, self.clock)
        own = pd.Index(names).get_indexer(pd.Index(sites["tariff_id"].reindex(self.site_ids)))
        found: Floats = series.values["price_per_kwh"][own]
        return found

    def _setting(self, name: str) -> Any:
        found = self.record.frozen_json.get("settings", {}).get(name)
        if found is None:
            raise FleetError(
                f"{self.record.path}: frozen/settings.json has no {name}; the record is incomplete"
            )
        return found


def texts(values: Any) -> Strings:
    """A column of ids as texts."""
    found: Strings = np.array([str(value) for value in values], dtype=object)
    return found


def _naive(at: pd.Timestamp) -> np.datetime64:
    return at.tz_convert("UTC").tz_localize(None).as_unit("us").to_datetime64()
