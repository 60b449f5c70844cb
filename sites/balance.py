"""A plant's tanks by energy balance: what its metered power says went into them and came out since they were full.

Owns the passage from plant power to charge and discharge (or, where the tanks' levels are metered, to the load), which
hours show that the tanks are full, and how far such a balance can be trusted. Where power, load and levels come
from, and what is told of them, is the caller's. Axes: site N, machine M, interval T; tanks of a site together.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from sites.conditions import Conditions
from sites.dispatch import plant_power_kw, staged_load_kw_th
from sites.roster import FREEZING_KINDS, STRATEGIES, TANK_KINDS, Roster, Rows, kind_is
from sites.units import Bools, Floats, Ints, total

HALVINGS: Final = 14
"""Halvings of what is looked for: to a sixteen-thousandth of a plant's capacity."""
FULL_FRACTION: Final = 0.985
FULL_SPREAD_FRACTION: Final = 0.04
"""Level of a tank whose plant has stopped charging by itself, and half its width (common practice, no source)."""
IDLE_SHARE: Final = 0.12
"""Within this share of the load's own power a plant is taken to serve the load alone, tanks at rest: loads are
forecasts."""
UNPLANNED_SHARE: Final = 0.30
"""The same in hours in which the strategy neither charges nor draws on the tanks."""
CHARGED_FRACTION: Final = 0.02
"""A tank that took less than this share of its capacity in an hour is not being filled."""
NOT_FULL_FRACTION: Final = 0.5
"""A plant that stops charging this share of capacity away from full by the balance was stopped by something else."""
LEAST_IDLE_H: Final = 12
MOST_CORRECTED: Final = 0.25
"""Hours at rest that a plant's efficiency is read from, and how far from 1 it may be read."""
LEAST_CYCLES: Final = 3
"""Times from full to full from which a loss, and the balance's own scatter, are read."""
LEAST_SPREAD: Final = 0.05
USUAL_SPREAD: Final = 0.10
"""Half width of a balance as a share of what went in and out: at least, and where too few cycles tell it (common
practice for plant meters and load forecasts, no source)."""
LONGEST_H: Final = 48.0
"""A balance says nothing longer after a certain full: its errors add up."""
UNUSED_DAYS: Final = 2.0
UNUSED_PLANNED: Final = 0.2
UNUSED_SHARE: Final = 0.1
"""Tanks whose plan would draw this share of their capacity a day and that gave no more than that share of it, over so
many days at least, are not in use."""

_FULL, _LEVEL, _CHILLER_FIRST, _STORAGE_FIRST = range(len(STRATEGIES))


@dataclass(frozen=True)
class Reckoned(Rows):
    """Tanks of N sites by energy balance; inventories are those of all tanks of a site together."""

    net_kw_th: Floats
    """(N, T) into the tanks less out of them; NaN where power or load is not known"""
    full: Bools
    """(N, T) certainly full at the interval's end"""
    level_kwh_th: Floats
    """(N, T) at the interval's end; NaN where nothing certain came within LONGEST_H before"""
    spread_kwh_th: Floats
    """(N, T) half width of that"""
    since: Ints
    """(N, T) interval of the last certain full, -1 where there is none within LONGEST_H"""
    unexplained_kw_th: Floats
    """(N,) what goes into the tanks from full to full and is neither drawn nor the stated loss; 0 for too few cycles"""
    unexplained_spread_kw_th: Floats
    """(N,) its standard error; NaN for fewer than LEAST_CYCLES cycles"""
    cycles: Ints
    """(N,) times from full to full"""
    efficiency: Floats
    """(N,) factor on the cooling that power implies, from hours in which the tanks rest; NaN for too few of them"""

    moved_kw_th: Floats
    """(N,) mean in and out over the cycles"""

    @property
    def leaks(self) -> Bools:
        """(N,) more goes in than comes out, by more than three standard errors and than USUAL_SPREAD of what goes in:
        meters and loads that are off by less would look alike."""
        known = np.nan_to_num(self.unexplained_spread_kw_th, nan=np.inf)
        least = np.maximum(3.0 * known, USUAL_SPREAD * self.moved_kw_th / 2.0)
        return np.asarray(self.unexplained_kw_th > least)


