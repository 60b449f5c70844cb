"""What the input tables say about each other: references, sizes that disagree, the tree, tanks nobody can charge.

Owns the checks that need more than one cell. The checks of single cells are values.py's. Every function returns
Problems and changes nothing; frames carry the rows of their files as index.
"""

from collections.abc import Callable, Mapping
from typing import Any, Final

import numpy as np
import pandas as pd

from fleet.errors import Problem
from fleet.schema import table
from sites.roster import ICE_KINDS
from sites.units import KW_TH_PER_TON

Frames = Mapping[str, pd.DataFrame]
_SAME_SIZE: Final = 0.005
"""Two sizes of one machine may differ by this share (rounded name plates) before they contradict."""


def cross_problems(frames: Frames, files: Mapping[str, str]) -> list[Problem]:
    """All problems between and within the tables; `files` names each table's file.

    A table that is absent is an empty frame. References to a table without rows are left unchecked where the
    table is optional (no nodes table = one root).
    """
    problems = []
    for check in _CHECKS:
        problems += check(frames, files)
    return problems


def _unknown(
    frames: Frames, files: Mapping[str, str], name: str, column: str, target: str, key: str
) -> list[Problem]:
    """Rows of table `name` whose `column` is not a `key` of `target`; sites without any id say so themselves."""
    known = frames[target][key].dropna()
    if target == "sites" and known.empty and len(frames[target]):
        return []
    wanted = frames[name][column].dropna()
    stray = wanted[~wanted.isin(known)].drop_duplicates()
    advice = f"add it to {target}, or correct the spelling"
    return [
        Problem(files[name], int(row), column, repr(value), f"a {key} of {target}", advice)
        for row, value in zip(stray.index, stray)
    ]


def _site_references(frames: Frames, files: Mapping[str, str]) -> list[Problem]:
    problems = []
    for name in ("chillers", "tanks", "loads", "bills", "status", "plant_days", "meter_map"):
        problems += _unknown(frames, files, name, "site_id", "sites", "site_id")
    return problems


def _node_references(frames: Frames, files: Mapping[str, str]) -> list[Problem]:
    return [
        *_unknown(frames, files, "sites", "node_id", "nodes", "node_id"),
        *_unknown(frames, files, "node_loads", "node_id", "nodes", "node_id"),
    ]


def _series_references(frames: Frames, files: Mapping[str, str]) -> list[Problem]:
    """Tariff and station of each site; empty means the only one, and is refused where there are several."""
    problems = []
    for column, name in (("tariff_id", "tariffs"), ("station_id", "weather")):
        known = frames[name][column].dropna().unique()
        if not len(known):
            continue
        problems += _unknown(frames, files, "sites", column, name, column)
        empty = frames["sites"][column].isna()
        if len(known) > 1 and empty.any():
            row = int(frames["sites"].index[empty][0])
            expected = f"one of {', '.join(map(str, sorted(known)))} (sites like this: {int(empty.sum())})"
            problems.append(Problem(files["sites"], row, column, "nothing", expected, "fill it in"))
    return problems


def _unit_references(frames: Frames, files: Mapping[str, str]) -> list[Problem]:
    """Unit ids unique within a site over chillers and tanks; status speaks of units that are there."""
    chillers, tanks, status = frames["chillers"], frames["tanks"], frames["status"]
    machine = _pairs(chillers["site_id"], chillers["chiller_id"])
    tank = _pairs(tanks["site_id"], tanks["tank_id"])
    problems = [
        Problem(
            files["tanks"],
            int(row),
            "tank_id",
            repr(tanks.loc[row, "tank_id"]),
            "an id that no chiller of the site has",
            "rename one",
        )
        for row in tank.index[tank.isin(machine)]
    ]
    unit = _pairs(status["site_id"], status["unit_id"])
    known_site = status["site_id"].isin(frames["sites"]["site_id"])
    stray = unit[known_site & ~unit.isin(machine) & ~unit.isin(tank)].drop_duplicates()
    problems += [
        Problem(
            files["status"],
            int(row),
            "unit_id",
            repr(status.loc[row, "unit_id"]),
            f"a chiller_id or tank_id of site {status.loc[row, 'site_id']}",
            "add the unit, or correct the spelling",
        )
        for row in stray.index
    ]
    return problems


def _pairs(first: pd.Series, second: pd.Series) -> pd.Series:
    return first.astype(str) + "\x00" + second.astype(str)


