"""The reckoning of one site as a page of text; every figure stands in the document of reckoning.py."""

from typing import Any, Final

from fleet.words import plain

PARTS: Final = {
    "window": "adjustment window",
    "event": "event",
    "before": "before the event",
    "after": "after the event",
}


def reckoning_lines(found: dict[str, Any]) -> list[str]:
    """The page, line by line."""
    site, rule = found["site"], found["rule"]
    lines = [
        f"RECKONING  event {found['event_id']}  site {plain(found['site_id'])}  settlement revision "
        f"{found['revision']}  state {site['state']}",
        f"rule {rule['name']} version {rule['version']} on the {rule['stream']} meter, as frozen with the call: "
        f"method {site['method']}",
        f"source: {found['source'] or 'a rule of the fleet'}",
    ]
    if site["why"]:
        lines.append(f"excused: {plain(site['why'])}")
    return [
        *lines,
        "",
        *_day_lines(found),
        *_slot_lines(found),
        *_adjustment_lines(found),
        *_interval_lines(found),
        *_money_lines(found),
    ]


def _kw(value: float | None, width: int = 12, digits: int = 3) -> str:
    return f"{'-':>{width}}" if value is None else f"{value:>{width},.{digits}f}"


def _day_lines(found: dict[str, Any]) -> list[str]:
    weather = any(day["peak_dry_bulb_c"] is not None for day in found["days"])
    guarded = any(day["window_charging_kw"] is not None for day in found["days"])
    heading = f"{'day':<12}{'used':<6}{'reason':<18}{'plant':<13}{'event mean':>12}{'window mean':>13}"
    heading += f"{'charging':>12}" if guarded else ""
    heading += f"{'peak degC':>12}" if weather else ""
    lines = ["1. days considered, most recent first; kW over the event hours and over the adjustment window"]
    lines.append("   " + heading)
    for day in found["days"]:
        line = f"{day['day']:<12}{'yes' if day['used'] else 'no':<6}{day['reason']:<18}{day['mode']:<13}"
        line += _kw(day["rank_value"]) + _kw(day["window_base_kw"], 13)
        line += _kw(day["window_charging_kw"]) if guarded else ""
        line += _kw(day["peak_dry_bulb_c"], 12, 1) if weather else ""
        lines.append("   " + line)
    return [*lines, ""]


def _slot_lines(found: dict[str, Any]) -> list[str]:
    lines = ["2. measured kW slot by slot in local wall time, and their mean"]
    for slot in found["slots"]:
        values = [value for value in slot["kw_by_day"].values() if value is not None]
        summed = " + ".join(f"{value:.3f}" for value in values) or "nothing measured"
        mean = "" if slot["mean_kw"] is None else f"  / {len(values)} = {slot['mean_kw']:,.3f}"
        lines.append(f"   {PARTS[slot['part']]:<18}{slot['local_time']}  {summed}{mean}")
    if found["site"]["method"] == "regression":
        lines.append("   the baseline is their regression on weekday, slot and dry bulb, at the event day's")
    if found["site"]["method"] == "base_load":
        lines.append("   the baseline is the mean of each day's extreme reading in the event hours")
    return [*lines, ""]


def _adjustment_lines(found: dict[str, Any]) -> list[str]:
    own = found["adjustment"]
    if own["kind"] == "none":
        return ["3. adjustment: none", ""]
    a, b = own["event_day_window_kw"], own["used_days_window_kw"]
    lines = [
        f"3. adjustment ({own['kind']}) from {own['from_h']:g} to {own['to_h']:g} h before the event",
        f"   event day's window {_kw(a, 0)} kW; used days' {_kw(b, 0)} kW",
    ]
    if own["guard"] != "none":
        lines.append(
            f"   less the {own['guard']} meter: event day {_kw(own['event_day_charging_kw'], 0)} kW, used days "
            f"{_kw(own['used_days_charging_kw'], 0)} kW"
        )
    cap = "no cap"
    if own["cap_fraction"] is not None:
        low, high = own["cap"]
        cap = f"within {low:.4f} to {high:.4f}"
        if own["kind"] == "additive":
            cap = f"within {own['cap_fraction']:g} x the baseline's mean over the event"
    lines.append(f"   before the cap {own['raw']:.6f}; {cap}; applied {own['applied']:.6f}")
    if own["with_charging"] is not None:
        lines.append(f"   with the charging left in it would have been {own['with_charging']:.6f}")
    return [*lines, ""]