@dataclass(frozen=True)
class _Flat(Rows):
    """Machines of every site and interval as rows (N x T)."""

    direct_kw_th: Floats
    direct_kw: Floats
    ice_kw_th: Floats
    ice_kw: Floats
    kind: Ints
    aux_kw: Floats
    stage_up: Floats
    shared_kw: Floats
    pump_kw: Floats
    ice_site: Bools


def _flat(roster: Roster, here: Conditions) -> _Flat:
    sites, machines, count = here.direct_kw_th.shape
    chillers, buildings = roster.chillers, roster.buildings

    def rows(values: Floats) -> Floats:
        return np.moveaxis(values, 1, 2).reshape(sites * count, machines)

    def each(values: Floats) -> Floats:
        return np.repeat(values, count, axis=0)

    makes_ice = chillers.makes_ice[:, :, None]
    return _Flat(
        rows(here.direct_kw_th), rows(here.direct_full_kw), rows(here.ice_kw_th * makes_ice),
        rows(here.ice_full_kw * makes_ice), np.repeat(chillers.kind, count, axis=0), each(chillers.dedicated_aux_kw),
        each(buildings.stage_up_fraction), each(buildings.shared_aux_kw), each(buildings.tank_pump_kw),
        np.repeat(here.ice_site, count),
    )  # fmt: skip


def _drawn_kw(plant: _Flat, load: Floats, net: Floats) -> Floats:
    """Plant power (row,) at a load while tanks take `net` (negative: give): dispatch.py's sharing, ice made
    as making.py makes it."""
    ice = plant.ice_site & (net > 0.0)
    into_ice, cap_ice = np.where(ice, net, 0.0), np.where(ice[:, None], plant.ice_kw_th, 0.0)
    cap = np.where(cap_ice > 0.0, 0.0, plant.direct_kw_th)
    wanted = np.maximum(load + np.where(ice, 0.0, net), 0.0)
    direct = np.minimum(wanted, total(cap))
    frozen = np.minimum(np.where(ice, wanted - direct, 0.0) + into_ice, total(cap_ice))
    warm_load = staged_load_kw_th(direct, cap, plant.stage_up)
    ice_load = staged_load_kw_th(frozen, cap_ice, plant.stage_up)
    machines = np.where(
        cap_ice > 0.0,
        plant_power_kw(ice_load, cap_ice, plant.ice_kw, plant.kind, plant.aux_kw),
        plant_power_kw(warm_load, cap, plant.direct_kw, plant.kind, plant.aux_kw),
    )
    works = (direct + frozen + np.abs(net)) > 0.0
    return np.asarray(
        total(machines) + np.where(works, plant.shared_kw, 0.0) + np.where(net != 0.0, plant.pump_kw, 0.0)
    )


def _halved(
    plant: _Flat, power: Floats, low: Floats, high: Floats, *, load: Floats | None, net: Floats | None
) -> Floats:
    """The load (where `net` is given) or net charge (where `load` is) from low to high that draws `power` (row,)."""
    for _ in range(HALVINGS):
        middle = 0.5 * (low + high)
        drawn = _drawn_kw(plant, middle if load is None else load, middle if net is None else net)
        enough = drawn >= power
        low, high = np.where(enough, low, middle), np.where(enough, middle, high)
    return 0.5 * (low + high)


def load_kw_th(roster: Roster, here: Conditions, power_kw: Floats, net_kw_th: Floats) -> Floats:
    """Cooling load (N, T) of plants whose tanks take `net_kw_th` (negative: give) while the plant draws `power_kw`.

    load = chillers less charge, plus discharge; NaN where either is not known.
    """
    plant, net = _flat(roster, here), np.nan_to_num(net_kw_th).ravel()
    given = np.maximum(-net, 0.0)
    high = total(plant.direct_kw_th) + given - np.where(plant.ice_site, 0.0, np.maximum(net, 0.0))
    power = np.nan_to_num(power_kw).ravel()
    least = _drawn_kw(plant, given, net)
    found = _halved(plant, power, given, np.maximum(high, given), load=None, net=net)
    found = np.where(power <= least, given, found).reshape(power_kw.shape)
    return np.where(np.isfinite(power_kw) & np.isfinite(net_kw_th), found, np.nan)


