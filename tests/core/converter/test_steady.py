"""Whole converters: energy, torques and magnetisation balance, and the fed pair's closed form agrees."""

import dataclasses
import math

import numpy as np
import pytest
from scipy.optimize import brentq

from idlerwatch.core.conductors import Feed, read_pair
from idlerwatch.core.converter.machine import (
    EquivalentCircuit,
    Iron,
    airgap_power,
    airgap_torque,
    airgap_voltage,
    phase_admittance,
    saturated,
    sequence_admittances,
)
from idlerwatch.core.converter.nameplate import Nameplate, typical_machine, zero_admittance
from idlerwatch.core.converter.steady import (
    Branches,
    Machines,
    capacitors,
    line_voltages,
    linear_potentials,
    steady_state,
    utility,
)
from idlerwatch.core.electrical.sequence import sequence_components

SHED = Feed(read_pair("L1-N"), 230.0)
HOUSE = Feed(read_pair("L1-L2"), 240.0, neutral="centre-tap")
TRANSFORMER = Feed(read_pair("L1-L2"), 400.0, neutral="none")
NOTHING = Branches((), np.zeros(0))
CANS = tuple(read_pair(name) for name in ("L2-L3", "L3-L1", "L2-N", "L3-N"))
LINE_CANS = tuple(read_pair(name) for name in ("L2-L3", "L3-L1"))
FEEDS = [
    pytest.param(SHED, "N", CANS, id="L1-N feed"),
    pytest.param(HOUSE, "floating", LINE_CANS, id="split-phase"),
    pytest.param(TRANSFORMER, "floating", LINE_CANS, id="two lines"),
]


def machines(plates, star_points, shares):
    """Machines made of nameplates, each with a share of its rated torque on the shaft (..., m)."""
    typical = [typical_machine(plate) for plate in plates]
    columns = [[getattr(t.circuit, f.name) for t in typical] for f in dataclasses.fields(EquivalentCircuit)]
    irons = [[getattr(t.iron, f.name) for t in typical] for f in dataclasses.fields(Iron)]
    torque = [t.friction + share * t.rated_torque for t, share in zip(typical, np.moveaxis(shares, -1, 0), strict=True)]
    return Machines(
        EquivalentCircuit(*(np.array(column) for column in columns)),
        Iron(*(np.array(column) for column in irons)),
        np.array([zero_admittance(t, star) for t, star in zip(typical, star_points, strict=True)]),
        np.stack(torque, axis=-1),
    )


def plates(feed, *kilowatts):
    return [Nameplate(kw, round(feed.line_voltage)) for kw in kilowatts]


def shop(feed, star_point, pairs, count, seed=3):
    """Converters with a 7.5 kW idler, one 3 kW motor from idle to full load, and some capacitors and lamps."""
    rng = np.random.default_rng(seed)
    farads = rng.uniform(0.0, 60e-6, (count, len(pairs))) * (230.0 / feed.leg_voltage) ** 2
    lamps = Branches((read_pair("L2-L3"),), 1.0 / rng.uniform(50.0, 500.0, (count, 1)) + 0j)
    series = rng.uniform(0.05, 0.3, count) + 1j * rng.uniform(0.02, 0.1, count)
    return (
        utility(feed, series, 0.5 * series, feed.voltage * rng.uniform(0.9, 1.1, count)),
        capacitors(pairs, farads, 50.0).beside(lamps),
        machines(
            plates(feed, 7.5, 3.0),
            (star_point, "floating"),
            np.stack([np.zeros(count), rng.uniform(0.0, 1.0, count)], axis=-1),
        ),
    )


def first_of(circuit):
    return EquivalentCircuit(*(getattr(circuit, f.name)[0] for f in dataclasses.fields(circuit)))


def to_neutral(state):
    """Phase voltages V0 V1 V2 of the legs to N, as the machines see them but for V0: (..., 3)."""
    return sequence_components(state.potentials[..., :3] - state.potentials[..., 3:])


