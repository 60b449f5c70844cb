"""Rules on the tanks of the called sites: table tanks.

Chain of inventories, limits worked out again from the tank models at the recorded temperatures, standing loss, what
is held back, and the conservation of energy over the whole horizon. Shapes: U tanks, R called sites, T intervals.
"""

from typing import Final

import numpy as np

from fleet.audit.case import Case
from fleet.audit.findings import Findings, allowed
from sites import tank
from sites.conditions import RETURN_GLIDE_K
from sites.units import Floats

LEAST_BELOW_FREEZING_K: Final = 0.5


def chain(case: Case, found: Findings) -> None:
    """The first inventory is the frozen best estimate, each next one the end of the interval before."""
    book, sheet = case.evidence, case.evidence.sheets["tanks"]
    held, start = book.grid("tanks", "inventory_kwh_th"), book.grid("tanks", "inventory_start_kwh_th")
    before = np.concatenate([case.best_kwh_th[:, None], held[:, :-1]], axis=1)
    found.equal("tank chain", sheet, "inventory_start_kwh_th", before.ravel())
    charge, discharge, loss = (
        book.grid("tanks", name) for name in ("charge_kw_th", "discharge_kw_th", "loss_kw_th")
    )
    after = start + (charge - discharge - loss) * book.clock.step_h
    found.equal("tank step", sheet, "inventory_kwh_th", after.ravel(), start.ravel())


def within_capacity(case: Case, found: Findings) -> None:
    """0 <= inventory <= capacity, and nothing flows the wrong way."""
    sheet = case.evidence.sheets["tanks"]
    capacity = np.repeat(case.tanks.capacity_kwh_th[case.own_tanks, 0], case.evidence.clock.count)
    for name in ("inventory_kwh_th", "inventory_start_kwh_th"):
        found.least("tank within capacity", sheet, name, 0.0, capacity)
        found.most("tank within capacity", sheet, name, capacity)
    for name in ("charge_kw_th", "discharge_kw_th", "loss_kw_th", "discharge_limit_kw_th"):
        found.least("not negative", sheet, name, 0.0, capacity)


def standing_loss(case: Case, found: Findings) -> None:
    """Standing loss of each tank from its start inventory."""
    book, sheet = case.evidence, case.evidence.sheets["tanks"]
    own = case.tanks.take(case.own_tanks)
    start = book.grid("tanks", "inventory_start_kwh_th")
    loss = tank.standing_loss_kw_th(
        own.kind, start, own.capacity_kwh_th, own.loss_fraction_per_h, book.clock.step_h
    )
    found.equal("standing loss", sheet, "loss_kw_th", loss.ravel())


def discharge_limit(case: Case, found: Findings) -> None:
    """The limit at end-of-interval inventory and the recorded temperature difference; discharge within it."""
    book, sheet = case.evidence, case.evidence.sheets["tanks"]
    own = case.tanks.take(case.own_tanks)
    knots = _discharge_knots(case)
    limit = tank.limit_kw_th(book.grid("tanks", "inventory_kwh_th"), own.capacity_kwh_th, knots)
    limit = np.where(book.tanks.available[:, None], limit, 0.0)
    found.equal("discharge limit", sheet, "discharge_limit_kw_th", limit.ravel())
    # A slope of the limit lets it move with the rounding of the inventory it was taken at.
    found.most("discharge within its limit", sheet, "discharge_kw_th", limit.ravel(), own_scale(case))


def charge_limit(case: Case, found: Findings) -> None:
    """Charge within the limit at end-of-interval inventory; nothing into a tank out of service."""
    book, sheet = case.evidence, case.evidence.sheets["tanks"]
    capacity = case.tanks.capacity_kwh_th[case.own_tanks]
    limit = tank.limit_kw_th(book.grid("tanks", "inventory_kwh_th"), capacity, charge_knots(case))
    limit = np.where(book.tanks.available[:, None], limit, 0.0)
    found.most("charge within its limit", sheet, "charge_kw_th", limit.ravel(), own_scale(case))


