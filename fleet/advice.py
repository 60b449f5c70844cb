"""What an order says besides its steps: conditions, levels to stop at, restart, recharge, cautions, phrases.

Owns the standing words of an order; the values in them come from the record through called.py. The numbers
below are the trade's common practice, from memory; the machine's maker, local codes and the licensed operator
come before them, and every page says so.
"""

import math
from typing import Final

import pandas as pd

from fleet.called import CalledSite

SUPPLY_MARGIN_K: Final = 2.0
"""Supply water this far over its set-point for SUPPLY_MINUTES ends the event (common practice, no source)."""
SUPPLY_MINUTES: Final = 10
COLD_BRINE_C: Final = (1.0, 2.0)
"""Leaving brine must be above this before a plant that made ice cools again (common practice, no source)."""
RESTART_LIMIT_FRACTION: Final = 0.5
RESTART_MINUTES: Final = 15

PEAK_MINUTES: Final = 15
"""The building over its highest kW for so long ends an absorb: a common demand interval."""

RECOVERIES: Final = {
    "usual": "in the usual hours",
    "now": "as soon as the event is over",
    "delayed": "in the usual charging hours, but not in the first two of them",
    "night": "at night, 22:00 to 06:00",
    "midday": "around midday, 10:00 to 15:00",
    "capped": "at any hour, but with the building's meter under {peak}",
}
"""When the tank is brought back to its usual level."""

BANNERS: Final = {
    "real": "REAL EVENT",
    "test": "TEST - THIS IS A TEST EVENT - carry it out as you would a real one - TEST",
    "rehearsal": "REHEARSAL - DO NOT ACT ON THIS ORDER - nothing is to be switched - REHEARSAL",
}
PHRASES: Final = {
    "inhibit": (
        "Inhibit the start of {tags}",
        "controller shows start inhibited",
        "hold it off and ring",
    ),
    "demand_limit": (
        "Set the demand limit of {tags}",
        "% load at or under the limit",
        "ring; change no protection",
    ),
    "off": (
        "Stop {tags} by the controller, never the disconnect",
        "amps to zero, pump off after its delay, valve shut; off until its restart",
        "leave it running and ring",
    ),
    "demand_limit_removed": (
        "Remove the demand limit: {tags}",
        "panel shows the limit gone",
        "ring",
    ),
    "inhibit_removed": (
        "Remove the start inhibit of {tags}",
        "controller shows it ready",
        "ring",
    ),
    "restart": (
        "Let {tags} restart, load limited (see RESTART)",
        "flow and amps up",
        "wait for its timer; never force it",
    ),
    "recharge_may_start": (
        "Recharge may start: {tags}",
        "tank level rises",
        "ring",
    ),
    "full_by": (
        "Back at its usual level: {tags}",
        "tank's own level signal",
        "ring",
    ),
    "charge_start": (
        "Start charging: {tags} into the tank",
        "flow through the tank, % load up, levels as in usual charging",
        "wait for its timer, never force it; ring",
    ),
    "charge_to": (
        "Chillers carry the building first; charge {tags} at the end",
        "tank level rises. At its full signal: stop charging, serve the building",
        "ring",
    ),
    "spare_tank": (
        "Chillers carry the building; the tank gives nothing: {tags} at the end",
        "tank level steady, % load up",
        "ring",
    ),
    "charge_end": (
        "End this charging: {tags} back to the usual plan",
        "controller on its own schedule again",
        "ring",
    ),
    "usual_by": (
        "Down at its usual level: {tags}",
        "tank's own level signal",
        "ring",
    ),
    "above_usual": (
        "Still above its usual level at the end of the plan: {tags} then",
        "tank level about there",
        "no need to ring",
    ),
    "not_full": (
        "NOT full by the end of the plan: {tags} then",
        "tank level about there",
        "ring",
    ),
}


