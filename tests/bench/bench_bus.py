"""How close a bus cycle comes to its floor, and whether any wrong value passes among 5,000 faults.

``python tests/bench/bench_bus.py`` prints both tables; figures of a run stand in DEVELOPERS.md. Pace: the median of 300
cycles of four meters over the floor: bytes times bits a character over baud, two silences an exchange, and the meter's
own answer delay. Faults: 1,000 of each kind at random points on a fast line.
"""

import statistics
import sys
import time
from collections import Counter
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))  # the fakes, when run as a script

from fakes.marked import poll_through_faults
from fakes.modbus import Deliveries, FakeMeter, bus, holding, meter, shipped_map
from idlerwatch.core.polling import LineTiming, plan_meter, plan_time_s
from idlerwatch.core.values import Reading
from idlerwatch.rig.line import Line

DELAY_S = 0.02
CYCLES = 300
LINES = 20
"""Lines that are spoiled side by side; most of the time is waiting."""


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


def main() -> None:
    print("baud   floor s  median s  ratio")
    for baudrate in (9600, 19200, 38400):
        floor_s, median_s = pace(baudrate)
        print(f"{baudrate:6d} {floor_s:7.4f} {median_s:8.4f} {median_s / floor_s:7.3f}")
    began = time.monotonic()
    each = int(sys.argv[1]) if len(sys.argv) > 1 else 1000
    with ProcessPoolExecutor(LINES) as pool:
        outcomes = list(pool.map(poll_through_faults, [each // LINES] * LINES, [0.15] * LINES, range(LINES)))
    spoiled = sum((outcome[0] for outcome in outcomes), Counter())
    passed, wrong = (sum(outcome[index] for outcome in outcomes) for index in (1, 2))
    print(f"{dict(spoiled)}: {passed} values passed, {wrong} of them wrong, {time.monotonic() - began:.0f} s")


if __name__ == "__main__":
    main()
