"""Magnitudes that give a wrong unit away: what no plant can have is refused, what is rare is counted in a note.

Owns sizes held against each other (a peak against its floor area, machines against the peak, a tank against
hours of the peak, a limit and a meter against what hangs below). Bounds of single cells stand in the table of
columns. All bounds here are wide on purpose (common practice, no source): they tell units apart, not good plants
from bad ones.
"""

from collections.abc import Mapping
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.errors import Problem
from sites.units import KW_TH_PER_TON

Frames = Mapping[str, pd.DataFrame]

MOST_KW_TH_PER_M2: Final = 3.0
LEAST_KW_TH_PER_M2: Final = 0.001
USUAL_KW_TH_PER_M2: Final = (0.015, 0.5)
SIZING_KW_TH_PER_M2: Final = 0.1
"""Peak that a floor area stands for where no peak is given."""
MOST_TON_RATIO: Final = 3.0
"""Machines given in tons, as a multiple of the peak that is given: above it they are kW."""
USUAL_MACHINES_RATIO: Final = (0.3, 3.0)
LEAST_MACHINES_RATIO: Final = 0.01
USUAL_TANK_H: Final = (0.3, 36.0)
LEAST_TANK_H: Final = 0.01
USUAL_COP: Final = (2.0, 9.0)
LEAST_LOAD_RATIO: Final = 0.002
MOST_LOAD_RATIO: Final = 100.0
USUAL_LOAD_RATIO: Final = 1.5
LEAST_METER_SHARE: Final = 0.005
LEAST_LIMIT_SHARE: Final = 0.01
"""A building meter or an import limit below this share of its chillers' rated electric power is in MW."""
RATED_COP: Final = 5.0
"""Of a machine without one, for that comparison alone."""
HOTTEST_C: Final = 52.0
_KEYS_SHOWN: Final = 5
_MEGA: Final = "is it in MW? give it in kW"


def impossible(frames: Frames, files: Mapping[str, str]) -> list[Problem]:
    """A Problem for every size that no plant can have; frames carry the rows of their files as index."""
    peak = _peak_kw_th(frames["sites"])
    return [
        *_density(frames["sites"], files["sites"]),
        *_held_back(frames, files["sites"]),
        *_machines(frames["chillers"], _given_peak(frames["sites"]), peak, files["chillers"]),
        *_tiny_tanks(frames["tanks"], peak, files["tanks"]),
        *_limits(frames, files["nodes"]),
        *_loads(frames["loads"], peak, files["loads"]),
        *meters_in_mega(frames, files["meters"]),
    ]


def unlikely(frames: Frames, files: Mapping[str, str]) -> list[str]:
    """One note for each kind of rare value, with how many there are and the first keys."""
    sites, chillers, tanks = frames["sites"], frames["chillers"], frames["tanks"]
    peak = _peak_kw_th(sites)
    notes = _rare(
        files["sites"],
        "peak_cooling_kw_th per floor_area_m2",
        pd.Series((sites["peak_cooling_kw_th"] / sites["floor_area_m2"]).to_numpy(), sites["site_id"]),
        USUAL_KW_TH_PER_M2,
        "kW_th per m2",
    )
    machines = _total(chillers, _machine_kw_th(chillers)) / peak
    hint = "times the peak cooling load (below: tons in a kW column?)"
    notes += _rare(files["chillers"], "capacity of a site's machines", machines, USUAL_MACHINES_RATIO, hint)
    cop = pd.Series(chillers["rated_cop"].to_numpy(), _named(chillers, "chiller_id"))
    notes += _rare(files["chillers"], "rated_cop", cop, USUAL_COP, "kW_th per kW")
    hours = _tank_kwh_th(tanks) / tanks["site_id"].map(peak)
    held = pd.Series(hours.to_numpy(), _named(tanks, "tank_id"))
    notes += _rare(files["tanks"], "capacity", held, USUAL_TANK_H, "hours of the peak cooling load")
    most = frames["loads"].groupby("site_id")["cooling_load_kw_th"].max() / peak
    notes += _rare(
        files["loads"], "highest cooling_load_kw_th", most, (0.0, USUAL_LOAD_RATIO), "times the peak"
    )
    hottest = frames["weather"].groupby("station_id")["dry_bulb_c"].max()
    hot = "degC (degrees Fahrenheit?)"
    return notes + _rare(files["weather"], "highest dry_bulb_c", hottest, (-np.inf, HOTTEST_C), hot)


def _rare(file: str, what: str, values: pd.Series, usual: tuple[float, float], unit: str) -> list[str]:
    """A note on the values (by key) outside the usual range; missing and infinite ones are not looked at."""
    finite = values[np.isfinite(values.to_numpy(dtype=np.float64))]
    rare = finite[(finite < usual[0]) | (finite > usual[1])]
    if rare.empty:
        return []
    shown = ", ".join(f"{key} {value:.4g}" for key, value in rare.iloc[:_KEYS_SHOWN].items())
    more = f" and {len(rare) - _KEYS_SHOWN} more" if len(rare) > _KEYS_SHOWN else ""
    span = f"{usual[0]:g} to {usual[1]:g}" if np.isfinite(usual[0]) else f"up to {usual[1]:g}"
    return [
        f"{file}: {len(rare)} unlikely {what}, usual {span} {unit}: {shown}{more}; correct it or let it stand"
    ]


