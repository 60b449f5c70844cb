"""Arrays -> a mathematical programme in PuLP -> arrays: the only PuLP door.

Owns the models, the solvers' options and what their states mean. Values that come back are an offer only:
whoever asks recomputes balance, limits and cost from the chosen candidates.

    minimise   sum cost x + sum shortfall_price s + sum over_price o        x in {0,1} or [0,1]; s, o >= 0
    subject to sum kw x + s >= request            each interval            price_shed >= 0
               sum kw x - o <= request + allowance                          price_over >= 0
               A x <= room (+ priced slack)       each coupling row         price_rows >= 0
               sum of a site's x <= 1
"""

import contextlib
import os
import sys
import time
import warnings
from collections.abc import Callable, Iterator
from dataclasses import replace
from typing import Any, Final

import numpy as np
import pulp

from fleet.choices import UNLIMITED, Choices, Chosen, Most, Relaxed, Status, Work
from sites.units import Floats, Ints

LEAST_SECONDS: Final = 0.1
HIGHS_FEASIBLE: Final = 2
"""What HiGHS calls a solution that keeps the rows (kSolutionStatusFeasible)."""
HIGHS_OPTIONS: Final = frozenset(
    {
        "log_to_console",
        "mip_abs_gap",
        "mip_feasibility_tolerance",
        "mip_rel_gap",
        "objective_target",
        "primal_feasibility_tolerance",
        "random_seed",
        "threads",
        "time_limit",
    }
)
"""Names that may be passed on: HiGHS takes a misspelt one without a word through PuLP."""


def relaxation(choices: Choices, solver: str = "highs", profile: Floats | None = None) -> Relaxed:
    """Linear relaxation with its prices (duals); sum of the parts below equals the objective:

    objective = price_shed.request - price_over.(request + allowance) - price_rows.room + sum_i min(0, best value)

    With a profile: the model of most_kw, objective = -factor, and a site's best value is min(0, -price_shed.kw + ...).
    """
    model = _Model(choices, whole=False, profile=profile)
    status, _ = model.solve(solver, Work(), gap=0.0)
    none = np.zeros(0)
    if status is not Status.PROVEN:
        return Relaxed(Status.FAILED if status.is_ok else status, np.nan, none, none, none, none)
    shed, over, rows = (
        model.duals(group) for group in (model.shed_rows, model.over_rows, model.coupling_rows)
    )
    scale = model.money_scale / model.kw_scale
    x = np.clip(_values(model.x), 0.0, 1.0)
    return Relaxed(status, model.objective(), x, shed * scale, -over * scale, -rows * scale)


def integer(
    choices: Choices, gap: float, work: Work = UNLIMITED, start: Ints | None = None, solver: str = "highs"
) -> Chosen:
    """Whole candidates; stops at `gap` (money) between answer and bound, or where `work` is done.

    start: columns of a known feasible answer, given to the solver where it takes one.
    """
    began = time.perf_counter()
    model = _Model(choices, whole=True)
    if work.seconds > 0.0:
        left = work.seconds - (time.perf_counter() - began)
        work = replace(work, seconds=max(left, LEAST_SECONDS))
    status, bound = model.solve(solver, work, gap / model.money_scale, start)
    if not status.is_ok:
        return Chosen(status, np.zeros(0, dtype=np.int64), np.nan, bound * model.money_scale)
    return Chosen(status, _picked(choices, model.x), model.objective(), bound * model.money_scale)


def most_kw(
    choices: Choices, profile: Floats, work: Work = UNLIMITED, enough: float = np.inf, solver: str = "highs"
) -> Most:
    """Largest factor f with sum kw x >= f profile in all intervals with profile > 0, coupling rows kept.

    With a profile of ones f is the largest flat kW of all intervals together. Costs and prices are not read.
    f is taken from the chosen columns in numpy, never from the solver, and rounded down to 0.001. Columns that
    break a row by numpy are no answer: then f is 0 with nothing chosen. Stops where f reaches `enough` (HiGHS).
    """
    nothing = np.zeros(0, dtype=np.int64)
    if choices.site.size == 0 or not (profile > 0.0).any():
        return Most(Status.PROVEN, 0.0, nothing)
    model = _Model(choices, whole=True, profile=profile)
    status, _ = model.solve(solver, work, 0.0, relative_gap=1e-4, target=-enough / model.money_scale)
    if not status.is_ok:
        return Most(status, 0.0, nothing)
    chosen = _picked(choices, model.x)
    kept = bool(np.all(choices.rows[:, chosen].sum(axis=1) <= choices.room + 1e-6))
    return (
        Most(status, factor_of(choices.kw[chosen], profile), chosen)
        if kept
        else Most(Status.FAILED, 0.0, nothing)
    )


