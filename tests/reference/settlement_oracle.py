"""A settlement written a second time, in plain loops over sites, days and intervals; imports nothing of the fleet.

Only the regression's slopes are solved by numpy's least squares.

Times are aware datetimes in UTC, local time comes from zoneinfo, money is left out. Rules are plain dictionaries.
"""

from datetime import date, datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np

GOOD = ("measured", "edited")
OF_DAYS = ("like_days", "event_days", "regression", "base_load")


def settle_site(case: dict, site: str) -> dict:
    """Intervals, days and energy of one site; case holds plain values, see test_settlement_oracle.py."""
    rule, step = case["rules"][site], timedelta(minutes=case["step_minutes"])
    series = case["series"][site]
    filled = fill(case, site)
    days, method, used = choose_days(case, site)
    shown = []
    at = min(case["event_start"], case["windows"][site][0])
    while at < case["horizon_end"]:
        shown.append(at)
        at += step
    base = {at: like_value(case, site, rule, used, at) if method in OF_DAYS else None for at in shown}
    kind, applied, charged = "none", 1.0, None
    doubtful = False
    adjusted = dict(base)
    if method == "before_after":
        values, doubtful = around(case, site, rule)
        level = sum(values) / len(values) if values else None
        base = dict.fromkeys(shown, level)
        adjusted = dict(base)
        method = "before_after" if values else "none"
    elif method != "none" and rule["adjustment"] != "none":
        kind, applied, doubtful = adjustment(case, site, rule, used, guarded=True)
        if guarded(case, site, rule):
            charged = adjustment(case, site, rule, used, guarded=False)[1]
        for at in shown:
            if base[at] is not None and kind == "ratio":
                adjusted[at] = base[at] * applied
            if base[at] is not None and kind == "additive":
                adjusted[at] = base[at] + applied
    rows = {}
    energy, count, committed = 0.0, 0, 0.0
    unsure, any_reading, any_base = doubtful, False, False
    start, end = case["windows"][site]
    hours = case["step_minutes"] / 60
    for at in shown:
        kw, quality = filled.get(at, (None, "missing"))
        watched = case["event_start"] <= at < case["event_end"] or start <= at < end
        delivered = None
        if kw is not None and adjusted[at] is not None:
            delivered = adjusted[at] - kw if case["direction"] == "shed" else kw - adjusted[at]
            if watched and quality not in GOOD and delivered > 0:
                delivered = None
        unsure = unsure or (watched and quality not in GOOD)
        if start <= at < end:
            committed += case["committed"][site] * hours
            any_reading = any_reading or kw is not None
            any_base = any_base or adjusted[at] is not None
            unsure = unsure or adjusted[at] is None
            if delivered is not None:
                energy += delivered * hours
                count += 1
        rows[at] = (base[at], adjusted[at], kw, delivered, quality)
    state = "provisional" if unsure else "final"
    if not any_base:
        state = "no_baseline"
    if not any_reading:
        state = "meter_missing"
    assert series is not None
    back = taken_back(case, site, rows)
    netted = 0.0
    if rule["recovery_netting"] == "until_midnight":
        netted = None if back is None else max(back, 0.0)
    factor = None
    if count and committed > 0 and netted is not None:
        factor = (energy - netted) / committed
    return {
        "netted": netted,
        "factor": factor,
        "charged": charged,
        "beyond": beyond(case, site, used) if method == "regression" else None,
        "until_midnight": back,
        "rows": rows,
        "days": days,
        "method": method,
        "kind": kind,
        "adjustment": applied,
        "delivered_kwh": energy if count else None,
        "committed_kwh": committed,
        "state": state,
    }


def taken_back(case: dict, site: str, rows: dict) -> float | None:
    """Delivered with its sign turned, from the window's end to the end of that local day."""
    end, step = case["windows"][site][1], timedelta(minutes=case["step_minutes"])
    day, total = local(case, end - step)[0], 0.0
    for at, (_, _, _, delivered, _) in rows.items():
        if at >= end and local(case, at)[0] == day:
            if delivered is None:
                return None
            total -= delivered * case["step_minutes"] / 60
    return total


