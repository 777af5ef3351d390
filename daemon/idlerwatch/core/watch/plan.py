"""What the settings say, compiled once into what each sample needs.

The steps of the chain run once a cycle on a small board, so `compile` works out once what only depends on the
settings: which channel measures what, its standard uncertainty, nominal voltages, from which currents on the idler
counts as running.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final, Literal

from idlerwatch.core.conductors import LEGS, Conductor, Feed, Leg, Pair
from idlerwatch.core.converter.circuit import Complexes, Floats
from idlerwatch.core.settings.model import Bank, Machine, Meter
from idlerwatch.core.values import FigureKey

NOISE: Final = 0.0002
"""Repeatability of a meter, of reading (common practice, no source)."""

Place = Literal["supply", "leg", "earth", "contacts", "bank", "machine"]


def gain_uncertainty(class_limit: float) -> float:
    """Return the relative standard uncertainty of a meter of a class: a rectangular gain error, and noise. [1]

    Examples
    --------
    >>> round(gain_uncertainty(0.005), 6)
    0.002894

    References
    ----------
    JCGM 100 (GUM), 4.3.7: limits +-a give a standard uncertainty a / sqrt(3).
    """
    return math.hypot(class_limit / math.sqrt(3.0), NOISE)


@dataclass(frozen=True, slots=True)
class ChannelPlan:
    """One channel: where it stands, what it measures, and the relative standard uncertainties of what it says."""

    meter: str
    channel: int
    place: Place
    name: str
    across: Pair | None
    through: Conductor | None
    ratio: float
    reactive: Literal["signed", "unsigned", "none"]
    voltage_gain: float
    current_gain: float
    power_gain: float
    is_distance: bool

    @property
    def pair(self) -> str:
        """The pair across, empty where there is none."""
        return "" if self.across is None else str(self.across)

    @property
    def gives_leg_power(self) -> bool:
        """Whether its voltage is that of the leg its current goes through, to N."""
        return self.across is not None and self.across.second == "N" and self.across.first == self.through


@dataclass(frozen=True, slots=True)
class Height:
    """How far a generated leg stands off the fed pair, from one voltage: 0 not turning, 1 nominal.

    `dead` is the ratio the pair reads while the leg carries no voltage of its own: a dead L3 of a line feed floats to
    half the line voltage, never to 0.
    """

    pair: str
    nominal: float
    dead: float


@dataclass(frozen=True, slots=True)
class CapacitorPlan:
    """A capacitor of a bank: the pair it stands across and its capacitance. [F]"""

    across: Pair
    capacitance: float


@dataclass(frozen=True, slots=True)
class TwoWattmeters:
    """Two channels across pairs with a common leg, each through the other leg of its pair."""

    first: ChannelPlan
    second: ChannelPlan


@dataclass(frozen=True, slots=True)
class Levels:
    """From which currents on the supply flows, starts, surges, and a machine is on. [A]

    `full` is rated power over voltage; `start` is a start's only at rest, `surge` in any state.
    """

    full: float
    flow: float
    start: float
    surge: float
    machine: float
    machine_surge: float
    machine_supply: float


@dataclass(frozen=True, slots=True, eq=False)
class Combinations:
    """Combinations of the described three-phase machines: y2 (c,) [S] and rated current (c,) [A] of each."""

    admittances: Complexes
    currents: Floats


@dataclass(frozen=True, slots=True)
class Plan:
    """The settings as the chain needs them."""

    number: int
    cycle_s: float
    feed: Feed
    fed_pair: str
    generated: tuple[Leg, ...]
    nominal: Mapping[str, float]
    points: Mapping[Conductor, complex]
    frequency: float
    breaker: float
    channels: tuple[ChannelPlan, ...]
    distances: tuple[ChannelPlan, ...]
    leg_channels: tuple[ChannelPlan, ...]
    supply_channels: tuple[ChannelPlan, ...]
    neutral_channels: tuple[ChannelPlan, ...]
    bank_channels: Mapping[str, tuple[ChannelPlan, ...]]
    machine_channels: Mapping[str, tuple[ChannelPlan, ...]]
    two_wattmeters: tuple[TwoWattmeters, ...]
    contacts: Mapping[str, tuple[str, FigureKey]]
    bank_capacitors: Mapping[str, tuple[CapacitorPlan, ...]]
    meters: Mapping[str, Meter]
    slow: Mapping[str, frozenset[FigureKey]]
    thresholds: Mapping[str, tuple[str, float]]
    on_generated: frozenset[str]
    heights: tuple[Height, ...]
    median: tuple[str, str, str] | None
    levels: Levels
    boot_s: float
    has_neutral_loads: bool
    banks: tuple[Bank, ...]
    machines: tuple[Machine, ...]
    capacitors: tuple[str, ...]
    explaining: Combinations | None
    remarks: tuple[str, ...]

    @property
    def rotation(self) -> tuple[Leg, ...]:
        """The legs in the order in which they peak."""
        return ("L1", "L2", "L3") if self.feed.rotation == "L1-L2-L3" else ("L1", "L3", "L2")

    @property
    def has_central_neutral(self) -> bool:
        """Whether N is nominally the centre of the triangle, so that zero sequence means anything."""
        return self.feed.neutral == "supply"

    @property
    def neutral_earth_pair(self) -> str:
        """The pair across which neutral to earth stands: the fed leg that is the utility's neutral, else N."""
        return f"{self.feed.neutral}-PE" if self.feed.neutral in LEGS else "N-PE"

    @property
    def watches_generated(self) -> bool:
        """Whether any meter's voltage tells of a generated leg."""
        return bool(self.heights) or self.median is not None