def factor_of(kw: Floats, profile: Floats) -> float:
    """The multiple of a profile (E,) that candidates of kw (chosen, E) give, rounded down to 0.001; 0 or more."""
    asked = profile > 0.0
    factor = float((kw.sum(axis=0)[asked] / profile[asked]).min())
    return max(float(np.floor(factor * 1000.0 + 1e-9) / 1000.0), 0.0)


def _power_of_two(value: float) -> float:
    """The power of two at or below a positive value, 1 for others: scaling by it is exact in floats."""
    return float(2.0 ** np.floor(np.log2(value))) if np.isfinite(value) and value > 0.0 else 1.0


def _values(variables: list[Any]) -> Floats:
    return np.array([variable.varValue or 0.0 for variable in variables], dtype=np.float64)


def _picked(choices: Choices, variables: list[Any]) -> Ints:
    """Columns that are 1 in the answer; of two of one site (never seen) the larger."""
    values = _values(variables)
    columns = np.flatnonzero(values > 0.5)
    order = columns[np.argsort(-values[columns], kind="stable")]
    _, first = np.unique(choices.site[order], return_index=True)
    return np.sort(order[first]).astype(np.int64)


class _Model:
    """One PuLP problem and the names of its parts. Scaled by powers of two, so that units do not matter."""

    def __init__(self, choices: Choices, whole: bool, profile: Floats | None = None) -> None:
        self.whole = whole
        most = float(np.abs(choices.kw).max(initial=0.0))
        asked = float(np.abs(choices.request_kw).max(initial=0.0))
        self.kw_scale = _power_of_two(asked if profile is None and asked > 0.0 else most)
        usual_price = float(choices.shortfall_price_per_kw.max(initial=0.0)) if profile is None else 0.0
        self.money_scale = _power_of_two(
            max(float(np.abs(choices.cost).max(initial=0.0)), usual_price * 1e-3)
        )
        self.problem = pulp.LpProblem("choice", pulp.LpMinimize)
        kind = "Integer" if whole else "Continuous"
        self.x = [self.problem.add_variable(f"x{c}", 0, 1, kind) for c in range(choices.site.size)]
        self.shed_rows: list[Any] = []
        self.over_rows: list[Any] = []
        self.short: list[Any] = []
        self.over: list[Any] = []
        self.possible = True
        self.kw = choices.kw / self.kw_scale
        self.request = choices.request_kw / self.kw_scale
        self.ceiling = (choices.request_kw + choices.allowance_kw) / self.kw_scale
        if profile is None:
            self._priced(choices)
        else:
            self._profile(choices, profile)
        rows = zip(choices.rows / self.kw_scale, choices.room / self.kw_scale, strict=True)
        soft = self._soft(choices)
        self.coupling_rows = [
            self._row(row, more, -1, float(room)) for (row, room), more in zip(rows, soft, strict=True)
        ]
        self._one_each(choices)

    def _priced(self, choices: Choices) -> None:
        """Objective in money; a shortfall and an over-delivery variable for each interval."""
        intervals = range(choices.request_kw.size)
        self.short = [self.problem.add_variable(f"s{e}", 0) for e in intervals]
        self.over = [self.problem.add_variable(f"o{e}", 0) for e in intervals]
        unit = self.kw_scale / self.money_scale
        prices = (
            choices.cost / self.money_scale,
            choices.shortfall_price_per_kw * unit,
            choices.over_price_per_kw * unit,
        )
        variables = (self.x, self.short, self.over)
        terms = [
            pair for v, p in zip(variables, prices, strict=True) for pair in zip(v, p.tolist(), strict=True)
        ]
        self.problem.setObjective(pulp.LpAffineExpression(terms))
        could = _most_by_site(choices.site, self.kw)
        for e in intervals:
            column, short, over = self.kw[:, e], (self.short[e], 1.0), (self.over[e], -1.0)
            self.shed_rows.append(self._row(column, [short], 1, float(self.request[e])))
            can_bind = could[e] > self.ceiling[e]
            self.over_rows.append(self._row(column, [over], -1, float(self.ceiling[e])) if can_bind else None)

    def _profile(self, choices: Choices, profile: Floats) -> None:
        """Objective is the factor of the profile, to be made large."""
        factor = self.problem.add_variable("factor", 0)
        self.problem.setObjective(pulp.LpAffineExpression([(factor, -1.0)]))
        self.shed_rows = [
            self._row(self.kw[:, e], [(factor, -float(profile[e]))], 1, 0.0) if profile[e] > 0.0 else None
            for e in range(profile.size)
        ]

    def _soft(self, choices: Choices) -> list[list[tuple[Any, float]]]:
        """What lets each coupling row be broken at a price: one variable each, or nothing."""
        self.broken = []
        if choices.row_price is None:
            return [[] for _ in range(choices.room.size)]
        price = choices.row_price * self.kw_scale / self.money_scale
        self.broken = [self.problem.add_variable(f"b{r}", 0) for r in range(choices.room.size)]
        self.problem.setObjective(
            self.problem.objective + pulp.LpAffineExpression([(slack, price) for slack in self.broken])
        )
        return [[(slack, -1.0)] for slack in self.broken]

    def _row(self, row: Floats, more: list[tuple[Any, float]], sense: int, right: float) -> Any:
        used = np.flatnonzero(row)
        terms = [
            (self.x[c], value) for c, value in zip(used.tolist(), row[used].tolist(), strict=True)
        ] + more
        if not terms:
            self.possible = self.possible and right * sense <= 0.0
            return None
        constraint = pulp.LpConstraint(pulp.LpAffineExpression(terms), sense, None, right)
        self.problem.addConstraint(constraint)
        return constraint

    def _one_each(self, choices: Choices) -> None:
        order = np.argsort(choices.site, kind="stable")
        groups = np.split(order, np.flatnonzero(np.diff(choices.site[order])) + 1) if order.size else []
        for group in groups:
            terms = [(self.x[c], 1.0) for c in group.tolist()]
            self.problem.addConstraint(pulp.LpConstraint(pulp.LpAffineExpression(terms), -1, None, 1.0))

    def objective(self) -> float:
        """Objective in money, as the variables stand."""
        return float(pulp.value(self.problem.objective) or 0.0) * self.money_scale

    def duals(self, rows: list[Any]) -> Floats:
        """Raw duals of a group of rows (at least: 0 or more, at most: 0 or less), 0 for rows left out."""
        values = [0.0 if row is None or row.pi is None else float(row.pi) for row in rows]
        return np.array(values, dtype=np.float64)

    def solve(
        self,
        solver: str,
        work: Work,
        gap: float,
        start: Ints | None = None,
        relative_gap: float = 0.0,
        target: float = -np.inf,
    ) -> tuple[Status, float]:
        """Runs a solver; its state and the bound it claims, both in scaled units."""
        if not self.possible:
            return Status.INFEASIBLE, np.inf
        known = self._start_values(start)
        if solver != "highs" or not pulp.HiGHS().available():
            self.problem.solve(self._cbc(work, gap, relative_gap, known))
            return self._state(), -np.inf
        options: dict[str, float | int | bool] = {
            "log_to_console": False,
            "mip_feasibility_tolerance": 1e-9,
            "primal_feasibility_tolerance": 1e-9,
            "random_seed": 1,
            "threads": 1,
            "mip_abs_gap": gap,
            "mip_rel_gap": relative_gap,
            "objective_target": target,
        }
        if work.seconds > 0.0:
            options["time_limit"] = work.seconds
        self.problem.solve(_highs(self.whole, options, known, work))
        told = self.problem.solverModel.getInfo()
        if self.whole and told.primal_solution_status != HIGHS_FEASIBLE:
            state = self._state()
            return (state if state is Status.INFEASIBLE else Status.FAILED), -np.inf
        return self._state(), float(told.mip_dual_bound) if self.whole else -np.inf

    def _cbc(self, work: Work, gap: float, relative_gap: float, known: dict[Any, float] | None) -> Any:
        """The solver that comes with PuLP, for where HiGHS is missing; it tells no bound."""
        for variable, value in (known or {}).items():
            variable.setInitialValue(value, check=False)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", DeprecationWarning)
            return pulp.PULP_CBC_CMD(
                mip=self.whole,
                msg=False,
                threads=1,
                timeLimit=work.seconds or None,
                maxNodes=work.nodes or None,
                gapAbs=gap,
                gapRel=relative_gap,
                warmStart=known is not None,
            )

    def _start_values(self, start: Ints | None) -> dict[Any, float] | None:
        """Value of every variable of a known answer; None where none is given."""
        if start is None or not self.whole or not self.short or self.broken:
            return None
        taken = np.zeros(len(self.x))
        taken[start] = 1.0
        given = self.kw[start].sum(axis=0)
        values = dict(zip(self.x, taken.tolist(), strict=True))
        values |= dict(zip(self.short, np.maximum(self.request - given, 0.0).tolist(), strict=True))
        values |= dict(zip(self.over, np.maximum(given - self.ceiling, 0.0).tolist(), strict=True))
        return values

    def _state(self) -> Status:
        """The state by `sol_status`: the other one calls a run stopped by time optimal."""
        states = {
            pulp.LpSolutionOptimal: Status.PROVEN,
            pulp.LpSolutionIntegerFeasible: Status.FEASIBLE_CUT_SHORT,
            pulp.LpSolutionInfeasible: Status.INFEASIBLE,
        }
        return states.get(self.problem.sol_status, Status.FAILED)


