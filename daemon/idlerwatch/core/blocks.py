"""What the journal keeps, as bytes and back: cycles and windows in blocks, bit for bit.

A block is a list of *items*. An item has a *shape* (a text that says what it is and which numbers follow), *instants*
(float64, kept bit for bit) and *values* (float32). Shapes are few and stand once in each file; an item names its shape
by number. In a block the numbers of one shape stand together, column by column: instants as differences of their bit
patterns (integers, so exactly invertible), values with equal bytes of neighbouring numbers side by side. Both make
them short for zlib.

A cycle is the items of its meters in the order in which they came, then one for its end, which carries the sequence
number and the number of the settings in force. A window row is one item.
"""

import json
import zlib
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final, Literal, cast

import numpy as np
from numpy.typing import NDArray

from idlerwatch.core.values import CycleEnd, FigureKey, MeterSilent, Reading, WindowRow

Kind = Literal["cycle", "window", "event"]
_LEVEL: Final = 9


@dataclass(frozen=True, slots=True)
class Cycle:
    """What the meters said in one cycle, its end, and the number of the settings in force."""

    sequence: int
    inputs: tuple[Reading | MeterSilent, ...]
    end: CycleEnd
    settings: int

    @property
    def utc(self) -> float:
        """When the cycle ended, POSIX seconds."""
        return self.end.at + self.end.utc_offset


@dataclass(frozen=True, slots=True)
class Window:
    """One row for the database."""

    sequence: int
    row: WindowRow

    @property
    def utc(self) -> float:
        """When the window began, POSIX seconds."""
        return self.row.start_utc


@dataclass(frozen=True, slots=True)
class Event:
    """Something that happened: `name` is ``alarm``, ``told``, ``settings``, ``clock``, ``start``, ``stop``, ..."""

    sequence: int
    utc: float
    name: str
    body: Mapping[str, Any]


Record = Cycle | Window | Event


@dataclass(frozen=True, slots=True)
class Item:
    """One entry of a block: the number of its shape, its float64 instants, its float32 values."""

    shape: int
    instants: tuple[float, ...]
    values: tuple[float, ...]


NumberShape = Callable[[str], int]
"""Gives a shape's number in the file that is written, a new one where the shape is new."""


def cycle_items(cycle: Cycle, number: NumberShape) -> Iterator[Item]:
    """Yield the items of a cycle, its end last."""
    for given in cycle.inputs:
        match given:
            case Reading(meter, at, values, reasons):
                shape = ["reading", meter, [[*key] for key in values], [[*key, why] for key, why in reasons.items()]]
                yield Item(number(_text(shape)), (at,), tuple(values.values()))
            case MeterSilent(meter, at, reason):
                yield Item(number(_text(["silent", meter, reason])), (at,), ())
    end = cycle.end
    instants = (float(cycle.sequence), end.at, end.utc_offset, end.local_offset)
    yield Item(number(_text(["end", cycle.settings])), instants, ())


def window_item(window: Window, number: NumberShape) -> Item:
    """Return the item of a window row."""
    row = window.row
    shape = ["window", row.window, row.measurement, row.subject, [*row.fields]]
    return Item(number(_text(shape)), (float(window.sequence), row.start_utc), tuple(row.fields.values()))


def read_cycles(items: Iterable[Item], shapes: Mapping[int, str]) -> Iterator[Cycle]:
    """Yield the cycles that a block's items make."""
    known = _Shapes(shapes)
    inputs: list[Reading | MeterSilent] = []
    for item in items:
        match known.read(item.shape):
            case ["reading", meter, keys, reasons]:
                inputs.append(Reading(meter, item.instants[0], dict(zip(keys, item.values, strict=True)), {**reasons}))
            case ["silent", meter, reason]:
                inputs.append(MeterSilent(meter, item.instants[0], reason))
            case ["end", settings]:
                sequence, *end = item.instants
                yield Cycle(int(sequence), tuple(inputs), CycleEnd(*end), settings)
                inputs = []


def read_windows(items: Iterable[Item], shapes: Mapping[int, str]) -> Iterator[Window]:
    """Yield the window rows of a block."""
    known = _Shapes(shapes)
    for item in items:
        _, window, measurement, subject, fields = known.read(item.shape)
        sequence, start = item.instants
        row = WindowRow(window, start, measurement, subject, dict(zip(fields, item.values, strict=True)))
        yield Window(int(sequence), row)