@pytest.mark.parametrize(("feed", "star_point", "pairs"), FEEDS)
def test_what_the_utility_gives_is_lost_or_turns_shafts(feed, star_point, pairs):
    supply, branches, running = shop(feed, star_point, pairs, 40)
    state = steady_state(supply, branches, running)
    given = (supply.forces * state.supply.conj()).sum(axis=-1).real
    on_the_way = np.where(np.isinf(supply.impedances), 0.0, supply.impedances.real) * np.abs(state.supply) ** 2
    branch_powers = np.abs(state.through) ** 2 * (1.0 / branches.admittances).real
    circuit = dataclasses.replace(running.circuit, magnetising_reactance=state.magnetising_reactances)
    volts = to_neutral(state)[..., None, :]
    turned = (1.0 - state.slips) * running.torque
    lost = np.zeros_like(turned)
    for index, slips in ((1, state.slips), (2, 2.0 - state.slips)):
        lost += 3.0 * np.abs(volts[..., index] * state.admittances[..., index]) ** 2 * circuit.stator_resistance
        lost += 3.0 * airgap_voltage(circuit, slips, volts[..., index]) ** 2 / circuit.core_resistance
        lost += slips * airgap_power(circuit, slips, volts[..., index])
    lost += 3.0 * np.abs(volts[..., 0]) ** 2 * state.admittances[..., 0].real
    assert np.isfinite(given).all()
    assert given == pytest.approx(on_the_way.sum(-1) + branch_powers.sum(-1) + (turned + lost).sum(-1), rel=1e-8)


@pytest.mark.parametrize(("feed", "star_point", "pairs"), FEEDS)
def test_every_torque_and_every_magnetisation_is_met(feed, star_point, pairs):
    supply, branches, running = shop(feed, star_point, pairs, 300, seed=4)
    state = steady_state(supply, branches, running)
    circuit = dataclasses.replace(running.circuit, magnetising_reactance=state.magnetising_reactances)
    volts = to_neutral(state)[..., None, :]
    torque = airgap_torque(circuit, state.slips, volts[..., 1], volts[..., 2])
    assert torque == pytest.approx(running.torque, rel=1e-6)
    across = airgap_voltage(circuit, state.slips, volts[..., 1])
    wanted = saturated(running.circuit, running.iron, across).magnetising_reactance
    assert state.magnetising_reactances == pytest.approx(wanted, rel=1e-8)
    assert np.all(state.slips < 0.2)


def test_the_linear_solution_at_the_found_admittances_is_the_same():
    supply, branches, running = shop(SHED, "N", CANS, 20)
    state = steady_state(supply, branches, running)
    assert linear_potentials(supply, branches, state.admittances) == pytest.approx(state.potentials, rel=1e-12)


def fed_pair_ratio(positive, negative, to_first, to_second):
    """V2/V1 of windings on L1-L2, capacitors L3-L1 and L2-L3 (currents of the free terminal, derived)."""
    a = np.exp(2j * np.pi / 3.0)
    first = a * positive - to_first * (1 - a) - to_second * (a * a - a)
    second = a * a * negative - to_first * (1 - a * a) - to_second * (a - a * a)
    return -first / second


