"""What a condition looks at: one sample's assessment, its state letter, and what is remembered."""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final, Literal

from idlerwatch.core.values import Assessment, Figure
from idlerwatch.core.watch.conditions.memory import Memory

Letter = Literal["S", "A", "C", "U", "M", "L", "D", "B"]
Address = tuple[str, str, str]
"""Measurement, subject, quantity: the key of a figure."""

_LETTERS: Final[Mapping[str, Letter]] = {
    "stopped": "S",
    "starting": "A",
    "change-over": "C",
    "run-down": "D",
    "blind": "B",
}
_RUNNING: Final[Mapping[str, Letter]] = {"loaded": "L", "machine starting": "M"}


def letter_of(assessment: Assessment) -> Letter:
    """Return the letter of the converter's state.

    Examples
    --------
    >>> from types import SimpleNamespace as Seen
    >>> seen = (("stopped", ""), ("running", "unloaded"), ("running", "loaded"))
    >>> [letter_of(Seen(state=state, loading=loading)) for state, loading in seen]
    ['S', 'U', 'L']
    """
    if assessment.state == "running":
        return _RUNNING.get(assessment.loading, "U")
    return _LETTERS[assessment.state]


@dataclass(frozen=True, slots=True)
class View:
    """One sample as the conditions see it."""

    assessment: Assessment
    figures: Mapping[Address, Figure]
    letter: Letter
    at: float
    memory: Memory

    def value(self, address: Address) -> float:
        """Return a figure's value, NaN where it is unknown."""
        figure = self.figures.get(address)
        return math.nan if figure is None else figure.value
