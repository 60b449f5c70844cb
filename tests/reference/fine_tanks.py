"""The second judge's tanks: full polynomials in the log mean temperature difference of a loop that is solved with the
machines upstream, at the middle of each minute.

The loop: while there is less cooling than load, flow through the building is cut so that its supply stays at
supply_c. With machines in series upstream of the tank the inlet is return_c less what they took at that flow.
"""

from dataclasses import dataclass, fields

import numpy as np
from reference.fine_case import STEP_H, Plants

from sites.units import Bools, Floats

HALVINGS = 24
SALT_C = 8.3
"""Phase change of the salt (Chen and Sheen 1993)."""
STRAND = (0.0, 0.09, -0.15, 0.612, -0.324, -0.216)
INTERNAL = (1.3879, -7.6333, 26.3423, -47.6084, 41.8498, -14.2948)
EXTERNAL = (1.1756, -5.3689, 17.3602, -30.1077, 25.6387, -8.5102)
"""Rate forms: Strand 1992; Henze and Krarti 2002, internal melt and freezing, external melt."""
GLIDE_K = 2.0


@dataclass(frozen=True)
class Tanks:
    """Rate forms of every tank as polynomials, (power, N, K): base + slope x LMTD / 10 K, per capacity and hour."""

    melt_base: Floats
    melt_slope: Floats
    freeze_base: Floats
    freeze_slope: Floats
    ice: Bools
    """(N, K)"""
    salt: Bools

    def take(self, rows: np.ndarray) -> "Tanks":
        return Tanks(
            *(getattr(self, field.name)[:, rows] for field in fields(self)[:4]),
            self.ice[rows],
            self.salt[rows],
        )


def tanks_of(plants: Plants) -> Tanks:
    shape = (6, *plants.tank_kind.shape)
    parts = [np.zeros(shape) for _ in range(4)]
    size = np.maximum(plants.tank_kwh_th, 1e-9)
    ice = np.array([[str(kind).startswith("ice") for kind in row] for row in plants.tank_kind])
    internal, external = (plants.tank_kind == f"ice_{way}_melt" for way in ("internal", "external"))
    parts[0][:3] = np.where(internal, np.array(STRAND[:3])[:, None, None], 0.0)
    parts[1][:3] = np.where(internal, np.array(STRAND[3:])[:, None, None], 0.0)
    parts[1] += np.where(external, np.array(EXTERNAL)[:, None, None], 0.0)
    parts[1] += np.where(plants.tank_kind == "ice_encapsulated", np.array(INTERNAL)[:, None, None], 0.0)
    parts[3] += np.where(ice, np.array(INTERNAL)[:, None, None], 0.0)
    for part, limit in ((parts[0], plants.tank_limit_kw_th), (parts[2], plants.charge_limit_kw_th)):
        flat = np.where(plants.tank_kind == "eutectic_salt", 1.0 / 6.0, 0.2)
        part[0] += np.where(ice, 0.0, np.where(np.isfinite(limit), limit / size, flat))
    return Tanks(*parts, ice, plants.tank_kind == "eutectic_salt")


def lmtd_k(warm: Floats, cold: Floats) -> Floats:
    """Log mean difference to 0 degC of a brine between two temperatures above 0 (or both sides turned over)."""
    same = np.abs(warm - cold) < 1e-6
    return np.where(same, warm, (warm - cold) / np.log(np.where(same, np.e, warm / cold)))


def polynomial(c: Floats | tuple[float, ...], x: Floats) -> Floats:
    """Horner's rule; each of `c` broadcasts with x."""
    result = np.zeros_like(x)
    for factor in c[::-1]:
        result = result * x + factor
    return result


def melt_limit_kw_th(plants: Plants, tanks: Tanks, held: Floats, lmtd: Floats) -> Floats:
    """Most discharge (N, K) at an inventory and the loop's mean temperature difference."""
    d = 1.0 - np.clip(held / np.maximum(plants.tank_kwh_th, 1e-9), 0.0, 1.0)
    rate = polynomial(tanks.melt_base + tanks.melt_slope * (lmtd / 10.0)[None, :, None], d)
    rate = rate * np.where(tanks.salt, np.minimum((1.0 - d) / 0.4, 1.0), 1.0)
    return np.minimum(np.maximum(rate, 0.0) * plants.tank_kwh_th, plants.tank_limit_kw_th)


