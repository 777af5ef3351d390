"""The usual equivalent circuit of an induction machine, a phase, for both sequences.

    stator R + jX ---+------+--- rotor R/s + jX
                     |      |
                    jXm   core R

Positive sequence sees the slip s, negative sequence 2 - s (A. E. Fitzgerald et al., *Electric Machinery*, chapter 6).
The core's loss stands beside the magnetising reactance, where the flux is. Some books draw the shunt branch at the
terminals instead: that is this circuit with an infinite magnetising reactance, and the branch an admittance of its own
to be added.

Torques are in synchronous watts: torque times synchronous speed, which is the power sent over the airgap. What turns
the machine is that of the positive sequence less that of the negative one; zero sequence gives none.

Where the iron saturates the magnetising current has a second part, which grows with a high odd power of the flux (the
two-term characteristic i = a f + b f^n usual for transformers: E. J. Dick and W. Watson, *Transformer models for
transient studies based on field measurements*, IEEE Trans. PAS 1981; the exponent 9 is chosen here: no-load currents
that climb by 20 to 50 % at +10 % of voltage, which is common practice, are then a `saturation` of 0.10 to 0.72).
"""

import math
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from idlerwatch.core.converter.network import Complexes, Floats

_ROUNDS: Final = 24
"""How often a slip is corrected for the negative sequence; away from stalling each round is worth two digits."""
_SETTLED: Final = 1e-9


@dataclass(frozen=True, slots=True)
class EquivalentCircuit:
    """Constants a star phase, each of any common shape (...). [ohm]"""

    stator_resistance: Floats
    stator_reactance: Floats
    magnetising_reactance: Floats
    rotor_resistance: Floats
    rotor_reactance: Floats
    core_resistance: Floats | float = math.inf

    @property
    def stator_impedance(self) -> Complexes:
        """Between the terminal and the airgap: (...). [ohm]"""
        return np.asarray(self.stator_resistance + 1j * self.stator_reactance, dtype=np.complex128)

    @property
    def shunt_admittance(self) -> Complexes:
        """What carries flux and core loss, across the airgap: (...). [S]"""
        return np.asarray(1.0 / np.asarray(self.core_resistance) - 1j * (1.0 / np.asarray(self.magnetising_reactance)))


@dataclass(frozen=True, slots=True)
class Iron:
    """How the iron saturates, each of any common shape (...).

    `saturation` is the part of the magnetising current that grows with the ninth power of the airgap voltage, over the
    part in proportion to it, at the `reference_voltage` where the circuit's magnetising reactance holds. [1] [V]
    """

    saturation: Floats
    reference_voltage: Floats


@np.errstate(invalid="ignore")
def phase_admittance(circuit: EquivalentCircuit, slip: Floats) -> Complexes:
    """Return the admittance a phase at a slip, which may be zero: (...) and (...) -> (...). [S]

    Examples
    --------
    >>> idler = EquivalentCircuit(*(np.array(x) for x in (0.294, 0.503, 13.25, 0.144, 0.209)))
    >>> round(float(abs(phase_admittance(idler, np.array(0.02))) * 220.0 / np.sqrt(3.0)), 2)
    18.78
    """
    behind = _rotor_admittance(circuit, slip) + circuit.shunt_admittance
    return np.asarray(behind / (1.0 + circuit.stator_impedance * behind), dtype=np.complex128)


def sequence_admittances(circuit: EquivalentCircuit, slip: Floats, zero_admittance: Complexes | float) -> Complexes:
    """Return Y0, Y1(s), Y2(2 - s): (...) -> (..., 3). [S]"""
    positive = phase_admittance(circuit, slip)
    negative = phase_admittance(circuit, 2.0 - slip)
    return np.stack(np.broadcast_arrays(np.asarray(zero_admittance, dtype=np.complex128), positive, negative), axis=-1)


@np.errstate(invalid="ignore")
def airgap_voltage(circuit: EquivalentCircuit, slip: Floats, voltage: Complexes | Floats) -> Floats:
    """Return the voltage across the airgap of one sequence, whose voltage and slip are given: (...). [V]"""
    behind = _rotor_admittance(circuit, slip) + circuit.shunt_admittance
    return np.asarray(np.abs(voltage / (1.0 + circuit.stator_impedance * behind)), dtype=np.float64)


def airgap_power(circuit: EquivalentCircuit, slip: Floats, voltage: Complexes | Floats) -> Floats:
    """Return the power three phases send over the airgap in one sequence.

    Parameters
    ----------
    circuit : (...)
    slip : (...)
        Of that sequence: s of the positive, 2 - s of the negative one. May be zero. [1]
    voltage : (...)
        A phase, of that sequence. [V]

    Returns
    -------
    (...)
        [W]

    Examples
    --------
    >>> idler = EquivalentCircuit(*(np.array(x) for x in (0.294, 0.503, 13.25, 0.144, 0.209)))
    >>> round(float(airgap_power(idler, np.array(0.02), 220.0 / np.sqrt(3.0))))
    5739

    References
    ----------
    Fitzgerald, example 6.2: 5740 W.
    """
    across = airgap_voltage(circuit, slip, voltage)
    return np.asarray(3.0 * across**2 * _rotor_admittance(circuit, slip).real, dtype=np.float64)


