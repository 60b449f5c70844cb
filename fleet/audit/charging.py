"""Rules on charging: none in the window of a shed, all there is in that of an absorb.

Owns what a window's direction says of charge; that charge keeps the limits of tanks and machines is tanks.py's and
courses.py's. Shapes: R called sites, U units, T intervals.
"""

from typing import Final

import numpy as np

from fleet.audit.case import Case
from fleet.audit.findings import Findings, allowed, differs
from fleet.audit.tanks import charge_knots
from sites import tank
from sites.units import Bools, Floats

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
    apart = inside & ~unsure & differs(charge, expected, _scale(case))
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


def _scale(case: Case) -> Floats:
    """(R, 1) the size of what moves a tank's most charge: its inventory over a step."""
    book = case.evidence
    capacity = case.tanks.capacity_kwh_th[case.own_tanks] / book.clock.step_h
    return book.per_called(book.tanks, capacity)


RULES = (charging_in_the_window,)
