"""Rules on the network: tables usual and nodes.

Sums over the fleet's buildings below each node, other load and limits from the frozen rows, and limits kept in every
interval of the horizon. The tree is feeders.py's. Shapes: J nodes, N sites, T intervals.
"""

import numpy as np

from fleet.audit.case import Case
from fleet.audit.evidence import carried
from fleet.audit.findings import Findings

KEPT_KW = 1e-6
"""A limit is kept to within this."""


def usual_case(case: Case, found: Findings) -> None:
    """Called sites have the same usual and rest load in usual and intervals; no plant draws less than nothing."""
    book = case.evidence
    sheet = book.sheets["intervals"]
    for name in ("usual_kw", "rest_kw"):
        found.equal("usual case", sheet, name, book.grid("usual", name)[book.called].ravel())
    found.least("not negative", book.sheets["usual"], "usual_kw", 0.0)
    found.least("not negative", sheet, "event_kw", 0.0)


def frozen_loads(case: Case, found: Findings) -> None:
    """Rest of the building and cooling load are the frozen forecast's; without rows the rest is 0.

    A site without forecast has its cooling load from a profile, which is not looked at here.
    """
    book = case.evidence
    loads = book.record.frozen.get("loads")
    if loads is None:
        return
    rest = np.nan_to_num(carried(loads, "site_id", book.site_id, "rest_kw", book.clock))
    found.equal("frozen loads", book.sheets["usual"], "rest_kw", rest.ravel())
    cooling = carried(loads, "site_id", book.site_id, "cooling_load_kw_th", book.clock)[book.called]
    given = ~np.isnan(cooling).any(axis=1, keepdims=True)
    expected = np.where(given, cooling, book.grid("intervals", "cooling_load_kw_th"))
    found.equal("frozen loads", book.sheets["intervals"], "cooling_load_kw_th", expected.ravel())


def sums_below(case: Case, found: Findings) -> None:
    """usual_kw and event_kw of a node are sums over the fleet's buildings at or below it."""
    book, sheet = case.evidence, case.evidence.sheets["nodes"]
    below = case.tree.below.astype(np.float64)
    building = book.grid("usual", "usual_kw") + book.grid("usual", "rest_kw")
    change = book.grid("intervals", "event_kw") - book.grid("intervals", "usual_kw")
    usual = below @ building
    size = np.maximum(below @ np.abs(building), 1.0)
    found.equal("sum below the node", sheet, "usual_kw", usual.ravel(), size.ravel())
    event = usual + below[:, book.called] @ change
    found.equal("sum below the node", sheet, "event_kw", event.ravel(), size.ravel())


def frozen_network(case: Case, found: Findings) -> None:
    """Node ids, limits and other load are the frozen ones."""
    book, sheet = case.evidence, case.evidence.sheets["nodes"]
    tree = case.tree
    found.same("frozen network", sheet, "node_id", np.repeat(tree.node_id, book.clock.count))
    limit = np.where(np.isfinite(tree.limit_kw), tree.limit_kw, np.nan)
    found.equal("frozen network", sheet, "import_limit_kw", np.repeat(limit, book.clock.count))
    found.equal("frozen network", sheet, "other_kw", tree.other_kw.ravel())


def limits_kept(case: Case, found: Findings) -> None:
    """Event and other load within the limit, or no worse than usual where the usual case was over it already."""
    book, sheet = case.evidence, case.evidence.sheets["nodes"]
    names = ("other_kw", "usual_kw", "import_limit_kw")
    other, usual, limit = (book.grid("nodes", name) for name in names)
    limit = np.where(np.isnan(limit), np.inf, limit)
    over_already = other + usual > limit
    most = np.where(over_already, usual, limit - other)
    found.most("import limit", sheet, "event_kw", (most + KEPT_KW).ravel())
    node_id = sheet.frame["node_id"].to_numpy(dtype=object).reshape(limit.shape)[:, 0]
    for node in np.flatnonzero(over_already.any(axis=1)):
        over = (other + usual - limit)[node]
        found.notes.append(
            f"node {node_id[node]} is over its limit before anything is called, by up to {over.max():,.1f} kW in "
            f"{int((over > 0.0).sum())} intervals; held to no worse than usual there"
        )


RULES = (usual_case, frozen_loads, sums_below, frozen_network, limits_kept)
