"""A choice as plain arrays, and what comes back from a solver: nothing but the data.

Owns the shapes and what a state means. Leaves the models and the solver to choice.py, the only PuLP door.
"""

from dataclasses import dataclass
from enum import StrEnum
from typing import Final

from sites.units import Floats, Ints


class Status(StrEnum):
    """How far an answer is proven; values may be read only where `is_ok`."""

    PROVEN = "proven"
    FEASIBLE_CUT_SHORT = "feasible_cut_short"
    INFEASIBLE = "infeasible"
    FAILED = "failed"

    @property
    def is_ok(self) -> bool:
        """There is an answer that keeps the rows."""
        return self in (Status.PROVEN, Status.FEASIBLE_CUT_SHORT)


@dataclass(frozen=True)
class Choices:
    """A whole model in plain arrays: C columns of any sites, E intervals, L coupling rows."""

    site: Ints
    """(C,) any integers; equal ones exclude each other"""
    cost: Floats
    kw: Floats
    """(C, E)"""
    request_kw: Floats
    allowance_kw: Floats
    shortfall_price_per_kw: Floats
    over_price_per_kw: Floats
    rows: Floats
    """(L, C) of A x <= room"""
    room: Floats
    """(L,)"""
    row_price: float | None = None
    """Money per unit by which a coupling row is broken; None = never. For searches only: an answer keeps the rows"""


@dataclass(frozen=True)
class Work:
    """How much a solver may do: nodes, checks of its limits (its own count of work), seconds. Zero is no limit.

    Nodes and checks do not depend on the machine's load: the same model stops at the same place.
    """

    nodes: int = 0
    checks: int = 0
    seconds: float = 0.0


UNLIMITED: Final = Work()


@dataclass(frozen=True)
class Relaxed:
    """Optimum of the linear relaxation; prices are of the sign that makes them 0 or more."""

    status: Status
    objective: float
    x: Floats
    price_shed: Floats
    price_over: Floats
    price_rows: Floats


@dataclass(frozen=True)
class Chosen:
    """Answer of a model with whole candidates; `chosen` are column indices, sorted."""

    status: Status
    chosen: Ints
    objective: float
    """As the solver told it"""
    bound_solver: float
    """No answer of this model costs less, by the solver's word; -inf where it gives none"""


@dataclass(frozen=True)
class Most:
    """The largest multiple of a profile that can be given, and the candidates that give it."""

    status: Status
    kw: float
    """Rounded down to 0.001 from what `chosen` gives by numpy"""
    chosen: Ints
