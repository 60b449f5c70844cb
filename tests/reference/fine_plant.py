"""A second judge of the plant: whole plants minute by minute, written apart from the models it judges.

Tanks melt and freeze by their full polynomials in the log mean temperature difference of a brine loop that is
solved with the machines upstream, at the middle of each minute; the zone's two nodes are integrated by a
Runge-Kutta step; machines follow the published curves at every minute's weather. The plant's control (strategy,
staging, charging hours, ramp after a release) is restated here in words of its own. Takes from `sites` its units
alone. Axes: case N, machine M, tank K, minute T; one Python loop, over minutes.

The loop: while there is less cooling than load, flow through the building is cut so that its supply stays at
supply_c. With machines in series upstream of the tank the inlet is return_c less what they took at that flow.
"""

from dataclasses import dataclass, fields, replace

import numpy as np

from sites.units import Bools, Floats, Strings

STEP_H = 1.0 / 60.0
HALVINGS = 24
CURVES = {
    # reference leaving and condenser, range of both, capacity, eir_temperature, eir_part_load
    "water_cooled_centrifugal": (
        (6.67, 29.4),
        ((5.0, 10.0), (24.0, 35.0)),
        (0.257896, 0.0389016, -0.00021708, 0.0468684, -0.00094284, -0.00034344),
        (0.933884, -0.058212, 0.00450036, 0.00243, 0.000486, -0.001215),
        (0.222903, 0.313387, 0.463710),
    ),
    "air_cooled_screw": (
        (6.67, 35.0),
        ((4.44, 10.0), (29.4, 46.1)),
        (0.979952514, 0.0359715682, -0.000324571, -0.003526257, -0.0000442458, -0.0001206704),
        (0.1210926936, 0.0321255295, 0.0010019413, 0.0215864214, 0.0001997952, -0.0015848128),
        (0.0, 1.0, 0.0),
    ),
}
"""DOE-2.1E centrifugal record; a public simulation engine's air-cooled screw."""
STRAND = (0.0, 0.09, -0.15, 0.612, -0.324, -0.216)
INTERNAL = (1.3879, -7.6333, 26.3423, -47.6084, 41.8498, -14.2948)
EXTERNAL = (1.1756, -5.3689, 17.3602, -30.1077, 25.6387, -8.5102)
"""Rate forms: Strand 1992; Henze and Krarti 2002, internal melt and freezing, external melt."""
LEAST_PART_LOAD = 0.1
GLIDE_K = 2.0
RAMP_H = 1.0
START_BELOW, STOP_AT = 0.95, 0.985


@dataclass(frozen=True)
class Plants:
    """N plants; minute arrays (N, T), machine arrays (N, M), tank arrays (N, K), else (N,)."""

    strategy: Strings
    series: Bools
    supply_c: Floats
    return_c: Floats
    brine_c: Floats
    held_back_kwh_th: Floats
    stage_up: Floats
    shared_kw: Floats
    pump_kw: Floats
    air_kwh_per_k: Floats
    mass_kwh_per_k: Floats
    coupling_kw_per_k: Floats
    envelope_kw_per_k: Floats
    level_kw_th: Floats
    machine_kind: Strings
    machine_kw_th: Floats
    machine_cop: Floats
    makes_ice: Bools
    ice_capacity_slope: Floats
    ice_cop_slope: Floats
    approach_k: Floats
    own_aux_kw: Floats
    tank_kind: Strings
    tank_kwh_th: Floats
    """0 = no tank"""
    loss_per_h: Floats
    tank_limit_kw_th: Floats
    charge_limit_kw_th: Floats
    load_kw_th: Floats
    dry_c: Floats
    wet_c: Floats
    on_peak: Bools
    charge_hours: Bools

    def take(self, rows: np.ndarray) -> "Plants":
        """Plants of the given rows."""
        return Plants(**{field.name: getattr(self, field.name)[rows] for field in fields(self)})

    def until(self, minutes: int) -> "Plants":
        """The same plants over the first `minutes` alone."""
        names = ("load_kw_th", "dry_c", "wet_c", "on_peak", "charge_hours")
        return replace(self, **{name: getattr(self, name)[:, :minutes] for name in names})


