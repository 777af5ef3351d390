"""Which block reads fetch the wanted registers in the least time on the wire.

An exchange costs 8 bytes of request, 5 bytes of answer beside the data, two silences, and the time the meter thinks;
registers fetched in between cost their bytes. Wanted registers in rising order, a block is always a run of neighbours:
in any other partition two blocks overlap, and taking the overlap out of one of them costs less. So the least over all
partitions is the least over all cuts, which dynamic programming finds exactly: the least for the first k is the least
over j of (least for the first j) + (one block from j to k).

Answers carry no number, so a late answer can be taken for the next one of the same shape. Of all least plans the one is
chosen in which most neighbours differ in length, and a block whose answer is still owed can be asked for in another
shape (`reshaped`).
"""

import itertools
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

from idlerwatch.core.frames import FUNCTIONS, REQUEST_BYTES, SHORTEST_ANSWER, Shape, data_bytes, silence_s
from idlerwatch.core.registers import Point, RegisterMap, Table


@dataclass(frozen=True, slots=True)
class LineTiming:
    """What an exchange costs on a line: baud rate, bits a character (start, 8, parity, stop), the meter's delay."""

    baudrate: int
    character_bits: int = 10
    answer_delay_s: float = 0.02

    def bytes_s(self, count: int) -> float:
        """Return the time that bytes take. [s]"""
        return count * self.character_bits / self.baudrate

    @property
    def silence_s(self) -> float:
        """Silence between two frames. [s]"""
        return silence_s(self.baudrate)

    def exchange_s(self, table: Table, count: int) -> float:
        """Return the time one block read takes. [s]"""
        wire = self.bytes_s(REQUEST_BYTES + SHORTEST_ANSWER + data_bytes(table, count))
        return wire + 2.0 * self.silence_s + self.answer_delay_s


@dataclass(frozen=True, slots=True)
class BlockLimits:
    """What a meter allows: the largest block, and whether registers that belong to nothing may be read."""

    largest_block: int = 125
    gaps: bool = True


@dataclass(frozen=True, slots=True)
class Block:
    """One block read."""

    table: Table
    address: int
    count: int

    @property
    def end(self) -> int:
        """First address behind the block."""
        return self.address + self.count

    def shape(self, slave: int) -> Shape:
        """Return what a slave's answer will look like."""
        return Shape(slave, FUNCTIONS[self.table], data_bytes(self.table, self.count))


Span = tuple[int, int]
"""First address, and the first behind it."""


def plan_blocks(points: Iterable[Point], limits: BlockLimits, timing: LineTiming) -> tuple[Block, ...]:
    """Return the block reads that fetch the points (and their scale factors) in the least time.

    Examples
    --------
    >>> volts, amps = Point("voltage", 1, "input", 0, "float32"), Point("current", 1, "input", 6, "float32")
    >>> plan_blocks([volts, amps], BlockLimits(), LineTiming(9600))
    (Block(table='input', address=0, count=8),)
    """
    wanted = wanted_spans(points)
    return tuple(block for table, spans in wanted.items() for block in _plan_table(table, spans, limits, timing))


def plan_time_s(blocks: Iterable[Block], timing: LineTiming) -> float:
    """Return the time a plan takes. [s]"""
    return sum(timing.exchange_s(block.table, block.count) for block in blocks)


def wanted_spans(points: Iterable[Point]) -> dict[Table, tuple[Span, ...]]:
    """Return what must not be cut apart, by table and by rising address: each point, and each scale factor."""
    spans: dict[Table, set[Span]] = {}
    for point in points:
        table = spans.setdefault(point.table, set())
        table.add((point.address, point.address + point.words))
        if point.scale_address is not None:
            table.add((point.scale_address, point.scale_address + 1))
    return {table: _merged(found) for table, found in sorted(spans.items())}


def _merged(spans: Iterable[Span]) -> tuple[Span, ...]:
    """Join spans that overlap."""
    merged: list[Span] = []
    for first, end in sorted(spans):
        if merged and first < merged[-1][1]:
            merged[-1] = (merged[-1][0], max(end, merged[-1][1]))
        else:
            merged.append((first, end))
    return tuple(merged)


@dataclass(frozen=True, slots=True)
class _Plan:
    """The best way to fetch the first spans: its time, how many neighbours are of one length, its blocks."""

    time_s: float
    alike: int
    blocks: tuple[Block, ...]

    def then(self, block: Block, time_s: float) -> "_Plan":
        is_alike = bool(self.blocks) and self.blocks[-1].count == block.count
        return _Plan(self.time_s + time_s, self.alike + is_alike, (*self.blocks, block))

    @property
    def rank(self) -> tuple[float, int, int]:
        return (round(self.time_s, 9), self.alike, len(self.blocks))


