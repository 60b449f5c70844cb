"""Comfort: how far a zone drifts above its usual case when cooling goes unmet, and how fast it may.

Owns the zone of two nodes (air, mass) and the limits on drifts. What goes unmet, and the ceiling a site sets
itself, belong to the plant and the quote. Everything is a RISE above the usual case, which is 0 by definition.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from math import ceil
from typing import Final

import numpy as np

from sites.compiled import Number, larger, shared
from sites.errors import SitesError
from sites.roster import Buildings, Rows
from sites.units import Bools, Floats

DRIFT_LIMITS: Final = ((0.25, 1.1), (0.5, 1.7), (1.0, 2.2), (2.0, 2.8), (4.0, 3.3))
"""(hours, K): most drift within any period of that length; ASHRAE Standard 55, limits on drifts and ramps (from
memory)."""

ROW_BLOCK: Final = 2048
"""Rows looked at together when sliding windows: keeps the arrays within the processor's cache."""


@dataclass(frozen=True)
class TwoNode(Rows):
    """One exact step of every zone: x_end = transition x + gain net; air_mean = mean_air x + mean_air_gain net.

    x = (air, mass) in K above the usual case; net in kW_th, constant over the step.
    """

    transition: Floats
    """(N, 2, 2)"""
    gain_k_per_kw: Floats
    """(N, 2)"""
    mean_air: Floats
    """(N, 2)"""
    mean_air_gain_k_per_kw: Floats
    """(N,)"""


def two_node(buildings: Buildings, step_h: float) -> TwoNode:
    """Exact solution over one step, for every building (N,), of

    C_a xa' = net - H xa - K (xa - xm),  C_m xm' = K (xa - xm),

    with C_a, C_m [kWh/K], K air to mass and H air to outdoors [kW/K]. Both eigenvalues are real and not above 0, so
    exp(A t) = e^(slow t) P_slow + e^(fast t) P_fast; inputs and means are integrals of the same. H = 0 is allowed.
    Raises SitesError for a heat capacity or coupling that is not above 0, or an envelope below 0.
    """
    _refuse_bad_zones(buildings)
    air, mass = buildings.air_kwh_per_k, buildings.mass_kwh_per_k
    coupling, envelope = buildings.coupling_kw_per_k, buildings.envelope_kw_per_k
    a, b = -(envelope + coupling) / air, coupling / air
    c, d = coupling / mass, -coupling / mass
    half_gap = np.sqrt(((a - d) / 2.0) ** 2 + b * c)
    fast = (a + d) / 2.0 - half_gap
    # The product of both is the determinant H K / (C_a C_m): no difference of near numbers, exact 0 at H = 0.
    slow = envelope * coupling / (air * mass) / fast
    identity = np.eye(2)
    system = np.stack([np.stack([a, b], axis=-1), np.stack([c, d], axis=-1)], axis=-2)
    gap = (slow - fast)[:, None, None]
    on_slow = (system - fast[:, None, None] * identity) / gap
    on_fast = (slow[:, None, None] * identity - system) / gap

    def combine(weight_slow: Floats, weight_fast: Floats) -> Floats:
        return weight_slow[:, None, None] * on_slow + weight_fast[:, None, None] * on_fast

    once = combine(*(step_h * _mean_exponential(value * step_h) for value in (slow, fast)))
    twice = combine(*(step_h * step_h * _mean_ramp(value * step_h) for value in (slow, fast)))
    return TwoNode(
        transition=combine(np.exp(slow * step_h), np.exp(fast * step_h)),
        gain_k_per_kw=once[:, :, 0] / air[:, None],
        mean_air=once[:, 0, :] / step_h,
        mean_air_gain_k_per_kw=twice[:, 0, 0] / air / step_h,
    )


@shared
def mean_supply_c(supply_c: Number, return_c: Number, load_kw_th: Number, unmet_kw_th: Number) -> Number:
    """Temperature (row,) of the water a building gets when part of its load goes unmet and its flow is not cut: what is
    cooled to supply_c mixes with what returns, supply + (return - supply) x unmet / load. A flow that is cut keeps the
    water colder, so this is the cautious side.
    """
    return supply_c + (return_c - supply_c) * unmet_kw_th / larger(load_kw_th, 1e-9)


def advance(zone: TwoNode, air_k: Floats, mass_k: Floats, net_kw_th: Floats) -> tuple[Floats, Floats, Floats]:
    """One step of every zone, (row,): air and mass rise at its end, and the exact mean air rise over it.

    net_kw_th = unmet cooling because of the event - pull-down, steady over the step. What comes in is stored or lost:
    net dt = C_a d(air) + C_m d(mass) + H mean dt.
    """
    step, gain, mean = zone.transition, zone.gain_k_per_kw, zone.mean_air
    return (
        after_k(step[:, 0, 0], step[:, 0, 1], gain[:, 0], air_k, mass_k, net_kw_th),
        after_k(step[:, 1, 0], step[:, 1, 1], gain[:, 1], air_k, mass_k, net_kw_th),
        after_k(mean[:, 0], mean[:, 1], zone.mean_air_gain_k_per_kw, air_k, mass_k, net_kw_th),
    )


