"""In which order conductors can be placed from the distances between them.

Beginning with one measured pair, a conductor with two distances to placed ones can be placed, and so on. A minimally
rigid figure of at most five points always has a point with two distances only (there are seven distances and five
points), and so has what is left of it: every rigid figure can be built this way (Henneberg's first construction).
What cannot be placed is undetermined.
"""

import functools
import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from idlerwatch.core.conductors import CONDUCTORS, Conductor, Feed, Pair

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

NUMBER: Final[Mapping[Conductor, int]] = {conductor: index for index, conductor in enumerate(CONDUCTORS)}
"""Where a conductor stands on the last axis of a map's points."""


@dataclass(frozen=True, slots=True)
class Step:
    """Conductor `new` is placed by its distances `first`, `second` to two placed ones; `others` settle the side."""

    new: int
    near: tuple[int, int]
    distances: tuple[int, int]
    others: tuple[tuple[int, int], ...]
    side: float


@dataclass(frozen=True, slots=True)
class Order:
    """In which order the conductors are placed, and which distances lie among them.

    `free` are the coordinates that may move: the first conductor is pinned, the second slides along the first axis.
    `real`, `imaginary` (m, p) say with which sign a distance follows each of them.
    """

    start: tuple[int, int, int]
    steps: tuple[Step, ...]
    placed: tuple[int, ...]
    used: tuple[int, ...]
    ends: NDArray[np.int64]
    free: tuple[int, ...]
    real: Floats
    imaginary: Floats
    spare: int


@functools.lru_cache(maxsize=256)
def find_order(feed: Feed, pairs: tuple[Pair, ...], present: tuple[bool, ...]) -> Order | None:
    """Return how most conductors can be placed, the fed pair first where that is as good; None without distances."""
    edges = [(index, NUMBER[pair.first], NUMBER[pair.second]) for index, pair in enumerate(pairs) if present[index]]
    fed = {NUMBER[feed.pair.first], NUMBER[feed.pair.second]}
    edges.sort(key=lambda edge: {edge[1], edge[2]} != fed)
    nominal = nominal_points(feed)
    orders = [_order_from(edge, edges, nominal) for edge in edges]
    return max(orders, key=lambda order: len(order.steps), default=None)


def nominal_points(feed: Feed) -> Complexes:
    """Return nominal points; where N or PE have none they stand at the centre."""
    points = feed.nominal_points()
    return np.array([points.get(conductor, 0j) for conductor in CONDUCTORS])


def _order_from(start: tuple[int, int, int], edges: Sequence[tuple[int, int, int]], nominal: Complexes) -> Order:
    placed = [start[1], start[2]]
    steps: list[Step] = []
    while (step := _next_step(placed, edges, nominal)) is not None:
        steps.append(step)
        placed.append(step.new)
    used = [edge for edge in edges if edge[1] in placed and edge[2] in placed]
    ends = np.array([[edge[1], edge[2]] for edge in used], dtype=np.int64)
    free = (2 * placed[1], *(2 * new + part for new in placed[2:] for part in (0, 1)))
    signs = np.zeros((len(used), len(CONDUCTORS)))
    signs[np.arange(len(used)), ends[:, 0]] = 1.0
    signs[np.arange(len(used)), ends[:, 1]] = -1.0
    nothing = np.zeros_like(signs)
    return Order(
        start=(start[1], start[2], start[0]),
        steps=tuple(steps),
        placed=tuple(placed),
        used=tuple(edge[0] for edge in used),
        ends=ends,
        free=free,
        real=np.stack([signs, nothing], axis=-1).reshape(len(used), -1)[:, free],
        imaginary=np.stack([nothing, signs], axis=-1).reshape(len(used), -1)[:, free],
        spare=len(used) - len(free),
    )


def _next_step(placed: Sequence[int], edges: Sequence[tuple[int, int, int]], nominal: Complexes) -> Step | None:
    """Return the conductor that can be placed next, with the two distances that cross at the best angle."""
    best: tuple[float, Step] | None = None
    for new in range(len(CONDUCTORS)):
        if new in placed:
            continue
        ties = {near: index for index, *ends in reversed(edges) if new in ends for near in ends if near in placed}
        for first, second in itertools.combinations(ties, 2):
            area = _area(nominal, first, second, new)
            others = tuple((near, index) for near, index in ties.items() if near not in (first, second))
            step = Step(new, (first, second), (ties[first], ties[second]), others, 1.0 if area >= 0.0 else -1.0)
            if best is None or abs(area) > best[0]:
                best = (abs(area), step)
    return None if best is None else best[1]


def _area(nominal: Complexes, first: int, second: int, new: int) -> float:
    """Return twice the signed area of the nominal triangle; positive where `new` lies to the left."""
    return float(((nominal[second] - nominal[first]).conjugate() * (nominal[new] - nominal[first])).imag)
