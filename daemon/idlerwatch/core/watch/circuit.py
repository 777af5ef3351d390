"""Between life and assessment: the converter as a circuit, sample by sample.

While the converter runs and no machine is just starting, each sample is put into the balance of currents under every
hypothesis at once. Out of it come

* the angles between the legs where only magnitudes to neutral are measured (*recovered*), and with them the true
  unbalance factor, sequence voltages and voltages between legs, with uncertainty;
* the position of every bank, lost capacitors and the idler's sense of rotation, each with its probability, once the
  evidence suffices, else undecided;
* how far the generated legs are off what the circuit would make of this load (*usual*);
* what each capacitor still has of its marking, over weeks.

With an accepted, learned circuit all of these; with plate values the same with their honestly wide uncertainty, and
nothing that compares with a normal.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Final, NamedTuple

import numpy as np

from idlerwatch.core.conductors import CONDUCTORS, Conductor, Leg
from idlerwatch.core.converter.belief import SURE, Belief, begin_belief, believe, probabilities, probability_of
from idlerwatch.core.converter.circuit import Complexes, Floats, Positions
from idlerwatch.core.converter.circuit import Sample as CircuitSample
from idlerwatch.core.converter.hypotheses import PART, Catalogue, Hypothesis, catalogue
from idlerwatch.core.converter.known import KnownCircuit
from idlerwatch.core.converter.recover import QUANTITIES, Circuit, Recoverer, Recovery, take
from idlerwatch.core.converter.track import SEPARABLE, Tracking, begin_tracking, track
from idlerwatch.core.converter.usual import UsualLegs
from idlerwatch.core.electrical.sequence import sequence_components
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.values import Sample
from idlerwatch.core.watch.channel import MISSING, Measured, power_of
from idlerwatch.core.watch.derive import Derived
from idlerwatch.core.watch.estimate import Estimate, Told
from idlerwatch.core.watch.life import LifeState
from idlerwatch.core.watch.plan import Plan
from idlerwatch.core.watch.wiring import CircuitPlan, circuit_plan

UNKNOWN_SPREAD: Final = 1e4
"""Standard deviation of a part of a current that is not measured. [A]"""
UNSIGNED_SPREAD: Final = 0.03
"""Of apparent power: what distortion adds to a reactive power that was computed from it (common practice)."""
DRIVE_SPREAD: Final = 0.1
"""Of a drive's current: how far it is from a linear load's (common practice)."""
LEAST_ANGLE: Final = math.radians(1.5)
"""Angles known no better than this (standard uncertainty) are not seen."""
LEAST_RAY, MOST_VOLTS, MOST_AMPERES = 0.2, 4.0, 20.0
"""Ratios to nominal voltage and rated current beyond which a reading is none of a running converter."""
LEAST_HEIGHT: Final = 0.3
"""Generated legs below this ratio of nominal are no running converter's."""
NONE_FITS: Final = 40.0
"""Chi-square beyond which "none of the hypotheses" is likelier than the best: a true one leaves about as many as there
are equations."""
NONE_WEIGHT: Final = 0.3
FEWEST_SAMPLES: Final = 3
CONTACT_ERROR: Final = 0.01
"""How often an auxiliary contact says what is not so (common practice, no source)."""
COIL_ERROR: Final = 0.03
"""How often a bank does not follow its energised coil (common practice, no source)."""
TRACKED_EVERY_S: Final = 60.0
TRACKED_STEP: Final = 0.03
"""A load state is new for the capacitors when currents have changed by this share of rated current, or the supply by
a third of it."""
STEADY: Final = 0.01
"""A load is steady when currents changed by less than this share of rated current since the sample before."""


@dataclass(frozen=True, slots=True, eq=False)
class Judge:
    """What judges a converter's samples: compiled once from settings and circuit."""

    plan: CircuitPlan
    circuit: Circuit
    is_learned: bool
    catalogue: Catalogue
    recoverer: Recoverer
    expected: Positions
    alone: Recoverer
    usual: UsualLegs
    contacts: Mapping[str, Floats]
    weights: Floats
    remark: str = ""


