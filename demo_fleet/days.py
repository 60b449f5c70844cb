"""The days around an event, minute by minute: what starts them, what drives them, and their run.

Owns the passage from `.truth` to the finer model's arrays and back. Axes: site N, interval T.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final

import numpy as np
import pandas as pd

from demo_fleet import course as course_file
from demo_fleet import truth
from demo_fleet.calendar import Local, local
from demo_fleet.course import Course
from demo_fleet.files import naive, write_parquet
from demo_fleet.hidden import Made
from demo_fleet.plant import State, rested
from sites.units import Floats, Times

STEP_MINUTES: Final = 1


@dataclass(frozen=True)
class Days:
    """All that a run needs."""

    made: Made
    hidden: pd.DataFrame
    times: Times
    local: Local
    course: Course
    dry_bulb_c: Floats
    """(N, T) true"""
    wet_bulb_c: Floats
    state: State
    """at the first interval's start"""

    def until(self, count: int) -> "Days":
        """The first `count` intervals only."""
        short = Local(**{name: values[:count] for name, values in self.local.__dict__.items()})
        return replace(
            self, times=self.times[:count], local=short, course=self.course.part(0, count),
            dry_bulb_c=self.dry_bulb_c[:, :count], wet_bulb_c=self.wet_bulb_c[:, :count],
        )  # fmt: skip

    @property
    def site_ids(self) -> "pd.Series[Any]":
        """Sites in row order."""
        return self.made.sites["site_id"]


def run(days: Days, orders: Callable[[int], truth.Orders] | None = None) -> dict[str, Floats]:
    """Quarter-hour means (N, T) of the one-minute model; power_kw as a meter would see it."""
    shape = days.dry_bulb_c.shape
    driven = truth.Drive(
        hour=np.broadcast_to(days.local.hour, shape),
        load_kw_th=days.course.cooling_load_kw_th,
        dry_bulb_c=days.dry_bulb_c,
        wet_bulb_c=days.wet_bulb_c,
        level_kw_th=days.course.level_kw_th,
    )
    _, kept = truth.run(days.made.plant, driven, days.state, STEP_MINUTES, orders)
    kept["power_kw"] = kept["power_kw"] * days.course.plant_factor
    return kept


def write(days: Days, folder: Path, seed: int, weather: pd.DataFrame) -> None:
    """Write hidden parameters, true weather and the starting state; the course is written apart."""
    write_parquet(days.hidden.assign(seed=seed), folder / "hidden.parquet")
    write_parquet(weather, folder / "weather.parquet")
    row, tank = np.nonzero(days.made.tank_id != "")
    start = pd.DataFrame(
        {
            "site_id": days.site_ids.to_numpy()[row],
            "tank_id": days.made.tank_id[row, tank],
            "inventory_kwh_th": days.state.inventory_kwh_th[row, tank],
        }
    )
    write_parquet(start, folder / "start.parquet")


def read(made: Made, hidden: pd.DataFrame, folder: Path, zone: str, holidays: tuple[str, ...]) -> Days:
    """Days of a folder whose `.truth` was written by the sample."""
    frames = [pd.read_parquet(path) for path in sorted(folder.glob("course-*.parquet"))]
    times, course = course_file.from_table(pd.concat(frames, ignore_index=True), made.sites["site_id"])
    weather = pd.read_parquet(folder / "weather.parquet")
    dry, wet = at_stations(weather, made.sites["station_id"], times)
    start = pd.read_parquet(folder / "start.parquet").set_index(["site_id", "tank_id"])["inventory_kwh_th"]
    state = rested(made.plant)
    inventory = state.inventory_kwh_th.copy()
    for row, tank in zip(*np.nonzero(made.tank_id != "")):
        inventory[row, tank] = start[(made.sites["site_id"].iloc[row], made.tank_id[row, tank])]
    state = replace(state, inventory_kwh_th=inventory)
    return Days(made, hidden, times, local(times, zone, holidays), course, dry, wet, state)


def at_stations(weather: pd.DataFrame, stations: "pd.Series[Any]", times: Times) -> tuple[Floats, Floats]:
    """Dry and wet bulb of each site, (N, T), from a weather table; coarser rows are carried forward."""
    instants = pd.DatetimeIndex(times)
    frame = weather.assign(start=naive(weather["interval_start"]))
    found = []
    for name in ("dry_bulb_c", "wet_bulb_c"):
        wide = frame.pivot_table(index="start", columns="station_id", values=name)
        wide = wide.reindex(wide.index.union(instants)).ffill().bfill().reindex(instants)
        known = wide.columns.to_list()
        column = [known.index(name) if name in known else 0 for name in stations]
        found.append(wide.to_numpy(dtype=np.float64)[:, column].T)
    return found[0], found[1]
