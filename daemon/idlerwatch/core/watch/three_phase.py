"""Figures of three legs at once, each with its uncertainty: unbalance rates, apparent powers, derating.

The vectorised functions of `electrical` do the computing, `propagate` the uncertainty.
"""

import math
from collections.abc import Callable, Mapping
from typing import Final

import numpy as np
import numpy.typing as npt

from idlerwatch.core.conductors import LEGS, LINE_PAIRS
from idlerwatch.core.electrical.derating import NEMA_DERATING, added_temperature_rise, derating_factor
from idlerwatch.core.electrical.power import (
    arithmetic_apparent_power,
    effective_apparent_power,
    effective_apparent_power_without_neutral,
    vector_apparent_power,
)
from idlerwatch.core.electrical.unbalance import (
    current_unbalance_rate,
    line_voltage_unbalance_rate,
    phase_voltage_unbalance_rate,
)
from idlerwatch.core.watch.channel import MISSING, Measured
from idlerwatch.core.watch.derive import Derived
from idlerwatch.core.watch.estimate import Estimate
from idlerwatch.core.watch.plan import Plan
from idlerwatch.core.watch.propagate import propagate

Floats = npt.NDArray[np.float64]
Triple = tuple[Measured, ...]

SMALLEST_CURRENT: Final = 0.1
"""Below this mean leg current an unbalance rate of currents is noise over noise and is not told. [A]"""
SMALLEST_VOLTAGE: Final = 20.0
"""Below this mean voltage (remanence, standstill) no unbalance is told. [V]"""


def _mean(inputs: Triple) -> float:
    return sum(measured.value for measured in inputs) / len(inputs)


def line_unbalance(line_voltages: Triple) -> Measured:
    """Return the line voltage unbalance rate with its uncertainty."""
    return propagate(line_voltage_unbalance_rate, line_voltages) if _mean(line_voltages) > SMALLEST_VOLTAGE else MISSING


def phase_unbalance(leg_voltages: Triple) -> Measured:
    """Return the phase voltage unbalance rate with its uncertainty."""
    return propagate(phase_voltage_unbalance_rate, leg_voltages) if _mean(leg_voltages) > SMALLEST_VOLTAGE else MISSING


def current_unbalance(currents: Triple) -> Measured:
    """Return the current unbalance rate with its uncertainty; none of currents that are next to nothing."""
    return propagate(current_unbalance_rate, currents) if _mean(currents) > SMALLEST_CURRENT else MISSING


def _through(function: Callable[[Floats], Floats], measured: Measured) -> Measured:
    if math.isnan(measured.value):
        return MISSING
    value, moved = (float(function(np.array(at))) for at in (measured.value, measured.value + measured.standard))
    return MISSING if math.isnan(value) else Measured(value, abs(moved - value))


def derating(line_rate: Measured) -> Measured:
    """Return the derating factor of motors at a line voltage unbalance rate."""
    return _through(lambda rate: derating_factor(rate, NEMA_DERATING), line_rate)


def added_rise(line_rate: Measured) -> Measured:
    """Return the added temperature rise of motors at a line voltage unbalance rate."""
    return _through(added_temperature_rise, line_rate)


def apparent_powers(plan: Plan, derived: Derived, estimate: Estimate) -> Mapping[str, Measured]:
    """Return the arithmetic, vector and effective apparent power towards the machines.

    The effective one needs line voltages, and the neutral's current wherever something may be connected to N.
    """
    legs = tuple(derived.legs[leg] for leg in LEGS)
    currents = tuple(power.current for power in legs)
    voltages = tuple(estimate.voltages[f"{leg}-N"][0] for leg in LEGS)
    lines = tuple(estimate.voltages[str(pair)][0] for pair in LINE_PAIRS)
    return {
        "arithmetic": propagate(_arithmetic, (*voltages, *currents)),
        "vector": propagate(_vector, (derived.total.active, derived.total.reactive)),
        "effective": _effective(plan, derived, (voltages, lines, currents)),
    }


def _arithmetic(inputs: Floats) -> Floats:
    return arithmetic_apparent_power(inputs[..., :3], inputs[..., 3:])


def _vector(inputs: Floats) -> Floats:
    return vector_apparent_power(inputs[..., :1], inputs[..., 1:])


def _effective(plan: Plan, derived: Derived, triples: tuple[Triple, Triple, Triple]) -> Measured:
    voltages, lines, currents = triples
    if derived.neutral_current.is_known:
        return propagate(_effective_with_neutral, (*voltages, *lines, *currents, derived.neutral_current))
    if plan.has_neutral_loads:
        return MISSING
    return propagate(_effective_without_neutral, (*lines, *currents))


def _effective_with_neutral(inputs: Floats) -> Floats:
    return effective_apparent_power(inputs[..., :3], inputs[..., 3:6], inputs[..., 6:9], inputs[..., 9])


def _effective_without_neutral(inputs: Floats) -> Floats:
    return effective_apparent_power_without_neutral(inputs[..., :3], inputs[..., 3:])
