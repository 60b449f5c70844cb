"""Which way an event goes: shed load, or absorb it."""

from enum import StrEnum


class Direction(StrEnum):
    """Direction of an event; kW asked, expected and delivered are positive in it."""

    SHED = "shed"
    ABSORB = "absorb"

    @property
    def sign(self) -> float:
        """expected_kw = sign x change_kw, where change is event less usual."""
        return -1.0 if self is Direction.SHED else 1.0