def _status_values(frames: Frames, files: Mapping[str, str]) -> list[Problem]:
    """Inventory within the tank's capacity, low at most best at most high, and only for tanks."""
    status, tanks = frames["status"], frames["tanks"]
    capacity = tanks["capacity_kwh_th"].fillna(tanks["capacity_ton_h"] * KW_TH_PER_TON)
    by_tank = pd.Series(capacity.to_numpy(), index=_pairs(tanks["site_id"], tanks["tank_id"]))
    by_tank = by_tank[~by_tank.index.duplicated()]
    room = _pairs(status["site_id"], status["unit_id"]).map(by_tank).astype(np.float64)
    low, best, high = (status[f"inventory_{part}kwh_th"] for part in ("low_", "", "high_"))
    problems = []
    for column in (low, best, high):
        for row in status.index[column > room * (1.0 + 1e-9)]:
            expected = f"at most the tank's capacity, {room[row]:.15g} kWh_th"
            came = f"{column[row]:.15g}"
            problems.append(
                Problem(files["status"], int(row), str(column.name), came, expected, "correct one of the two")
            )
    for row in status.index[(low > best) | (best > high) | (low > high)]:
        came = f"{low[row]:.15g}, {best[row]:.15g}, {high[row]:.15g}"
        expected = "low at most best at most high"
        problems.append(
            Problem(files["status"], int(row), "inventory_kwh_th", came, expected, "put them in order")
        )
    return problems


def _two_sizes(frames: Frames, files: Mapping[str, str]) -> list[Problem]:
    """A capacity in both units must be the same capacity."""
    problems = []
    for name, metric, us in (
        ("chillers", "capacity_kw_th", "capacity_ton"),
        ("tanks", "capacity_kwh_th", "capacity_ton_h"),
    ):
        frame = frames[name]
        converted = frame[us] * KW_TH_PER_TON
        apart = (frame[metric] - converted).abs() > _SAME_SIZE * converted
        for row in frame.index[apart]:
            came = f"{frame.loc[row, us]:.15g} beside {metric} {frame.loc[row, metric]:.15g}"
            expected = f"one size: {frame.loc[row, us]:.15g} is {converted[row]:.6g} in {metric}"
            problems.append(Problem(files[name], int(row), us, came, expected, "give one of the two"))
    return problems


def _tree(frames: Frames, files: Mapping[str, str]) -> list[Problem]:
    """Parents that exist, exactly one root, no node above itself."""
    nodes = frames["nodes"]
    if nodes.empty:
        return []
    problems = _unknown(frames, files, "nodes", "parent_id", "nodes", "node_id")
    roots = nodes[nodes["parent_id"].isna()]
    if len(roots) != 1:
        named = ", ".join(map(str, roots["node_id"][:5])) or "none"
        row = int(roots.index[1]) if len(roots) > 1 else None
        advice = "give all but one node a parent" if len(roots) > 1 else "leave parent_id of the root empty"
        came = f"{len(roots)} roots ({named})"
        problems.append(
            Problem(files["nodes"], row, "parent_id", came, "exactly one row without parent_id", advice)
        )
    return problems + _cycles(nodes.dropna(subset=["node_id"]), files["nodes"])


def _cycles(nodes: pd.DataFrame, file: str) -> list[Problem]:
    above = dict(zip(nodes["node_id"], nodes["parent_id"].where(nodes["parent_id"].notna(), None)))
    done: set[object] = set()
    for start in above:
        path: list[object] = []
        node: object = start
        while node in above and node not in done and node not in path:
            path.append(node)
            node = above[node]
        if node in path:
            ring = [str(one) for one in path[path.index(node) :]]
            row = int(nodes.index[nodes["node_id"] == node][0])
            came = " above ".join([ring[0], *reversed(ring)])
            return [Problem(file, row, "parent_id", came, "a tree", "correct the parent of one of them")]
        done.update(path)
    return []


