"""How long `Watch.take` needs for one cycle: median and 99th percentile, for installations of four to six meters.

    python tests/bench/bench_take.py

Prints a row an installation: the whole cycle (all readings and its end), and the end alone. The budget is 2.5
milliseconds at each end of a cycle, everything included, a learned circuit with all its hypotheses too; the time of a
fixed piece of arithmetic stands beside it, so that figures of different machines can be compared.
"""

import os
import random
import statistics
import sys
import time
from functools import partial
from pathlib import Path

import numpy as np

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # as the unit has it
sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from fakes.days import Shed, learned, started  # the tests' path is set above
from fakes.sheds import (
    LEG_METERS,
    cycle,
    running,
    said,
    slipway_lines,
    split_phase,
    split_running,
    supply_says,
)
from idlerwatch.core.converter.known import KnownCircuit
from idlerwatch.core.values import CycleEnd
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.watch import Watch
from idlerwatch.core.watch.wiring import circuit_plan
from idlerwatch.edges.files import config_directory, load_settings

BUDGET_S = 2.5e-3
CYCLES = 3000


def six_voltages():
    lines = {(k, "voltage"): v for k, v in enumerate((230.0, 228.0, 233.0, 396.0, 400.0, 401.0), 1)}
    powers = {
        (k, q): v for k in (1, 2, 3) for q, v in (("current", 5.0), ("active_power", 800.0), ("reactive_power", 700.0))
    }
    return {"supply": supply_says(current=22.0, power=3000.0), "legs": lines | powers, "earth": said(1.5)}


def example():
    """The shipped example: supply, three leg meters, transducer, bank ammeter, and the whole alarm list."""
    return load_settings(config_directory() / "example.toml")


def renamed(meters):
    return {name.replace("leg-", "leg"): values for name, values in meters.items()}


def with_alarms(settings):
    return settings.model_copy(update={"alarms": example().alarms})


def loaded():
    return running(**{f"leg_{k}": said(229.0 + k, 5.0, 800.0, 700.0) for k in (1, 2, 3)})


INSTALLATIONS = {
    "the example, none of it fits": (example(), renamed(loaded())),
    "three meters, six voltages": (with_alarms(slipway_lines()), six_voltages()),
    "six meters, six voltages": (
        with_alarms(slipway_lines(*LEG_METERS)),
        six_voltages() | {f"leg-{k}": said(229.0 + k, 5.0, 800.0, 700.0) for k in (1, 2, 3)},
    ),
    "two meters, split phase": (with_alarms(split_phase()), split_running()),
}


def shaken(meters, chance):
    return {
        name: {key: value * chance.gauss(1.0, 2e-4) for key, value in values.items()} for name, values in meters.items()
    }


def known(settings):
    """The plate's values as if they had been learned: what a learned circuit adds to a cycle is then in it."""
    own = circuit_plan(settings, compile_plan(settings))
    if own is None:
        return None
    covariance = np.diag(own.prior.standard**2) / 25.0
    return KnownCircuit(
        own.wiring.names, own.prior.mean, covariance, "", own.converter, own.arrangement, 12, 120, 216.0, 253.0, 0.4,
        1.0, has_converged=True,
    )  # fmt: skip


def on_the_rig():
    """The example's own converter with its planer at work, as its meters see it, and the circuit learned from it."""
    shed = started(Shed(example(), 3)).machines(planer=0.5).settle(3.0)
    streams, stream = [], []
    for item in shed.steady(CYCLES // 3):
        stream.append(item)
        if isinstance(item, CycleEnd):
            streams.append(stream)
            stream = []
    return streams, learned(example(), 3)


def run(settings, meters):
    chance = random.Random(7)
    streams = [list(cycle(float(at), shaken(meters, chance))) for at in range(CYCLES)]
    return timed(Watch.begin(settings, known=known(settings)), streams)


def timed(watch, streams):
    ends, wholes = [], []
    for stream in streams:
        whole = 0.0
        for event in stream:
            began = time.perf_counter()
            watch, _ = watch.take(event)
            took = time.perf_counter() - began
            whole += took
            if isinstance(event, CycleEnd):
                ends.append(took)
        wholes.append(whole)
    return ends[100:], wholes[100:]


def yardstick():
    """A fixed piece of arithmetic of plain Python: a million additions. [s]"""
    began = time.perf_counter()
    total = 0
    for number in range(1_000_000):
        total += number
    return time.perf_counter() - began


def main():
    print(f"yardstick (a million additions): {yardstick() * 1e3:.1f} ms")
    print(f"{'installation':30} {'end, median':>12} {'end, p99':>12} {'cycle, median':>14} {'cycle, p99':>12}")
    worst = 0.0
    streams, circuit = on_the_rig()
    rows = {"the example on the rig": lambda: timed(Watch.begin(example(), known=circuit), streams)}
    rows |= {name: partial(run, *given) for name, given in INSTALLATIONS.items()}
    for name, row in rows.items():
        ends, wholes = row()
        figures = [
            each * 1e3
            for times in (ends, wholes)
            for each in (statistics.median(times), statistics.quantiles(times, n=100)[98])
        ]
        worst = max(worst, statistics.median(ends))
        print(f"{name:30} {figures[0]:9.3f} ms {figures[1]:9.3f} ms {figures[2]:11.3f} ms {figures[3]:9.3f} ms")
    print(f"median over budget of {BUDGET_S * 1e3:.1f} ms: {worst / BUDGET_S:.2f}")
    return 0 if worst <= BUDGET_S else 1


if __name__ == "__main__":
    sys.exit(main())