class CircuitState(NamedTuple):
    """What is remembered from sample to sample; the belief begins anew with each run of the converter.

    `runs_forwards` is set once that is decided: an idler does not turn round while it runs. `tracked` and `last` are
    the load at the last state taken for the capacitors and at the last sample.
    """

    belief: Belief
    running_since: float = math.nan
    runs_forwards: bool = False
    tracking: Tracking | None = None
    tracked_at: float = -math.inf
    tracked: Floats = np.zeros(0)
    last: Floats = np.zeros(0)


class BankPosition(NamedTuple):
    """A bank's position: 1 closed, 0 open, 0.5 partly in, NaN undecided; and the probability of the likeliest."""

    position: float
    probability: float


class Found(NamedTuple):
    """What the circuit says of one sample; empty where there is none or the converter does not run."""

    is_recovered: bool = False
    is_learned: bool = False
    voltages: Mapping[str, Measured] = MappingProxyType({})
    components: tuple[Measured, Measured, Measured] = (MISSING, MISSING, MISSING)
    unbalance_factor: Measured = MISSING
    points: Mapping[Conductor, complex] | None = None
    banks: Mapping[str, BankPosition] = MappingProxyType({})
    lost: Mapping[str, float] = MappingProxyType({})
    ratios: Mapping[str, Measured] = MappingProxyType({})
    backwards: float = math.nan
    misfit: float = math.nan
    usual: Mapping[str, float] = MappingProxyType({})
    usual_factor: float = math.nan
    off_normal: float = math.nan
    remarks: tuple[str, ...] = ()


NOTHING: Final = Found()
NOT_LEARNED: Final = "no circuit was learned and accepted yet: the plate's values serve, with wide uncertainty"


# --------------------------------------------------------------------------
# Compiling
# --------------------------------------------------------------------------


def compile_judge(
    settings: Settings, plan: Plan, known: KnownCircuit | None, remark: str = NOT_LEARNED
) -> Judge | None:
    """Return what judges this converter; None where its meters do not show it as a circuit.

    `remark` says why there is no learned circuit; one that does not belong here is refused with its own sentence.
    """
    own = circuit_plan(settings, plan)
    if own is None:
        return None
    remark = remark if known is None else refusal(own, known)
    is_learned = known is not None and not remark
    parameters, covariance = own.prior.mean, np.diag(own.prior.standard**2)
    if known is not None and is_learned:
        parameters, covariance = known.parameters, known.covariance
    circuit = Circuit(parameters, covariance, own.noise, own.discrepancy)
    ways = catalogue(own.wiring, own.expected(settings, "running"), own.unsigned)
    first = Positions(*(getattr(ways.positions, name)[:1] for name in Positions.__slots__))
    return Judge(
        plan=own,
        circuit=circuit,
        is_learned=is_learned,
        catalogue=ways,
        recoverer=Recoverer(own.wiring, ways.positions, circuit),
        expected=first,
        alone=Recoverer(own.wiring, first, circuit),
        usual=UsualLegs(own.wiring, first, circuit.parameters),
        contacts=_contacts(settings, own, ways),
        weights=ways.weights,
        remark=remark,
    )


def refusal(own: CircuitPlan, known: KnownCircuit) -> str:
    """Return why a learned circuit does not serve this converter, in a sentence; empty where it does."""
    if known.converter != own.converter:
        return "the learned circuit is another converter's: the plate's values serve until it is learned again"
    if known.arrangement != own.arrangement or known.names != own.wiring.names:
        return (
            "the learned circuit is stale, capacitors or meters have changed since "
            f"{known.learned_at[:10]}: the plate's values serve until it is learned again"
        )
    return ""


def begin_circuit(judge: Judge | None) -> CircuitState:
    """Return the state before the first sample."""
    if judge is None:
        return CircuitState(begin_belief(1))
    return CircuitState(begin_belief(len(judge.weights) + 1), tracking=begin_tracking(judge.plan.wiring))