@dataclass(frozen=True)
class _Seen:
    """What power says beside the load's own, rows (N x T)."""

    power: Floats
    load: Floats
    rises: Bools
    """the tanks are charged"""
    falls: Bools
    """the tanks give"""


def _seen(
    plant: _Flat,
    planned: tuple[Bools, Bools],
    power_kw: Floats,
    load_kw_th: Floats,
    efficiency: Floats | None,
) -> _Seen:
    """Power near the load's own says that the tanks rest: within IDLE_SHARE in hours in which the strategy charges or
    draws, within UNPLANNED_SHARE in others. Compressor power is multiplied by `efficiency` (N,)."""
    load, power = np.nan_to_num(load_kw_th).ravel(), np.nan_to_num(power_kw).ravel()
    if efficiency is not None:
        better = np.repeat(np.nan_to_num(efficiency, nan=1.0), power_kw.shape[1])
        aside = np.where(load > 0.0, plant.shared_kw, 0.0)
        power = aside + (power - aside) * better
    known = (np.isfinite(power_kw) & np.isfinite(load_kw_th)).ravel()
    alone = _drawn_kw(plant, load, np.zeros_like(load))
    up, down = (np.where(mask.ravel(), IDLE_SHARE, UNPLANNED_SHARE) for mask in planned)
    rises = known & (power > alone + up * np.maximum(alone, 0.02 * total(plant.direct_kw)))
    falls = known & ((power < alone - down * alone) | (load > total(plant.direct_kw_th)))
    return _Seen(power, load, rises & ~falls, falls)


def net_charge_kw_th(
    roster: Roster, here: Conditions, power_kw: Floats, load_kw_th: Floats, efficiency: Floats | None = None
) -> Floats:
    """What goes into the tanks of every plant less what comes out (N, T), from its power and its load; NaN = not known.

    The net charge at which the plant would draw what it did; 0 where its power is near the load's own. `efficiency`
    (N,): factor on the cooling that power implies.
    """
    plant = _flat(roster, here)
    seen = _seen(plant, _planned(roster, here, load_kw_th), power_kw, load_kw_th, efficiency)
    net = np.zeros(load_kw_th.size)
    for mask, charges in ((seen.rises, True), (seen.falls, False)):
        part, load, power = plant.take(np.flatnonzero(mask)), seen.load[mask], seen.power[mask]
        able, none = total(part.direct_kw_th), np.zeros_like(load)
        if charges:
            warm = total(np.where(part.ice_kw_th > 0.0, 0.0, part.direct_kw_th))
            on_ice = np.where(part.ice_site, np.maximum(load - warm, 0.0), load)
            room = np.maximum(np.where(part.ice_site, total(part.ice_kw_th), able) - on_ice, 0.0)
            net[mask] = _halved(part, power, none, room, load=load, net=None)
        else:
            # Machines at their most draw the same whatever the load above it.
            net[mask] = np.minimum(_halved(part, power, -load, none, load=load, net=None), able - load)
    known = np.isfinite(power_kw) & np.isfinite(load_kw_th)
    return np.where(known, net.reshape(load_kw_th.shape), np.nan)


def _planned(roster: Roster, here: Conditions, load: Floats) -> tuple[Bools, Bools]:
    """Intervals (N, T) in which the strategy may charge, and in which it may draw."""
    strategy = roster.buildings.strategy[:, None]
    level = strategy == _LEVEL
    rate = here.level_kw_th[:, None]
    charges = np.where(level, (load < rate) | here.charge_hours, here.charge_hours)
    short = load > 0.9 * here.direct_kw_th.sum(axis=1)
    peak = here.on_peak & ((strategy == _FULL) | (strategy == _STORAGE_FIRST))
    return np.asarray(charges, dtype=np.bool_), np.asarray(
        short | peak | (level & (load > rate)), dtype=np.bool_
    )


