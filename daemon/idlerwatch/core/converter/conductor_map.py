"""The conductor map: where L1, L2, L3, N and PE stand in the complex plane, from the voltages measured between them.

A voltmeter across a pair measures the distance between two points. Distances leave a figure free to move, turn and be
mirrored: the fed pair gives the direction, the declared rotation says on which side the legs lie. (PE off the line of
the others keeps a mirror image of its own unless a third distance settles it; |N - PE| is the same in both.)

How it is found, for all samples with the same distances at once:

1. *Order.* Beginning with one measured pair, a conductor with two distances to placed ones can be placed, and so on.
   With five conductors every rigid figure can be built so. What cannot be placed is undetermined, NaN.
2. *Closed form.* Two circles meet in two points; a third distance, else the nominal geometry, says which.
3. *Least squares.* Where more is measured than needed, Gauss-Newton on all distances, each weighted by its uncertainty.
   Two conductors that nearly coincide (N and PE) are a short distance with a tight weight, a narrow curved valley: what
   has not settled after the usual steps is damped (Marquardt) until it has.

The weighted sum of squares that is left is chi-square with as many degrees of freedom as distances were to spare. Two
circles that do not meet leave something too although nothing is to spare: distances that break the triangle inequality.
Beyond the 0.999 quantile the distances contradict each other, and the one with the largest normalised residual is the
`misfit`, where the residuals can tell it from the others. With a single distance to spare they never can: all
normalised residuals are then equal, whichever is wrong. A figure that could not close is not told at all (NaN), never
bent.

References
----------
F. C. Schweppe and J. Wildes, Power system static-state estimation, IEEE Trans. PAS-89 (1970), part I; A. Abur and
A. Gomez Exposito, Power System State Estimation (2004), chapter 5 (largest normalised residual). D. W. Marquardt, An
algorithm for least-squares estimation of nonlinear parameters, J. SIAM 11 (1963).
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from idlerwatch.core.conductors import CONDUCTORS, Feed, Pair
from idlerwatch.core.converter.placing import Order, Step, find_order
from idlerwatch.core.electrical.uncertainty import CHI_SQUARE_999

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Complexes = NDArray[np.complex128]
Booleans = NDArray[np.bool_]
Rows = NDArray[np.intp] | slice

ITERATIONS: Final = 3
"""Plain steps from the closed form, all with its derivatives (a modified Gauss-Newton): the closed form is within a
hundredth of the answer while distances agree, so each step shrinks what is left a hundredfold."""
SETTLED: Final = 0.01
"""A sample has settled when one step more would move no distance by this share of its standard uncertainty."""
LONGEST_SEARCH: Final = 100
"""Damped steps for a sample that has not settled; what has not settled by then contradicts itself grossly."""
SOFTENED: Final = 0.03
"""The search begins with no distance known better than to this share of itself."""
ALIKE: Final = 0.99
"""Two distances whose residuals correlate more than this cannot be told from each other."""
_DAMPING: Final = 1e-9
_TESTABLE: Final = 1e-6
_NOTHING: Final = 1e-9
_BOTH_SIDES: Final = np.array([[1j], [-1j]])
_QUANTILES: Final = np.array(CHI_SQUARE_999)


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
        Index of the distance that fits worst, where they contradict each other and the residuals can tell which; else
        -1.
    moves : (..., m, 5)
        How far each point moves when a distance grows by its standard uncertainty, to first order at the closed form
        (a few percent of the move where the distances had to be reconciled): what follows from the points gets its
        uncertainty from these, with all correlations. Zero for a missing distance. [V]
    """

    points: Complexes
    moves: Complexes
    chi_square: Floats
    degrees_of_freedom: Integers
    misfit: Integers

    @property
    def is_contradicted(self) -> Booleans:
        """Whether chi-square is beyond its 0.999 quantile: not all distances can be right, (...)."""
        contradicted: Booleans = self.chi_square > _limit(self.degrees_of_freedom)
        return contradicted


def _limit(spare: Integers | int) -> Floats:
    """Return the 0.999 quantile of chi-square; with nothing to spare that of the triangle inequality."""
    quantiles: Floats = _QUANTILES[np.minimum(spare, len(_QUANTILES) - 1)]
    return quantiles


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
    groups = [
        (rows, _fit_group(feed, tuple(pairs), pattern, flat[rows], standards[rows]))
        for pattern, rows in _patterns(~np.isnan(flat))
    ]
    whole = groups[0][1] if len(groups) == 1 else _put_together(groups, flat.shape)
    shape = values.shape[:-1]
    return ConductorMap(
        whole.points.reshape(*shape, -1),
        whole.moves.reshape(*values.shape, -1),
        whole.chi_square.reshape(shape),
        whole.degrees_of_freedom.reshape(shape),
        whole.misfit.reshape(shape),
    )


