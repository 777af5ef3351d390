"""Whatever a line does to answers, no wrong value passes as a reading."""

import time
from collections import Counter
from concurrent.futures import ThreadPoolExecutor

import pytest

from fakes.marked import MarkedMeter, marked_map, poll_through_faults, wrong_values
from fakes.modbus import Deliveries, bus, meter
from idlerwatch.core.values import Reading
from idlerwatch.rig.line import FAULT_KINDS, Faults, Line

FAULTS_EACH = 20


STOOD_STILL_S = 1.5
"""No cycle of one meter takes this long, unless nothing on the machine was running."""
LINES = 5
"""Lines spoiled side by side: most of the time is waiting."""


def test_no_wrong_value_passes_among_twenty_of_each_fault():
    each = FAULTS_EACH // LINES
    with ThreadPoolExecutor(LINES) as pool:
        outcomes = list(pool.map(poll_through_faults, [each] * LINES, [0.15] * LINES, range(LINES)))
    spoiled = sum((outcome[0] for outcome in outcomes), Counter())
    assert min(spoiled[kind] for kind in FAULT_KINDS) >= FAULTS_EACH
    assert sum(outcome[1] for outcome in outcomes) > 100
    assert sum(outcome[2] for outcome in outcomes) == 0


@pytest.fixture
def marked():
    device = MarkedMeter(1)
    line = Line({1: device}, 115200)
    line.start()
    with Deliveries(bus(line.port), [meter("m1", 1)], {"din-float32": marked_map()}, 0.05) as deliveries:
        deliveries.cycle()
        yield line, device, deliveries
    line.stop()


@pytest.mark.parametrize("latest_s", [0.15, 0.3, 0.6, 1.0])
def test_a_late_answer_to_the_same_block_is_never_the_next_cycles(marked, latest_s):
    line, device, deliveries = marked
    line.faults = Faults(latest_s=latest_s)
    line.script.append("late")
    deadline = time.monotonic() + latest_s + 0.5
    readings = 0
    while time.monotonic() < deadline:  # cycles as fast as they go, until the late answer has surely come
        before, began = device.answers, time.monotonic()
        (given,) = deliveries.cycle()
        if time.monotonic() - began > STOOD_STILL_S:
            pytest.skip("the machine stood still for so long that the late answer came later than is promised")
        if isinstance(given, Reading):
            readings += 1
            assert wrong_values(given, 1, range(before + 1, device.answers + 1)) == 0
    assert readings >= 2, "there was nothing to be wrong"


@pytest.mark.parametrize("kind", ["corrupted", "foreign", "truncated", "lost"])
def test_a_spoiled_answer_is_asked_again_while_there_is_time(kind):
    device = MarkedMeter(1)
    line = Line({1: device}, 115200)
    line.start()
    with Deliveries(bus(line.port), [meter("m1", 1)], {"din-float32": marked_map()}, 1.0) as deliveries:
        deliveries.cycle()
        for _ in range(5):
            line.script.append(kind)
            before = device.answers
            began = time.monotonic()
            (given,) = deliveries.cycle()
            assert isinstance(given, Reading)
            assert not given.reasons
            assert wrong_values(given, 1, range(before + 1, device.answers + 1)) == 0
            assert time.monotonic() - began < 1.0
    line.stop()


@pytest.mark.parametrize("kind", FAULT_KINDS)
def test_one_meters_faults_cost_the_others_nothing(kind):
    devices = {1: MarkedMeter(1), 2: MarkedMeter(2)}
    line = Line(devices, 115200)
    line.start()
    meters = [meter("m1", 1), meter("m2", 2)]
    with Deliveries(bus(line.port), meters, {"din-float32": marked_map()}, 1.0) as deliveries:
        deliveries.cycle()
        line.script.extend([kind])
        given = {one.meter: one for one in deliveries.cycle()}
        assert isinstance(given["m2"], Reading)
        assert not given["m2"].reasons
    line.stop()
