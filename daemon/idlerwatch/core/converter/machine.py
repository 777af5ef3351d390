"""The usual equivalent circuit of an induction machine, a phase, for both sequences.

    stator R + jX ---+--- rotor R/s + jX
                     |
                    jXm

Positive sequence sees the slip s, negative sequence 2 - s (A. E. Fitzgerald et al., *Electric Machinery*, chapter 6).
"""

from dataclasses import dataclass

import numpy as np

from idlerwatch.core.converter.network import Complexes, Floats


@dataclass(frozen=True, slots=True)
class EquivalentCircuit:
    """Constants a star phase, each of any common shape (...). [ohm]"""

    stator_resistance: Floats
    stator_reactance: Floats
    magnetising_reactance: Floats
    rotor_resistance: Floats
    rotor_reactance: Floats


def phase_admittance(circuit: EquivalentCircuit, slip: Floats) -> Complexes:
    """Return the admittance a phase at a slip, which may be zero: (...) and (...) -> (...). [S]

    Examples
    --------
    >>> idler = EquivalentCircuit(*(np.array(x) for x in (0.294, 0.503, 13.25, 0.144, 0.209)))
    >>> round(float(abs(phase_admittance(idler, np.array(0.02))) * 220.0 / np.sqrt(3.0)), 2)
    18.78
    """
    rotor = slip / (circuit.rotor_resistance + 1j * slip * circuit.rotor_reactance)
    airgap = 1.0 / (rotor + 1.0 / (1j * circuit.magnetising_reactance))
    impedance = circuit.stator_resistance + 1j * circuit.stator_reactance + airgap
    return np.asarray(1.0 / impedance, dtype=np.complex128)


def sequence_admittances(circuit: EquivalentCircuit, slip: Floats, zero_admittance: Complexes | float) -> Complexes:
    """Return Y0, Y1(s), Y2(2 - s): (...) -> (..., 3). [S]"""
    positive = phase_admittance(circuit, slip)
    negative = phase_admittance(circuit, 2.0 - slip)
    return np.stack(np.broadcast_arrays(np.asarray(zero_admittance, dtype=np.complex128), positive, negative), axis=-1)
