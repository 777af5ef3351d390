"""Register maps: which quantity stands in which registers, and how words become quantities and back.

A map is data (``config/meters/*.toml``): a new meter is a new file, no new code. Values leave this module in SI units,
rounded to float32 (see `values`).

A map file says what holds for the whole meter (`title`, `reactive`, `line_voltages`, `star`, `largest_block`, `gaps`,
`answer_delay_s`, `base`, which is added to every address) and then ``[[quantity]]`` by quantity: `name`, `table`,
`encoding`, `scale`, `word_order`, `scale_address`, `exponent`, `absent`, `plausible`, `group`, and
``addresses = { 1 = 0, 2 = 2 }``: the address of each channel, channel 0 for what belongs to the whole meter.

What a register cannot tell becomes NaN with a reason: ``not implemented`` (the pattern that says so, a float NaN, or a
scale factor that is absent) or ``implausible`` (outside the map's range).
"""

import math
import struct
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Annotated, Any, Final, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError

from idlerwatch.core.settings.faults import Fault, SettingsError

Table = Literal["input", "holding", "coil", "discrete"]
Encoding = Literal["int16", "uint16", "int32", "uint32", "float32", "bit"]
WordOrder = Literal["high first", "low first"]

SCALE_ABSENT: Final = 0x8000
"""A scale factor register that is not implemented (SunSpec ``sunssf``)."""
LARGEST_EXPONENT: Final = 10
"""``sunssf`` goes from -10 to 10; anything else is no scale factor."""


@dataclass(frozen=True, slots=True)
class Point:
    """One quantity of one channel at one address.

    `channel` is 0 for what belongs to the whole meter. `word_order` is ``high first`` or ``low first``. `scale`
    multiplies the raw number into SI; `scale_address` points to a register holding a power of ten beside it (SunSpec
    ``sunssf``), `exponent` is what a virtual meter puts there. `absent` is the raw word pattern that says "not
    implemented". `plausible` bounds the value in SI. `group` is ``fast`` (every cycle) or ``slow`` (one meter's a
    cycle).
    """

    quantity: str
    channel: int
    table: Table
    address: int
    encoding: Encoding
    scale: float = 1.0
    scale_address: int | None = None
    word_order: WordOrder = "high first"
    absent: int | None = None
    plausible: tuple[float, float] = (float("-inf"), float("inf"))
    group: Literal["fast", "slow"] = "fast"
    exponent: int = 0

    @property
    def words(self) -> int:
        """Registers (or bits) the point takes."""
        return 2 if self.encoding in ("int32", "uint32", "float32") else 1

    @property
    def key(self) -> tuple[int, str]:
        """Channel and quantity: the figure's key in a reading."""
        return (self.channel, self.quantity)


@dataclass(frozen=True, slots=True)
class RegisterMap:
    """The layout of one kind of meter.

    `reactive` says what reactive power (and power factor) tell: ``signed``, ``unsigned`` or ``none``.
    `line_voltages` says whether channels across two legs are ``measured`` or ``computed`` from 120 degrees assumed;
    `star` whether the neutral point is a ``conductor`` or ``artificial``. `largest_block` registers a request,
    `gaps` whether registers in between that belong to nothing may be read. `answer_delay_s` is what such a meter
    usually thinks before it answers: block reads are planned with it.
    """

    name: str
    title: str
    points: tuple[Point, ...]
    reactive: Literal["signed", "unsigned", "none"] = "signed"
    line_voltages: Literal["measured", "computed"] = "measured"
    star: Literal["conductor", "artificial"] = "conductor"
    largest_block: int = 125
    gaps: bool = True
    answer_delay_s: float = 0.02

    @property
    def channels(self) -> int:
        """How many channels the map knows."""
        return max((point.channel for point in self.points), default=0)


# --------------------------------------------------------------------------
# Words to quantities and back
# --------------------------------------------------------------------------

RegisterKey = tuple[Table, int]
"""Table and protocol address (data model number minus one)."""


def as_float32(value: float) -> float:
    """Return the nearest float32; infinite where the value is beyond its range.

    Examples
    --------
    >>> as_float32(0.1)
    0.10000000149011612
    """
    try:
        return float(struct.unpack(">f", struct.pack(">f", value))[0])
    except OverflowError:
        return math.copysign(math.inf, value)


def decode(point: Point, words: Iterable[int], exponent: int = 0) -> float:
    """Return the quantity in SI that a point's registers hold, rounded to float32; NaN where it is not implemented.

    `words` are the point's registers (or its bit) by rising address; `exponent` is the scale register's content, as a
    signed number.

    Examples
    --------
    >>> decode(Point("voltage", 1, "input", 0, "float32"), (0x4366, 0x8000))
    230.5
    >>> decode(Point("current", 1, "input", 1, "uint32", scale=0.001, word_order="low first"), (0x86A0, 0x0001))
    100.0
    """
    raw = _raw(point, tuple(words))
    if point.absent is not None and raw == point.absent:
        return math.nan
    return as_float32(_number(point.encoding, raw) * 10.0**exponent * point.scale)


