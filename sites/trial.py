"""Candidates tried: each simulated only as far as it keeps its limits.

Nothing before a window differs from the usual case, so every trial starts there at its window's first interval; a
candidate that has broken a limit by the event's end is run no further. Owns which rows are run how far; what is
simulated is plant.py's, what is summed up and which limit breaks tally.py's.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np

from sites.blocks import Candidates
from sites.candidate import Stages
from sites.compiled import loop
from sites.course import MADE, NOW, STORED, Course
from sites.direction import Direction
from sites.ground import Ground, usual_high
from sites.plant import advance, at_rest, laid, records_of, room, stage
from sites.quotes import LIMITED_BY
from sites.recovery import USUAL
from sites.rows import Plants, usual_hours
from sites.tally import Tally, add, broken, tally, tank_cause
from sites.units import AnyArray, Bools, Floats, Ints

LEAST_KW = 1.0
"""A candidate gives at least this much in every interval of its window, else its machines are as good as off."""
UNSURE_FRACTION = 0.02
"""Share of a candidate's energy that may rest on usual power that is too high (ground.py), else it is refused."""
OVERHELD_FRACTION = 0.02
"""Share of a bound tank's inventory at window start that may be too high (ground.py), else it is refused: what such
a tank gives goes with what it holds."""
NEARLY_FULL = 0.95
"""A charge that comes to nothing with tanks this full at its end is held up by them, not by the machines."""
LOW_TOLERANCE = 0.01
"""Share by which the other inventory's kW may lie below the best's."""


@dataclass(frozen=True)
class Trial:
    """Candidate rows on their way through the horizon."""

    rows: AnyArray
    """plant.ROW (row,): windows, and where each stands"""
    inventory_kwh_th: Floats
    stages: Stages
    tally: Tally

    def run(self, plants: Plants, usual: AnyArray, first: int, last: int, among: Ints) -> None:
        """Take the rows `among` through [first, last), held against the usual hours (rows.USUAL); all grows in
        place."""
        once = (np.zeros((1, width), dtype=kind) for width, kind in self._widths(plants))
        _run(
            first,
            last,
            np.ascontiguousarray(among, dtype=np.int64),
            plants.step_h,
            *(plants.sites, plants.machines, plants.tanks, plants.hours, plants.able, usual),
            *(self.rows, *laid(self.stages), self.inventory_kwh_th),
            *(self.tally.sums, self.tally.change_kw, self.tally.rise_k),
            *once,
            *room(plants),
        )

    @staticmethod
    def _widths(plants: Plants) -> tuple[tuple[int, Any], ...]:
        return (1, NOW), (plants.machines.shape[1], MADE), (plants.tanks.shape[1], STORED)


@loop
def _run(
    first: int,
    last: int,
    among: Any,
    step_h: float,
    sites: Any,
    machines: Any,
    tanks: Any,
    hours: Any,
    able: Any,
    usual: Any,
    rows: Any,
    stage_start: Any,
    stage_end: Any,
    stage_limit: Any,
    stage_charge: Any,
    inventory: Any,
    sums: Any,
    change_kw: Any,
    rise_k: Any,
    now: Any,
    made: Any,
    stored: Any,
    knots: Any,
    work: Any,
) -> None:
    """The rows `among` over the intervals from each window's start, or from `first` where that is later, to `last`."""
    for r in among:
        row = rows[r]
        i = row.site
        site = sites[i]
        for t in range(max(first, row.start), last):
            hour, beside = hours[i, t], usual[i, t]
            staged, made_to = stage(
                site, made[0], stage_start[r], stage_end[r], stage_limit[r], stage_charge[r], t
            )
            firm = site.critical_kw_th > 0.0 and t < row.end
            advance(
                site, machines[i], tanks[i], hour, able[i, t], beside, usual[i, max(t - 1, 0)], True, t,
                staged, made_to, firm, row, inventory[r], now[0, 0], made[0], stored[0], knots, work, step_h,
            )  # fmt: skip
            change_kw[r, t] = now[0, 0].power_kw - beside.power_kw
            rise_k[r, t] = row.air_k
            add(sums[r], row, site, hour, now[0, 0], beside, t, step_h)


