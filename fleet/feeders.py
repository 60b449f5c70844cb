"""The network as a tree: which sites hang below which node, what each node may draw, what else it carries.

The only networkx door. Owns the tree's checks and the headroom of each node; leaves the choice of what to do
with it to the allocation. Limits are on power drawn into a node; what flows out of it is not limited.
"""

from collections.abc import Collection, Sequence
from dataclasses import dataclass, field
from typing import Any, Final

import networkx as nx
import numpy as np
import pandas as pd

from fleet.errors import FleetError, Problem, Refused
from sites.clock import Clock
from sites.units import Bools, Floats, Ints, Strings

DEFAULT_ROOT: Final = "fleet"


@dataclass(frozen=True)
class Feeders:
    """Nodes of a radial network (J), sites (N) below each, and other load over the horizon (T)."""

    node_id: Strings
    parent: Ints
    """(J,) index of the node above, -1 for the root"""
    limit_kw: Floats
    """(J,) inf where there is none"""
    below: Bools
    """(J, N) site hangs at or below the node"""
    other_kw: Floats
    """(J, T) load at or below the node that is not a fleet building"""
    notes: tuple[str, ...] = field(default=())

    @property
    def root(self) -> str:
        """Id of the node that holds the whole fleet."""
        return str(self.node_id[int(np.flatnonzero(self.parent < 0)[0])])

    @property
    def limited(self) -> Bools:
        """(J,) nodes that have a limit."""
        return np.asarray(np.isfinite(self.limit_kw), dtype=np.bool_)

    def index(self, node_id: str) -> int:
        """Index of a node; FleetError naming the nodes there are where it is unknown."""
        found = np.flatnonzero(self.node_id == node_id)
        if found.size == 0:
            known = ", ".join(str(name) for name in self.node_id[:12])
            more = f" and {len(self.node_id) - 12} more" if len(self.node_id) > 12 else ""
            raise FleetError(f"node {node_id!r} is not in the network; known nodes: {known}{more}")
        return int(found[0])

    def nearest_above(self, node_id: str, names: Collection[str]) -> str | None:
        """The nearest node strictly above that is among `names`; None where there is none."""
        above = int(self.parent[self.index(node_id)])
        while above >= 0:
            if str(self.node_id[above]) in names:
                return str(self.node_id[above])
            above = int(self.parent[above])
        return None

    def sites_below(self, node_id: str) -> Bools:
        """(N,) sites at or below a node; FleetError where it is unknown."""
        return np.asarray(self.below[self.index(node_id)], dtype=np.bool_)


@dataclass(frozen=True)
class Headroom:
    """Room left in each node and interval, and where there was none before anything was called."""

    kw: Floats
    """(J, T) limit - other - usual fleet load, never below 0; inf where a node has no limit"""
    over_kw: Floats
    """(J, T) how far the usual case is over the limit already"""
    notes: tuple[str, ...]
    """One sentence per node that is over its limit in the usual case"""


def feeders(
    nodes: pd.DataFrame | None,
    node_loads: pd.DataFrame | None,
    site_node_ids: Strings,
    clock: Clock,
    site_ids: Strings | None = None,
) -> Feeders:
    """The tree with its incidence and other load.

    nodes: node_id, parent_id, import_limit_kw (table `nodes`); None or empty = one root without a limit.
    node_loads: node_id, interval_start (UTC), other_kw of the subtree. site_node_ids (N,): empty = root.
    Raises Refused on double or unknown ids, a loop, no root or several, and on loads with holes.
    """
    ids, parents, limits = _columns(nodes)
    problems = _tree_problems(ids, parents)
    wanted = [_text(node) for node in site_node_ids]
    problems += _site_problems(wanted, set(ids), site_ids)
    if problems:
        raise Refused(problems)
    position = {node: index for index, node in enumerate(ids)}
    parent = np.array([position.get(above, -1) for above in parents], dtype=np.int64)
    tree: nx.DiGraph[str] = nx.DiGraph()
    tree.add_nodes_from(ids)
    tree.add_edges_from((above, node) for node, above in zip(ids, parents, strict=True) if above)
    root = ids[int(np.flatnonzero(parent < 0)[0])]
    site_position = np.array([position[node or root] for node in wanted], dtype=np.int64)
    reach = np.zeros((len(ids), len(ids)), dtype=np.bool_)
    for index, node in enumerate(ids):
        reach[index, [position[lower] for lower in nx.descendants(tree, node)] + [index]] = True
    below: Bools = reach[:, site_position]
    order = [position[node] for node in nx.topological_sort(tree)]
    other_kw, notes = _other_kw(node_loads, ids, parent, order, np.isfinite(limits), clock)
    return Feeders(np.array(ids, dtype=object), parent, limits, below, other_kw, tuple(notes))


