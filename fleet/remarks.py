"""What a reader of a statement should know besides the figures: readings and days that look odd.

Owns which sites are pointed out and the words. Nothing is edited for it. The tests are validation.py's and
estimation.py's.
"""

from collections.abc import Sequence
from typing import Final, TypeAlias

import numpy as np
import pandas as pd

from fleet.baseline import NONE, Baseline
from fleet.callfacts import CallFacts, Plan
from fleet.estimation import spikes
from fleet.history import hours
from fleet.like_days import BEFORE_AFTER
from fleet.settlement import Trace
from fleet.validation import STUCK_H, negative, shifted_h, stuck
from sites.units import Bools

Remark: TypeAlias = tuple[str, Bools]
"""Words, and the sites (site,) they hold of."""
PRE_CHARGE_WARNING: Final = 1.10
"""Load in the adjustment window above like days by more than this, after notice, is pointed out."""
MOST_NAMED: Final = 5


def remarks(call: CallFacts, plan: Plan, found: Baseline, trace: Trace) -> tuple[Remark, ...]:
    """Every remark that can be made, in a fixed order, with the plan's sites it holds of."""
    with_base = found.window_base_kw > 0.0
    above = trace.window_kw > PRE_CHARGE_WARNING * np.where(with_base, found.window_base_kw, np.inf)
    late = [
        call.called_at is not None and call.called_at < plan.event_start - hours(rule.adjustment_to_h)
        for rule in plan.rules
    ]
    adjusted = np.array([kind != "none" for kind in found.kind])
    of_days = np.array([rule.kind != "before_after" for rule in plan.rules])
    spiky = spikes(trace.kw[:, trace.event_day])
    return (
        (
            "load in the adjustment window more than 10 % above like days "
            "after notice; look for early charging of the tank",
            above & adjusted & late,
        ),
        (
            "too few like days; the readings before and after the event take their place",
            (found.method == BEFORE_AFTER) & of_days,
        ),
        (
            "too few like days, or none at all, and nothing takes their place; nothing is paid or charged on them",
            (found.method == NONE) & of_days,
        ),
        ("readings of the adjustment window, or before and after, not measured", found.doubtful),
        ("a spike on the event day (highest above third highest by over 180 %)", spiky),
        *_of_readings(call, plan, found, trace),
    )


def named(site_ids: Sequence[str], parts: Sequence[Sequence[Remark]]) -> list[str]:
    """The remarks of all parts of a call, one after the other, that hold of some site, naming the first few."""
    notes = []
    for same in zip(*parts):
        mask = np.concatenate([own for _, own in same])
        sites = [site for site, hit in zip(site_ids, mask.tolist()) if hit]
        if sites:
            more = f" and {len(sites) - MOST_NAMED} more" if len(sites) > MOST_NAMED else ""
            notes.append(f"{same[0][0]}: {', '.join(sites[:MOST_NAMED])}{more}")
    return notes


def _of_readings(call: CallFacts, plan: Plan, found: Baseline, trace: Trace) -> tuple[Remark, ...]:
    """Readings of the event day that look wrong, and like days on which the plant ran unusually."""
    day_kw, step_h = trace.kw[:, trace.event_day], trace.step_h
    exporting = _exporting(call)
    export = np.array([site in exporting for site in plan.site_ids])
    used = found.used[:, ::-1, None]
    first = int(trace.grid.slot[np.searchsorted(trace.starts, plan.event_start)])
    before = trace.kw[:, : trace.event_day, :first]
    held = used & ~np.isnan(before)
    total = np.where(held, before, 0.0).sum(axis=1)
    usual = np.where(held.any(axis=1), total / np.maximum(held.sum(axis=1), 1), np.nan)
    shift = shifted_h(day_kw, usual, first, step_h)
    odd = (used[:, :, 0] & (trace.modes[:, : trace.event_day] != "usual")).any(axis=1)
    return (
        ("readings below zero on a meter that only delivers", negative(day_kw, export)),
        (f"one value unchanged for {STUCK_H:g} h or longer on the event day", stuck(day_kw, step_h)),
        ("the event day fits its like days better when shifted by an hour", shift != 0.0),
        ("the rule lets days count on which the plant ran unusually (tank out, recovery, ...)", odd),
    )


def _exporting(call: CallFacts) -> set[str]:
    """Sites with a meter that can deliver backwards."""
    mapped = call.meter_map
    if mapped.empty:
        return set()
    sign = mapped["sign"].fillna(1) if "sign" in mapped else 1
    role = mapped["role"].fillna("building") if "role" in mapped else "building"
    back = (pd.Series(sign, index=mapped.index) < 0) | (pd.Series(role, index=mapped.index) == "generation")
    return set(mapped.loc[back, "site_id"].astype(str))
