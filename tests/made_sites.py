"""Made-up sites for tests of the plant and its quotes: one per strategy, kind and layout, all invented."""

import numpy as np

from sites.clock import Clock
from sites.outlook import Outlook
from sites.roster import (
    CHILLER_KINDS,
    LAYOUTS,
    STRATEGIES,
    TANK_KINDS,
    Buildings,
    Chillers,
    Roster,
    Standing,
    Tanks,
)

SITES = (
    # strategy, layout, tank kinds, peak load kW_th, machines (kW_th), tank kWh_th, water-cooled, no unmet
    ("full_storage", "parallel", ("ice_internal_melt",), 500.0, (350.0, 350.0), 4000.0, True),
    ("chiller_priority", "series", ("ice_internal_melt",), 900.0, (300.0, 300.0), 2400.0, False),
    ("storage_priority", "parallel", ("ice_external_melt",), 800.0, (300.0, 300.0, 300.0), 2600.0, True),
    (
        "storage_priority",
        "series",
        ("ice_internal_melt", "ice_internal_melt"),
        800.0,
        (500.0, 400.0),
        2500.0,
        False,
    ),
    ("load_levelling", "parallel", ("chilled_water",), 700.0, (550.0,), 3500.0, True),
    ("chiller_priority", "parallel", (), 400.0, (250.0, 250.0), 0.0, False),
)


def made_roster(rows: tuple[int, ...] = tuple(range(len(SITES))), **changes: object) -> Roster:
    """Roster of the chosen rows of SITES; `changes` replace arrays of Buildings by a constant."""
    picked = [SITES[row] for row in rows]
    n, m, k = len(picked), 3, 2
    peak = np.array([site[3] for site in picked])
    area = peak * 10.0

    def full(value: float) -> np.ndarray:
        return np.full(n, float(changes.get(name_of[0], value)))  # type: ignore[arg-type]

    name_of = [""]

    def named(name: str, value: float) -> np.ndarray:
        name_of[0] = name
        return full(value)

    capacity = np.zeros((n, m))
    water = np.zeros((n, m), dtype=np.bool_)
    tank_kind = np.zeros((n, k), dtype=np.int64)
    tank_capacity = np.zeros((n, k))
    for row, site in enumerate(picked):
        capacity[row, : len(site[4])] = site[4]
        water[row] = site[6]
        for unit, kind in enumerate(site[2]):
            tank_kind[row, unit] = TANK_KINDS.index(kind)
            tank_capacity[row, unit] = site[5] / len(site[2])
    exists = capacity > 0.0
    kind = np.where(
        water, CHILLER_KINDS.index("water_cooled_centrifugal"), CHILLER_KINDS.index("air_cooled_screw")
    )
    ice = np.array([[any(name.startswith("ice") for name in site[2])] * m for site in picked])
    buildings = Buildings(
        site_id=np.array([f"S{row:02d}" for row in rows], dtype=object),
        node_id=np.array([""] * n, dtype=object),
        strategy=np.array([STRATEGIES.index(site[0]) for site in picked]),
        layout=np.array([LAYOUTS.index(site[1]) for site in picked]),
        critical_kw_th=named("critical_kw_th", 0.0),
        no_unmet=np.full(n, bool(changes.get("no_unmet", False))),
        held_back_kwh_th=named("held_back_kwh_th", 0.0),
        peak_cooling_kw_th=peak,
        floor_area_m2=area,
        supply_c=named("supply_c", 5.0),
        return_c=named("return_c", 13.0),
        charge_brine_c=named("charge_brine_c", -5.0),
        peak_from_hour=named("peak_from_hour", 12.0),
        peak_to_hour=named("peak_to_hour", 20.0),
        charge_from_hour=named("charge_from_hour", 22.0),
        charge_to_hour=named("charge_to_hour", 7.0),
        occupied_from_hour=named("occupied_from_hour", 7.0),
        occupied_to_hour=named("occupied_to_hour", 20.0),
        occupied_all_week=np.ones(n, dtype=np.bool_),
        stage_up_fraction=named("stage_up_fraction", 0.9),
        air_kwh_per_k=area * 0.006,
        mass_kwh_per_k=area * 0.020,
        coupling_kw_per_k=area * 0.009,
        envelope_kw_per_k=area * 0.001,
        rise_limit_k=named("rise_limit_k", 2.0),
        supply_cap_c=named("supply_cap_c", np.inf),
        shared_aux_kw=0.015 * peak * float(changes.get("aux", 1.0)),  # type: ignore[arg-type]
        tank_pump_kw=0.008 * peak * float(changes.get("aux", 1.0)),  # type: ignore[arg-type]
        notice_minutes=named("notice_minutes", 120.0),
        minimum_window_minutes=named("minimum_window_minutes", 60.0),
        restart_gap_minutes=named("restart_gap_minutes", 5.0),
        call_fee=named("call_fee", 10.0),
        comfort_payment_per_kwh_th=named("comfort_payment_per_kwh_th", 0.05),
        demand_price_per_kw=named("demand_price_per_kw", 5.0),
        delivery_factor=named("delivery_factor", 1.0),
    )
    chillers = Chillers(
        chiller_id=np.array([[f"CH{unit + 1}" for unit in range(m)]] * n, dtype=object),
        exists=exists,
        kind=kind,
        capacity_kw_th=capacity,
        rated_cop=np.where(water, 5.8, 3.1),
        makes_ice=exists & ice,
        ice_capacity_slope_per_k=np.full((n, m), 0.037),
        ice_cop_slope_per_k=np.full((n, m), 0.028),
        tower_approach_k=np.full((n, m), 4.0),
        dedicated_aux_kw=np.where(water, 0.033 * capacity, 0.0) * float(changes.get("aux", 1.0)),  # type: ignore[arg-type]
        min_on_minutes=np.full((n, m), 5.0),
        min_off_minutes=np.full((n, m), 10.0),
        start_to_start_minutes=np.full((n, m), 20.0),
        starts_left=np.full((n, m), np.inf),
    )
    tanks = Tanks(
        tank_id=np.array([[f"T{unit + 1}" for unit in range(k)]] * n, dtype=object),
        exists=tank_capacity > 0.0,
        kind=tank_kind,
        capacity_kwh_th=tank_capacity,
        loss_fraction_per_h=np.full((n, k), 3e-4),
        discharge_limit_kw_th=np.full((n, k), np.inf),
        charge_limit_kw_th=np.full((n, k), np.inf),
    )
    return Roster(buildings, chillers, tanks)


