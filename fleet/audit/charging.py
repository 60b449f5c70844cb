"""Rules on charging: none in the window of a shed, all there is in that of an absorb; after it, by the recovery.

Owns what direction and recovery say of charge; that charge keeps the limits of tanks and machines is tanks.py's and
courses.py's. Shapes: R called sites, U units, T intervals.
"""

from typing import Final

import numpy as np

from fleet.audit.case import Case
from fleet.audit.evidence import local
from fleet.audit.findings import Findings, allowed, differs
from fleet.audit.tanks import charge_knots
from sites import tank
from sites.units import AnyArray, Bools, Floats

DELAY_H: Final = 2.0
NIGHT: Final = (22.0, 6.0)
MIDDAY: Final = (10.0, 15.0)
"""Hours of the recoveries delayed, night and midday."""
FULL_FRACTION: Final = 0.985
"""A tank this full is not charged further: the last of the ice freezes too slowly."""


def charging_in_the_window(case: Case, found: Findings) -> None:
    """Shed: no charging in the window. Absorb: the tanks charge as hard as they and the machines can.

    Absorb, per site: charge = min(most the tanks take, what machines can beside the load), 0 where the tanks are full
    or machines that go over to ice making could not carry the load. A recovery that keeps to the peak may charge
    less. No tank gives and takes at once.
    """
    book = case.evidence
    inside = book.inside()
    if not case.absorb:
        sheet, charge = book.sheets["machines"], book.grid("machines", "charge_kw_th")
        wrong = inside[case.machine_row] & (charge > 0.0)
        found.wrong("no charging in the window", sheet, "charge_kw_th", wrong.ravel(), charge.ravel(), "0")
        return
    sheet, charge = book.sheets["intervals"], book.grid("intervals", "charge_kw_th")
    expected, unsure = _hardest(case)
    capped = (book.record.frames["windows"]["recovery"] == "capped").to_numpy(dtype=np.bool_)[:, None]
    less = capped & (charge < expected)
    apart = inside & ~unsure & ~less & differs(charge, expected, _scale(case))
    found.wrong(
        "charging in the window", sheet, "charge_kw_th", apart.ravel(), charge.ravel(), expected.ravel()
    )
    both = inside & (charge > 1e-6) & (book.grid("intervals", "discharge_kw_th") > 1e-6)
    found.wrong(
        "charging in the window", sheet, "discharge_kw_th", both.ravel(), "both ways", "one way at a time"
    )


def _hardest(case: Case) -> tuple[Floats, Bools]:
    """(R, T) the most that is charged where the tanks are made to charge, and where rounding decides on it."""
    book = case.evidence
    discharge, unmet, load, pull_down = (
        book.grid("intervals", name)
        for name in ("discharge_kw_th", "unmet_kw_th", "cooling_load_kw_th", "pull_down_kw_th")
    )
    cooling = load + pull_down - discharge - unmet
    own = case.own_machines
    makes_ice = (case.chillers.makes_ice[:, 0] & case.ice_site[case.machine_site])[own][:, None]
    limit = book.grid("machines", "load_limit_fraction")
    able = np.where(makes_ice, case.ice_kw_th[own], case.direct_kw_th[own]) * limit
    every = book.per_called(book.machines, able)
    chilling = book.per_called(book.machines, np.where(makes_ice, able, 0.0))
    spare = every - cooling
    offered = np.where(case.ice_site[book.called][:, None], np.minimum(chilling, spare), spare)
    up = book.tanks.available[:, None]
    start = book.grid("tanks", "inventory_start_kwh_th")
    capacity = case.tanks.capacity_kwh_th[case.own_tanks]
    most = tank.most_charge_kw_th(
        start, book.grid("tanks", "loss_kw_th"), capacity, charge_knots(case), book.clock.step_h
    )
    most = book.per_called(book.tanks, np.where(up, most, 0.0))
    held = book.per_called(book.tanks, np.where(up, start, 0.0))
    full = FULL_FRACTION * book.per_called(book.tanks, np.where(up, capacity, 0.0))
    expected = np.where((spare >= 0.0) & (held < full), np.minimum(np.maximum(offered, 0.0), most), 0.0)
    unsure = (np.abs(spare) <= allowed(every, cooling)) | (np.abs(held - full) <= allowed(held, full))
    return expected, unsure


