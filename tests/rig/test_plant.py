"""The virtual converter behaves as converters do. Figures are common practice, no source, unless a source is named."""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from idlerwatch.core.conductors import LINE_PAIRS, NEUTRAL_PAIRS, Pair
from idlerwatch.core.settings.model import Start
from idlerwatch.edges.files import config_directory, load_settings
from idlerwatch.rig.build import build_plant
from idlerwatch.rig.plant import STEP_S, begin, look, no_faults, no_orders, pulled_backwards, step
from idlerwatch.rig.values import OPEN, Phase

SHED = load_settings(config_directory() / "example.toml")
HOUSE = load_settings(Path(__file__).parent / "split-phase.toml")


class Run:
    """A plant that is stepped, ordered about and broken."""

    def __init__(self, settings=SHED, seed=7, count=1):
        self.plant = build_plant(settings, seed, count)
        self.state = begin(self.plant)
        self.orders = no_orders(self.plant)
        self.faults = no_faults(self.plant)
        self.solution = None

    def order(self, **changes):
        self.orders = replace(self.orders, **changes)
        return self

    def start(self):
        return self.order(run=np.full(self.plant.count, True))

    def stop(self):
        return self.order(run=np.full(self.plant.count, False))

    def machine(self, name, on):
        switched = self.orders.motor_on.copy()
        switched[:, self.plant.motors.names.index(name)] = on
        return self.order(motor_on=switched)

    def fault(self, **changes):
        self.faults = replace(self.faults, **changes)
        return self

    def go(self, seconds):
        for _ in range(round(seconds / STEP_S)):
            self.state, self.solution = step(self.plant, self.state, self.orders, self.faults)
        return self

    def until(self, phase, longest_s=10.0):
        """Run until the control is in a phase; return how long that took. [s]"""
        began = self.state.time
        while self.state.phase[0] != phase:
            assert self.state.time - began < longest_s, f"not {phase!r} within {longest_s} s"
            self.go(STEP_S)
        return self.state.time - began

    @property
    def view(self):
        return look(self.plant, self.state, self.solution)

    def volts(self, pair, place="leg"):
        return float(abs(self.view.voltage(place, pair)[0]))

    def amperes(self, place="supply", conductor="L1"):
        return float(abs(self.view.current(place, conductor)[0]))

    def legs(self):
        return [self.volts(pair) for pair in NEUTRAL_PAIRS]


@pytest.fixture
def running():
    run = Run().start()
    run.until(Phase.RUNNING)
    return run.go(2.0)


@pytest.mark.parametrize("method", ["two-legs", "capacitor", "pony-motor"])
@pytest.mark.parametrize("settings", [SHED, HOUSE], ids=["L1-N feed", "split-phase feed"])
def test_every_start_method_brings_the_idler_up_on_both_feeds(settings, method):
    between = Pair("L1", "L2") if method == "two-legs" else None
    run = Run(settings.model_copy(update={"start": Start(method=method, between=between)})).start()
    assert 0.4 <= run.until(Phase.RUNNING) <= 4.5
    run.go(2.0)
    assert run.state.speed[0] == pytest.approx(1.0, abs=0.02)
    nominal = settings.supply.as_feed
    for pair in LINE_PAIRS:
        assert run.volts(pair) / nominal.nominal_voltage(pair) == pytest.approx(1.0, abs=0.13)


def test_a_healthy_converter_is_within_tolerance_idle_and_at_work(running):
    assert all(207.0 < volts < 253.0 for volts in running.legs())
    assert running.amperes() > 3.0
    assert 0.3 < running.volts(Pair("N", "PE")) < 3.0
    running.machine("extractor", True).go(4.0)
    running.machine("planer", True).go(4.0)
    assert all(206.0 < volts < 253.0 for volts in running.legs())
    assert running.amperes("leg", "L1") > 3.0


def test_power_in_is_power_out(running):
    """Conservation: source = idler + motors + winding and friction losses; asked of the circuit, not of its solver."""
    running.machine("planer", True).go(5.0)
    solution, plant = running.solution, running.plant
    nodes = solution.nodes
    idler = (solution.winding * solution.idler.conj()).sum().real
    motors = (solution.motor_voltage * solution.motor.conj()).sum().real
    taken = float(running.view.source_power[0].real)
    base = abs(nodes[0, 0] - nodes[0, 9]) ** 2 / plant.source.base_load[0]
    assert taken == pytest.approx(idler + motors + base, rel=0.01)
    work = float((running.orders.motor_load * running.orders.motor_on * plant.motors.constants.rated_power).sum())
    assert work < motors < 1.6 * work + 500.0


def test_without_its_bank_the_idling_converter_takes_more_current_and_its_legs_sag(running):
    """Bank open at idle: the supply current rises, here as in practice from some to many amperes."""
    before, legs = running.amperes(), running.legs()
    running.fault(coil_open=np.array([[True]])).go(2.0)
    assert running.amperes() > 1.5 * before
    assert running.legs()[1] < legs[1] - 10.0
    assert running.legs()[2] < legs[2] - 10.0