def _given_peak(sites: pd.DataFrame) -> pd.Series:
    """Peak cooling load by site_id where it is given, kW_th."""
    given = pd.Series(sites["peak_cooling_kw_th"].to_numpy(dtype=np.float64), sites["site_id"])
    return given[~given.index.duplicated()]


def _peak_kw_th(sites: pd.DataFrame) -> pd.Series:
    """Peak cooling load by site_id, from the floor area where it is not given, kW_th."""
    peak = sites["peak_cooling_kw_th"].fillna(sites["floor_area_m2"] * SIZING_KW_TH_PER_M2)
    by_site = pd.Series(peak.to_numpy(dtype=np.float64), sites["site_id"])
    return by_site[~by_site.index.duplicated()]


def _machine_kw_th(chillers: pd.DataFrame) -> pd.Series:
    return chillers["capacity_kw_th"].fillna(chillers["capacity_ton"] * KW_TH_PER_TON)


def _tank_kwh_th(tanks: pd.DataFrame) -> pd.Series:
    return tanks["capacity_kwh_th"].fillna(tanks["capacity_ton_h"] * KW_TH_PER_TON)


def _total(frame: pd.DataFrame, values: pd.Series) -> pd.Series:
    """Sum by site_id; missing where a value is missing, so that half a plant is not judged."""
    by_site = frame["site_id"]
    lacking = values.isna().groupby(by_site).any()
    return values.astype(np.float64).groupby(by_site).sum().where(~lacking)


def _named(frame: pd.DataFrame, unit: str) -> pd.Series:
    return frame["site_id"].astype(str) + "/" + frame[unit].astype(str)


def _density(sites: pd.DataFrame, file: str) -> list[Problem]:
    """Peaks over the most, or below the least, that a square metre can need."""
    area, peak = sites["floor_area_m2"], sites["peak_cooling_kw_th"]
    problems = []
    for row in sites.index[peak > MOST_KW_TH_PER_M2 * area]:
        most = f"at most {MOST_KW_TH_PER_M2:g} kW_th per m2, {MOST_KW_TH_PER_M2 * area[row]:.6g}"
        advice = "correct one of the two (kW, not W; m2, not ft2)"
        problems.append(
            _sized(file, row, "peak_cooling_kw_th", peak[row], f"for {area[row]:.15g} m2", most, advice)
        )
    for row in sites.index[peak < LEAST_KW_TH_PER_M2 * area]:
        least = f"at least {LEAST_KW_TH_PER_M2:g} kW_th per m2, {LEAST_KW_TH_PER_M2 * area[row]:.6g}"
        problems.append(
            _sized(file, row, "peak_cooling_kw_th", peak[row], f"for {area[row]:.15g} m2", least, _MEGA)
        )
    return problems


def _held_back(frames: Frames, file: str) -> list[Problem]:
    """Reserves above what the site's tanks hold."""
    sites, tanks = frames["sites"], frames["tanks"]
    has = sites["site_id"].map(_total(tanks, _tank_kwh_th(tanks)))
    room = has.where(sites["site_id"].isin(tanks["site_id"]), 0.0)
    held = sites["held_back_kwh_th"]
    return [
        Problem(
            file,
            int(row),
            "held_back_kwh_th",
            f"{held[row]:.15g}",
            f"at most the capacity of the site's tanks, {room[row]:.6g} kWh_th",
            "correct one of the two",
        )
        for row in sites.index[held > room * (1.0 + 1e-6)]
    ]


def _machines(chillers: pd.DataFrame, given: pd.Series, peak: pd.Series, file: str) -> list[Problem]:
    """Sites whose machines are far too small for the peak (MW), or in tons and far too large for it (kW)."""
    total = _total(chillers, _machine_kw_th(chillers))
    tons = chillers.loc[chillers["capacity_kw_th"].isna(), "site_id"]
    problems = []
    ratio = total / peak.reindex(total.index)
    for site in ratio.index[ratio < LEAST_MACHINES_RATIO]:
        row = int(chillers.index[chillers["site_id"] == site][0])
        came = f"{total[site]:.6g} kW_th in all machines of {site}"
        wanted = (
            f"at least {LEAST_MACHINES_RATIO:.0%} of the site's peak cooling load, {peak[site]:.6g} kW_th"
        )
        problems.append(Problem(file, row, "capacity_kw_th", came, wanted, _MEGA))
    over = total / given.reindex(total.index)
    for site in over.index[(over > MOST_TON_RATIO) & over.index.isin(tons)]:
        row = int(tons.index[tons == site][0])
        came = f"tons that make {total[site]:.6g} kW_th in all machines of {site}"
        wanted = f"at most {MOST_TON_RATIO:g} times the site's peak cooling load, {given[site]:.6g} kW_th"
        advice = "if they are kW, name the column capacity_kw_th; if they are tons, give them there in kW_th"
        problems.append(Problem(file, row, "capacity_ton", came, wanted, advice))
    return problems