def _contacts(settings: Settings, own: CircuitPlan, ways: Catalogue) -> Mapping[str, Floats]:
    """Return for each contact that tells of a bank the log-likelihood of "closed" under each hypothesis: (h,)."""
    told: dict[str, Floats] = {}
    for contact in settings.contact:
        kind, name, _ = contact.means.split() if contact.means.count(" ") == 2 else ("", "", "")
        if name not in own.banks:
            continue
        error = CONTACT_ERROR if kind == "bank" else COIL_ERROR
        closed = np.array([way.closed[own.banks.index(name)] for way in ways.hypotheses])
        told[contact.means] = np.log(np.clip(closed, error, 1.0 - error)) - np.log(
            np.clip(1.0 - closed, error, 1.0 - error)
        )
    return told


# --------------------------------------------------------------------------
# One sample
# --------------------------------------------------------------------------


def circuit_sample(own: CircuitPlan, sample: Sample, derived: Derived) -> CircuitSample:
    """Return one sample as the circuit's equations take it; NaN where a voltage is missing."""
    count = len(own.channels)
    rays = np.zeros((1, 3))
    for number, pair in enumerate(own.rays):
        if pair:
            rays[0, number] = derived.voltages.get(pair, MISSING).value
    currents = np.zeros((1, count), dtype=np.complex128)
    spreads = np.zeros((1, count, 2))
    for index in range(count):
        currents[0, index], spreads[0, index] = _current(own, sample, index)
    ammeters = [power_of(sample, channel).current.value for channel in own.ammeters]
    lines = [derived.voltages.get(pair, MISSING).value for pair in own.lines]
    return CircuitSample(rays, currents, spreads, np.array([ammeters]).reshape(1, -1), np.array([lines]).reshape(1, -1))


def _current(own: CircuitPlan, sample: Sample, index: int) -> tuple[complex, tuple[float, float]]:
    """Return a channel's current relative to its voltage, and what its parts are uncertain by besides. [A]"""
    channel = own.channels[index]
    power = power_of(sample, channel)
    voltage, active, apparent = power.voltage.value, power.active.value, power.apparent.value
    if not voltage > 0.0 or math.isnan(active):
        return 0j, (UNKNOWN_SPREAD, UNKNOWN_SPREAD)
    drive = DRIVE_SPREAD * min(own.drive_current, apparent / voltage) if own.drive_current else 0.0
    if power.reactive.is_known:
        return complex(active, -power.reactive.value) / voltage, (drive, drive)
    if math.isnan(apparent):
        return complex(active / voltage, 0.0), (drive, UNKNOWN_SPREAD)
    reactive = math.sqrt(max(apparent * apparent - active * active, 0.0))
    spread = math.hypot(drive, UNSIGNED_SPREAD * apparent / voltage)
    return complex(active, -reactive) / voltage, (drive, spread)


def judge_circuit(
    judge: Judge | None, state: CircuitState, sample: Sample, derived: Derived, life: LifeState
) -> tuple[CircuitState, Found]:
    """Return what the circuit says of one sample, and the state after it."""
    if judge is None or life.state != "running":
        return state._replace(running_since=math.nan), NOTHING
    if life.since != state.running_since:
        fresh = begin_belief(len(judge.weights) + 1)
        state = state._replace(belief=fresh, running_since=life.since, runs_forwards=False)
    given = circuit_sample(judge.plan, sample, derived)
    if not is_sound(judge.plan, given) or not derived.generated >= LEAST_HEIGHT or life.loading == "machine starting":
        return state, NOTHING._replace(remarks=_always(judge))
    recovery = judge.recoverer.recover(given)
    state = _believed(judge, state, _evidence(judge, recovery, derived))
    state = _tracked(judge, state, given, sample.at)
    return state, _found(judge, state, given, recovery)


def _evidence(judge: Judge, recovery: Recovery, derived: Derived) -> Floats:
    """Return the sample's log-likelihood under each hypothesis, and last under none of them: (h + 1,).

    A fault nobody thought of fits none; the least bad of them must not be taken for it.
    """
    told = recovery.log_likelihood[0]
    otherwise = told[0] + 0.5 * (recovery.chi_square[0, 0] - NONE_FITS)
    return np.append(told + _told_by_contacts(judge, derived), otherwise)


