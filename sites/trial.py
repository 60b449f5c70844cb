"""Candidates tried: each simulated only as far as it keeps its limits.

Nothing before the event differs from the usual case, so every trial starts there at the event's first interval; a
candidate that has broken a limit by the event's end is run no further. Owns which rows are run how far; what is
simulated is plant.py's, what is summed up and which limit breaks tally.py's.
"""

from dataclasses import dataclass, replace

import numpy as np

from sites.blocks import Candidates
from sites.candidate import Stages
from sites.conditions import Conditions
from sites.course import Course
from sites.direction import Direction
from sites.ground import Ground, usual_high
from sites.plant import State, at_rest, simulate, state_after
from sites.quotes import LIMITED_BY
from sites.roster import Rows
from sites.rows import Plants, plants
from sites.tally import Sums, Tally, add, broken, sums, tank_cause
from sites.units import Bools, Floats, Ints, total

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
class Trial(Rows):
    """Candidate rows on their way through the horizon."""

    rows: Plants
    stages: Stages
    start: Ints
    """(row,) first interval of each window"""
    end: Ints
    state: State
    sums: Sums

    def run(self, here: Conditions, usual: Course, first: int, last: int) -> "Trial":
        """The same rows after [first, last), held against the usual course; their sums grow in place."""
        state = self.state
        for moment in simulate(self.rows, here, self.stages, state, usual.as_usual, first, last):
            add(self.sums, moment, self.rows, here, usual, self.start, self.end)
            state = state_after(moment)
        return replace(self, state=state)


def begin(base: Ground, offered: Candidates, usual: Course, first: int, inventory: Floats) -> Trial:
    """Rows of the candidates at the start of interval `first`, where the usual course (from `inventory`) stands."""
    site = offered.site
    rows = plants(base.roster, base.here, base.standing.tank_available, site, (offered.recovery, offered.end))
    stages = base.in_force.take(site).join(offered.stages)
    held = usual.inventory_kwh_th[site, :, first - 1] if first else inventory[site]
    charging = usual.charging[site, first - 1] if first else None
    state = at_rest(np.array(held), charging)
    made_to = np.asarray(offered.stages.charge.any(axis=1), dtype=np.bool_)
    return Trial(rows, stages, offered.start, offered.end, state, sums(usual.power_kw[site], made_to))


@dataclass(frozen=True)
class Tried:
    """All candidates tried, C of them, and the runs from the best inventory of those that are quoted."""

    verdict: Ints
    """(C,) why each is refused, as an index into LIMITED_BY; 0 = it is quoted"""
    expected_kw: Floats
    """(C, event interval) in the event's direction"""
    kept: Ints
    """(R,) the quoted ones"""
    best: Tally
    """(R, ...)"""
    low_start_kwh_th: Floats
    """(R,) inventory at window start in the run from the other inventory"""
    limited_by: Ints
    """(R,) what a quoted candidate leans on"""


def try_all(base: Ground, offered: Candidates, event: tuple[int, int], direction: Direction) -> Tried:
    """Try every candidate from the best inventory, and those that keep their limits from the other one: the low
    inventory for a shed, the high one for an absorb.

    Limits must hold in both; one that gives less from the other inventory than from the best is refused, so that
    no promise rests on the better level.
    """
    absorb = direction is Direction.ABSORB
    runs = _Runs(base, offered, event, direction)
    other = usual_high(base) if absorb else base.usual_low
    other_kwh_th = base.standing.high_kwh_th if absorb else base.standing.low_kwh_th
    verdict = np.zeros(len(offered.site), dtype=np.int64)
    everyone = np.arange(len(verdict))
    best, alive, expected = runs.part(everyone, base.usual, base.standing.best_kwh_th, verdict)
    best = runs.rest(best, alive, base.usual, verdict)
    alive, best = alive[verdict[alive] == 0], best.take(np.flatnonzero(verdict[alive] == 0))
    low, still, _ = runs.part(alive, other, other_kwh_th, verdict, expected[alive])
    low = runs.rest(low, still, other, verdict)
    last = verdict[still] == 0
    kept = still[last]
    chosen = best.take(np.searchsorted(alive, kept))
    tally = chosen.sums.tally()
    cause = tank_cause(tally)
    leans = np.where(tally.unmet_kwh_th > 0.0, LIMITED_BY.index("comfort"), 0)
    at_start = low.take(np.flatnonzero(last)).sums.tally().inventory_at_start_kwh_th
    return Tried(verdict, expected, kept, tally, at_start, np.where(cause > 0, cause, leans))


@dataclass(frozen=True)
class _Runs:
    base: Ground
    offered: Candidates
    event: tuple[int, int]
    direction: Direction

    def part(
        self, index: Ints, usual: Course, inventory: Floats, verdict: Ints, promised: Floats | None = None
    ) -> tuple[Trial, Ints, Floats]:
        """Run the candidates `index` through the event, write refusals into `verdict`, and return what is left
        of the trial, its indices, and all expected kW."""
        first, last = self.event
        trial = begin(self.base, self.offered.take(index), usual, first, inventory)
        trial = trial.run(self.base.here, usual, first, last)
        change = trial.sums.power_kw[:, first:last] - usual.power_kw[trial.rows.site, first:last]
        expected = self.direction.sign * change
        hour = np.arange(first, last)[None, :]
        inside = (hour >= trial.start[:, None]) & (hour < trial.end[:, None])
        least = np.where(inside, expected, np.inf).min(axis=1, initial=np.inf)
        tally = trial.sums.tally()
        found = broken(tally, trial.rows, self.base.here, promised is None)
        small, less = least < LEAST_KW, np.zeros(len(index), dtype=np.bool_)
        if promised is not None:
            slack = LOW_TOLERANCE * np.abs(promised) + LEAST_KW
            less = np.asarray((inside & (expected < promised - slack)).any(axis=1))
            small = np.zeros(len(index), dtype=np.bool_)
        over = (self.base.overstated_kw[trial.rows.site, first:last] * inside).sum(axis=1)
        unsure = over > UNSURE_FRACTION * np.maximum((expected * inside).sum(axis=1), 0.0)
        if self.direction is Direction.ABSORB:
            size = trial.rows.roster.tanks.capacity_kwh_th
            full = trial.sums.at_end >= NEARLY_FULL * total(size)
            reasons = ((small & full, "full"), (small, "already_on"), (found > 0, ""), (less, "full"))
        else:
            less = less | self._overheld(trial, tally)
            reasons = ((small, "already_off"), (found > 0, ""), (less, "inventory"), (unsure, "already_off"))
        verdict[index] = np.select(
            [mask for mask, _ in reasons],
            [np.full_like(found, LIMITED_BY.index(name)) if name else found for _, name in reasons],
            default=0,
        )
        alive = np.flatnonzero(verdict[index] == 0)
        return trial.take(alive), index[alive], expected

    def _overheld(self, trial: Trial, tally: Tally) -> Bools:
        """Rows (row,) whose tanks give less than asked, from a level at window start that may be too high."""
        level = self.base.overheld_kwh_th[trial.rows.site, trial.start]
        too_high = level > OVERHELD_FRACTION * tally.inventory_at_start_kwh_th
        return np.asarray((tank_cause(tally) > 0) & too_high)

    def rest(self, trial: Trial, index: Ints, usual: Course, verdict: Ints) -> Trial:
        """Run what is left after the event to the horizon's end, and write refusals into `verdict`."""
        done = trial.run(self.base.here, usual, self.event[1], self.base.here.load_kw_th.shape[1])
        verdict[index] = broken(done.sums.tally(), done.rows, self.base.here, usual is self.base.usual)
        return done
