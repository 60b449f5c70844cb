"""Random sites and one quoted candidate of each, for the quote and for the minute-by-minute judge alike.

Weather and loads are smooth over minutes; the quote sees their means over each interval. All invented.
"""

from dataclasses import dataclass, replace

import numpy as np
from made_sites import made_outlook, made_roster
from reference import fine_plant

from sites import blocks
from sites.outlook import Outlook
from sites.quote import Quoted, detail, ground, quote
from sites.quotes import LIMITED_BY
from sites.roster import CHILLER_KINDS, LAYOUTS, STRATEGIES, TANK_KINDS, Roster, Standing

STEP = 15
HOURS = 24.0
JUDGED_MINUTES = 11 * 60
"""The event's end and three hours more."""
TANK_CAUSES = ("inventory", "discharge_rate", "held_back")


@dataclass(frozen=True)
class Cases:
    """R chosen candidates: the quote's ground and the same plants for the judge; `cause` names what limits each."""

    quoted: Quoted
    candidate: np.ndarray
    plants: fine_plant.Plants
    start_kwh_th: np.ndarray
    cause: np.ndarray


def random_roster(rng: np.random.Generator, count: int, bare: float) -> Roster:
    """`count` invented sites; the share `bare` of them has no tank."""
    base = made_roster(tuple([1] * count))
    buildings, chillers, tanks = base.buildings, base.chillers, base.tanks
    peak = rng.uniform(300.0, 3000.0, count)
    machines = rng.integers(1, 4, count)
    has_tank = rng.random(count) >= bare
    strategy = rng.choice(len(STRATEGIES), count, p=[0.1, 0.2, 0.35, 0.35])
    strategy = np.where(has_tank, strategy, STRATEGIES.index("chiller_priority"))
    share = rng.uniform(0.5, 1.15, count) * np.where(has_tank, 1.0, 1.2)
    exists = np.arange(3)[None, :] < machines[:, None]
    part = np.where(exists, rng.uniform(0.7, 1.3, (count, 3)), 0.0)
    capacity = (share * peak)[:, None] * part / part.sum(axis=1, keepdims=True)
    two = (rng.random(count) < 0.3) & has_tank
    tank_kind = rng.integers(0, len(TANK_KINDS), count)
    ice = np.array([name.startswith("ice") for name in TANK_KINDS])[tank_kind] & has_tank
    size = np.where(has_tank, peak * rng.uniform(0.8, 6.0, count), 0.0)
    tank_size = np.stack([np.where(two, 0.6, 1.0), np.where(two, 0.4, 0.0)], axis=1) * size[:, None]
    water = rng.random((count, 1)) < 0.5
    kind = np.broadcast_to(
        np.where(water, *(CHILLER_KINDS.index(k) for k in sorted(CHILLER_KINDS, reverse=True))), (count, 3)
    )
    area = peak * rng.uniform(7.0, 13.0, count)
    series = (rng.random(count) < 0.5) & ice
    supply = np.where(ice, rng.uniform(3.0, 6.0, count), rng.uniform(5.0, 7.0, count))
    buildings = replace(
        buildings,
        site_id=np.array([f"R{k:03d}" for k in range(count)], dtype=object),
        strategy=strategy,
        layout=np.where(series, LAYOUTS.index("series"), LAYOUTS.index("parallel")),
        peak_cooling_kw_th=peak,
        floor_area_m2=area,
        supply_c=supply,
        return_c=supply + rng.uniform(6.0, 10.0, count),
        charge_brine_c=rng.uniform(-6.5, -4.0, count),
        held_back_kwh_th=np.where(rng.random(count) < 0.2, 0.1 * size, 0.0),
        rise_limit_k=np.full(count, 2.5),
        stage_up_fraction=rng.uniform(0.7, 0.95, count),
        air_kwh_per_k=area * rng.uniform(0.004, 0.009, count),
        mass_kwh_per_k=area * rng.uniform(0.015, 0.04, count),
        coupling_kw_per_k=area * rng.uniform(0.006, 0.015, count),
        envelope_kw_per_k=area * rng.uniform(0.0005, 0.002, count),
        shared_aux_kw=0.015 * peak,
        tank_pump_kw=0.008 * peak,
    )
    chillers = replace(
        chillers,
        exists=exists,
        kind=np.array(kind),
        capacity_kw_th=capacity,
        rated_cop=np.where(water, rng.uniform(5.0, 6.5, (count, 1)), rng.uniform(2.8, 3.4, (count, 1)))
        * np.ones(3),
        makes_ice=exists & ice[:, None],
        dedicated_aux_kw=np.where(water, 0.033, 0.0) * capacity,
    )
    tanks = replace(
        tanks,
        exists=tank_size > 0.0,
        kind=np.repeat(tank_kind[:, None], 2, axis=1),
        capacity_kwh_th=tank_size,
        loss_fraction_per_h=np.where(tank_size > 0.0, rng.uniform(1e-4, 1e-3, (count, 1)), 0.0),
    )
    return Roster(buildings, chillers, tanks)


