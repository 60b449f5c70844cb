"""Why a request is not met: what is missing in each interval, what could be had in it alone, what keeps sites.

Prices explain nothing here: at a shortfall they stand at their cap. What single sites are kept by is counted from
their quotes; what lifting a class of limits would bring is nearest.py's to find out.
"""

from dataclasses import dataclass

import numpy as np

from fleet.allocate import Allocation
from fleet.feeders import Feeders
from fleet.most import most
from fleet.request import Request
from fleet.words import limit_words
from sites.quotes import LIMITED_BY, DenseQuotes
from sites.units import Bools, Floats


@dataclass(frozen=True)
class Shortage:
    """What is missing and what binds; arrays (node x event interval,), node after node."""

    requested_kw: Floats
    expected_kw: Floats
    gap_kw: Floats
    """requested - expected where that is short, else 0"""
    available_kw: Floats
    """The most in each interval taken alone"""
    sustained_kw: Floats
    """(node,) the most in all intervals together, at each node alone"""
    limited_by: dict[str, int]
    """Sites below the nodes, counted by what keeps them from giving more"""

    def sentences(self) -> list[str]:
        """Plain text: the worst interval and the count of sites by limit."""
        worst = int(self.gap_kw.argmax())
        count = self.gap_kw.size // self.sustained_kw.size
        lines = [
            f"short by up to {self.gap_kw[worst]:,.1f} kW: {self.requested_kw[worst]:,.1f} kW asked, "
            f"{self.expected_kw[worst]:,.1f} kW given in event interval {worst % count + 1}"
        ]
        if self.sustained_kw.size == 1:
            lines[0] += f"; at most {self.sustained_kw[0]:,.1f} kW can be had in all intervals together"
        counted = sorted(self.limited_by.items(), key=lambda pair: (-pair[1], pair[0]))
        if counted:
            said = ", ".join(f"{limit_words(name)} {count}" for name, count in counted)
            lines.append(f"sites limited by: {said}")
        return lines


def explain(
    allocation: Allocation,
    quotes: DenseQuotes,
    feeders: Feeders,
    headroom_kw: Floats,
    request: Request,
    delivery_factor: Floats,
    allowed: Bools,
) -> Shortage:
    """What an allocation lacks, beside what allowed sites (N,) could give in each interval alone."""
    below = np.any([feeders.sites_below(name) for name in request.node_ids], axis=0)
    codes, counts = np.unique(quotes.site_limited_by[below], return_counts=True)
    could = [most(quotes, feeders, headroom_kw, name, delivery_factor, allowed) for name in request.node_ids]
    return Shortage(
        requested_kw=allocation.requested_kw,
        expected_kw=allocation.expected_kw,
        gap_kw=allocation.shortfall_kw,
        available_kw=np.concatenate([one.available_kw for one in could]),
        sustained_kw=np.array([one.sustained_kw for one in could]),
        limited_by={LIMITED_BY[code]: int(count) for code, count in zip(codes.tolist(), counts, strict=True)},
    )