def _efficiency(roster: Roster, here: Conditions, power_kw: Floats, load: Floats) -> Floats:
    """(N,) the load's own compressor power over what is metered, over the hours in which the tanks rest, planned
    so, and the plant works; NaN where there are too few of them."""
    plant, planned = _flat(roster, here), _planned(roster, here, load)
    seen = _seen(plant, planned, power_kw, load, None)
    alone = _drawn_kw(plant, seen.load, np.zeros_like(seen.load)).reshape(load.shape)
    shared = roster.buildings.shared_aux_kw[:, None]
    rests = ~(seen.rises | seen.falls).reshape(load.shape) & ~planned[0] & ~planned[1]
    works = rests & (load > 0.1 * here.direct_kw_th.sum(axis=1)) & (power_kw > shared)
    model, meter = (np.where(works, values - shared, 0.0).sum(axis=1) for values in (alone, power_kw))
    enough = (works.sum(axis=1) * here.step_h >= LEAST_IDLE_H) & (meter > 0.0)
    factor = np.divide(model, meter, out=np.full(len(model), np.nan), where=enough)
    return np.where(np.abs(factor - 1.0) <= MOST_CORRECTED, factor, np.nan)


def _fulls(roster: Roster, here: Conditions, net: Floats, load: Floats, capacity: Floats) -> Bools:
    """(N, T) intervals at whose end a plant that was filling its tanks has stopped before its time to was over."""
    level = (roster.buildings.strategy == _LEVEL)[:, None]
    could = np.where(level, load < 0.85 * here.level_kw_th[:, None], here.charge_hours)
    idle = could & (net == 0.0)
    filling = net * here.step_h > CHARGED_FRACTION * here.step_h * capacity[:, None]
    lately = filling.copy()
    for back in range(1, max(round(2.0 / here.step_h), 1)):
        lately[:, back:] |= filling[:, :-back]
    ends = np.zeros(net.shape, dtype=np.bool_)
    ends[:, :-1] = (net[:, :-1] > 0.0) & lately[:, :-1] & idle[:, 1:]
    return ends


def unused(roster: Roster, here: Conditions, load_kw_th: Floats, net_kw_th: Floats) -> Bools:
    """(N,) sites whose strategy would have drawn on their tanks, and which hardly did: UNUSED_SHARE of it at most.

    What a strategy draws on known hours (N, T), before any limit but the capacity's once a day: on peak all load (full
    storage) or all there is (storage priority), load above the flat rate, or load above what the machines can.
    """
    known = np.isfinite(net_kw_th) & np.isfinite(load_kw_th)
    load = np.where(known, load_kw_th, 0.0)
    strategy, peak = roster.buildings.strategy[:, None], here.on_peak & known
    by_plan = np.select(
        [(strategy == _FULL) | (strategy == _STORAGE_FIRST), strategy == _LEVEL],
        [np.where(peak, load, 0.0), np.maximum(load - here.level_kw_th[:, None], 0.0)],
        default=np.maximum(load - here.direct_kw_th.sum(axis=1), 0.0),
    )
    days = known.sum(axis=1) * here.step_h / 24.0
    capacity = np.where(roster.tanks.exists, roster.tanks.capacity_kwh_th, 0.0).sum(axis=1)
    planned = np.minimum(by_plan.sum(axis=1) * here.step_h, capacity * days)
    seen = np.where(known, np.abs(np.nan_to_num(net_kw_th)), 0.0).sum(axis=1) * here.step_h / 2.0
    much = (days >= UNUSED_DAYS) & (planned > UNUSED_PLANNED * capacity * days)
    return np.asarray(much & (seen <= UNUSED_SHARE * planned), dtype=np.bool_)