def inlet_temperature(case: Case, found: Findings) -> None:
    """lmtd_k is what the loop's temperatures give.

    In parallel the tank's inlet is the return. In series it is supply + (return - supply) x the tanks' share of what
    is served: what the machines upstream leave to them. The share lies between what the tanks gave (limited in the
    end) and all that machines could not serve; where no limit held the tanks back both are one and lmtd_k is exact.
    """
    book, sheet = case.evidence, case.evidence.sheets["tanks"]
    supply, back = (book.fact(name, book.tanks.site)[:, None] for name in ("supply_c", "return_c"))
    lowest, highest = _tank_share(case)
    low, high = (
        tank.lmtd_k(supply + (back - supply) * share[case.tank_row], supply) for share in (lowest, highest)
    )
    recorded = book.grid("tanks", "lmtd_k")
    slack = allowed(recorded, high)
    outside = (recorded < low - slack) | (recorded > high + slack)
    words = [f"{a:.9g} to {b:.9g}" for a, b in zip(low.ravel(), high.ravel(), strict=True)]
    found.wrong(
        "tank inlet", sheet, "lmtd_k", outside.ravel(), recorded.ravel(), np.array(words, dtype=object)
    )


def held_back(case: Case, found: Findings) -> None:
    """In its window a site's tanks in service give nothing of the inventory that is held back."""
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    up = book.tanks.available[:, None]
    start = book.per_called(book.tanks, book.grid("tanks", "inventory_start_kwh_th") * up)
    loss = book.per_called(book.tanks, book.grid("tanks", "loss_kw_th"))
    reserve = book.fact("held_back_kwh_th", book.called)[:, None]
    free = np.maximum((start - reserve) / book.clock.step_h - loss, 0.0)
    most = np.where(book.inside(), free, np.inf)
    found.most(
        "held-back inventory", sheet, "discharge_kw_th", most.ravel(), (start / book.clock.step_h).ravel()
    )


def conservation(case: Case, found: Findings) -> None:
    """Over the horizon, event less usual, with D the zone's rise:

    sum d(chiller) dt = dE_end + sum d(loss) dt - sum C D_end - H sum mean D_air dt.
    """
    book, sheet = case.evidence, case.evidence.sheets["windows"]
    step_h = book.clock.step_h
    made = book.grid("intervals", "direct_kw_th") + book.grid("intervals", "charge_kw_th")
    usual = book.grid("intervals", "usual_chiller_kw_th")
    stored = book.grid("intervals", "inventory_kwh_th") - book.grid("intervals", "usual_inventory_kwh_th")
    lost = book.grid("intervals", "loss_kw_th") - book.grid("intervals", "usual_loss_kw_th")
    air, mass = (book.fact(name, book.called) for name in ("air_kwh_per_k", "mass_kwh_per_k"))
    envelope = book.fact("envelope_kw_per_k", book.called)
    zone = (
        air * book.grid("intervals", "zone_rise_k")[:, -1]
        + mass * book.grid("intervals", "zone_mass_rise_k")[:, -1]
        + envelope * book.grid("intervals", "zone_mean_rise_k").sum(axis=1) * step_h
    )
    left = (made - usual).sum(axis=1) * step_h
    right = stored[:, -1] + lost.sum(axis=1) * step_h - zone
    terms = made.sum(axis=1) * step_h
    apart = np.abs(left - right) > allowed(left, right, terms)
    found.wrong("conservation", sheet, None, apart, left, right)


