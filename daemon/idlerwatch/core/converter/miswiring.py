"""Which mistake of wiring explains what does not fit: the circuit is learned again under each, and the best is named.

A circuit learned from wrongly wired meters does not fit its own load states: chi-square says so. Each usual mistake is
a change of the samples or of the wiring that undoes it. One is named when undoing it makes states fit that did not, and
far better than any other does; otherwise nothing is named, and the misfit alone is told.

* an ammeter turned round: its current has the other sign;
* two ammeters swapped: each current belongs to the other voltage (relative to its own it was told);
* a voltmeter on the wrong conductor: it stands across another pair, and its power is relative to that;
* meters in front of the capacitors instead of behind: what they read contains the capacitors' currents;
* line voltages computed from 120 degrees instead of measured (`are_computed`).
"""

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from idlerwatch.core.converter.circuit import Floats, Positions, Wiring
from idlerwatch.core.converter.learn import Learned, Prior, Recorded, learn

POOR_FIT: Final = 1.3
"""Chi-square over its degrees of freedom from which a circuit does not fit its states: a sound one has 0.3 to 1.1."""
FAR_BETTER: Final = 2.0
"""By how much less chi-square the named mistake must leave than every other, and than none."""
COMPUTED: Final = 0.001
"""A line voltage that follows this closely from two to neutral, at 120 degrees, in every state is no measurement."""


@dataclass(frozen=True, slots=True)
class Mistake:
    """One mistake: what kind, at which current channels (by number) or legs."""

    kind: str
    at: tuple[int, ...] = ()


@dataclass(frozen=True, slots=True)
class Diagnosis:
    """What the states say: the circuit as wired, whether it fits, and the mistake that explains why not."""

    learned: Learned
    fits: bool
    mistake: Mistake | None = None


def diagnose(wiring: Wiring, recorded: Recorded, prior: Prior, discrepancy: Floats) -> Diagnosis:
    """Learn the circuit; where it does not fit, try every usual mistake of wiring.

    Parameters
    ----------
    recorded
        Load states, of which some at least have machines running: without current an ammeter's sign cannot be seen.
    """
    plain = learn(wiring, recorded, prior, discrepancy)
    if misfit(plain) < POOR_FIT:
        return Diagnosis(plain, fits=True)
    tried = [
        (misfit(learn(other, undone, prior, discrepancy)), mistake)
        for mistake, other, undone in _undone(wiring, recorded)
    ]
    tried.sort(key=lambda entry: entry[0])
    if not tried or tried[0][0] * FAR_BETTER > misfit(plain):
        return Diagnosis(plain, fits=False)
    if len(tried) > 1 and tried[0][0] * math.sqrt(FAR_BETTER) > tried[1][0]:
        return Diagnosis(plain, fits=False)
    return Diagnosis(plain, fits=False, mistake=tried[0][1])


def misfit(learned: Learned) -> float:
    """Return chi-square over its degrees of freedom."""
    return learned.chi_square / max(learned.degrees_of_freedom, 1)


def _undone(wiring: Wiring, recorded: Recorded) -> Iterator[tuple[Mistake, Wiring, Recorded]]:
    sample = recorded.sample
    for channel in range(len(wiring.channels)):
        currents = sample.currents.copy()
        currents[:, channel] *= -1.0
        yield Mistake("reversed", (channel,)), wiring, replace(recorded, sample=replace(sample, currents=currents))
    legs = len(wiring.generated) + len(wiring.outgoing)
    for first in range(legs):
        for second in range(first + 1, legs):
            yield Mistake("swapped", (first, second)), wiring, _swapped(wiring, recorded, first, second)
    for first, second in _ray_pairs(wiring):
        yield Mistake("voltmeters", (first, second)), *_exchanged(wiring, recorded, first, second)
    positions = recorded.positions
    without = Positions(
        np.zeros_like(positions.matrices),
        np.zeros_like(positions.shares),
        positions.bank_matrices,
        positions.loose,
        positions.mirrored,
        positions.signs,
    )
    yield Mistake("in front"), wiring, replace(recorded, positions=without)


def _swapped(wiring: Wiring, recorded: Recorded, first: int, second: int) -> Recorded:
    """Return the states with two ammeters exchanged: each told its current relative to the other's voltage.

    A meter multiplies its own voltage with the other's current; relative to the voltage the current belongs to, it
    turns by the angle between the two, which is nominal but for a few degrees.
    """
    sample = recorded.sample
    currents = sample.currents.copy()
    turn = _angle(wiring, first) - _angle(wiring, second)
    currents[:, first] = sample.currents[:, second] * np.exp(-1j * turn)
    currents[:, second] = sample.currents[:, first] * np.exp(1j * turn)
    return replace(recorded, sample=replace(sample, currents=currents))


def _angle(wiring: Wiring, channel: int) -> float:
    """Return the nominal angle of a channel's reference voltage. [rad]"""
    ends = wiring.channels[channel].across
    points = [_nominal(wiring, end) for end in ends]
    return float(np.angle(points[0] - points[1]))


def _nominal(wiring: Wiring, conductor: int) -> complex:
    if conductor > 2 or conductor == wiring.hub:
        return 0j
    return complex(np.exp(1j * wiring.directions[conductor]))


def _ray_pairs(wiring: Wiring) -> Sequence[tuple[int, int]]:
    """Return the pairs of legs whose voltmeters to the hub may have been exchanged."""
    rays = wiring.rays
    return [(one, other) for place, one in enumerate(rays) for other in rays[place + 1 :]]


def _exchanged(wiring: Wiring, recorded: Recorded, first: int, second: int) -> tuple[Wiring, Recorded]:
    """Return wiring and states with the voltmeters of two legs each on the other leg."""
    sample = recorded.sample
    rays = sample.rays.copy()
    rays[:, [first, second]] = rays[:, [second, first]]
    other = {first: second, second: first}
    turned = sample.currents.copy()
    for number, channel in enumerate(wiring.channels):
        if channel.leg in other and channel.across == (channel.leg, wiring.hub):
            # its power was told with the other leg's voltage
            angle = np.angle(_nominal(wiring, other[channel.leg])) - np.angle(_nominal(wiring, channel.leg))
            turned[:, number] = sample.currents[:, number] * np.exp(1j * angle)
    return wiring, replace(recorded, sample=replace(sample, rays=rays, currents=turned))


def are_computed(lines: Floats, first: Floats, second: Floats) -> bool:
    """Return whether line voltages follow from two leg voltages by 120 degrees in every state: nobody measured them.

    Parameters
    ----------
    lines, first, second : (states,)
        The voltage between two legs, and those of the legs to neutral. [V]

    Examples
    --------
    >>> legs = np.array([[230.0, 231.0], [229.0, 224.0], [228.0, 215.0]])
    >>> computed = np.sqrt((legs**2).sum(axis=1) + legs.prod(axis=1))
    >>> are_computed(computed, legs[:, 0], legs[:, 1]), are_computed(computed * [1.0, 1.004, 0.99], *legs.T)
    (True, False)
    """
    expected = np.sqrt(first**2 + second**2 + first * second)
    known = ~np.isnan(expected + lines)
    return bool(known.any() and (np.abs(lines[known] / expected[known] - 1.0) < COMPUTED).all())
