"""Cooling load: a profile where a site gives none, temperature features for a fit, and the goodness of one.

Owns the assumed profiles by building type. Measured or forecast loads come from the site and win over these.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from sites.errors import SitesError
from sites.units import Bools, FloatLike, Floats, Ints, Strings

SEGMENT_BOUNDS_F: Final = (30.0, 45.0, 55.0, 65.0, 75.0, 90.0)
"""Six bounds make seven temperature segments (open measurement-and-verification standard text)."""

SUNDAY: Final = 6


@dataclass(frozen=True)
class Profile:
    """Assumed course of one building type (common practice, no source).

    Cooling is there for people from `from_hour` to `to_hour`, building up over RAMP_H before and dying down over
    as long after. Outside those hours and on closed days the `idle_fraction` of all is left.
    """

    from_hour: float
    to_hour: float
    idle_fraction: float
    internal_fraction: float
    """Share of the design load that comes from people, light and equipment; the rest follows outdoor air."""
    balance_c: float
    """Outdoor temperature below which the outdoor share is nothing."""
    closed_saturday: bool
    closed_sunday: bool
    """Sundays and holidays."""


RAMP_H: Final = 2.0

PROFILES: Final = {
    "office": Profile(7.0, 19.0, 0.10, 0.45, 14.0, True, True),
    "school": Profile(7.0, 16.0, 0.05, 0.40, 15.0, True, True),
    "hotel": Profile(6.0, 23.0, 0.60, 0.35, 15.0, False, False),
    "courthouse": Profile(7.0, 17.0, 0.10, 0.45, 14.0, True, True),
    "concert_hall": Profile(16.0, 23.0, 0.10, 0.55, 15.0, False, False),
    "hospital": Profile(6.0, 20.0, 0.70, 0.45, 12.0, False, False),
    "laboratory": Profile(7.0, 20.0, 0.60, 0.55, 12.0, False, False),
    "retail": Profile(9.0, 21.0, 0.10, 0.45, 14.0, False, False),
    "other": Profile(7.0, 19.0, 0.20, 0.45, 14.0, True, True),
}
"""By building type of the table of sites."""


def profile_kw_th(
    peak_cooling_kw_th: Floats,
    building_type: Strings,
    local_hour: Floats,
    local_weekday: Ints,
    holiday: Bools,
    dry_bulb_c: Floats,
    design_c: Floats,
) -> Floats:
    """Assumed cooling load (N, T) in kW_th of sites that give none; common practice, no source.

    peak x people(t) x [internal + (1 - internal) (T - balance) / (design - balance)], the outdoor share not below
    0 and the whole within [0, peak]: the peak is met at design temperature in the busiest hours. peak (N,), type
    (N,), design temperature (N,); local hour, weekday (0 = Monday) and holiday (T,); dry bulb (N, T). Raises
    SitesError for an unknown building type, a design temperature not above the balance or a negative peak.
    """
    which = _type_index(building_type)
    internal = np.array([profile.internal_fraction for profile in PROFILES.values()])[which]
    balance = np.array([profile.balance_c for profile in PROFILES.values()])[which]
    _refuse(
        design_c <= balance,
        "design_c",
        design_c,
        "a design temperature above the balance temperature, 16 or so",
    )
    _refuse(~(peak_cooling_kw_th >= 0.0), "peak_cooling_kw_th", peak_cooling_kw_th, "0 or more")
    people = np.stack([_people(profile, local_hour, local_weekday, holiday) for profile in PROFILES.values()])
    outdoor = np.maximum(dry_bulb_c - balance[:, None], 0.0) / (design_c - balance)[:, None]
    share = people[which] * (internal[:, None] + (1.0 - internal)[:, None] * outdoor)
    load: Floats = peak_cooling_kw_th[:, None] * np.clip(share, 0.0, 1.0)
    return load


def segments_k(temperature: FloatLike, bounds: tuple[float, ...]) -> Floats:
    """Piecewise-linear temperature features, (..., len(bounds) + 1), whose sum is the temperature itself.

    First min(T, b_1), then the part of T within each pair of bounds, last the part above the final bound (Mathieu,
    Price, Kiliccote, Piette 2011). Bounds rise and are in the unit of the temperature. Raises SitesError otherwise.
    """
    edges = np.asarray(bounds, dtype=np.float64)
    if edges.size == 0 or (np.diff(edges) <= 0.0).any():
        raise SitesError(f"bounds: came {bounds}; expected one or more rising temperatures; sort them")
    value = np.asarray(temperature, dtype=np.float64)[..., None]
    first = np.minimum(value, edges[0])
    within = np.clip(value - edges, 0.0, np.append(np.diff(edges), np.inf))
    return np.concatenate([first, within], axis=-1)


def cv_rmse(measured: Floats, predicted: Floats, parameters: int) -> Floats:
    """Coefficient of variation of the root mean square error, a fraction, along the last axis.

    sqrt(sum e^2 / (n - p)) / mean(measured), e = measured - predicted (ASHRAE Guideline 14; hourly limit 30 %). Raises
    SitesError where n does not exceed the parameters, the mean is 0 or a value is missing.
    """
    error, mean, freedom = _errors(measured, predicted, parameters)
    result: Floats = np.asarray(np.sqrt((error * error).sum(axis=-1) / freedom) / mean, dtype=np.float64)
    return result


def nmbe(measured: Floats, predicted: Floats, parameters: int) -> Floats:
    """Normalised mean bias error, a fraction, along the last axis; above 0 where the model is low.

    sum e / ((n - p) mean(measured)), e = measured - predicted (ASHRAE Guideline 14; hourly limit 10 %). Raises
    SitesError as cv_rmse.
    """
    error, mean, freedom = _errors(measured, predicted, parameters)
    result: Floats = np.asarray(error.sum(axis=-1) / (freedom * mean), dtype=np.float64)
    return result


def _people(profile: Profile, local_hour: Floats, local_weekday: Ints, holiday: Bools) -> Floats:
    """Share of the design load's causes that is there, (T,), 1 in the busiest hours, idle_fraction at night."""
    before = (local_hour - (profile.from_hour - RAMP_H)) / RAMP_H
    after = (profile.to_hour + RAMP_H - local_hour) / RAMP_H
    # The late evening's tail runs on past midnight.
    past_midnight = (profile.to_hour + RAMP_H - 24.0 - local_hour) / RAMP_H
    there = np.clip(np.maximum(np.minimum(before, after), past_midnight), 0.0, 1.0)
    sunday = (local_weekday == SUNDAY) | holiday
    closed = (profile.closed_sunday & sunday) | (profile.closed_saturday & (local_weekday == SUNDAY - 1))
    there = np.where(closed, 0.0, there)
    share: Floats = profile.idle_fraction + (1.0 - profile.idle_fraction) * there
    return share


