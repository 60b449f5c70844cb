"""Quotes: what every candidate gives and costs, behind two doors.

`answer(prices)` lets every site choose alone at given prices; `expand(candidate)` tells one candidate in full.
Dense arrays are the first implementation; a factored one can stand behind the same doors.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final, Protocol

import numpy as np

from sites.candidate import Stages
from sites.clock import Clock
from sites.direction import Direction
from sites.units import Floats, Ints, Strings

COST_PARTS: Final = ("before", "during", "recovery", "demand", "fee", "comfort")
LIMITED_BY: Final = (
    "none",
    "already_off",
    "inventory",
    "discharge_rate",
    "comfort",
    "minimum_run",
    "availability",
    "held_back",
    "recovery",
    "notice",
    "call_limit",
    "full",
    "already_on",
)


@dataclass(frozen=True)
class Answer:
    """Each site's best reply to prices: value (site,), 0 or less, and candidate (site,), -1 = stays out."""

    value: Floats
    candidate: Ints


@dataclass(frozen=True)
class Expanded:
    """One candidate in full: expected_kw (event interval,), change_kw (horizon interval,), cost parts."""

    site: int
    quote_id: str
    window_start: int
    window_end: int
    expected_kw: Floats
    change_kw: Floats
    net_cost: float
    cost: dict[str, float]
    limited_by: str


class Quotes(Protocol):
    """The two doors through which an allocation reads quotes."""

    @property
    def site_count(self) -> int:
        """Number of sites, called or not."""
        ...

    def answer(self, shed_price: Floats, change_price: Floats) -> Answer:
        """Best reply of each site alone.

        shed_price (site, event interval): money per kW of expected_kw in that interval, earned.
        change_price (site, horizon interval): money per kW of change_kw, paid.
        Minimises net_cost - shed_price . expected_kw + change_price . change_kw; staying out is worth 0.
        """
        ...

    def expand(self, site: int, candidate: int) -> Expanded:
        """One candidate (its index over all candidates, as `answer` gives it) of one site in full."""
        ...


@dataclass(frozen=True)
class DenseQuotes:
    """Feasible candidates of all sites as dense arrays; C candidates sorted by site."""

    clock: Clock
    direction: Direction
    event_from: int
    event_to: int
    """Event intervals are clock indices event_from to event_to - 1."""
    site: Ints
    """(C,) index of the site"""
    quote_id: Strings
    stages: Stages
    window_start: Ints
    """(C,) clock index"""
    window_end: Ints
    expected_kw: Floats
    """(C, event interval) = direction.sign x change_kw there"""
    change_kw: Floats
    """(C, horizon interval) event less usual"""
    cost: Floats
    """(C, len(COST_PARTS))"""
    unmet_kwh_th: Floats
    end_lack_kwh_th: Floats
    end_lack_price_per_kwh_th: Floats
    limited_by: Ints
    """(C,) index into LIMITED_BY"""
    site_limited_by: Ints
    """(N,) what keeps each site from giving more, also where it has no candidate at all"""

    @property
    def site_count(self) -> int:
        """Number of sites, called or not."""
        return len(self.site_limited_by)

    @property
    def net_cost(self) -> Floats:
        """(C,) sum of the parts."""
        total: Floats = self.cost.sum(axis=1)
        return total

    def answer(self, shed_price: Floats, change_price: Floats) -> Answer:
        """See Quotes.answer; ties go to the earlier candidate."""
        value = (
            self.net_cost
            - np.einsum("ce,ce->c", shed_price[self.site], self.expected_kw)
            + np.einsum("ct,ct->c", change_price[self.site], self.change_kw)
        )
        best = np.zeros(self.site_count)
        np.minimum.at(best, self.site, value)
        candidate = np.full(self.site_count, -1, dtype=np.int64)
        winners = np.flatnonzero((value <= best[self.site]) & (value < 0.0))[::-1]
        candidate[self.site[winners]] = winners
        return Answer(best, candidate)

    def expand(self, site: int, candidate: int) -> Expanded:
        """See Quotes.expand."""
        if int(self.site[candidate]) != site:
            raise IndexError(f"candidate {candidate} belongs to site {int(self.site[candidate])}, not {site}")
        parts: Sequence[float] = self.cost[candidate].tolist()
        return Expanded(
            site=site,
            quote_id=str(self.quote_id[candidate]),
            window_start=int(self.window_start[candidate]),
            window_end=int(self.window_end[candidate]),
            expected_kw=self.expected_kw[candidate],
            change_kw=self.change_kw[candidate],
            net_cost=float(sum(parts)),
            cost=dict(zip(COST_PARTS, parts, strict=True)),
            limited_by=LIMITED_BY[int(self.limited_by[candidate])],
        )
