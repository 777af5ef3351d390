"""Fifth step: everything a person is told about one sample, figure by figure.

A figure is a value, its expanded uncertainty (k = 2) and how it is known. Every figure the settings make possible is
always there, unknown where it is not seen: the set of keys never changes, and nothing missing is ever zero.

Machines are judged by absolute voltages (`voltage_ratio`), the converter by each voltage over the supply's
(`supply_ratio`), since the utility's own voltage wanders over the day. On a centre-tapped supply the phase voltage
unbalance rate is meaningless (a perfect set reads 120/120/208 V) and not told.
"""

import math
from collections.abc import Iterator, Mapping
from typing import Final

from idlerwatch.core.conductors import LEGS, LINE_PAIRS, Leg
from idlerwatch.core.values import UNKNOWN, Assessment, Figure, Known, Sample
from idlerwatch.core.watch.bank_current import bank_current_ratio
from idlerwatch.core.watch.channel import MISSING, Measured, power_factor
from idlerwatch.core.watch.circuit import NOTHING, BankPosition, Found
from idlerwatch.core.watch.derive import Derived
from idlerwatch.core.watch.estimate import Estimate, stands_still
from idlerwatch.core.watch.explained import unexplained_current
from idlerwatch.core.watch.life import LifeState
from idlerwatch.core.watch.plan import Plan
from idlerwatch.core.watch.three_phase import (
    added_rise,
    apparent_powers,
    current_unbalance,
    derating,
    line_unbalance,
    phase_unbalance,
)

NAN: Final = math.nan
K: Final = 2.0
"""Coverage factor of every uncertainty that is told."""

FigureName = tuple[str, str, str]
Row = tuple[FigureName, Figure]

LINES: Final = tuple(str(pair) for pair in LINE_PAIRS)


def assess(
    plan: Plan, sample: Sample, derived: Derived, estimate: Estimate, life: LifeState, *, found: Found = NOTHING
) -> Assessment:
    """Return the assessment of one sample; alarms and lamp are left to the alarm step."""
    return Assessment(
        at=sample.at,
        utc=sample.utc,
        local_offset=sample.local_offset,
        settings=plan.number,
        state=life.state,
        state_since=life.since,
        loading=life.loading,
        lamp="fine",
        angles=estimate.angles,
        figures=dict(_figures(plan, derived, estimate, life, found)),
        meters=meter_states(plan, derived, life),
        remarks=(*_remarks(plan, derived, estimate), *found.remarks),
    )


def meter_states(plan: Plan, derived: Derived, life: LifeState) -> Mapping[str, str]:
    """Return each meter's state; one that lives on a generated leg sleeps while the converter makes none."""
    sleeps = life.state in ("stopped", "starting", "change-over", "run-down")
    if not sleeps:
        return derived.meters
    return {
        name: "asleep" if name in plan.on_generated and said not in ("answering", "booting") else said
        for name, said in derived.meters.items()
    }


def told(measured: Measured, known: Known = "measured") -> Figure:
    """Return a measured value as a figure; unknown where it is missing."""
    value, standard = measured
    return UNKNOWN if math.isnan(value) else Figure(value, K * standard, known)


def _figures(plan: Plan, derived: Derived, estimate: Estimate, life: LifeState, found: Found) -> Iterator[Row]:
    supply_ratio = ratio_to(derived.supply.voltage, plan.feed.voltage)
    for leg in LEGS:
        yield from _leg(plan, derived, estimate, leg, supply_ratio)
    for pair in LINES:
        yield from _voltages(plan, estimate, pair, supply_ratio)
    yield from _supply(plan, derived, supply_ratio)
    yield from _unbalances(plan, derived, estimate)
    yield from _converter_powers(plan, derived, estimate)
    yield ("converter", "converter", "start_time"), told(Measured(life.start_time, plan.cycle_s / 2.0))
    for bank in plan.banks:
        yield from _bank(plan, derived, estimate, bank.name)
    yield from _circuit(plan, derived, estimate, found)
    yield ("earthing", "converter", "neutral_earth_voltage"), told(*estimate.neutral_earth)
    for name, power in derived.machines.items():
        yield ("machine", name, "voltage"), told(power.voltage)
        yield ("machine", name, "current"), told(power.current)
        yield ("machine", name, "active_power"), told(power.active)
        yield ("machine", name, "power_factor"), told(power.factor)
    for name, said in derived.meters.items():
        yield ("meter", name, "answering"), ANSWERING if said == "answering" else SILENT
    for means, value in derived.contacts.items():
        yield contact_figure(means), told(Measured(value, 0.0))


ANSWERING: Final = Figure(1.0, 0.0, "measured")
SILENT: Final = Figure(0.0, 0.0, "measured")