def headroom_kw(feeders: Feeders, usual_building_kw: Floats) -> Headroom:
    """Room for a change of load in every node and interval, from usual_building_kw (N, T).

    headroom = limit - other load - usual load of all fleet buildings below. Where that is negative before
    anything is called, the rule is "no worse than usual": headroom 0, and the node is named.
    """
    usual = feeders.below.astype(np.float64) @ usual_building_kw
    raw = feeders.limit_kw[:, None] - feeders.other_kw - usual
    over = np.maximum(-raw, 0.0)
    notes = [
        f"node {feeders.node_id[index]} is over its limit of {feeders.limit_kw[index]:,.0f} kW before "
        f"anything is called, by up to {over[index].max():,.1f} kW "
        f"in {int((over[index] > 0).sum())} intervals; held to no worse than usual there"
        for index in np.flatnonzero(over.max(axis=1) > 0.0)
    ]
    return Headroom(np.maximum(raw, 0.0), over, tuple(notes))


def _text(value: Any) -> str:
    """A cell as text, "" where it is empty in any of the ways a frame can be."""
    return "" if value is None or pd.isna(value) else str(value).strip()


def _columns(nodes: pd.DataFrame | None) -> tuple[list[str], list[str], Floats]:
    """Ids, ids of the nodes above ("" for none) and limits (inf for none)."""
    if nodes is None or nodes.empty:
        return [DEFAULT_ROOT], [""], np.array([np.inf])
    limits = pd.to_numeric(nodes["import_limit_kw"]).to_numpy(dtype=np.float64, na_value=np.nan)
    ids = [_text(value) for value in nodes["node_id"]]
    return ids, [_text(value) for value in nodes["parent_id"]], np.where(np.isnan(limits), np.inf, limits)


def _tree_problems(ids: Sequence[str], parents: Sequence[str]) -> list[Problem]:
    """All that keeps the nodes from being one tree."""

    def problem(row: int | None, column: str, came: str, expected: str, advice: str) -> Problem:
        return Problem("nodes", row, column, came, expected, advice)

    problems = []
    known, seen = set(ids), set[str]()
    for row, (node, above) in enumerate(zip(ids, parents, strict=True), start=1):
        if node in seen:
            problems.append(
                problem(row, "node_id", repr(node), "an id given once", "remove or rename the row")
            )
        seen.add(node)
        if above and above not in known:
            advice = "add a row for it or correct the spelling"
            problems.append(problem(row, "parent_id", repr(above), "the node_id of another row", advice))
    roots = [node for node, above in zip(ids, parents, strict=True) if not above]
    if len(roots) != 1:
        came = "no row with an empty parent_id" if not roots else "several roots: " + ", ".join(roots[:5])
        advice = "leave parent_id empty for the whole fleet only, and hang the others below it"
        problems.append(problem(None, "parent_id", came, "exactly one row with an empty parent_id", advice))
    graph: nx.DiGraph[str] = nx.DiGraph(
        (above, node) for node, above in zip(ids, parents, strict=True) if above
    )
    if not nx.is_directed_acyclic_graph(graph):
        loop = " > ".join(edge[0] for edge in nx.find_cycle(graph))
        advice = "a radial network has no loop: correct one parent_id of these"
        problems.append(problem(None, "parent_id", f"a loop {loop}", "a tree", advice))
    return problems


