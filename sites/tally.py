"""What is kept of a candidate's simulation, and which of its limits it broke.

Sums and peaks only, so that many candidates fit in memory; course.py keeps everything for the chosen few.
"""

from dataclasses import dataclass

import numpy as np

from sites import comfort
from sites.conditions import Conditions
from sites.course import Course
from sites.plant import Moment
from sites.quotes import LIMITED_BY
from sites.roster import Rows
from sites.rows import Plants
from sites.units import Bools, Floats, Ints, total

UNMET_TOLERANCE_KW_TH = 1e-6
NEAR_EMPTY_FRACTION = 0.02
EMPTY_FRACTION = 1e-3
REMNANT_FRACTION = 0.1
"""A tank that still gives this share of what is asked in the interval it runs empty in ran out in its middle."""
FULL_AGAIN_FRACTION = 1e-3
"""A tank is back when it lies within this share of capacity of the usual case, or has come past it."""


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
    usual_short: Bools
    """In the window load goes unmet in the usual case already"""
    rate_bound: Bools
    """In the window the tanks were asked for more than their rate, with inventory left"""
    stock_bound: Bools
    """In the window the tanks were asked for more than their inventory"""
    ran_out: Bools
    """In the window the tanks ran empty in the middle of an interval"""
    reserve_bound: Bools
    """In the window the held-back inventory was reached"""
    inventory_at_start_kwh_th: Floats
    inventory_at_end_kwh_th: Floats
    full_again: Ints
    """Clock index of the first interval after the window at whose end the inventory is back; -1 = never"""
    lack_kwh_th: Floats
    """How far the row ends below the usual case"""


@dataclass(frozen=True)
class Sums(Rows):
    """Running sums of one simulation of candidate rows; filled interval by interval with `add`."""

    power_kw: Floats
    """(row, interval)"""
    rise_k: Floats
    unmet_kwh_th: Floats
    unmet_after_kw_th: Floats
    critical_short_kw_th: Floats
    usual_short: Bools
    rate_bound: Bools
    stock_bound: Bools
    ran_out: Bools
    reserve_bound: Bools
    at_start: Floats
    at_end: Floats
    full_again: Ints
    lack_kwh_th: Floats
    from_above: Bools
    """The tanks come back to the usual case's level from above: after an absorb"""

    def tally(self) -> "Tally":
        """What has been summed up so far."""
        return Tally(
            power_kw=self.power_kw,
            rise_k=self.rise_k,
            unmet_kwh_th=self.unmet_kwh_th,
            unmet_after_kw_th=self.unmet_after_kw_th,
            critical_short_kw_th=self.critical_short_kw_th,
            usual_short=self.usual_short,
            rate_bound=self.rate_bound,
            stock_bound=self.stock_bound,
            ran_out=self.ran_out,
            reserve_bound=self.reserve_bound,
            inventory_at_start_kwh_th=self.at_start,
            inventory_at_end_kwh_th=self.at_end,
            full_again=self.full_again,
            lack_kwh_th=self.lack_kwh_th,
        )


def sums(power_kw: Floats, from_above: Bools) -> Sums:
    """Empty sums of rows whose power (row, interval) is `power_kw` until they are run; `from_above` (row,)."""
    rows = len(power_kw)

    def zeros() -> Floats:
        return np.zeros(rows)

    def no() -> Bools:
        return np.zeros(rows, dtype=np.bool_)

    return Sums(
        power_kw=power_kw.copy(),
        rise_k=np.zeros(power_kw.shape),
        unmet_kwh_th=zeros(),
        unmet_after_kw_th=zeros(),
        critical_short_kw_th=zeros(),
        usual_short=no(),
        rate_bound=no(),
        stock_bound=no(),
        ran_out=no(),
        reserve_bound=no(),
        at_start=zeros(),
        at_end=zeros(),
        full_again=np.full(rows, -1, dtype=np.int64),
        lack_kwh_th=zeros(),
        from_above=from_above,
    )


