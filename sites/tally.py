"""What is kept of a candidate's simulation, and which of its limits it broke.

Sums and peaks only, so that many candidates fit in memory; course.py keeps everything for the chosen few.
"""

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from sites import comfort
from sites.conditions import Conditions
from sites.course import Course
from sites.plant import Moment
from sites.quotes import LIMITED_BY
from sites.rows import Plants
from sites.units import Bools, Floats, Ints, total

UNMET_TOLERANCE_KW_TH = 1e-6
NEAR_EMPTY_FRACTION = 0.02
FULL_AGAIN_FRACTION = 1e-3
"""A tank is full again when it lies within this share of capacity of the usual case (and always, below)."""


@dataclass(frozen=True)
class Tally:
    """Per row (row,), or (row, interval) where said."""

    power_kw: Floats
    """(row, interval)"""
    rise_k: Floats
    """(row, interval) air node, interval end"""
    unmet_kwh_th: Floats
    """Unmet beyond the usual case, whole horizon"""
    unmet_after_kw_th: Floats
    """Worst unmet beyond the usual case after the window"""
    critical_short_kw_th: Floats
    """Worst lack against the critical load, with the largest running machine lost"""
    rate_bound: Bools
    """In the window the tanks were asked for more than their rate, with inventory left"""
    stock_bound: Bools
    """In the window the tanks were asked for more than their inventory"""
    reserve_bound: Bools
    """In the window the held-back inventory was reached"""
    inventory_at_start_kwh_th: Floats
    inventory_at_end_kwh_th: Floats
    full_again: Ints
    """Clock index of the first interval after the window at whose end the inventory is back; -1 = never"""
    lack_kwh_th: Floats
    """How far the row ends below the usual case"""


class _Sums:
    """Running sums of one simulation; filled interval by interval."""

    def __init__(self, rows: int, intervals: int) -> None:
        self.power_kw = np.zeros((rows, intervals))
        self.rise_k = np.zeros((rows, intervals))
        self.unmet_kwh_th = np.zeros(rows)
        self.unmet_after_kw_th = np.zeros(rows)
        self.critical_short_kw_th = np.zeros(rows)
        self.rate_bound = np.zeros(rows, dtype=np.bool_)
        self.stock_bound = np.zeros(rows, dtype=np.bool_)
        self.reserve_bound = np.zeros(rows, dtype=np.bool_)
        self.at_start = np.zeros(rows)
        self.at_end = np.zeros(rows)
        self.full_again = np.full(rows, -1, dtype=np.int64)
        self.lack_kwh_th = np.zeros(rows)


def tally(
    moments: Iterable[Moment], rows: Plants, here: Conditions, usual: Course, start: Ints, end: Ints
) -> Tally:
    """Sum up a simulation of candidate rows whose windows are [start, end) (row,), against the usual course."""
    sums = _Sums(len(rows.site), here.load_kw_th.shape[1])
    for moment in moments:
        _add(sums, moment, rows, here, usual, start, end)
    return Tally(
        power_kw=sums.power_kw,
        rise_k=sums.rise_k,
        unmet_kwh_th=sums.unmet_kwh_th,
        unmet_after_kw_th=sums.unmet_after_kw_th,
        critical_short_kw_th=sums.critical_short_kw_th,
        rate_bound=sums.rate_bound,
        stock_bound=sums.stock_bound,
        reserve_bound=sums.reserve_bound,
        inventory_at_start_kwh_th=sums.at_start,
        inventory_at_end_kwh_th=sums.at_end,
        full_again=sums.full_again,
        lack_kwh_th=sums.lack_kwh_th,
    )


def _add(
    sums: _Sums, moment: Moment, rows: Plants, here: Conditions, usual: Course, start: Ints, end: Ints
) -> None:
    t = moment.interval
    capacity = total(rows.roster.tanks.capacity_kwh_th)
    held = total(moment.inventory_kwh_th)
    usual_held = total(usual.inventory_kwh_th[rows.site, :, t])
    extra = moment.unmet_kw_th - usual.unmet_kw_th[rows.site, t]
    inside = (start <= t) & (t < end)
    sums.power_kw[:, t] = moment.power_kw
    sums.rise_k[:, t] = moment.air_rise_k
    sums.unmet_kwh_th += np.maximum(extra, 0.0) * here.step_h
    np.maximum(sums.unmet_after_kw_th, np.where(t >= end, extra, 0.0), out=sums.unmet_after_kw_th)
    critical = np.minimum(rows.roster.buildings.critical_kw_th, moment.load_kw_th)
    lack = np.maximum(critical - moment.firm_kw_th, critical - (moment.load_kw_th - moment.unmet_kw_th))
    np.maximum(sums.critical_short_kw_th, np.where(inside, lack, 0.0), out=sums.critical_short_kw_th)
    drawn = total(moment.discharge_kw_th)
    short = inside & (capacity > 0.0) & (moment.wanted_kw_th > drawn + UNMET_TOLERANCE_KW_TH)
    reserve = rows.reserve_kwh_th
    at_reserve = (reserve > 0.0) & (held <= reserve + NEAR_EMPTY_FRACTION * capacity)
    empty = held <= NEAR_EMPTY_FRACTION * capacity
    sums.reserve_bound |= short & at_reserve
    sums.stock_bound |= short & empty & ~at_reserve
    sums.rate_bound |= short & ~empty & ~at_reserve
    sums.at_start = np.where(t == start, total(moment.inventory_start_kwh_th), sums.at_start)
    sums.at_end = np.where(t == end - 1, held, sums.at_end)
    back = (t >= end) & (sums.full_again < 0) & (held >= usual_held - FULL_AGAIN_FRACTION * capacity)
    sums.full_again[back] = t
    sums.lack_kwh_th = np.maximum(usual_held - held, 0.0)


def broken(result: Tally, rows: Plants, here: Conditions) -> Ints:
    """First limit each row breaks, (row,), as an index into LIMITED_BY; 0 ("none") where it keeps all.

    Comfort is the critical load, sites that allow no unmet load, the site's own ceiling and the drift limits
    in occupied hours; recovery is load left unmet after the window because the tank is low.
    """
    buildings = rows.roster.buildings
    occupied = here.occupied[rows.site]
    peak = np.where(occupied, result.rise_k, 0.0).max(axis=1)
    drift = comfort.drift_excess_k(result.rise_k, occupied, here.step_h)
    warm = (peak > buildings.rise_limit_k) | (drift > 0.0)
    unserved = buildings.no_unmet & (result.unmet_kwh_th > UNMET_TOLERANCE_KW_TH)
    critical = result.critical_short_kw_th > UNMET_TOLERANCE_KW_TH
    cause = tank_cause(result)
    tank_or_comfort = np.where(cause > 0, cause, LIMITED_BY.index("comfort"))
    return np.select(
        [warm | unserved | critical, result.unmet_after_kw_th > UNMET_TOLERANCE_KW_TH],
        [tank_or_comfort, np.full_like(cause, LIMITED_BY.index("recovery"))],
        default=LIMITED_BY.index("none"),
    )


def tank_cause(result: Tally) -> Ints:
    """Why the tanks gave less than asked in the window, (row,), as an index into LIMITED_BY; 0 = they did not."""
    return np.select(
        [result.reserve_bound, result.stock_bound, result.rate_bound],
        [LIMITED_BY.index(name) for name in ("held_back", "inventory", "discharge_rate")],
        default=LIMITED_BY.index("none"),
    )