@pytest.mark.parametrize("farads", [(0.0, 0.0), (85.914e-6, 41.859e-6), (200e-6, 0.0)])
@pytest.mark.parametrize("torque", [50.0, 403.0, 3000.0])
def test_slip_and_voltages_are_those_of_the_closed_form_and_a_root_finder(farads, torque):
    """Fitzgerald 6.2 as an idler on 220 V, stiff: V1 and V2 in closed form, the slip by Brent's method."""
    circuit = EquivalentCircuit(*(np.array(x) for x in (0.294, 0.503, 13.25, 0.144, 0.209)))
    omega, a = 2.0 * np.pi * 60.0, np.exp(2j * np.pi / 3.0)
    cans = [1j * omega * value for value in farads]

    def sequences(slip):
        y1, y2 = (complex(phase_admittance(circuit, np.array(x))) for x in (slip, 2.0 - slip))
        ratio = fed_pair_ratio(y1, y2, *cans)
        v1 = 220.0 / ((1 - a * a) + (1 - a) * ratio)
        return v1, ratio * v1

    def net(slip):
        return float(airgap_torque(circuit, np.array(slip), *sequences(slip))) - torque

    slip = brentq(net, 1e-9, 0.1, xtol=1e-14)
    state = steady_state(
        utility(Feed(read_pair("L1-L2"), 220.0, neutral="none"), 0.0, math.inf),
        capacitors(tuple(map(read_pair, ("L3-L1", "L2-L3"))), np.array(farads), 60.0),
        Machines(
            EquivalentCircuit(*(getattr(circuit, f.name) * np.ones(1) for f in dataclasses.fields(circuit))),
            Iron(np.zeros(1), np.ones(1)),
            np.zeros(1, dtype=complex),
            np.array([torque]),
        ),
    )
    assert float(state.slips[0]) == pytest.approx(slip, rel=1e-7)
    assert np.abs(sequence_components(state.potentials[:3])[1:]) == pytest.approx(np.abs(sequences(slip)), rel=1e-8)


@pytest.mark.parametrize(("feed", "star_point", "pairs"), FEEDS)
def test_many_at_once_equal_each_alone(feed, star_point, pairs):
    supply, branches, running = shop(feed, star_point, pairs, 6)
    together = steady_state(supply, branches, running)
    for case in range(6):
        alone = steady_state(
            dataclasses.replace(supply, forces=supply.forces[case], impedances=supply.impedances[case]),
            dataclasses.replace(branches, admittances=branches.admittances[case]),
            dataclasses.replace(running, torque=running.torque[case]),
        )
        for field in dataclasses.fields(alone):
            assert getattr(together, field.name)[case] == pytest.approx(getattr(alone, field.name), abs=1e-7)


def idlers(feed, star_point, count, kilowatts):
    return machines(plates(feed, *[kilowatts] * count), [star_point] * count, np.zeros(count))


def test_two_equal_idlers_are_one_of_half_the_impedances():
    two = idlers(SHED, "N", 2, 4.0)
    half = Machines(
        EquivalentCircuit(*(getattr(two.circuit, f.name)[:1] / 2.0 for f in dataclasses.fields(two.circuit))),
        Iron(two.iron.saturation[:1], two.iron.reference_voltage[:1]),
        2.0 * two.zero_admittance[:1],
        2.0 * two.torque[:1],
    )
    supply, cans = utility(SHED, 0.1 + 0.05j, 0.1), capacitors(CANS, np.array([40e-6, 60e-6, 20e-6, 0.0]), 50.0)
    both, one = steady_state(supply, cans, two), steady_state(supply, cans, half)
    assert both.potentials == pytest.approx(one.potentials, rel=1e-8)
    assert both.currents.sum(axis=-2) == pytest.approx(one.currents[0], rel=1e-7)
    assert both.slips == pytest.approx(np.repeat(one.slips, 2), rel=1e-7)


@pytest.mark.parametrize(("feed", "star_point"), [(SHED, "N"), (HOUSE, "floating")])
def test_a_second_idler_and_less_load_make_the_generated_leg_sag_less(feed, star_point):
    """As the impedance between the fed leg and the generated one is halved (C. P. Steinmetz, generated leg lower)."""

    def third(count, share):
        running = plates(feed, *[5.5] * count, 3.0)
        loaded = machines(running, [star_point] * count + ["floating"], np.array([0.0] * count + [share]))
        lines = line_voltages(steady_state(utility(feed, 0.0, 0.0), NOTHING, loaded).potentials)
        return np.abs(lines[1:]).mean() / feed.line_voltage

    assert third(1, 1.0) < third(1, 0.2) < 1.0
    assert third(1, 1.0) < third(2, 1.0) < 1.0