@dataclass(frozen=True)
class _Tanks:
    """Rate forms of every tank as polynomials, (power, N, K): base + slope x LMTD / 10 K, per capacity and hour."""

    melt_base: Floats
    melt_slope: Floats
    freeze_base: Floats
    freeze_slope: Floats
    ice: Bools
    """(N, K)"""
    salt: Bools

    def take(self, rows: np.ndarray) -> "_Tanks":
        return _Tanks(
            *(getattr(self, field.name)[:, rows] for field in fields(self)[:4]),
            self.ice[rows],
            self.salt[rows],
        )


def _tanks(plants: Plants) -> _Tanks:
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
    return _Tanks(*parts, ice, plants.tank_kind == "eutectic_salt")


@dataclass(frozen=True)
class Run:
    """Minute by minute, each (N, T): power, sum of the tanks' discharge, unmet, rise of air, inventory (end)."""

    power_kw: Floats
    discharge_kw_th: Floats
    unmet_kw_th: Floats
    rise_k: Floats
    held_kwh_th: Floats


@dataclass(frozen=True)
class _Machines:
    """What machines could give and draw at full load in both modes, (N, M, T)."""

    direct: Floats
    direct_kw: Floats
    ice: Floats
    ice_kw: Floats
    part_load: Floats
    """(3, N, M) coefficients of the share of full-load power"""


