"""What is usual: the running mean of each value over the last ten minutes of like loading.

Learned while the converter runs normally, unloaded and loaded apart, every few seconds, from items whose condition is
neither in nor on its way: a fault does not become the usual while its delay runs.
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Final

from idlerwatch.core.watch.conditions.timers import IDLE, Timer

_EVERY_S: Final = 5.0
_OVER_S: Final = 600.0
_LOADINGS: Final = ("U", "L")


@dataclass(frozen=True, slots=True)
class Usual:
    """The means of all items' values for each loading (``U``, ``L``), and from how many samples."""

    at: float = -math.inf
    means: Mapping[str, tuple[float, ...]] = field(default_factory=dict)
    samples: Mapping[str, int] = field(default_factory=dict)


def learn(usual: Usual, letter: str, at: float, values: Sequence[float], timers: Sequence[Timer]) -> Usual:
    """Take one sample's values, where the converter runs and the last one taken is old enough."""
    if letter not in _LOADINGS or at - usual.at < _EVERY_S:
        return usual
    samples = usual.samples.get(letter, 0)
    share = max(1.0 / (samples + 1), _EVERY_S / _OVER_S)
    before = usual.means.get(letter, (math.nan,) * len(values))
    means = tuple(
        _follow(mean, value, share) if timer is IDLE else mean
        for mean, value, timer in zip(before, values, timers, strict=True)
    )
    return Usual(at, {**usual.means, letter: means}, {**usual.samples, letter: samples + 1})


def _follow(mean: float, value: float, share: float) -> float:
    if math.isnan(value):
        return mean
    return value if math.isnan(mean) else mean + share * (value - mean)


def usual_of(usual: Usual, letter: str, place: int) -> float:
    """Return an item's usual value at the loading of a state, NaN where none is known."""
    loading = "L" if letter == "M" else letter
    means = usual.means.get(loading)
    return math.nan if means is None else means[place]
