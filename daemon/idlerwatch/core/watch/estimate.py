"""Third step: phasors from magnitudes, where enough distances between the conductors are measured.

Every voltage is a distance between two conductors in the complex plane; the conductor map finds the points. All that
follows from them (sequence components, unbalance, voltages nobody measured, neutral to earth) is computed once from the
points and once more for each voltmeter, with the points where they stand when its reading is moved by its standard
uncertainty: the correlations of the results are then right by construction.

* Three line voltages, or five different pairs, show the angles: they are *measured*. Magnitudes to neutral alone do
  not, and then there is no unbalance factor and no line voltage: unknown, never normal.
* Where the distances contradict each other beyond their uncertainty, the rest without each of them is tried. If one
  alone explains it, that voltmeter is named and left out. If several do, with too little to spare to say which, all are
  named, and what is told is told with that; a gross contradiction, or one that nothing explains, tells nothing.
* While the supply is gone, or the generated legs carry no voltage, there is nothing to map.
"""

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Final, Literal

import numpy as np
import numpy.typing as npt

from idlerwatch.core.conductors import CONDUCTORS, EARTH_PAIRS, LEGS, LINE_PAIRS, NEUTRAL_PAIRS, Conductor, Pair
from idlerwatch.core.converter.conductor_map import fit_conductors
from idlerwatch.core.electrical.sequence import sequence_components
from idlerwatch.core.electrical.uncertainty import CHI_SQUARE_999
from idlerwatch.core.values import Known
from idlerwatch.core.watch.channel import MISSING, Measured
from idlerwatch.core.watch.derive import Derived
from idlerwatch.core.watch.plan import Plan

Floats = npt.NDArray[np.float64]
Complexes = npt.NDArray[np.complex128]
Told = tuple[Measured, Known]

NOT_TOLD: Final[Told] = (MISSING, "not measured")
STANDING_STILL: Final = 0.2
"""Below this height of the generated legs, or ratio of the supply's voltage, nothing is mapped."""
LARGEST_VOLTAGE: Final = 1e5
"""Beyond this a reading is no voltage. [V]"""
GROSS: Final = 9.0
"""Where nobody can say which distance is wrong: beyond nine times the limit nothing is told."""

_NUMBER: Final[Mapping[Conductor, int]] = {conductor: index for index, conductor in enumerate(CONDUCTORS)}
_PAIRS: Final = (*LINE_PAIRS, *NEUTRAL_PAIRS)


@dataclass(frozen=True, slots=True)
class Estimate:
    """What geometry makes of one sample.

    `voltages` holds every line and leg-to-neutral pair, measured or mapped; `components` V0, V1, V2; `known` says how
    what rests on line voltages is known; there are no `points` where angles were not seen. `contradicted` says that the
    measured voltages cannot all be right.
    """

    angles: Literal["measured", "recovered", "not seen"]
    known: Known
    voltages: Mapping[str, Told]
    components: tuple[Measured, Measured, Measured] = (MISSING, MISSING, MISSING)
    unbalance_factor: Measured = MISSING
    neutral_earth: Told = NOT_TOLD
    points: Mapping[Conductor, complex] | None = None
    contradicted: bool = False
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class _Distances:
    """What is fitted: pairs, the meters' names, values and standard uncertainties."""

    pairs: tuple[Pair, ...]
    meters: tuple[str, ...]
    values: Floats
    standards: Floats

    def named(self, index: int) -> str:
        """Return which voltmeter a distance is."""
        return f"{self.meters[index]}'s {self.pairs[index]}"


@dataclass(frozen=True, slots=True)
class _Fit:
    """Points of the sample (row 0) and of each distance moved, and how well they fit."""

    points: Complexes
    chi_square: float
    limit: float

    @property
    def is_believed(self) -> bool:
        """Whether the distances agree within their uncertainty."""
        return self.chi_square <= self.limit


