"""What the meter would have shown: averages of days, regression, a flat level, before / after; adjustment.

Owns the arithmetic of one rule for many sites at once. Reads only measured values (an estimate comes in as NaN),
so that no estimate can lift a baseline. Leaves the choice of days to like_days.py, meters to meters.py, delivered
kW and money to settle.py.
"""

from dataclasses import dataclass

import numpy as np

from fleet.like_days import (
    BEFORE_AFTER,
    METHODS,
    NONE,
    REASONS,
    USED,
    Charging,
    DayFacts,
    EventFacts,
    Weather,
    choose,
)
from fleet.regression import fit
from fleet.rules import SettlementRule
from sites.units import Bools, Floats, Ints, Strings

__all__ = [
    "METHODS",
    "NONE",
    "REASONS",
    "USED",
    "Baseline",
    "Charging",
    "DayFacts",
    "EventFacts",
    "Weather",
    "baseline",
]


@dataclass(frozen=True)
class Baseline:
    """Baselines of many sites under one rule and how each came about; NaN where there is none."""

    baseline_kw: Floats
    """(site, interval) before adjustment"""
    adjusted_kw: Floats
    method: Ints
    """(site,) index into METHODS"""
    kind: Strings
    """(site,) none, ratio or additive"""
    adjustment: Floats
    """(site,) factor, or kW if additive, as applied; 1 where none"""
    adjustment_raw: Floats
    """(site,) the same before the cap; NaN where none"""
    adjustment_charged: Floats
    """(site,) what it would have been, capped, with the charging left in; NaN where nothing is taken out"""
    window_base_kw: Floats
    """(site,) mean baseline over the adjustment window"""
    doubtful: Bools
    """(site,) a reading of the adjustment window (or of those before and after) is missing or estimated"""
    used: Bools
    """(site, day)"""
    reason: Ints
    """(site, day) index into REASONS"""
    rank_value: Floats
    """(site, day) mean over the event hours"""
    day_window_kw: Floats
    """(site, day) mean over the adjustment window"""
    beyond_training_k: Floats
    """(site,) regression: how far the event's dry bulb lies outside the days it was fitted on; else NaN"""


@dataclass(frozen=True)
class _Levels:
    """Baselines before adjustment: (site, interval), (site, window interval), (site, event interval)."""

    shown_kw: Floats
    window_kw: Floats
    event_kw: Floats
    beyond_k: Floats


def baseline(day_kw: Floats, days: DayFacts, rule: SettlementRule, event: EventFacts) -> Baseline:
    """Baseline of every site under `rule`; day_kw (site, day, slot), most recent day first, NaN = not measured.

    Like days: the pool is the first Y eligible days, X of them are averaged slot by slot in local wall time, and
    the adjustment compares the event day's window with the same X days. Too few days: see rule.when_too_few.
    """
    rank_value = _mean(day_kw[:, :, event.event_slot], days.exists[None, :, event.event_slot])
    day_window = _mean(day_kw[:, :, event.window_slot], days.exists[None, :, event.window_slot])
    reason, method = choose(day_kw, days, rule, event, rank_value)
    used = reason == USED
    levels = _levels(day_kw, days, used, rule, event)
    raw_kw = np.where(event.like, levels.shown_kw, np.nan)
    adjusted, kind, applied, raw, charged, base, doubtful = _adjust(raw_kw, levels, day_kw, used, rule, event)
    around, around_doubtful = _around(event.around_kw)
    flat = method == BEFORE_AFTER
    raw_kw = np.where(flat[:, None], around[:, None], raw_kw)
    adjusted = np.where(flat[:, None], around[:, None], adjusted)
    of_days = ~flat & (method != NONE)
    return Baseline(
        baseline_kw=raw_kw,
        adjusted_kw=adjusted,
        method=np.where(flat & np.isnan(around), NONE, method),
        kind=np.where(of_days, kind, "none").astype(object),
        adjustment=np.where(of_days, applied, 1.0),
        adjustment_raw=np.where(of_days, raw, np.nan),
        adjustment_charged=np.where(of_days, charged, np.nan),
        window_base_kw=base,
        doubtful=np.where(flat, around_doubtful, of_days & doubtful),
        used=used,
        reason=reason,
        rank_value=rank_value,
        day_window_kw=day_window,
        beyond_training_k=np.where(of_days, levels.beyond_k, np.nan),
    )