def smooth_minutes(rng: np.random.Generator, roster: Roster, start_hour: float) -> dict[str, np.ndarray]:
    """Load, dry and wet bulb by the minute (N, T): one hot day and the next, with a slow ripple of each site's own."""
    count = round(HOURS * 60)
    hour = start_hour + (np.arange(count) + 0.5) / 60.0
    n = roster.count
    top, width = rng.uniform(13.0, 17.0, (n, 1)), rng.uniform(3.0, 5.5, (n, 1))
    base, phase = rng.uniform(0.1, 0.4, (n, 1)), rng.uniform(0.0, 6.0, (n, 1))
    away = (hour[None, :] - top + 12.0) % 24.0 - 12.0
    ripple = 0.03 * np.sin(hour[None, :] * 2.3 + phase) + 0.02 * np.sin(hour[None, :] * 7.1 + 2.0 * phase)
    shape = base + (1.0 - base) * np.exp(-((away / width) ** 2)) + ripple
    dry = rng.uniform(24.0, 29.0, (n, 1)) + 7.0 * np.cos((hour[None, :] - 15.0) / 24.0 * 2.0 * np.pi)
    return {
        "load_kw_th": roster.buildings.peak_cooling_kw_th[:, None] * np.maximum(shape, 0.02),
        "dry_c": dry,
        "wet_c": dry - rng.uniform(6.0, 11.0, (n, 1)),
    }


def _means(minutes: np.ndarray) -> np.ndarray:
    return minutes.reshape(len(minutes), -1, STEP).mean(axis=2)


def _outlook(roster: Roster, minutes: dict[str, np.ndarray], start_hour: float) -> Outlook:
    return replace(
        made_outlook(roster, STEP, HOURS, start_hour),
        cooling_load_kw_th=_means(minutes["load_kw_th"]),
        dry_bulb_c=_means(minutes["dry_c"]),
        wet_bulb_c=_means(minutes["wet_c"]),
    )


def cases(seed: int, per_class: tuple[int, int, int]) -> Cases:
    """Quoted candidates of random sites, one a site: so many limited by tank, by comfort, and by neither."""
    rng = np.random.default_rng(seed)
    count = 6 * sum(per_class)
    start_hour = 11.0
    roster = random_roster(rng, count, bare=0.55)
    minutes = smooth_minutes(rng, roster, start_hour)
    outlook = _outlook(roster, minutes, start_hour)
    held = rng.uniform(0.35, 1.0, (count, 1)) * roster.tanks.capacity_kwh_th
    standing = Standing(held, held, held, roster.chillers.exists.copy(), roster.tanks.exists.copy())
    has_tank = roster.tanks.exists.any(axis=1)
    shortest = np.where(has_tank, rng.integers(4, 12, count), rng.integers(4, 8, count))
    terms = blocks.Terms(
        event_from=12,
        event_to=24,
        step_minutes=STEP,
        earliest=24 - shortest - rng.integers(0, 3, count),
        minimum_intervals=shortest,
        most_intervals=shortest,
        allowed=np.ones(count, dtype=np.bool_),
    )
    quoted = quote(ground(roster, outlook, standing), terms)
    quotes = quoted.quotes
    named = np.array(LIMITED_BY, dtype=object)[quotes.limited_by]
    group = np.select([np.isin(named, TANK_CAUSES), named == "comfort"], [0, 1], default=2)
    picked: list[int] = []
    taken: set[int] = set()
    for wanted, most in enumerate(per_class):
        found = 0
        for candidate in rng.permutation(np.flatnonzero(group == wanted)):
            site = int(quotes.site[candidate])
            if found < most and site not in taken:
                taken.add(site)
                picked.append(int(candidate))
                found += 1
    pick = np.array(sorted(picked))
    site = quotes.site[pick]
    return Cases(quoted, pick, _plants(quoted, minutes, site), held[site], named[pick])