def begin(base: Ground, offered: Candidates, usual: Course, inventory: Floats) -> Trial:
    """Rows of the candidates at the start of their windows, where the usual course (from `inventory`) stands."""
    site, before = offered.site, np.maximum(offered.start - 1, 0)
    early = offered.start == 0
    held = np.where(early[:, None], inventory[site], usual.inventory_kwh_th[site, :, before])
    held = np.ascontiguousarray(held)
    charging = ~early & usual.charging[site, before]
    rows = records_of(base.plants.pick(site, (offered.recovery, offered.end)), at_rest(held, charging))
    rows["start"], rows["end"] = offered.start, offered.end
    rows["from_above"] = offered.stages.charge.any(axis=1)
    stages = base.in_force.take(site).join(offered.stages)
    return Trial(rows, held, stages, tally(len(site), base.outlook.clock.count))


@dataclass(frozen=True)
class Tried:
    """All candidates tried, C of them, and what the run from the best inventory gave for those that are quoted."""

    verdict: Ints
    """(C,) why each is refused, as an index into LIMITED_BY; 0 = it is quoted"""
    expected_kw: Floats
    """(C, event interval) in the event's direction"""
    kept: Ints
    """(R,) the quoted ones"""
    change_kw: Floats
    """(R, interval)"""
    sums: AnyArray
    """tally.SUMS (R,)"""
    low_start_kwh_th: Floats
    """(R,) inventory at window start in the run from the other inventory"""
    limited_by: Ints
    """(R,) what a quoted candidate leans on"""


@dataclass(frozen=True)
class Side:
    """One of the two inventories that candidates start from, with its usual course and that course's hours."""

    course: Course
    inventory_kwh_th: Floats
    hours: AnyArray
    """rows.USUAL"""


def sides_of(base: Ground, direction: Direction) -> tuple[Side, Side]:
    """The best inventory, and the one that candidates must stand too: for a shed the low, for an absorb the high."""
    absorb = direction is Direction.ABSORB
    other = usual_high(base) if absorb else base.usual_low
    inventory = base.standing.high_kwh_th if absorb else base.standing.low_kwh_th
    return _side(base, base.usual, base.standing.best_kwh_th), _side(base, other, inventory)


def _side(base: Ground, usual: Course, inventory: Floats) -> Side:
    case = usual.as_usual
    parts = (case.unmet_kw_th, case.inventory_kwh_th, case.charge_kw_th, case.power_kw)
    return Side(usual, inventory, usual_hours(base.plants, base.here, *parts))


def try_all(
    base: Ground, offered: Candidates, event: tuple[int, int], direction: Direction, sides: tuple[Side, Side]
) -> Tried:
    """Try every candidate from the best inventory, and those that keep their limits from the other one.

    Limits must hold in both; one that gives less from the other inventory than from the best is refused, so that
    no promise rests on the better level.
    """
    runs = _Runs(base, offered, event, direction)
    everyone = np.arange(len(offered.site))
    verdict = np.zeros(len(everyone), dtype=np.int64)
    best, expected = runs.part(everyone, sides[0], verdict)
    runs.rest(best, everyone, sides[0], verdict)
    alive = np.flatnonzero(verdict == 0)
    other, _ = runs.part(alive, sides[1], verdict, expected[alive])
    runs.rest(other, alive, sides[1], verdict)
    kept = np.flatnonzero(verdict == 0)
    sums = best.tally.sums[kept]
    cause = tank_cause(sums)
    leans = np.where(sums["unmet_kwh_th"] > 0.0, LIMITED_BY.index("comfort"), 0)
    at_start = other.tally.sums["at_start_kwh_th"][verdict[alive] == 0]
    limited_by = np.where(cause > 0, cause, leans)
    return Tried(verdict, expected, kept, best.tally.change_kw[kept], sums, at_start, limited_by)


