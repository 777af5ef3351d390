"""Register maps: which quantity stands in which registers, and how words become quantities and back.

A map is data (``config/meters/*.toml``): a new meter is a new file, no new code. Values leave this module in SI units,
rounded to float32 (see `values`).
"""

from dataclasses import dataclass
from typing import Literal

Table = Literal["input", "holding", "coil", "discrete"]
Encoding = Literal["int16", "uint16", "int32", "uint32", "float32", "bit"]


@dataclass(frozen=True, slots=True)
class Point:
    """One quantity of one channel at one address.

    `channel` is 0 for what belongs to the whole meter. `word_order` is ``high first`` or ``low first``. `scale`
    multiplies the raw number into SI; `scale_address` points to a register holding a power of ten beside it (SunSpec
    ``sunssf``). `absent` is the raw word pattern that says "not implemented". `plausible` bounds the value in SI.
    `group` is ``fast`` (every cycle) or ``slow`` (one meter's a cycle).
    """

    quantity: str
    channel: int
    table: Table
    address: int
    encoding: Encoding
    scale: float = 1.0
    scale_address: int | None = None
    word_order: Literal["high first", "low first"] = "high first"
    absent: int | None = None
    plausible: tuple[float, float] = (float("-inf"), float("inf"))
    group: Literal["fast", "slow"] = "fast"

    @property
    def words(self) -> int:
        """Registers (or bits) the point takes."""
        return 2 if self.encoding in ("int32", "uint32", "float32") else 1


@dataclass(frozen=True, slots=True)
class RegisterMap:
    """The layout of one kind of meter.

    `reactive` says what reactive power (and power factor) tell: ``signed``, ``unsigned`` or ``none``.
    `line_voltages` says whether channels across two legs are ``measured`` or ``computed`` from 120 degrees assumed;
    `star` whether the neutral point is a ``conductor`` or ``artificial``. `largest_block` registers a request,
    `gaps` whether registers in between that belong to nothing may be read.
    """

    name: str
    title: str
    points: tuple[Point, ...]
    reactive: Literal["signed", "unsigned", "none"] = "signed"
    line_voltages: Literal["measured", "computed"] = "measured"
    star: Literal["conductor", "artificial"] = "conductor"
    largest_block: int = 125
    gaps: bool = True

    @property
    def channels(self) -> int:
        """How many channels the map knows."""
        return max((point.channel for point in self.points), default=0)
