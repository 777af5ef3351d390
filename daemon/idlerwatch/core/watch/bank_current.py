"""What a bank's ammeter should read: the current its capacitors take, I = w C V.

One capacitor on the ammeter's conductor takes w C V of the voltage across it, whatever the angles are. Several add up
as phasors, for which the angles must be seen. Where the voltage across a capacitor is not measured but both its legs
are, to N, and angles were not seen, the legs are taken to stand 120 degrees apart and the uncertainty says so.
"""

import cmath
import math
from collections.abc import Mapping
from typing import Final

from idlerwatch.core.conductors import LEGS, Conductor, Pair
from idlerwatch.core.values import Known
from idlerwatch.core.watch.channel import MISSING, Measured
from idlerwatch.core.watch.derive import Derived
from idlerwatch.core.watch.estimate import Estimate
from idlerwatch.core.watch.plan import CapacitorPlan, ChannelPlan, Plan

ASSUMED_ANGLE: Final = 0.025
"""Relative standard uncertainty of a line voltage whose angle is assumed: 5 degrees at 120 (half a cotangent of 60)."""
SMALLEST_RATIO: Final = 0.2
"""Below this ratio of its nominal voltage a capacitor takes next to nothing, and no ratio is told."""


def bank_current_ratio(plan: Plan, derived: Derived, estimate: Estimate, name: str) -> tuple[Measured, Known]:
    """Return the bank's current over what its capacitors should take, and how that is known."""
    capacitors = plan.bank_capacitors.get(name, ())
    power = derived.banks.get(name)
    channel = next((channel for channel in plan.bank_channels.get(name, ()) if channel.through is not None), None)
    if power is None or channel is None or not power.current.is_known:
        return MISSING, "not measured"
    touched = [
        capacitor for capacitor in capacitors if channel.through in (capacitor.across.first, capacitor.across.second)
    ]
    voltage, known = _voltage(plan, estimate, channel, touched, power.voltage)
    if not voltage.is_known:
        return MISSING, "not measured"
    frequency = derived.frequency.value if derived.frequency.is_known else plan.frequency
    expected = 2.0 * math.pi * frequency * sum(capacitor.capacitance for capacitor in touched) * voltage.value
    relative = math.hypot(power.current.standard / max(power.current.value, 1e-9), voltage.standard / voltage.value)
    ratio = power.current.value / expected
    return Measured(ratio, ratio * relative), known


def _voltage(
    plan: Plan, estimate: Estimate, channel: ChannelPlan, touched: list[CapacitorPlan], own: Measured
) -> tuple[Measured, Known]:
    """Return the voltage that, across the touched capacitors in parallel, drives the current through the ammeter."""
    pairs = {capacitor.across for capacitor in touched}
    if len(pairs) == 1:
        (pair,) = pairs
        measured, known = (
            (own, "measured") if channel.across == pair else estimate.voltages.get(str(pair), (MISSING, "not measured"))
        )
        if measured.is_known:
            return _enough(plan, pair, measured), "measured" if known == "measured" else "computed"
    if not pairs or channel.through is None:
        return MISSING, "not measured"
    return _phasor_voltage(plan, estimate, channel.through, touched), "computed"


def _enough(plan: Plan, pair: Pair, measured: Measured) -> Measured:
    return measured if measured.value >= SMALLEST_RATIO * plan.nominal.get(str(pair), math.nan) else MISSING


def _phasor_voltage(plan: Plan, estimate: Estimate, through: Conductor, touched: list[CapacitorPlan]) -> Measured:
    """Return the mean of the voltages from the conductor, weighted by capacitance, as phasors."""
    points = estimate.points or _assumed_points(plan, estimate)
    uncertainty = 0.005 if estimate.points else ASSUMED_ANGLE
    total = sum(capacitor.capacitance for capacitor in touched)
    try:
        mean = (
            sum(
                capacitor.capacitance * (points[through] - points[capacitor.across.other(through)])
                for capacitor in touched
            )
            / total
        )
        nominal = (
            abs(
                sum(
                    capacitor.capacitance * (plan.points[through] - plan.points[capacitor.across.other(through)])
                    for capacitor in touched
                )
            )
            / total
        )
    except KeyError:
        return MISSING
    value = abs(mean)
    return Measured(value, uncertainty * value) if value >= SMALLEST_RATIO * nominal and nominal > 0.0 else MISSING


def _assumed_points(plan: Plan, estimate: Estimate) -> Mapping[Conductor, complex]:
    """Return the legs at their nominal angles and measured magnitudes, where N is the centre of the triangle."""
    if plan.feed.is_line_feed:
        return {}
    points: dict[Conductor, complex] = {"N": 0j}
    for leg in LEGS:
        measured = estimate.voltages[f"{leg}-N"][0]
        if measured.is_known:
            points[leg] = cmath.rect(measured.value, cmath.phase(plan.points[leg]))
    return points