def airgap_torque(
    circuit: EquivalentCircuit, slip: Floats, positive: Complexes | Floats, negative: Complexes | Floats
) -> Floats:
    """Return the torque of both sequences' voltages V1 and V2 at a slip: (...). [synchronous W]"""
    return airgap_power(circuit, slip, positive) - airgap_power(circuit, 2.0 - slip, negative)


def slip_at_torque(
    circuit: EquivalentCircuit, torque: Floats, positive: Complexes | Floats, negative: Complexes | Floats
) -> Floats:
    """Return the slip at which the airgap gives a torque, on the branch where the machine runs.

    The positive sequence's torque is a quadratic in s / Rr, so the slip for it is exact. The negative sequence's
    barely depends on the slip, and rises with it: corrected for it again and again from s = 0, the slip climbs to the
    lowest solution and never beyond.

    Parameters
    ----------
    circuit : (...)
    torque : (...)
        Of shaft and friction together; below nought the machine is driven. [synchronous W]
    positive, negative : (...)
        V1 and V2, a phase. [V]

    Returns
    -------
    (...)
        NaN where the torque is more than the machine has, so that it stalls. [1]

    Examples
    --------
    >>> idler = EquivalentCircuit(*(np.array(x) for x in (0.294, 0.503, 13.25, 0.144, 0.209)))
    >>> [round(float(slip_at_torque(idler, np.array(w), 127.017, 0.0)), 4) for w in (5739.0, 40e3)]
    [0.02, nan]

    References
    ----------
    Thevenin's theorem, as in Fitzgerald 6.5.
    """
    slip = np.zeros_like(np.asarray(torque) * np.abs(positive) * np.abs(negative))
    for _ in range(_ROUNDS):
        slip = corrected_slip(circuit, torque, slip, positive, negative)
    settled = np.abs(corrected_slip(circuit, torque, slip, positive, negative) - slip) < _SETTLED
    return np.where(settled, slip, np.nan)


def corrected_slip(
    circuit: EquivalentCircuit, torque: Floats, slip: Floats, positive: Complexes | Floats, negative: Complexes | Floats
) -> Floats:
    """Return the slip at which the torque is met if the negative sequence brakes as it does at `slip`: (...). [1]

    One round of `slip_at_torque`; NaN where the machine has not got that torque.
    """
    wanted = torque + airgap_power(circuit, 2.0 - slip, negative)
    return np.asarray(circuit.rotor_resistance * slip_over_resistance(circuit, wanted, positive), dtype=np.float64)


@np.errstate(invalid="ignore", divide="ignore")
def slip_over_resistance(circuit: EquivalentCircuit, power: Floats, voltage: Complexes | Floats) -> Floats:
    """Return s / Rr at which one sequence sends a power over the airgap, whatever Rr is.

    With P = 3 V'^2 G / ((R' + G)^2 + X^2), where V' and Z' are Thevenin's source at the airgap and G = Rr / s; of the
    two solutions that of the larger G.

    Parameters
    ----------
    circuit : (...)
        Its rotor resistance is not looked at.
    power : (...)
        Over the airgap. [W]
    voltage : (...)
        A phase. [V]

    Returns
    -------
    (...)
        NaN where there is none. [S]

    References
    ----------
    Fitzgerald 6.5, the torque by Thevenin's theorem; solved for the slip (derived).
    """
    share = 1.0 / (1.0 + circuit.stator_impedance * circuit.shunt_admittance)
    source = circuit.stator_impedance * share + 1j * circuit.rotor_reactance
    spare = 3.0 * np.abs(voltage * share) ** 2 - 2.0 * source.real * power
    root = np.sqrt(spare**2 - (2.0 * power * np.abs(source)) ** 2)
    return np.asarray(2.0 * power / (spare + root), dtype=np.float64)


def saturated(circuit: EquivalentCircuit, iron: Iron, across: Floats) -> EquivalentCircuit:
    """Return the circuit with the magnetising reactance it has at an airgap voltage: (...).

    Xm = Xm0 (1 + k) / (1 + k e^8), e the airgap voltage over the reference voltage and k the saturation. The positive
    sequence's airgap voltage stands for the flux.

    Examples
    --------
    >>> circuit = EquivalentCircuit(*(np.array(x) for x in (0.7, 1.4, 36.0, 0.5, 1.3)))
    >>> iron = Iron(np.array(0.25), np.array(220.0))
    >>> [round(float(saturated(circuit, iron, np.array(220.0 * e)).magnetising_reactance), 1) for e in (0.9, 1.0, 1.1)]
    [40.6, 36.0, 29.3]
    """
    steep = iron.saturation * (across / iron.reference_voltage) ** 8
    return replace(
        circuit, magnetising_reactance=circuit.magnetising_reactance * (1.0 + iron.saturation) / (1.0 + steep)
    )


@np.errstate(invalid="ignore")
def _rotor_admittance(circuit: EquivalentCircuit, slip: Floats) -> Complexes:
    return np.asarray(slip / (circuit.rotor_resistance + 1j * slip * circuit.rotor_reactance), dtype=np.complex128)
