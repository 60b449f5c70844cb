"""What a fleet folder does not say: how each real plant differs from its nameplate, and how its operator acts.

Draws the hidden parameters, and turns the folder's own tables (with the defaults that the table of columns
states) into the finer plant's arrays. Axes: site N, machine M, tank K.
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import pandas as pd

from demo_fleet import store
from demo_fleet.buildings import KINDS
from demo_fleet.plant import STRATEGIES, Plant
from sites.units import KW_TH_PER_TON, Bools, Floats, Ints, Strings

SITE_DEFAULTS: Final[dict[str, Any]] = {
    "building_type": "office",
    "strategy": "chiller_priority",
    "layout": "parallel",
    "held_back_kwh_th": 0.0,
    "peak_from_hour": 12.0,
    "peak_to_hour": 18.0,
    "charge_from_hour": 22.0,
    "charge_to_hour": 6.0,
    "occupied_from_hour": 7.0,
    "occupied_to_hour": 19.0,
    "occupied_all_week": False,
    "stage_up_fraction": 0.9,
    "supply_c": 5.0,
    "return_c": 12.0,
    "charge_brine_c": -5.0,
    "station_id": "",
    "node_id": "",
    "tariff_id": "",
}
PER_M2: Final = {
    "air_kwh_per_k": 0.006,
    "mass_kwh_per_k": 0.020,
    "coupling_kw_per_k": 0.009,
    "envelope_kw_per_k": 0.001,
}
PER_PEAK_KW_TH: Final = {"shared_aux_kw": 0.015, "tank_pump_kw": 0.008}
PEAK_KW_TH_PER_M2: Final = 0.1
RATED_COP: Final = {"air_cooled_screw": 2.960, "water_cooled_centrifugal": 6.280}
DEDICATED_PER_KW_TH: Final = {"air_cooled_screw": 0.0, "water_cooled_centrifugal": 0.033}
CHILLER_DEFAULTS: Final[dict[str, Any]] = {
    "ice_capacity_slope_per_k": 0.037,
    "ice_cop_slope_per_k": 0.028,
    "tower_approach_k": 4.0,
    "min_off_minutes": 10.0,
}
TANK_DEFAULTS: Final[dict[str, Any]] = {
    "loss_fraction_per_h": 0.0003,
    "discharge_limit_kw_th": np.inf,
    "charge_limit_kw_th": np.inf,
}
LATE_SHARE: Final = 0.25
"""Share of operators who act 5 to 15 minutes late."""


@dataclass(frozen=True)
class Made:
    """Sites as the finer plant's arrays, and the names that go with them."""

    sites: pd.DataFrame
    """the sites table with defaults filled"""
    plant: Plant
    chiller_id: Strings
    """(N, M), empty where there is none"""
    tank_id: Strings
    """(N, K)"""


def draw(site_ids: "pd.Series[Any]", seed: int) -> pd.DataFrame:
    """Hidden parameters, one row per site: factors on the nameplate, noise levels, and the operator's habits."""
    rng = np.random.default_rng([seed, 77])
    count = len(site_ids)
    late = np.where(rng.random(count) < LATE_SHARE, rng.integers(5, 16, count), 0)
    return pd.DataFrame(
        {
            "site_id": site_ids.to_numpy(),
            "eir_factor": rng.normal(1.0, 0.035, count).clip(0.9, 1.1),
            "ua_factor": rng.normal(0.98, 0.05, count).clip(0.85, 1.1),
            "load_factor": rng.normal(1.0, 0.02, count).clip(0.95, 1.05),
            "air_factor": rng.uniform(0.85, 1.2, count),
            "mass_factor": rng.uniform(0.8, 1.25, count),
            "coupling_factor": rng.uniform(0.8, 1.2, count),
            "noise_fraction": rng.uniform(0.015, 0.035, count),
            "late_minutes": late,
            "decline_rank": rng.permutation(count),
            "gap_rank": rng.permutation(count),
        }
    )


