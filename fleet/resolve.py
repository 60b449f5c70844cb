"""Sites, chillers and tanks with every default filled in, and the list of what was assumed.

Owns the meaning of an empty cell of these three tables: the default of the table of columns, a value worked out
from other columns, the fleet's own setting, or "none" (stays empty: limits). Frames stay in file order.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.building_types import USUAL_COLUMNS, usual
from fleet.schema import table
from fleet.settings import Settings
from sites.chiller import RATED_COP_MINIMUM
from sites.roster import ICE_KINDS
from sites.tank import water_at_return_kwh_th
from sites.units import KW_TH_PER_TON, AnyArray

COOLING_KW_TH_PER_M2: Final = 0.1
"""Peak cooling load per floor area where only one of the two is given (common practice, no source)."""
DEFAULT_ROOT: Final = "fleet"
CHILLED_WATER_HOURS: Final = 5.0
"""A chilled-water tank's flow limit where none is given: full to empty in this time."""

_PER_M2: Final = {
    "air_kwh_per_k": 0.006,
    "coupling_kw_per_k": 0.009,
    "envelope_kw_per_k": 0.001,
}
_MASS_PER_M2: Final = "mass_kwh_per_k_m2"
_PER_PEAK: Final = {"shared_aux_kw": 0.015, "tank_pump_kw": 0.008}
_DEDICATED_AUX: Final = {"air_cooled_screw": 0.0, "water_cooled_centrifugal": 0.033}
_KEYS: Final = {
    "sites": ("site_id",),
    "chillers": ("site_id", "chiller_id"),
    "tanks": ("site_id", "tank_id"),
}


@dataclass(frozen=True)
class Assumption:
    """A value nobody gave: where it stands in for one, and why it is what it is."""

    table: str
    key: str
    column: str
    value: str
    why: str


@dataclass(frozen=True)
class Resolved:
    """The three tables, complete but for limits that do not exist, and what was assumed in them."""

    sites: pd.DataFrame
    chillers: pd.DataFrame
    tanks: pd.DataFrame
    assumed: tuple[Assumption, ...]

    @property
    def frames(self) -> dict[str, pd.DataFrame]:
        """By table name, columns in the order of the table of columns."""
        return {"sites": self.sites, "chillers": self.chillers, "tanks": self.tanks}


def resolve(frames: dict[str, pd.DataFrame], settings: Settings) -> Resolved:
    """Fill every empty cell that has a default; `frames` are checked input tables (folder.py)."""
    assumed: list[Assumption] = []
    tanks = _tanks(frames["tanks"], assumed)
    sites = _sites(frames, settings, assumed)
    tanks = _at_return(tanks, sites, assumed)
    chillers = _chillers(frames["chillers"], tanks, assumed)
    return Resolved(sites, chillers, tanks, tuple(assumed))


def assumptions(
    table_name: str, keys: pd.Series, column: str, values: AnyArray, why: str
) -> list[Assumption]:
    """One Assumption for each key."""
    return [Assumption(table_name, str(key), column, _shown(value), why) for key, value in zip(keys, values)]


def _shown(value: Any) -> str:
    if isinstance(value, (bool, np.bool_)):
        return "true" if value else "false"
    return f"{value:.6g}" if isinstance(value, (float, np.floating)) else str(value)


def _sites(frames: dict[str, pd.DataFrame], settings: Settings, assumed: list[Assumption]) -> pd.DataFrame:
    sites = frames["sites"].copy()
    nodes = frames["nodes"]
    roots = nodes.loc[nodes["parent_id"].isna(), "node_id"].tolist()
    fill = _filler("sites", sites, assumed)
    fill("node_id", roots[0] if roots else DEFAULT_ROOT, None)
    for column, series in (("tariff_id", "tariffs"), ("station_id", "weather")):
        known = frames[series][column].dropna().unique()
        if len(known) == 1:
            fill(column, known[0], None)
    per_m2 = f"{COOLING_KW_TH_PER_M2:g} kW_th of peak cooling per m2"
    fill("floor_area_m2", sites["peak_cooling_kw_th"] / COOLING_KW_TH_PER_M2, per_m2)
    fill("peak_cooling_kw_th", sites["floor_area_m2"] * COOLING_KW_TH_PER_M2, per_m2)
    for column, share in _PER_M2.items():
        fill(column, sites["floor_area_m2"] * share, f"{share:g} per m2 of floor area")
    _by_building_type(sites, fill)
    for column, share in _PER_PEAK.items():
        fill(column, sites["peak_cooling_kw_th"] * share, f"{share:g} kW per kW_th of peak cooling")
    fill("notice_minutes", settings.notice_minutes, None)
    fill("minimum_window_minutes", settings.minimum_window_minutes, None)
    fill("settlement_rule", settings.settlement_rule, None)
    return _plain_defaults("sites", sites, fill)


def _by_building_type(sites: pd.DataFrame, fill: "Fill") -> None:
    """What is usual for the building's type; the type itself comes first."""
    fill("building_type", table("fleet", "sites").column("building_type").default, "default")
    for column in (*USUAL_COLUMNS, "mass_kwh_per_k"):
        lacking = sites.loc[sites[column].isna(), "building_type"].unique()
        values = usual(sites["building_type"], _MASS_PER_M2 if column == "mass_kwh_per_k" else column)
        for name in lacking:
            own, why = values.where(sites["building_type"] == name), f"usual for type {name}"
            if column == "mass_kwh_per_k":
                why = f"{own.max():g} per m2 of floor area, {why}"
                own = own * sites["floor_area_m2"]
            fill(column, own, why)


