"""The shapes of the settings, one class a table of the TOML file; the attribute is the key.

Only what a single key may be is said here; what the keys must be to each other stands in `refusals`, and what may be
done better in `advice`. All are frozen, unknown keys are faults. Ratios are ratios, SI, other units in the key.
"""

from collections.abc import Mapping
from typing import Annotated, Final, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, PlainSerializer

from idlerwatch.core.conductors import Feed, Leg, Pair, read_pair
from idlerwatch.core.registers import RegisterMap
from idlerwatch.core.values import ConverterState, Priority

NAME: Final = r"^[a-z0-9][a-z0-9-]*$|^[A-Z][A-Za-z0-9]*$"
TOPIC_WORD: Final = r"^[a-z0-9-]+$"
PLACE: Final = r"^(supply|leg|earth|contacts|(bank|machine):[A-Za-z0-9-]+)$"
MEANING: Final = r"^(bank [A-Za-z0-9-]+ closed|coil [A-Za-z0-9-]+ energised|sequence right|breaker tripped)$"
ADDRESS: Final = r"^https?://"
HOURS: Final = r"^\d\d:\d\d-\d\d:\d\d$"
PATTERNS: Final[Mapping[str, str]] = {
    NAME: "must be lower-case letters, digits and hyphens, or begin with a capital, like C1",
    TOPIC_WORD: "must be lower-case letters, digits and hyphens",
    PLACE: 'must be "supply", "leg", "earth", "contacts", "bank:NAME" or "machine:NAME"',
    MEANING: 'must be "bank NAME closed", "coil NAME energised", "sequence right" or "breaker tripped"',
    ADDRESS: "must begin with http:// or https://",
    HOURS: "must be two times of day, like 07:30-18:00",
}
"""Each pattern in words."""


def _pair(value: object) -> object:
    return read_pair(value) if isinstance(value, str) else value


PairField = Annotated[Pair, BeforeValidator(_pair), PlainSerializer(str)]
Name = Annotated[str, Field(pattern=NAME, max_length=40)]
Positive = Annotated[float, Field(gt=0)]
NotNegative = Annotated[float, Field(ge=0)]
PriorityWhen = Literal["S", "A", "C", "U", "M", "L", "D", "B", "W", "machines", "generator"]


class Table(BaseModel):
    """What all tables have in common: frozen, no unknown keys, only finite numbers."""

    model_config = ConfigDict(frozen=True, extra="forbid", arbitrary_types_allowed=True, allow_inf_nan=False)


class Site(Table):
    """The table ``[site]``."""

    name: Annotated[str, Field(pattern=TOPIC_WORD)]
    converter: Annotated[str, Field(pattern=TOPIC_WORD)]
    cycle_s: NotNegative = 1.0


class Supply(Table):
    """The table ``[supply]``."""

    feed: PairField
    voltage: Positive
    frequency: Positive = 50.0
    source: Literal["network", "isolating-transformer", "autotransformer", "generator"] = "network"
    neutral: Literal["supply", "centre-tap", "none", "L1", "L2", "L3"] = "supply"
    earthing: Literal["TN-S", "TN-C-S", "TT", "IT"] = "TN-S"
    breaker_amperes: Positive | None = None
    rotation: Literal["L1-L2-L3", "L1-L3-L2"] = "L1-L2-L3"
    labels: Mapping[str, str] = Field(default_factory=dict)

    @property
    def as_feed(self) -> Feed:
        """The feed as geometry."""
        return Feed(self.feed, self.voltage, self.neutral, self.rotation)


class Idler(Table):
    """The table ``[idler]``."""

    name: Name = "idler"
    rated_kw: Positive
    rated_voltage: Positive
    star_point: Literal["N", "floating"]
    rated_current: Positive | None = None
    rated_speed_rpm: Positive | None = None
    rated_power_factor: Annotated[float, Field(gt=0, le=1)] | None = None
    magnetising_current: Positive | None = None


class Start(Table):
    """The table ``[start]``."""

    method: Literal["two-legs", "capacitor", "pony-motor"]
    between: PairField | None = None
    usual_s: Positive | None = None


class Capacitor(Table):
    """``[[capacitor]]``; `microfarads` is the only exception to SI."""

    name: Name
    between: PairField
    microfarads: Positive
    bank: Name | None = None
    rated_voltage: Positive | None = None
    duty: Literal["run", "start"] = "run"


class Bank(Table):
    """The table ``[bank]``."""

    name: Name
    closed_when: tuple[ConverterState, ...] | Literal["free"]
    closes_after_s: NotNegative = 0.0
    within_s: Positive = 2.0
    coil: PairField | None = None
    coil_voltage: Positive | None = None


class Bus(Table):
    """The table ``[bus]``."""

    name: Name
    port: Annotated[str, Field(min_length=1)]
    baudrate: Annotated[int, Field(ge=300, le=1_000_000)] = 9600
    parity: Literal["none", "even", "odd"] = "none"
    stopbits: Literal[1, 2] = 1


class Channel(Table):
    """One of a meter's ``channels``: what it stands across and goes through."""

    across: PairField | None = None
    through: Leg | Literal["N"] | None = None