def most_kw_th(plants: Plants, tanks: Tanks, held: Floats, loss: Floats, inlet: Floats) -> Floats:
    """Most discharge (N, K) over a minute: the limit at the inventory of its middle, and what is there."""
    lmtd = lmtd_k(np.maximum(inlet, plants.supply_c), plants.supply_c)
    there = np.maximum(held / STEP_H - loss, 0.0)
    first = np.minimum(melt_limit_kw_th(plants, tanks, held, lmtd), there)
    return np.minimum(melt_limit_kw_th(plants, tanks, held - first * STEP_H / 2.0, lmtd), there)


def _behind_machines(plants: Plants, tanks: Tanks, state: tuple[Floats, ...], drawn: Floats) -> Floats:
    """Most discharge (R, K) where machines take the rest of the load upstream at the same flow."""
    held, loss, ready, load = state
    beside = np.minimum(load - drawn, ready)
    share = drawn / np.maximum(drawn + beside, 1e-9)
    return most_kw_th(
        plants, tanks, held, loss, plants.supply_c + (plants.return_c - plants.supply_c) * share
    )


def drawn_kw_th(
    plants: Plants,
    tanks: Tanks,
    staged: Bools,
    held: Floats,
    loss: Floats,
    wanted: Floats,
    ready: Floats,
    load: Floats,
) -> Floats:
    """Discharge of each tank (N, K). In series inlet and rate are solved together, by halving where they bind."""
    free = np.maximum((held.sum(1) - plants.held_back_kwh_th) / STEP_H - loss.sum(1), 0.0)
    wanted = np.where(staged, np.minimum(wanted, free), wanted)
    # Salt melts at SALT_C: water that has been cooled to that is cooled no further.
    cooled = np.maximum(plants.return_c - np.maximum(plants.supply_c, SALT_C), 0.0)
    part = cooled / (plants.return_c - plants.supply_c)
    salty = (tanks.salt & (plants.tank_kwh_th > 0.0)).any(1)
    wanted = np.where(salty, np.minimum(wanted, part * load), wanted)
    most = most_kw_th(plants, tanks, held, loss, plants.return_c)
    pick = np.flatnonzero(plants.series & (wanted > 0.0))
    if len(pick):
        state = (held[pick], loss[pick], ready[pick], load[pick])
        most[pick] = _behind_machines(plants.take(pick), tanks.take(pick), state, wanted[pick])
        pick = pick[most[pick].sum(1) < wanted[pick]]
    if len(pick):
        part, part_tanks = plants.take(pick), tanks.take(pick)
        state = (held[pick], loss[pick], ready[pick], load[pick])
        low, high = np.zeros(len(pick)), wanted[pick].copy()
        for _ in range(HALVINGS):
            middle = 0.5 * (low + high)
            fits = _behind_machines(part, part_tanks, state, middle).sum(1) >= middle
            low, high = np.where(fits, middle, low), np.where(fits, high, middle)
        most[pick] = _behind_machines(part, part_tanks, state, low)
        wanted[pick] = low
    every = most.sum(1)
    given = np.minimum(wanted, every)
    return most * np.divide(given, every, out=np.zeros_like(every), where=every > 0.0)[:, None]


def loss_kw_th(plants: Plants, tanks: Tanks, held: Floats) -> Floats:
    """Standing loss (N, K), at most what is there: of capacity for ice and salt, which sit at their melting point to
    the last; of inventory for water."""
    base = np.where(tanks.ice | tanks.salt, plants.tank_kwh_th, held)
    return np.minimum(base * plants.loss_per_h, held / STEP_H)


def freeze_limit_kw_th(plants: Plants, tanks: Tanks, held: Floats, loss: Floats) -> Floats:
    """Most charge (N, K) over a minute: the limit at its start, and the room."""
    soc = np.clip(held / np.maximum(plants.tank_kwh_th, 1e-9), 0.0, 1.0)
    lmtd = lmtd_k(-plants.brine_c, np.maximum(-plants.brine_c - GLIDE_K, 0.5))
    rate = polynomial(tanks.freeze_base + tanks.freeze_slope * (lmtd / 10.0)[None, :, None], soc)
    room = (plants.tank_kwh_th - held) / STEP_H + loss
    most = np.minimum(np.minimum(rate * plants.tank_kwh_th, plants.charge_limit_kw_th), room)
    return np.maximum(most, 0.0)