def encode(point: Point, value: float, exponent: int = 0) -> tuple[int, ...]:
    """Return the registers that hold a value in SI: the opposite of `decode`, clamped to what the encoding can hold.

    NaN becomes the pattern for "not implemented", else 0.

    Examples
    --------
    >>> encode(Point("voltage", 1, "input", 0, "uint16", scale=0.1), 230.5)
    (2305,)
    """
    if math.isnan(value) and point.encoding != "float32":
        return _ordered(point, point.absent or 0)
    return _ordered(point, _pattern(point.encoding, value / point.scale / 10.0**exponent))


def figures(
    points: Iterable[Point], registers: Mapping[RegisterKey, int]
) -> tuple[dict[tuple[int, str], float], dict[tuple[int, str], str]]:
    """Return what the registers read tell of some points: values, NaN where missing, and the reasons for those.

    A register that is not in `registers` makes its points ``not answered``.
    """
    values: dict[tuple[int, str], float] = {}
    reasons: dict[tuple[int, str], str] = {}
    for point in points:
        value, reason = _figure(point, registers)
        values[point.key] = value
        if reason:
            reasons[point.key] = reason
    return values, reasons


def image(register_map: RegisterMap, values: Mapping[tuple[int, str], float]) -> dict[RegisterKey, int]:
    """Return all registers of a meter whose quantities are `values`, scale registers included.

    A quantity that is not given is not implemented by this meter.
    """
    registers: dict[RegisterKey, int] = {}
    for point in register_map.points:
        words = encode(point, values.get(point.key, math.nan), point.exponent)
        registers.update({(point.table, point.address + index): word for index, word in enumerate(words)})
        if point.scale_address is not None:
            registers[point.table, point.scale_address] = point.exponent & 0xFFFF
    return registers


def _figure(point: Point, registers: Mapping[RegisterKey, int]) -> tuple[float, str]:
    words = [registers.get((point.table, point.address + index), -1) for index in range(point.words)]
    factor = 0 if point.scale_address is None else registers.get((point.table, point.scale_address), -1)
    if -1 in words or factor == -1:
        return math.nan, "not answered"
    exponent = factor - 0x10000 if factor >= SCALE_ABSENT else factor
    if factor == SCALE_ABSENT or abs(exponent) > LARGEST_EXPONENT:
        return math.nan, "not implemented"
    value = decode(point, words, exponent)
    if math.isnan(value):
        return math.nan, "not implemented"
    is_plausible = math.isfinite(value) and point.plausible[0] <= value <= point.plausible[1]
    return (value, "") if is_plausible else (math.nan, "implausible")


def _raw(point: Point, words: tuple[int, ...]) -> int:
    if len(words) == 1:
        return words[0]
    high, low = words if point.word_order == "high first" else reversed(words)
    return high << 16 | low


def _ordered(point: Point, pattern: int) -> tuple[int, ...]:
    if point.words == 1:
        return (pattern & 0xFFFF,)
    high, low = pattern >> 16 & 0xFFFF, pattern & 0xFFFF
    return (high, low) if point.word_order == "high first" else (low, high)


def _number(encoding: Encoding, raw: int) -> float:
    match encoding:
        case "float32":
            return float(struct.unpack(">f", raw.to_bytes(4, "big"))[0])
        case "int16":
            return float(raw - 0x10000 if raw >= 0x8000 else raw)
        case "int32":
            return float(raw - 0x1_0000_0000 if raw >= 0x8000_0000 else raw)
        case _:
            return float(raw)


_RANGES: Final[Mapping[str, tuple[int, int]]] = {
    "int16": (-0x7FFF, 0x7FFF),
    "uint16": (0, 0xFFFE),
    "int32": (-0x7FFF_FFFF, 0x7FFF_FFFF),
    "uint32": (0, 0xFFFF_FFFE),
    "bit": (0, 1),
}
"""What can be told in each encoding; the pattern that may say "not implemented" is left out."""


def _pattern(encoding: Encoding, number: float) -> int:
    if encoding == "float32":
        return int.from_bytes(struct.pack(">f", as_float32(number)), "big")
    least, most = _RANGES[encoding]
    return round(min(max(number, least), most)) & 0xFFFF_FFFF


# --------------------------------------------------------------------------
# Reading a map
# --------------------------------------------------------------------------

Address = Annotated[int, Field(ge=0, le=0xFFFF)]


