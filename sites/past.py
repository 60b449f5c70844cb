"""A plant's metered past: the cooling that its power implies, and how far its usual operation is from its meter.

Owns the comparison and the correction; where readings come from, and which days count, is the caller's. Axes: site N,
machine M, interval T.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from sites.conditions import Conditions
from sites.course import Course
from sites.dispatch import plant_power_kw, staged_load_kw_th
from sites.roster import Roster, Rows
from sites.units import Bools, Floats, total

HALVINGS: Final = 30
"""Halvings of a plant's capacity: to a billionth of it."""
YARDSTICK_CV: Final = 0.10
"""A real plant's chiller power is fitted to 6.4 % CV(RMSE) by a biquadratic in load and condenser water and to 9.8 % by
a line: a model within the latter is as good as one can be."""
FOLLOWS_CV: Final = 0.30
"""Usual operation that is further from its meter than this even when corrected does not follow it (the hourly limit of
ASHRAE Guideline 14): a factor would only hide that."""
MOST_CORRECTED: Final = 0.20
"""A meter that is further off than this is no matter of efficiency: nothing is corrected, and it is told."""


@dataclass(frozen=True)
class Match(Rows):
    """Usual operation beside the plant's meter, each (N,); NaN where nothing was compared."""

    hours: Floats
    bias: Floats
    """model less meter, over the meter"""
    cv_rmse: Floats
    """root mean square of that, over the meter's mean"""
    efficiency: Floats
    """factor on every machine's COP that takes the bias out, 1 where it is not taken"""
    corrected_cv_rmse: Floats
    """as cv_rmse with that factor"""


def compressor_kw(roster: Roster, course: Course) -> Floats:
    """Power (N, T) of a course's machines without the auxiliaries that stop with them."""
    running = (course.direct_kw_th + course.into_tank_kw_th) > 0.0
    own = np.where(running, roster.chillers.dedicated_aux_kw[:, :, None], 0.0)
    compressors: Floats = (course.machine_kw - own).sum(axis=1)
    return compressors


def compare(usual_kw: Floats, compressors_kw: Floats, metered_kw: Floats, step_h: float) -> Match:
    """Compare usual plant power and the compressors' part of it with metered plant power, each (N, T).

    Intervals whose meter is NaN are not compared. The factor is compressor energy of the model over what the meter
    leaves for compressors when the model's auxiliaries are taken out: usual operation and event move together by it,
    for it acts on the machines and not on a result. It is taken only where the intervals agree better with it, too,
    and within FOLLOWS_CV.
    """
    held = np.isfinite(metered_kw)
    meter, model = np.where(held, metered_kw, 0.0), np.where(held, usual_kw, 0.0)
    compressor = np.where(held, compressors_kw, 0.0)
    sums = meter.sum(axis=1)
    known = sums > 0.0
    bias = _share(model.sum(axis=1) - sums, sums, known)
    left = sums - (model - compressor).sum(axis=1)
    right = known & (np.abs(bias) <= MOST_CORRECTED) & (left > 0.0) & (compressor.sum(axis=1) > 0.0)
    factor = np.where(right, compressor.sum(axis=1) / np.where(right, left, 1.0), 1.0)
    count = held.sum(axis=1)

    def scatter(modelled: Floats) -> Floats:
        mean_square = ((modelled - meter) ** 2).sum(axis=1) / np.maximum(count, 1)
        return _share(np.sqrt(mean_square) * count, sums, known)

    before, after = scatter(model), scatter(model - compressor + compressor / factor[:, None])
    better = (after < before) & (after <= FOLLOWS_CV)
    return Match(
        hours=count * step_h,
        bias=bias,
        cv_rmse=before,
        efficiency=np.where(better, factor, 1.0),
        corrected_cv_rmse=np.where(better, after, before),
    )


def implied_load_kw_th(roster: Roster, here: Conditions, power_kw: Floats) -> Floats:
    """Cooling (N, T) that a plant without tanks makes when it draws `power_kw` (N, T); NaN where that is not known.

    Power rises with load but for steps where a machine starts: halved down to the least load that draws as much. Power
    at or below the shared auxiliaries is no cooling; more than all machines draw at full load is all they can give.
    """
    sites, machines, count = here.direct_kw_th.shape
    chillers, buildings = roster.chillers, roster.buildings

    def flat(values: Floats) -> Floats:
        return np.moveaxis(values, 1, 2).reshape(-1, machines)

    capacity, full = flat(here.direct_kw_th), flat(here.direct_full_kw)
    kind, aux = np.repeat(chillers.kind, count, axis=0), np.repeat(chillers.dedicated_aux_kw, count, axis=0)
    stage_up = np.repeat(buildings.stage_up_fraction, count)
    target = (power_kw - buildings.shared_aux_kw[:, None]).ravel()
    low, high = np.zeros(sites * count), total(capacity)
    for _ in range(HALVINGS):
        middle = 0.5 * (low + high)
        load = staged_load_kw_th(middle, capacity, stage_up)
        enough = total(plant_power_kw(load, capacity, full, kind, aux)) >= target
        low, high = np.where(enough, low, middle), np.where(enough, middle, high)
    load = np.where(target <= 0.0, 0.0, high)
    return np.where(np.isfinite(target), load, np.nan).reshape(sites, count)


def _share(part: Floats, whole: Floats, known: Bools) -> Floats:
    return np.asarray(np.where(known, part / np.where(known, whole, 1.0), np.nan))