def degrees(case: dict, site: str, at: datetime) -> float | None:
    return case["dry_bulb"][site].get(at)


def slot_degrees(case: dict, site: str, day: date, slot: int) -> float | None:
    values = [degrees(case, site, at) for at in case["by_slot"].get((day, slot), [])]
    return None if not values or None in values else sum(values) / len(values)


def peak(case: dict, site: str, day: date) -> float | None:
    """Highest dry bulb of a day of which every slot is known."""
    highest = None
    for slot in range(1440 // case["step_minutes"]):
        if (day, slot) in case["by_slot"]:
            value = slot_degrees(case, site, day, slot)
            if value is None:
                return None
            highest = value if highest is None else max(highest, value)
    return highest


def stretches(value: float, knots: list[float]) -> list[float]:
    parts = [min(value, knots[0])]
    for number, knot in enumerate(knots):
        top = knots[number + 1] if number + 1 < len(knots) else 1e9
        parts.append(min(max(value - knot, 0.0), top - knot))
    return parts


def training(case: dict, site: str, used: list[date]) -> list[tuple[int, int, float, float]]:
    """(weekday, slot, kW, degC) of every measured slot of the used days."""
    rows = []
    for day in used:
        for slot in range(1440 // case["step_minutes"]):
            kw, warm = slot_value(case, site, day, slot)[1], slot_degrees(case, site, day, slot)
            if kw is not None and warm is not None:
                rows.append((day.weekday(), slot, kw, warm))
    return rows


def beyond(case: dict, site: str, used: list[date]) -> float:
    warm = [row[3] for row in training(case, site, used)]
    event = [degrees(case, site, at) for at in in_hours(case, case["event_start"], case["event_end"])]
    return max(0.0, max(event) - max(warm), min(warm) - min(event))


def regression(case: dict, site: str, rule: dict, used: list[date]) -> tuple[dict, list[float]]:
    """Level of each weekday and slot, and slopes, least squares on deviations from each group's mean."""
    key = (site, tuple(used), tuple(rule["temperature_knots_c"]))
    if key in case["fits"]:
        return case["fits"][key]
    groups: dict = {}
    for weekday, slot, kw, warm in training(case, site, used):
        groups.setdefault((weekday, slot), []).append([kw, *stretches(warm, rule["temperature_knots_c"])])
    means = {group: [sum(column) / len(rows) for column in zip(*rows)] for group, rows in groups.items()}
    off = [
        [value - mean for value, mean in zip(row, means[group])]
        for group, rows in groups.items()
        for row in rows
    ]
    matrix = np.array(off)
    slopes = np.linalg.lstsq(matrix[:, 1:], matrix[:, 0], rcond=1e-5)[0].tolist()
    levels = {
        group: mean[0] - sum(slope * part for slope, part in zip(slopes, mean[1:]))
        for group, mean in means.items()
    }
    case["fits"][key] = (levels, slopes)
    return levels, slopes


def guarded(case: dict, site: str, rule: dict) -> bool:
    return rule["pre_charge_guard"] != "off" and site in case["charging"]


def charging(case: dict, site: str, day: date, moments: list[datetime]) -> float | None:
    """Mean of the tank meter on a day at the slots of these moments; None if one is lost or none exists."""
    values = []
    for at in moments:
        found = [
            case["charging"][site].get(one) for one in case["by_slot"].get((day, local(case, at)[1]), [])
        ]
        if None in found:
            return None
        if found:
            values.append(sum(found) / len(found))
    return sum(values) / len(values) if values else None


def local(case: dict, at: datetime) -> tuple[date, int]:
    return case["local"][at]


def local_time(case: dict, at: datetime) -> tuple[date, int]:
    there = at.astimezone(ZoneInfo(case["timezone"]))
    return there.date(), (there.hour * 60 + there.minute) // case["step_minutes"]


def good_value(case: dict, site: str, at: datetime) -> float | None:
    kw, quality = case["series"][site].get(at, (None, "missing"))
    return kw if quality in GOOD else None


def slot_value(case: dict, site: str, day: date, slot: int) -> tuple[bool, float | None]:
    """Whether the slot exists on the day, and its measured value (the mean where it comes twice)."""
    found = case["by_slot"].get((day, slot), [])
    values = [good_value(case, site, at) for at in found]
    if not values:
        return False, None
    if None in values:
        return True, None
    return True, sum(values) / len(values)


def is_free(case: dict, day: date) -> bool:
    return day.weekday() >= 5 or day in case["holidays"]


def in_hours(case: dict, start: datetime, end: datetime) -> list[datetime]:
    step, at, found = timedelta(minutes=case["step_minutes"]), start, []
    # The windows of the cases lie on the grid.
    while at + step <= end:
        found.append(at)
        at += step
    return found


def window_times(case: dict, rule: dict) -> list[datetime]:
    start = case["event_start"]
    first = start - timedelta(hours=rule["adjustment_from_h"])
    return in_hours(case, first, start - timedelta(hours=rule["adjustment_to_h"]))


def complete_mean(case: dict, site: str, day: date, moments: list[datetime]) -> float | None:
    """Mean of the day's values at the slots of these moments; None if one is lost or none exists."""
    values = []
    for at in moments:
        exists, value = slot_value(case, site, day, local(case, at)[1])
        if exists and value is None:
            return None
        if exists:
            values.append(value)
    return sum(values) / len(values) if values else None


def complaint(case: dict, site: str, rule: dict, day: date, ignore_events: bool = False) -> str | None:
    """What keeps a day out of the pool."""
    event_day = local(case, case["event_start"])[0]
    split = rule["day_classes"] == "weekday_weekend"
    if split and is_free(case, event_day):
        if not is_free(case, day):
            return "other_day_type"
    elif split and (day.weekday() >= 5 or (rule["holidays"] == "as_weekend" and day in case["holidays"])):
        return "other_day_type"
    if split and day in case["holidays"] and rule["holidays"] == "excluded":
        return "holiday"
    if day in case["past"][site] and rule["exclude_event_days"] and not ignore_events:
        return "event_past"
    after = day + timedelta(days=1)
    if rule["exclude_day_before_event"] and (after == event_day or after in case["past"][site]):
        return "day_before_event"
    if rule["exclude_unusual_modes"] and case["modes"][site].get(day, "usual") != "usual":
        return "outage"
    moments = in_hours(case, case["event_start"], case["event_end"])
    if complete_mean(case, site, day, moments) is None:
        return "missing_data"
    if rule["adjustment"] != "none":
        for at in window_times(case, rule):
            exists, value = slot_value(case, site, day, local(case, at)[1])
            if exists and value is None:
                return "missing_data"
    needs = rule["kind"] == "temperature_regression" or rule["rank"] == "nearest_weather"
    return "missing_weather" if needs and peak(case, site, day) is None else None


def choose_days(case: dict, site: str) -> tuple[dict, str, list[date]]:
    """Reason per day, the method and the days averaged."""
    rule = case["rules"][site]
    if rule["kind"] == "before_after":
        return {}, "before_after", []
    event_day = local(case, case["event_start"])[0]
    moments = in_hours(case, case["event_start"], case["event_end"])
    sign = 1 if case["direction"] == "shed" else -1
    reasons, eligible, rank = {}, [], {}
    for back in range(1, rule["look_back_days"] + 1):
        day = event_day - timedelta(days=back)
        reasons[day] = complaint(case, site, rule, day)
        rank[day] = complete_mean(case, site, day, moments)
        if reasons[day] is None:
            eligible.append(day)
    if rule["low_usage_fraction"] is not None:
        again = True
        while again:
            pool = eligible[: rule["pool_days"]]
            mean = sum(rank[day] for day in pool) / max(len(pool), 1)
            low = [day for day in pool if abs(rank[day]) < rule["low_usage_fraction"] * abs(mean)]
            for day in low:
                reasons[day] = "low_usage"
                eligible.remove(day)
            again = bool(low)
    pool = eligible[: rule["pool_days"]]
    for day in eligible[rule["pool_days"] :]:
        reasons[day] = "enough_days"
    kinds = {"temperature_regression": "regression", "maximum_base_load": "base_load"}
    method = kinds.get(rule["kind"], "like_days")
    score = {day: value and sign * value for day, value in rank.items()}
    if rule["rank"] == "nearest_weather":
        today = peak(case, site, event_day)
        peaks = {day: peak(case, site, day) for day in rank}
        score = {day: None if warm is None else -abs(warm - today) for day, warm in peaks.items()}
    lack = rule["minimum_days"] - len(pool)
    if lack > 0 and rule["when_too_few"] == "highest_event_days":
        spare = [
            day
            for day in reasons
            if reasons[day] == "event_past" and complaint(case, site, rule, day, ignore_events=True) is None
        ]
        spare.sort(key=lambda day: -score[day])
        if len(spare) >= lack:
            pool, lack = sorted(pool + spare[:lack], reverse=True), 0
            method = "event_days" if rule["kind"] == "like_days" else method
    if lack > 0:
        for day in pool:
            reasons[day] = "too_few_days"
        return reasons, "before_after" if rule["when_too_few"] == "before_after" else "none", []
    used = take(pool, score, rule)
    for day in pool:
        reasons[day] = "used" if day in used else "not_ranked"
    return reasons, method, used


def take(pool: list[date], score: dict, rule: dict) -> list[date]:
    """X days; of equals the more recent one stays."""
    take_days = rule["take_days"]
    if rule["rank"] == "recent":
        return pool[:take_days]
    if rule["rank"] in ("highest", "nearest_weather"):
        return sorted(pool, key=lambda day: (-score[day], -day.toordinal()))[:take_days]
    left = list(pool)
    spare = max(len(pool) - take_days, 0)
    for turn in range(spare):
        wanted = (
            max(score[day] for day in left) if turn < (spare + 1) // 2 else min(score[day] for day in left)
        )
        left.remove(min(day for day in left if score[day] == wanted))
    return left


def like_value(case: dict, site: str, rule: dict, used: list[date], at: datetime) -> float | None:
    """Mean of the used days at this slot; none on a day of another class."""
    event_day = local(case, case["event_start"])[0]
    day = local(case, at)[0]
    if rule["day_classes"] == "weekday_weekend" and is_free(case, day) != is_free(case, event_day):
        return None
    return level_at(case, site, rule, used, at)


def level_at(case: dict, site: str, rule: dict, used: list[date], at: datetime) -> float | None:
    """What the used days say of a moment, by the rule's kind."""
    day, slot = local(case, at)
    if rule["kind"] == "maximum_base_load":
        sign = 1 if case["direction"] == "shed" else -1
        moments = in_hours(case, case["event_start"], case["event_end"])
        highest = []
        for one in used:
            values = [slot_value(case, site, one, local(case, moment)[1])[1] for moment in moments]
            highest.append(max(sign * value for value in values if value is not None))
        return sign * sum(highest) / len(highest) if highest else None
    if rule["kind"] == "temperature_regression":
        levels, slopes = regression(case, site, rule, used)
        warm = degrees(case, site, at)
        if warm is None or (day.weekday(), slot) not in levels:
            return None
        parts = stretches(warm, rule["temperature_knots_c"])
        return levels[day.weekday(), slot] + sum(slope * part for slope, part in zip(slopes, parts))
    return average(case, site, used, slot)


def average(case: dict, site: str, used: list[date], slot: int) -> float | None:
    values = [slot_value(case, site, day, slot)[1] for day in used]
    values = [value for value in values if value is not None]
    return sum(values) / len(values) if values else None


def adjustment(case: dict, site: str, rule: dict, used: list[date], guarded: bool) -> tuple[str, float, bool]:
    """Kind, factor or kW applied, and whether the window could not be used."""
    times = window_times(case, rule)
    level = [good_value(case, site, at) for at in times]
    base = [level_at(case, site, rule, used, at) for at in times]
    if None in level or None in base or not times:
        return "none", 1.0, True
    a, b = sum(level) / len(level), sum(base) / len(base)
    if guarded and rule["pre_charge_guard"] != "off" and site in case["charging"]:
        own = [case["charging"][site].get(at) for at in times]
        usual = [charging(case, site, day, times) for day in used]
        usual = [value for value in usual if value is not None]
        if None in own or not usual:
            return "none", 1.0, True
        a, b = a - sum(own) / len(own), b - sum(usual) / len(usual)
    peak = -1e99
    for day in used:
        for slot in range(1440 // case["step_minutes"]):
            value = slot_value(case, site, day, slot)[1]
            if value is not None:
                peak = max(peak, value)
    additive = rule["adjustment"] == "additive" or b <= max(rule["small_base_fraction"] * peak, 0.0)
    cap = rule["cap_fraction"]
    if additive:
        change = a - b
        if cap is not None:
            hours = in_hours(case, case["event_start"], case["event_end"])
            mean = [level_at(case, site, rule, used, at) for at in hours]
            if None in mean:
                return "additive", change if cap else 0.0, False
            bound = cap * abs(sum(mean) / len(mean))
            change = max(-bound, min(bound, change))
        return "additive", change, False
    ratio = a / b
    if cap is not None:
        low = 1 - cap if rule["cap_form"] == "difference" else 1 / (1 + cap)
        ratio = max(low, min(1 + cap, ratio))
    return "ratio", ratio, False


def around(case: dict, site: str, rule: dict) -> tuple[list[float], bool]:
    """Measured values before and after, and whether one is not."""
    before_end = case["event_start"] - timedelta(hours=rule["before_buffer_h"])
    after_start = case["event_end"] + timedelta(hours=rule["after_buffer_h"])
    times = in_hours(case, before_end - timedelta(hours=rule["before_h"]), before_end)
    times += in_hours(case, after_start, after_start + timedelta(hours=rule["after_h"]))
    values = [good_value(case, site, at) for at in times]
    return [value for value in values if value is not None], None in values


def fill(case: dict, site: str) -> dict:
    """The site's readings with gaps estimated: straight lines, then like days."""
    step = timedelta(minutes=case["step_minutes"])
    series, filled = case["series"][site], {}
    start, end = case["windows"][site]
    edges = [case["event_start"], case["event_end"], start, end]
    longest = 120 // case["step_minutes"]
    event_days = {*case["past"][site], local(case, case["event_start"])[0]}
    for at in case["grid"]:
        kw, quality = series.get(at, (None, "missing"))
        if kw is not None:
            filled[at] = (kw, quality)
            continue
        left, right = at - step, at + step
        while left >= case["grid"][0] and good_value(case, site, left) is None:
            left -= step
        while right <= case["grid"][-1] and good_value(case, site, right) is None:
            right += step
        inside = left >= case["grid"][0] and right <= case["grid"][-1]
        crosses = any(left < edge <= right for edge in edges)
        if inside and not crosses and (right - left) // step - 1 <= longest:
            a, b = good_value(case, site, left), good_value(case, site, right)
            filled[at] = (a + (b - a) * ((at - left) / (right - left)), "estimated_line")
            continue
        shut = case["event_start"] <= at < case["event_end"] or start <= at < end
        day, slot = local(case, at)
        values, back = [], day - timedelta(days=1)
        while len(values) < 3 and back >= case["first_day"]:
            value = slot_value(case, site, back, slot)[1]
            if is_free(case, back) == is_free(case, day) and back not in event_days and value is not None:
                values.append(value)
            back -= timedelta(days=1)
        if len(values) == 3 and not shut:
            filled[at] = (sum(values) / 3, "estimated_like_day")
    return filled