def test_a_machine_started_direct_pulls_the_generated_legs_down(running):
    running.machine("planer", True).go(0.3)
    assert max(running.legs()[1:]) < 160.0
    assert running.amperes() > 60.0
    running.go(4.0)
    assert min(running.legs()) > 200.0


def test_an_open_idler_lead_is_seen_at_the_legs(running):
    running.machine("extractor", True).machine("planer", True).go(6.0)
    before = running.legs()
    resistance = np.zeros((1, 3))
    resistance[0, 2] = OPEN
    running.fault(lead_resistance=resistance).go(2.0)
    assert min(running.legs()) < min(before) - 15.0


def test_legs_follow_a_sagging_supply(running):
    before = running.legs()
    running.fault(supply_ratio=np.array([0.85])).go(3.0)
    for old, new in zip(before, running.legs(), strict=True):
        assert new / old == pytest.approx(0.85, abs=0.05)


def test_a_neutral_lifted_after_the_bond_stands_near_the_supply_voltage(running):
    running.fault(neutral_resistance=np.array([OPEN])).go(1.0)
    assert running.volts(Pair("N", "PE")) > 200.0
    assert running.state.phase[0] in (Phase.RUN_DOWN, Phase.STOPPED)


def test_a_supply_that_comes_back_does_not_start_the_converter_by_itself(running):
    running.fault(supply_resistance=np.array([OPEN])).go(1.0)
    assert running.state.phase[0] == Phase.RUN_DOWN
    running.fault(supply_resistance=np.array([0.0])).go(1.0)
    assert running.state.phase[0] == Phase.RUN_DOWN


def test_the_run_down_takes_seconds_and_its_voltage_dies_sooner_without_the_bank():
    def at_end(welded):
        run = Run().start()
        run.until(Phase.RUNNING)
        run.go(2.0).fault(welded=np.array([[welded]])).stop().go(0.4)
        return run

    with_bank, without = at_end(True), at_end(False)
    assert with_bank.state.bank_closed[0, 0]
    assert not without.state.bank_closed[0, 0]
    assert with_bank.volts(LINE_PAIRS[1]) > 2.0 * without.volts(LINE_PAIRS[1])
    assert 5.0 < without.until(Phase.STOPPED, 120.0) < 90.0


def test_an_idler_pulled_backwards_runs_backwards():
    run = Run().start()
    run.state = pulled_backwards(run.plant, run.state)
    run.until(Phase.RUNNING, 20.0)
    run.go(3.0)
    assert run.state.speed[0] < -0.9


def test_a_machine_left_on_two_legs_draws_no_current_in_the_third(running):
    running.machine("planer", True).go(5.0)
    resistance = running.faults.motor_resistance.copy()
    resistance[:, running.plant.motors.names.index("planer"), 1] = OPEN
    running.fault(motor_resistance=resistance).go(2.0)
    currents = [running.amperes("machine:planer", leg) for leg in ("L1", "L2", "L3")]
    assert currents[1] < 0.01
    assert currents[0] == pytest.approx(currents[2], rel=1e-3)
    assert currents[0] > 3.0


def test_a_converter_without_banks_or_machines_runs_too():
    bare = SHED.model_copy(update={"bank": (), "capacitor": (), "machine": (), "meter": SHED.meter[:1]})
    run = Run(bare).start()
    run.until(Phase.RUNNING)
    assert all(190.0 < volts < 253.0 for volts in run.go(1.0).legs())


def test_many_converters_at_once_equal_each_alone_and_a_seed_repeats_itself():
    many = Run(count=3).start().go(4.0)
    again = Run(count=3).start().go(4.0)
    assert np.array_equal(many.state.nodes, again.state.nodes)
    first = Run(count=1)
    first.plant = replace(
        first.plant,
        idler=many.plant.idler.part(slice(0, 1)),
        capacitors=replace(first.plant.capacitors, farads=many.plant.capacitors.farads[:1]),
    )
    first.start().go(4.0)
    assert first.state.nodes == pytest.approx(many.state.nodes[:1], abs=1e-6)
    assert not math.isclose(many.state.flux[0], many.state.flux[1])


def test_an_idler_on_a_high_supply_runs_steadily():
    """At 254 V its speed answers in less than half a step; an idler that idles takes power and never gives any."""
    run = Run().fault(supply_ratio=np.array([1.05])).start()
    run.until(Phase.RUNNING)
    run.go(1.0)
    speeds, powers = [], []
    for _ in range(20):
        run.go(STEP_S)
        speeds.append(run.state.speed[0])
        powers.append(look(run.plant, run.state, run.solution).source_power[0].real)
    assert np.ptp(speeds) < 1e-6
    assert min(powers) > 0.0
