"""How well angles and bank positions are recovered: random converters on the rig, seen by imperfect meters.

    python tests/bench/bench_recovery.py [--count 1000] [--seed 2] [--only NAME]

Prints two Markdown tables; progress goes to stderr; a few minutes a row. Every converter is drawn anew (4 to 15 kW),
learned from load states on its own meters (each the mean of ten readings) and its plate, and then judged by one later
reading. The constants in `fakes.population` and in the core were chosen on seed 1.

First table: the error of the voltage unbalance factor against the rig's own, how often it is within its stated expanded
uncertainty (k = 2, once a converter), and beside it the error of taking the phase voltage unbalance rate for it.
Second table: three positions of the banks for each converter, twenty one-second readings each. Wrong is a converter and
position for which at any of the twenty a bank was held, with a probability beyond 0.999, to stand as it did not. Bounds
are those of Clopper and Pearson, one-sided, 95 %.
"""

import os

os.environ["OPENBLAS_NUM_THREADS"] = "1"

import argparse
import datetime as dt
import multiprocessing
import sys
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from scipy import stats

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from fakes.population import (  # the tests' path is set above
    IDEAL,
    NOISE,
    Options,
    circuit_of,
    draw,
    in_running,
    learned_from,
    measure,
    measured_for_long,
    one_of,
    running,
    signed_ways,
    wiring_of,
)
from idlerwatch.core.conductors import LINE_PAIRS
from idlerwatch.core.converter.belief import begin_belief, believe, decided, probabilities, probability_of
from idlerwatch.core.converter.conductor_map import fit_conductors
from idlerwatch.core.converter.hypotheses import PART, catalogue
from idlerwatch.core.converter.recover import Recoverer
from idlerwatch.core.electrical.sequence import TO_COMPONENTS
from idlerwatch.core.electrical.unbalance import phase_voltage_unbalance_rate

PROCESSES = 2
TRIMMED, UNTRIMMED = (0.15, 0.45), (0.20, 0.60)
"""Limits of the median and the 95th percentile of the error, in percentage points."""
COVERAGE = (92.0, 98.0)
READINGS = 20
STEP = 0.1
POSITIONS = ((True, False), (False, False), (True, True))


@dataclass(frozen=True)
class Row:
    """One row: what varies, how many load states are learned from, and the limits that hold for it."""

    name: str
    options: Options = field(default_factory=Options)
    states: int = 12
    limits: tuple[float, float] | None = None


def split(**options):
    return Options(feed="split-phase", **options)


LEVEL_3 = {"has_supply_meter": True, "has_bank_ammeter": True}
ANGLES = (
    Row("1 (supply meter only), L1-N", states=0),
    Row("2 (three line voltages), L1-N", Options(has_lines=True), 0),
    Row("2, untrimmed, L1-N", Options(has_lines=True, trimmed=None), 0),
    Row("2s, trimmed, L1-N", Options(), limits=TRIMMED),
    Row("2s, trimmed, split-phase", split(), limits=TRIMMED),
    Row("2s, trimmed, two lines without N", Options(feed="line"), limits=TRIMMED),
    Row("2s, untrimmed, L1-N", Options(trimmed=None), limits=UNTRIMMED),
    Row("2s, untrimmed, split-phase", split(trimmed=None), limits=UNTRIMMED),
    Row("2s, untrimmed, two lines without N", Options(feed="line", trimmed=None), limits=UNTRIMMED),
    Row("2s and supply meter, L1-N", Options(has_supply_meter=True)),
    Row("2s and supply meter, split-phase", split(has_supply_meter=True)),
    Row("3, L1-N", Options(**LEVEL_3)),
    Row("3, split-phase", split(**LEVEL_3)),
    Row("2s, nothing left out, L1-N", Options(**IDEAL, is_saturating=False, quantised=False)),
    Row("2s, nothing left out, split-phase", split(**IDEAL, is_saturating=False, quantised=False)),
    Row("2s, unsigned reactive power, L1-N", Options(is_unsigned=True)),
    Row("2s, the same, capacitor at a machine, L1-N", Options(is_unsigned=True, at_machines=0.15)),
    Row("2s, a drive of a quarter, L1-N", Options(drive=0.25)),
    Row("2s, a drive of a quarter, split-phase", split(drive=0.25)),
    Row("2s, machines that regenerate, L1-N", Options(least_load=-0.6)),
    Row("2s, three load states, L1-N", Options(), 3),
    Row("2s, three load states, split-phase", split(), 3),
)
SMALL = {"smallest_can": 0.005, "largest_can": 0.03}
BANKS = (
    Row("bank, 2s, L1-N", limits=(0.001, 3.0)),
    Row("bank, 2s, split-phase", split(), limits=(0.001, 3.0)),
    Row("bank, 2s, two lines without N", Options(feed="line"), limits=(0.001, 3.0)),
    Row("bank, 2s, untrimmed, L1-N", Options(trimmed=None), limits=(0.001, 3.0)),
    Row("bank, 2s, untrimmed, split-phase", split(trimmed=None), limits=(0.001, 3.0)),
    Row("bank, 2s and supply meter, split-phase", split(has_supply_meter=True), limits=(0.001, 3.0)),
    Row("bank, 3, L1-N", Options(**LEVEL_3), limits=(0.001, 3.0)),
    Row("bank, 2s, three load states, L1-N", Options(), 3),
    Row("bank, 2s, capacitors of 0.5 to 3 %, L1-N", Options(**SMALL)),
    Row("bank, 2s, capacitors of 0.5 to 3 %, split-phase", split(**SMALL)),
)


