"""The conductor map: where L1, L2, L3, N and PE stand in the complex plane, from the voltages measured between them.

A voltmeter across a pair measures the distance between two points. Distances leave a figure free to move, turn and be
mirrored: the fed pair gives the direction, the declared rotation says on which side the legs lie. (PE off the line of
the others keeps a mirror image of its own unless a third distance settles it; |N - PE| is the same in both.)

How it is found, for all samples with the same distances at once:

1. *Order.* Beginning with one measured pair, a conductor with two distances to placed ones can be placed, and so on.
   With five conductors every rigid figure can be built so. What cannot be placed is undetermined, NaN.
2. *Closed form.* Two circles meet in two points; a third distance, else the nominal geometry, says which.
3. *Least squares.* Where more is measured than needed, Gauss-Newton on all distances, each weighted by its uncertainty.

The weighted sum of squares that is left is chi-square with as many degrees of freedom as distances were to spare. Two
circles that do not meet leave something too although nothing is to spare: distances that break the triangle inequality.
Beyond the 0.999 quantile the distance with the largest normalised residual is the `misfit`; a figure that could not
close is then not told at all (NaN), never bent into shape.

References
----------
F. C. Schweppe and J. Wildes, Power system static-state estimation, IEEE Trans. PAS-89 (1970), part I; A. Abur and
A. Gomez Exposito, Power System State Estimation (2004), chapter 5 (largest normalised residual).
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from idlerwatch.core.conductors import CONDUCTORS, Feed, Pair
from idlerwatch.core.converter.placing import NUMBER, Order, Step, find_order, nominal_points
from idlerwatch.core.electrical.uncertainty import CHI_SQUARE_999

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Complexes = NDArray[np.complex128]

MOST_ITERATIONS: Final = 12
CLOSE_ENOUGH: Final = 1e-6
"""Gauss-Newton ends when no point moves farther than this share of the longest distance."""
_DAMPING: Final = 1e-9
_TESTABLE: Final = 1e-6


@dataclass(frozen=True, slots=True)
class ConductorMap:
    """Where the conductors stand, and how well the distances agree.

    Attributes
    ----------
    points : (..., 5)
        In the order L1, L2, L3, N, PE; the origin is N on an L1-N feed, else the centre of the legs; the fed pair has
        its nominal angle. NaN where a conductor is not determined. [V]
    chi_square : (...)
        Weighted sum of squared residuals. [1]
    degrees_of_freedom : (...)
        Distances to spare.
    misfit : (...)
        Index of the distance that fits worst where chi-square is beyond its 0.999 quantile, else -1.
    moves : (..., m, 5)
        How far each point moves when a distance grows by its standard uncertainty, to first order: what follows from
        the points gets its uncertainty from these, with all correlations. Zero for a missing distance. [V]
    """

    points: Complexes
    moves: Complexes
    chi_square: Floats
    degrees_of_freedom: Integers
    misfit: Integers


def fit_conductors(feed: Feed, pairs: Sequence[Pair], voltages: Floats, standard_uncertainties: Floats) -> ConductorMap:
    """Find the points of the conductors from the voltages between them.

    Parameters
    ----------
    feed
        Gives nominal geometry, rotation and the reference direction.
    pairs : m
        What each voltage stands across; the same pair may come twice.
    voltages : (..., m)
        Root-mean-square; NaN where missing. [V]
    standard_uncertainties : (..., m)
        Of each voltage, greater than zero. [V]

    Returns
    -------
    ConductorMap

    Examples
    --------
    >>> from idlerwatch.core.conductors import LINE_PAIRS
    >>> line = Feed(Pair("L1", "L2"), 100.0, neutral="none")
    >>> found = fit_conductors(line, LINE_PAIRS, np.array([100.0, 100.0, 100.0]), np.array([1.0, 1.0, 1.0]))
    >>> np.abs(found.points[:3]).round(3).tolist()
    [57.735, 57.735, 57.735]

    References
    ----------
    Schweppe and Wildes 1970; Abur and Exposito 2004.
    """
    values = np.asarray(voltages, dtype=np.float64)
    flat = values.reshape(-1, values.shape[-1])
    standards = np.broadcast_to(standard_uncertainties, values.shape).reshape(flat.shape)
    points = np.full((len(flat), len(CONDUCTORS)), np.nan, dtype=np.complex128)
    moves = np.zeros((*flat.shape, len(CONDUCTORS)), dtype=np.complex128)
    chi_square = np.full(len(flat), np.nan)
    spare = np.zeros(len(flat), dtype=np.int64)
    misfit = np.full(len(flat), -1, dtype=np.int64)
    for pattern, rows in _patterns(~np.isnan(flat)):
        order = find_order(feed, tuple(pairs), pattern)
        if order is None:
            continue
        found = _fit(order, flat[rows], standards[rows])
        points[rows], moves[rows] = _turned(feed, order, found)
        chi_square[rows], misfit[rows], spare[rows] = found.chi_square, found.misfit, order.spare
    shape = values.shape[:-1]
    return ConductorMap(
        points.reshape(*shape, -1),
        moves.reshape(*values.shape, -1),
        chi_square.reshape(shape),
        spare.reshape(shape),
        misfit.reshape(shape),
    )


def _patterns(present: NDArray[np.bool_]) -> Iterator[tuple[tuple[bool, ...], NDArray[np.intp] | slice]]:
    """Yield each pattern of present distances with the rows that have it."""
    if len(present) and bool((present == present[0]).all()):
        yield tuple(present[0].tolist()), slice(None)
        return
    patterns, numbers = np.unique(present, axis=0, return_inverse=True)
    for number, pattern in enumerate(patterns):
        yield tuple(pattern.tolist()), np.flatnonzero(numbers.ravel() == number)


# --------------------------------------------------------------------------
# Where
# --------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Found:
    """Samples with the same distances, fitted: points and their moves before they are turned."""

    points: Complexes
    moves: Complexes
    chi_square: Floats
    misfit: Integers


def _fit(order: Order, distances: Floats, standards: Floats) -> _Found:
    """Return points (n, 5), moves (n, m, 5), chi-square (n) and misfit (n) of samples with the same distances."""
    points, is_closed = _place(order, distances)
    used = list(order.used)
    values, weights = distances[:, used], 1.0 / standards[:, used]
    if order.spare > 0 or not is_closed:
        points = _refine(order, points, values, weights)
    lengths, units = _lengths(order, points)
    jacobian = _jacobian(order, units, weights)
    gains = _gains(jacobian)
    residuals = (lengths - values) * weights
    chi_square = (residuals**2).sum(axis=-1)
    misfit = np.full(len(values), -1, dtype=np.int64)
    beyond = chi_square > CHI_SQUARE_999[min(order.spare, len(CHI_SQUARE_999) - 1)]
    if beyond.any():
        worst = _worst(residuals[beyond], jacobian[beyond], gains[beyond])
        misfit[beyond] = np.array(used)[worst]
        if order.spare == 0:
            points[beyond] = np.nan
    return _Found(points, _moves(order, gains, distances.shape), chi_square, misfit)


def _gains(jacobian: Floats) -> Floats:
    """Return how the free coordinates follow the weighted distances, (n, p, m)."""
    transposed = np.swapaxes(jacobian, -1, -2)
    return np.asarray(np.linalg.solve(_damped(transposed @ jacobian), transposed), dtype=np.float64)


def _moves(order: Order, gains: Floats, shape: tuple[int, ...]) -> Complexes:
    moves = np.zeros((*shape, 2 * len(CONDUCTORS)))
    moves[np.ix_(range(shape[0]), order.used, order.free)] = np.swapaxes(gains, -1, -2)
    return moves.view(np.complex128)


def _place(order: Order, distances: Floats) -> tuple[Complexes, bool]:
    """Return points by closed form, and whether all circles met."""
    points = np.full((len(distances), len(CONDUCTORS)), np.nan, dtype=np.complex128)
    first, second, start = order.start
    points[:, first] = 0.0
    points[:, second] = distances[:, start]
    is_closed = True
    for step in order.steps:
        points[:, step.new], met = _cross(step, points, distances)
        is_closed = is_closed and met
    return points, is_closed


def _cross(step: Step, points: Complexes, distances: Floats) -> tuple[Complexes, bool]:
    """Return where two circles meet, on the right side, and whether all of them do."""
    base = points[:, step.near[0]]
    axis = points[:, step.near[1]] - base
    length = np.maximum(np.abs(axis), 1e-12)
    first, second = distances[:, step.distances[0]], distances[:, step.distances[1]]
    along = (first**2 - second**2 + length**2) / (2.0 * length)
    square = first**2 - along**2
    across = np.sqrt(np.maximum(square, 0.0))
    # circles that do not meet: on the line between, as near to both as can be
    along = np.where(square < 0.0, np.sign(along) * np.minimum(np.abs(along), first), along)
    unit = axis / length
    found = [base + unit * (along + 1j * side * across) for side in (step.side, -step.side)]
    if not step.others:
        return found[0], bool((square >= 0.0).all())
    misses = [
        sum(((np.abs(spot - points[:, near]) - distances[:, index]) ** 2 for near, index in step.others), np.zeros(1))
        for spot in found
    ]
    return np.where(misses[0] <= misses[1], found[0], found[1]), bool((square >= 0.0).all())


def _lengths(order: Order, points: Complexes) -> tuple[Floats, Complexes]:
    """Return the lengths (n, m) of the measured distances in the map, and their unit vectors."""
    spans = points[:, order.ends[:, 0]] - points[:, order.ends[:, 1]]
    lengths: Floats = np.abs(spans)
    return lengths, spans / np.maximum(lengths, 1e-9)


def _jacobian(order: Order, units: Complexes, weights: Floats) -> Floats:
    """Return the weighted derivatives (n, m, p) by the free coordinates of the placed conductors."""
    weighted = units * weights
    jacobian: Floats = weighted.real[..., None] * order.real + weighted.imag[..., None] * order.imaginary
    return jacobian


def _refine(order: Order, points: Complexes, values: Floats, weights: Floats) -> Complexes:
    """Move the points to the least sum of weighted squares."""
    free = list(order.free)
    coordinates = np.ascontiguousarray(points).view(np.float64).reshape(len(points), -1).copy()
    enough = CLOSE_ENOUGH * float(values.max(initial=1.0))
    for _ in range(MOST_ITERATIONS):
        lengths, units = _lengths(order, coordinates.view(np.complex128))
        gains = _gains(_jacobian(order, units, weights))
        steps = (gains @ ((values - lengths) * weights)[..., None])[..., 0]
        coordinates[:, free] += steps
        if float(np.abs(steps).max()) < enough:
            break
    return coordinates.view(np.complex128)


def _damped(normal: Floats) -> Floats:
    """Return normal matrices that can be solved although two points coincide or three lie on a line."""
    diagonal = np.einsum("...ii->...i", normal)
    diagonal += _DAMPING * diagonal.max(axis=-1, keepdims=True)
    return normal


def _worst(residuals: Floats, jacobian: Floats, gains: Floats) -> Integers:
    """Return which of the used distances has the largest normalised residual."""
    hat = np.einsum("nmp,npm->nm", jacobian, gains)
    spread = np.maximum(1.0 - hat, 0.0)
    normalised: Floats = np.where(spread > _TESTABLE, np.abs(residuals) / np.sqrt(np.maximum(spread, _TESTABLE)), 0.0)
    can_be_tested = (normalised > 0.0).any(axis=-1)
    worst: Integers = np.where(can_be_tested, normalised.argmax(axis=-1), np.abs(residuals).argmax(axis=-1))
    return worst


def _turned(feed: Feed, order: Order, found: _Found) -> tuple[Complexes, Complexes]:
    """Return points and moves with the fed pair at its nominal angle and the origin where it belongs.

    Distances between points are all that is known, so moves are turned with the points; an origin moves along.
    """
    points = found.points
    first, second = _reference(feed, order)
    turn = _turn(nominal_points(feed)[first] - nominal_points(feed)[second], points[:, first] - points[:, second])
    origin = _origin(feed, points, order)
    moved_origin = _origin(feed, found.moves, order)
    return (points - origin[..., None]) * turn[:, None], (found.moves - moved_origin[..., None]) * turn[:, None, None]


def _turn(wanted: complex, span: Complexes) -> Complexes:
    with np.errstate(invalid="ignore", divide="ignore"):
        turn: Complexes = np.where(np.abs(span) > 0.0, np.abs(span) / span, 1.0)
    return turn * (wanted / abs(wanted) if wanted else 1.0)


def _origin(feed: Feed, points: Complexes, order: Order) -> Complexes:
    """Return N on an L1-N feed, else the centre of the legs, else the first placed conductor; (..., 5) to (...)."""
    if not feed.is_line_feed and NUMBER["N"] in order.placed:
        return points[..., NUMBER["N"]]
    if {0, 1, 2} <= set(order.placed):
        centre: Complexes = points[..., :3].mean(axis=-1)
        return centre
    return points[..., order.placed[0]]


def _reference(feed: Feed, order: Order) -> tuple[int, int]:
    """Return the pair whose nominal angle is kept: the fed one, else the first two that are placed."""
    fed = (NUMBER[feed.pair.first], NUMBER[feed.pair.second])
    return fed if set(fed) <= set(order.placed) else (order.placed[0], order.placed[1])
