"""What is kept of a candidate's simulation, and which of its limits it broke.

Sums and peaks only, so that many candidates fit in memory; course.py keeps everything for the chosen few.
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from sites import comfort
from sites.compiled import Number, inner
from sites.conditions import Conditions
from sites.quotes import LIMITED_BY
from sites.roster import Buildings
from sites.units import AnyArray, Floats, Ints

UNMET_TOLERANCE_KW_TH = 1e-6
NEAR_EMPTY_FRACTION = 0.02
EMPTY_FRACTION = 1e-3
REMNANT_FRACTION = 0.1
"""A tank that still gives this share of what is asked in the interval it runs empty in ran out in its middle."""
FULL_AGAIN_FRACTION = 1e-3
"""A tank is back when it lies within this share of capacity of the usual case, or has come past it."""
LEAST_DRIFT_K: Final = min(limit for _, limit in comfort.DRIFT_LIMITS)
"""No limit on drifts is broken by a row whose rise never moves by more than this."""

SUPPLY_TOLERANCE_K: Final = 1e-6
"""Rounding of a supply temperature held against its cap."""

SUMS: Final = np.dtype(
    [
        *((name, "f8") for name in ("unmet_kwh_th", "unmet_after_kw_th", "critical_short_kw_th")),
        *((name, "f8") for name in ("at_start_kwh_th", "at_end_kwh_th", "lack_kwh_th")),
        *((name, "f8") for name in ("occupied_peak_k", "highest_k", "lowest_k", "warmest_c")),
        ("full_again", "i8"),
        *((name, "?") for name in ("usual_short", "rate_bound", "stock_bound", "ran_out", "reserve_bound")),
    ],
    align=True,
)
"""Sums and peaks of one row. unmet: beyond the usual case, over the whole horizon, and the worst of it after the
window; critical_short: worst lack against the critical load, with the largest running machine lost; warmest: the
building's supply water in the window; at_start, at_end:
in all tanks at the window's ends; lack: how far the row ends below the usual case; full_again: clock index of the first
interval after the window at whose end the inventory is back, -1 = never. In the window: load goes unmet in the usual
case already; tanks were asked for more than their rate with inventory left, or than their inventory; they ran empty in
the middle of an interval; the held-back inventory was reached."""


@dataclass(frozen=True)
class Tally:
    """What is kept of rows, (row, interval) and (row,)."""

    change_kw: Floats
    """(row, interval) event less usual"""
    rise_k: Floats
    """(row, interval) air node, interval end"""
    sums: AnyArray
    """SUMS (row,)"""


def tally(rows: int, intervals: int) -> Tally:
    """Nothing summed up yet: rows that do what the usual case does until they are run."""
    sums = np.zeros(rows, dtype=SUMS)
    sums["full_again"] = -1
    return Tally(np.zeros((rows, intervals)), np.zeros((rows, intervals)), sums)


@inner
def add(sums: Any, row: Any, site: Any, hour: Any, now: Any, usual: Any, t: int, step_h: Number) -> None:
    """Add interval t of a row, whose window is [row.start, row.end), against the usual case."""
    extra = now.unmet_kw_th - usual.unmet_kw_th
    if extra > UNMET_TOLERANCE_KW_TH:
        sums.unmet_kwh_th += extra * step_h
    sums.highest_k = max(sums.highest_k, now.air_rise_k)
    sums.lowest_k = min(sums.lowest_k, now.air_rise_k)
    if hour.occupied:
        sums.occupied_peak_k = max(sums.occupied_peak_k, now.air_rise_k)
    sums.lack_kwh_th = max(usual.all_kwh_th - now.held_kwh_th, 0.0)
    if t == row.start:
        sums.at_start_kwh_th = now.start_kwh_th
    if t == row.end - 1:
        sums.at_end_kwh_th = now.held_kwh_th
    if row.start <= t and t < row.end:
        _add_inside(sums, site, now, usual)
    if t >= row.end:
        sums.unmet_after_kw_th = max(sums.unmet_after_kw_th, extra)
        above = now.held_kwh_th - usual.all_kwh_th
        if row.from_above:
            above = -above
        if sums.full_again < 0 and above >= -FULL_AGAIN_FRACTION * site.size_kwh_th:
            sums.full_again = t


@inner
def _add_inside(sums: Any, site: Any, now: Any, usual: Any) -> None:
    """What counts inside the window: the usual case's own lack, the critical load, and what bound the tanks."""
    sums.usual_short = sums.usual_short or usual.unmet_kw_th > UNMET_TOLERANCE_KW_TH
    supply = comfort.mean_supply_c(site.supply_c, site.return_c, now.load_kw_th, now.unmet_kw_th)
    sums.warmest_c = max(sums.warmest_c, supply)
    critical = min(site.critical_kw_th, now.load_kw_th)
    lack = max(critical - now.firm_kw_th, critical - (now.load_kw_th - now.unmet_kw_th))
    sums.critical_short_kw_th = max(sums.critical_short_kw_th, lack)
    size, held = site.size_kwh_th, now.held_kwh_th
    if size <= 0.0 or now.wanted_kw_th <= now.drawn_kw_th + UNMET_TOLERANCE_KW_TH:
        return
    at_reserve = site.reserve_kwh_th > 0.0 and held <= site.reserve_kwh_th + NEAR_EMPTY_FRACTION * size
    empty = held <= NEAR_EMPTY_FRACTION * size
    sums.reserve_bound = sums.reserve_bound or at_reserve
    sums.stock_bound = sums.stock_bound or (empty and not at_reserve)
    sums.rate_bound = sums.rate_bound or not (empty or at_reserve)
    if held <= EMPTY_FRACTION * size and now.drawn_kw_th > REMNANT_FRACTION * now.wanted_kw_th:
        sums.ran_out = True


