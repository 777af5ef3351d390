"""The converter as a circuit that can be learned: what its currents must be where its conductors stand.

At each leg the currents balance: what the idler and the capacitors take, and what goes out to the machines, is what
the utility gives, and at a generated leg that is nothing. Everything not known exactly is one vector of *parameters*
(`Parameters`): the idler's sequence admittances, how they bend, the windings' asymmetry, gains of the meters,
capacitances. Everything that may stand otherwise (a bank open, a capacitor lost, the idler mirrored) is a *position*
(`Positions`). `balance` says by how much the equations fail.

Legs are in the order of the declared rotation; potentials are complex rms volts to the *hub*, the conductor to which
the voltmeters stand (N, or a leg where the feed has no neutral); admittances are ratios to the idler's rated current
over its nominal leg voltage, inductive susceptances positive. Leading axes of samples, hypotheses and converters
broadcast.

References
----------
C. L. Fortescue 1918; A. Abur and A. Gomez Exposito, Power System State Estimation, 2004, chapters 2 and 4.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
from numpy.typing import NDArray

Complexes = NDArray[np.complex128]
Floats = NDArray[np.float64]
Ends = tuple[int, int]

N: Final = 3
"""The neutral's number beside the legs 0, 1, 2."""
IDLER: Final = (
    *("g0", "b0", "g1", "b1", "g2", "b2"),
    *("saturation_1", "saturation_2", "friction", "braking"),
    *("asymmetry_1", "asymmetry_2"),
)
"""The idler's parameters, in order; the third asymmetry is what makes their sum zero."""


@dataclass(frozen=True, slots=True)
class CurrentChannel:
    """An ammeter in a leg with its voltmeter: the current's phasor is known relative to the voltage `across`."""

    leg: int
    across: Ends


@dataclass(frozen=True, slots=True)
class BankAmmeter:
    """An ammeter in the conductor `conductor` (0 to 3) of a bank: a magnitude."""

    bank: int
    conductor: int


@dataclass(frozen=True, slots=True)
class Can:
    """A capacitor: between which conductors, its marked susceptance over the base admittance, its bank or -1."""

    ends: Ends
    susceptance: float
    bank: int


@dataclass(frozen=True)
class Wiring:
    """What is where: the converter's base figures, its capacitors, and what is measured.

    Attributes
    ----------
    rated_current, nominal_voltage
        Of the idler a phase [A]; of a leg to the centre [V].
    tied
        Whether the idler's star point is on N.
    hub
        Number of the conductor to which the `rays` are measured.
    directions : (3,)
        Nominal angles of the legs from the hub, at which the search begins. [rad]
    free
        Legs whose angle is unknown; the others stand at their direction.
    cans, banks
        The capacitors; how many banks there are.
    generated, supply
        Channels in legs that nothing feeds (the balance must vanish), and in the supply of fed legs.
    outgoing
        For each fed leg with a supply channel, the channel of its current to the machines.
    ammeters, lines
        Ammeters in banks; pairs of legs measured besides the rays.
    """

    rated_current: float
    nominal_voltage: float
    tied: bool
    hub: int
    directions: tuple[float, float, float]
    free: tuple[int, ...]
    cans: tuple[Can, ...]
    banks: int
    generated: tuple[CurrentChannel, ...]
    supply: tuple[CurrentChannel, ...] = ()
    outgoing: tuple[CurrentChannel, ...] = ()
    ammeters: tuple[BankAmmeter, ...] = ()
    lines: tuple[Ends, ...] = ()

    @property
    def base(self) -> float:
        """Base admittance. [S]"""
        return self.rated_current / self.nominal_voltage

    @cached_property
    def rays(self) -> tuple[int, ...]:
        """Legs measured to the hub."""
        return tuple(leg for leg in range(3) if leg != self.hub)

    @cached_property
    def channels(self) -> tuple[CurrentChannel, ...]:
        """All current channels, in the order of their gains."""
        return (*self.generated, *self.outgoing, *self.supply)

    @cached_property
    def names(self) -> tuple[str, ...]:
        """Names of all parameters, in order."""
        channels = [f"channel_{index}_{kind}" for index in range(len(self.channels)) for kind in ("gain", "phase")]
        return (
            *IDLER,
            *(f"ray_{leg}" for leg in self.rays),
            *channels,
            *(f"can_{index}" for index in range(len(self.cans))),
            *(f"ammeter_{index}" for index in range(len(self.ammeters))),
            *(f"line_{index}" for index in range(len(self.lines))),
        )

    @cached_property
    def at(self) -> dict[str, int]:
        """Place of each parameter."""
        return {name: index for index, name in enumerate(self.names)}

    @cached_property
    def patterns(self) -> Floats:
        """Nodal pattern of each can over L1 L2 L3 N times its marked susceptance: (cans, 4, 4)."""
        patterns = np.zeros((len(self.cans), 4, 4))
        for index, can in enumerate(self.cans):
            ends = np.zeros(4)
            ends[can.ends[0]], ends[can.ends[1]] = 1.0, -1.0
            patterns[index] = can.susceptance * np.outer(ends, ends)
        return patterns

    @cached_property
    def rows(self) -> int:
        """How many real equations there are."""
        return 2 * (len(self.generated) + len(self.supply)) + len(self.ammeters) + len(self.lines)