def contact_figure(means: str) -> FigureName:
    """Return the name of the figure a contact's meaning has.

    Examples
    --------
    >>> contact_figure("bank run closed"), contact_figure("sequence right")
    (('bank', 'run', 'closed'), ('converter', 'converter', 'sequence_right'))
    """
    match means.split():
        case ["bank", name, "closed"]:
            return ("bank", name, "closed")
        case ["coil", name, "energised"]:
            return ("bank", name, "coil_energised")
        case ["breaker", "tripped"]:
            return ("supply", "supply", "breaker_tripped")
        case _:
            return ("converter", "converter", "sequence_right")


# --------------------------------------------------------------------------
# Legs and lines
# --------------------------------------------------------------------------


def ratio_to(measured: Measured, nominal: float) -> Measured:
    """Return a value over its nominal one; missing where that is zero or not there."""
    return Measured(measured.value / nominal, measured.standard / nominal) if nominal > 0.0 else MISSING


def quotient(first: Measured, second: Measured) -> Measured:
    """Return the quotient of two values with independent errors; missing where the second is zero."""
    if not second.value > 0.0:
        return MISSING
    value = first.value / second.value
    return Measured(value, math.hypot(first.standard, value * second.standard) / second.value)


def _leg(plan: Plan, derived: Derived, estimate: Estimate, leg: Leg, supply_ratio: Measured) -> Iterator[Row]:
    subject, power = leg.lower(), derived.legs[leg]
    yield from _voltages(plan, estimate, f"{leg}-N", supply_ratio)
    yield ("leg", subject, "current"), told(power.current)
    yield ("leg", subject, "active_power"), told(power.active)
    yield ("leg", subject, "reactive_power"), told(power.reactive)
    yield ("leg", subject, "apparent_power"), told(power.apparent)
    yield ("leg", subject, "power_factor"), told(power.factor)


def _voltages(plan: Plan, estimate: Estimate, pair: str, supply_ratio: Measured) -> Iterator[Row]:
    measurement = "leg" if pair.endswith("-N") else "line"
    subject = pair.removesuffix("-N").lower()
    measured, known = estimate.voltages[pair]
    over_nominal = ratio_to(measured, plan.nominal[pair])
    yield (measurement, subject, "voltage"), told(measured, known)
    yield (measurement, subject, "voltage_ratio"), told(over_nominal, known)
    yield (measurement, subject, "supply_ratio"), told(quotient(over_nominal, supply_ratio), known)


def _unbalances(plan: Plan, derived: Derived, estimate: Estimate) -> Iterator[Row]:
    is_still = stands_still(plan, derived)
    line, legs = MISSING, MISSING
    if not is_still and not estimate.contradicted:
        line = line_unbalance(tuple(estimate.voltages[pair][0] for pair in LINES))
    if not is_still and plan.has_central_neutral:
        legs = phase_unbalance(tuple(estimate.voltages[f"{leg}-N"][0] for leg in LEGS))
    known = estimate.known
    zero, positive, negative = estimate.components
    yield ("converter", "converter", "line_voltage_unbalance_rate"), told(line, known)
    yield ("converter", "converter", "phase_voltage_unbalance_rate"), told(legs)
    yield ("converter", "converter", "voltage_unbalance_factor"), told(estimate.unbalance_factor, known)
    mapped: Known = "recovered" if known == "recovered" else "mapped"
    yield ("converter", "converter", "zero_sequence_voltage"), told(zero, mapped)
    yield ("converter", "converter", "positive_sequence_voltage"), told(positive, mapped)
    yield ("converter", "converter", "negative_sequence_voltage"), told(negative, mapped)
    yield ("converter", "converter", "zero_sequence_factor"), told(quotient(zero, positive), mapped)
    currents = tuple(derived.legs[leg].current for leg in LEGS)
    yield ("converter", "converter", "current_unbalance_rate"), told(current_unbalance(currents))
    yield ("converter", "converter", "derating_factor"), told(derating(line), "computed")
    yield ("converter", "converter", "added_temperature_rise"), told(added_rise(line), "computed")


# --------------------------------------------------------------------------
# Powers
# --------------------------------------------------------------------------


