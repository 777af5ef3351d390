"""How fast the recovery is: one live sample under eight hypotheses, and history under one and under eight.

    OPENBLAS_NUM_THREADS=1 python tests/bench/bench_circuit.py

One core. Each figure is the best of several repeats; the time of a fixed piece of arithmetic stands beside, so that
figures of different machines can be compared. The witness is scipy's least squares on the same weighted sum, sample by
sample (derivatives by differences, started where the recovery starts): how many times longer it needs, and how far its
angles are from the recovery's. Wirings are those of the study: L1-N feed and split phase, leg meters alone.
"""

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import sys
import time
from dataclasses import fields
from pathlib import Path

import numpy as np
from scipy.optimize import least_squares

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from bench_take import yardstick  # the script's own folder is on the path

from fakes.population import (  # the tests' path is set above
    Options,
    circuit_of,
    draw,
    learned_from,
    measure,
    measured_for_long,
    one_of,
    running,
    wiring_of,
)
from idlerwatch.core.converter.balance import Balance
from idlerwatch.core.converter.circuit import Positions
from idlerwatch.core.converter.hypotheses import catalogue
from idlerwatch.core.converter.recover import ANGLE_PRIOR, Recoverer, take

LIVE_BUDGET_S = 1.5e-3
HISTORY_TARGETS = {1: 100_000, 8: 12_000}
TIMES_FASTER = 50
SAME = 1e-6
HISTORY, WITNESSED = 8192, 100


def best_of(repeats, work):
    """Shortest time of several. [s]"""
    times = []
    for _ in range(repeats):
        began = time.perf_counter()
        work()
        times.append(time.perf_counter() - began)
    return min(times)


def prepared(feed):
    """A learned converter of the study, and samples of twenty of its load states."""
    population = draw(Options(feed=feed, count=2), 1)
    wiring = wiring_of(population)
    states = [measured_for_long(population, running(population)) for _ in range(12)]
    circuit = circuit_of(wiring, learned_from(population, wiring, states, 0))
    seen = [measure(population, running(population)) for _ in range(20)]
    return wiring, circuit, one_of(seen, 0)


def first(positions, count):
    return Positions(*(getattr(positions, field.name)[:count] for field in fields(Positions)))


def witnessed(recoverer, sample):
    """Solve samples one by one with scipy, each with the weights that the recovery has: angles (n, free), seconds."""
    wiring, circuit = recoverer.wiring, recoverer.circuit
    nominal = np.array([wiring.directions[leg] for leg in wiring.free])
    total = circuit.covariance + np.diag(circuit.noise**2)
    balance = Balance(wiring, recoverer.positions, np.zeros(1, dtype=np.int64), circuit.parameters)
    angles, seconds = [], 0.0
    for row in range(len(sample.rays)):
        seen = balance.seen(take(sample, [row]))
        root = np.linalg.cholesky(np.linalg.inv(spread_of(seen, total, circuit.discrepancy, nominal))).T

        def misfit(at, seen=seen, root=root):
            return np.concatenate([root @ seen.at(at[None]).residuals()[0], (at - nominal) / ANGLE_PRIOR])

        began = time.perf_counter()
        angles.append(least_squares(misfit, nominal, xtol=1e-10, ftol=1e-10, gtol=1e-10).x)
        seconds += time.perf_counter() - began
    return np.array(angles), seconds


def spread_of(seen, total, discrepancy, nominal):
    """Covariance of the rows one step from the nominal angles, as the recovery has it."""
    point = seen.at(nominal[None])
    slopes, left = point.by_angle()[0], point.residuals()[0]
    normal = (slopes / discrepancy**2) @ slopes.T + np.eye(len(slopes)) / ANGLE_PRIOR**2
    point = seen.at((nominal - np.linalg.solve(normal, (slopes / discrepancy**2) @ left))[None])
    by_parameter = point.by_parameter()[0]
    return by_parameter.T @ total @ by_parameter + np.diag((discrepancy * point.strain()[0]) ** 2)


def row(label, figure, target, is_met):
    print(f"{label:54} {figure:>18} {target:>18} {'met' if is_met else 'missed'}")
    return is_met


def run(feed):
    wiring, circuit, twenty = prepared(feed)
    known = catalogue(wiring, (1.0, 0.0))
    history = take(twenty, np.arange(HISTORY) % len(twenty.rays))
    met = []
    for count, target in HISTORY_TARGETS.items():
        recoverer = Recoverer(wiring, first(known.positions, count), circuit)
        if count == 8:
            live = take(twenty, [0])
            recoverer.recover(live)
            took = best_of(1000, lambda recoverer=recoverer, live=live: recoverer.recover(live))
            label = f"{feed}: one live sample, 8 hypotheses"
            met.append(row(label, f"{took * 1e3:.3f} ms", f"{LIVE_BUDGET_S * 1e3:.1f} ms", took <= LIVE_BUDGET_S))
        recoverer.recover(history)
        took = best_of(15, lambda recoverer=recoverer: recoverer.recover(history))
        rate = HISTORY / took
        label = f"{feed}: history, {count} hypothes{'i' if count == 1 else 'e'}s"
        met.append(row(label, f"{rate:.0f}/s", f"{target}/s", rate >= target))
        if count == 1:
            some = take(history, slice(WITNESSED))
            angles, seconds = witnessed(recoverer, some)
            ratio = seconds / WITNESSED * rate
            met.append(
                row(f"{feed}: scipy takes", f"{ratio:.0f} times", f"{TIMES_FASTER} times", ratio >= TIMES_FASTER)
            )
            away = np.abs(recoverer.recover(some).angles[:, 0] - angles).max()
            met.append(row(f"{feed}: its angles differ by", f"{away:.1e} rad", f"{SAME:.0e} rad", away <= SAME))
    return all(met)


def main():
    print(f"yardstick (a million additions): {best_of(5, yardstick) * 1e3:.1f} ms")
    print(f"{'':54} {'measured':>18} {'target':>18}")
    met = [run(feed) for feed in ("L1-N", "split-phase")]
    return 0 if all(met) else 1


if __name__ == "__main__":
    sys.exit(main())