def _levels(day_kw: Floats, days: DayFacts, used: Bools, rule: SettlementRule, event: EventFacts) -> _Levels:
    """What the used days say of every interval: slot by slot, by the fitted regression, or one flat level."""
    nothing = np.full(len(day_kw), np.nan)
    if rule.kind == "temperature_regression":
        return _regressed(day_kw, used, rule, event)
    if rule.kind == "maximum_base_load":
        exists = days.exists[:, event.event_slot]
        highest = np.where(exists, event.sign * day_kw[:, :, event.event_slot], -np.inf).max(axis=2)
        total = np.where(used, highest, 0.0).sum(axis=1)
        count = used.sum(axis=1)
        level = np.where(count > 0, event.sign * total / np.maximum(count, 1), np.nan)[:, None]
        counts = (len(event.slot), len(event.window_slot), len(event.event_slot))
        shown, window, inside = (np.repeat(level, number, axis=1) for number in counts)
        return _Levels(shown, window, inside, nothing)
    by_slot, _ = _average(day_kw, used)
    slots = (event.slot, event.window_slot, event.event_slot)
    shown, window, inside = (by_slot[:, at] for at in slots)
    return _Levels(shown, window, inside, nothing)


def _regressed(day_kw: Floats, used: Bools, rule: SettlementRule, event: EventFacts) -> _Levels:
    """The regression on the used days, at the dry bulb of the event day."""
    weather = event.weather
    if weather is None:
        raise ValueError("a regression needs the dry bulb")
    fitted = fit(day_kw, used, weather.weekday, weather.day_c, rule.temperature_knots_c)
    shown = fitted.at(weather.at_weekday, event.slot, weather.at_c)
    window = fitted.at(weather.window_weekday, event.window_slot, weather.window_c)
    return _Levels(
        shown, window, shown[:, weather.in_event], fitted.beyond_k(weather.at_c[:, weather.in_event])
    )


def _mean(kw: Floats, exists: Bools) -> Floats:
    """Mean over the last axis of the slots that exist; NaN if one of them is not measured, or none exists."""
    count = exists.sum(axis=-1)
    total = np.where(exists, kw, 0.0).sum(axis=-1)
    mean: Floats = np.where(count > 0, total / np.maximum(count, 1), np.nan)
    return mean


def _average(day_kw: Floats, used: Bools) -> tuple[Floats, Ints]:
    """Slot-by-slot mean over the used days (site, slot), over those with a value there, and their number."""
    held = used[:, :, None] & ~np.isnan(day_kw)
    count = held.sum(axis=1)
    total = np.where(held, day_kw, 0.0).sum(axis=1)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan), count