def phrase(site: CalledSite, action: str) -> tuple[str, str, str]:
    """What to do, what is then seen, what if not: of an action at a site."""
    never = pd.isna(site.window.full_again_at)
    if action == "full_by" and never:
        return PHRASES["not_full"]
    if action == "usual_by" and never:
        return PHRASES["above_usual"]
    charges = any(step.action == "charge_start" for step in site.steps)
    return PHRASES["spare_tank" if action == "charge_to" and not charges else action]


def before(site: CalledSite) -> tuple[str, ...]:
    """Conditions before the start."""
    if site.absorbs:
        return _before_charging(site)
    low, asked = float(site.window.inventory_low_start_kwh_th), []
    if site.tanks:
        tags = ", ".join(site.words.tag(tank.tank_id) for tank in site.tanks)
        whole = site.words.energy(site.capacity_kwh_th)
        asked.append(f"{tags}: at least {site.level(low)}, of {whole}")
    asked.append("no alarm standing on any machine, pump or tank")
    if site.has_ice:
        asked.append("brine flow proven")
    elif site.tanks:
        asked.append("water flow through the tank proven")
    return tuple(asked)


def _before_charging(site: CalledSite) -> tuple[str, ...]:
    """Conditions before the tanks are made to charge: room in them by the high estimate, and what guards them."""
    tags = ", ".join(site.words.tag(tank.tank_id) for tank in site.tanks)
    most = site.level(float(site.window.inventory_low_start_kwh_th))
    return (
        f"{tags}: at most {most}, of {site.words.energy(site.capacity_kwh_th)}",
        "the tank's own full signal works",
        "no alarm standing on any machine, pump or tank",
        "brine flow proven, freeze protection on" if site.has_ice else "water flow through the tank proven",
    )


def stop(site: CalledSite) -> tuple[str, ...]:
    """Levels and temperatures at which the operator ends the event early."""
    say, facts, levels = site.words, site.facts, []
    if site.absorbs:
        levels.append("the tank's own full signal: charging ends, the building is served on")
        levels.append(f"the building's meter over {site.highest_kw:,.0f} kW for {PEAK_MINUTES} min")
    elif site.tanks and facts.held_back_kwh_th > 0.0:
        levels.append(f"tanks down to {site.level(facts.held_back_kwh_th)}: that much is held back")
    elif site.tanks:
        levels.append("tanks used up")
    warmest_c = facts.supply_c + SUPPLY_MARGIN_K
    if pd.notna(facts.supply_cap_c):
        warmest_c = min(warmest_c, facts.supply_cap_c)
    levels.append(f"supply over {say.temperature(warmest_c)} for {SUPPLY_MINUTES} min")
    levels.append(f"a zone more than {say.rise(facts.rise_limit_k)} over its set-point")
    if facts.critical_kw_th > 0.0:
        levels.append(f"critical cooling ({say.cooling(facts.critical_kw_th)}) not fully served")
    if site.absorbs and site.has_ice:
        levels.append(f"water to the building under {say.temperature(COLD_BRINE_C[0])}")
    elif site.has_ice:
        levels.append(f"leaving brine under {say.temperature(COLD_BRINE_C[0])} while the building is served")
    return (*levels, "any alarm")


def restart(site: CalledSite) -> str:
    """How the machines come back, after the event and after an early end alike; of an absorb, how they start."""
    if site.absorbs:
        return _start(site)
    stopped = {step.unit_id for step in site.steps if step.action == "off"}
    if not stopped:
        return "No machine is stopped by this order."
    kept = ", ".join(
        f"{site.words.tag(machine.chiller_id)} {machine.min_off_minutes:g} min"
        for machine in site.chillers
        if machine.chiller_id in stopped
    )
    gap = f"{site.facts.restart_gap_minutes:g} min apart, " if len(stopped) > 1 else ""
    return (
        f"One machine at a time, {gap}none before its least off time ({kept}). Load limit "
        f"{100 * RESTART_LIMIT_FRACTION:.0f} % for {RESTART_MINUTES} min, then ramp; lower the leaving-water "
        "set-point in steps from the loop's temperature."
    )