class _Shapes:
    """Shapes read from their texts, each once."""

    def __init__(self, texts: Mapping[int, str]) -> None:
        self._texts = texts
        self._read: dict[int, list[Any]] = {}

    def read(self, number: int) -> list[Any]:
        if number not in self._read:
            shape = cast("list[Any]", json.loads(self._texts[number]))
            if shape[0] == "reading":
                shape[2] = [_key(key) for key in shape[2]]
                shape[3] = {_key(entry[:2]): entry[2] for entry in shape[3]}
            self._read[number] = shape
        return self._read[number]


def _key(pair: Sequence[Any]) -> FigureKey:
    return (pair[0], pair[1])


def _text(shape: list[Any]) -> str:
    return json.dumps(shape, separators=(",", ":"), ensure_ascii=False)


def pack(items: Sequence[Item]) -> bytes:
    """Return the items as one compressed block.

    Examples
    --------
    >>> items = [Item(3, (0.1, 1e9), (230.5,)), Item(7, (), ()), Item(3, (1.1, 1e9), (231.0,))]
    >>> list(unpack(pack(items))) == items
    True
    """
    groups: dict[int, list[Item]] = {}
    for item in items:
        groups.setdefault(item.shape, []).append(item)
    head = [(shape, len(group), len(group[0].instants), len(group[0].values)) for shape, group in groups.items()]
    parts = [np.array([len(items), len(head)], "<u4").tobytes(), np.array(head, "<u4").tobytes()]
    parts.append(np.array([item.shape for item in items], "<u4").tobytes())
    parts.extend(_pack_instants(group) for group in groups.values())
    parts.extend(_pack_values(group) for group in groups.values())
    return zlib.compress(b"".join(parts), _LEVEL)


def unpack(block: bytes) -> Iterator[Item]:
    """Yield the items of a block in their order."""
    data = _Bytes(zlib.decompress(block))
    count, kinds = (int(number) for number in data.take("<u4", 2))
    head = data.take("<u4", 4 * kinds).reshape(-1, 4).tolist()
    order = data.take("<u4", count).tolist()
    instants = {shape: _unpack_instants(data, rows, width) for shape, rows, width, _ in head}
    values = {shape: _unpack_values(data, rows, width) for shape, rows, _, width in head}
    rows = {shape: iter(zip(instants[shape], values[shape], strict=True)) for shape in instants}
    for shape in order:
        instant, value = next(rows[shape])
        yield Item(shape, tuple(instant), tuple(value))


def _pack_instants(group: Sequence[Item]) -> bytes:
    bits = np.array([item.instants for item in group], "<f8").view("<i8").reshape(len(group), -1)
    return _shuffle(np.diff(bits, axis=0, prepend=np.zeros((1, bits.shape[1]), "<i8")))


def _unpack_instants(data: "_Bytes", rows: int, width: int) -> list[list[float]]:
    bits = np.cumsum(_unshuffle(data, "<i8", rows, width), axis=0, dtype="<i8")
    return cast("list[list[float]]", np.ascontiguousarray(bits).view("<f8").reshape(rows, width).tolist())


def _pack_values(group: Sequence[Item]) -> bytes:
    return _shuffle(np.array([item.values for item in group], "<f4").view("<u4").reshape(len(group), -1))


def _unpack_values(data: "_Bytes", rows: int, width: int) -> list[list[float]]:
    bits = np.ascontiguousarray(_unshuffle(data, "<u4", rows, width))
    return cast("list[list[float]]", bits.view("<f4").reshape(rows, width).tolist())


def _shuffle(numbers: NDArray[Any]) -> bytes:
    """Columns one after the other, and of those all first bytes, all second bytes, and so on."""
    columns = np.ascontiguousarray(numbers.T)
    return np.ascontiguousarray(columns.view("u1").reshape(columns.size, columns.itemsize).T).tobytes()


def _unshuffle(data: "_Bytes", dtype: str, rows: int, width: int) -> NDArray[Any]:
    size = np.dtype(dtype).itemsize
    planes = data.take("u1", rows * width * size).reshape(size, rows * width)
    return np.ascontiguousarray(planes.T).view(dtype).reshape(width, rows).T


class _Bytes:
    """Bytes that are taken from the front."""

    def __init__(self, data: bytes) -> None:
        self._data = data
        self._at = 0

    def take(self, dtype: str, count: int) -> NDArray[Any]:
        taken = np.frombuffer(self._data, dtype, count, self._at)
        self._at += taken.nbytes
        return taken