def _supply(plan: Plan, derived: Derived, supply_ratio: Measured) -> Iterator[Row]:
    power = derived.supply
    idle = MISSING
    if power.active.is_known and derived.total.active.is_known:
        machines = derived.total.active
        idle = Measured(power.active.value - machines.value, math.hypot(power.active.standard, machines.standard))
    yield ("supply", "supply", "voltage"), told(power.voltage)
    yield ("supply", "supply", "voltage_ratio"), told(supply_ratio)
    yield ("supply", "supply", "current"), told(power.current)
    yield ("supply", "supply", "current_ratio"), told(ratio_to(power.current, plan.breaker))
    yield ("supply", "supply", "active_power"), told(power.active)
    yield ("supply", "supply", "reactive_power"), told(power.reactive)
    yield ("supply", "supply", "apparent_power"), told(power.apparent)
    yield ("supply", "supply", "power_factor"), told(power.factor)
    yield ("supply", "supply", "frequency"), told(derived.frequency)
    yield ("supply", "supply", "neutral_shift"), told(_neutral_shift(plan, derived))
    yield ("supply", "supply", "active_energy_import"), told(Measured(derived.energy))
    yield ("supply", "supply", "idle_loss"), told(idle, "computed")


def _neutral_shift(plan: Plan, derived: Derived) -> Measured:
    """Return how far the centre tap stands off the middle: one half of the supply against the other. [V]"""
    if plan.feed.neutral != "centre-tap":
        return MISSING
    first, second = (derived.voltages.get(f"{leg}-N", MISSING) for leg in plan.feed.supply_legs)
    return Measured(abs(first.value - second.value), math.hypot(first.standard, second.standard))


def _converter_powers(plan: Plan, derived: Derived, estimate: Estimate) -> Iterator[Row]:
    yield ("converter", "converter", "active_power"), told(derived.total.active)
    yield ("converter", "converter", "reactive_power"), told(derived.total.reactive)
    powers = apparent_powers(plan, derived, estimate)
    for name, apparent in powers.items():
        yield ("converter", "converter", f"{name}_apparent_power"), told(apparent, "computed")
        factor = power_factor(derived.total.active, apparent)
        yield ("converter", "converter", f"{name}_power_factor"), told(factor, "computed")


def _bank(plan: Plan, derived: Derived, estimate: Estimate, name: str) -> Iterator[Row]:
    power = derived.banks.get(name)
    current, voltage = (MISSING, MISSING) if power is None else (power.current, power.voltage)
    yield ("bank", name, "current"), told(current)
    yield ("bank", name, "voltage"), told(voltage)
    yield ("bank", name, "current_ratio"), told(*bank_current_ratio(plan, derived, estimate, name))


# --------------------------------------------------------------------------
# The circuit
# --------------------------------------------------------------------------


def _circuit(plan: Plan, derived: Derived, estimate: Estimate, found: Found) -> Iterator[Row]:
    """Yield what the converter's circuit tells: positions, capacitors, sense of rotation, and what would be usual."""
    known: Known = "learned" if found.is_learned else "computed"
    for bank in plan.banks:
        position = found.banks.get(bank.name, UNDECIDED)
        yield ("bank", bank.name, "position"), _certain(position.position, known)
        yield ("bank", bank.name, "position_probability"), _certain(position.probability, known)
    for name in plan.capacitors:
        yield ("capacitor", name.lower(), "lost_probability"), _certain(found.lost.get(name, NAN), known)
        yield ("capacitor", name.lower(), "capacitance_ratio"), told(found.ratios.get(name, MISSING), "learned")
    for leg in plan.generated:
        usual = Measured(found.usual.get(f"{leg}-N", NAN), NAN)
        yield ("leg", leg.lower(), "usual_voltage"), told(usual, "learned")
    unexplained = unexplained_current(plan.explaining, derived, estimate.points, plan.rotation)
    yield ("converter", "converter", "backwards_probability"), _certain(found.backwards, known)
    yield ("converter", "converter", "off_normal"), _certain(found.off_normal, "learned")
    yield ("converter", "converter", "usual_unbalance_factor"), _certain(found.usual_factor, "learned")
    yield ("converter", "converter", "circuit_misfit"), _certain(found.misfit, known)
    yield ("converter", "converter", "unexplained_current_ratio"), told(unexplained, "computed")


UNDECIDED: Final = BankPosition(NAN, NAN)


def _certain(value: float, known: Known) -> Figure:
    """Return a figure that has no uncertainty of its own."""
    return UNKNOWN if math.isnan(value) else Figure(value, NAN, known)


# --------------------------------------------------------------------------
# Remarks
# --------------------------------------------------------------------------

NOT_SEEN: Final = (
    "angles between the legs were not seen: voltages between lines, VUF and what follows from them are not available; "
    "even line-to-neutral voltages can hide unbalance"
)
EARTH_NOT_MEASURED: Final = "neutral-to-earth voltage is not measured"


def _remarks(plan: Plan, derived: Derived, estimate: Estimate) -> Iterator[str]:
    if estimate.angles == "not seen" and not estimate.contradicted and not stands_still(plan, derived):
        yield NOT_SEEN
    if not estimate.neutral_earth[0].is_known:
        yield EARTH_NOT_MEASURED
    yield from estimate.remarks
    yield from plan.remarks