def made_outlook(
    roster: Roster, step_minutes: int = 15, hours: float = 35.0, start_hour: float = 13.0
) -> Outlook:
    """A hot day and the next from `start_hour`, loads peaking at 15:00, a flat evening, cheap nights."""
    count = round(hours * 60 / step_minutes)
    clock = Clock(
        np.datetime64("2026-07-15T00:00") + np.timedelta64(int(start_hour * 60), "m"), step_minutes, count
    )
    hour = (start_hour + np.arange(count) * step_minutes / 60.0) % 24.0
    day = 20649 + (start_hour + np.arange(count) * step_minutes / 60.0) // 24
    shape = 0.30 + 0.70 * np.exp(-(((hour - 15.0) / 4.0) ** 2))
    n = roster.count
    dry = 27.0 + 7.0 * np.cos((hour - 15.0) / 24.0 * 2 * np.pi)
    return Outlook(
        clock=clock,
        local_hour=hour,
        local_weekday=((day.astype(np.int64) + 3) % 7),
        local_day=day.astype(np.int64),
        holiday=np.zeros(count, dtype=np.bool_),
        dry_bulb_c=np.tile(dry, (n, 1)),
        wet_bulb_c=np.tile(dry - 9.0, (n, 1)),
        cooling_load_kw_th=roster.buildings.peak_cooling_kw_th[:, None] * shape[None, :],
        rest_kw=np.tile(0.08 * roster.buildings.peak_cooling_kw_th[:, None], (1, count)),
        price_per_kwh=np.tile(np.where((hour >= 22) | (hour < 7), 0.07, 0.19), (n, 1)),
        billed_peak_kw=0.42 * roster.buildings.peak_cooling_kw_th,
    )


def made_standing(roster: Roster, fraction: float = 0.9) -> Standing:
    """Every unit available, tanks at `fraction` of capacity, low and high 5 % of capacity apart from it."""
    capacity = roster.tanks.capacity_kwh_th
    return Standing(
        low_kwh_th=np.clip(fraction - 0.05, 0.0, 1.0) * capacity,
        best_kwh_th=fraction * capacity,
        high_kwh_th=np.clip(fraction + 0.05, 0.0, 1.0) * capacity,
        chiller_available=roster.chillers.exists.copy(),
        tank_available=roster.tanks.exists.copy(),
    )
