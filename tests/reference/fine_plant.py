"""A second judge of the plant: whole plants minute by minute, written apart from the models it judges.

Tanks are fine_tanks.py's, machines fine_machines.py's; here the zone's two nodes are integrated by a Runge-Kutta
step, and the plant's control (strategy, staging, charging hours, ramp after a release) is restated in words of its
own. Takes from `sites` its units alone. Axes: case N, machine M, tank K, minute T; one Python loop, over minutes.
"""

from dataclasses import dataclass

import numpy as np
from reference.fine_case import STEP_H, Plants
from reference.fine_machines import CURVES, loads, machines_of, surface
from reference.fine_tanks import drawn_kw_th, lmtd_k, loss_kw_th, tanks_of

from sites.units import Bools, Floats

__all__ = ["CURVES", "STEP_H", "Plants", "Run", "lmtd_k", "run", "surface", "zone_step"]

RAMP_H = 1.0
START_BELOW, STOP_AT = 0.95, 0.985


@dataclass(frozen=True)
class Run:
    """Minute by minute, each (N, T): power, sum of the tanks' discharge, unmet, rise of air, inventory (end)."""

    power_kw: Floats
    discharge_kw_th: Floats
    unmet_kw_th: Floats
    rise_k: Floats
    held_kwh_th: Floats


def run(
    plants: Plants, start_kwh_th: Floats, window: tuple[Floats, Floats], limit: Floats, usual: Run | None
) -> Run:
    """Run all plants; machines hold `limit` (N, M) in the minutes [start, end) of `window` (each (N,)).

    start_kwh_th (N, K). `usual` None: these are the usual cases, whose window is empty.
    """
    machines, tanks = machines_of(plants), tanks_of(plants)
    flat, iced = plants.strategy == "load_levelling", (tanks.ice & (plants.tank_kwh_th > 0.0)).any(1)
    adds = [plants.strategy == name for name in ("full_storage", "storage_priority")]
    n, minutes = plants.load_kw_th.shape
    held, charging = start_kwh_th.copy(), np.zeros(n, dtype=bool)
    air, mass = np.zeros(n), np.zeros(n)
    left_h = _left_h(plants.on_peak)
    kept = [np.zeros((n, minutes)) for _ in range(5)]
    for t in range(minutes):
        staged = (window[0] <= t) & (t < window[1])
        now = np.where(staged[:, None], limit, 1.0)
        cap = machines.direct[:, :, t] * now
        load = plants.load_kw_th[:, t]
        loss = loss_kw_th(plants, tanks, held)
        wanted = _wanted(plants, (*adds, flat), staged, cap.sum(1), load, held, left_h[:, t], t)
        drawn = drawn_kw_th(plants, tanks, staged, held, loss, wanted, cap.sum(1), load)
        served = np.minimum(load - drawn.sum(1), cap.sum(1))
        unmet = np.maximum(load - drawn.sum(1) - served, 0.0)
        extra = unmet - (usual.unmet_kw_th[:, t] if usual else unmet)
        back = _pull_down(plants, staged, air, mass, extra, cap.sum(1) - served)
        air, mass = zone_step(plants, air, mass, extra - back)
        behind = held.sum(1) < usual.held_kwh_th[:, t] if usual else np.zeros(n, dtype=bool)
        full = held.sum(1) >= STOP_AT * plants.tank_kwh_th.sum(1)
        charging = _charging(plants, flat, staged, usual, held, charging, behind, t) & ~full
        asked = _asked(plants, flat, load, behind, t)
        power, charge = loads(
            plants, tanks, iced, machines, now, charging, served + back, asked, held, loss, t
        )
        through = charge.sum(1) + drawn.sum(1) > 0.0
        working = through | (served + back > 0.0)
        power = power + np.where(working, plants.shared_kw, 0.0) + np.where(through, plants.pump_kw, 0.0)
        held = held + (charge - drawn - loss) * STEP_H
        for column, value in zip(kept, (power, drawn.sum(1), unmet, air, held.sum(1)), strict=True):
            column[:, t] = value
    return Run(*kept)