@pytest.mark.parametrize(("feed", "star_point", "pairs"), FEEDS)
def test_the_supply_current_at_no_load_climbs_by_a_fifth_to_a_half_at_ten_percent_more_voltage(feed, star_point, pairs):
    """Common practice, no source; without saturation by ten percent."""
    idler = idlers(feed, star_point, 1, 7.5)
    rigid = dataclasses.replace(idler, iron=Iron(np.zeros(1), np.ones(1)), torque=np.zeros(1))

    def climb(running):
        low, high = (utility(feed, 0.0, 0.0, feed.voltage * ratio) for ratio in (1.0, 1.1))
        currents = [np.abs(steady_state(supply, NOTHING, running).supply).max() for supply in (low, high)]
        return currents[1] / currents[0]

    assert 1.2 < climb(idler) < 1.5
    assert climb(rigid) == pytest.approx(1.1, rel=1e-6)


def test_saturation_holds_down_what_too_many_capacitors_raise():
    idler = idlers(HOUSE, "floating", 1, 5.5)
    rigid = dataclasses.replace(idler, iron=Iron(np.zeros(1), np.ones(1)))
    cans = capacitors(LINE_CANS, np.array([200e-6, 200e-6]), 60.0)
    supply = utility(HOUSE, 0.05, 0.05)
    highest = [np.abs(line_voltages(steady_state(supply, cans, each).potentials)).max() for each in (idler, rigid)]
    assert 1.05 * HOUSE.voltage < highest[0] < highest[1]


def test_a_stalled_machine_makes_its_own_case_missing_and_no_other():
    supply, branches, running = shop(SHED, "N", CANS, 3)
    heavy = running.torque * np.array([[1.0, 1.0], [1.0, 30.0], [1.0, 1.0]])
    state = steady_state(supply, branches, dataclasses.replace(running, torque=heavy))
    found = [getattr(state, name) for name in ("potentials", "slips", "magnetising_reactances", "currents", "through")]
    assert all(np.isnan(values[1]).all() for values in found)
    assert not any(np.isnan(values[[0, 2]]).any() for values in found)


@pytest.mark.parametrize(("feed", "star_point", "pairs"), FEEDS)
def test_slip_climbs_with_the_load_until_the_motor_stalls_and_stays_so_beyond(feed, star_point, pairs):
    """The most torque there is, by trying the motor's slips one by one, beside an idler at synchronous speed."""
    both = machines(plates(feed, 5.5, 3.0), (star_point, "floating"), np.zeros(2))
    cans = capacitors(pairs, np.full(len(pairs), 30e-6), 50.0)
    supply = utility(feed, 0.2 + 0.1j, 0.1)
    rigid = dataclasses.replace(both, iron=Iron(np.zeros(2), np.ones(2)))

    tried = np.stack([np.zeros(2000), np.linspace(1e-3, 0.6, 2000)], axis=-1)
    nodes = linear_potentials(supply, cans, sequence_admittances(both.circuit, tried, both.zero_admittance))
    volts = sequence_components(nodes[:, :3] - nodes[:, 3:])[..., None, :]
    most = airgap_torque(both.circuit, tried, volts[..., 1], volts[..., 2])[:, 1].max()
    torques = most * np.linspace(0.05, 1.2, 60)
    idler = np.zeros(60)  # turns at synchronous speed: what the negative sequence brakes is given back
    for _ in range(5):
        asked = dataclasses.replace(rigid, torque=np.stack([idler, torques], axis=-1))
        state = steady_state(supply, cans, asked)
        volts = to_neutral(state)
        idler = -np.nan_to_num(airgap_power(first_of(both.circuit), 2.0, volts[:, 2]))
    slips = state.slips[:, 1]
    stalled = np.isnan(slips)
    assert np.all(np.diff(slips[~stalled]) > 0.0)
    assert stalled.tolist() == (torques > most).tolist()