def _most_by_site(site: Ints, values: Floats) -> Floats:
    """(E,) sum over sites of the largest value of any candidate, staying out (0) included."""
    _, member = np.unique(site, return_inverse=True)
    best = np.zeros((int(member.max(initial=-1)) + 1, values.shape[1]))
    np.maximum.at(best, member, values)
    total: Floats = best.sum(axis=0)
    return total


def _highs(
    whole: bool,
    options: dict[str, float | int | bool],
    start: dict[Any, float] | None,
    work: Work = UNLIMITED,
) -> Any:
    """HiGHS within this process, quiet, with checked options, a known answer to start from and counted work."""
    unknown = sorted(set(options) - HIGHS_OPTIONS)
    if unknown:
        raise ValueError(f"options {', '.join(unknown)} are not in the checked list of HiGHS options")
    solver = pulp.HiGHS(mip=whole, msg=False, **options)
    configure = solver.createAndConfigureSolver

    def configure_quietly(problem: Any) -> None:
        with _quiet_stdout():
            configure(problem)

    def run(problem: Any) -> None:
        if start is not None:
            index = np.array([variable.index for variable in start], dtype=np.int32)
            problem.solverModel.setSolution(
                len(start), index, np.array(list(start.values()), dtype=np.float64)
            )
        if whole and (work.nodes or work.checks):
            problem.solverModel.cbMipInterrupt.subscribe(_counting(work))
        problem.solverModel.run()

    solver.createAndConfigureSolver = configure_quietly
    solver.callSolver = run
    return solver


def _counting(work: Work) -> Callable[[Any], None]:
    """Stops HiGHS after so many nodes, or so many checks of whether to stop: counts that no load changes."""
    checks = 0

    def check(event: Any) -> None:
        nonlocal checks
        checks += 1
        if 0 < work.nodes <= event.data_out.mip_node_count or 0 < work.checks <= checks:
            event.interrupt()

    return check


@contextlib.contextmanager
def _quiet_stdout() -> Iterator[None]:
    """Keeps the process's stdout clean: HiGHS prints a banner when made, before its options can be set."""
    try:
        sys.stdout.flush()
        saved, null = os.dup(1), os.open(os.devnull, os.O_WRONLY)
    except (OSError, ValueError, AttributeError):
        yield
        return
    try:
        os.dup2(null, 1)
        yield
    finally:
        os.dup2(saved, 1)
        os.close(saved)
        os.close(null)