def _chillers(given: pd.DataFrame, tanks: pd.DataFrame, assumed: list[Assumption]) -> pd.DataFrame:
    chillers = given.copy()
    fill = _filler("chillers", chillers, assumed)
    _both_sizes(chillers, "capacity_kw_th", "capacity_ton")
    fill("rated_cop", chillers["kind"].map(RATED_COP_MINIMUM), "ASHRAE 90.1-2019 path A minimum of its kind")
    order = chillers.groupby("site_id", sort=False).cumcount() + 1
    fill("loading_order", order.astype("Int64"), "the row order")
    iced = tanks.loc[tanks["kind"].isin(ICE_KINDS), "site_id"]
    fill("makes_ice", chillers["site_id"].isin(iced), "true where the site has ice")
    aux = chillers["kind"].map(_DEDICATED_AUX).astype(float) * chillers["capacity_kw_th"]
    fill("dedicated_aux_kw", aux, "0.033 kW per kW_th water-cooled, 0 air-cooled")
    return _plain_defaults("chillers", chillers, fill)


def _tanks(given: pd.DataFrame, assumed: list[Assumption]) -> pd.DataFrame:
    tanks = given.copy()
    fill = _filler("tanks", tanks, assumed)
    _both_sizes(tanks, "capacity_kwh_th", "capacity_ton_h")
    flow = (tanks["capacity_kwh_th"] / CHILLED_WATER_HOURS).where(tanks["kind"] == "chilled_water")
    for column in ("discharge_limit_kw_th", "charge_limit_kw_th"):
        fill(column, flow, f"capacity over {CHILLED_WATER_HOURS:g} h (chilled water)")
    return _plain_defaults("tanks", tanks, fill)


def _at_return(tanks: pd.DataFrame, sites: pd.DataFrame, assumed: list[Assumption]) -> pd.DataFrame:
    """Chilled-water tanks with the capacity, and the flow limit assumed from it, that the site's return leaves them."""
    place = pd.Index(sites["site_id"]).get_indexer(pd.Index(tanks["site_id"]))
    supply, comes = (sites[name].to_numpy(dtype=np.float64)[place] for name in ("supply_c", "return_c"))
    design = tanks["design_return_c"].to_numpy(dtype=np.float64, na_value=np.nan)
    colder = (tanks["kind"] == "chilled_water").to_numpy() & (comes < design) & (design > supply)
    if not colder.any():
        return tanks
    tanks = tanks.copy()
    share = np.ones(len(tanks))
    share[colder] = water_at_return_kwh_th(1.0, supply[colder], comes[colder], design[colder])
    flow = pd.Series(tanks["capacity_kwh_th"] / CHILLED_WATER_HOURS)
    for column in ("discharge_limit_kw_th", "charge_limit_kw_th"):
        by_default = np.isclose(tanks[column].to_numpy(dtype=np.float64, na_value=np.nan), flow)
        tanks[column] = tanks[column] * np.where(by_default, share, 1.0)
    for column in ("capacity_kwh_th", "capacity_ton_h"):
        tanks[column] = tanks[column] * share
    # What the capacity is stated at from here on: nothing shrinks twice.
    tanks["design_return_c"] = tanks["design_return_c"].where(~colder, comes)
    keys = (tanks["site_id"].astype(object) + "/" + tanks["tank_id"].astype(object))[colder]
    why = "less than stated: the return is colder than the tank's design return"
    assumed.extend(
        assumptions("tanks", keys, "capacity_kwh_th", tanks.loc[colder, "capacity_kwh_th"].to_numpy(), why)
    )
    return tanks


def _both_sizes(frame: pd.DataFrame, metric: str, us: str) -> None:
    """Each of two columns of the same size from the other; the metric one rules where both are given."""
    frame[metric] = frame[metric].fillna(frame[us] * KW_TH_PER_TON)
    frame[us] = frame[us].fillna(frame[metric] / KW_TH_PER_TON)


Fill = Callable[[str, Any, str | None], None]


def _filler(name: str, frame: pd.DataFrame, assumed: list[Assumption]) -> Fill:
    """A function that fills a column's empty cells in `frame` and, where a reason is given, lists each of them."""
    first, *rest = (frame[part].astype(object) for part in _KEYS[name])
    keys = first + "/" + rest[0] if rest else first

    def fill(column: str, values: Any, why: str | None) -> None:
        empty = frame[column].isna()
        series = values if isinstance(values, pd.Series) else pd.Series(values, index=frame.index)
        filled = empty & series.notna()
        if not filled.any():
            return
        frame[column] = frame[column].where(~filled, series)
        if why is not None:
            assumed.extend(assumptions(name, keys[filled], column, series[filled].to_numpy(), why))

    return fill


def _plain_defaults(name: str, frame: pd.DataFrame, fill: Fill) -> pd.DataFrame:
    """Defaults that stand in the table of columns as they are; then columns in their order."""
    for column in table("fleet", name).columns:
        if column.default is not None:
            fill(column.name, column.default, "default")
        if column.type == "flag":
            frame[column.name] = frame[column.name].astype(bool)
    return frame[list(table("fleet", name).names)]
