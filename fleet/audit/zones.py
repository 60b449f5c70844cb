"""Rules on the zones of the called sites: how far they drift, and how far they may.

The rise is stepped again from what goes unmet because of the event, each interval from the recorded end of the one
before, so that a wrong number shows in its own row. Shapes: R called sites, T intervals.
"""

from typing import Any

import numpy as np

from fleet.audit.case import Case
from fleet.audit.findings import Findings
from sites import comfort
from sites.roster import Buildings
from sites.units import Floats

UNMET_KW_TH = 1e-6
SUPPLY_KW_TH = 1e-3
"""Rounding of unmet load held against a cap on the supply water."""
"""Load left unmet below this is rounding."""


def zone_rise(case: Case, found: Findings) -> None:
    """Air, mass and mean rise of every interval from the two-node zone; net = extra unmet - pull-down."""
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    rise, mass = book.grid("intervals", "zone_rise_k"), book.grid("intervals", "zone_mass_rise_k")
    net = _extra_unmet(case) - book.grid("intervals", "pull_down_kw_th")
    zone = comfort.two_node(_buildings(case), book.clock.step_h)
    zone = zone.take(np.repeat(np.arange(rise.shape[0]), rise.shape[1]))
    start = np.zeros((rise.shape[0], 1))
    before = [np.concatenate([start, node[:, :-1]], axis=1).ravel() for node in (rise, mass)]
    ends = comfort.advance(zone, before[0], before[1], net.ravel())
    for name, end in zip(("zone_rise_k", "zone_mass_rise_k", "zone_mean_rise_k"), ends, strict=True):
        found.equal("zone rise", sheet, name, end)


def ceiling(case: Case, found: Findings) -> None:
    """The site's own ceiling on the rise in occupied hours."""
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    limit = np.where(case.occupied[book.called], book.fact("rise_limit_k", book.called)[:, None], np.inf)
    found.most("zone ceiling", sheet, "zone_rise_k", limit.ravel())


def supply(case: Case, found: Findings) -> None:
    """The cap on the building's supply water, in the window: water that is cooled mixed with water that is not."""
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    cap, load = book.fact("supply_cap_c", book.called), book.grid("intervals", "cooling_load_kw_th")
    cold, back = (book.fact(name, book.called)[:, None] for name in ("supply_c", "return_c"))
    share = np.divide(cap[:, None] - cold, back - cold, out=np.full_like(cold, np.inf), where=back > cold)
    most = np.where(book.inside() & ~np.isnan(cap)[:, None], share * load + SUPPLY_KW_TH, np.inf)
    found.most("supply cap", sheet, "unmet_kw_th", most.ravel())


def drift(case: Case, found: Findings) -> None:
    """Drift limits in occupied hours: every window of each length at once."""
    book, sheet = case.evidence, case.evidence.sheets["windows"]
    rise = book.grid("intervals", "zone_rise_k")
    excess = comfort.drift_excess_k(rise, case.occupied[book.called], book.clock.step_h)
    words = np.array([f"{value:.6g} K over the limits on drifts" for value in excess], dtype=object)
    found.wrong("zone drift", sheet, "peak_zone_rise_k", excess > 1e-9, words, "0 K or less")


def unmet_where_none_may_be(case: Case, found: Findings) -> None:
    """No extra unmet load at sites that allow none, and none after any site's window."""
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    _, end = book.window()
    after = np.arange(book.clock.count)[None, :] >= end[:, None]
    never = book.sites["no_unmet"].astype("boolean").fillna(False).to_numpy(dtype=np.bool_)[book.called]
    extra = _extra_unmet(case)
    wrong = (after | never[:, None]) & (extra > UNMET_KW_TH)
    usual = book.grid("intervals", "usual_unmet_kw_th")
    found.wrong("unmet load", sheet, "unmet_kw_th", wrong.ravel(), (usual + extra).ravel(), usual.ravel())


def pull_down_outside(case: Case, found: Findings) -> None:
    """A zone is brought back only outside the window, and only while it is warm."""
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    rise = book.grid("intervals", "zone_rise_k")
    before = np.concatenate([np.zeros((rise.shape[0], 1)), rise[:, :-1]], axis=1)
    pull_down = book.grid("intervals", "pull_down_kw_th")
    wrong = (pull_down > 0.0) & (book.inside() | (before <= 0.0))
    found.wrong("pull-down", sheet, "pull_down_kw_th", wrong.ravel(), pull_down.ravel(), "0")


def _extra_unmet(case: Case) -> Floats:
    """(R, T) unmet because of the event."""
    book = case.evidence
    extra: Floats = book.grid("intervals", "unmet_kw_th") - book.grid("intervals", "usual_unmet_kw_th")
    return extra


def _buildings(case: Case) -> Buildings:
    """The zone parameters of the called sites as the model reads them; all else is empty."""
    book = case.evidence
    names = ("air_kwh_per_k", "mass_kwh_per_k", "coupling_kw_per_k", "envelope_kw_per_k")
    zone: dict[str, Any] = {name: book.fact(name, book.called) for name in names}
    other: dict[str, Any] = dict.fromkeys(
        (n for n in Buildings.__dataclass_fields__ if n not in zone), np.zeros(book.called.size)
    )
    return Buildings(**(other | zone))


RULES = (zone_rise, ceiling, supply, drift, unmet_where_none_may_be, pull_down_outside)