def _interval_lines(found: dict[str, Any]) -> list[str]:
    lines = [
        "4. intervals, kW; delivered is positive in the event's direction; * = not in the site's own window",
        f"   {'local start':<27}{'baseline':>12}{'adjusted':>12}{'metered':>12}{'delivered':>12}"
        f"{'committed':>12}  quality",
    ]
    for row in found["intervals"]:
        columns = ("baseline_kw", "adjusted_baseline_kw", "metered_kw", "delivered_kw", "committed_kw")
        cells = "".join(_kw(row[name]) for name in columns)
        mark = "" if row["in_window"] else "*"
        lines.append(f"   {row['local_time'] + mark:<27}{cells}  {row['quality']}")
    return [*lines, ""]


def _hour_lines(found: dict[str, Any]) -> list[str]:
    """Hour by hour, with what counts where the rule looks at hours."""
    by_hour = found["rule"]["performance_by"] == "hour"
    return [
        f"   hour {row['hour']}: committed {_kw(row['committed_kwh'], 0)} kWh, delivered "
        f"{_kw(row['delivered_kwh'], 0)} kWh"
        + (f", counts {_kw(row['counted_kwh'], 0)} kWh" if by_hour else "")
        for row in found["hours"]
    ]


def _money_lines(found: dict[str, Any]) -> list[str]:
    energy, money, currency = found["energy"], found["money"], found["currency"]
    none = "undefined"
    factor, share = (
        none if energy[name] is None else f"{energy[name]:.6f}"
        for name in ("performance_factor", "paid_share")
    )
    committed, delivered = energy["committed_kwh"], energy["delivered_kwh"]
    off = energy["netted_kwh"]
    paid_on = None if delivered is None or off is None else delivered - off
    lack = None if paid_on is None else max(committed - paid_on, 0.0)
    midnight, full = energy["recovery_until_midnight_kwh"], energy["recovery_until_full_kwh"]
    lines = [
        f"5. performance and money in {currency}, from the site's side",
        f"   {found['order_of_rounding']}",
        *_hour_lines(found),
        f"   committed {committed:,.3f} kWh, delivered {_kw(delivered, 0)} kWh, factor {factor}, share {share}",
        f"   capacity {money['capacity_payment_per_kwh']:g} x {committed:,.3f} kWh x {share} = "
        f"{money['capacity_payment']}",
        f"   energy   {money['energy_payment_per_kwh']:g} x {_kw(paid_on, 0)} kWh (not below 0) = "
        f"{money['energy_payment']}",
        f"   penalty  {money['penalty_per_kwh']:g} x {_kw(lack, 0)} kWh lacking = {money['penalty']}",
        f"   total    {money['total']}",
    ]
    if found["rule"]["netting"] == "portfolio":
        lines.append("   settled as a portfolio: each line is this site's part of the joint one")
    if found["rule"]["firm_level_kw"] is not None:
        lines.append(
            f"   the penalty holds {found['rule']['firm_level_charge_per_kwh']:g} per kWh beyond the firm level "
            f"of {found['rule']['firm_level_kw']:g} kW"
        )
    nets = found["rule"]["recovery_netting"] != "none"
    if nets:
        lines.insert(
            3 + len(found["hours"]),
            f"   taken off by rule: {_kw(off, 0)} kWh taken back after the window, so {_kw(paid_on, 0)} kWh count",
        )
    before = money["from_revision"]
    after = "first revision" if before is None else f"difference to revision {before}"
    lines += [
        f"   posted   {money['posted']} ({after})",
        f"   taken back afterwards{'' if nets else ', not netted'}: {_kw(midnight, 0)} kWh until midnight, "
        f"{_kw(full, 0)} kWh until the tank is full",
    ]
    return lines
