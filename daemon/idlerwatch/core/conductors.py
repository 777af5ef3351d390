"""Conductors, pairs and legs, and the nominal voltage between any two conductors of a feed.

Designations follow IEC 60445: L1 L2 L3, N, PE. A *leg* is a line conductor. A *pair* is what a voltmeter stands
across; pairs are written L1-L2, L2-L3, L3-L1, Lx-N and N-PE, Lx-PE, whatever order they were given in.

Nominal voltages are distances between points of the complex plane (volts, the positive sequence L1-L2-L3): the three
legs stand on an equilateral triangle, and the feed says where N is.

* ``L1-N`` feed: N is the centre of the triangle; leg to N is the declared voltage U, leg to leg sqrt(3) U.
* line feed (two legs): leg to leg is U. N is the centre tap of the fed pair (``neutral = "centre-tap"``), the fed leg
  that is the utility's neutral (``neutral = "L1"``), the supply's star point (``"supply"``), or absent (``"none"``).
"""

import cmath
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final, Literal

Conductor = Literal["L1", "L2", "L3", "N", "PE"]
Leg = Literal["L1", "L2", "L3"]

LEGS: Final[tuple[Leg, Leg, Leg]] = ("L1", "L2", "L3")
CONDUCTORS: Final[tuple[Conductor, ...]] = ("L1", "L2", "L3", "N", "PE")


@dataclass(frozen=True, slots=True)
class Pair:
    """Two conductors in their usual order, written ``L3-L1`` and the like."""

    first: Conductor
    second: Conductor

    def __str__(self) -> str:
        return f"{self.first}-{self.second}"

    @property
    def legs(self) -> tuple[Leg, ...]:
        """The legs among the two conductors, in the order written."""
        return tuple(leg for leg in LEGS if leg in (self.first, self.second))

    def other(self, conductor: Conductor) -> Conductor:
        """Return the conductor that is not `conductor`."""
        return self.second if conductor == self.first else self.first


LINE_PAIRS: Final[tuple[Pair, Pair, Pair]] = (Pair("L1", "L2"), Pair("L2", "L3"), Pair("L3", "L1"))
NEUTRAL_PAIRS: Final[tuple[Pair, Pair, Pair]] = (Pair("L1", "N"), Pair("L2", "N"), Pair("L3", "N"))
EARTH_PAIRS: Final[tuple[Pair, ...]] = (Pair("L1", "PE"), Pair("L2", "PE"), Pair("L3", "PE"), Pair("N", "PE"))
PAIRS: Final[tuple[Pair, ...]] = (*LINE_PAIRS, *NEUTRAL_PAIRS, *EARTH_PAIRS)

_BY_NAME: Final[Mapping[str, Pair]] = {
    name: pair for pair in PAIRS for name in (f"{pair.first}-{pair.second}", f"{pair.second}-{pair.first}")
}


def read_pair(text: str) -> Pair:
    """Return the pair a text names, in either order. Raises ValueError with what was wanted.

    Examples
    --------
    >>> str(read_pair("L1-L3")), str(read_pair("N-L2"))
    ('L3-L1', 'L2-N')
    """
    pair = _BY_NAME.get(text)
    if pair is None:
        raise ValueError(f"is {text!r}, must be two of L1, L2, L3, N, PE joined by a hyphen, like L1-N")
    return pair


@dataclass(frozen=True, slots=True)
class Feed:
    """How the utility feeds the converter: the fed pair, its declared voltage, and what N is."""

    pair: Pair
    voltage: float
    neutral: str = "supply"
    rotation: str = "L1-L2-L3"

    @property
    def is_line_feed(self) -> bool:
        """Whether two legs are fed (else one leg and N)."""
        return "N" not in (self.pair.first, self.pair.second)

    @property
    def has_neutral(self) -> bool:
        """Whether there is a neutral conductor at all."""
        return self.neutral != "none"

    @property
    def supply_legs(self) -> tuple[Leg, ...]:
        """The legs the utility feeds."""
        return self.pair.legs

    @property
    def generated_legs(self) -> tuple[Leg, ...]:
        """The legs the idler makes."""
        return tuple(leg for leg in LEGS if leg not in self.pair.legs)

    @property
    def leg_voltage(self) -> float:
        """Nominal voltage of a leg to the centre of the triangle. [V]"""
        return self.voltage / math.sqrt(3.0) if self.is_line_feed else self.voltage

    @property
    def line_voltage(self) -> float:
        """Nominal voltage between two legs. [V]"""
        return math.sqrt(3.0) * self.leg_voltage

    def nominal_points(self) -> Mapping[Conductor, complex]:
        """Return where each conductor stands nominally, PE on N, L1 on the positive real axis from the centre. [V]

        Without a neutral, N and PE are left out.
        """
        order = self.rotation.split("-")
        points: dict[Conductor, complex] = {
            leg: cmath.rect(self.leg_voltage, -2.0 * math.pi * ((order.index(leg) - order.index("L1")) % 3) / 3.0)
            for leg in LEGS
        }
        neutral = self._nominal_neutral(points)
        return points if neutral is None else {**points, "N": neutral, "PE": neutral}

    def _nominal_neutral(self, points: Mapping[Conductor, complex]) -> complex | None:
        match self.neutral:
            case "none":
                return None
            case "centre-tap":
                return (points[self.pair.first] + points[self.pair.second]) / 2.0
            case "L1" | "L2" | "L3":
                return points[self.neutral]
            case _:
                return 0j

    def nominal_voltage(self, pair: Pair) -> float:
        """Return the nominal voltage across a pair; NaN where a conductor is not there. [V]

        Examples
        --------
        >>> shed = Feed(Pair("L1", "N"), 230.0)
        >>> round(shed.nominal_voltage(Pair("L2", "L3")), 1)
        398.4
        >>> house = Feed(Pair("L1", "L2"), 240.0, neutral="centre-tap")
        >>> [round(house.nominal_voltage(p), 1) for p in NEUTRAL_PAIRS]
        [120.0, 120.0, 207.8]
        """
        points = self.nominal_points()
        if pair.first not in points or pair.second not in points:
            return math.nan
        return abs(points[pair.first] - points[pair.second])