def broken(
    result: Tally,
    among: Ints,
    site: Ints,
    buildings: Buildings,
    here: Conditions,
    until: int,
    usual_counts: bool = True,
) -> Ints:
    """First limit that each of the rows `among` (row,) breaks, as an index into LIMITED_BY; 0 ("none") where it keeps
    all. `site` (row,) indexes buildings and conditions; the rows have been run as far as interval `until`.

    Comfort is the critical load, sites that allow no unmet load, a cap on the supply water, the site's own ceiling and
    the drift limits in occupied hours, and (where `usual_counts`) a window in which the usual plan is short already:
    what it would have drawn then hangs on the minute the tank runs out. So does the zone of a tank that runs out
    in the middle of a window's interval: inventory. Recovery is load left unmet after the window because the tank
    is low.
    """
    sums = result.sums[among]
    warm = sums["occupied_peak_k"] > buildings.rise_limit_k[site]
    warm |= sums["warmest_c"] > buildings.supply_cap_c[site] + SUPPLY_TOLERANCE_K
    moving = np.flatnonzero(sums["highest_k"] - sums["lowest_k"] > LEAST_DRIFT_K)
    rise, occupied = result.rise_k[among[moving], :until], here.occupied[site[moving], :until]
    drift = comfort.drift_excess_k(rise, occupied, here.step_h)
    warm[moving] |= drift > 0.0
    unserved = buildings.no_unmet[site] & (sums["unmet_kwh_th"] > UNMET_TOLERANCE_KW_TH)
    critical = sums["critical_short_kw_th"] > UNMET_TOLERANCE_KW_TH
    cause = tank_cause(sums)
    tank_or_comfort = np.where(cause > 0, cause, LIMITED_BY.index("comfort"))
    return np.select(
        [
            warm | unserved | critical | (sums["usual_short"] & usual_counts),
            sums["ran_out"],
            sums["unmet_after_kw_th"] > UNMET_TOLERANCE_KW_TH,
        ],
        [
            tank_or_comfort,
            *(np.full_like(cause, LIMITED_BY.index(name)) for name in ("inventory", "recovery")),
        ],
        default=LIMITED_BY.index("none"),
    )


def tank_cause(sums: AnyArray) -> Ints:
    """Why the tanks gave less than asked in the window, (row,), as an index into LIMITED_BY; 0 = they did not: the
    held-back inventory was reached, they ran low, or they were asked for more than their rate with inventory left."""
    return np.select(
        [sums[name] for name in ("reserve_bound", "stock_bound", "rate_bound")],
        [LIMITED_BY.index(name) for name in ("held_back", "inventory", "discharge_rate")],
        default=LIMITED_BY.index("none"),
    )
