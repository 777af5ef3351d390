"""Block reads: least time over all partitions, what a meter allows, and shapes that are owed."""

import itertools

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fakes.modbus import shipped_map
from idlerwatch.core.frames import Shape
from idlerwatch.core.polling import (
    Block,
    BlockLimits,
    LineTiming,
    plan_blocks,
    plan_meter,
    plan_time_s,
    reshaped,
    wanted_spans,
)
from idlerwatch.core.registers import Point

BAUDRATES = (9600, 19200, 38400)


def partitions(items):
    """All set partitions of a few items."""
    if not items:
        yield []
        return
    first, *rest = items
    for smaller in partitions(rest):
        for index, part in enumerate(smaller):
            yield [*smaller[:index], [first, *part], *smaller[index + 1 :]]
        yield [[first], *smaller]


def least_time(points, limits, timing):
    """The least over all partitions, by trying them all: no neighbours, no order, no programme."""
    total = 0.0
    for table, spans in wanted_spans(points).items():
        total += min(cost for part in partitions(list(spans)) if (cost := partition_time(part, table, limits, timing)))
    return total


def partition_time(partition, table, limits, timing):
    total = 0.0
    for part in partition:
        first, end = min(span[0] for span in part), max(span[1] for span in part)
        covered = set().union(*(range(*span) for span in part))
        if end - first > limits.largest_block or (not limits.gaps and len(covered) < end - first):
            return None
        total += timing.exchange_s(table, end - first)
    return total


POINTS = st.lists(st.tuples(st.integers(0, 60), st.sampled_from(["int16", "float32"])), min_size=1, max_size=7)


@settings(max_examples=120, deadline=None)
@given(
    places=POINTS,
    largest=st.integers(2, 125),
    gaps=st.booleans(),
    baudrate=st.sampled_from(BAUDRATES),
    delay=st.sampled_from([0.0, 0.02, 0.1]),
)
def test_a_plan_takes_the_least_time_of_all_partitions(places, largest, gaps, baudrate, delay):
    points = [Point(f"q{n}", 0, "input", 2 * address, enc) for n, (address, enc) in enumerate(dict(places).items())]
    limits, timing = BlockLimits(largest, gaps), LineTiming(baudrate, 10, delay)
    blocks = plan_blocks(points, limits, timing)
    assert plan_time_s(blocks, timing) == pytest.approx(least_time(points, limits, timing), rel=1e-12)
    fetched = set().union(*(range(block.address, block.end) for block in blocks))
    assert all({point.address, point.address + point.words - 1} <= fetched for point in points)
    assert all(block.count <= largest for block in blocks)


@pytest.mark.parametrize("baudrate", BAUDRATES)
@pytest.mark.parametrize(
    ("name", "share"),
    [("din-float32", 0.6), ("module-scaled", 0.32), ("sunspec-203", 0.32), ("sunspec-213", 0.32)],
)
def test_a_plan_takes_a_fraction_of_asking_quantity_by_quantity(name, share, baudrate):
    timing = LineTiming(baudrate, 10, 0.02)
    fast = [point for point in shipped_map(name).points if point.group == "fast"]
    singly = sum(timing.exchange_s(point.table, point.words) for point in fast)
    assert plan_time_s(plan_meter(shipped_map(name), 0, timing).fast, timing) <= share * singly


def test_tables_are_never_mixed():
    points = [Point("a", 0, "input", 0, "int16"), Point("b", 0, "holding", 1, "int16")]
    blocks = plan_blocks(points, BlockLimits(), LineTiming(9600))
    assert blocks == (Block("holding", 1, 1), Block("input", 0, 1))


@pytest.mark.parametrize(("largest", "blocks"), [(4, 1), (3, 2)])
def test_the_largest_block_is_kept_on_both_sides(largest, blocks):
    points = [Point("a", 0, "input", 0, "float32"), Point("b", 0, "input", 2, "float32")]
    assert len(plan_blocks(points, BlockLimits(largest), LineTiming(9600))) == blocks