class Accuracy(Table):
    """Class limits of a meter, of reading."""

    voltage: Positive = 0.005
    current: Positive = 0.005
    power: Positive = 0.01


class Meter(Table):
    """``[[meter]]``; `at` is ``supply``, ``leg``, ``earth``, ``bank:NAME`` or ``machine:NAME``."""

    name: Name
    bus: Name
    address: Annotated[int, Field(ge=1, le=247)]
    map: str
    at: Annotated[str, Field(pattern=PLACE)]
    powered_by: PairField | Literal["own"] | None = None
    usable_from_volts: NotNegative = 0.0
    boot_s: NotNegative = 0.0
    accuracy: Accuracy = Accuracy()
    ratio: Positive = 1.0
    channels: tuple[Channel, ...] = ()
    input_megohm: Positive | None = None

    @property
    def power_pair(self) -> Pair | None:
        """The pair the meter lives on; None where its supply is its own."""
        if self.powered_by == "own":
            return None
        if isinstance(self.powered_by, Pair):
            return self.powered_by
        return next((channel.across for channel in self.channels if channel.across), None)


class Contact(Table):
    """``[[contact]]``: a Modbus discrete input with a meaning."""

    meter: Name
    input: Annotated[int, Field(ge=1)]
    means: Annotated[
        str,
        Field(pattern=MEANING),
    ]


class Machine(Table):
    """``[[machine]]``; `connected` is ``three-phase`` or a pair."""

    name: Name
    rated_kw: Positive
    rated_current: Positive | None = None
    connected: PairField | Literal["three-phase"] = "three-phase"
    starter: Literal["direct", "star-delta", "soft", "drive"] = "direct"


class Mqtt(Table):
    """The table ``[mqtt]``."""

    host: str = "localhost"
    port: Annotated[int, Field(ge=1, le=65535)] = 1883
    protocol: Literal[3, 5] = 5
    username: str | None = None
    password_file: str | None = None
    ca_file: str | None = None
    assessment_s: NotNegative = 1.0
    commands: Literal["none", "acknowledge", "acknowledge+shelve"] = "none"


class Influx(Table):
    """The table ``[influx]``."""

    url: Annotated[str, Field(pattern=ADDRESS)]
    org: str = ""
    bucket: str
    token_file: str | None = None


class Journal(Table):
    """The table ``[journal]``."""

    path: str
    commit_s: Positive = 30.0
    keep_cycles_days: Positive = 30.0
    keep_windows_days: Positive = 800.0


class People(Table):
    """The table ``[people]``."""

    working_hours: Annotated[str, Field(pattern=HOURS)] | None = None


class Alarm(Table):
    """One alarm of the list (``config/alarms.toml``), overridden by ``[alarms.<tag>]``, ``[alarms.<tag>.<subject>]``.

    `watches` names the condition in the core that computes the value; `setpoint` and `deadband` are in `unit`
    (voltages as ratios of nominal). `suppressed_in` are letters of the state table: S stopped, A starting,
    C change-over, U running unloaded, M machine starting, L loaded, D run-down, B blind, W at work. `priority_when`
    gives another priority in such a state, with `machines` that ran in the last 10 s, or on a `generator`; the highest
    that applies counts.
    """

    tag: Name
    watches: str
    setpoint: float | None = None
    deadband: NotNegative = 0.0
    clears_at: float | None = None
    on_delay_s: NotNegative = 0.0
    off_delay_s: NotNegative = 0.0
    priority: Priority
    priority_when: Mapping[PriorityWhen, Priority] = Field(default_factory=dict)
    suppressed_in: tuple[Literal["S", "A", "C", "U", "M", "L", "D", "B", "W"], ...] = ()
    explains: tuple[str, ...] = ()
    needs_acknowledgement: bool = False
    chronic: bool = False
    enabled: bool = True
    unit: str = "1"
    feeds: Literal["both", "L1-N", "line"] = "both"
    cause: str = ""
    advice: str = ""


class Settings(Table):
    """Everything that was read, checked and resolved; `number` counts the settings in force.

    `alarms` maps (tag, "") to the alarm of the list after ``[alarms.<tag>]``, and (tag, subject) to those with a
    setting of their own for one subject. `maps` holds each register map that a meter names.
    """

    site: Site
    supply: Supply
    idler: tuple[Idler, ...] = Field(min_length=1)
    start: Start | None = None
    capacitor: tuple[Capacitor, ...] = ()
    bank: tuple[Bank, ...] = ()
    bus: tuple[Bus, ...] = Field(min_length=1)
    meter: tuple[Meter, ...] = Field(min_length=1)
    contact: tuple[Contact, ...] = ()
    machine: tuple[Machine, ...] = ()
    mqtt: Mqtt | None = None
    influx: Influx | None = None
    journal: Journal | None = None
    people: People = People()
    alarms: Mapping[tuple[str, str], Alarm] = Field(default_factory=dict)
    maps: Mapping[str, RegisterMap] = Field(default_factory=dict)
    number: int = 1