@shared
def after_k(
    of_air: Number, of_mass: Number, gain_k_per_kw: Number, air_k: Number, mass_k: Number, net_kw_th: Number
) -> Number:
    """One of `advance`'s three answers: of_air air + of_mass mass + gain net, K."""
    return of_air * air_k + of_mass * mass_k + gain_k_per_kw * net_kw_th


def net_for_air(zone: TwoNode, air_k: Floats, mass_k: Floats, target_air_k: Floats) -> Floats:
    """The steady net kW_th (row,) that brings the air node to `target_air_k` at the step's end."""
    step, gain = zone.transition, zone.gain_k_per_kw
    return np.asarray(net_kw_th(step[:, 0, 0], step[:, 0, 1], gain[:, 0], air_k, mass_k, target_air_k))


@shared
def net_kw_th(
    of_air: Number,
    of_mass: Number,
    gain_k_per_kw: Number,
    air_k: Number,
    mass_k: Number,
    target_air_k: Number,
) -> Number:
    """`net_for_air`, (target - of_air air - of_mass mass) / gain."""
    return (target_air_k - (of_air * air_k + of_mass * mass_k)) / gain_k_per_kw


def drift_excess_k(rise_k: Floats, counted: Bools, step_h: float) -> Floats:
    """Worst drift of each row less what DRIFT_LIMITS allow, (R,) in K; 0 or less is within the limits.

    rise_k (R, T): air node at each interval's end; 0 before the first. counted (R, T): intervals that count
    (occupied hours); a window looks at both ends of every counted interval inside it. Drift is max - min over
    each window of a limit's length. A length that is no whole number of steps is widened to the next; one shorter
    than a step cannot be seen and is left out. A horizon shorter than a window is one window.
    """
    rows, intervals = rise_k.shape
    limits = [(ceil(hours / step_h - 1e-9), limit) for hours, limit in DRIFT_LIMITS if hours >= step_h - 1e-9]
    excess = np.full(rows, -np.inf)
    for first in range(0, rows, ROW_BLOCK):
        block = slice(first, first + ROW_BLOCK)
        rise = np.pad(rise_k[block], ((0, 0), (1, 0)))
        seen = np.pad(counted[block], ((0, 0), (1, 0))) | np.pad(counted[block], ((0, 0), (0, 1)))
        widths = [min(steps, intervals) + 1 for steps, _ in limits]
        highs = _sliding_most(np.where(seen, rise, -np.inf), widths)
        lows = _sliding_most(np.where(seen, -rise, -np.inf), widths)
        for (_, limit), high, low in zip(limits, highs, lows, strict=True):
            drift = np.maximum((high + low).max(axis=1), 0.0)
            np.maximum(excess[block], drift - limit, out=excess[block])
    return excess


def _refuse_bad_zones(buildings: Buildings) -> None:
    """SitesError naming the first building whose zone cannot be solved."""
    air, mass = buildings.air_kwh_per_k, buildings.mass_kwh_per_k
    coupling, envelope = buildings.coupling_kw_per_k, buildings.envelope_kw_per_k
    bad = ~((air > 0.0) & (mass > 0.0) & (coupling > 0.0) & (envelope >= 0.0))
    if bad.any():
        row = int(np.flatnonzero(bad)[0])
        raise SitesError(
            f"zone, index {row}: came air {air[row]:g} and mass {mass[row]:g} kWh/K, coupling {coupling[row]:g} and "
            f"envelope {envelope[row]:g} kW/K; expected the first three above 0 and the last not below; correct them "
            f"({int(bad.sum())} such in all)"
        )


def _mean_exponential(z: Floats) -> Floats:
    """(e^z - 1) / z, 1 at 0: the mean of e^(z s) over s in 0 to 1."""
    return np.divide(np.expm1(z), z, out=np.ones_like(z), where=z != 0.0)


def _mean_ramp(z: Floats) -> Floats:
    """(e^z - 1 - z) / z^2, 1/2 at 0; by its series sum z^k / (k + 2)! where the quotient would lose digits."""
    near = np.abs(z) < 1.0
    small = np.where(near, z, 0.0)
    series = np.zeros_like(z)
    for k in range(18, -1, -1):
        series = (1.0 + small * series) / (k + 2)
    large = np.where(near, 1.0, z)
    return np.where(near, series, (np.expm1(large) - large) / (large * large))


def _sliding_most(values: Floats, widths: list[int]) -> Iterator[Floats]:
    """Greatest over every window of each width (rising), along axis 1, by doubling the window that is known."""
    known, width_known = values, 1
    for width in widths:
        while 2 * width_known <= width:
            known = np.maximum(known[:, :-width_known], known[:, width_known:])
            width_known *= 2
        rest = width - width_known
        yield np.maximum(known[:, : known.shape[1] - rest], known[:, rest:]) if rest else known