def _fit_group(
    feed: Feed, pairs: tuple[Pair, ...], pattern: tuple[bool, ...], distances: Floats, standards: Floats
) -> ConductorMap:
    """Return the map of samples with the same distances present, along one axis."""
    order = find_order(feed, pairs, pattern)
    if order is None:
        return _undetermined(distances.shape)
    found = _fit(order, distances, standards)
    points, moves = _turned(order, found)
    return ConductorMap(points, moves, found.chi_square, np.full(len(distances), order.spare), found.misfit)


def _undetermined(shape: tuple[int, ...]) -> ConductorMap:
    """Return the map of samples (n, m) that determine nothing."""
    count = shape[0]
    return ConductorMap(
        np.full((count, len(CONDUCTORS)), np.nan, dtype=np.complex128),
        np.zeros((*shape, len(CONDUCTORS)), dtype=np.complex128),
        np.full(count, np.nan),
        np.zeros(count, dtype=np.int64),
        np.full(count, -1, dtype=np.int64),
    )


def _put_together(groups: Sequence[tuple[Rows, ConductorMap]], shape: tuple[int, ...]) -> ConductorMap:
    """Return the groups' maps as one, each sample in its row."""
    whole = _undetermined(shape)
    for rows, part in groups:
        whole.points[rows], whole.moves[rows] = part.points, part.moves
        whole.chi_square[rows], whole.misfit[rows] = part.chi_square, part.misfit
        whole.degrees_of_freedom[rows] = part.degrees_of_freedom
    return whole


def _patterns(present: NDArray[np.bool_]) -> Iterator[tuple[tuple[bool, ...], Rows]]:
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
        points, lengths, jacobian, gains = _refine(order, points, values, weights)
    else:
        lengths, units = _lengths(order, points)
        jacobian = _jacobian(order, units, weights)
        gains = _gains(jacobian)
    residuals = (lengths - values) * weights
    chi_square = (residuals**2).sum(axis=-1)
    misfit = np.full(len(values), -1, dtype=np.int64)
    beyond = chi_square > _limit(order.spare)
    if beyond.any():
        if order.spare == 0:
            points[beyond] = np.nan
        else:
            worst = _worst(residuals[beyond], jacobian[beyond], gains[beyond])
            misfit[beyond] = np.array([*used, -1])[worst]
    return _Found(points, _moves(order, gains, distances.shape), chi_square, misfit)


def _gains(jacobian: Floats) -> Floats:
    """Return how the free coordinates follow the weighted distances, (n, p, m)."""
    transposed = jacobian.swapaxes(-1, -2)
    normal = transposed @ jacobian
    # two points may coincide, three may lie on a line: a billionth keeps the matrix regular
    normal += (_DAMPING * normal[..., :1, :1]) * np.eye(normal.shape[-1])
    return np.asarray(np.linalg.solve(normal, transposed), dtype=np.float64)


def _moves(order: Order, gains: Floats, shape: tuple[int, ...]) -> Complexes:
    moves = np.zeros((*shape, 2 * len(CONDUCTORS)))
    moves[:, order.rows, order.free] = gains.swapaxes(-1, -2)
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
    length = np.abs(axis) + _NOTHING
    first, second = distances[:, step.distances[0]], distances[:, step.distances[1]]
    along = (first * first - second * second + length * length) / (2.0 * length)
    square = first * first - along * along
    apart = square < 0.0
    met = not apart.any()
    if not met:  # circles that do not meet: on the line between, as near to both as can be
        along = np.where(apart, np.sign(along) * np.minimum(np.abs(along), first), along)
        square = np.maximum(square, 0.0)
    unit = axis / length
    spots = base + unit * (along + np.sqrt(square) * (_BOTH_SIDES * step.side))
    if not step.others:
        return spots[0], met
    misses = sum(((np.abs(spots - points[:, near]) - distances[:, at]) ** 2 for near, at in step.others), np.zeros(1))
    return np.where(misses[0] <= misses[1], spots[0], spots[1]), met


def _lengths(order: Order, points: Complexes) -> tuple[Floats, Complexes]:
    """Return the lengths (n, m) of the measured distances in the map, and their unit vectors."""
    spans = points[:, order.ends[:, 0]] - points[:, order.ends[:, 1]]
    lengths: Floats = np.abs(spans)
    return lengths, spans / (lengths + _NOTHING)


def _jacobian(order: Order, units: Complexes, weights: Floats) -> Floats:
    """Return the weighted derivatives (n, m, p) by the free coordinates of the placed conductors."""
    return np.asarray(((units * weights).conj()[..., None] * order.signs).real)


