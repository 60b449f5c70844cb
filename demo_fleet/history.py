"""Months of quarter-hour history from the finer model: every (site, day) is a row, all days run at once.

Days are 24-hour blocks from the history's start. Each runs first from full tanks, then again from where the
day before ended, so that days follow on each other. Axes: site N, day D, quarter Q = 96 a day.
"""

from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from demo_fleet import truth
from demo_fleet.course import Course
from demo_fleet.plant import Plant, State, rested
from sites.units import Bools, Floats

STEP_MINUTES: Final = 5
QUARTERS_A_DAY: Final = 96


@dataclass(frozen=True)
class History:
    """What the finer model did; (N, D x 96)."""

    plant_kw: Floats
    inventory_kwh_th: Floats
    unmet_kw_th: Floats
    last: State
    """at the end of the last day, one row per site"""


def drive(
    plant_hour: Floats, course: Course, dry_bulb_c: Floats, wet_bulb_c: Floats, days: int
) -> truth.Drive:
    """Drive of (N x days) rows from arrays (N, days x 96); hour (days x 96,)."""
    rows = (len(dry_bulb_c) * days, -1)
    return truth.Drive(
        hour=np.broadcast_to(plant_hour, dry_bulb_c.shape).reshape(rows),
        load_kw_th=course.cooling_load_kw_th.reshape(rows),
        dry_bulb_c=dry_bulb_c.reshape(rows),
        wet_bulb_c=wet_bulb_c.reshape(rows),
        level_kw_th=course.level_kw_th.reshape(rows),
    )


def history(plant: Plant, driven: truth.Drive, days: int, tank_out: Bools, machine_out: Bools) -> History:
    """Run all days of all sites; tank_out (N, D), machine_out (N, M, D) say what stood still on which day."""
    count = plant.rows
    rows = plant.take(np.repeat(np.arange(count), days)).without_tanks(tank_out.ravel())
    up = ~machine_out.transpose(0, 2, 1).reshape(rows.machine_up.shape)
    rows = replace(rows, machine_up=rows.machine_up & up)
    end, _ = truth.run(rows, driven, rested(rows, 0.9), STEP_MINUTES)
    before = np.arange(count * days).reshape(count, days)
    yesterday = np.concatenate([before[:, :1], before[:, :-1]], axis=1).ravel()
    end, kept = truth.run(rows, driven, end.take(yesterday), STEP_MINUTES)
    shape = (count, days * QUARTERS_A_DAY)
    return History(
        plant_kw=kept["power_kw"].reshape(shape),
        inventory_kwh_th=kept["inventory"].reshape(shape),
        unmet_kw_th=kept["unmet"].reshape(shape),
        last=end.take(np.arange(count) * days + days - 1),
    )