def estimate(plan: Plan, derived: Derived) -> Estimate:
    """Return what geometry makes of one sample's voltages."""
    voltages = _measured_voltages(plan, derived)
    plain = Estimate("not seen", "not measured", voltages, neutral_earth=_measured_earth(plan, derived))
    if stands_still(plan, derived) or not _shows_angles(voltages, derived.voltages):
        return plain
    return _mapped(plan, plain, _distances(plan, derived, voltages))


def stands_still(plan: Plan, derived: Derived) -> bool:
    """Return whether the legs are seen to carry no voltage of three phases."""
    return derived.generated < STANDING_STILL or derived.supply.voltage.value < STANDING_STILL * plan.feed.voltage


def _measured_voltages(plan: Plan, derived: Derived) -> dict[str, Told]:
    voltages: dict[str, Told] = dict.fromkeys(map(str, _PAIRS), NOT_TOLD)
    voltages.update((pair, (value, "measured")) for pair, value in derived.voltages.items() if pair in voltages)
    if plan.fed_pair not in derived.voltages and derived.supply.voltage.is_known:
        voltages[plan.fed_pair] = (derived.supply.voltage, "computed")
    return voltages


def _measured_earth(plan: Plan, derived: Derived) -> Told:
    measured = derived.voltages.get(plan.neutral_earth_pair, MISSING)
    return (measured, "measured") if measured.is_known else NOT_TOLD


def _shows_angles(voltages: Mapping[str, Told], measured: Mapping[str, Measured]) -> bool:
    """Return whether the three legs can be a rigid figure: three lines, or five pairs."""
    return all(voltages[str(pair)][0].is_known for pair in LINE_PAIRS) or len(measured) >= 5


def _distances(plan: Plan, derived: Derived, voltages: Mapping[str, Told]) -> _Distances:
    """Return the distances to fit: every voltmeter's; only the lines where one of them is the sum of two halves."""
    if voltages[plan.fed_pair][1] == "computed":
        lines = [(pair, voltages[str(pair)][0]) for pair in LINE_PAIRS if voltages[str(pair)][0].is_known]
        return _Distances(
            tuple(pair for pair, _ in lines),
            ("",) * len(lines),
            np.array([measured.value for _, measured in lines]),
            _at_least(measured.standard for _, measured in lines),
        )
    known = [
        (channel, value)
        for channel, value in zip(plan.distances, derived.distances, strict=True)
        if value < LARGEST_VOLTAGE and channel.across is not None
    ]
    return _Distances(
        tuple(channel.across for channel, _ in known if channel.across is not None),
        tuple(channel.meter for channel, _ in known),
        np.array([value for _, value in known]),
        _at_least(value * channel.voltage_gain for channel, value in known),
    )


def _at_least(standards: Iterable[float]) -> Floats:
    """Return standard uncertainties; a reading of zero has no relative one, a millivolt keeps its weight finite."""
    floored: Floats = np.maximum(np.array(list(standards)), 1e-3)
    return floored


# --------------------------------------------------------------------------
# The map
# --------------------------------------------------------------------------


def _fit(plan: Plan, distances: _Distances) -> _Fit:
    """Fit the sample; beside it stand the points with each distance moved by its standard uncertainty."""
    found = fit_conductors(plan.feed, distances.pairs, distances.values, distances.standards)
    points = np.concatenate([found.points[None, :], found.points + found.moves])
    return _Fit(points, float(found.chi_square), _limit(int(found.degrees_of_freedom)))


def _limit(spare: int) -> float:
    """Return the chi-square that is still believed with so many distances to spare."""
    return CHI_SQUARE_999[min(spare, len(CHI_SQUARE_999) - 1)]


def _mapped(plan: Plan, plain: Estimate, distances: _Distances) -> Estimate:
    fit = _fit(plan, distances)
    if fit.is_believed or math.isnan(fit.chi_square):
        return _with_points(plan, plain, fit)
    plain = replace(plain, contradicted=True)
    suspects = _suspects(plan, distances)
    if len(suspects) == 1:
        (wrong,) = suspects
        rest = distances.values.copy()
        rest[wrong] = np.nan
        told = dict(plain.voltages) | {str(distances.pairs[wrong]): NOT_TOLD}
        fit = _fit(plan, replace(distances, values=rest))
        remark = f"{distances.named(wrong)} does not fit the other voltages and is left out"
        return replace(_with_points(plan, replace(plain, voltages=told), fit), contradicted=False, remarks=(remark,))
    if suspects and fit.chi_square <= GROSS * fit.limit:
        return replace(_with_points(plan, plain, fit), contradicted=False, remarks=(_one_of(distances, suspects),))
    return replace(plain, remarks=(_one_of(distances, suspects) if suspects else NOTHING_FITS,))