def _plants(quoted: Quoted, minutes: dict[str, np.ndarray], site: np.ndarray) -> fine_plant.Plants:
    """The same sites in the judge's words."""
    base = quoted.ground
    buildings, chillers, tanks = (
        part.take(site) for part in (base.roster.buildings, base.roster.chillers, base.roster.tanks)
    )
    every = {
        name: np.repeat(getattr(base.here, name)[site], STEP, axis=1) for name in ("on_peak", "charge_hours")
    }
    day = minutes["load_kw_th"][site, : 24 * 60].mean(axis=1)
    loss = (tanks.capacity_kwh_th * tanks.loss_fraction_per_h).sum(axis=1)
    return fine_plant.Plants(
        strategy=np.array(STRATEGIES, dtype=object)[buildings.strategy],
        series=np.array(LAYOUTS, dtype=object)[buildings.layout] == "series",
        supply_c=buildings.supply_c,
        return_c=buildings.return_c,
        brine_c=buildings.charge_brine_c,
        held_back_kwh_th=buildings.held_back_kwh_th,
        stage_up=buildings.stage_up_fraction,
        shared_kw=buildings.shared_aux_kw,
        pump_kw=buildings.tank_pump_kw,
        air_kwh_per_k=buildings.air_kwh_per_k,
        mass_kwh_per_k=buildings.mass_kwh_per_k,
        coupling_kw_per_k=buildings.coupling_kw_per_k,
        envelope_kw_per_k=buildings.envelope_kw_per_k,
        level_kw_th=np.where(buildings.strategy == STRATEGIES.index("load_levelling"), day + loss, 0.0),
        machine_kind=np.array(CHILLER_KINDS, dtype=object)[chillers.kind],
        machine_kw_th=chillers.capacity_kw_th,
        machine_cop=chillers.rated_cop,
        makes_ice=chillers.makes_ice,
        ice_capacity_slope=chillers.ice_capacity_slope_per_k,
        ice_cop_slope=chillers.ice_cop_slope_per_k,
        approach_k=chillers.tower_approach_k,
        own_aux_kw=chillers.dedicated_aux_kw,
        tank_kind=np.array(TANK_KINDS, dtype=object)[tanks.kind],
        tank_kwh_th=tanks.capacity_kwh_th,
        loss_per_h=tanks.loss_fraction_per_h,
        tank_limit_kw_th=tanks.discharge_limit_kw_th,
        charge_limit_kw_th=tanks.charge_limit_kw_th,
        **{name: minutes[name][site] for name in ("load_kw_th", "dry_c", "wet_c")},
        **every,
    )


@dataclass(frozen=True)
class Compared:
    """Energies over each candidate's own window and the peak rise, quote beside judge, each (R,)."""

    shed_kwh: np.ndarray
    fine_shed_kwh: np.ndarray
    tank_kwh_th: np.ndarray
    fine_tank_kwh_th: np.ndarray
    rise_k: np.ndarray
    fine_rise_k: np.ndarray


def compare(given: Cases) -> Compared:
    """Run the judge's usual case and event case, and sum up both sides."""
    quotes, pick = given.quoted.quotes, given.candidate
    start, end = quotes.window_start[pick] * STEP, quotes.window_end[pick] * STEP
    limit = quotes.stages.load_limit_fraction[pick, 0]
    never = (np.full(len(pick), -1.0), np.full(len(pick), -1.0))
    plants = given.plants.until(JUDGED_MINUTES)
    usual = fine_plant.run(plants, given.start_kwh_th, never, limit, None)
    event = fine_plant.run(plants, given.start_kwh_th, (start, end), limit, usual)
    minute = np.arange(usual.power_kw.shape[1])[None, :]
    inside = (minute >= start[:, None]) & (minute < end[:, None])

    def energy(values: np.ndarray, mask: np.ndarray, step_h: float) -> np.ndarray:
        return (values * mask).sum(axis=1) * step_h

    course = detail(given.quoted, pick)
    coarse = np.zeros(quotes.change_kw[pick].shape)
    coarse[:, : JUDGED_MINUTES // STEP] = inside[:, ::STEP]
    return Compared(
        energy(-quotes.change_kw[pick], coarse, STEP / 60),
        energy(usual.power_kw - event.power_kw, inside, 1 / 60),
        energy(course.discharge_kw_th.sum(axis=1), coarse, STEP / 60),
        energy(event.discharge_kw_th, inside, 1 / 60),
        course.air_rise_k.max(axis=1),
        event.rise_k.max(axis=1),
    )
