"""Rules on the choice of days: which days were used and why each other was not, from the frozen rule.

The rule is applied again to the recorded days, holidays, plant days and earlier calls. Shapes: R sites of one rule,
S called sites, D local days (the event's last).
"""

import numpy as np
import pandas as pd

from fleet.audit.evidence import utc_naive
from fleet.audit.findings import Findings
from fleet.audit.settled import Days, Settled, days_of, local_day
from fleet.rules import SettlementRule
from sites.units import AnyArray, Bools, Floats, Ints


def days_chosen(made: Settled, found: Findings) -> None:
    """Reason, mode and use of every day by the frozen rule, holidays, plant days and earlier calls."""
    days, sheet = days_of(made), made.sheet("days")
    wanted = np.full(len(sheet.frame), "", dtype=object)
    rank = by_day(sheet.numbers("rank_value"), days.row)
    base = by_day(sheet.numbers("window_base_kw"), days.row)
    told = by_day(sheet.frame["reason"].to_numpy(dtype=object), days.row)
    method = made.sites("method")
    for rule in dict.fromkeys(made.rules):
        rows = sites_of(made, rule)
        reason = _reasons(made, days, rule, rows, rank[rows], base[rows], told[rows], method[rows])
        own = days.row[rows]
        wanted[own[own >= 0]] = reason[own >= 0]
    found.same("days chosen", sheet, "reason", wanted)
    found.same("days chosen", sheet, "used", wanted == "used")
    found.same("days chosen", sheet, "mode", _modes(made, sheet.frame))
    count = pd.Series(wanted != "", index=sheet.frame.index)
    wrong = sheet.frame.duplicated(["site_id", "day"], keep=False).to_numpy() | ~count.to_numpy()
    found.wrong(
        "days chosen", sheet, "day", wrong, sheet.frame["day"].to_numpy(), "each day of the look-back once"
    )


def sites_of(made: Settled, rule: SettlementRule) -> Ints:
    """Positions of the sites under a rule."""
    return np.array([row for row, other in enumerate(made.rules) if other == rule], dtype=np.int64)


def by_day(values: AnyArray, row: Ints) -> AnyArray:
    """A column of table days as (S, D); NaN or "" where there is no row."""
    none = "" if values.dtype == object else np.nan
    padded = np.append(values, none) if values.dtype != object else np.array([*values, none], dtype=object)
    return padded[row]


def free_days(made: Settled, day: AnyArray) -> Bools:
    """Weekends and holidays."""
    holidays = made.call.frozen.get("holidays")
    dates = np.zeros(0, dtype="datetime64[D]")
    if holidays is not None:
        dates = holidays["date"].to_numpy().astype("datetime64[D]")
    free: Bools = ((day.astype(np.int64) + 3) % 7 >= 5) | np.isin(day, dates)
    return free


def _modes(made: Settled, frame: pd.DataFrame) -> AnyArray:
    """How each plant ran on each day of table days; no frozen row = usual."""
    plant = made.call.frozen.get("plant_days")
    if plant is None or plant.empty:
        return np.full(len(frame), "usual", dtype=object)
    known = plant.drop_duplicates(["site_id", "day"], keep="last").set_index(["site_id", "day"])["mode"]
    keys = pd.MultiIndex.from_frame(frame[["site_id", "day"]])
    return known.reindex(keys).fillna("usual").to_numpy(dtype=object)


def _reasons(
    made: Settled,
    days: Days,
    rule: SettlementRule,
    rows: Ints,
    rank: Floats,
    base: Floats,
    told: AnyArray,
    method: AnyArray,
) -> AnyArray:
    """Reason of every (site of the rule, day) by the rule, days newest last and the event's own at the end.

    Low usage and event days that fill the pool are taken as told; what is chosen among the others is not.
    """
    peak_c = by_day(made.sheet("days").numbers("peak_dry_bulb_c"), days.row)[rows]
    reason = _first_reasons(made, days, rule, rows, rank, base, peak_c)
    reason[:, -1] = "event_day"
    eligible = reason == "used"
    if rule.kind == "before_after":
        return np.where(eligible, "not_ranked", reason)
    low = eligible & (told == "low_usage") & (rule.low_usage_fraction is not None)
    reason, eligible = np.where(low, "low_usage", reason), eligible & ~low
    newest = np.cumsum(eligible[:, ::-1], axis=1)[:, ::-1]
    pool = eligible & (newest <= rule.pool_days)
    reason = np.where(eligible & ~pool, "enough_days", reason)
    short = pool.sum(axis=1) < rule.minimum_days
    ways = ("event_days", "regression", "base_load")
    filled = np.isin(method.astype(str), ways) & (rule.when_too_few == "highest_event_days")
    # An event day that entered the pool may still be left out when the days are ranked.
    added = filled[:, None] & np.isin(told.astype(str), ("used", "not_ranked")) & (reason == "event_past")
    short &= ~added.any(axis=1)
    score = made.sign * rank
    if rule.rank == "nearest_weather":
        score = -np.abs(peak_c - peak_c[:, -1:])
    taken = _taken(pool | added, score, rule) & ~short[:, None]
    reason = np.where(pool | added, np.where(taken, "used", "not_ranked"), reason)
    return np.where(short[:, None] & pool, "too_few_days", reason)