def _believed(judge: Judge, state: CircuitState, evidence: Floats) -> CircuitState:
    belief = believe(state.belief, evidence)
    state = state._replace(belief=belief)
    if belief.samples < FEWEST_SAMPLES or state.runs_forwards:
        return state
    shares = _shares(judge, state)
    backwards = probability_of(lambda number: judge.catalogue.hypotheses[number].mirrored, shares)
    return state._replace(runs_forwards=backwards + 1.0 - float(shares.sum()) < 1.0 - SURE)


def _shares(judge: Judge, state: CircuitState) -> Floats:
    """Return the probability of each hypothesis (h,); what is left to one is that none of them holds."""
    weights = np.append(judge.weights, NONE_WEIGHT)
    if state.runs_forwards:
        weights[:-1][judge.catalogue.positions.mirrored] = 0.0
    return probabilities(state.belief, weights)[:-1]


def is_sound(own: CircuitPlan, given: CircuitSample) -> bool:
    """Return whether a sample can be a running converter's: every voltage and current there, none absurd."""
    wiring = own.wiring
    rays = given.rays[0, list(wiring.rays)] / wiring.nominal_voltage
    amperes = (*map(abs, given.currents[0].tolist()), *given.ammeters[0].tolist())
    volts = given.lines[0].tolist()
    return (
        all(LEAST_RAY < ray < MOST_VOLTS for ray in rays.tolist())
        and not any(value > MOST_AMPERES * wiring.rated_current for value in amperes)
        and not any(value > MOST_VOLTS * wiring.nominal_voltage for value in volts)
    )


def _told_by_contacts(judge: Judge, derived: Derived) -> Floats | float:
    return sum(
        (likelihood * (2.0 * derived.contacts[means] - 1.0) / 2.0)
        for means, likelihood in judge.contacts.items()
        if not math.isnan(derived.contacts.get(means, math.nan))
    )


def _tracked(judge: Judge, state: CircuitState, given: CircuitSample, at: float) -> CircuitState:
    """Take a new, steady load state for the capacitors' tracking, with a learned circuit in its expected position."""
    rated = judge.plan.wiring.rated_current
    now = np.concatenate(
        [
            given.currents[0].real / rated,
            given.currents[0].imag / rated,
            given.rays[0] / judge.plan.wiring.nominal_voltage * 3.0,
        ]
    )
    is_steady = len(state.last) == len(now) and float(np.abs(now - state.last).max()) < STEADY
    state = state._replace(last=now)
    is_new = len(state.tracked) != len(now) or float(np.abs(now - state.tracked).max()) > TRACKED_STEP
    is_due = at - state.tracked_at >= TRACKED_EVERY_S
    if not (judge.is_learned and is_steady and is_new and is_due) or state.tracking is None:
        return state
    if _shares(judge, state)[0] < SURE:
        return state
    elapsed = min(at - state.tracked_at, 30.0 * 86400.0) if math.isfinite(state.tracked_at) else 0.0
    after = track(state.tracking, judge.plan.wiring, judge.expected, given, judge.circuit, elapsed=elapsed)
    return state._replace(tracking=after, tracked_at=at, tracked=now)


# --------------------------------------------------------------------------
# What is found
# --------------------------------------------------------------------------


def _found(judge: Judge, state: CircuitState, given: CircuitSample, recovery: Recovery) -> Found:
    shares = _shares(judge, state)
    best = int(recovery.likeliest[0])
    is_recovered = bool(np.sqrt(np.diagonal(recovery.angle_covariance[0, best])).max() < LEAST_ANGLE)
    found = Found(
        is_learned=judge.is_learned,
        banks=_banks(judge, shares),
        lost=_lost(judge, shares),
        backwards=probability_of(lambda number: judge.catalogue.hypotheses[number].mirrored, shares),
        misfit=float(recovery.chi_square[0, best]) / judge.plan.wiring.rows,
        ratios=_ratios(judge, state),
        remarks=(*_always(judge), *_misfits(judge, given, recovery, best), *_undecided(judge, shares)),
    )
    if is_recovered:
        found = _with_angles(judge, found, recovery, best)
    return _with_usual(judge, found, given, recovery.angles[:, 0]) if judge.is_learned else found


