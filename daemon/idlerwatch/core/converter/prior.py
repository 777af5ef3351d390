"""What is believed of a converter's parameters before anything was learned: plate, marking, and the meters' classes.

The idler's admittances are those of its plate's probable circuit at no load; how wide they are follows from how well
each of its constants is known (`nameplate`), to first order. Everything else is a class limit, a rectangle of which the
standard deviation is the limit over the root of three (JCGM 100, 4.3.7).
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, fields, replace
from typing import Final

import numpy as np

from idlerwatch.core.converter.circuit import IDLER, Floats, Wiring
from idlerwatch.core.converter.learn import Prior
from idlerwatch.core.converter.machine import EquivalentCircuit, sequence_admittances, slip_at_torque
from idlerwatch.core.converter.nameplate import Nameplate, Typical, typical_machine, zero_admittance

WINDING_SPREAD: Final = 0.01
"""Limit of a winding's admittance about the mean of the three (common practice, no source)."""
MARKING: Final = 0.05
"""Limit of a capacitor about its marking: class of +-5 % (IEC 60252-1, from memory)."""
PHASE_ERROR: Final = math.radians(0.3)
"""Limit of the angle between an inexpensive meter's voltage and current channels (common practice, no source)."""
BENDING: Final = {"saturation_1": (2.0, 3.0), "saturation_2": (8.0, 8.0)}
"""How iron bends: mean and standard deviation; together 20 to 50 % more no-load current at +10 % (common practice)."""
FRICTION: Final = (0.6, 0.25)
"""Share of the no-load conductance that is friction's constant power (the rest is copper and core)."""
BRAKING: Final = (0.45, 0.15)
"""Rotor's share of the negative-sequence conductance: its loss is what the positive sequence must carry."""
LEAST_RELATIVE: Final = 0.2
"""No admittance is known better than this from a plate."""
LEAST: Final = 1e-3
"""Nor better than this, over the base admittance: a floating star's Y0 is nought and means nothing."""


@dataclass(frozen=True, slots=True)
class Limits:
    """Relative limits of the meters: each ray's voltage, each channel's power, ammeters, lines. [1]

    Trimmed voltmeters give standard uncertainties instead: see `standard_rays`.
    """

    rays: Sequence[float]
    channels: Sequence[float]
    ammeters: Sequence[float] = ()
    lines: Sequence[float] = ()


def prior_of(wiring: Wiring, plates: Sequence[Nameplate], limits: Limits) -> Prior:
    """Return mean and standard deviation of every parameter.

    Parameters
    ----------
    plates
        Of the idlers: their admittances add.
    limits
        Of the meters.
    """
    means, standards = _idler(wiring, plates)
    rest = len(wiring.names) - len(IDLER)
    mean = np.concatenate([means, np.zeros(rest)])
    standard = np.concatenate([standards, np.zeros(rest)])
    for names, values in (
        ([f"ray_{leg}" for leg in wiring.rays], limits.rays),
        ([f"channel_{index}_gain" for index in range(len(wiring.channels))], limits.channels),
        ([f"channel_{index}_phase" for index in range(len(wiring.channels))], [PHASE_ERROR] * len(wiring.channels)),
        ([f"can_{index}" for index in range(len(wiring.cans))], [MARKING] * len(wiring.cans)),
        ([f"ammeter_{index}" for index in range(len(wiring.ammeters))], limits.ammeters),
        ([f"line_{index}" for index in range(len(wiring.lines))], limits.lines),
    ):
        for name, limit in zip(names, values, strict=True):
            standard[wiring.at[name]] = limit / math.sqrt(3.0)
    return Prior(mean, standard)


def _idler(wiring: Wiring, plates: Sequence[Nameplate]) -> tuple[Floats, Floats]:
    typical = [typical_machine(plate) for plate in plates]
    middle = np.sum([_parts(machine, wiring) for machine in typical], axis=0)
    variance = np.zeros(6)
    for machine in typical:
        others = middle - _parts(machine, wiring)
        for name, relative in machine.relative.items():
            moved = _moved(machine, name, 1.0 + relative)
            if moved is not None:
                variance += (others + _parts(moved, wiring) - middle) ** 2
    admittances = np.maximum(np.sqrt(variance), LEAST_RELATIVE * np.abs(middle) + LEAST)
    asymmetry = WINDING_SPREAD / math.sqrt(3.0)
    means = [*middle, *(mean for mean, _ in BENDING.values()), FRICTION[0], BRAKING[0], 0.0, 0.0]
    standards = [*admittances, *(wide for _, wide in BENDING.values()), FRICTION[1], BRAKING[1], asymmetry, asymmetry]
    return np.array(means), np.array(standards)


def _moved(machine: Typical, name: str, factor: float) -> Typical | None:
    """Return the machine with one of its constants multiplied; None where the name is none of the circuit's."""
    if name in {field.name for field in fields(EquivalentCircuit)}:
        return replace(machine, circuit=replace(machine.circuit, **{name: getattr(machine.circuit, name) * factor}))
    if name in {"zero_impedance", "friction"}:
        return replace(machine, **{name: getattr(machine, name) * factor})
    return None


def _parts(machine: Typical, wiring: Wiring) -> Floats:
    """Return g0, b0, g1, b1, g2, b2 at no load and nominal voltage, over the base admittance."""
    voltage = np.array(wiring.nominal_voltage + 0j)
    slip = slip_at_torque(machine.circuit, np.array(machine.friction), voltage, np.array(0j))
    zero = zero_admittance(machine, "N" if wiring.tied else "floating")
    sequences = sequence_admittances(machine.circuit, slip, zero) / wiring.base
    return np.asarray(np.stack([sequences.real, -sequences.imag], axis=-1).reshape(6), dtype=np.float64)
