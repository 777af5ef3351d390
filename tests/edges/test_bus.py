"""The bus thread on a virtual line: what is delivered, meters silent, refusing and booting, and ports that vanish."""

import math
import time

import pytest

from fakes.modbus import Deliveries, FakeMeter, bus, holding, meter, shipped_map
from idlerwatch.core.values import MeterSilent, Reading, Trouble
from idlerwatch.rig.line import Faults, Line

DIN = {"din-float32": shipped_map("din-float32")}


@pytest.fixture
def line():
    devices = {address: FakeMeter(holding("din-float32", 200.0 + address)) for address in (1, 2, 3)}
    made = Line(devices, 115200)
    made.devices = devices
    made.start()
    yield made
    made.stop()


def polling(line, addresses=(1, 2, 3), cycle_s=1.0, boot_s=0.0, maps=DIN):
    meters = [meter(f"m{address}", address, boot_s=boot_s) for address in addresses]
    return Deliveries(bus(line.port), meters, maps, cycle_s)


def test_every_meter_is_delivered_once_a_cycle_with_its_values(line):
    with polling(line) as deliveries:
        for _ in range(3):
            given = deliveries.by_meter()
            assert {name: one.values[1, "voltage"] for name, one in given.items()} == {"m1": 201, "m2": 202, "m3": 203}


def test_the_instant_lies_within_the_cycle(line):
    with polling(line) as deliveries:
        began = time.monotonic()
        given = deliveries.by_meter()
        assert all(began <= one.at <= time.monotonic() for one in given.values())


def test_the_slow_group_is_one_meters_a_cycle_in_turn(line):
    with polling(line) as deliveries:
        turns = [
            [name for name, one in deliveries.by_meter().items() if (1, "active_energy_import") in one.values]
            for _ in range(6)
        ]
    assert [len(turn) for turn in turns] == [1] * 6
    assert sorted(name for turn in turns[:3] for name in turn) == ["m1", "m2", "m3"]


def test_the_daemon_never_writes(line):
    line.faults = Faults(lost=0.1, corrupted=0.1, truncated=0.1, foreign=0.1)
    with polling(line, cycle_s=0.3) as deliveries:
        for _ in range(15):
            deliveries.cycle()
    assert len(line.requests) > 30
    assert {request.function for request in line.requests} <= {1, 2, 3, 4}


def test_a_silent_meter_is_asked_one_short_block_once(line):
    line.devices[2].is_silent = True
    with polling(line, cycle_s=0.5) as deliveries:
        assert deliveries.by_meter()["m2"].reason == "no answer"
        line.requests.clear()
        given = deliveries.by_meter()
    asked = [request for request in line.requests if request.slave == 2]
    assert given["m2"].reason == "no answer"
    assert len(asked) == 1
    assert asked[0].count < 10
    assert isinstance(given["m1"], Reading)


def test_of_several_silent_meters_one_a_cycle_is_asked_in_turn(line):
    line.devices[2].is_silent = line.devices[3].is_silent = True
    with polling(line, cycle_s=0.5) as deliveries:
        deliveries.cycle()
        reasons = []
        for _ in range(4):
            given = deliveries.by_meter()
            reasons.append((given["m2"].reason, given["m3"].reason))
    assert all(sorted(pair) == ["no answer", "not asked"] for pair in reasons)
    assert len(set(reasons)) == 2


def test_a_meter_that_is_back_is_read_in_the_same_cycle(line):
    line.devices[2].is_silent = True
    with polling(line, cycle_s=0.5) as deliveries:
        deliveries.cycle()
        deliveries.cycle()
        line.devices[2].is_silent = False
        assert deliveries.by_meter()["m2"].values[1, "voltage"] == 202


def test_readings_are_discarded_while_a_meter_boots_after_silence(line):
    with polling(line, boot_s=0.3, cycle_s=0.5) as deliveries:
        assert isinstance(deliveries.by_meter()["m2"], Reading)
        line.devices[2].is_silent = True
        for _ in range(3):
            deliveries.cycle()
        line.devices[2].is_silent = False
        back = time.monotonic()
        given = deliveries.by_meter()
        assert given["m2"].reason == "booting"
        assert isinstance(given["m1"], Reading)
        while isinstance(given["m2"], MeterSilent):
            assert given["m2"].reason == "booting"
            assert time.monotonic() - back < 5.0
            given = deliveries.by_meter()
        assert given["m2"].at - back >= 0.3