def _left_h(on_peak: Bools) -> Floats:
    """Hours of the running on-peak period still to come, this minute included."""
    left, count = np.zeros(on_peak.shape), np.zeros(len(on_peak))
    for t in range(on_peak.shape[1] - 1, -1, -1):
        count = np.where(on_peak[:, t], count + 1.0, 0.0)
        left[:, t] = count * STEP_H
    return left


def _wanted(
    plants: Plants,
    strategies: tuple[Bools, ...],
    staged: Bools,
    ready: Floats,
    load: Floats,
    held: Floats,
    left_h: Floats,
    t: int,
) -> Floats:
    """What the load asks of the tanks: the shortage, and outside a window what the strategy adds."""
    short = np.maximum(load - ready, 0.0)
    peak = plants.on_peak[:, t]
    spread = np.minimum(held.sum(1) / np.maximum(left_h, STEP_H), load)
    full, spreads, flat = strategies
    extra = (
        (full & peak) * load + (spreads & peak) * spread + flat * np.maximum(load - plants.level_kw_th, 0.0)
    )
    return np.where(staged, short, np.maximum(short, extra))


def _pull_down(
    plants: Plants, staged: Bools, air: Floats, mass: Floats, extra: Floats, spare: Floats
) -> Floats:
    """Cooling that lets the air fall like exp(-t / RAMP_H), within what machines have to spare."""
    rate = -air / RAMP_H
    net = (
        plants.air_kwh_per_k * rate + plants.envelope_kw_per_k * air + plants.coupling_kw_per_k * (air - mass)
    )
    need = np.clip(extra - net, 0.0, np.maximum(spare, 0.0))
    return np.where(~staged & (air > 0.0), need, 0.0)


def zone_step(plants: Plants, air: Floats, mass: Floats, net: Floats) -> tuple[Floats, Floats]:
    """Both nodes a minute later, by one Runge-Kutta step of fourth order."""

    def slope(a: Floats, m: Floats) -> tuple[Floats, Floats]:
        flow = plants.coupling_kw_per_k * (a - m)
        return (
            net - plants.envelope_kw_per_k * a - flow
        ) / plants.air_kwh_per_k, flow / plants.mass_kwh_per_k

    h = STEP_H
    a1, m1 = slope(air, mass)
    a2, m2 = slope(air + h / 2 * a1, mass + h / 2 * m1)
    a3, m3 = slope(air + h / 2 * a2, mass + h / 2 * m2)
    a4, m4 = slope(air + h * a3, mass + h * m3)
    return air + h / 6 * (a1 + 2 * a2 + 2 * a3 + a4), mass + h / 6 * (m1 + 2 * m2 + 2 * m3 + m4)


def _charging(
    plants: Plants,
    flat: Bools,
    staged: Bools,
    usual: Run | None,
    held: Floats,
    was: Bools,
    behind: Bools,
    t: int,
) -> Bools:
    """Plants that charge: in their hours from low enough until full, or levelling under the flat rate."""
    size, now = plants.tank_kwh_th.sum(1), held.sum(1)
    low = was | (now < START_BELOW * size)
    if usual is not None:
        low = low | (now < usual.held_kwh_th[:, t] - 1e-3 * size)
    hours = plants.charge_hours[:, t]
    under = plants.load_kw_th[:, t] < plants.level_kw_th
    return ~staged & np.where(flat, under | (hours & behind), hours & low)


def _asked(plants: Plants, flat: Bools, load: Floats, behind: Bools, t: int) -> Floats:
    """Charge that the strategy asks for: with load levelling what lies under the flat rate, else all there is."""
    flat = flat & ~(behind & plants.charge_hours[:, t])
    return np.where(flat, np.maximum(plants.level_kw_th - load, 0.0), np.inf)
