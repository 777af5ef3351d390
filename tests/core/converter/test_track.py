"""Capacitors over a simulated day of mixed use: supply 216 to 253 V, machines coming and going, one that has aged."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from fakes.population import Options, channels_of, draw, measure, rig, running, wiring_of
from idlerwatch.core.converter.circuit import Positions, Sample
from idlerwatch.core.converter.hypotheses import catalogue
from idlerwatch.core.converter.learn import Recorded, learn
from idlerwatch.core.converter.nameplate import Nameplate
from idlerwatch.core.converter.prior import Limits, prior_of
from idlerwatch.core.converter.recover import Circuit, take
from idlerwatch.core.converter.track import WANDERS, begin_tracking, is_separable, track

COUNT, STATES, DAY = 10, 12, 16


def stacked(seen, index):
    return Sample(*(np.stack([getattr(one.sample, name)[index] for one in seen]) for name in Sample.__slots__))


@cache
def learning_of(feed, options):
    population = draw(Options(feed=feed, count=COUNT, **dict(options)), 21)
    return population, [measure(population, running(population)) for _ in range(STATES)]


@cache
def days(feed, lost, **options):
    """Return for each converter: what was tracked in a day, and the true changes."""
    return list(_days(feed, lost, tuple(options.items())))


def _days(feed, lost, options):
    population, learning = learning_of(feed, options)
    ratio = np.ones_like(population.plant.capacitors.farads)
    ratio[:, :4] -= lost
    faults = replace(rig.no_faults(population.plant), capacitor_ratio=ratio)
    day = [measure(population, running(population, faults=faults)) for _ in range(DAY)]
    for index in range(COUNT):
        wiring = wiring_of(population, index)
        ways = catalogue(wiring, (1.0, 0.0))
        expected = Positions(*(getattr(ways.positions, name)[:1] for name in Positions.__slots__))
        plate = Nameplate(float(population.kilowatts[index]), population.plant.feed.line_voltage)
        rays = len(wiring.rays)
        limits = Limits([0.005] * rays, [0.01] * len(channels_of(population.options)), (), [0.005] * len(wiring.lines))
        prior = prior_of(wiring, [plate], limits)
        discrepancy = np.full(wiring.rows, 0.002 * wiring.rated_current)
        recorded = Recorded(stacked(learning, index), expected, np.zeros(STATES, dtype=np.int64))
        found = learn(wiring, recorded, prior, discrepancy)
        noise = np.where([name.startswith("can") for name in wiring.names], 0.0, 0.00025)
        circuit = Circuit(found.parameters, found.covariance, noise, discrepancy)
        tracking = begin_tracking(wiring)
        states = stacked(day, index)
        for state in range(DAY):
            tracking = track(tracking, wiring, expected, take(states, [state]), circuit, elapsed=3600.0)
        true = -np.array(lost) * population.plant.capacitors.farads[index, :4] / population.marked[index, :4]
        yield tracking, true


@pytest.mark.parametrize(
    ("can", "options"),
    [(0, {}), (1, {}), (0, {"has_supply_meter": True}), (1, {"has_supply_meter": True})],
)
def test_a_capacitor_that_lost_a_tenth_is_estimated_within_three_points_in_a_day(can, options):
    lost = tuple(0.1 if index == can else 0.0 for index in range(4))
    misses = [abs(tracking.change[can] - true[can]) for tracking, true in days("L1-N", lost, **options)]
    assert max(misses) < 0.03


def test_what_is_stated_covers_what_is_missed():
    found = list(days("L1-N", (0.1, 0.0, 0.0, 0.0), has_supply_meter=True))
    ratios = [np.abs(tracking.change - true)[:3] / tracking.standards[:3] for tracking, true in found]
    assert np.mean(np.array(ratios) < 2.0) > 0.85


def test_a_can_that_is_never_in_is_not_separable_and_keeps_its_prior():
    for tracking, _ in days("L1-N", (0.1, 0.0, 0.0, 0.0)):
        assert not is_separable(tracking)[3]
        assert tracking.standards[3] == pytest.approx(0.1, rel=0.2)
        assert abs(tracking.change[3]) < 1e-6
        assert is_separable(tracking)[0]
        break


def test_cans_across_one_pair_are_not_told_apart():
    """C1 and C3 stand across the same pair of a split-phase converter: only their sum is known."""
    for tracking, true in days("split-phase", (0.1, 0.0, 0.0, 0.0), has_supply_meter=True):
        assert not is_separable(tracking)[2]
        assert abs((tracking.change - true)[0]) < 3.0 * tracking.standards[0]


def test_what_is_known_fades_with_time_and_no_state_moves_the_circuit():
    population = draw(Options(count=1), 3)
    wiring = wiring_of(population)
    tracking = begin_tracking(wiring)
    ways = catalogue(wiring, (1.0, 0.0))
    expected = Positions(*(getattr(ways.positions, name)[:1] for name in Positions.__slots__))
    prior = prior_of(wiring, [Nameplate(7.5, 400.0)], Limits([0.005] * 3, [0.01] * 2))
    discrepancy = np.full(wiring.rows, 0.03)
    circuit = Circuit(prior.mean, np.diag(prior.standard**2) * 1e-6, np.zeros(len(prior.mean)), discrepancy)
    sample = measure(population, running(population)).sample
    early = track(tracking, wiring, expected, sample, circuit, elapsed=0.0)
    assert (early.standards[:2] < tracking.standards[:2]).all()
    late = track(early, wiring, expected, replace(sample, spreads=sample.spreads + 1e4), circuit, elapsed=30 * 86400.0)
    assert late.standards[0] ** 2 == pytest.approx(early.standards[0] ** 2 + WANDERS**2, rel=1e-3)
    assert circuit.parameters is prior.mean