def recovery_after_the_window(case: Case, found: Findings) -> None:
    """After the window charge keeps to the recovery's hours.

    usual: in the site's charging hours, but for load levelling. Others: in their hours at most what brings the tanks
    to the usual case's level by the interval's end, outside them at most what the usual case charges. capped: while
    the tanks charge, the building is within max(billed peak, its usual peak).
    """
    book, sheet = case.evidence, case.evidence.sheets["intervals"]
    code = book.record.frames["windows"]["recovery"].to_numpy(dtype=object)[:, None]
    _, end = book.window()
    after = np.arange(book.clock.count)[None, :] >= end[:, None]
    charge, usual = book.grid("intervals", "charge_kw_th"), book.grid("intervals", "usual_inventory_kwh_th")
    start = book.per_called(book.tanks, book.grid("tanks", "inventory_start_kwh_th"))
    lacking = np.maximum((usual - start) / book.clock.step_h + book.grid("intervals", "loss_kw_th"), 0.0)
    served = book.grid("intervals", "cooling_load_kw_th") - book.grid("intervals", "usual_unmet_kw_th")
    as_usual = np.maximum(book.grid("intervals", "usual_chiller_kw_th") - served, 0.0)
    hours = _recovery_hours(case, code)
    levelling = (book.text("strategy", book.called) == "load_levelling")[:, None]
    by_plan = np.where(hours | levelling, np.inf, 0.0)
    most = np.where(code == "usual", by_plan, np.where(hours, lacking, as_usual))
    most = np.where(after, most + 1e-6, np.inf)
    found.most("recovery hours", sheet, "charge_kw_th", most.ravel(), (start / book.clock.step_h).ravel())
    building = book.grid("intervals", "event_kw") + book.grid("intervals", "rest_kw")
    every = book.grid("usual", "usual_kw") + book.grid("usual", "rest_kw")
    peak = np.maximum(case.billed_peak_kw, every.max(axis=1))[book.called][:, None]
    over = (code == "capped") & after & (charge > 1e-6) & (building > peak + 1e-6)
    found.wrong(
        "recovery within the peak", sheet, "event_kw", over.ravel(), building.ravel(), "within the peak"
    )


def _recovery_hours(case: Case, code: AnyArray) -> Bools:
    """(R, T) hours in which each site's recovery (R, 1) makes up what is lacking."""
    book = case.evidence
    own = case.charge_hours[book.called]
    delay = round(DELAY_H / book.clock.step_h)
    late = np.zeros_like(own)
    late[:, delay:] = own[:, delay:] & own[:, : own.shape[1] - delay]
    stamps = local(book.clock.starts, str(book.settings["timezone"]))
    hour = (stamps.hour + stamps.minute / 60.0).to_numpy(dtype=np.float64)[None, :]
    night = (hour >= NIGHT[0]) | (hour < NIGHT[1])
    midday = (hour >= MIDDAY[0]) & (hour < MIDDAY[1])
    always = np.ones_like(own)
    return np.select(
        [code == name for name in ("usual", "delayed", "night", "midday")],
        [own, late, night & always, midday & always],
        default=always,
    )


def _scale(case: Case) -> Floats:
    """(R, 1) the size of what moves a tank's most charge: its inventory over a step."""
    book = case.evidence
    capacity = case.tanks.capacity_kwh_th[case.own_tanks] / book.clock.step_h
    return book.per_called(book.tanks, capacity)


RULES = (charging_in_the_window, recovery_after_the_window)
