"""The values that go into the core and come out of it; all frozen.

In: `Reading`, `MeterSilent`, `CycleEnd`, `Acknowledge`, `Shelve`, `Trouble` (the union `Input`).
Out: `Assessment`, `AlarmEvent`, `WindowRow` (the union `Output`).

Units are SI and plain ratios; instants `at` are monotonic seconds, `utc` is POSIX seconds. A figure that is missing is
NaN. Values of a reading are rounded to float32 where they are decoded, so that what the journal keeps (float32) is
bit for bit what the core was given, and a replay gives the same outputs.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal, NamedTuple

from idlerwatch.core.conductors import Leg

# --------------------------------------------------------------------------
# What goes in
# --------------------------------------------------------------------------

FigureKey = tuple[int, str]
"""Channel (1, 2, ...; 0 for what belongs to the whole meter, such as frequency) and the quantity's name."""


@dataclass(frozen=True, slots=True)
class Reading:
    """One meter's decoded quantities at one instant.

    `values` holds the quantities that were read this cycle, NaN where one is missing; `reasons` says why for each of
    those: ``implausible``, ``not implemented``, ``not answered``.
    """

    meter: str
    at: float
    values: Mapping[FigureKey, float]
    reasons: Mapping[FigureKey, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class MeterSilent:
    """A meter that was given up in this cycle.

    `reason` is ``no answer``, ``wrong answer``, ``refused``, ``port gone``, ``not asked`` (a silent meter waits its
    turn) or ``booting``.
    """

    meter: str
    at: float
    reason: str


@dataclass(frozen=True, slots=True)
class CycleEnd:
    """All meters have answered or been given up: one sample is due.

    `utc_offset` is UTC minus monotonic, `local_offset` local time minus UTC. [s]
    """

    at: float
    utc_offset: float = 0.0
    local_offset: float = 0.0


@dataclass(frozen=True, slots=True)
class Acknowledge:
    """A person has seen an alarm; `subject` as in the topic."""

    at: float
    tag: str
    subject: str
    by: str


@dataclass(frozen=True, slots=True)
class Shelve:
    """A person puts an alarm aside for a while, at most eight hours; `for_s` 0 takes it back."""

    at: float
    tag: str
    subject: str
    by: str
    for_s: float


@dataclass(frozen=True, slots=True)
class Trouble:
    """Something is wrong (or right again, `text` empty) with a part of the tool itself.

    `part` is ``disk``, ``clock``, ``power``, ``mqtt``, ``influx`` or ``bus NAME``. Feeds the alarms `own-health`,
    `way-out-down` and `bus-down`.
    """

    at: float
    part: str
    text: str


Input = Reading | MeterSilent | CycleEnd | Acknowledge | Shelve | Trouble

# --------------------------------------------------------------------------
# Between the steps
# --------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Sample:
    """All meters' readings brought to one instant.

    `values` holds meter -> figure -> value, interpolated to `at`; a meter given up is absent and its reason stands in
    `missing`. Slow quantities (energies) are the last read.
    """

    at: float
    utc: float
    local_offset: float
    values: Mapping[str, Mapping[FigureKey, float]]
    missing: Mapping[str, str]


Known = Literal["measured", "mapped", "recovered", "computed", "learned", "declared", "not measured"]


class Figure(NamedTuple):
    """A figure a person is told: value, expanded uncertainty (k = 2, NaN where none is stated), how it is known.

    A named tuple, since a sample makes some seventy of them and a dataclass takes three times as long.
    """

    value: float = math.nan
    uncertainty: float = math.nan
    known: Known = "not measured"

    @property
    def is_known(self) -> bool:
        """Whether there is a value."""
        return not math.isnan(self.value)


UNKNOWN = Figure()

# --------------------------------------------------------------------------
# What comes out
# --------------------------------------------------------------------------

ConverterState = Literal["stopped", "starting", "change-over", "running", "run-down", "blind"]
Loading = Literal["", "unloaded", "loaded", "machine starting"]
Lamp = Literal["fine", "look", "stop", "blind"]
AlarmState = Literal["normal", "unacknowledged", "acknowledged", "returned", "shelved", "suppressed", "out-of-service"]
Priority = Literal["high", "medium", "low", "log"]


@dataclass(frozen=True, slots=True)
class Assessment:
    """Everything a person is told about one sample.

    `figures` maps (measurement, subject, quantity) to a `Figure`; measurements are those of the database (``leg``,
    ``line``, ``converter``, ``supply``, ``bank``, ``earthing``, ``machine``, ``meter``), subjects are lower case
    (``l2``, ``l1-l2``, a name, or ``converter``), and quantities are the nomenclature of DEVELOPERS.md.
    """

    at: float
    utc: float
    local_offset: float
    settings: int
    state: ConverterState
    state_since: float
    loading: Loading
    lamp: Lamp
    angles: Literal["measured", "recovered", "not seen"]
    figures: Mapping[tuple[str, str, str], Figure]
    meters: Mapping[str, str]
    """Meter -> ``answering``, ``asleep``, ``booting``, or the reason of its silence."""
    remarks: tuple[str, ...]
    """Plain sentences: angles not seen, a distance that does not fit, what is not measured."""
    alarms: tuple["StandingAlarm", ...] = ()

    def figure(self, measurement: str, subject: str, quantity: str) -> Figure:
        """Return a figure, unknown where there is none."""
        return self.figures.get((measurement, subject, quantity), UNKNOWN)

    def leg(self, leg: Leg, quantity: str) -> Figure:
        """Return a figure of a leg, unknown where there is none."""
        return self.figure("leg", leg.lower(), quantity)


@dataclass(frozen=True, slots=True)
class StandingAlarm:
    """An alarm as it stands (not normal): the retained record."""

    tag: str
    subject: str
    occurrence: str
    state: AlarmState
    priority: Priority
    raised_at: float
    value: float
    uncertainty: float
    usual: float
    setpoint: float
    unit: str
    text: str
    cause: str
    advice: str
    transitions: int = 0
    """Transitions of this occurrence so far: the n of the last event's identity, kept so that it goes on counting
    after a restart."""


@dataclass(frozen=True, slots=True)
class AlarmEvent:
    """One transition of one alarm, as journaled and, where `is_told`, sent to a phone.

    `identity` is ``<occurrence>/<n>``, the same in a replay; `alarm` is the record after the transition.
    """

    identity: str
    at: float
    utc: float
    previous: AlarmState
    alarm: StandingAlarm
    is_told: bool


@dataclass(frozen=True, slots=True)
class WindowRow:
    """One row of one closed window for the database: always floats, NaN left out.

    `fields` holds for each quantity ``quantity``, ``quantity_min``, ``quantity_max``, and ``count`` and ``flagged``
    (0 or 1) once a row.
    """

    window: Literal["10s", "10min", "1h"]
    start_utc: float
    measurement: str
    subject: str
    fields: Mapping[str, float]


Output = Assessment | AlarmEvent | WindowRow
