"""Answers that may still come.

RTU answers carry no number: a meter asked twice for blocks of one shape may be taken to have answered the second when
it only answered the first, late. So each question whose answer may still come is kept here until it cannot come any
more, and meanwhile nothing of that shape is asked. An answer that fits is then the answer to the
question asked: every other one that could come has another shape.

Also how long a meter is waited for: its own measured answer delay decides.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Final

from idlerwatch.core.frames import Shape

LATEST_S: Final = 1.25
"""An answer is not counted on to come later than this after it was given up (1 s is promised)."""
FIRST_PATIENCE_S: Final = 0.3
LEAST_PATIENCE_S: Final = 0.12
MOST_PATIENCE_S: Final = 1.0
SPARE_S: Final = 0.05
"""What adapters and schedulers may add to any answer."""
QUIET_S: Final = 0.03
"""Adapters hand over what they received every 16 ms: less quiet than this proves nothing."""
MOST_QUIET_S: Final = 0.3


@dataclass(frozen=True, slots=True)
class Owed:
    """One answer that may still come, when it was asked for and until when it may come."""

    shape: Shape
    asked_at: float
    until: float


def still_owed(owed: Iterable[Owed], now: float) -> tuple[Owed, ...]:
    """Return what may still come."""
    return tuple(one for one in owed if one.until > now)


def oldest(owed: Iterable[Owed], shape: Shape) -> Owed | None:
    """Return the oldest answer of a shape that is owed; None where there is none.

    It is still counted as owed when something of its shape has come: a foreign frame may look like it.
    """
    return next((one for one in owed if one.shape == shape), None)


@dataclass(frozen=True, slots=True)
class Patience:
    """How slow a meter was lately: smoothed answer delay and its smoothed deviation, as TCP does for round trips.

    One late answer among many widens the limit for a few answers only; a meter that is always slow moves it for good.

    References
    ----------
    V. Jacobson, *Congestion Avoidance and Control* (1988), appendix A: gains 1/8 and 1/4, four deviations.
    """

    last_s: float = 0.0
    mean_s: float = 0.0
    deviation_s: float = 0.0
    answers: int = 0

    def after(self, delay_s: float) -> "Patience":
        """Return what is known after one more answer that took its meter `delay_s`."""
        if not self.answers:
            return Patience(delay_s, delay_s, delay_s / 2.0, 1)
        error = delay_s - self.mean_s
        deviation = self.deviation_s + (abs(error) - self.deviation_s) / 4.0
        return Patience(delay_s, self.mean_s + error / 8.0, deviation, self.answers + 1)

    @property
    def limit_s(self) -> float:
        """How long the meter may think before it is given up. [s]"""
        if not self.answers:
            return FIRST_PATIENCE_S
        return min(max(self.mean_s + 4.0 * self.deviation_s + SPARE_S, LEAST_PATIENCE_S), MOST_PATIENCE_S)


def quiet_s(worst_lateness_s: float) -> float:
    """Return how long a line must have been quiet after a failure, by the worst lateness seen. [s]"""
    return min(max(1.2 * worst_lateness_s, QUIET_S), MOST_QUIET_S)