def _start(site: CalledSite) -> str:
    """How the machines that are to charge start."""
    starting = {step.unit_id for step in site.steps if step.action == "charge_start"}
    if not starting:
        return "No machine need be started by this order: those that run carry what the tank does not give."
    limited = any(step.action == "demand_limit" for step in site.steps)
    ramp = "then ramp to its demand limit." if limited else "then ramp."
    gap = f", {site.facts.restart_gap_minutes:g} min apart" if len(starting) > 1 else ""
    return (
        f"One machine at a time{gap}, none before its least off time is over or with no start left. Load limit "
        f"{100 * RESTART_LIMIT_FRACTION:.0f} % for {RESTART_MINUTES} min, {ramp}"
    )


def _after(site: CalledSite) -> str:
    """What follows an absorb: the usual plan, when it charges again, and what if the tank is full before."""
    end = site.window.window_end.to_pydatetime()
    again = [step for step in site.steps if step.action == "recharge_may_start"]
    first = min((step.at for step in again), default=None)
    said = f"Usual plan again from {site.words.time(end)}"
    if first is None:
        said += "; no charging in it. "
    elif first <= end:
        said += ", which goes on charging. "
    else:
        caps = ", ".join(
            f"{site.words.tag(step.unit_id)} {site.words.cooling(step.value or 0.0)}" for step in again
        )
        when = _when(site)
        said += f"; no charging before {site.words.time(first)}, then {when}, at most {caps}. "
    said += "The tank starts fuller, so less is charged than usual. Full early: stop charging and ring; "
    if site.has_ice:
        return said + "never past full, and never lower the low-brine trip to charge faster."
    return said + "never past full."


def _when(site: CalledSite) -> str:
    """When the tank is brought back; a cap in whole kW, never rounded up."""
    return RECOVERIES[str(site.window.recovery)].format(peak=f"{math.floor(site.peak_kw):,} kW")


def recharge(site: CalledSite) -> str:
    """When the tanks may be filled again, how fast, by when, and what if not; of an absorb, what follows it."""
    if site.absorbs:
        return _after(site)
    if not site.tanks:
        return "No tank on this site."
    when = _when(site)
    starts = [step for step in site.steps if step.action == "recharge_may_start"]
    by = sorted(step.at for step in site.steps if step.action == "full_by")
    if starts:
        caps = ", ".join(
            f"{site.words.tag(step.unit_id)} {site.words.cooling(step.value or 0.0)}" for step in starts
        )
        said = f"{when[0].upper()}{when[1:]}: from {site.words.time(min(step.at for step in starts))}, not before; "
        if site.window.recovery != "usual":
            said = (
                f"What the event took is put back {when}; charging of the usual plan stays as it is. First "
            )
            said += f"charging {site.words.time(min(step.at for step in starts))}, not before; "
        said += f"at most {caps}."
    else:
        said = "No recharge in the plan."
    if by:
        again = site.words.time(by[-1])
        whole = not pd.isna(site.window.full_again_at)
        said += (
            f" Back at its usual level by {again}." if whole else f" Not full within the plan (to {again})."
        )
    if site.has_ice:
        said += " If late: ring; never lower the low-brine trip to charge faster."
        return said + " Full is the plant's own signal."
    return said + " If late: ring before the next day's cooling starts."


def cautions(site: CalledSite) -> tuple[str, ...]:
    """Cautions of every order, and those of ice plants."""
    above = " to ".join(site.words.temperature(celsius) for celsius in COLD_BRINE_C)
    ice = (
        f"From making ice to cooling: hold the bypass until leaving brine is above {above} and "
        "building flow is proven.",
        "External-melt ice is never charged past full.",
    )
    return (
        "Life-safety, process and critical cooling stay on.",
        "Machine protections are never bypassed.",
        "Keep the minimum evaporator flow of what stays on; run no pump against closed valves; "
        "shared pumps and towers stay on.",
        "Keep freeze protection on.",
        *(ice if site.has_ice else ()),
        "Lock out before service.",
        "Refrigerant and glycol as the site's safety plan says.",
        "Local codes, the maker's instructions and the licensed operator's judgement come first.",
    )