def _suspects(plan: Plan, distances: _Distances) -> tuple[int, ...]:
    """Return the distances without which the others agree, with something left to spare that could say otherwise."""
    count = len(distances.pairs)
    without = np.where(np.eye(count, dtype=bool), np.nan, distances.values)
    found = fit_conductors(plan.feed, distances.pairs, without, distances.standards)
    results = zip(found.chi_square.tolist(), found.degrees_of_freedom.tolist(), strict=True)
    return tuple(index for index, (chi_square, spare) in enumerate(results) if chi_square <= _limit(spare))


def _one_of(distances: _Distances, suspects: tuple[int, ...]) -> str:
    names = ", ".join(distances.named(index) for index in suspects)
    return f"{CONTRADICTION}: one of {names} is wrong"


CONTRADICTION: Final = "the voltages contradict each other"
"""How a remark begins where not all voltages can be right."""
NOTHING_FITS: Final = f"{CONTRADICTION}: no angles from these"


def _with_points(plan: Plan, plain: Estimate, fit: _Fit) -> Estimate:
    """Return the estimate with everything that follows from the points."""
    if np.isnan(fit.points[0, :3]).any():
        return plain
    voltages = {pair: told if told[0].is_known else _distance(fit, pair) for pair, told in plain.voltages.items()}
    components = _components(plan, fit)
    magnitudes = np.abs(components)
    is_measured = all(plain.voltages[str(pair)][1] == "measured" for pair in LINE_PAIRS)
    earth = plain.neutral_earth if plain.neutral_earth[0].is_known else _distance(fit, plan.neutral_earth_pair)
    zero, positive, negative = (_column(magnitudes[:, index]) for index in range(3))
    return replace(
        plain,
        angles="measured",
        known="measured" if is_measured else "mapped",
        voltages=voltages,
        components=(zero, positive, negative),
        unbalance_factor=_column(magnitudes[:, 2] / magnitudes[:, 1]),
        neutral_earth=earth,
        points={
            conductor: complex(point)
            for conductor, point in zip(CONDUCTORS, fit.points[0].tolist(), strict=True)
            if not math.isnan(point.real)
        },
    )


def _components(plan: Plan, fit: _Fit) -> Complexes:
    """Return V0, V1, V2 along the declared rotation; V0 only where N is nominally the centre of the triangle."""
    legs = fit.points[:, :3] if plan.rotation == LEGS else fit.points[:, [_NUMBER[leg] for leg in plan.rotation]]
    if plan.has_central_neutral and not np.isnan(fit.points[0, 3]):
        return sequence_components(legs - fit.points[:, 3:4])
    components = sequence_components(legs)
    components[:, 0] = np.nan
    return components


def _distance(fit: _Fit, pair: str) -> Told:
    first, second = (_NUMBER[conductor] for conductor in _CONDUCTORS_OF[pair])
    measured = _column(np.abs(fit.points[:, first] - fit.points[:, second]))
    return (measured, "mapped") if measured.is_known else NOT_TOLD


_CONDUCTORS_OF: Final[Mapping[str, tuple[Conductor, Conductor]]] = {
    str(pair): (pair.first, pair.second) for pair in (*_PAIRS, *EARTH_PAIRS)
}


def _column(values: Floats) -> Measured:
    """Return the first value, and the root of the sum of squares of the others' differences from it."""
    first, *others = values.tolist()
    if math.isnan(first):
        return MISSING
    return Measured(first, math.sqrt(sum((other - first) ** 2 for other in others if not math.isnan(other))))