def critical_load(case: Case, found: Findings) -> None:
    """The critical load is served in the window, and could be with the largest machine that may run lost."""
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    load = book.grid("intervals", "cooling_load_kw_th")
    critical = np.minimum(book.fact("critical_kw_th", book.called)[:, None], load)
    inside = book.inside()
    served = load - book.grid("intervals", "unmet_kw_th")
    ready = case.ready_kw_th
    largest = np.zeros_like(load)
    np.maximum.at(largest, case.machine_row, ready)
    firm = book.per_called(book.machines, ready) - largest + _could_give(case)
    for have in (served, firm):
        short = inside & (have < critical - 1e-6 - allowed(have, critical))
        found.wrong("critical load", sheet, "unmet_kw_th", short.ravel(), have.ravel(), critical.ravel())


def own_scale(case: Case) -> Floats:
    """(U x T) the size of what moves a tank's limit: its inventory over a step."""
    capacity = case.tanks.capacity_kwh_th[case.own_tanks, 0] / case.evidence.clock.step_h
    return np.repeat(capacity, case.evidence.clock.count)


def charge_knots(case: Case) -> Floats:
    """Charge curves (U, 1, knot) at the frozen brine temperature."""
    own = case.tanks.take(case.own_tanks)
    brine = case.evidence.fact("charge_brine_c", case.evidence.tanks.site)
    lmtd = tank.lmtd_k(-brine, np.maximum(-brine - RETURN_GLIDE_K, LEAST_BELOW_FREEZING_K))
    return tank.knots_kw_th(
        tank.charge_curves(own), own.capacity_kwh_th, own.charge_limit_kw_th, lmtd[:, None]
    )


def _discharge_knots(case: Case) -> Floats:
    """Discharge curves (U, T, knot) at the recorded temperature differences."""
    own = case.tanks.take(case.own_tanks)
    return tank.knots_kw_th(
        tank.discharge_curves(own),
        own.capacity_kwh_th,
        own.discharge_limit_kw_th,
        case.evidence.grid("tanks", "lmtd_k"),
    )


def _most(case: Case) -> Floats:
    """Greatest discharge (U, T) of each tank over each interval at the recorded temperature differences."""
    book = case.evidence
    start, loss = book.grid("tanks", "inventory_start_kwh_th"), book.grid("tanks", "loss_kw_th")
    capacity = case.tanks.capacity_kwh_th[case.own_tanks]
    most = tank.most_discharge_kw_th(start, loss, capacity, _discharge_knots(case), book.clock.step_h)
    return np.where(book.tanks.available[:, None], most, 0.0)


def _could_give(case: Case) -> Floats:
    """(R, T) discharge that could have been had: within the tanks' limits and, in the window, the held-back level."""
    book = case.evidence
    most = book.per_called(book.tanks, _most(case))
    up = book.tanks.available[:, None]
    start = book.per_called(book.tanks, book.grid("tanks", "inventory_start_kwh_th") * up)
    loss = book.per_called(book.tanks, book.grid("tanks", "loss_kw_th"))
    reserve = book.fact("held_back_kwh_th", book.called)[:, None]
    free = np.maximum((start - reserve) / book.clock.step_h - loss, 0.0)
    return np.where(book.inside(), np.minimum(most, free), most)


def _tank_share(case: Case) -> tuple[Floats, Floats]:
    """Least and largest share (R, T) of what is served that the tanks' inlet may rest on; 1 in parallel."""
    book = case.evidence
    load = book.grid("intervals", "cooling_load_kw_th")
    ready = book.per_called(book.machines, case.ready_kw_th)
    drawn = book.grid("intervals", "discharge_kw_th")
    least = drawn / np.maximum(drawn + np.minimum(load - drawn, ready), 1e-9)
    could = _could_give(case)
    held = drawn >= could - allowed(drawn, could, could)
    most = np.where(held, 1.0, least)
    parallel = (book.text("layout", book.called) != "series")[:, None]
    return np.where(parallel, 1.0, np.clip(least, 0.0, 1.0)), np.where(parallel, 1.0, np.clip(most, 0.0, 1.0))


RULES = (
    chain,
    within_capacity,
    standing_loss,
    discharge_limit,
    charge_limit,
    inlet_temperature,
    held_back,
    conservation,
    critical_load,
)
