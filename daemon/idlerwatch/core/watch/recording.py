"""From recorded cycles to distinct load states: what a circuit is learned from.

A sample counts when the converter has run long enough for its banks to have closed, no machine is just starting, every
meter the circuit needs has answered, and nothing moved since the sample before. Samples of about the same load and
supply are one state: their mean, however long it lasted.
"""

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Final

import numpy as np

from idlerwatch.core.converter.circuit import Floats
from idlerwatch.core.converter.circuit import Sample as CircuitSample
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.values import CycleEnd, Input, MeterSilent, Reading
from idlerwatch.core.watch.align import begin_align, step
from idlerwatch.core.watch.circuit import STEADY, circuit_sample, is_sound
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.derive import Derived, derive
from idlerwatch.core.watch.life import LifeState, begin_life, judge_life
from idlerwatch.core.watch.wiring import CircuitPlan

SETTLES_S: Final = 5.0
"""Added to the banks' own closing times before a run counts."""
SAME_CURRENT: Final = 0.04
"""Loads nearer than this share of rated current are one state ..."""
SAME_SUPPLY: Final = 0.01
"""... where the voltages are nearer than this share of nominal."""
MOST_STATES: Final = 60
"""More add nothing; what comes after is added to the state nearest to it."""


@dataclass(frozen=True, slots=True, eq=False)
class Recording:
    """Distinct load states: each the mean of so many samples (`counts`), and the range of the supply. [V]"""

    states: CircuitSample
    counts: tuple[int, ...]
    lowest_supply: float
    highest_supply: float


@dataclass(slots=True)
class _State:
    place: Floats
    sums: list[Floats]
    count: int


def record(settings: Settings, own: CircuitPlan, given: Iterable[Input]) -> Recording:
    """Return the load states of recorded inputs."""
    states: list[_State] = []
    lowest, highest = math.inf, -math.inf
    for sample, supply in steady_samples(settings, own, given):
        lowest, highest = min(lowest, supply), max(highest, supply)
        _add(states, _place(own, sample), sample)
    parts = [[total / state.count for total in state.sums] for state in states]
    empty = [np.zeros((0, *shape)) for shape in _shapes(own)]
    columns = [np.concatenate(column) for column in zip(*parts, strict=True)] if parts else empty
    return Recording(CircuitSample(*columns), tuple(state.count for state in states), lowest, highest)


def _shapes(own: CircuitPlan) -> tuple[tuple[int, ...], ...]:
    channels = len(own.channels)
    return (3,), (channels,), (channels, 2), (len(own.ammeters),), (len(own.lines),)


def steady_samples(
    settings: Settings, own: CircuitPlan, given: Iterable[Input]
) -> Iterator[tuple[CircuitSample, float]]:
    """Yield the samples that count, and the supply's voltage. [V]"""
    plan = compile_plan(settings)
    settles = SETTLES_S + max((bank.closes_after_s + bank.within_s for bank in settings.bank), default=0.0)
    align, life, last = begin_align(plan.slow), begin_life(), np.zeros(0)
    for item in given:
        if not isinstance(item, Reading | MeterSilent | CycleEnd):
            continue
        align, sample = step(align, item)
        if sample is None:
            continue
        derived = derive(plan, sample)
        life = judge_life(plan, life, sample.at, derived)
        found = circuit_sample(own, sample, derived)
        if not _counts(life, sample.at, settles) or not is_sound(own, found) or _contradicts(settings, derived):
            last = np.zeros(0)
            continue
        place = _place(own, found)
        if len(last) and float(np.abs(place - last).max()) < STEADY:
            yield found, derived.supply.voltage.value
        last = place


def _counts(life: LifeState, at: float, settles: float) -> bool:
    return life.state == "running" and life.loading != "machine starting" and at - life.since >= settles


def _contradicts(settings: Settings, derived: Derived) -> bool:
    """Return whether a contact says that a bank is not where it belongs in running."""
    for bank in settings.bank:
        closed = derived.contacts.get(f"bank {bank.name} closed", math.nan)
        if not math.isnan(closed) and bank.closed_when != "free" and (closed > 0.5) != ("running" in bank.closed_when):
            return True
    return False


def _place(own: CircuitPlan, sample: CircuitSample) -> Floats:
    """Return where a sample stands among loads: shares of rated current, and voltages scaled to count alike."""
    wiring = own.wiring
    currents = sample.currents[0] / wiring.rated_current
    rays = sample.rays[0, list(wiring.rays)] / wiring.nominal_voltage * (SAME_CURRENT / SAME_SUPPLY)
    return np.concatenate([currents.real, currents.imag, rays])


def _add(states: list[_State], place: Floats, sample: CircuitSample) -> None:
    values = [np.asarray(getattr(sample, name)) for name in CircuitSample.__slots__]
    distances = [float(np.abs(state.place - place).max()) for state in states]
    nearest = int(np.argmin(distances)) if states else -1
    if states and (distances[nearest] < SAME_CURRENT or len(states) >= MOST_STATES):
        state = states[nearest]
        state.sums = [total + value for total, value in zip(state.sums, values, strict=True)]
        state.count += 1
    else:
        states.append(_State(place, values, 1))
