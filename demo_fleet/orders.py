"""What operators do with an order: the steps of an event record as limits on machines, minute by minute.

Owns lateness and refusal, and which step switches what. Axes: row N, machine M, minute.
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import pandas as pd

from demo_fleet.calendar import within
from demo_fleet.days import Days
from demo_fleet.files import naive
from demo_fleet.plant import STRATEGIES
from demo_fleet.truth import Orders
from sites.units import AnyArray, Bools, Ints

AT_START: Final = ("off", "demand_limit", "inhibit", "charge_start", "charge_to")
"""Steps that a late operator takes late."""
FEWEST_TO_DECLINE: Final = 3


@dataclass(frozen=True)
class Acts:
    """Orders of every minute; (minute, N, M) or (minute, N)."""

    limit: AnyArray
    inhibit: Bools
    hold: Bools
    force: Bools
    charge: Bools
    declined: str
    """the site that refuses, empty where none does"""

    def at(self, minute: int, rows: Ints) -> Orders:
        """Orders of one minute for `rows` of the sites; rows of -1 are usual operation."""
        usual = rows < 0
        limit = np.where(usual[:, None], 1.0, self.limit[minute, rows])
        inhibit = self.inhibit[minute, rows] & ~usual[:, None]
        hold, force, charge = (one[minute, rows] & ~usual for one in (self.hold, self.force, self.charge))
        staged = (limit < 1.0).any(axis=1) | inhibit.any(axis=1) | charge
        return Orders(limit, inhibit, hold, force, staged, charge)


def acts(days: Days, steps: pd.DataFrame, windows: pd.DataFrame) -> Acts:
    """Lay the steps over the days. One called site declines; some act late by their hidden minutes."""
    secret = days.hidden.set_index("site_id")
    called = sorted(set(windows["site_id"]))
    declined = str(secret.loc[called, "decline_rank"].idxmin()) if len(called) >= FEWEST_TO_DECLINE else ""
    taken = steps[(steps["site_id"] != declined) & steps["site_id"].isin(called)]
    late = secret["late_minutes"].reindex(taken["site_id"]).to_numpy(dtype=np.int64)
    minutes = ((naive(taken["at"]) - days.times[0]) / np.timedelta64(1, "m")).astype(np.int64)
    minutes = minutes + np.where(taken["action"].isin(AT_START), late, 0)
    taken = taken.assign(minute=minutes, row=pd.Index(days.site_ids).get_indexer(pd.Index(taken["site_id"])))
    taken = taken.sort_values("minute", kind="stable")
    length, machines = 15 * len(days.times), days.made.chiller_id.shape[1]
    limit = np.ones((length, len(days.site_ids), machines), dtype=np.float32)
    inhibit = np.zeros(limit.shape, dtype=np.bool_)
    for step in taken.itertuples():
        machine = np.flatnonzero(days.made.chiller_id[int(str(step.row))] == step.unit_id)
        _switch(limit, inhibit, step, machine)
    hold, force = _recharge(days, taken, windows, length)
    return Acts(limit, inhibit, hold, force, _charge(taken, hold.shape), declined)


def _switch(limit: AnyArray, inhibit: Bools, step: Any, machine: Ints) -> None:
    """One step takes effect from its minute on (a machine that is off stays off through its demand limit)."""
    since = max(int(step.minute), 0)
    if step.action == "off":
        limit[since:, step.row, machine] = 0.0
    elif step.action in ("restart", "demand_limit_removed"):
        limit[since:, step.row, machine] = 1.0
    elif step.action == "demand_limit":
        limit[since:, step.row, machine] = float(step.value)
    elif step.action in ("inhibit", "inhibit_removed"):
        inhibit[since:, step.row, machine] = step.action == "inhibit"


def _recharge(days: Days, taken: pd.DataFrame, windows: pd.DataFrame, length: int) -> tuple[Bools, Bools]:
    """Minutes without charging (from a site's first step, or after charging by order its end, to its recharge), and
    with charging outside its hours (from a recharge ordered outside them to their next start)."""
    hold = np.zeros((length, len(days.site_ids)), dtype=np.bool_)
    force = hold.copy()
    ends = windows.set_index("site_id")["window_end"]
    hours = np.repeat(days.local.hour, 15)
    plant = days.made.plant
    for row, group in taken.groupby("row"):
        site = int(str(row))
        end = naive(ends.loc[[days.site_ids.iloc[site]]])[0]
        until = int((end - days.times[0]) / np.timedelta64(1, "m"))
        may = group.loc[group["action"] == "recharge_may_start", "minute"]
        start = int(may.min()) if len(may) else until
        charged = bool((group["action"] == "charge_to").any())
        hold[max(until if charged else int(group["minute"].min()), 0) : max(start, 0), site] = True
        if (
            not len(may)
            or not 0 <= start < length
            or plant.strategy[site] == STRATEGIES.index("load_levelling")
        ):
            continue
        usual = within(hours[start:], plant.charge_from_hour[site], plant.charge_to_hour[site])
        first = int(np.argmax(usual)) if usual.any() else 0
        force[start : start + first, site] = True
    return hold, force


def _charge(taken: pd.DataFrame, shape: tuple[int, ...]) -> Bools:
    """Minutes (minute, N) in which a site's tanks are made to charge, from `charge_to` to `charge_end`."""
    charge = np.zeros(shape, dtype=np.bool_)
    first = taken[taken["action"] == "charge_to"].groupby("row")["minute"].min()
    last = taken[taken["action"] == "charge_end"].groupby("row")["minute"].max()
    for row, start, end in zip(first.index, first, last.reindex(first.index), strict=True):
        charge[max(int(start), 0) : int(end), int(row)] = True
    return charge
