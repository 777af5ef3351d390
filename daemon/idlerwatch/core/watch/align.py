"""First step: all meters' readings brought to one instant, exactly one sample a cycle.

The sample's instant is the earliest of the meters' latest readings; every other meter is interpolated to it between
its last two readings, for in a transient the skew between meters would pass for unbalance. Voltages, currents, powers
and frequencies are interpolated; what is no continuous quantity (discrete inputs, power factors) takes the value in
force at the instant; slow quantities (energies) are the last read.

What must hold:

* a meter that was given up in this cycle is missing, never stale; one that was not heard of at all counts as given up;
* the first reading after a silence is not interpolated with the one before it;
* where no meter answered the instant is the cycle's end, so that timers run;
* instants never run backwards, and the wall clock plays no part in them;
* what the settings do not know is ignored; of two readings of one meter in one cycle the later counts.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Final

from idlerwatch.core.settings.model import Settings
from idlerwatch.core.values import CycleEnd, FigureKey, Input, MeterSilent, Reading, Sample
from idlerwatch.core.watch.compile import compile_plan

CONTINUOUS: Final = frozenset({"voltage", "current", "active_power", "reactive_power", "apparent_power", "frequency"})


@dataclass(frozen=True, slots=True)
class AlignState:
    """The readings of the cycle before, those of this cycle so far, and slow quantities last read.

    `slow_keys` maps each known meter to the keys of its slow quantities.
    """

    slow_keys: Mapping[str, frozenset[FigureKey]]
    before: Mapping[str, Reading]
    now: Mapping[str, Reading | MeterSilent]
    slow: Mapping[str, Mapping[FigureKey, float]]
    last_at: float = -math.inf


def begin(settings: Settings) -> AlignState:
    """Return the state before the first cycle."""
    return begin_align(compile_plan(settings).slow)


def begin_align(slow_keys: Mapping[str, frozenset[FigureKey]]) -> AlignState:
    """Return the state before the first cycle for these meters."""
    return AlignState(slow_keys=slow_keys, before={}, now={}, slow={})


def step(state: AlignState, event: Input) -> tuple[AlignState, Sample | None]:
    """Take one input; a sample comes out at each end of a cycle and at nothing else."""
    match event:
        case Reading() | MeterSilent():
            return _note(state, event), None
        case CycleEnd():
            return _close(state, event)
        case _:
            return state, None


def _note(state: AlignState, event: Reading | MeterSilent) -> AlignState:
    if event.meter not in state.slow_keys or not math.isfinite(event.at):
        return state
    noted = _usable(event) if isinstance(event, Reading) else event
    return AlignState(state.slow_keys, state.before, {**state.now, event.meter: noted}, state.slow, state.last_at)


def _usable(reading: Reading) -> Reading:
    """Return the reading with what is no number (an infinite float among the registers) as missing."""
    if not any(map(math.isinf, reading.values.values())):
        return reading
    values = {key: math.nan if math.isinf(value) else value for key, value in reading.values.items()}
    return replace(reading, values=values)


def _close(state: AlignState, end: CycleEnd) -> tuple[AlignState, Sample]:
    readings = {name: event for name, event in state.now.items() if isinstance(event, Reading)}
    at = max(min((reading.at for reading in readings.values()), default=_finite(end.at)), state.last_at)
    slow = {name: _slow(state, reading) for name, reading in readings.items()}
    sample = Sample(
        at=at,
        utc=at + _finite(end.utc_offset),
        local_offset=_finite(end.local_offset),
        values={name: _at(at, state.before.get(name), reading, slow[name]) for name, reading in readings.items()},
        missing={name: _reason(state.now.get(name)) for name in state.slow_keys if name not in readings},
    )
    return replace(state, before=readings, now={}, slow=slow, last_at=at), sample


def _finite(value: float) -> float:
    return value if math.isfinite(value) else 0.0


def _reason(event: Reading | MeterSilent | None) -> str:
    return event.reason if isinstance(event, MeterSilent) else "no answer"


def _slow(state: AlignState, reading: Reading) -> Mapping[FigureKey, float]:
    """Return the slow quantities last read, up to and with this reading."""
    keys = state.slow_keys[reading.meter]
    fresh = {key: value for key, value in reading.values.items() if key in keys}
    kept = state.slow.get(reading.meter, {})
    return {**kept, **fresh} if fresh else kept


def _at(
    at: float, before: Reading | None, reading: Reading, slow: Mapping[FigureKey, float]
) -> Mapping[FigureKey, float]:
    """Return a meter's values at an instant between its last two readings."""
    if before is None or at >= reading.at or before.at >= reading.at:
        return {**reading.values, **slow}
    share = max(0.0, (at - before.at) / (reading.at - before.at))
    values = {
        key: _between(key[1], share, before.values.get(key, math.nan), value) for key, value in reading.values.items()
    }
    return {**values, **slow}


def _between(quantity: str, share: float, old: float, new: float) -> float:
    """Return the value at `share` of the way; a missing new value stays missing, a missing old one is passed over."""
    if math.isnan(old) or math.isnan(new):
        return new
    return old + (new - old) * share if quantity in CONTINUOUS else old
