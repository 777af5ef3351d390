"""What is wrong with settings: every fault at once, each with its place, what was found, and what was wanted."""

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Fault:
    """One fault: `place` is where it stands, `found` the value there (or ``missing``), `wanted` what it must be.

    Examples
    --------
    >>> print(Fault("alarms.leg-low.deadband", "-1", "must not be negative"))
    alarms.leg-low.deadband is -1, must not be negative
    """

    place: str
    found: str
    wanted: str

    def __str__(self) -> str:
        return f"{self.place} is {self.found}, {self.wanted}"


class SettingsError(Exception):
    """Settings that cannot be used; holds all faults, and reads as one sentence a line."""

    def __init__(self, faults: Iterable[Fault]) -> None:
        self.faults = tuple(faults)
        super().__init__("\n".join(map(str, self.faults)))
