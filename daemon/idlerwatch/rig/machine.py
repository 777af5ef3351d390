"""The rig's own induction machine, with what the watching core's model leaves out.

It carries saturation, a deep-bar rotor whose resistance rises with its frequency, winding asymmetry, and a rotor flux
that dies away when nothing feeds it. Constants are at the rated frequency; `frequency` and `speed` are ratios to it, so
reactances are multiplied by `frequency`. Torques are in synchronous watts: torque times rated synchronous speed.

Positive speed turns in the sense L1-L2-L3; a machine running backwards swaps what the two sequences see.

While coasting the machine is its rotor flux behind the transient reactance (third-order model; P. Kundur, *Power System
Stability and Control*, 7.1): with phi = E'/frequency, d phi/dt = -(phi - j (X - X') I)/T0', T0' = (Xr + Xm)/(w0 Rr).
With a bank across it I leads, so the decay is slower by 1 - B Xm speed^2, and turns into growth above 1 until iron
saturates: self-excitation follows, nothing is added for it.
"""

import math
from dataclasses import dataclass, fields, replace

import numpy as np

from idlerwatch.core.converter.network import Complexes, Floats, winding_matrix


@dataclass(frozen=True, slots=True)
class Induction:
    """Constants a star phase, arrays of one shape (...).

    `asymmetry` (..., 3) is each winding's admittance over the mean. `saturation` b in Xm = Xm0 g(1)/g(e), g(e) = 1 +
    b max(0, e - 0.95)^2, e the airgap flux over the rated one. `deep_bar` k in Rr (1 + k sqrt(rotor frequency
    ratio)). `kinetic_energy` at synchronous speed. [J] `friction` at synchronous speed. [W]
    """

    rated_voltage: Floats
    stator_resistance: Floats
    stator_reactance: Floats
    magnetising_reactance: Floats
    rotor_resistance: Floats
    rotor_reactance: Floats
    zero_reactance: Floats
    saturation: Floats
    deep_bar: Floats
    kinetic_energy: Floats
    friction: Floats
    rated_power: Floats
    asymmetry: Floats

    def part(self, index: slice) -> "Induction":
        """Return the machines at an index of the leading axes."""
        return replace(self, **{f.name: np.asarray(getattr(self, f.name))[index] for f in fields(self)})


def typical_machine(
    kilowatts: float,
    line_voltage: float,
    rated_current: float | None = None,
    magnetising_current: float | None = None,
    inertia: float = 0.25,
) -> Induction:
    """Return a four-pole cage machine of usual per-unit constants for a nameplate, with no leading axis.

    `inertia` is the kinetic energy at synchronous speed over the rated power. [s]
    The per-unit constants lie amid those of references 5.5 (textbook machines of 5 to 50 hp).
    """
    phase = line_voltage / math.sqrt(3.0)
    current = rated_current or kilowatts * 1e3 / (3.0 * phase * 0.87 * 0.82)
    ohms = phase / current
    magnetising = phase / magnetising_current if magnetising_current else 1.95 * ohms
    values = {
        "rated_voltage": phase,
        "stator_resistance": 0.035 * ohms,
        "stator_reactance": 0.075 * ohms,
        "magnetising_reactance": magnetising,
        "rotor_resistance": 0.028 * ohms,
        "rotor_reactance": 0.085 * ohms,
        "zero_reactance": 0.06 * ohms,
        "saturation": 11.8,
        "deep_bar": 0.9,
        "kinetic_energy": inertia * kilowatts * 1e3,
        "friction": 0.045 * kilowatts * 1e3,
        "rated_power": kilowatts * 1e3,
    }
    return Induction(**{k: np.asarray(v, dtype=float) for k, v in values.items()}, asymmetry=np.ones(3))


def stack(machines: tuple[Induction, ...]) -> Induction:
    """Return one `Induction` with the machines along a new leading axis."""
    return Induction(**{f.name: np.stack([getattr(m, f.name) for m in machines]) for f in fields(Induction)})


def magnetising_reactance(machine: Induction, flux: Floats) -> Floats:
    """Return Xm at an airgap flux (ratio to the rated one): (...). [ohm]

    Examples
    --------
    >>> idler = typical_machine(7.5, 400.0)
    >>> x = [float(magnetising_reactance(idler, np.array(f))) for f in (1.0, 1.1)]
    >>> 1.2 < 1.1 * x[0] / x[1] < 1.5
    True
    """

    def bend(ratio: Floats | float) -> Floats:
        return np.asarray(1.0 + machine.saturation * np.maximum(0.0, np.asarray(ratio) - 0.95) ** 2)

    return machine.magnetising_reactance * bend(1.0) / bend(flux)


