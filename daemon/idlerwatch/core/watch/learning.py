"""From load states to a circuit a person can accept, or to the sentences that say why there is none."""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Final

import numpy as np

from idlerwatch.core.converter.hypotheses import catalogue
from idlerwatch.core.converter.known import KnownCircuit
from idlerwatch.core.converter.learn import Learned, Recorded
from idlerwatch.core.converter.miswiring import POOR_FIT, Diagnosis, Mistake, are_computed, diagnose, misfit
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.watch.recording import Recording
from idlerwatch.core.watch.wiring import CircuitPlan

LEAST_STATES: Final = 3
"""From fewer nothing is learned."""
FEW_STATES: Final = 6
"""Below this the circuit is poorly known: said, not refused."""
NARROW_SUPPLY: Final = 0.03
"""A supply that wandered less than this share of nominal shows nothing of how iron bends."""
NOT_SEPARABLE: Final = 0.7
"""A capacitor whose uncertainty shrank to no less than this share of its marking's is not separable."""
K: Final = 2.0


@dataclass(frozen=True, slots=True)
class Lesson:
    """What was learned (None: nothing that could be accepted), what is said of it, and what is wrong."""

    known: KnownCircuit | None
    findings: tuple[str, ...]
    faults: tuple[str, ...] = ()


def teach(settings: Settings, own: CircuitPlan, recording: Recording, learned_at: str) -> Lesson:
    """Learn the circuit from load states; `learned_at` is ISO 8601 UTC."""
    states = len(recording.counts)
    if states < LEAST_STATES:
        need = (
            f"{states} distinct load states were recorded, must be {LEAST_STATES} at least, better twelve: run the "
            "machines one by one and together, at different hours of the day"
        )
        return Lesson(None, (), (need,))
    ways = catalogue(own.wiring, own.expected(settings, "running"), own.unsigned)
    recorded = Recorded(recording.states, ways.positions, np.zeros(states, dtype=np.int64))
    diagnosis = diagnose(own.wiring, recorded, own.prior, own.discrepancy)
    findings = tuple(_findings(own, recording, diagnosis.learned))
    faults = tuple(_faults(own, recording, diagnosis))
    return Lesson(None if faults else _known(own, recording, diagnosis.learned, learned_at), findings, faults)


def not_separable(own: CircuitPlan, learned: Learned) -> tuple[str, ...]:
    """Return the capacitors the states tell little of beyond their marking."""
    start = own.wiring.at["can_0"] if own.cans else 0
    widths = np.sqrt(np.diag(learned.covariance))
    return tuple(
        name
        for index, name in enumerate(own.cans)
        if widths[start + index] > NOT_SEPARABLE * own.prior.standard[start + index]
    )


def _known(own: CircuitPlan, recording: Recording, learned: Learned, learned_at: str) -> KnownCircuit:
    return KnownCircuit(
        names=own.wiring.names,
        parameters=learned.parameters,
        covariance=learned.covariance,
        learned_at=learned_at,
        converter=own.converter,
        arrangement=own.arrangement,
        states=len(recording.counts),
        samples=sum(recording.counts),
        lowest_supply=recording.lowest_supply,
        highest_supply=recording.highest_supply,
        misfit=misfit(learned),
        condition=learned.condition,
        has_converged=learned.has_converged,
        not_separable=not_separable(own, learned),
    )


# --------------------------------------------------------------------------
# Sentences
# --------------------------------------------------------------------------


