"""Recoveries: in which hours a tank may be brought back to the usual case's level after a window, and how hard.

A recovery is part of a candidate. Owns their names and hours; plant.py reads them. Under every recovery but the
usual one the tank keeps the usual plan's own charging, and what it lacks beside the usual case is made up in the
recovery's hours only.
"""

from typing import Final

import numpy as np

from sites.outlook import Outlook, in_hours
from sites.roster import Buildings
from sites.units import Bools, Floats

RECOVERIES: Final = ("usual", "now", "delayed", "night", "midday", "capped")
"""usual: the strategy's charging hours. now: from the window's end. delayed: the charging hours but for the
first DELAY_H of each night. night, midday: NIGHT and MIDDAY. capped: any hour, within the building's own peak."""
USUAL, CAPPED = RECOVERIES.index("usual"), RECOVERIES.index("capped")

DELAY_H: Final = 2.0
NIGHT: Final = (22.0, 6.0)
MIDDAY: Final = (10.0, 15.0)
"""Local hours from, to (common practice, no source)."""


def recovery_hours(buildings: Buildings, outlook: Outlook, charge_hours: Bools) -> Bools:
    """Mask (recovery, site, interval) of the hours in which each recovery makes up what is lacking."""
    first = round(DELAY_H / outlook.clock.step_h)
    late = charge_hours.copy()
    late[:, first:] &= charge_hours[:, : charge_hours.shape[1] - first]
    late[:, :first] = False
    hour, every = outlook.local_hour, np.ones(len(charge_hours))
    night, midday = (in_hours(hour, every * hours[0], every * hours[1]) for hours in (NIGHT, MIDDAY))
    always = np.ones_like(charge_hours)
    masks = {
        "usual": charge_hours,
        "now": always,
        "delayed": late,
        "night": night,
        "midday": midday,
        "capped": always,
    }
    return np.stack([masks[name] for name in RECOVERIES])


def cap_kw(rest_kw: Floats, billed_peak_kw: Floats, usual_kw: Floats) -> Floats:
    """Plant power (site, interval) that keeps the building within max(billed peak, its usual peak)."""
    peak = np.maximum(billed_peak_kw, (usual_kw + rest_kw).max(axis=1))
    room: Floats = peak[:, None] - rest_kw
    return room