def add(
    sums: Sums, moment: Moment, rows: Plants, here: Conditions, usual: Course, start: Ints, end: Ints
) -> None:
    """Add one interval of rows whose windows are [start, end) (row,), against the usual course."""
    t = moment.interval
    capacity = total(rows.roster.tanks.capacity_kwh_th)
    held = total(moment.inventory_kwh_th)
    usual_held = total(usual.inventory_kwh_th[rows.site, :, t])
    extra = moment.unmet_kw_th - usual.unmet_kw_th[rows.site, t]
    inside = (start <= t) & (t < end)
    sums.usual_short[:] |= inside & (usual.unmet_kw_th[rows.site, t] > UNMET_TOLERANCE_KW_TH)
    sums.power_kw[:, t] = moment.power_kw
    sums.rise_k[:, t] = moment.air_rise_k
    sums.unmet_kwh_th[:] += np.where(extra > UNMET_TOLERANCE_KW_TH, extra, 0.0) * here.step_h
    np.maximum(sums.unmet_after_kw_th, np.where(t >= end, extra, 0.0), out=sums.unmet_after_kw_th)
    critical = np.minimum(rows.roster.buildings.critical_kw_th, moment.load_kw_th)
    lack = np.maximum(critical - moment.firm_kw_th, critical - (moment.load_kw_th - moment.unmet_kw_th))
    np.maximum(sums.critical_short_kw_th, np.where(inside, lack, 0.0), out=sums.critical_short_kw_th)
    drawn = total(moment.discharge_kw_th)
    short = inside & (capacity > 0.0) & (moment.wanted_kw_th > drawn + UNMET_TOLERANCE_KW_TH)
    reserve = rows.reserve_kwh_th
    at_reserve = (reserve > 0.0) & (held <= reserve + NEAR_EMPTY_FRACTION * capacity)
    empty = held <= NEAR_EMPTY_FRACTION * capacity
    sums.reserve_bound[:] |= short & at_reserve
    sums.ran_out[:] |= (
        short & (held <= EMPTY_FRACTION * capacity) & (drawn > REMNANT_FRACTION * moment.wanted_kw_th)
    )
    sums.stock_bound[:] |= short & empty & ~at_reserve
    sums.rate_bound[:] |= short & ~empty & ~at_reserve
    np.copyto(sums.at_start, total(moment.inventory_start_kwh_th), where=start == t)
    np.copyto(sums.at_end, held, where=end - 1 == t)
    above = np.where(sums.from_above, usual_held - held, held - usual_held)
    back = (t >= end) & (sums.full_again < 0) & (above >= -FULL_AGAIN_FRACTION * capacity)
    sums.full_again[back] = t
    sums.lack_kwh_th[:] = np.maximum(usual_held - held, 0.0)


def broken(result: Tally, rows: Plants, here: Conditions, usual_counts: bool = True) -> Ints:
    """First limit each row breaks, (row,), as an index into LIMITED_BY; 0 ("none") where it keeps all.

    Comfort is the critical load, sites that allow no unmet load, the site's own ceiling and the drift limits
    in occupied hours, and (where `usual_counts`) a window in which the usual plan is short of cooling already:
    what it would have drawn then hangs on the minute the tank runs out. So does the zone of a tank that runs out
    in the middle of a window's interval: inventory. Recovery is load left unmet after the window because the tank
    is low.
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
        [
            warm | unserved | critical | (result.usual_short & usual_counts),
            result.ran_out,
            result.unmet_after_kw_th > UNMET_TOLERANCE_KW_TH,
        ],
        [
            tank_or_comfort,
            *(np.full_like(cause, LIMITED_BY.index(name)) for name in ("inventory", "recovery")),
        ],
        default=LIMITED_BY.index("none"),
    )


def tank_cause(result: Tally) -> Ints:
    """Why the tanks gave less than asked in the window, (row,), as an index into LIMITED_BY; 0 = they did not."""
    return np.select(
        [result.reserve_bound, result.stock_bound, result.rate_bound],
        [LIMITED_BY.index(name) for name in ("held_back", "inventory", "discharge_rate")],
        default=LIMITED_BY.index("none"),
    )