def _first_reasons(
    made: Settled,
    days: Days,
    rule: SettlementRule,
    rows: Ints,
    rank: Floats,
    base: Floats,
    peak_c: Floats,
) -> AnyArray:
    """ "used" for every day that may enter the pool, else the first thing that speaks against it (site, day)."""
    age = len(days.day) - 1 - np.arange(len(days.day))
    free_event = bool(free_days(made, days.day[-1:])[0])
    other = np.zeros(len(days.day), dtype=np.bool_)
    if rule.day_classes != "all_days":
        free = days.weekend | days.holiday
        other = ~free if free_event else days.weekend if rule.holidays == "excluded" else free
    excluded = rule.holidays == "excluded" and rule.day_classes == "weekday_weekend"
    past = _past_days(made, days)[rows]
    after = np.concatenate([past[:, 1:], np.ones((len(rows), 1), dtype=np.bool_)], axis=1)
    after[:, -2:-1] = True
    needs_window = rule.kind != "before_after" and rule.adjustment != "none"
    lost = np.isnan(rank) | (needs_window & np.isnan(base))
    usual = _mode_usual(made, days)[rows]
    tests = [
        (age > rule.look_back_days, "beyond_look_back"),
        (other, "other_day_type"),
        (days.holiday & excluded, "holiday"),
        (past & rule.exclude_event_days, "event_past"),
        (after & rule.exclude_day_before_event, "day_before_event"),
        (~usual & rule.exclude_unusual_modes, "outage"),
        (lost, "missing_data"),
        (np.isnan(peak_c) & rule.needs_weather, "missing_weather"),
    ]
    shape = (len(rows), len(days.day))
    masks = [np.broadcast_to(mask, shape) for mask, _ in tests]
    return np.select(masks, [name for _, name in tests], "used").astype(object)


def _taken(pool: Bools, score: Floats, rule: SettlementRule) -> Bools:
    """X of the pool by rank, days newest last; of equal days the more recent stays."""
    if rule.rank == "recent":
        return pool & (np.cumsum(pool[:, ::-1], axis=1)[:, ::-1] <= rule.take_days)
    size = pool.sum(axis=1)[:, None]
    newest = pool.shape[1] - 1 - np.arange(pool.shape[1])[None, :]
    key = np.where(pool, score, -np.inf)
    order = np.lexsort((np.broadcast_to(newest, key.shape), -key), axis=1)
    place = np.empty_like(order)
    np.put_along_axis(place, order, np.broadcast_to(np.arange(order.shape[1]), order.shape), axis=1)
    if rule.rank in ("highest", "nearest_weather"):
        return pool & (place < rule.take_days)
    spare = np.maximum(size - rule.take_days, 0)
    older = np.lexsort((np.broadcast_to(-newest, key.shape), -key), axis=1)
    from_top = np.empty_like(older)
    np.put_along_axis(from_top, older, np.broadcast_to(np.arange(older.shape[1]), older.shape), axis=1)
    middle: Bools = pool & (from_top >= (spare + 1) // 2) & (place < size - spare // 2)
    return middle


def _past_days(made: Settled, days: Days) -> Bools:
    """(S, D) local days of a site's earlier real and test calls, by the frozen list."""
    zone = str(made.settings["timezone"])
    calls = pd.DataFrame(made.call.frozen_json.get("calls", {}).get("calls", []))
    mask = np.zeros((len(made.site_id), len(days.day)), dtype=np.bool_)
    if calls.empty:
        return mask
    calls = calls[calls["purpose"].isin(("real", "test"))]
    day = local_day(utc_naive(pd.to_datetime(calls["window_start"], utc=True)), zone)
    return _mark(mask, made, calls["site_id"], day, days)


def _mode_usual(made: Settled, days: Days) -> Bools:
    """(S, D) the plant ran as usual."""
    plant = made.call.frozen.get("plant_days")
    mask = np.zeros((len(made.site_id), len(days.day)), dtype=np.bool_)
    if plant is None or plant.empty:
        return ~mask
    odd = plant[plant["mode"] != "usual"]
    return ~_mark(mask, made, odd["site_id"], odd["day"].to_numpy().astype("datetime64[D]"), days)


def _mark(mask: Bools, made: Settled, site_id: pd.Series, day: AnyArray, days: Days) -> Bools:
    """Sets (site, day) in a mask; the event's own day and later ones stay out."""
    site = pd.Index(made.site_id).get_indexer(pd.Index(site_id))
    at = (day - days.day[0]).astype(np.int64)
    held = (site >= 0) & (at >= 0) & (at < len(days.day) - 1)
    mask[site[held], at[held]] = True
    return mask