def filled_sites(sites: pd.DataFrame) -> pd.DataFrame:
    """The sites table with empty cells and missing columns at their defaults."""
    full = sites.copy()
    for name in ("floor_area_m2", "peak_cooling_kw_th"):
        full[name] = pd.to_numeric(full[name]) if name in full else np.nan
    full["floor_area_m2"] = full["floor_area_m2"].fillna(full["peak_cooling_kw_th"] / PEAK_KW_TH_PER_M2)
    full["peak_cooling_kw_th"] = full["peak_cooling_kw_th"].fillna(full["floor_area_m2"] * PEAK_KW_TH_PER_M2)
    for name, default in SITE_DEFAULTS.items():
        full[name] = _column(full, name, default)
    for name, factor in PER_M2.items():
        full[name] = _column(full, name, full["floor_area_m2"] * factor)
    for name, factor in PER_PEAK_KW_TH.items():
        full[name] = _column(full, name, full["peak_cooling_kw_th"] * factor)
    full["occupied_all_week"] = full["occupied_all_week"].astype(str).str.lower().isin(["true", "1", "yes"])
    full["building_type"] = full["building_type"].where(full["building_type"].isin(list(KINDS)), "other")
    return full.reset_index(drop=True)


def _column(frame: pd.DataFrame, name: str, default: Any) -> "pd.Series[Any]":
    if name not in frame:
        return pd.Series(default, index=frame.index)
    column = frame[name]
    empty = column.isna() | (column.astype(str).str.strip() == "")
    given = column.where(~empty)
    filler = (
        default if isinstance(default, pd.Series) else pd.Series([default] * len(frame), index=frame.index)
    )
    if isinstance(filler.iloc[0], (float, np.floating)):
        return pd.to_numeric(given).astype(np.float64).fillna(filler)
    return given.astype(object).where(~empty, filler)


def _sized(frame: pd.DataFrame, name: str, in_tons: str) -> "pd.Series[Any]":
    given = _column(frame, name, np.nan)
    return given.fillna(_column(frame, in_tons, np.nan) * KW_TH_PER_TON)


def _grid(frame: pd.DataFrame, index: "pd.Index[Any]", order: str) -> tuple[Ints, Ints, int]:
    """Site and slot of each row, and the number of slots."""
    site = index.get_indexer(pd.Index(frame["site_id"]))
    ranked = pd.DataFrame({"site": site, "order": pd.to_numeric(frame[order])}).sort_values(
        ["site", "order"], kind="stable"
    )
    slot = ranked.groupby("site").cumcount().reindex(frame.index).to_numpy()
    return site.astype(np.int64), slot.astype(np.int64), int(slot.max()) + 1 if len(frame) else 1


def made(
    sites: pd.DataFrame, chillers: pd.DataFrame, tanks: pd.DataFrame | None, hidden: pd.DataFrame
) -> Made:
    """The finer plant of every site from the folder's tables and the hidden parameters (rows by site_id)."""
    full = filled_sites(sites)
    index = pd.Index(full["site_id"])
    secret = hidden.set_index("site_id").reindex(index)
    machines, chiller_id = _machines(chillers, full, index, secret["eir_factor"].to_numpy(dtype=np.float64))
    vessels, tank_id = _vessels(tanks, index)
    ice = ((vessels["tank_kind"] < 2) & (vessels["tank_kwh_th"] > 0.0)).any(axis=1)
    machines["makes_ice"] = machines["makes_ice"] & ice[:, None]

    def site(name: str) -> Floats:
        return full[name].to_numpy(dtype=np.float64)

    def factor(name: str) -> Floats:
        return secret[name].to_numpy(dtype=np.float64)

    plant = Plant(
        **machines, **vessels,
        ua_factor=factor("ua_factor"),
        strategy=np.array([STRATEGIES.index(name) for name in full["strategy"]], dtype=np.int64),
        series=(full["layout"] == "series").to_numpy(dtype=np.bool_),
        supply_c=site("supply_c"), return_c=site("return_c"), brine_c=site("charge_brine_c"),
        peak_from_hour=site("peak_from_hour"), peak_to_hour=site("peak_to_hour"),
        charge_from_hour=site("charge_from_hour"), charge_to_hour=site("charge_to_hour"),
        stage_up=site("stage_up_fraction"), design_kw_th=site("peak_cooling_kw_th"),
        held_back_kwh_th=site("held_back_kwh_th"),
        shared_aux_kw=site("shared_aux_kw"), tank_pump_kw=site("tank_pump_kw"),
        air_kwh_per_k=site("air_kwh_per_k") * factor("air_factor"),
        mass_kwh_per_k=site("mass_kwh_per_k") * factor("mass_factor"),
        coupling_kw_per_k=site("coupling_kw_per_k") * factor("coupling_factor"),
        envelope_kw_per_k=site("envelope_kw_per_k"),
    )  # fmt: skip
    return Made(full, plant, chiller_id, tank_id)


