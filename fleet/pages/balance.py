"""Where each kWh comes back: what a called site did not draw, when it draws it later and at what price, what is
never drawn, what is lost; and the peak that comes back, beside the one without staggering.

Owns the arithmetic: sums of the record's courses, closing to zero in kW_th at every site by the first law.

    (made in the usual case - made in the event case) dt summed = not made earlier - made later =
        left in the tank + losses spared + heat kept in the zone + heat that never came in

with  left in the tank      = usual - event inventory at the horizon's end
      losses spared         = (usual - event standing loss) dt summed
      heat kept in the zone = air_kwh_per_k x air rise + mass_kwh_per_k x mass rise, at the horizon's end
      never came in         = envelope_kw_per_k x mean air rise dt summed (the zone floated)
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd

from fleet.errors import FleetError
from fleet.pages.case import Case
from sites.units import Floats

CLOSES_FRACTION: Final = 1e-6
"""Of the largest term; the courses are floats, stored whole."""


@dataclass(frozen=True)
class Cooling:
    """Cooling in kWh_th, each (site,); event less usual turned so that what is spared is positive."""

    not_made: Floats
    """Made less than usual, summed over the intervals where it is less"""
    made_later: Floats
    """Made more than usual, summed over the intervals where it is more"""
    left_in_tank: Floats
    loss_spared: Floats
    kept_in_zone: Floats
    never_came_in: Floats

    @property
    def left_over(self) -> Floats:
        """What the terms leave open; zero where the record keeps the first law."""
        spared = self.not_made - self.made_later
        found: Floats = spared - (
            self.left_in_tank + self.loss_spared + self.kept_in_zone + self.never_came_in
        )
        return found


@dataclass(frozen=True)
class Electricity:
    """Electric energy in kWh and its money, each (site,)."""

    not_drawn: Floats
    drawn_more: Floats
    price_not_drawn: Floats
    """Mean price of what was not drawn, per kWh; NaN where nothing was"""
    price_drawn_more: Floats


@dataclass(frozen=True)
class Comeback:
    """The recovery's highest rise over usual, of sites together, kW."""

    planned_kw: float
    planned_at: np.datetime64
    together_kw: float
    """With no staggering at all: every site's own highest rise in the same moment; never below planned_kw"""


def cooling(case: Case) -> Cooling:
    """The first law of every called site over the horizon.

    FleetError where a site does not close to CLOSES_FRACTION of its largest term: the record is not whole.
    """
    step_h = case.step_h
    made = case.course("direct_kw_th") + case.course("charge_kw_th")
    less = (case.course("usual_chiller_kw_th") - made) * step_h
    sites = case.record.frozen["sites"].set_index("site_id").loc[case.site_ids]
    air, mass, walls = (
        sites[name].to_numpy(dtype=np.float64)
        for name in ("air_kwh_per_k", "mass_kwh_per_k", "envelope_kw_per_k")
    )
    found = Cooling(
        not_made=np.maximum(less, 0.0).sum(axis=1),
        made_later=np.maximum(-less, 0.0).sum(axis=1),
        left_in_tank=(case.course("usual_inventory_kwh_th") - case.course("inventory_kwh_th"))[:, -1],
        loss_spared=(case.course("usual_loss_kw_th") - case.course("loss_kw_th")).sum(axis=1) * step_h,
        kept_in_zone=air * case.course("zone_rise_k")[:, -1] + mass * case.course("zone_mass_rise_k")[:, -1],
        never_came_in=walls * case.course("zone_mean_rise_k").sum(axis=1) * step_h,
    )
    largest = np.maximum(np.maximum(found.not_made, found.made_later), 1.0)
    open_rows = np.flatnonzero(np.abs(found.left_over) > CLOSES_FRACTION * largest)
    if open_rows.size:
        row = int(open_rows[0])
        raise FleetError(
            f"{case.record.path}: the cooling of site {case.site_ids[row]} does not close by "
            f"{found.left_over[row]:,.3f} kWh_th over the horizon; the record is not whole: run `shedwright audit`"
        )
    return found


def electricity(case: Case) -> Electricity:
    """What each called site does not draw and draws more, and the mean price of either."""
    change = (case.course("event_kw") - case.course("usual_kw")) * case.step_h
    less, more = np.maximum(-change, 0.0), np.maximum(change, 0.0)
    return Electricity(
        not_drawn=less.sum(axis=1),
        drawn_more=more.sum(axis=1),
        price_not_drawn=_mean_price(less, case.prices),
        price_drawn_more=_mean_price(more, case.prices),
    )


def by_hour(case: Case) -> tuple[pd.DatetimeIndex, Floats, Floats]:
    """Local hours of the horizon with the kWh not drawn and drawn more in each, called sites together."""
    change = (case.course("event_kw") - case.course("usual_kw")) * case.step_h
    starts = pd.DatetimeIndex(case.edges[:-1]).tz_localize("UTC")
    hours = starts.floor("h")
    kinds, place = np.unique(hours.asi8, return_inverse=True)
    less, more = np.zeros(kinds.size), np.zeros(kinds.size)
    np.add.at(less, place, np.maximum(-change, 0.0).sum(axis=0))
    np.add.at(more, place, np.maximum(change, 0.0).sum(axis=0))
    return hours.unique().tz_convert(case.zone), less, more


def comeback(case: Case, rows: list[int] | None = None) -> Comeback:
    """The peak that comes back after the windows, of all called sites or of some rows."""
    chosen = np.arange(len(case.site_ids)) if rows is None else np.array(rows)
    change = (case.course("event_kw") - case.course("usual_kw"))[chosen]
    ends = (
        case.windows["window_end"]
        .dt.tz_convert("UTC")
        .dt.tz_localize(None)
        .to_numpy("datetime64[us]")[chosen]
    )
    own = np.searchsorted(case.edges, ends)
    after = np.arange(change.shape[1])[None, :] >= own[:, None]
    recovery = np.where(after, change, 0.0)
    planned = recovery.sum(axis=0)
    return Comeback(
        planned_kw=float(planned.max()),
        planned_at=case.edges[int(planned.argmax())],
        together_kw=float(np.maximum(recovery, 0.0).max(axis=1).sum()),
    )


def _mean_price(energy: Floats, prices: Floats) -> Floats:
    """(site,) mean price weighted by energy (site, interval); NaN where there is none."""
    total = energy.sum(axis=1)
    money = np.where(energy > 0.0, energy * prices, 0.0).sum(axis=1)
    none = np.full_like(total, np.nan)
    found: Floats = np.divide(money, total, out=none, where=total > 0.0)
    return found