def reckon(roster: Roster, here: Conditions, power_kw: Floats, load_kw_th: Floats) -> Reckoned:
    """Levels of every site's tanks since their last certain full, from plant power and load (N, T), NaN = not known.

    E = E_full + sum (net - stated loss - unexplained) dt; unexplained is what such sums leave over from full to full.
    A gap in power or load ends what is known until the next certain full.
    """
    capacity = np.where(roster.tanks.exists, roster.tanks.capacity_kwh_th, 0.0).sum(axis=1)
    efficiency = _efficiency(roster, here, power_kw, load_kw_th)
    net = net_charge_kw_th(roster, here, power_kw, load_kw_th, efficiency)
    ends = _fulls(roster, here, net, load_kw_th, capacity)
    run = _run(roster, here, net, ends, capacity)
    cycles, hours = run.closed_count, np.maximum(run.closed_hours, 1e-9)
    enough = cycles >= LEAST_CYCLES
    unexplained = np.where(enough, run.closed_kwh_th / hours, 0.0)
    scatter = np.sqrt(
        np.maximum(
            run.closed_squares / np.maximum(cycles, 1) - (run.closed_kwh_th / np.maximum(cycles, 1)) ** 2, 0.0
        )
    )
    error = scatter * np.sqrt(np.maximum(cycles, 1)) / hours * np.sqrt(cycles / np.maximum(cycles - 1, 1))
    through = run.closed_through / np.maximum(cycles, 1)
    share = np.clip(
        np.divide(scatter, through, out=np.ones_like(through), where=through > 0.0), LEAST_SPREAD, 1.0
    )
    share = np.where(enough, share, USUAL_SPREAD)
    level = FULL_FRACTION * capacity[:, None] + run.sums - unexplained[:, None] * run.hours
    known = (run.since >= 0) & (run.hours <= LONGEST_H)
    error = np.where(enough, error, 0.0)
    spread = np.hypot(FULL_SPREAD_FRACTION * capacity[:, None], share[:, None] * run.through)
    spread += 2.0 * error[:, None] * run.hours
    return Reckoned(
        net_kw_th=net,
        full=run.full,
        level_kwh_th=np.where(known, np.clip(level, 0.0, capacity[:, None]), np.nan),
        spread_kwh_th=np.where(known, spread, np.nan),
        since=np.where(known, run.since, -1),
        unexplained_kw_th=unexplained,
        unexplained_spread_kw_th=np.where(enough, error, np.nan),
        cycles=cycles,
        efficiency=efficiency,
        moved_kw_th=run.closed_through / hours,
    )


@dataclass(frozen=True)
class _Run:
    """Sums since the last certain full, (N, T), and sums over closed cycles, (N,)."""

    full: Bools
    since: Ints
    sums: Floats
    """(N, T) net less stated loss, kWh_th"""
    through: Floats
    """(N, T) in and out, kWh_th"""
    hours: Floats
    closed_count: Ints
    closed_kwh_th: Floats
    closed_squares: Floats
    closed_through: Floats
    closed_hours: Floats


def _run(roster: Roster, here: Conditions, net: Floats, ends: Bools, capacity: Floats) -> _Run:
    count, length = net.shape
    step, tanks = here.step_h, roster.tanks
    stated = tanks.capacity_kwh_th * tanks.loss_fraction_per_h * tanks.exists
    freezing = kind_is(tanks.kind, TANK_KINDS, FREEZING_KINDS)
    constant, by_level = (np.where(mask, stated, 0.0).sum(axis=1) for mask in (freezing, ~freezing))
    now, now_through, now_hours = np.zeros(count), np.zeros(count), np.zeros(count)
    since = np.full(count, -1, dtype=np.int64)
    kept = [np.zeros((count, length)) for _ in range(3)]
    sinces, full = np.full((count, length), -1, dtype=np.int64), np.zeros((count, length), dtype=np.bool_)
    closed = [np.zeros(count) for _ in range(4)]
    cycles = np.zeros(count, dtype=np.int64)
    for t in range(length):
        known = np.isfinite(net[:, t])
        rate = np.where(known, net[:, t], 0.0)
        share = np.clip(FULL_FRACTION + now / np.maximum(capacity, 1e-9), 0.0, 1.0)
        now = now + (rate - constant - by_level * share) * step
        now_through, now_hours = now_through + np.abs(rate) * step, now_hours + step
        since = np.where(known, since, -1)
        had = since >= 0
        sure = ends[:, t] & (~had | (np.abs(now) <= NOT_FULL_FRACTION * capacity))
        shut = sure & had
        for place, value in enumerate((now, now * now, now_through, now_hours)):
            closed[place] += np.where(shut, value, 0.0)
        cycles += shut
        since = np.where(sure, t, since)
        now, now_through, now_hours = (np.where(sure, 0.0, value) for value in (now, now_through, now_hours))
        for place, value in enumerate((now, now_through, now_hours)):
            kept[place][:, t] = value
        sinces[:, t], full[:, t] = since, sure
    return _Run(full, sinces, kept[0], kept[1], kept[2], cycles, closed[0], closed[1], closed[2], closed[3])
