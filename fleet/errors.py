"""The root error of this package, and one child for each exit code a caller can meet."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import TypeVar

T = TypeVar("T")


class FleetError(ValueError):
    """Refused input or wrong usage (exit 2); the message says what came, what was expected, what to do."""


class CannotBeMet(FleetError):  # noqa: N818 - named for what is true, not for the mechanism
    """The request cannot be met as asked (exit 3); carries what is available and what binds, per interval."""

    def __init__(self, message: str, detail: dict[str, object] | None = None) -> None:
        super().__init__(message)
        self.detail = detail or {}


@dataclass(frozen=True)
class Problem:
    """One thing wrong in the input, complete enough to mend it without asking."""

    file: str
    row: int | None
    column: str | None
    came: str
    expected: str
    advice: str

    def __str__(self) -> str:
        place = self.file
        if self.row is not None:
            place += f", row {self.row}"
        if self.column:
            place += f", column {self.column}"
        return f"{place}: came {self.came}; expected {self.expected}; {self.advice}"


class Refused(FleetError):  # noqa: N818
    """Input refused with all of its problems at once, the first five spelled out, the rest counted."""

    def __init__(self, problems: list[Problem], shown: int = 5) -> None:
        self.problems = problems
        lines = [str(problem) for problem in problems[:shown]]
        if len(problems) > shown:
            lines.append(f"... and {len(problems) - shown} more; `shedwright check` lists all of them")
        super().__init__("\n".join(lines))


class Several(FleetError):  # noqa: N818
    """Refusals of several checks, told together in their order."""

    def __init__(self, errors: list[FleetError]) -> None:
        self.errors = errors
        super().__init__("\n".join(str(error) for error in errors))


class Gathered:
    """Several checks made one after another whose refusals are told at once, not one a try."""

    def __init__(self) -> None:
        self._found: list[FleetError] = []

    def of(self, check: Callable[[], T]) -> T | None:
        """What `check` returns, or None where it refuses; the refusal is kept."""
        try:
            return check()
        except FleetError as error:
            self._found.append(error)
            return None

    def tell(self) -> None:
        """Raise what was refused: the one error itself, or all of them in one, in the order of the checks."""
        if not self._found:
            return
        if len(self._found) == 1:
            raise self._found[0]
        raise Several(self._found)


def parts(error: Exception) -> list[dict[str, object]]:
    """What was refused as plain values: each problem with its fields, or a message."""
    if isinstance(error, Several):
        return [part for one in error.errors for part in parts(one)]
    if isinstance(error, Refused):
        return [dict(vars(problem)) for problem in error.problems]
    return [{"message": str(error)}]
