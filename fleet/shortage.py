"""Why a request is not met: what is missing in each interval, and what could be had if one limit were lifted.

Prices explain nothing here (at a shortfall they stand at their cap), so the most is worked out again with one class
of limits lifted at a time. What keeps single sites from giving more is counted from their quotes.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from fleet.allocate import Allocation
from fleet.feeders import Feeders
from fleet.most import Available, most, sustained
from fleet.words import limit_words
from sites.quotes import LIMITED_BY, DenseQuotes
from sites.units import Bools, Floats


@dataclass(frozen=True)
class Shortage:
    """What is missing (E,) and what binds."""

    requested_kw: Floats
    expected_kw: Floats
    gap_kw: Floats
    """requested - expected where that is short, else 0"""
    available: Available
    lifted: dict[str, float]
    """kW that could be had in all intervals together with one class of limits lifted, by the class's name"""
    limited_by: dict[str, int]
    """Sites below the node, counted by what keeps them from giving more"""

    def sentences(self) -> list[str]:
        """Plain text: the worst interval, each lifted class that helps, and the count of sites by limit."""
        worst = int(self.gap_kw.argmax())
        lines = [
            f"short by up to {self.gap_kw[worst]:,.1f} kW: {self.requested_kw[worst]:,.1f} kW asked, "
            f"{self.expected_kw[worst]:,.1f} kW given in event interval {worst + 1}; at most "
            f"{self.available.sustained_kw:,.1f} kW can be had in all intervals together"
        ]
        for name, kw in self.lifted.items():
            more = kw - self.available.sustained_kw
            if more > 0.0:
                lines.append(f"+{more:,.1f} kW if {name} did not bind")
        counted = sorted(self.limited_by.items(), key=lambda pair: (-pair[1], pair[0]))
        if counted:
            said = ", ".join(f"{limit_words(name)} {count}" for name, count in counted)
            lines.append("sites limited by: " + said)
        return lines


def explain(
    allocation: Allocation,
    quotes: DenseQuotes,
    feeders: Feeders,
    headroom_kw: Floats,
    node_id: str,
    delivery_factor: Floats,
    allowed: Bools,
    wider: Mapping[str, Bools] | None = None,
) -> Shortage:
    """What an allocation lacks and what would help.

    wider: by name ("call limits", say), a mask (N,) of the sites that could be called if those did not hold; it
    helps where the quotes hold candidates of these sites. "feeder limits" are always tried.
    """

    def could(headroom: Floats, mask: Bools) -> float:
        return sustained(quotes, feeders, headroom, node_id, delivery_factor, mask).kw

    lifted = {"feeder limits": could(np.full_like(headroom_kw, np.inf), allowed)}
    for name, mask in (wider or {}).items():
        lifted[name] = could(headroom_kw, allowed | mask)
    below = feeders.sites_below(node_id)
    codes, counts = np.unique(quotes.site_limited_by[below], return_counts=True)
    limited = {LIMITED_BY[code]: int(count) for code, count in zip(codes.tolist(), counts, strict=True)}
    available = most(quotes, feeders, headroom_kw, node_id, delivery_factor, allowed)
    requested, expected, gap = allocation.requested_kw, allocation.expected_kw, allocation.shortfall_kw
    return Shortage(requested, expected, gap, available, lifted, limited)