def _adjust(
    raw_kw: Floats, levels: _Levels, day_kw: Floats, used: Bools, rule: SettlementRule, event: EventFacts
) -> tuple[Floats, Strings, Floats, Floats, Floats, Floats, Bools]:
    """Adjusted baseline, kind, factor or kW applied, before its cap, with charging left in, window base, doubt.

    ratio: B' = B A / b; additive: B' = B + A - b, with A the event day's mean over the window and b the baseline's,
    both less the metered charging where the rule has it taken out. A small, zero or negative b makes the ratio
    meaningless, so additive takes its place. A window with a reading missing or estimated leaves the baseline
    as it is.
    """
    base = _plain_mean(levels.window_kw)
    sites = len(base)
    nan = np.full(sites, np.nan)
    if rule.adjustment == "none":
        none = np.full(sites, "none", dtype=object)
        return raw_kw, none, np.ones(sites), nan, nan, base, np.zeros(sites, dtype=np.bool_)
    level = _plain_mean(event.window_kw)
    peak = np.where(used[:, :, None] & ~np.isnan(day_kw), day_kw, 0.0).max(axis=(1, 2), initial=0.0)
    limit = np.abs(_plain_mean(levels.event_kw))
    charged = nan
    own_level, own_base = level, base
    if event.charging is not None:
        own_level, own_base = _less_charging(level, base, used, event.charging)
        _, _, with_charging, _ = _factor(level, base, peak, limit, rule)
        charged = np.where(event.charging.guarded, with_charging, np.nan)
    known, additive, applied, raw = _factor(own_level, own_base, peak, limit, rule)
    kind = np.where(known, np.where(additive, "additive", "ratio"), "none").astype(object)
    added = raw_kw + np.where(additive, applied, 0.0)[:, None]
    scaled = raw_kw * np.where(additive, 1.0, applied)[:, None]
    adjusted = np.where(known[:, None], np.where(additive[:, None], added, scaled), raw_kw)
    return adjusted, kind, applied, raw, charged, base, ~known


def _less_charging(level: Floats, base: Floats, used: Bools, charging: Charging) -> tuple[Floats, Floats]:
    """Window means of the event day and of the used days less what was metered as charging (site,)."""
    held = used & ~np.isnan(charging.day_kw)
    count = held.sum(axis=1)
    usual = np.where(held, charging.day_kw, 0.0).sum(axis=1) / np.maximum(count, 1)
    usual = np.where(count > 0, usual, np.nan)
    return (
        level - np.where(charging.guarded, charging.window_kw, 0.0),
        base - np.where(charging.guarded, usual, 0.0),
    )


def _factor(
    level: Floats, base: Floats, peak: Floats, limit: Floats, rule: SettlementRule
) -> tuple[Bools, Bools, Floats, Floats]:
    """(site,) whether both means are known, whether additive, factor or kW applied (1 unknown), before the cap."""
    known = ~np.isnan(level) & ~np.isnan(base)
    small = base <= rule.small_base_fraction * peak
    additive = small if rule.adjustment == "ratio" else np.ones(len(base), dtype=np.bool_)
    ratio = level / np.where(known & ~additive, base, 1.0)
    raw = np.where(known, np.where(additive, level - base, ratio), np.nan)
    applied = np.where(known, _capped(np.where(known, raw, 1.0), additive, limit, rule), 1.0)
    return known, additive, applied, raw


def _plain_mean(kw: Floats) -> Floats:
    """Mean over the last axis; NaN where a value is missing or there is none at all."""
    if kw.shape[-1] == 0:
        return np.full(kw.shape[:-1], np.nan)
    mean: Floats = kw.mean(axis=-1)
    return mean


def _capped(raw: Floats, additive: Bools, limit_kw: Floats, rule: SettlementRule) -> Floats:
    """The adjustment within its cap: ratio in [1-c, 1+c] or [1/(1+c), 1+c], additive within c x limit_kw."""
    if rule.cap_fraction is None:
        return raw
    cap = rule.cap_fraction
    low = 1.0 - cap if rule.cap_form == "difference" else 1.0 / (1.0 + cap)
    bound = cap * np.where(np.isnan(limit_kw), np.inf if cap else 0.0, limit_kw)
    capped: Floats = np.where(additive, np.clip(raw, -bound, bound), np.clip(raw, low, 1.0 + cap))
    return capped


def _around(around_kw: Floats) -> tuple[Floats, Bools]:
    """Mean of the readings before and after (site,), over those that are measured; doubt where one is not."""
    held = ~np.isnan(around_kw)
    count = held.sum(axis=1)
    mean = np.where(held, around_kw, 0.0).sum(axis=1) / np.maximum(count, 1)
    doubtful: Bools = np.logical_not(held.all(axis=1))
    return np.where(count > 0, mean, np.nan), doubtful