def _with_angles(judge: Judge, found: Found, recovery: Recovery, best: int) -> Found:
    """Return what follows from the recovered angles."""
    values = {
        name: Measured(float(value), float(standard))
        for name, value, standard in zip(QUANTITIES, recovery.quantities[0], recovery.standards[0], strict=True)
    }
    order = judge.plan.order
    voltages = {_pair(order[index], order[(index + 1) % 3]): values[f"line_{index}"] for index in range(3)}
    zero = values["zero"] if judge.plan.wiring.tied else MISSING
    return found._replace(
        is_recovered=True,
        voltages=voltages,
        components=(zero, values["positive"], values["negative"]),
        unbalance_factor=values["factor"],
        points=_points(judge, recovery.potentials[0, best]),
    )


def _pair(first: Leg, second: Leg) -> str:
    return f"{first}-{second}" if f"{first}-{second}" in ("L1-L2", "L2-L3", "L3-L1") else f"{second}-{first}"


def _points(judge: Judge, potentials: Complexes) -> Mapping[Conductor, complex]:
    points: dict[Conductor, complex] = {
        leg: complex(point) for leg, point in zip(judge.plan.order, potentials.tolist(), strict=True)
    }
    if judge.plan.wiring.hub == len(judge.plan.order):
        points[CONDUCTORS[3]] = 0j
    return points


def _banks(judge: Judge, shares: Floats) -> Mapping[str, BankPosition]:
    """Return each bank's position, where one is likelier than `SURE`, and the probability of the likeliest."""
    found: dict[str, BankPosition] = {}
    ways = judge.catalogue.hypotheses
    for index, name in enumerate(judge.plan.banks):
        chances = {
            position: math.fsum(
                share for way, share in zip(ways, shares.tolist(), strict=True) if way.closed[index] == position
            )
            for position in (1.0, 0.0, PART)
        }
        likeliest = max(chances, key=chances.__getitem__)
        sure = chances[likeliest] > SURE
        found[name] = BankPosition(likeliest if sure else math.nan, chances[likeliest])
    return found


def _lost(judge: Judge, shares: Floats) -> Mapping[str, float]:
    """Return for each capacitor the probability that it is lost, or one pole of its contactor open."""
    ways, cans = judge.catalogue.hypotheses, judge.plan.wiring.cans

    def is_out(number: int, can: int) -> bool:
        way = ways[number]
        if way.pole is not None:
            bank, conductor = way.pole
            return cans[can].bank == bank and conductor in cans[can].ends
        return way.lost == can

    return {
        name: probability_of(lambda number, can=index: is_out(number, can), shares)  # type: ignore[misc]
        for index, name in enumerate(judge.plan.cans)
    }


def _ratios(judge: Judge, state: CircuitState) -> Mapping[str, Measured]:
    """Return what each capacitor has of its marking, where that is known apart from the others."""
    if not judge.is_learned or state.tracking is None or state.tracking.states == 0:
        return {}
    wiring = judge.plan.wiring
    start = wiring.at["can_0"] if wiring.cans else 0
    told: dict[str, Measured] = {}
    for index, name in enumerate(judge.plan.cans):
        change, standard = float(state.tracking.change[index]), float(state.tracking.standards[index])
        if standard < SEPARABLE:
            learned = float(judge.circuit.parameters[start + index])
            told[name] = Measured(1.0 + change / (1.0 + learned), standard)
    return told


def _with_usual(judge: Judge, found: Found, given: CircuitSample, angles: Floats) -> Found:
    """Return with what the generated legs would read in the expected position at this load."""
    wiring, order = judge.plan.wiring, judge.plan.order
    potentials = judge.usual.potentials(given, angles)[0]
    generated = [channel.leg for channel in wiring.generated]
    usual = {order[leg]: float(abs(potentials[leg])) for leg in generated}
    start = wiring.at[f"ray_{wiring.rays[0]}"]
    gains = {leg: float(judge.circuit.parameters[start + place]) for place, leg in enumerate(wiring.rays)}
    off = [float(given.rays[0, leg]) * (1.0 - gains[leg]) / usual[order[leg]] - 1.0 for leg in generated]
    components = np.abs(sequence_components(potentials))
    return found._replace(
        usual={judge.plan.rays[leg]: usual[order[leg]] for leg in generated},
        usual_factor=float(components[2] / components[1]),
        off_normal=max(off, key=abs),
    )


