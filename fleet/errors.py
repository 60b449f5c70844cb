"""The root error of this package, and one child for each exit code a caller can meet."""

from dataclasses import dataclass


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
