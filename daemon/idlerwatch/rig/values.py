"""What the plant is, what people order, what is broken, how it stands, and what can be measured: all frozen.

The leading axis `n` of every array runs over converters of one wiring. Conductors are in the order L1, L2, L3, N, PE;
potentials are complex rms volts to the earth at the bond between N and PE, at the supply's angle.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from enum import IntEnum
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from idlerwatch.core.conductors import CONDUCTORS, Conductor, Feed, Pair
from idlerwatch.core.converter.network import Complexes, Floats
from idlerwatch.rig.machine import Induction

Booleans = NDArray[np.bool_]
Integers = NDArray[np.int64]

OPEN: Final = 1.0e9
"""What an open pole or a parted wire measures. [ohm]"""


class Phase(IntEnum):
    """Where the converter's own control stands, in the order of the settings' states."""

    STOPPED = 0
    STARTING = 1
    CHANGE_OVER = 2
    RUNNING = 3
    RUN_DOWN = 4


PHASE_NAMES: Final = ("stopped", "starting", "change-over", "running", "run-down")


@dataclass(frozen=True, slots=True)
class Source:
    """The utility: electromotive force and impedance of each leg (n, 3), zero force for a leg that is not fed.

    `base_load` stands for lights and sockets ahead of the supply meter; `leakage` from the neutral to earth; `offset`
    is the voltage other consumers leave on the neutral.
    """

    emf: Complexes
    impedance: Complexes
    neutral_resistance: Floats
    offset: Complexes
    base_load: Floats
    leakage: Floats


@dataclass(frozen=True, slots=True)
class Starting:
    """How the idler is brought up: what joins what while it starts, and the starter's own capacitor."""

    method: Literal["two-legs", "capacitor", "pony-motor"]
    joins: tuple[tuple[int, int], ...]
    star_tied: bool
    aid_pair: tuple[int, int]
    aid_farads: float
    until_speed: float
    change_over_s: float
    pony_watts: float


@dataclass(frozen=True, slots=True)
class Capacitors:
    """Capacitors between the terminals L1, L2, L3, N (0 to 3); `bank` -1 for one that is always connected."""

    names: tuple[str, ...]
    pairs: tuple[tuple[int, int], ...]
    bank: tuple[int, ...]
    farads: Floats


@dataclass(frozen=True, slots=True)
class Banks:
    """Contactors: `wanted` (b, 5) says in which phases the control calls for each, `coil` on which pair it hangs."""

    names: tuple[str, ...]
    wanted: Booleans
    free: tuple[bool, ...]
    closes_after: Floats
    coil: tuple[tuple[int, int] | None, ...]
    coil_voltage: Floats
    pull_in: Floats
    drop_out: Floats
    operating_time: float


@dataclass(frozen=True, slots=True)
class Motors:
    """Three-phase motors; constants (n, m), `load` the share of rated power they take up at full speed."""

    names: tuple[str, ...]
    starter: tuple[str, ...]
    constants: Induction


@dataclass(frozen=True, slots=True)
class Loads:
    """What is no three-phase motor: on one pair, or a drive (`pair` None) that takes constant power as a rectifier."""

    names: tuple[str, ...]
    pairs: tuple[tuple[int, int] | None, ...]
    watts: Floats


@dataclass(frozen=True, slots=True)
class Plant:
    """Converters of one wiring with their machines."""

    feed: Feed
    frequency: float
    source: Source
    starting: Starting
    star_on_neutral: bool
    idler: Induction
    capacitors: Capacitors
    banks: Banks
    motors: Motors
    loads: Loads

    @property
    def count(self) -> int:
        """How many converters."""
        return len(self.idler.friction)

    @property
    def fed(self) -> tuple[int, ...]:
        """Indices of the fed legs."""
        return tuple(CONDUCTORS.index(leg) for leg in self.feed.supply_legs)

    @property
    def sense(self) -> float:
        """+1 where the idler should turn L1-L2-L3, else -1."""
        return 1.0 if self.feed.rotation == "L1-L2-L3" else -1.0


@dataclass(frozen=True, slots=True)
class Orders:
    """What people do: the converter's switch, its machines and how hard they work, hand-switched banks, a rope pulled.

    Shapes (n,), (n, motors), (n, loads), (n, banks).
    """

    run: Booleans
    backwards: Booleans
    motor_on: Booleans
    motor_load: Floats
    load_on: Booleans
    bank_by_hand: Booleans


@dataclass(frozen=True, slots=True)
class Faults:
    """What is broken. Resistances are 0 when whole, `OPEN` when parted; ratios are 1 when whole.

    `supply_ratio` (n,), `supply_resistance` (n,), `neutral_resistance` (n,), `leg_resistance` (n, 3) at the converter's
    output before the leg meter, `lead_resistance` (n, 3) in the idler's leads, `motor_resistance` (n, m, 3) at a
    machine, `pole_resistance` (n, b, 4) in a bank's contactor, `welded` (n, b), `coil_open` (n, b), `chatter` (n, b) in
    hertz, `capacitor_ratio` (n, c).
    """

    supply_ratio: Floats
    supply_resistance: Floats
    neutral_resistance: Floats
    leg_resistance: Floats
    lead_resistance: Floats
    motor_resistance: Floats
    pole_resistance: Floats
    welded: Booleans
    coil_open: Booleans
    chatter: Floats
    capacitor_ratio: Floats


@dataclass(frozen=True, slots=True)
class State:
    """How the plant stands at an instant; `nodes` (n, 11) are the last potentials, `emf` the idler's rotor flux."""

    time: float
    phase: Integers
    phase_since: Floats
    switch: Booleans
    held: Booleans
    low_for: Floats
    speed: Floats
    emf: Complexes
    flux: Floats
    motor_speed: Floats
    motor_flux: Floats
    motor_on_for: Floats
    bank_closed: Booleans
    bank_moving_for: Floats
    nodes: Complexes


@dataclass(frozen=True, slots=True)
class View:
    """All that could be measured at one instant.

    `potentials` and `currents` map a place (``supply``, ``leg``, ``earth``, ``bank:NAME``, ``machine:NAME``) to phasors
    (n, 5) and (n, 4). Currents are positive into the converter at the supply, else outwards: to the machines, into the
    bank. `generated_frequency` is that of the idler's voltage. [ratio to the supply's]
    """

    time: float
    supply_frequency: float
    generated_frequency: Floats
    potentials: Mapping[str, Complexes]
    currents: Mapping[str, Complexes]
    phase: Integers
    speed: Floats
    motor_speed: Floats
    bank_closed: Booleans
    source_power: Complexes

    def voltage(self, place: str, pair: Pair) -> Complexes:
        """Return the phasors across a pair at a place: (n,). [V]"""
        points = self.potentials[place]
        return np.asarray(points[:, CONDUCTORS.index(pair.first)] - points[:, CONDUCTORS.index(pair.second)])

    def current(self, place: str, conductor: Conductor) -> Complexes:
        """Return the phasors of the current in a conductor at a place: (n,). [A]"""
        return np.asarray(self.currents[place][:, CONDUCTORS.index(conductor)])
