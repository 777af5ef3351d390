"""A meter whose every value tells whose it is, which register it stands in and which answer it came with."""

import struct
from collections import Counter
from dataclasses import replace

from fakes.modbus import Deliveries, FakeMeter, bus, meter, shipped_map
from idlerwatch.core.registers import RegisterMap, Table
from idlerwatch.core.values import Reading
from idlerwatch.rig.line import FAULT_KINDS, Faults, Line

NUMBERS = 10_000
"""Answers are numbered up to this, and then from 0 again."""


class MarkedMeter(FakeMeter):
    """Float32 registers: slave * 1e6 + number of the answer * 100 + register / 2, exact in 24 bits for slaves to 15."""

    def __init__(self, slave: int) -> None:
        super().__init__(answer_delay_s=0.001)
        self.slave = slave
        self.answers = 0

    def read(self, table: Table, address: int, count: int) -> list[int]:
        self.answers += 1
        words: list[int] = []
        for at in range(address, address + count):
            pair = struct.pack(">f", float(self.slave * 1_000_000 + self.answers % NUMBERS * 100 + at // 2))
            words.append(int.from_bytes(pair[2 * (at % 2) : 2 * (at % 2) + 2], "big"))
        return words


def marked_map() -> RegisterMap:
    """The spread layout without plausible ranges: nothing but the frames may keep a wrong value out."""
    register_map = shipped_map("din-float32")
    points = tuple(replace(point, plausible=(-1e9, 1e9), scale=1.0) for point in register_map.points)
    return replace(register_map, points=points)


def wrong_values(reading: Reading, slave: int, fresh: range) -> int:
    """Count values of another meter, of another register, or of an answer not in `fresh` (those of this cycle)."""
    places = {(point.channel, point.quantity): point.address // 2 for point in marked_map().points}
    numbers = {number % NUMBERS for number in fresh}
    wrong = 0
    for key, value in reading.values.items():
        if key not in reading.reasons:
            whose, rest = divmod(round(value), 1_000_000)
            number, place = divmod(rest, 100)
            wrong += not (whose == slave and place == places[key] and number in numbers)
    return wrong


def poll_through_faults(
    each: int, share: float, seed: int = 1, cycle_s: float = 0.15, baudrate: int = 115200
) -> tuple[Counter[str], int, int]:
    """Poll four meters until `each` of every fault was made at random points; return the faults, values, wrong ones."""
    devices = {address: MarkedMeter(address) for address in (1, 2, 3, 4)}
    line = Line(devices, baudrate, faults=Faults(*(share,) * len(FAULT_KINDS)), seed=seed)
    line.start()
    meters = [meter(f"m{address}", address) for address in devices]
    passed = wrong = 0
    with Deliveries(bus(line.port, baudrate), meters, {"din-float32": marked_map()}, cycle_s) as deliveries:
        while min(line.spoiled[kind] for kind in FAULT_KINDS) < each:
            before = {address: device.answers for address, device in devices.items()}
            for one in deliveries.cycle():
                if isinstance(one, Reading):
                    address = int(one.meter[1:])
                    passed += len(one.values) - len(one.reasons)
                    wrong += wrong_values(one, address, range(before[address] + 1, devices[address].answers + 1))
    line.stop()
    return line.spoiled, passed, wrong
