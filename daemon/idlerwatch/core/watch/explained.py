"""What of the machines' negative-sequence current their own windings explain.

A healthy motor on an unbalanced supply draws a large negative-sequence current: I2 = y2 V2, with y2 nearly constant,
its admittance at a slip near two. What no combination of the described machines that fits the load explains points at a
winding, a contact or a single-phase load. How well a machine's y2 is known from its plate is allowed for.
"""

import itertools
import math
from collections.abc import Mapping
from typing import Final

import numpy as np

from idlerwatch.core.conductors import LEGS, Conductor, Leg
from idlerwatch.core.converter.circuit import Complexes
from idlerwatch.core.converter.machine import phase_admittance
from idlerwatch.core.converter.nameplate import Nameplate, believed, typical_machine
from idlerwatch.core.electrical.sequence import sequence_components
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.watch.channel import MISSING, Measured
from idlerwatch.core.watch.derive import Derived
from idlerwatch.core.watch.plan import Combinations

PLATE_SPREAD: Final = 0.3
"""Share of a plate's y2 that is allowed for either way: leakage reactances lie that far apart (references in
`converter/nameplate.py`)."""
MOST_MACHINES: Final = 6
"""More would be more combinations than a sample has time for; the largest count."""
LEAST_LOAD, MOST_LOAD = 0.25, 1.6
"""A machine that runs draws between these ratios of its rated current (common practice)."""


def compile_machines(settings: Settings) -> Combinations | None:
    """Return all combinations of the three-phase machines without a drive; None where none is described."""
    voltage = settings.supply.as_feed.line_voltage
    plain = [m for m in settings.machine if m.connected == "three-phase" and m.starter != "drive"]
    largest = sorted(plain, key=lambda machine: -machine.rated_kw)[:MOST_MACHINES]
    if not largest:
        return None
    typical = [
        typical_machine(
            believed(Nameplate(machine.rated_kw, voltage, settings.supply.frequency, machine.rated_current))[0]
        )
        for machine in largest
    ]
    admittances = [complex(phase_admittance(machine.circuit, np.array(1.98))) for machine in typical]
    picks = [pick for size in range(1, len(typical) + 1) for pick in itertools.combinations(range(len(typical)), size)]
    return Combinations(
        np.array([sum(admittances[index] for index in pick) for pick in picks]),
        np.array([sum(typical[index].rated_current for index in pick) for pick in picks]),
    )


def unexplained_current(
    machines: Combinations | None,
    derived: Derived,
    points: Mapping[Conductor, complex] | None,
    rotation: tuple[Leg, ...],
) -> Measured:
    """Return the negative-sequence current that nothing described explains, over the positive-sequence current. [1]"""
    if machines is None or points is None or any(leg not in points for leg in LEGS):
        return MISSING
    currents = _currents(derived, points, rotation)
    if currents is None:
        return MISSING
    components = sequence_components(currents)
    voltages = sequence_components(np.array([points[leg] for leg in rotation]))
    positive, negative = abs(components[1]), components[2]
    fits = (machines.currents * LEAST_LOAD <= positive) & (positive <= machines.currents * MOST_LOAD)
    if not fits.any() or not positive > 0.0:
        return MISSING
    explained = machines.admittances[fits] * voltages[2]
    rest = np.abs(negative - explained) - PLATE_SPREAD * np.abs(explained)
    return Measured(max(0.0, float(rest.min())) / float(positive))


def _currents(derived: Derived, points: Mapping[Conductor, complex], rotation: tuple[Leg, ...]) -> Complexes | None:
    """Return the phasors of the legs' currents from their powers and voltages to N: (3,). [A]"""
    neutral = points.get("N", 0j)
    phasors = []
    for leg in rotation:
        power = derived.legs[leg]
        voltage = points[leg] - neutral
        apparent = complex(power.active.value, power.reactive.value)
        if math.isnan(abs(apparent)) or abs(voltage) < 1.0:
            return None
        phasors.append((apparent / voltage).conjugate())
    return np.array(phasors)