@pytest.mark.parametrize(
    ("farads", "series", "volts", "torque"),
    [
        ((85.4e-6, 144.6e-6, 77.9e-6, 140.5e-6), 0.019 + 0.119j, 263.3, (76.0, 7240.0, 568.0)),
        ((145.0e-6, 103.3e-6, 71.9e-6, 0.0), 0.066 + 0.13j, 272.2, (76.0, 6577.0, 1675.0)),
    ],
)
def test_a_motor_near_its_limit_is_not_called_stalled_while_the_iron_settles(farads, series, volts, torque):
    """Two heavily loaded motors, high voltage, many capacitors: with the iron of rated voltage there is no solution."""
    running = machines(plates(SHED, 4.0, 3.0, 2.2), ("N", "floating", "floating"), np.zeros(3))
    state = steady_state(
        utility(SHED, series, series, volts),
        capacitors(CANS, np.array(farads), 50.0),
        dataclasses.replace(running, torque=np.array(torque)),
    )
    circuit = dataclasses.replace(running.circuit, magnetising_reactance=state.magnetising_reactances)
    _, positive, negative = to_neutral(state)
    assert airgap_torque(circuit, state.slips, positive, negative) == pytest.approx(np.array(torque), rel=1e-6)


def test_a_missing_figure_makes_its_own_case_missing_and_no_other():
    supply, branches, running = shop(SHED, "N", CANS, 3)
    forces = supply.forces.copy()
    forces[0, 0] = np.nan
    torque = running.torque.copy()
    torque[2, 1] = np.nan
    state = steady_state(
        dataclasses.replace(supply, forces=forces), branches, dataclasses.replace(running, torque=torque)
    )
    assert np.isnan(state.potentials).all(axis=-1).tolist() == [True, False, True]


def test_a_lost_neutral_of_an_l1_n_feed_stands_at_the_voltage_of_the_leg():
    """No current can return, so nothing drops: N is as live as L1."""
    found = linear_potentials(
        utility(SHED, 0.2, math.inf),
        capacitors(CANS, np.full(4, 40e-6), 50.0),
        np.array([[0.5 - 1j, 0.02 - 0.07j, 0.2 - 0.6j]]),
    )
    assert found == pytest.approx(np.full(4, 230.0), rel=1e-6)


def test_a_feed_without_neutral_feeds_no_neutral():
    assert np.isinf(utility(TRANSFORMER, 0.1, 0.1).impedances).tolist() == [False, False, True, True]


def test_the_neutral_conductor_drops_its_own_current():
    supply, branches, running = shop(SHED, "N", CANS, 5)
    state = steady_state(supply, branches, running)
    assert state.supply[:, 3] == pytest.approx(-state.supply[:, 0], rel=1e-7)
    assert state.potentials[:, 3] == pytest.approx(-state.supply[:, 3] * supply.impedances[:, 3], rel=1e-9)


def test_with_the_other_rotation_legs_two_and_three_change_places():
    other = dataclasses.replace(SHED, rotation="L1-L3-L2")
    idler = idlers(SHED, "N", 1, 7.5)
    cans = np.array([30e-6, 80e-6, 20e-6])
    names = ("L2-L3", "L3-L1", "L2-N"), ("L2-L3", "L1-L2", "L3-N")
    found, swapped = (
        steady_state(utility(feed, 0.1, 0.1), capacitors(tuple(map(read_pair, pairs)), cans, 50.0), idler)
        for feed, pairs in zip((SHED, other), names, strict=True)
    )
    assert swapped.potentials == pytest.approx(found.potentials[[0, 2, 1, 3]], rel=1e-9)
    assert swapped.currents[0] == pytest.approx(found.currents[0][[0, 2, 1]], rel=1e-8, abs=1e-8)
