"""A shed on the rig without a clock: seconds of it as the core's inputs, as fast as they can be worked out.

A settled plant is not stepped further: its meters show the same instant again and again, each time with their noise.
"""

from dataclasses import replace

import numpy as np

from idlerwatch.core.converter.circuit import Sample
from idlerwatch.core.converter.hypotheses import catalogue
from idlerwatch.core.converter.known import KnownCircuit
from idlerwatch.core.converter.learn import Recorded, learn
from idlerwatch.core.registers import figures
from idlerwatch.core.values import Assessment, CycleEnd, MeterSilent, Reading
from idlerwatch.core.watch.align import begin_align
from idlerwatch.core.watch.align import step as align_step
from idlerwatch.core.watch.circuit import circuit_sample
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.derive import derive
from idlerwatch.core.watch.watch import Watch
from idlerwatch.core.watch.wiring import circuit_plan
from idlerwatch.rig.build import build_plant
from idlerwatch.rig.meters import virtual_meters
from idlerwatch.rig.plant import STEP_S, begin, look, no_faults, no_orders, step

SETTLES_S = 1.2


class Shed:
    """One converter with its meters; orders, faults and seconds as a test wants them."""

    def __init__(self, settings, seed=1):
        self.settings = settings
        self.plant = build_plant(settings, seed)
        self.meters = [meter for bus in virtual_meters(settings, seed).values() for meter in bus.values()]
        self.state = begin(self.plant)
        self.orders, self.faults = no_orders(self.plant), no_faults(self.plant)
        self.view = None
        self.at = 0.0

    def order(self, **changes):
        """Set orders by their names in `Orders`; plain values are spread over the arrays."""
        self.orders = _spread(self.orders, changes)
        return self

    def fault(self, **changes):
        self.faults = _spread(self.faults, changes)
        return self

    def machines(self, **loads):
        """Switch machines on at a share of their power; those not named go off."""
        names = self.plant.motors.names
        on = np.array([[name in loads for name in names]])
        load = np.array([[loads.get(name, 0.0) for name in names]])
        return self.order(motor_on=on, motor_load=load)

    def steps(self, seconds):
        """Step the plant, its meters looking on at every step; yield the inputs of each whole second."""
        for _ in range(round(seconds)):
            for _ in range(round(1.0 / STEP_S)):
                self._step()
            yield from self._answers()

    def settle(self, seconds=SETTLES_S):
        """Step the plant without anybody looking, until it is steady."""
        for _ in range(round(seconds / STEP_S)):
            self._step(looking=False)
        return self

    def steady(self, seconds):
        """Yield the inputs of so many seconds of the plant as it stands."""
        for _ in range(round(seconds)):
            self.at += 1.0
            for meter in self.meters:
                meter.feed(replace(self.view, time=self.at))
            yield from self._answers()

    def _step(self, *, looking=True):
        self.state, solution = step(self.plant, self.state, self.orders, self.faults)
        self.view = look(self.plant, self.state, solution)
        if looking:
            self.at += STEP_S
            for meter in self.meters:
                meter.feed(replace(self.view, time=self.at))

    def _answers(self):
        for meter in self.meters:
            name = meter.settings.name
            if meter._is_silent or not meter._picture:
                yield MeterSilent(name, self.at, "no answer")
                continue
            values, reasons = figures(meter.register_map.points, meter._picture)
            rounded = {key: float(np.float32(value)) for key, value in values.items()}
            yield Reading(name, self.at, rounded, reasons)
        yield CycleEnd(self.at, 1_790_000_000.0)


def _spread(values, changes):
    """Return frozen arrays with some of them set to values spread over their shape."""
    return replace(values, **{k: np.broadcast_to(v, getattr(values, k).shape) for k, v in changes.items()})


class Watched:
    """A watch that is fed a shed's inputs and keeps what it says."""

    def __init__(self, settings, known=None):
        self.watch = Watch.begin(settings, known=known)
        self.assessments, self.events = [], []

    def take(self, inputs):
        for given in inputs:
            self.watch, outputs = self.watch.take(given)
            for output in outputs:
                if isinstance(output, Assessment):
                    self.assessments.append(output)
                elif hasattr(output, "identity"):
                    self.events.append(output)
        return self.last

    @property
    def last(self):
        return self.assessments[-1]


def started(shed):
    """Switch the converter on and let it come up unseen."""
    shed.order(run=True)
    for _ in range(600):
        shed.settle(STEP_S)
        if shed.state.phase[0] == 3:
            break
    return shed.settle()


LOADS = (
    (1.0, {}), (0.97, {"planer": 0.3}), (1.03, {"extractor": 0.8}), (0.94, {"resaw": 0.5}), (1.05, {}),
    (1.0, {"planer": 0.8}), (0.96, {"extractor": 0.6, "resaw": 0.4}), (1.02, {"planer": 0.5, "extractor": 0.7}),
    (0.92, {}), (0.98, {"resaw": 0.9}), (1.04, {"planer": 0.2}), (0.95, {"planer": 0.6, "extractor": 0.5}),
)  # fmt: skip
"""Supply over usual, and the machines at work: twelve load states of a working day in the slipway shed."""


def learned(settings, seed=1, loads=LOADS):
    """Learn a shed's circuit from load states of its own; return what a file would hold, accepted."""
    own = circuit_plan(settings, compile_plan(settings))
    samples = [means_of(settings, own, shed.steady(4)) for shed in states(settings, seed, loads)]
    sample = Sample(*(np.concatenate([getattr(one, name) for one in samples]) for name in Sample.__slots__))
    ways = catalogue(own.wiring, own.expected(settings, "running"))
    recorded = Recorded(sample, ways.positions, np.zeros(len(samples), dtype=np.int64))
    found = learn(own.wiring, recorded, own.prior, own.discrepancy)
    assert found.has_converged
    return KnownCircuit(
        own.wiring.names, found.parameters, found.covariance, "2026-11-30T10:00:00Z", own.converter, own.arrangement,
        len(samples), 4 * len(samples), 210.0, 250.0, found.chi_square / found.degrees_of_freedom, found.condition,
        has_converged=True, accepted_by="the boatbuilder", accepted_at="2026-11-30T12:00:00Z",
    )  # fmt: skip


def states(settings, seed, loads):
    """Yield the shed in one load state after the other."""
    shed = started(Shed(settings, seed))
    for supply, machines in loads:
        yield shed.fault(supply_ratio=supply).machines(**machines).settle(3.0)


def means_of(settings, own, inputs):
    """Return the mean of some seconds as one sample of the circuit."""
    plan = compile_plan(settings)
    align, found = begin_align(plan.slow), []
    for given in inputs:
        align, sample = align_step(align, given)
        if sample is not None:
            found.append(circuit_sample(own, sample, derive(plan, sample)))
    return Sample(*(np.mean([getattr(one, name) for one in found], axis=0) for name in Sample.__slots__))