# --------------------------------------------------------------------------
# The unbalance factor
# --------------------------------------------------------------------------


def by_geometry(population, seen):
    """Return the factor out of three line voltages, and its standard uncertainty: (n,), (n,)."""
    lines, options = seen.sample.lines, population.options
    gain = options.gain / np.sqrt(3.0) if options.trimmed is None else options.trimmed
    standards = np.hypot(lines * np.hypot(gain, NOISE), STEP / np.sqrt(12.0))
    found = fit_conductors(population.plant.feed, LINE_PAIRS, lines, standards)
    _, positive, negative = np.moveaxis(found.points[:, :3] @ TO_COMPONENTS.T, -1, 0)
    _, positive_moves, negative_moves = np.moveaxis(found.moves[..., :3] @ TO_COMPONENTS.T, -1, 0)
    ratio = negative / positive
    moves = (negative_moves - ratio[:, None] * positive_moves) / positive[:, None]
    along = (moves * (ratio.conj() / np.abs(ratio))[:, None]).real
    return np.abs(ratio), np.sqrt((along**2).sum(axis=1))


def by_balance(population, states, seen):
    """Return the factor out of what was learned, its standard uncertainty, and how many did converge."""
    found, converged = [], 0
    for index in range(population.options.count):
        wiring = wiring_of(population, index)
        learned = learned_from(population, wiring, states, index)
        converged += learned.has_converged
        ways = signed_ways(wiring) if population.options.is_unsigned else in_running(wiring)
        recovery = Recoverer(wiring, ways, circuit_of(wiring, learned)).recover(one_of([seen], index))
        found.append((recovery.quantities[0, 3], recovery.standards[0, 3]))
    return *np.array(found).T, converged


def angles(row, count, seed):
    if row.name.startswith("1 "):
        return f"| {row.name} | - | not seen | | | | | | |"
    population = draw(replaced(row.options, count), seed)
    states = [measured_for_long(population, running(population)) for _ in range(row.states)]
    seen = measure(population, running(population))
    if states:
        factor, standard, converged = by_balance(population, states, seen)
    else:
        (factor, standard), converged = by_geometry(population, seen), None
    error = 100.0 * np.abs(factor - seen.factor)
    covered = int(np.sum(np.abs(factor - seen.factor) <= 2.0 * standard))
    beside = (" - ", " - ")
    if row.options.feed != "line":
        rate = phase_voltage_unbalance_rate(seen.sample.rays)
        beside = [f"{each:.2f}" for each in np.percentile(100.0 * np.abs(rate - seen.factor), (50, 95))]
    median, high = np.percentile(error, (50, 95))
    learning = "-" if converged is None else f"{count - converged} of {count}"
    figures = (learning, f"{median:.3f}", f"{high:.3f}", f"{error.max():.2f}", coverage(covered, count), *beside)
    return f"| {row.name} | {' | '.join(figures)} | {verdict(row, median, high, 100.0 * covered / count)} |"


def replaced(options, count):
    return Options(**(vars(options) | {"count": count}))


def coverage(covered, count):
    interval = stats.binomtest(covered, count).proportion_ci(0.95, method="exact")
    return f"{100.0 * covered / count:.1f} ({100.0 * interval.low:.1f} to {100.0 * interval.high:.1f})"


