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
    `signs` (m, p) say how a distance's unit vector follows each of them: +-1 for a first coordinate, +-j for a second.
    In the end the figure is turned so that `reference`, the fed pair where it is placed, has its nominal `direction`,
    and moved so that the middle of the conductors `origin` is nought: N on an L1-N feed, else the legs.
    """

    start: tuple[int, int, int]
    steps: tuple[Step, ...]
    placed: tuple[int, ...]
    used: tuple[int, ...]
    ends: NDArray[np.int64]
    rows: NDArray[np.int64]
    free: list[int]
    signs: Complexes
    spare: int
    reference: tuple[int, int]
    direction: complex
    origin: list[int]


@functools.lru_cache(maxsize=256)
def find_order(feed: Feed, pairs: tuple[Pair, ...], present: tuple[bool, ...]) -> Order | None:
    """Return how most conductors can be placed, the fed pair first where that is as good; None without distances."""
    edges = [(index, NUMBER[pair.first], NUMBER[pair.second]) for index, pair in enumerate(pairs) if present[index]]
    fed = {NUMBER[feed.pair.first], NUMBER[feed.pair.second]}
    edges.sort(key=lambda edge: {edge[1], edge[2]} != fed)
    orders = [_order_from(feed, edge, edges) for edge in edges]
    return max(orders, key=lambda order: len(order.steps), default=None)


def nominal_points(feed: Feed) -> Complexes:
    """Return nominal points; where N or PE have none they stand at the centre."""
    points = feed.nominal_points()
    return np.array([points.get(conductor, 0j) for conductor in CONDUCTORS])


def _order_from(feed: Feed, start: tuple[int, int, int], edges: Sequence[tuple[int, int, int]]) -> Order:
    nominal = nominal_points(feed)
    placed = [start[1], start[2]]
    steps: list[Step] = []
    while (step := _next_step(placed, edges, nominal)) is not None:
        steps.append(step)
        placed.append(step.new)
    used = [edge for edge in edges if edge[1] in placed and edge[2] in placed]
    ends = np.array([[edge[1], edge[2]] for edge in used], dtype=np.int64)
    free = (2 * placed[1], *(2 * new + part for new in placed[2:] for part in (0, 1)))
    fed = (NUMBER[feed.pair.first], NUMBER[feed.pair.second])
    reference = fed if set(fed) <= set(placed) else (placed[0], placed[1])
    wanted = complex(nominal[reference[0]] - nominal[reference[1]])
    signs = np.zeros((len(used), len(CONDUCTORS)))
    signs[np.arange(len(used)), ends[:, 0]] = 1.0
    signs[np.arange(len(used)), ends[:, 1]] = -1.0
    return Order(
        start=(start[1], start[2], start[0]),
        steps=tuple(steps),
        placed=tuple(placed),
        used=tuple(edge[0] for edge in used),
        ends=ends,
        rows=np.array([edge[0] for edge in used])[:, None],
        free=list(free),
        signs=np.stack([signs, 1j * signs], axis=-1).reshape(len(used), -1)[:, list(free)],
        spare=len(used) - len(free),
        reference=reference,
        direction=wanted / abs(wanted) if wanted else 1.0 + 0j,
        origin=_origin(feed, placed),
    )


def _origin(feed: Feed, placed: Sequence[int]) -> list[int]:
    if not feed.is_line_feed and NUMBER["N"] in placed:
        return [NUMBER["N"]]
    return [0, 1, 2] if {0, 1, 2} <= set(placed) else [placed[0]]


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