def _findings(own: CircuitPlan, recording: Recording, learned: Learned) -> Iterator[str]:
    states, samples = len(recording.counts), sum(recording.counts)
    yield (
        f"{states} distinct load states from {samples} steady samples, supply {recording.lowest_supply:.0f} to "
        f"{recording.highest_supply:.0f} V."
    )
    if states < FEW_STATES:
        yield "That is few: more machines, alone and together, at other supply voltages make it surer."
    if recording.highest_supply - recording.lowest_supply < NARROW_SUPPLY * own.wiring.nominal_voltage:
        yield "The supply hardly wandered: how the iron saturates was not learned, only taken from the plate."
    verdict = "fits" if misfit(learned) < POOR_FIT else "does not fit"
    yield (
        f"The circuit {verdict}: chi-square {misfit(learned):.2f} of its degrees of freedom; "
        f"condition {learned.condition:.0e}."
    )
    yield from _uncertainties(own, learned)
    lost = not_separable(own, learned)
    if lost:
        yield (
            f"Not separable: {', '.join(lost)}. From the idler's own susceptance or each other these cannot be told "
            "by running alone; a bank ammeter or a measurement of the can would."
        )


def _uncertainties(own: CircuitPlan, learned: Learned) -> Iterator[str]:
    wiring = own.wiring
    widths = K * np.sqrt(np.diag(learned.covariance))
    siemens = wiring.base
    for title, real, imaginary in (("no load, Y1", "g1", "b1"), ("negative sequence, Y2", "g2", "b2")):
        first, second = wiring.at[real], wiring.at[imaginary]
        yield (
            f"Idler {title}: {1e3 * siemens * learned.parameters[first]:.2f} ± {1e3 * siemens * widths[first]:.2f} mS, "
            f"-j {1e3 * siemens * learned.parameters[second]:.1f} ± {1e3 * siemens * widths[second]:.1f} mS."
        )
    for index, name in enumerate(own.cans):
        at = wiring.at[f"can_{index}"]
        yield f"{name}: {100 * learned.parameters[at]:+.1f} ± {100 * widths[at]:.1f} % of its marking."


def _faults(own: CircuitPlan, recording: Recording, diagnosis: Diagnosis) -> Iterator[str]:
    yield from _computed_lines(own, recording)
    if diagnosis.mistake is not None:
        yield mistake_words(own, diagnosis.mistake)
    elif not diagnosis.fits:
        yield (
            f"the circuit does not fit its own load states (chi-square {misfit(diagnosis.learned):.1f} of its "
            f"degrees of freedom, must be below {POOR_FIT}): a meter, a capacitor or the plate is not what the "
            "settings say"
        )
    elif not diagnosis.learned.has_converged:
        yield "learning did not converge: more and different load states are needed"


def _computed_lines(own: CircuitPlan, recording: Recording) -> Iterator[str]:
    """Yield the line voltages that no meter measures: they follow from those to N by 120 degrees."""
    if own.wiring.hub != 3:
        return
    for index, (first, second) in enumerate(own.wiring.lines):
        rays = recording.states.rays
        if are_computed(recording.states.lines[:, index], rays[:, first], rays[:, second]):
            yield (
                f"the voltage {own.lines[index]} is computed from 120 degrees, not measured: the meter's map must say "
                'line_voltages = "computed"'
            )


def mistake_words(own: CircuitPlan, mistake: Mistake) -> str:
    """Return a mistake of wiring in a sentence, and what to do."""
    names = [own.channels[index].meter for index in mistake.at if index < len(own.channels)]
    legs = [str(own.channels[index].through) for index in mistake.at if index < len(own.channels)]
    isolated = "isolated and locked off, never with the secondary of a current transformer open"
    match mistake.kind:
        case "reversed":
            return f"the ammeter of {names[0]} ({legs[0]}) is turned round: turn it, {isolated}"
        case "swapped":
            return (
                f"the ammeters of {names[0]} and {names[1]} are swapped ({legs[0]}, {legs[1]}): change them, {isolated}"
            )
        case "voltmeters":
            first, second = (own.order[leg] for leg in mistake.at)
            return (
                f"the voltmeters of {first} and {second} stand on each other's conductor: have them changed, isolated"
            )
        case _:
            return (
                "the leg meters stand in front of the capacitors instead of behind them: with nothing running they "
                "should read no current"
            )