def _tiny_tanks(tanks: pd.DataFrame, peak: pd.Series, file: str) -> list[Problem]:
    capacity = _tank_kwh_th(tanks)
    least = tanks["site_id"].map(peak) * LEAST_TANK_H
    advice = "is it in MWh? give it in kWh"
    return [
        Problem(
            file,
            int(row),
            "capacity_kwh_th",
            f"{capacity[row]:.6g}",
            f"at least {LEAST_TANK_H:g} hours of the site's peak cooling load, {least[row]:.6g} kWh_th",
            advice,
        )
        for row in tanks.index[capacity < least]
    ]


def _loads(loads: pd.DataFrame, peak: pd.Series, file: str) -> list[Problem]:
    """Sites whose highest load is no load of theirs: MW or W in the column."""
    most = loads.groupby("site_id")["cooling_load_kw_th"].max()
    ratio = most / peak.reindex(most.index)
    problems = []
    for wrong, words, advice in (
        (
            (most > 0.0) & (ratio < LEAST_LOAD_RATIO),
            f"at least {LEAST_LOAD_RATIO:.1%}",
            f"{_MEGA}, or 0 if there is none",
        ),
        (ratio > MOST_LOAD_RATIO, f"at most {MOST_LOAD_RATIO:g} times", "is it in W? give it in kW"),
    ):
        for site in ratio.index[wrong]:
            row = int(
                loads.index[(loads["site_id"] == site) & (loads["cooling_load_kw_th"] == most[site])][0]
            )
            came = f"{most[site]:.6g} as the highest of {site}"
            of = "of " if "%" in words else ""
            wanted = f"{words} {of}the site's peak cooling load, {peak[site]:.6g} kW_th"
            problems.append(Problem(file, row, "cooling_load_kw_th", came, wanted, advice))
    return problems


def rated_plant_kw(chillers: pd.DataFrame) -> pd.Series:
    """Rated electric power of a site's machines by site_id, kW."""
    return _total(chillers, _machine_kw_th(chillers) / chillers["rated_cop"].fillna(RATED_COP))


def _limits(frames: Frames, file: str) -> list[Problem]:
    """Import limits far below what the chillers under the node draw."""
    nodes, sites = frames["nodes"], frames["sites"]
    rated = sites["site_id"].map(rated_plant_kw(frames["chillers"])).fillna(0.0)
    above = nodes.dropna(subset=["node_id"]).drop_duplicates("node_id").set_index("node_id")["parent_id"]
    below = pd.Series(0.0, index=above.index)
    at = sites["node_id"]
    for _ in range(len(nodes)):  # a level a turn; a loop in the tree ends here and is told elsewhere
        below = below.add(rated.groupby(at).sum(), fill_value=0.0)
        at = at.map(above)
        if at.isna().all():
            break
    least = nodes["node_id"].map(below) * LEAST_LIMIT_SHARE
    limit = nodes["import_limit_kw"]
    return [
        Problem(
            file,
            int(row),
            "import_limit_kw",
            f"{limit[row]:.6g}",
            f"0, or at least {LEAST_LIMIT_SHARE:.0%} of the rated power of the chillers below, {least[row]:.6g} kW",
            f"{_MEGA}; empty = no limit",
        )
        for row in nodes.index[(limit > 0.0) & (limit < least)]
    ]


def meters_in_mega(
    frames: Frames, file: str, column: str = "kw", rated_kw: pd.Series | None = None
) -> list[Problem]:
    """Building meters that never show a building's power; frames: meters, meter_map, chillers.

    rated_kw: rated_plant_kw of the chillers, where it is known already.
    """
    meters, mapped = frames["meters"], frames["meter_map"]
    if meters.empty:
        return []
    most = meters["kw"].abs().groupby(meters["meter_id"]).max()
    site: pd.Series = pd.Series(most.index, most.index)
    if not mapped.empty:
        alone = mapped[
            (mapped["role"].fillna("building") == "building") & ~mapped.duplicated("site_id", keep=False)
        ]
        site = site.map(alone.drop_duplicates("meter_id").set_index("meter_id")["site_id"])
    rated = rated_plant_kw(frames["chillers"]) if rated_kw is None else rated_kw
    least = site.map(rated) * LEAST_METER_SHARE
    problems = []
    for meter in most.index[(most > 0.0) & (most < least)]:
        row = int(meters.index[meters["meter_id"] == meter][0])
        came = f"{most[meter]:.6g} as the highest of {meter}"
        wanted = f"at least {LEAST_METER_SHARE:.1%} of the rated power of its chillers, {least[meter]:.6g} kW"
        problems.append(Problem(file, row, column, came, wanted, _MEGA))
    return problems


def _sized(
    file: str, row: Any, column: str, value: float, beside: str, expected: str, advice: str
) -> Problem:
    return Problem(file, int(row), column, f"{value:.15g} {beside}", expected, advice)