def _refine(
    order: Order, points: Complexes, values: Floats, weights: Floats
) -> tuple[Complexes, Floats, Floats, Floats]:
    """Move the points to the least sum of weighted squares; return them with lengths, derivatives and gains there."""
    start = np.ascontiguousarray(points).view(np.float64)
    coordinates = start.copy()
    lengths, units = _lengths(order, points)
    jacobian = _jacobian(order, units, weights)
    gains = _gains(jacobian)
    for _ in range(ITERATIONS):
        coordinates[:, order.free] += (gains @ ((values - lengths) * weights)[..., None])[..., 0]
        lengths, _ = _lengths(order, coordinates.view(np.complex128))
    step = gains @ ((values - lengths) * weights)[..., None]
    restless = np.abs(jacobian @ step).max(axis=(-2, -1)) > SETTLED
    if restless.any():
        # first a wide valley along which long steps can be taken, then the narrow one within it
        softened = np.minimum(weights[restless], 1.0 / (SOFTENED * values[restless] + _NOTHING))
        coordinates[restless] = _search(order, start[restless], values[restless], softened)
        coordinates[restless] = _search(order, coordinates[restless], values[restless], weights[restless])
        lengths[restless], units = _lengths(order, coordinates[restless].view(np.complex128))
        jacobian[restless] = _jacobian(order, units, weights[restless])
        gains[restless] = _gains(jacobian[restless])
    return coordinates.view(np.complex128), lengths, jacobian, gains


def _search(order: Order, coordinates: Floats, values: Floats, weights: Floats) -> Floats:
    """Return the coordinates (n, 10) of the least sum of squares, by steps damped until each of them is downhill."""
    damping = 0.01 * weights.min(axis=-1) ** 2
    for _ in range(LONGEST_SEARCH):
        lengths, units = _lengths(order, coordinates.view(np.complex128))
        residuals = (values - lengths) * weights
        jacobian = _jacobian(order, units, weights)
        step = _damped_step(jacobian, residuals, damping)
        trial = coordinates.copy()
        trial[:, order.free] += step
        lengths, _ = _lengths(order, trial.view(np.complex128))
        gain = (residuals**2).sum(axis=-1) - (((values - lengths) * weights) ** 2).sum(axis=-1)
        is_downhill = gain >= 0.0
        coordinates = np.where(is_downhill[:, None], trial, coordinates)
        is_over = np.abs((jacobian @ step[..., None])[..., 0]).max(axis=-1) < 0.1 * SETTLED
        if is_over.all():
            break
        damping = np.where(is_downhill, 0.2, 8.0) * damping
    return coordinates


def _damped_step(jacobian: Floats, residuals: Floats, damping: Floats) -> Floats:
    """Return the step of each sample, (n, p): Gauss-Newton's, held back alike in every direction.

    All coordinates are volts. Held back in proportion to each coordinate's weight instead, as usual, it would creep
    along a valley that lies askew to the axes.
    """
    transposed = jacobian.swapaxes(-1, -2)
    normal = transposed @ jacobian + damping[:, None, None] * np.eye(jacobian.shape[-1])
    return np.asarray(np.linalg.solve(normal, transposed @ residuals[..., None])[..., 0])


def _worst(residuals: Floats, jacobian: Floats, gains: Floats) -> Integers:
    """Return which of the used distances has the largest normalised residual, -1 where another could as well be it."""
    number = jacobian.shape[-2]
    left = np.eye(number) - jacobian @ gains  # how residuals follow errors: their covariance too
    spread = np.sqrt(np.maximum(np.einsum("nmm->nm", left), 0.0))
    normalised: Floats = np.where(spread > _TESTABLE, np.abs(residuals) / np.maximum(spread, _TESTABLE), 0.0)
    worst: Integers = normalised.argmax(axis=-1)
    rows = np.arange(len(worst))
    together = np.abs(left[rows, worst]) / np.maximum(spread[rows, worst, None] * spread, _TESTABLE**2)
    together[rows, worst] = 0.0
    return np.where(together.max(axis=-1) < ALIKE, worst, number)


def _turned(order: Order, found: _Found) -> tuple[Complexes, Complexes]:
    """Return points and moves with the reference pair at its nominal angle and the origin where it belongs.

    Distances between points are all that is known, so moves are turned with the points; an origin moves along.
    """
    first, second = order.reference
    span = found.points[:, first] - found.points[:, second]
    turn = (order.direction * span.conj()) * (1.0 / (np.abs(span) + _NOTHING))
    share = 1.0 / len(order.origin)
    origin = found.points[:, order.origin].sum(axis=-1, keepdims=True) * share
    moved_origin = found.moves[..., order.origin].sum(axis=-1, keepdims=True) * share
    return (found.points - origin) * turn[:, None], (found.moves - moved_origin) * turn[:, None, None]