def _machines(
    chillers: pd.DataFrame, sites: pd.DataFrame, index: "pd.Index[Any]", eir_factor: Floats
) -> tuple[dict[str, Any], Strings]:
    """Machine fields of Plant, (N, M), and their names."""
    frame = chillers.reset_index(drop=True)
    frame["loading_order"] = _column(frame, "loading_order", pd.Series(np.arange(len(frame), dtype=float)))
    site, slot, count = _grid(frame, index, "loading_order")
    air = (frame["kind"] == "air_cooled_screw").to_numpy()
    capacity = _sized(frame, "capacity_kw_th", "capacity_ton")
    cop = _column(frame, "rated_cop", frame["kind"].map(RATED_COP).astype(np.float64))
    dedicated = _column(frame, "dedicated_aux_kw", capacity * frame["kind"].map(DEDICATED_PER_KW_TH))
    ice = _column(frame, "makes_ice", True).astype(str).str.lower().isin(["true", "1", "yes"]).to_numpy()

    def spread(values: Any, empty: Any) -> Any:
        values = np.asarray(values)
        grid = np.full((len(sites), count), empty, dtype=values.dtype)
        grid[site, slot] = values
        return grid

    fields = {
        "capacity_kw_th": spread(capacity.to_numpy(dtype=np.float64), 0.0),
        "eir": spread(1.0 / cop.to_numpy(dtype=np.float64), 0.0) * eir_factor[:, None],
        "air_cooled": spread(air, True),
        "makes_ice": spread(ice, False),
        "approach_k": spread(_column(frame, "tower_approach_k", 4.0).to_numpy(dtype=np.float64), 4.0),
        "dedicated_kw": spread(dedicated.to_numpy(dtype=np.float64), 0.0),
        "machine_up": spread(np.ones(len(frame), dtype=np.bool_), False),
    }
    for name in ("ice_capacity_slope_per_k", "ice_cop_slope_per_k", "min_off_minutes"):
        fields[name] = spread(_column(frame, name, CHILLER_DEFAULTS[name]).to_numpy(dtype=np.float64), 0.0)
    return fields, spread(frame["chiller_id"].to_numpy(dtype=object), "")


def _vessels(tanks: pd.DataFrame | None, index: "pd.Index[Any]") -> tuple[dict[str, Any], Strings]:
    """Tank fields of Plant, (N, K), and their names."""
    count = len(index)
    if tanks is None or tanks.empty:
        none = np.zeros((count, 1))
        fields: dict[str, Any] = {
            "tank_kind": none.astype(np.int64),
            "tank_kwh_th": none,
            "tank_up": none > 0.0,
        }
        fields |= {name: none + (np.inf if "limit" in name else 0.0) for name in TANK_DEFAULTS}
        return fields, np.full((count, 1), "", dtype=object)
    frame = tanks.reset_index(drop=True)
    frame["row"] = np.arange(len(frame))
    site, slot, slots = _grid(frame, index, "row")
    grid = np.zeros((count, slots))
    capacity = grid.copy()
    capacity[site, slot] = _sized(frame, "capacity_kwh_th", "capacity_ton_h").to_numpy(dtype=np.float64)
    kind = grid.astype(np.int64)
    kind[site, slot] = [store.KINDS.index(name) for name in frame["kind"]]
    names = np.full((count, slots), "", dtype=object)
    names[site, slot] = frame["tank_id"].to_numpy(dtype=object)
    fields = {"tank_kind": kind, "tank_kwh_th": capacity, "tank_up": capacity > 0.0}
    for name, default in TANK_DEFAULTS.items():
        values = np.full((count, slots), np.inf if "limit" in name else 0.0)
        values[site, slot] = _column(frame, name, default).to_numpy(dtype=np.float64)
        fields[name] = values
    return fields, names


def outages(made: Made, status: pd.DataFrame | None) -> tuple[Bools, Bools]:
    """Machines (N, M) and tanks (N, K) in service by the newest status row of each unit."""
    machine, tank = made.plant.machine_up.copy(), made.plant.tank_up.copy()
    if status is None or "available" not in status:
        return machine, tank
    newest = status.sort_values("time").groupby(["site_id", "unit_id"]).tail(1)
    out = newest[newest["available"].astype(str).str.lower().isin(["false", "0", "no"])]
    index = pd.Index(made.sites["site_id"])
    for site_id, unit in zip(out["site_id"], out["unit_id"]):
        row = int(index.get_loc(site_id))
        machine[row] &= made.chiller_id[row] != unit
        tank[row] &= made.tank_id[row] != unit
    return machine, tank
