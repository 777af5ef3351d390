"""What a watch is: how an alarm's value comes out of a sample, and what an installation lacks to have it."""

import math
from collections.abc import Callable
from dataclasses import dataclass

from idlerwatch.core.settings.model import Alarm, Settings
from idlerwatch.core.watch.conditions.timers import Sense
from idlerwatch.core.watch.conditions.view import Address, View

Measure = Callable[[View], float]
Limit = Callable[[View], float]

CONVERTER = "converter"


def for_converter(_settings: Settings) -> tuple[str, ...]:
    """Return the one subject of what concerns the converter as a whole."""
    return (CONVERTER,)


def lacks_nothing(_settings: Settings) -> str:
    """Return that nothing is lacking."""
    return ""


@dataclass(frozen=True, slots=True)
class Subject:
    """One subject of a watch: its name, how it is measured, the figure that is told, a limit that moves."""

    name: str
    measure: Measure
    figure: Address | None = None
    limit: Limit | None = None


@dataclass(frozen=True, slots=True)
class Watch:
    """How a condition is computed.

    `subjects` gives the subjects an installation has; `lacks` says in a few words why it has none (empty: nothing is
    lacking). `good` is the value the figure ought to have: the distance from it says what is worse.
    """

    sense: Sense
    subjects: Callable[[Settings, Alarm], tuple[Subject, ...]]
    lacks: Callable[[Settings], str] = lacks_nothing
    good: float = 0.0


def figure(name: str, address: Address) -> Subject:
    """Return a subject whose value is a figure as it is."""

    def measure(view: View) -> float:
        found = view.figures.get(address)
        return math.nan if found is None else found.value

    return Subject(name, measure, address)


def yes(condition: Callable[[View], bool]) -> Measure:
    """Return a condition as a value: 1 where it holds, else 0."""
    return lambda view: 1.0 if condition(view) else 0.0
