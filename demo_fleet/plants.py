"""Invented plants: machines and tanks sized so that each serves its design day by its own strategy.

Owns the chillers and tanks tables and the plant side of the sites table. A candidate size is tried on the
design day by the finer model itself; tanks get a tenth more than just enough, machines grow until the tank is
full again by the end of its charging hours. Axes: site N.
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import pandas as pd

from demo_fleet import truth
from demo_fleet.buildings import design_day
from demo_fleet.calendar import within
from demo_fleet.plant import STRATEGIES, Plant, rested
from demo_fleet.store import KINDS
from sites.units import KW_TH_PER_TON, Floats

AIR: Final = "air_cooled_screw"
MARGIN: Final = 1.11
LEAST_TANK_H: Final = 1.1
"""Smallest tank tried, in hours of the peak load."""
LEAST_MIDDAY_TANK_H: Final = 2.0
TANK_STEPS: Final = 19
MACHINE_STEPS: Final = 12
DESIGN_WET_BULB_C: Final = 23.5
SHARE: Final = {
    "full_storage": 0.70,
    "load_levelling": 0.62,
    "chiller_priority": 0.72,
    "storage_priority": 0.66,
}
"""First guess of rated machine capacity over peak load; grown where recharge needs it."""


@dataclass(frozen=True)
class Sized:
    """What sizing found, each (N,)."""

    machines_kw_th: Floats
    tanks_kwh_th: Floats
    worst_unmet_fraction: Floats
    """largest unmet load of the design day over its peak"""
    refilled_fraction: Floats
    """inventory at the end of the charging hours over capacity, after the design day"""


def habits(plan: pd.DataFrame) -> pd.DataFrame:
    """Strategy, layout, temperatures and hours of the plant, one row per row of `plan`."""
    midday = (plan["charging"] == "midday").to_numpy()
    water = (plan["tank_kind"] == "chilled_water").to_numpy()
    full = (plan["strategy"] == "full_storage").to_numpy()
    return pd.DataFrame(
        {
            "strategy": plan["strategy"],
            "layout": plan["layout"],
            "peak_from_hour": np.where(midday, 17.0, np.where(full, 14.0, 12.0)),
            "peak_to_hour": np.where(midday, 22.0, 20.0),
            "charge_from_hour": np.where(midday, 10.0, 22.0),
            "charge_to_hour": np.where(midday, 16.0, 7.0),
            "supply_c": np.where(water, 5.5, 5.0),
            "return_c": np.where(water, 13.0, 12.0),
            "charge_brine_c": -5.5,
        }
    )


def single(sites: pd.DataFrame, plan: pd.DataFrame, machines_kw_th: Floats, tanks_kwh_th: Floats) -> Plant:
    """Each site as one machine and one tank, for sizing."""
    count = len(sites)

    def column(values: Floats) -> Floats:
        return np.asarray(values, dtype=np.float64)[:, None]

    peak = sites["peak_cooling_kw_th"].to_numpy(dtype=np.float64)
    air = (plan["chiller_kind"] == AIR).to_numpy()[:, None]
    kind = np.array([KINDS.index(name) if name else 0 for name in plan["tank_kind"]])[:, None]
    yes, no = np.ones((count, 1), dtype=np.bool_), np.full((count, 1), np.inf)
    fields = {name: sites[name].to_numpy(dtype=np.float64) for name in _HOURS}
    return Plant(
        capacity_kw_th=column(machines_kw_th), eir=np.where(air, 1 / 3.1, 1 / 5.8), air_cooled=air, makes_ice=yes,
        ice_capacity_slope_per_k=np.full((count, 1), 0.037), ice_cop_slope_per_k=np.full((count, 1), 0.028),
        approach_k=np.full((count, 1), 4.0), dedicated_kw=column(np.zeros(count)),
        min_off_minutes=column(np.zeros(count)), machine_up=yes, tank_kind=kind, tank_kwh_th=column(tanks_kwh_th),
        loss_fraction_per_h=np.full((count, 1), 3e-4), discharge_limit_kw_th=no, charge_limit_kw_th=no,
        tank_up=column(tanks_kwh_th) > 0.0, ua_factor=np.full(count, 0.95),
        strategy=np.array([STRATEGIES.index(name) for name in plan["strategy"]]),
        series=(sites["layout"] == "series").to_numpy(), supply_c=sites["supply_c"].to_numpy(dtype=np.float64),
        return_c=sites["return_c"].to_numpy(dtype=np.float64), brine_c=np.full(count, -5.5), **fields,
        stage_up=np.full(count, 0.9), design_kw_th=peak, held_back_kwh_th=np.zeros(count),
        shared_aux_kw=np.zeros(count), tank_pump_kw=np.zeros(count), air_kwh_per_k=np.full(count, 1e9),
        mass_kwh_per_k=np.full(count, 1.0), coupling_kw_per_k=np.zeros(count), envelope_kw_per_k=np.zeros(count),
    )  # fmt: skip


_HOURS: Final = ("peak_from_hour", "peak_to_hour", "charge_from_hour", "charge_to_hour")


def try_design_day(sites: pd.DataFrame, plant: Plant, load_kw_th: Floats) -> tuple[Floats, Floats]:
    """Worst unmet load over peak, and inventory over capacity at the end of the charging hours, each (N,).

    For full storage what machines must carry on peak counts as unmet, too. Starts full when the charging
    hours end and runs 24 h from there.
    """
    local, dry, _ = design_day(sites)
    start = np.round(plant.charge_to_hour * 4.0).astype(np.int64)
    order = (start[:, None] + np.arange(96)[None, :]) % 96
    loss = (plant.tank_kwh_th * plant.loss_fraction_per_h).sum(axis=1)
    drive = truth.Drive(
        hour=local.hour[order],
        load_kw_th=np.take_along_axis(load_kw_th, order, axis=1),
        dry_bulb_c=dry[order],
        wet_bulb_c=np.full(order.shape, DESIGN_WET_BULB_C) - 0.15 * (dry.max() - dry[order]),
        level_kw_th=np.tile((load_kw_th.mean(axis=1) + loss)[:, None], (1, 96)),
    )
    _, kept = truth.run(plant, drive, rested(plant), 15)
    held = np.maximum(plant.held_kwh_th, 1e-9)
    filled = np.where(plant.held_kwh_th > 0.0, kept["inventory"][:, -1] / held, 1.0)
    on_peak = within(drive.hour, plant.peak_from_hour[:, None], plant.peak_to_hour[:, None])
    never = on_peak & (plant.strategy == STRATEGIES.index("full_storage"))[:, None]
    lacking = kept["unmet"] + np.where(never, kept["direct"], 0.0)
    return lacking.max(axis=1) / plant.design_kw_th, filled


def size(sites: pd.DataFrame, plan: pd.DataFrame, rng: np.random.Generator) -> Sized:
    """Sizes of all sites from a grid of machine and tank sizes, each tried on the design day.

    The smallest machines for which some tank serves the day and is refilled; with them the smallest such tank
    that a tank one grid step (MARGIN) smaller would do for, too.
    """
    peak = sites["peak_cooling_kw_th"].to_numpy(dtype=np.float64)
    stored = (plan["tanks"] > 0).to_numpy()
    midday = (plan["charging"] == "midday").to_numpy()
    share = np.array([SHARE[name] for name in plan["strategy"]]) * rng.uniform(0.95, 1.05, len(sites))
    share = np.where(midday, 1.15, share)
    tank_h = LEAST_TANK_H * MARGIN ** np.arange(TANK_STEPS)
    machine = 1.05 ** np.arange(MACHINE_STEPS)
    blocks = [
        _try_grid(
            sites.iloc[i : i + 100],
            plan.iloc[i : i + 100],
            np.asarray(share[i : i + 100, None] * machine),
            np.asarray(tank_h),
        )
        for i in range(0, len(sites), 100)
    ]
    unmet, filled = (np.concatenate([block[part] for block in blocks]) for part in (0, 1))
    serves = unmet < 0.01
    good = serves & (filled > 0.97)
    good[:, :, 1:] &= serves[:, :, :-1]
    good[:, :, 0] = False
    good[midday] &= tank_h >= LEAST_MIDDAY_TANK_H
    row = np.arange(len(sites))
    chosen = np.argmax(good.any(axis=2), axis=1)
    tank = np.argmax(good[row, chosen], axis=1)
    return Sized(
        machines_kw_th=peak * np.where(stored, 1.03 * share * machine[chosen], 1.18),
        tanks_kwh_th=np.where(stored, peak * tank_h[tank], 0.0),
        worst_unmet_fraction=np.where(stored, unmet[row, chosen, tank], 0.0),
        refilled_fraction=np.where(stored, filled[row, chosen, tank], 1.0),
    )


def _try_grid(
    sites: pd.DataFrame, plan: pd.DataFrame, share: Floats, tank_h: Floats
) -> tuple[Floats, Floats]:
    """Worst unmet and refilled fraction, (N, machine size, tank size)."""
    shape = (len(sites), share.shape[1], len(tank_h))
    rows = np.repeat(np.arange(len(sites)), shape[1] * shape[2])
    peak = sites["peak_cooling_kw_th"].to_numpy(dtype=np.float64)[rows]
    each, every = sites.iloc[rows].reset_index(drop=True), plan.iloc[rows].reset_index(drop=True)
    plant = single(
        each, every, peak * np.repeat(share.ravel(), shape[2]), peak * np.tile(tank_h, shape[0] * shape[1])
    )
    _, _, load = design_day(sites)
    unmet, filled = try_design_day(sites, plant, load[rows])
    return unmet.reshape(shape), filled.reshape(shape)


def chillers(sites: pd.DataFrame, plan: pd.DataFrame, sized: Sized, rng: np.random.Generator) -> pd.DataFrame:
    """The chillers table; a few sites give tons, some leave what can be assumed empty."""
    rows = np.repeat(np.arange(len(plan)), plan["chillers"])
    number = pd.Series(rows).groupby(rows).cumcount().to_numpy() + 1
    count = plan["chillers"].to_numpy()[rows]
    uneven = np.where((rows % 5 == 3) & (count == 2), np.where(number == 1, 1.2, 0.8), 1.0)
    capacity = np.round(sized.machines_kw_th[rows] / count * uneven, -1)
    air = (plan["chiller_kind"] == AIR).to_numpy()[rows]
    ice = plan["tank_kind"].str.startswith("ice").to_numpy()[rows]
    tons = rows % 8 == 4
    frame = pd.DataFrame(
        {
            "site_id": sites["site_id"].to_numpy()[rows],
            "chiller_id": "CH-" + pd.Series(number).astype(str),
            "kind": plan["chiller_kind"].to_numpy()[rows],
            "capacity_kw_th": np.where(tons, np.nan, capacity),
            "capacity_ton": np.where(tons, np.round(capacity / KW_TH_PER_TON), np.nan),
            "rated_cop": np.round(
                np.where(air, rng.uniform(2.95, 3.3, len(rows)), rng.uniform(5.4, 6.3, len(rows))), 2
            ),
            "loading_order": number,
            "makes_ice": ice,
            "min_off_minutes": np.where(air, 10, 15),
            "dedicated_aux_kw": np.round(np.where(air, 0.0, 0.033) * capacity, 1),
        }
    )
    frame.loc[rows % 11 == 7, "rated_cop"] = np.nan
    return frame


def tanks(sites: pd.DataFrame, plan: pd.DataFrame, sized: Sized) -> pd.DataFrame:
    """The tanks table."""
    rows = np.repeat(np.arange(len(plan)), plan["tanks"])
    number = pd.Series(rows).groupby(rows).cumcount().to_numpy() + 1
    capacity = np.round(sized.tanks_kwh_th[rows] / plan["tanks"].to_numpy()[rows], -1)
    tons = rows % 8 == 4
    kind: Any = plan["tank_kind"].to_numpy()[rows]
    return pd.DataFrame(
        {
            "site_id": sites["site_id"].to_numpy()[rows],
            "tank_id": "TK-" + pd.Series(number).astype(str),
            "kind": kind,
            "capacity_kwh_th": np.where(tons, np.nan, capacity),
            "capacity_ton_h": np.where(tons, np.round(capacity / KW_TH_PER_TON), np.nan),
            "loss_fraction_per_h": np.where(kind == "chilled_water", 0.0006, 0.0003),
        }
    )