def _chargeable(frames: Frames, files: Mapping[str, str]) -> list[Problem]:
    """Tanks that no chiller of their site can charge; a tank of an unknown site is told of for that alone."""
    chillers, tanks = frames["chillers"], frames["tanks"].dropna(subset=["site_id", "kind"])
    tanks = tanks[tanks["site_id"].isin(frames["sites"]["site_id"])]
    if chillers.empty and len(tanks):
        advice = "add the table with a row for each machine"
        return [
            Problem(files["chillers"], None, None, "no rows", "the chillers that charge the tanks", advice)
        ]
    ice = tanks["kind"].isin(ICE_KINDS)
    cooled = tanks["site_id"].isin(chillers["site_id"])
    makers = chillers.loc[chillers["makes_ice"].fillna(True).astype(bool), "site_id"]
    frozen = tanks["site_id"].isin(makers)
    stuck = tanks[~cooled | (ice & ~frozen)]
    return [
        Problem(
            files["tanks"],
            int(row),
            "tank_id",
            f"{site}/{tank} ({kind})",
            "a chiller of the site that can charge it",
            "add the chiller, set its makes_ice to true, or remove the tank",
        )
        for row, site, tank, kind in zip(stuck.index, stuck["site_id"], stuck["tank_id"], stuck["kind"])
    ]


def _wet_bulb(frames: Frames, files: Mapping[str, str]) -> list[Problem]:
    """Each weather row carries the humidity, one way or the other, and no wet bulb above the dry bulb."""
    weather = frames["weather"]
    bare = weather.index[weather["wet_bulb_c"].isna() & weather["rh_pct"].isna()]
    problems = []
    if len(bare):
        expected = f"wet_bulb_c or rh_pct in each row (rows like this: {len(bare)})"
        problems.append(
            Problem(files["weather"], int(bare[0]), "wet_bulb_c", "nothing", expected, "fill one of them in")
        )
    above = weather[weather["wet_bulb_c"] > weather["dry_bulb_c"] + 1e-9]
    if len(above):
        row = int(above.index[0])
        expected = f"at most dry_bulb_c, {above['dry_bulb_c'].iloc[0]:.15g} (rows like this: {len(above)})"
        came = f"{above['wet_bulb_c'].iloc[0]:.15g}"
        problems.append(
            Problem(files["weather"], row, "wet_bulb_c", came, expected, "correct one of the two")
        )
    return problems


def _order_of_values(frames: Frames, files: Mapping[str, str]) -> list[Problem]:
    """Pairs of which the first must not lie above, or at, the second."""
    problems = []
    for name, low, high, strict in (
        ("bills", "cycle_start", "cycle_end", False),
        ("sites", "supply_c", "return_c", True),
        ("sites", "supply_c", "supply_cap_c", False),
    ):
        frame = frames[name]
        below, above = (frame[column].fillna(_default(name, column)) for column in (low, high))
        wrong = below >= above if strict else below > above
        for row in frame.index[np.asarray(wrong, dtype=bool)]:
            word = "below" if strict else "not after" if isinstance(below[row], pd.Timestamp) else "at most"
            came = f"{_shown(below[row])} and {_shown(above[row])}"
            problems.append(
                Problem(files[name], int(row), low, came, f"{low} {word} {high}", "correct one of the two")
            )
    return problems


def _default(table_name: str, column: str) -> Any:
    """The column's default, with which an empty cell will be filled later; NaT or NaN where there is none."""
    known = table("fleet", table_name).column(column)
    nothing = pd.NaT if known.type == "day" else np.nan
    return nothing if known.default is None else known.default


def _shown(value: object) -> str:
    return f"{value:%Y-%m-%d}" if isinstance(value, pd.Timestamp) else f"{value:.15g}"


def unmapped_meters(
    meters: pd.DataFrame, meter_map: pd.DataFrame, site_ids: pd.Series, file: str
) -> list[Problem]:
    """Meters that are in no row of meter_map; without a meter_map, that are no site."""
    mapped = not meter_map.empty
    known = meter_map["meter_id"] if mapped else site_ids
    wanted = meters["meter_id"].dropna().drop_duplicates()
    stray = wanted[~wanted.isin(known)]
    expected = "a meter_id of meter_map" if mapped else "a site_id (there is no meter_map)"
    return [
        Problem(
            file, int(row), "meter_id", repr(value), expected, "add it to meter_map, or correct the spelling"
        )
        for row, value in zip(stray.index, stray)
    ]


_CHECKS: Final[tuple[Callable[[Frames, Mapping[str, str]], list[Problem]], ...]] = (
    _site_references,
    _node_references,
    _series_references,
    _unit_references,
    _status_values,
    _two_sizes,
    _tree,
    _chargeable,
    _wet_bulb,
    _order_of_values,
)
