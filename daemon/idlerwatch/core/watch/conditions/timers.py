"""Setpoint, deadband and delays: when a condition comes in and when it goes.

* Beyond is strict: below means less than the setpoint, above more than it.
* Back inside includes its bound: at least setpoint + deadband (below), at most setpoint - deadband (above), or
  `clears_at` where the alarm names it. The deadband acts on the return only.
* The on-delay must hold the whole time: one known sample that is not beyond restarts it. The off-delay likewise: one
  known sample that is not back inside restarts it.
* A delay has passed at the first sample not earlier than start + delay - half a cycle.
* An unknown sample proves nothing: a delay cannot pass at it, and goes on after it if it lasted `BRIDGE_S` or less.

References
----------
On- and off-delay as OPC UA part 9 describes them; dip and swell with hysteresis as IEC 61000-4-30.
"""

import math
from dataclasses import dataclass
from typing import Final, Literal

from idlerwatch.core.settings.model import Alarm

Sense = Literal["above", "below", "yes"]
"""How a value is judged; ``yes`` is 1 or 0, beyond when 1."""

Place = Literal["beyond", "between", "back", "unknown"]

BRIDGE_S: Final = 5.0
_ROUNDING: Final = 1e-7  # of float32 values, so that a bound met exactly counts as met


@dataclass(frozen=True, slots=True)
class Band:
    """What is beyond and what is back, multiplied by `sign` so that beyond always means more."""

    sign: float
    beyond: float
    back: float

    def place(self, value: float) -> Place:
        """Return where a value stands."""
        if math.isnan(value):
            return "unknown"
        signed = self.sign * value
        if signed > self.beyond:
            return "beyond"
        return "back" if signed <= self.back else "between"


def band_of(sense: Sense, alarm: Alarm, setpoint: float) -> Band:
    """Return the band of an alarm for a setpoint (which may be another than the list's).

    Examples
    --------
    >>> dip = Alarm(tag="dip", watches="", setpoint=207.0, deadband=4.6, priority="low")
    >>> [band_of("below", dip, 207.0).place(volts) for volts in (206.9, 207.0, 211.5, 211.6)]
    ['beyond', 'between', 'between', 'back']
    """
    if sense == "yes":
        return Band(1.0, 0.5, 0.5)
    sign = 1.0 if sense == "above" else -1.0
    margin = _ROUNDING * abs(setpoint)
    back = sign * setpoint - alarm.deadband if alarm.clears_at is None else sign * alarm.clears_at
    return Band(sign, sign * setpoint + margin, back + margin)


@dataclass(frozen=True, slots=True)
class Timer:
    """Whether a condition is in, and since when it has been on its way to the other side (NaN: it is not)."""

    is_in: bool = False
    since: float = math.nan
    unknown_since: float = math.nan


IDLE: Final = Timer()
IN: Final = Timer(is_in=True)


@dataclass(frozen=True, slots=True)
class Delays:
    """On- and off-delay, and half a cycle. [s]"""

    on: float
    off: float
    slack: float = 0.0


def advance(timer: Timer, place: Place, at: float, delays: Delays) -> Timer:
    """Return the timer after a sample at `at` whose value stands at `place`."""
    if place == "unknown":
        return _unknown(timer, at)
    if place != ("back" if timer.is_in else "beyond"):
        return IN if timer.is_in else IDLE
    since = _start(timer, at)
    delay = delays.off if timer.is_in else delays.on
    if at >= since + delay - delays.slack:
        return IDLE if timer.is_in else IN
    return timer if since == timer.since and math.isnan(timer.unknown_since) else Timer(timer.is_in, since)


def _unknown(timer: Timer, at: float) -> Timer:
    if math.isnan(timer.since):
        return timer
    if math.isnan(timer.unknown_since):
        return Timer(timer.is_in, timer.since, at)
    if at - timer.unknown_since > BRIDGE_S:
        return IN if timer.is_in else IDLE
    return timer


def _start(timer: Timer, at: float) -> float:
    """Since when the value has been on the other side."""
    is_running = not math.isnan(timer.since)
    return timer.since if is_running and not at - timer.unknown_since > BRIDGE_S else at


def remaining(timer: Timer, at: float, delays: Delays) -> float:
    """Return how long an on-delay that is running still takes; infinite where none is. [s]"""
    if timer.is_in or math.isnan(timer.since):
        return math.inf
    return timer.since + delays.on - at