def _site_problems(wanted: Sequence[str], known: set[str], site_ids: Strings | None) -> list[Problem]:
    problems = []
    for row, node in enumerate(wanted, start=1):
        if node and node not in known:
            who = "" if site_ids is None else f" for site {site_ids[row - 1]}"
            advice = "add the node to the table nodes or correct the spelling"
            problems.append(
                Problem("sites", row, "node_id", repr(node) + who, "a node_id of the table nodes", advice)
            )
    return problems


def _other_kw(
    node_loads: pd.DataFrame | None,
    ids: list[str],
    parent: Ints,
    order: list[int],
    limited: Bools,
    clock: Clock,
) -> tuple[Floats, list[str]]:
    """Other load (J, T) and notes. A node without any row carries the sum of the nodes just below it.

    The sum is what "of the whole subtree" leaves as the least that node carries; 0 at the ends of the tree.
    """
    count = len(ids)
    kw = np.full((count, clock.count), np.nan)
    has_rows = np.zeros(count, dtype=np.bool_)
    if node_loads is not None and not node_loads.empty:
        has_rows = _fill(kw, node_loads, ids, clock)
    for index in reversed(order):
        if not has_rows[index]:
            kw[index] = kw[parent == index].sum(axis=0)
    missing = [ids[index] for index in np.flatnonzero(limited & ~has_rows)]
    notes = []
    if missing:
        names = ", ".join(missing[:5]) + (f" and {len(missing) - 5} more" if len(missing) > 5 else "")
        notes.append(
            f"no node_loads for limited nodes {names}: taken as what the nodes below them carry "
            "besides the fleet, or 0 kW where nothing is known"
        )
    return kw, notes


def _fill(kw: Floats, node_loads: pd.DataFrame, ids: list[str], clock: Clock) -> Bools:
    """Writes given loads into kw (J, T) and tells which nodes have rows; Refused on holes and doubles."""
    names = node_loads["node_id"].map(_text)
    column = pd.Index(ids).get_indexer(pd.Index(names))
    start = (
        pd.to_datetime(node_loads["interval_start"], utc=True).dt.tz_localize(None).to_numpy("datetime64[us]")
    )
    offset = (start - clock.start).astype(np.int64)
    step = int(clock.step.astype(np.int64))
    value = pd.to_numeric(node_loads["other_kw"]).to_numpy(dtype=np.float64, na_value=np.nan)
    inside = (column >= 0) & (offset % step == 0) & (offset >= 0) & (offset < step * clock.count)
    node, interval = column[inside], offset[inside] // step
    times = np.zeros(kw.shape, dtype=np.int64)
    np.add.at(times, (node, interval), 1)
    kw[node, interval] = value[inside]
    has_rows: Bools = np.isin(np.arange(len(ids)), column)
    problems = [
        Problem(
            "node_loads", None, "node_id", repr(name), "a node_id of the table nodes", "correct the spelling"
        )
        for name in dict.fromkeys(names[column < 0])
    ]
    starts = clock.starts
    for index in np.flatnonzero(has_rows & (times > 1).any(axis=1)):
        when = starts[int(times[index].argmax())]
        came = f"node {ids[index]} given {int(times[index].max())} times at {when} UTC"
        problems.append(
            Problem("node_loads", None, "interval_start", came, "one row", "remove the double rows")
        )
    for index in np.flatnonzero(has_rows & ~np.isfinite(kw).all(axis=1)):
        holes = np.flatnonzero(~np.isfinite(kw[index]))
        where = f"{holes.size} of {clock.count} intervals, first {starts[holes[0]]}"
        came = f"node {ids[index]} without a value in {where}"
        expected = f"every interval from {clock.start} to {clock.end} UTC"
        problems.append(
            Problem("node_loads", None, "other_kw", came, expected, "add rows, or leave the node out")
        )
    if problems:
        raise Refused(problems)
    return has_rows