def _type_index(building_type: Strings) -> Ints:
    """Index of each site's type among PROFILES, (N,)."""
    names, inverse = np.unique(np.asarray(building_type).astype(str), return_inverse=True)
    known = list(PROFILES)
    for name in names:
        if name not in PROFILES:
            site = int(np.flatnonzero(names[inverse] == name)[0])
            raise SitesError(f"building_type, index {site}: came {name}; expected one of {', '.join(known)}")
    index: Ints = np.array([known.index(name) for name in names], dtype=np.int64)[inverse]
    return index


def _errors(measured: Floats, predicted: Floats, parameters: int) -> tuple[Floats, Floats, int]:
    """Measured less predicted, the measured mean, and degrees of freedom, all along the last axis."""
    truth, model = np.broadcast_arrays(np.asarray(measured, np.float64), np.asarray(predicted, np.float64))
    count = truth.shape[-1]
    if count <= parameters:
        raise SitesError(
            f"measured: came {count} values for {parameters} parameters; expected more values than those"
        )
    if not (np.isfinite(truth).all() and np.isfinite(model).all()):
        raise SitesError(
            "measured, predicted: came values that are missing; expected numbers; leave those out of both"
        )
    mean = np.asarray(truth.mean(axis=-1))
    if (mean == 0.0).any():
        raise SitesError(
            "measured: came a mean of 0; expected another; a relative error has no meaning there"
        )
    return truth - model, mean, count - parameters


def _refuse(bad: Bools, name: str, values: Floats, expected: str) -> None:
    """SitesError naming the first bad site and its value; nothing where all is well."""
    if bad.any():
        site = int(np.flatnonzero(bad)[0])
        raise SitesError(
            f"{name}, index {site}: came {values[site]:g}; expected {expected} ({int(bad.sum())} such in all)"
        )