def test_one_lost_answer_is_no_boot(line):
    with polling(line, boot_s=60.0, cycle_s=0.1) as deliveries:
        deliveries.cycle()
        line.script.append("lost")
        deliveries.cycle()
        deadline = time.monotonic() + 5.0
        while not all(isinstance(one, Reading) for one in deliveries.by_meter().values()):
            assert time.monotonic() < deadline


def test_a_lost_answer_is_asked_again_within_the_cycle(line):
    with polling(line) as deliveries:
        deliveries.cycle()
        line.script.append("lost")
        assert all(isinstance(one, Reading) and not one.reasons for one in deliveries.by_meter().values())


def test_nothing_is_asked_again_when_no_time_is_left(line):
    with polling(line, cycle_s=0.01) as deliveries:
        deliveries.cycle()
        line.script.append("lost")
        assert deliveries.by_meter()["m1"].reason == "no answer"


def test_a_refusal_ends_at_once_and_is_told(line):
    line.devices[2].refusal = 2
    with polling(line, cycle_s=0.05) as deliveries:
        deliveries.cycle()
        began = time.monotonic()
        given = deliveries.by_meter()
        assert given["m2"].reason == "refused"
        assert time.monotonic() - began < 0.15  # the time-out alone would take 0.12 a question
    assert deliveries.thread.statistics()["m2"].failed["refused"] >= 2


def test_an_implausible_value_is_missing_with_a_reason(line):
    line.devices[1].registers.update(holding("din-float32", 5000.0))
    with polling(line) as deliveries:
        given = deliveries.by_meter()["m1"]
    assert math.isnan(given.values[1, "voltage"])
    assert given.reasons == {(1, "voltage"): "implausible"}


def test_discrete_inputs_become_zero_and_one():
    device = FakeMeter({("discrete", 0): 1, ("discrete", 2): 1})
    line = Line({9: device}, 115200)
    line.start()
    maps = {"discrete-inputs": shipped_map("discrete-inputs")}
    with Deliveries(bus(line.port), [meter("io", 9, "discrete-inputs")], maps) as deliveries:
        values = deliveries.by_meter()["io"].values
    line.stop()
    assert [values[number, "input"] for number in range(1, 9)] == [1, 0, 1, 0, 0, 0, 0, 0]


def test_time_outs_follow_the_meters_measured_delay(line):
    line.devices[1].answer_delay_s = 0.2
    with polling(line) as deliveries:
        for _ in range(3):
            given = deliveries.by_meter()
        assert isinstance(given["m1"], Reading)
        slow, quick = deliveries.thread.statistics()["m1"], deliveries.thread.statistics()["m2"]
    assert slow.answer_delay_s == pytest.approx(0.2, abs=0.05)
    assert quick.answer_delay_s < 0.05


def test_an_adapter_pulled_and_put_back_twenty_times_is_told_once_each_way(line):
    with polling(line, cycle_s=0.2) as deliveries:
        assert all(isinstance(one, Reading) for one in deliveries.cycle())
        told = []
        for _ in range(20):
            line.unplug()
            gone = deliveries.cycle()
            assert [one.reason for one in gone if isinstance(one, MeterSilent)] == ["port gone"] * 3
            told += [one.text for one in gone if isinstance(one, Trouble)]
            line.plug()
            back = deliveries.cycle()
            told += [one.text for one in back if isinstance(one, Trouble)]
            assert all(isinstance(one, Reading) for one in back if not isinstance(one, Trouble))
        assert deliveries.thread._thread.is_alive()
    assert len(told) == 40
    assert [bool(text) for text in told] == [True, False] * 20


def test_a_port_that_stays_away_is_told_once(line):
    with polling(line, cycle_s=0.2) as deliveries:
        deliveries.cycle()
        line.unplug()
        troubles = [one for _ in range(4) for one in deliveries.cycle() if isinstance(one, Trouble)]
    assert [(one.part, bool(one.text)) for one in troubles] == [("bus panel", True)]


@pytest.mark.parametrize("port", ["/nowhere/port", "nonsense://host:1", "socket://127.0.0.1:9"])
def test_a_port_that_cannot_be_opened_is_told_and_the_thread_lives(port):
    with Deliveries(bus(port), [meter("m1", 1)], DIN) as deliveries:
        given = deliveries.cycle()
        assert {type(one) for one in given} == {Trouble, MeterSilent}
        assert [type(one) for one in deliveries.cycle()] == [MeterSilent]