def _plan_table(table: Table, spans: Sequence[Span], limits: BlockLimits, timing: LineTiming) -> tuple[Block, ...]:
    """Least time first; of equal times the plan with the fewest neighbours alike.

    For each prefix the best plan is kept for every length its last block may have, since that length decides what the
    next one is alike to.
    """
    best: list[dict[int, _Plan]] = [{0: _Plan(0.0, 0, ())}]
    for end in range(1, len(spans) + 1):
        found: dict[int, _Plan] = {}
        for start in range(end):
            block = _block(table, spans[start:end], limits)
            if block is None:
                continue
            time_s = timing.exchange_s(table, block.count)
            plan = min((previous.then(block, time_s) for previous in best[start].values()), key=lambda p: p.rank)
            if block.count not in found or plan.rank < found[block.count].rank:
                found[block.count] = plan
        best.append(found)
    return min(best[-1].values(), key=lambda plan: plan.rank).blocks


def _block(table: Table, spans: Sequence[Span], limits: BlockLimits) -> Block | None:
    """Return the block that fetches neighbouring spans; None where the meter does not allow it."""
    count = spans[-1][1] - spans[0][0]
    has_gap = any(left[1] < right[0] for left, right in itertools.pairwise(spans))
    if count > limits.largest_block or (has_gap and not limits.gaps):
        return None
    return Block(table, spans[0][0], count)


# --------------------------------------------------------------------------
# What a meter is asked
# --------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class MeterPlan:
    """What one meter is asked: each cycle, now and then, and when it is silent; `known` spans by table of the map."""

    fast: tuple[Block, ...]
    slow: tuple[Block, ...]
    probe: Block
    limits: BlockLimits
    spans: tuple[tuple[Table, tuple[Span, ...]], ...]


def plan_meter(register_map: RegisterMap, channels: int, timing: LineTiming) -> MeterPlan:
    """Return what a meter is asked of its map's first `channels` channels (0: all) and of the whole meter."""
    limits = BlockLimits(register_map.largest_block, register_map.gaps)
    points = wanted_points(register_map, channels)
    fast = plan_blocks((point for point in points if point.group == "fast"), limits, timing)
    slow = plan_blocks((point for point in points if point.group == "slow"), limits, timing)
    spans = wanted_spans(points)
    table, first = next((table, found[0]) for table, found in spans.items())
    probe = Block(table, first[0], first[1] - first[0])
    return MeterPlan(fast, slow, probe, limits, tuple(spans.items()))


def wanted_points(register_map: RegisterMap, channels: int) -> tuple[Point, ...]:
    """Return the points of the first `channels` channels (0: all) and of the whole meter."""
    return tuple(point for point in register_map.points if not channels or point.channel <= channels)


def reshaped(block: Block, owed: Iterable[Shape], slave: int, plan: MeterPlan) -> tuple[Block, ...]:
    """Return block reads that fetch the same, none of a shape that is still owed; empty where there are none.

    The block itself where nothing like it is owed; else a longer one within what the map knows; else two parts.
    """
    shapes = set(owed)
    ways = itertools.chain([(block,)], _longer(block, plan), _parts(block, plan))
    return next((way for way in ways if not _clashes(way, shapes, slave)), ())


def _clashes(way: Sequence[Block], owed: set[Shape], slave: int) -> bool:
    shapes = [block.shape(slave) for block in way]
    return len(set(shapes)) < len(shapes) or not owed.isdisjoint(shapes)


def _longer(block: Block, plan: MeterPlan) -> Iterable[tuple[Block, ...]]:
    """Longer blocks within the addresses the map knows, where gaps may be read; none takes half of anything along.

    Half a float fetched again would be put together with the other half of an earlier answer.
    """
    spans = dict(plan.spans)[block.table]
    least, most = spans[0][0], spans[-1][1]
    if not plan.limits.gaps:
        return
    for count in range(block.count + 1, min(plan.limits.largest_block, most - least) + 1):
        for address in range(min(block.address, most - count), max(least, block.end - count) - 1, -1):
            if not any(first < edge < end for edge in (address, address + count) for first, end in spans):
                yield (replace(block, address=address, count=count),)
                break


def _parts(block: Block, plan: MeterPlan) -> Iterable[tuple[Block, ...]]:
    """Two blocks of different length, cut where nothing is cut apart, the most unequal first."""
    inside = [span for span in dict(plan.spans)[block.table] if block.address <= span[0] and span[1] <= block.end]
    for cut in range(1, len(inside)):
        left, right = inside[:cut], inside[cut:]
        yield tuple(Block(block.table, part[0][0], part[-1][1] - part[0][0]) for part in (left, right))