def between(pairs: Sequence[Ends]) -> Floats:
    """Return the incidence of pairs over L1 L2 L3 N: (len(pairs), 4)."""
    found = np.zeros((len(pairs), 4))
    for row, (first, second) in enumerate(pairs):
        found[row, first] += 1.0
        found[row, second] -= 1.0
    return found


@dataclass(frozen=True, slots=True)
class Positions:
    """How the switches, capacitors and the idler's sense may stand: one row a hypothesis.

    Attributes
    ----------
    matrices : (h, 4, 4)
        What the capacitors add over L1 L2 L3 N with marked values. [base]
    shares : (h, cans)
        How much of each can's own deviation counts: 1 where it is wholly in.
    bank_matrices : (h, banks, 4, 4)
        The same for each bank alone, which is what its ammeter sees.
    loose : (h, 4, 4)
        What is in by an unknown share, one standard deviation of it; zero for all but "part closed". [base]
    mirrored : (h,)
        Whether the idler runs against the declared rotation.
    signs : (h, channels)
        -1 where the channel's reactive power is taken with the other sign.
    """

    matrices: Floats
    shares: Floats
    bank_matrices: Floats
    loose: Floats
    mirrored: NDArray[np.bool_]
    signs: Floats


@dataclass(frozen=True, slots=True)
class Sample:
    """What was measured, samples along the leading axes.

    Attributes
    ----------
    rays : (..., 3)
        Magnitudes of the legs' potentials to the hub; 0 at a leg that is the hub, NaN where missing. [V]
    currents : (..., channels)
        (P - jQ) / U of each channel: its current's phasor relative to its voltage. [A]
    spreads : (..., channels, 2)
        Standard deviation added to the active and reactive part of each; huge where that part is unknown. [A]
    ammeters : (..., ammeters)
        Magnitudes; NaN where missing. [A]
    lines : (..., lines)
        Magnitudes; NaN where missing. [V]
    """

    rays: Floats
    currents: Complexes
    spreads: Floats
    ammeters: Floats
    lines: Floats


def nominal_positions(wiring: Wiring) -> Positions:
    """Return the one position in which every can is in and the idler runs forwards."""
    matrices = wiring.patterns.sum(axis=0)[None]
    of_bank = np.array([can.bank for can in wiring.cans], dtype=int)
    banks = np.stack(
        [wiring.patterns[of_bank == bank].sum(axis=0) for bank in range(wiring.banks)] or [np.zeros((4, 4))]
    )
    return Positions(
        matrices=matrices,
        shares=np.ones((1, len(wiring.cans))),
        bank_matrices=banks[None],
        loose=np.zeros((1, 4, 4)),
        mirrored=np.zeros(1, dtype=bool),
        signs=np.ones((1, len(wiring.channels))),
    )


def rated_angle(leg: int) -> float:
    """Return the nominal angle of a leg of the positive sequence. [rad]"""
    return -2.0 * math.pi * leg / 3.0
