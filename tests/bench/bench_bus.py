"""How close a bus cycle comes to its floor, and whether any wrong value passes among 5,000 faults.

``python tests/bench/bench_bus.py`` prints both tables; figures of a run stand in DEVELOPERS.md. Pace: the median of 300
cycles of four meters over the floor: bytes times bits a character over baud, two silences an exchange, and the meter's
own answer delay. Faults: 1,000 of each kind at random points on a fast line.
"""

import statistics
import struct
import sys
import time
from collections import Counter
from dataclasses import replace
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from fakes.modbus import Deliveries, FakeMeter, bus, holding, meter, shipped_map

from idlerwatch.core.polling import LineTiming, plan_meter, plan_time_s
from idlerwatch.core.registers import RegisterMap
from idlerwatch.core.values import Reading
from idlerwatch.rig.line import FAULT_KINDS, Faults, Line

DELAY_S = 0.02
CYCLES = 300


def pace(baudrate: int, map_name: str = "din-float32", cycles: int = CYCLES) -> tuple[float, float]:
    """Return the floor and the median time of a cycle of four meters. [s]"""
    devices = {address: FakeMeter(holding(map_name, 230.0), DELAY_S) for address in (1, 2, 3, 4)}
    timing = LineTiming(baudrate, 10, DELAY_S)
    plan = plan_meter(shipped_map(map_name), 1, timing)
    floor_s = 4.0 * plan_time_s(plan.fast, timing) + plan_time_s(plan.slow, timing)
    line = Line(devices, baudrate, 10)
    line.start()
    meters = [meter(f"m{address}", address, map_name) for address in devices]
    taken = []
    with Deliveries(bus(line.port, baudrate), meters, {map_name: shipped_map(map_name)}) as deliveries:
        for _ in range(cycles + 3):
            began = time.perf_counter()
            given = deliveries.cycle()
            taken.append(time.perf_counter() - began)
            assert all(isinstance(one, Reading) for one in given), given
    line.stop()
    return floor_s, statistics.median(taken[3:])


class Marked(FakeMeter):
    """Each value tells whose it is, where it stands, and the number of the answer, so that an old one is known."""

    def __init__(self, slave: int) -> None:
        super().__init__(answer_delay_s=0.001)
        self.slave = slave
        self.answers = 0

    def read(self, table: str, address: int, count: int) -> list[int]:
        self.answers += 1
        words: list[int] = []
        for at in range(address, address + count):
            pair = struct.pack(">f", float(self.slave * 1_000_000 + self.answers % 10_000 * 100 + at // 2))
            words.append(int.from_bytes(pair[2 * (at % 2) : 2 * (at % 2) + 2], "big"))
        return words


def faults(each: int, share: float = 0.1, baudrate: int = 115200) -> tuple[Counter[str], int, int, int]:
    """Return the faults made, the values that passed, those that were wrong, and the cycles."""
    register_map = _loose(shipped_map("din-float32"))
    devices = {address: Marked(address) for address in (1, 2, 3, 4)}
    line = Line(devices, baudrate, 10, faults=Faults(*(share,) * len(FAULT_KINDS)))
    line.start()
    meters = [meter(f"m{address}", address) for address in devices]
    passed = wrong = cycles = 0
    with Deliveries(bus(line.port, baudrate), meters, {"din-float32": register_map}, 0.3) as deliveries:
        while min((line.spoiled[kind] for kind in FAULT_KINDS), default=0) < each:
            before = {address: device.answers for address, device in devices.items()}
            given = deliveries.cycle()
            cycles += 1
            for one in given:
                if isinstance(one, Reading):
                    address = int(one.meter[1:])
                    passed += len(one.values) - len(one.reasons)
                    wrong += wrong_values(one, address, before[address], devices[address].answers)
    line.stop()
    return line.spoiled, passed, wrong, cycles


def wrong_values(reading: Reading, slave: int, before: int, after: int) -> int:
    """Count values that are another meter's, another register's, or were answered before this cycle began."""
    places = {"voltage": 0, "current": 3, "active_power": 6, "apparent_power": 9, "reactive_power": 12}
    places |= {"power_factor": 15, "frequency": 35, "active_energy_import": 36}
    fresh = {number % 10_000 for number in range(before + 1, after + 1)}
    wrong = 0
    for (channel, quantity), value in reading.values.items():
        if (channel, quantity) in reading.reasons:
            continue
        whose, rest = divmod(round(value), 1_000_000)
        number, place = divmod(rest, 100)
        wrong += not (whose == slave and place == places[quantity] and number in fresh)
    return wrong


def _loose(register_map: RegisterMap) -> RegisterMap:
    """Take the plausible ranges away: nothing but the frames may keep a wrong value out."""
    points = tuple(replace(point, plausible=(-1e9, 1e9), scale=1.0) for point in register_map.points)
    return replace(register_map, points=points)


def main() -> None:
    print("baud   floor s  median s  ratio")
    for baudrate in (9600, 19200, 38400):
        floor_s, median_s = pace(baudrate)
        print(f"{baudrate:6d} {floor_s:7.4f} {median_s:8.4f} {median_s / floor_s:7.3f}")
    began = time.monotonic()
    spoiled, passed, wrong, cycles = faults(int(sys.argv[1]) if len(sys.argv) > 1 else 1000)
    print(
        f"{dict(spoiled)}: {passed} values passed in {cycles} cycles, {wrong} wrong, {time.monotonic() - began:.0f} s"
    )


if __name__ == "__main__":
    main()