def run(
    plants: Plants, start_kwh_th: Floats, window: tuple[Floats, Floats], limit: Floats, usual: Run | None
) -> Run:
    """Run all plants; machines hold `limit` (N, M) in the minutes [start, end) of `window` (each (N,)).

    start_kwh_th (N, K). `usual` None: these are the usual cases, whose window is empty.
    """
    machines, tanks = _machines(plants), _tanks(plants)
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
        loss = _loss(plants, tanks.ice, held)
        wanted = _wanted(plants, (*adds, flat), staged, cap.sum(1), load, held, left_h[:, t], t)
        drawn = _drawn(plants, tanks, staged, held, loss, wanted, cap.sum(1), load)
        served = np.minimum(load - drawn.sum(1), cap.sum(1))
        unmet = np.maximum(load - drawn.sum(1) - served, 0.0)
        extra = unmet - (usual.unmet_kw_th[:, t] if usual else unmet)
        back = _pull_down(plants, staged, air, mass, extra, cap.sum(1) - served)
        air, mass = _zone(plants, air, mass, extra - back)
        behind = held.sum(1) < usual.held_kwh_th[:, t] if usual else np.zeros(n, dtype=bool)
        full = held.sum(1) >= STOP_AT * plants.tank_kwh_th.sum(1)
        charging = _charging(plants, flat, staged, usual, held, charging, behind, t) & ~full
        asked = _asked(plants, flat, load, behind, t)
        power, charge = _loads(
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


def lmtd_k(warm: Floats, cold: Floats) -> Floats:
    """Log mean difference to 0 degC of a brine between two temperatures above 0 (or both sides turned over)."""
    same = np.abs(warm - cold) < 1e-6
    return np.where(same, warm, (warm - cold) / np.log(np.where(same, np.e, warm / cold)))


def _polynomial(c: Floats | tuple[float, ...], x: Floats) -> Floats:
    """Horner's rule; each of `c` broadcasts with x."""
    result = np.zeros_like(x)
    for factor in c[::-1]:
        result = result * x + factor
    return result


def _melt_limit(plants: Plants, tanks: _Tanks, held: Floats, lmtd: Floats) -> Floats:
    """Most discharge (N, K) at an inventory and the loop's mean temperature difference."""
    d = 1.0 - np.clip(held / np.maximum(plants.tank_kwh_th, 1e-9), 0.0, 1.0)
    rate = _polynomial(tanks.melt_base + tanks.melt_slope * (lmtd / 10.0)[None, :, None], d)
    rate = rate * np.where(tanks.salt, np.minimum((1.0 - d) / 0.4, 1.0), 1.0)
    return np.minimum(np.maximum(rate, 0.0) * plants.tank_kwh_th, plants.tank_limit_kw_th)


def _most(plants: Plants, tanks: _Tanks, held: Floats, loss: Floats, inlet: Floats) -> Floats:
    """Most discharge (N, K) over a minute: the limit at the inventory of its middle, and what is there."""
    lmtd = lmtd_k(np.maximum(inlet, plants.supply_c), plants.supply_c)
    there = np.maximum(held / STEP_H - loss, 0.0)
    first = np.minimum(_melt_limit(plants, tanks, held, lmtd), there)
    return np.minimum(_melt_limit(plants, tanks, held - first * STEP_H / 2.0, lmtd), there)


def _behind_machines(plants: Plants, tanks: _Tanks, state: tuple[Floats, ...], drawn: Floats) -> Floats:
    """Most discharge (R, K) where machines take the rest of the load upstream at the same flow."""
    held, loss, ready, load = state
    beside = np.minimum(load - drawn, ready)
    share = drawn / np.maximum(drawn + beside, 1e-9)
    return _most(plants, tanks, held, loss, plants.supply_c + (plants.return_c - plants.supply_c) * share)


def _drawn(
    plants: Plants,
    tanks: _Tanks,
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
    most = _most(plants, tanks, held, loss, plants.return_c)
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


def _loss(plants: Plants, ice: Bools, held: Floats) -> Floats:
    """Standing loss (N, K): of capacity for ice, of inventory for water, at most what is there."""
    base = np.where(ice, plants.tank_kwh_th, held)
    return np.minimum(base * plants.loss_per_h, held / STEP_H)


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


def _zone(plants: Plants, air: Floats, mass: Floats, net: Floats) -> tuple[Floats, Floats]:
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


def _loads(
    plants: Plants,
    tanks: _Tanks,
    iced: Bools,
    machines: _Machines,
    limit: Floats,
    charging: Bools,
    cooling: Floats,
    asked: Floats,
    held: Floats,
    loss: Floats,
    t: int,
) -> tuple[Floats, Floats]:
    """Power of all machines (N,), and charge of each tank (N, K)."""
    direct, ice = machines.direct[:, :, t] * limit, machines.ice[:, :, t] * limit
    over = plants.makes_ice & (iced & charging)[:, None]
    can = charging & (np.where(over, ice, direct).sum(1) >= cooling)
    over &= can[:, None]
    cap = np.where(over, ice, direct)
    cold = np.where(over, cap, 0.0).sum(1)
    spare = np.where(iced, np.minimum(cold, cap.sum(1) - cooling), cap.sum(1) - cooling)
    most = np.where(can[:, None], _freeze_limit(plants, tanks, held, loss), 0.0)
    taken = np.minimum(np.minimum(np.maximum(spare, 0.0), asked), most.sum(1))
    charge = most * np.divide(taken, most.sum(1), out=np.zeros_like(taken), where=most.sum(1) > 0)[:, None]
    warm = np.where(over, 0.0, cap)
    on_warm = np.minimum(cooling, warm.sum(1))
    load = _staged(plants, on_warm + np.where(iced, 0.0, taken), warm)
    load = load + _staged(plants, cooling - on_warm + np.where(iced, taken, 0.0), cap - warm)
    able = np.where(over, machines.ice[:, :, t], machines.direct[:, :, t])
    full = np.where(over, machines.ice_kw[:, :, t], machines.direct_kw[:, :, t])
    ratio = np.divide(load, able, out=np.zeros_like(load), where=able > 0.0)
    running = np.maximum(ratio, LEAST_PART_LOAD)
    power = full * _polynomial(machines.part_load, running) * np.minimum(ratio / LEAST_PART_LOAD, 1.0)
    return (power + np.where(load > 0.0, plants.own_aux_kw, 0.0)).sum(1), charge


def _freeze_limit(plants: Plants, tanks: _Tanks, held: Floats, loss: Floats) -> Floats:
    """Most charge (N, K) over a minute: the limit at its start, and the room."""
    soc = np.clip(held / np.maximum(plants.tank_kwh_th, 1e-9), 0.0, 1.0)
    lmtd = lmtd_k(-plants.brine_c, np.maximum(-plants.brine_c - GLIDE_K, 0.5))
    rate = _polynomial(tanks.freeze_base + tanks.freeze_slope * (lmtd / 10.0)[None, :, None], soc)
    room = (plants.tank_kwh_th - held) / STEP_H + loss
    most = np.minimum(np.minimum(rate * plants.tank_kwh_th, plants.charge_limit_kw_th), room)
    return np.maximum(most, 0.0)


def _staged(plants: Plants, demand: Floats, capacity: Floats) -> Floats:
    """Machines start one after the other, the next over stage_up of those on; those on share alike."""
    before = np.cumsum(capacity, axis=1) - capacity
    on = (capacity > 0.0) & (demand[:, None] > plants.stage_up[:, None] * before) & (demand > 0.0)[:, None]
    running = np.where(on, capacity, 0.0)
    every = running.sum(1)
    return running * np.divide(demand, every, out=np.zeros_like(every), where=every > 0.0)[:, None]


def _machines(plants: Plants) -> _Machines:
    """Capability of every machine at every minute's weather, both modes."""
    condenser = np.where(
        (plants.machine_kind == "water_cooled_centrifugal")[:, :, None],
        plants.wet_c[:, None, :] + plants.approach_k[:, :, None],
        plants.dry_c[:, None, :],
    )
    direct, direct_kw = _capability(plants, plants.supply_c[:, None, None], condenser)
    warm, warm_kw = _capability(plants, np.full((len(plants.supply_c), 1, 1), 5.0), condenser)
    below = 5.0 - plants.brine_c[:, None]
    capacity = plants.makes_ice * (1.0 - plants.ice_capacity_slope * below)
    cop = 1.0 - plants.ice_cop_slope * below
    parts = {kind: np.array(part) / sum(part) for kind, (*_, part) in CURVES.items()}
    part_load = np.array([[parts[str(kind)] for kind in row] for row in plants.machine_kind]).transpose(
        2, 0, 1
    )
    made, drawn = warm * capacity[:, :, None], warm_kw * (capacity / cop)[:, :, None]
    return _Machines(direct, direct_kw, made, drawn, part_load)


def _capability(plants: Plants, leaving: Floats, condenser: Floats) -> tuple[Floats, Floats]:
    available, power = np.zeros_like(condenser), np.zeros_like(condenser)
    cop = np.where(plants.machine_kw_th > 0.0, plants.machine_cop, 1.0)
    for kind, (reference, (x_range, y_range), capacity, eir, _) in CURVES.items():
        x, y = np.clip(leaving, *x_range), np.clip(condenser, *y_range)
        give = plants.machine_kw_th[:, :, None] * _surface(capacity, x, y) / _surface(capacity, *reference)
        draw = give / cop[:, :, None] * _surface(eir, x, y) / _surface(eir, *reference)
        mine = (plants.machine_kind == kind)[:, :, None]
        available, power = np.where(mine, give, available), np.where(mine, draw, power)
    return available, power


def _surface(c: tuple[float, ...], x: Floats | float, y: Floats | float) -> Floats:
    return np.asarray(c[0] + c[1] * x + c[2] * x * x + c[3] * y + c[4] * y * y + c[5] * x * y)