@dataclass(frozen=True)
class _Runs:
    base: Ground
    offered: Candidates
    event: tuple[int, int]
    direction: Direction

    def part(
        self, index: Ints, side: Side, verdict: Ints, promised: Floats | None = None
    ) -> tuple[Trial, Floats]:
        """Run the candidates `index` through the event, write refusals into `verdict`, and return the trial and the
        expected kW of each."""
        first, last = self.event
        trial = begin(self.base, self.offered.take(index), side.course, side.inventory_kwh_th)
        everyone = np.arange(len(index))
        trial.run(self.base.plants, side.hours, first, last, everyone)
        site, sums = trial.rows["site"], trial.tally.sums
        expected = self.direction.sign * trial.tally.change_kw[:, first:last]
        hour = np.arange(first, last)[None, :]
        inside = (hour >= trial.rows["start"][:, None]) & (hour < trial.rows["end"][:, None])
        least = np.where(inside, expected, np.inf).min(axis=1, initial=np.inf)
        found = self._broken(trial, everyone, last, promised is None)
        small, less = least < LEAST_KW, np.zeros(len(index), dtype=np.bool_)
        if promised is not None:
            slack = LOW_TOLERANCE * np.abs(promised) + LEAST_KW
            less = np.asarray((inside & (expected < promised - slack)).any(axis=1))
            small = np.zeros(len(index), dtype=np.bool_)
        over = (self.base.overstated_kw[site, first:last] * inside).sum(axis=1)
        unsure = over > UNSURE_FRACTION * np.maximum((expected * inside).sum(axis=1), 0.0)
        if self.direction is Direction.ABSORB:
            size = self.base.plants.sites["size_kwh_th"][site]
            full = sums["at_end_kwh_th"] >= NEARLY_FULL * size
            reasons = ((small & full, "full"), (small, "already_on"), (found > 0, ""), (less, "full"))
        else:
            less = less | self._overheld(trial)
            reasons = ((small, "already_off"), (found > 0, ""), (less, "inventory"), (unsure, "already_off"))
        verdict[index] = np.select(
            [mask for mask, _ in reasons],
            [np.full_like(found, LIMITED_BY.index(name)) if name else found for _, name in reasons],
            default=0,
        )
        return trial, expected

    def _broken(self, trial: Trial, among: Ints, until: int, usual_counts: bool) -> Ints:
        site, base = trial.rows["site"][among], self.base
        return broken(trial.tally, among, site, base.roster.buildings, base.here, until, usual_counts)

    def _overheld(self, trial: Trial) -> Bools:
        """Rows (row,) whose tanks give less than asked, from a level at window start that may be too high."""
        level = self.base.overheld_kwh_th[trial.rows["site"], trial.rows["start"]]
        too_high = level > OVERHELD_FRACTION * trial.tally.sums["at_start_kwh_th"]
        return np.asarray((tank_cause(trial.tally.sums) > 0) & too_high)

    def rest(self, trial: Trial, index: Ints, side: Side, verdict: Ints) -> None:
        """Run those of the candidates `index` that are not refused yet from the event to the horizon's end, and write
        refusals into `verdict`; a recovery of its own hours that does not bring the tank back after a shed is none."""
        among = np.flatnonzero(verdict[index] == 0)
        end, rows = self.base.outlook.clock.count, trial.rows
        trial.run(self.base.plants, side.hours, self.event[1], end, among)
        found, rows = self._broken(trial, among, end, side.course is self.base.usual), rows[among]
        never = (
            (rows["recovery"] != USUAL) & ~rows["from_above"] & (trial.tally.sums["full_again"][among] < 0)
        )
        verdict[index[among]] = np.where((found == 0) & never, LIMITED_BY.index("recovery"), found)