def test_gaps_are_left_out_where_the_meter_refuses_them():
    points = [Point("a", 0, "input", 0, "int16"), Point("b", 0, "input", 2, "int16")]
    assert len(plan_blocks(points, BlockLimits(gaps=True), LineTiming(9600))) == 1
    assert len(plan_blocks(points, BlockLimits(gaps=False), LineTiming(9600))) == 2


def test_scale_factors_are_fetched_as_well():
    blocks = plan_blocks([Point("a", 0, "holding", 2, "int16", scale_address=6)], BlockLimits(), LineTiming(9600))
    assert blocks == (Block("holding", 2, 5),)


def test_of_equal_plans_the_one_with_neighbours_of_different_length_is_taken():
    points = [Point(f"q{n}", 0, "input", 2 * n, "float32") for n in range(4)]
    blocks = plan_blocks(points, BlockLimits(largest_block=6), LineTiming(9600))
    assert sorted(block.count for block in blocks) == [2, 6]
    assert all(left.count != right.count for left, right in itertools.pairwise(blocks))


def test_a_slow_group_has_blocks_of_its_own():
    plan = plan_meter(shipped_map("din-float32"), 1, LineTiming(9600))
    assert plan.slow == (Block("input", 72, 2),)
    assert all(block.end <= 72 for block in plan.fast)


def test_channels_that_are_not_wired_are_not_asked_for():
    timing = LineTiming(9600)
    assert plan_meter(shipped_map("discrete-inputs"), 2, timing).fast == (Block("discrete", 0, 2),)
    assert plan_meter(shipped_map("discrete-inputs"), 0, timing).fast == (Block("discrete", 0, 8),)


@pytest.mark.parametrize("name", ["din-float32", "module-scaled", "sunspec-203", "sunspec-213"])
@settings(max_examples=40, deadline=None)
@given(counts=st.sets(st.integers(1, 125), max_size=30))
def test_nothing_is_asked_for_in_a_shape_that_is_owed(name, counts):
    plan = plan_meter(shipped_map(name), 0, LineTiming(9600))
    for block in plan.fast:
        owed = {Block(block.table, 0, count).shape(7) for count in counts}
        way = reshaped(block, owed, 7, plan)
        shapes = [part.shape(7) for part in way]
        assert owed.isdisjoint(shapes)
        assert len(set(shapes)) == len(shapes)
        if way:
            fetched = set().union(*(range(part.address, part.end) for part in way))
            wanted = set().union(*(range(*span) for span in dict(plan.spans)[block.table])) & set(
                range(block.address, block.end)
            )
            assert wanted <= fetched


def test_another_meters_debts_do_not_matter():
    plan = plan_meter(shipped_map("din-float32"), 1, LineTiming(9600))
    block = plan.fast[0]
    assert reshaped(block, [block.shape(8)], 7, plan) == (block,)
    assert reshaped(block, [block.shape(7)], 7, plan) != (block,)


def test_a_single_register_that_is_owed_is_not_asked_for():
    plan = plan_meter(shipped_map("voltage-transducer"), 1, LineTiming(9600))
    assert reshaped(plan.fast[0], [Shape(7, 4, 2)], 7, plan) == ()


@pytest.mark.parametrize("name", ["din-float32", "module-scaled", "sunspec-203", "sunspec-213"])
def test_no_reshaped_block_takes_half_a_value_along(name):
    """Half a float fetched again would be put together with the other half of an earlier answer."""
    plan = plan_meter(shipped_map(name), 0, LineTiming(9600))
    spans = dict(plan.spans)
    for block in (*plan.fast, *plan.slow, plan.probe):
        owed = set()
        while way := reshaped(block, owed, 1, plan):
            for part in way:
                for first, end in spans[part.table]:
                    inside = max(min(end, part.end) - max(first, part.address), 0)
                    assert inside in (0, end - first), (part, first, end)
                owed.add(part.shape(1))
        assert owed