class _Quantity(BaseModel):
    """``[[quantity]]`` of a map file."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    name: Annotated[str, Field(pattern=r"^[a-z][a-z0-9_]*$")]
    table: Table
    encoding: Encoding
    addresses: Mapping[Annotated[int, Field(ge=0, le=64)], Address] = Field(min_length=1)
    scale: Annotated[float, Field(gt=0)] = 1.0
    word_order: WordOrder = "high first"
    scale_address: Address | None = None
    exponent: Annotated[int, Field(ge=-10, le=10)] = 0
    absent: Annotated[int, Field(ge=0, le=0xFFFF_FFFF)] | None = None
    plausible: tuple[float, float] = (-math.inf, math.inf)
    group: Literal["fast", "slow"] = "fast"


class _Document(BaseModel):
    """A whole map file."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    title: str
    base: Address = 0
    reactive: Literal["signed", "unsigned", "none"] = "signed"
    line_voltages: Literal["measured", "computed"] = "measured"
    star: Literal["conductor", "artificial"] = "conductor"
    largest_block: Annotated[int, Field(ge=1, le=2000)] = 125
    gaps: bool = True
    answer_delay_s: Annotated[float, Field(ge=0, le=1)] = 0.02
    quantity: tuple[_Quantity, ...] = Field(min_length=1)


def read_register_map(name: str, document: Mapping[str, object]) -> RegisterMap:
    """Return the map a document holds. Raises `SettingsError` with all faults, each with its place."""
    try:
        read = _Document.model_validate(document)
    except ValidationError as error:
        raise SettingsError(_faults(name, [dict(detail) for detail in error.errors()])) from None
    points = tuple(point for quantity in read.quantity for point in _points(quantity, read.base))
    faults = (*_block_faults(name, read, points), *_double_faults(name, points), *_quantity_faults(name, read))
    if faults:
        raise SettingsError(faults)
    kept = read.model_dump(exclude={"quantity", "base"})
    return RegisterMap(name=name, points=points, **kept)


def _points(quantity: _Quantity, base: int) -> Iterable[Point]:
    kept = quantity.model_dump(exclude={"name", "addresses", "scale_address"})
    scale_address = None if quantity.scale_address is None else base + quantity.scale_address
    for channel, address in quantity.addresses.items():
        yield Point(quantity.name, channel, address=base + address, scale_address=scale_address, **kept)


def _faults(name: str, details: Sequence[Mapping[str, Any]]) -> Iterable[Fault]:
    """Return what is wrong, a list that is too short only for what its parts have wrong left out."""
    places = [detail["loc"] for detail in details]
    for detail in details:
        is_consequence = any(len(place) > len(detail["loc"]) and place[0] == detail["loc"][0] for place in places)
        if not (detail["type"] == "too_short" and is_consequence):
            yield _fault(name, detail)


def _fault(name: str, detail: Mapping[str, Any]) -> Fault:
    place = ".".join(str(part) for part in detail["loc"])
    if detail["type"] == "missing":
        return Fault(f"map {name}: {place}", "missing", "must be given")
    if detail["type"] == "extra_forbidden":
        return Fault(f"map {name}: {place}", repr(detail["input"]), "must not be there: no such key")
    wanted = str(detail["msg"]).partition(" should ")[2]  # "Input should be ...", "String should match ..."
    return Fault(f"map {name}: {place}", repr(detail["input"]), f"must {wanted}")


def _block_faults(name: str, read: _Document, points: tuple[Point, ...]) -> Iterable[Fault]:
    has_bits = any(point.table in ("coil", "discrete") for point in points)
    if not has_bits and read.largest_block > 125:
        yield Fault(f"map {name}: largest_block", str(read.largest_block), "must be at most 125 registers")
    if any(point.words > read.largest_block for point in points):
        yield Fault(f"map {name}: largest_block", str(read.largest_block), "must hold the largest value, two registers")
    if any(max(point.address + point.words - 1, point.scale_address or 0) > 0xFFFF for point in points):
        yield Fault(f"map {name}: base", str(read.base), "must leave every address at most 65535")


def _double_faults(name: str, points: tuple[Point, ...]) -> Iterable[Fault]:
    seen: set[tuple[int, str]] = set()
    for point in points:
        if point.key in seen:
            place = f"map {name}: quantity {point.quantity}"
            yield Fault(place, f"given twice for channel {point.channel}", "must be given once a channel")
        seen.add(point.key)


def _quantity_faults(name: str, read: _Document) -> Iterable[Fault]:
    for quantity in read.quantity:
        place = f"map {name}: quantity {quantity.name}"
        is_bit_table = quantity.table in ("coil", "discrete")
        if is_bit_table != (quantity.encoding == "bit"):
            yield Fault(f"{place}.encoding", repr(quantity.encoding), "must be 'bit' in bit tables and only there")
        if not quantity.plausible[0] < quantity.plausible[1]:
            yield Fault(f"{place}.plausible", str(list(quantity.plausible)), "must be the lower and the upper bound")