def with_recovered(seen: Estimate, found: Found) -> Estimate:
    """Return what geometry makes of a sample, with what the circuit recovers where geometry saw no angles."""
    if not found.is_recovered or seen.angles != "not seen" or seen.contradicted:
        return seen
    lines: dict[str, Told] = {
        pair: (measured, "recovered")
        for pair, measured in found.voltages.items()
        if not seen.voltages[pair][0].is_known
    }
    return replace(
        seen,
        angles="recovered",
        known="recovered",
        voltages={**seen.voltages, **lines},
        components=found.components,
        unbalance_factor=found.unbalance_factor,
        points=found.points,
    )


# --------------------------------------------------------------------------
# Remarks
# --------------------------------------------------------------------------

BELIEVED_MISFIT: Final = 4.0
"""Chi-square over the rows from which on the circuit is said not to explain a sample."""
FAR_BETTER: Final = 3.0
"""A measurement is named alone where without any other this many times the chi-square is left."""


def _always(judge: Judge) -> tuple[str, ...]:
    return (judge.remark,) if judge.remark else ()


def _misfits(judge: Judge, given: CircuitSample, recovery: Recovery, best: int) -> tuple[str, ...]:
    """Name the measurement without which the circuit would hold, where nothing explains the sample."""
    if not float(recovery.chi_square[0, best]) / judge.plan.wiring.rows > BELIEVED_MISFIT:
        return ()
    names, left = _without_each(judge, given)
    order = np.argsort(left)
    first = names[int(order[0])]
    if len(names) > 1 and left[order[1]] < FAR_BETTER * left[order[0]]:
        others = [names[int(index)] for index in order if left[index] < FAR_BETTER * left[order[0]]]
        return (f"the circuit does not explain this sample; one of {', '.join(others)} may be wrong",)
    return (f"the circuit does not explain this sample; {first} fits worst",)


def _without_each(judge: Judge, given: CircuitSample) -> tuple[tuple[str, ...], Floats]:
    """Return what is measured, and the chi-square that is left in the expected position without each of them."""
    own, count = judge.plan, len(judge.plan.channels)
    names = [f"{channel.meter}'s power of {channel.through}" for channel in own.channels]
    names += [f"{channel.meter}'s current" for channel in own.ammeters] + [f"the voltage {pair}" for pair in own.lines]
    every = take(given, np.zeros(len(names), dtype=np.int64))
    spreads, ammeters, lines = every.spreads.copy(), every.ammeters.copy(), every.lines.copy()
    for index in range(count):
        spreads[index, index] = UNKNOWN_SPREAD
    for index in range(len(own.ammeters)):
        ammeters[count + index, index] = math.nan
    for index in range(len(own.lines)):
        lines[count + len(own.ammeters) + index, index] = math.nan
    left = judge.alone.recover(replace(every, spreads=spreads, ammeters=ammeters, lines=lines)).chi_square[:, 0]
    return tuple(names), left


def _undecided(judge: Judge, shares: Floats) -> tuple[str, ...]:
    """Say what is not decided, and what cannot be told from what is."""
    best = int(np.argmax(shares))
    if shares[best] <= SURE or best == 0:
        return ()
    others = judge.catalogue.alike[best]
    if not others:
        return ()
    names = " or ".join(dict.fromkeys(way_name(judge.plan, way) for way in (judge.catalogue.hypotheses[best], *others)))
    return (f"what is found may be {names}: these cannot be told apart",)


def way_name(own: CircuitPlan, way: Hypothesis) -> str:
    """Return a hypothesis in words."""
    if way.lost is not None:
        return f"{own.cans[way.lost]} lost"
    if way.pole is not None:
        bank, conductor = way.pole
        return f"{own.banks[bank]}'s pole at {(*own.order, 'N')[conductor]} open"
    if way.mirrored:
        return "the idler running backwards"
    if way.flipped is not None:
        return f"{own.channels[way.flipped].meter}'s reactive power with the other sign"
    states = {1.0: "closed", 0.0: "open", PART: "partly in"}
    return ", ".join(f"{name} {states[share]}" for name, share in zip(own.banks, way.closed, strict=True))