def verdict(row, median, high, covered):
    if row.limits is None:
        return ""
    missed = [
        name
        for name, is_met in (
            ("median", median <= row.limits[0]),
            ("95th", high <= row.limits[1]),
            ("coverage", COVERAGE[0] <= covered <= COVERAGE[1]),
        )
        if not is_met
    ]
    return f"misses {', '.join(missed)}" if missed else "met"


# --------------------------------------------------------------------------
# Positions of the banks
# --------------------------------------------------------------------------


def positions(row, count, seed):
    population = draw(replaced(row.options, count), seed)
    states = [measured_for_long(population, running(population)) for _ in range(row.states)]
    views = [running(population, np.full(count, run), np.full(count, start)) for run, start in POSITIONS]
    seen = [[measure(population, view) for _ in range(READINGS)] for view in views]
    outcomes = [outcome for index in range(count) for outcome in converter_positions(population, states, seen, index)]
    wrong = sum(is_wrong for is_wrong, _ in outcomes)
    needed = [samples for _, samples in outcomes if samples is not None]
    total = len(outcomes)
    bound = stats.beta.ppf(0.95, wrong + 1, total - wrong)
    median, high = np.percentile(needed, (50, 95)) if needed else (np.nan, np.nan)
    undecided = 100.0 * (total - len(needed)) / total
    met = "" if row.limits is None else "met" if bound <= row.limits[0] and median <= row.limits[1] else "missed"
    if met == "missed" and wrong / total <= row.limits[0] and median <= row.limits[1]:
        met = "met, its bound not"
    figures = (f"{total}", f"{wrong}", f"{1e3 * bound:.2f}", f"{median:.0f}", f"{high:.0f}", f"{undecided:.1f} %", met)
    return f"| {row.name} | {' | '.join(figures)} |"


def converter_positions(population, states, seen, index):
    """Yield for each position whether anything wrong was decided, and after how many samples both banks were."""
    wiring = wiring_of(population, index)
    learned = learned_from(population, wiring, states, index)
    known = catalogue(wiring, (1.0, 0.0))
    recoverer = Recoverer(wiring, known.positions, circuit_of(wiring, learned))
    for truth, readings in zip(POSITIONS, seen, strict=True):
        yield judged(known, recoverer.recover(one_of(readings, index)).log_likelihood, truth)


def judged(known, log_likelihoods, truth):
    belief, samples, is_wrong = begin_belief(len(known.hypotheses)), None, False
    for log_likelihood in log_likelihoods:
        belief = believe(belief, log_likelihood)
        shares = probabilities(belief, known.weights)
        told = [standing(known, shares, bank) for bank in range(len(truth))]
        is_wrong = is_wrong or any(
            said is not None and said != float(true) for said, true in zip(told, truth, strict=True)
        )
        if samples is None and None not in told:
            samples = belief.samples
    return is_wrong, samples


def standing(known, shares, bank):
    """Return the share closed that is decided for a bank; None while none is."""
    ways = (0.0, PART, 1.0)
    each = [
        probability_of(lambda number, way=way: known.hypotheses[number].closed[bank] == way, shares) for way in ways
    ]
    chosen = decided(each)
    return None if chosen is None else ways[chosen]


# --------------------------------------------------------------------------


def work(job):
    row, count, seed = job
    return (positions if row.name.startswith("bank") else angles)(row, count, seed)


HEAD = (
    "| wiring level | not converged | median | 95 % | worst | within k = 2 [%] | PVUR: median | PVUR: 95 % | limits |\n"
    "|---|---|---|---|---|---|---|---|---|"
)
BANK_HEAD = (
    "| wiring level | converter-positions | wrong | bound [1/1000] | samples: median | 95 % | undecided | limits |\n"
    "|---|---|---|---|---|---|---|---|"
)


def main():
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--count", type=int, default=1000, help="converters a row")
    parser.add_argument("--seed", type=int, default=2)
    parser.add_argument("--only", default="", help="rows whose name contains this")
    asked = parser.parse_args()
    print(f"{dt.datetime.now(tz=dt.UTC):%Y-%m-%d}, seed {asked.seed}, {asked.count} converters a row.")
    with multiprocessing.Pool(PROCESSES, maxtasksperchild=1) as pool:
        for head, rows in ((HEAD, ANGLES), (BANK_HEAD, BANKS)):
            chosen = [row for row in rows if asked.only in row.name]
            print(f"\n{head}" if chosen else "", flush=True)
            for done, line in enumerate(pool.imap(work, [(row, asked.count, asked.seed) for row in chosen], 1), 1):
                print(line, flush=True)
                print(f"{done} of {len(chosen)} rows", file=sys.stderr)


if __name__ == "__main__":
    main()