@dataclass(frozen=True, slots=True)
class Branches:
    """What one sequence sees: admittances (...) of the whole phase, the airgap and the rotor branch. [S]"""

    phase: Complexes
    rotor: Complexes
    stator_impedance: Complexes


def _branches(machine: Induction, speed: Floats, frequency: Floats, magnetising: Floats) -> Branches:
    slip = (frequency - speed) / frequency
    resistance = machine.rotor_resistance * (1.0 + machine.deep_bar * np.sqrt(np.abs(frequency - speed)))
    rotor = slip / (resistance + 1j * slip * frequency * machine.rotor_reactance)
    airgap = 1.0 / (rotor + 1.0 / (1j * frequency * magnetising))
    stator = machine.stator_resistance + 1j * frequency * machine.stator_reactance
    phase = np.asarray(1.0 / (stator + airgap), dtype=np.complex128)
    return Branches(phase, np.asarray(rotor, dtype=np.complex128), stator)


def phase_branches(machine: Induction, speed: Floats, frequency: Floats, flux: Floats) -> tuple[Branches, Branches]:
    """Return what the positive and the negative sequence see at a signed speed."""
    magnetising = magnetising_reactance(machine, flux)
    return (
        _branches(machine, speed, frequency, magnetising),
        _branches(machine, -speed, frequency, magnetising),
    )


def zero_admittance(machine: Induction, frequency: Floats) -> Complexes:
    """Return Y0 of windings whose star point is tied. [S]"""
    return np.asarray(1.0 / (machine.stator_resistance + 1j * frequency * machine.zero_reactance), dtype=np.complex128)


def windings(machine: Induction, zero: Complexes, positive: Complexes, negative: Complexes) -> Complexes:
    """Return the winding matrix to the star point, with the asymmetry of the windings: (...) -> (..., 3, 3). [S]"""
    sequences = np.stack(np.broadcast_arrays(zero, positive, negative), axis=-1)
    root = np.sqrt(machine.asymmetry)
    scaled: Complexes = root[..., :, None] * winding_matrix(sequences) * root[..., None, :]
    return scaled


def airgap_power(branches: Branches, voltage: Complexes) -> Floats:
    """Return the power one sequence sends over the airgap: 3 |E|^2 Re(rotor admittance). [W]"""
    airgap = voltage * (1.0 - branches.stator_impedance * branches.phase)
    return np.asarray(3.0 * np.abs(airgap) ** 2 * branches.rotor.real, dtype=np.float64)


def torque(
    machine: Induction, speed: Floats, frequency: Floats, flux: Floats, sequences: tuple[Complexes, Complexes]
) -> Floats:
    """Return the torque of both sequences' voltages V1, V2: (...). [synchronous W]"""
    positive, negative = phase_branches(machine, speed, frequency, flux)
    power = airgap_power(positive, sequences[0]) - airgap_power(negative, sequences[1])
    return np.asarray(power / frequency, dtype=np.float64)


def airgap_flux(machine: Induction, branches: Branches, voltage: Complexes, frequency: Floats) -> Floats:
    """Return the airgap flux of one sequence over the rated flux: (...). [1]"""
    airgap = voltage * (1.0 - branches.stator_impedance * branches.phase)
    return np.asarray(np.abs(airgap) / (frequency * machine.rated_voltage), dtype=np.float64)


@dataclass(frozen=True, slots=True)
class Transient:
    """The machine as its rotor flux: admittance behind it, X - X' at rated frequency, and the rotor's own rate."""

    admittance: Complexes
    span: Floats
    rate: Floats


def transient(machine: Induction, frequency: Floats, flux: Floats, angular_frequency: Floats) -> Transient:
    """Return the transient model at a flux (which sets Xm). Shapes (...)."""
    magnetising = magnetising_reactance(machine, flux)
    whole = machine.rotor_reactance + magnetising
    span = magnetising**2 / whole
    reactance = machine.stator_reactance + magnetising - span
    admittance = 1.0 / (machine.stator_resistance + 1j * frequency * reactance)
    return Transient(np.asarray(admittance), span, angular_frequency * machine.rotor_resistance / whole)


def decayed(rotor: Transient, emf: Complexes, current: Complexes, seconds: float) -> Complexes:
    """Return the rotor's electromotive force per frequency after a time with a stator current in proportion to it.

    `emf` and `current` (...) are phasors in the rotor's frame; exact for a linear circuit during the step.
    """
    there = np.where(np.abs(emf) > 1e-9, emf, 1e-9)
    growth = -rotor.rate * (1.0 - 1j * rotor.span * current / there)
    bounded = np.clip(growth.real * seconds, -50.0, 1.0) + 1j * growth.imag * seconds
    return np.asarray(emf * np.exp(bounded), dtype=np.complex128)
