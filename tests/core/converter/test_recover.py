"""Angles from per-phase meters: a solver of steady states makes the truth, another minimiser the witness.

The truth is `converter.steady`, which finds voltages from slips and torques by another route than the balance; the
optimum is scipy's least squares on the same weighted sum (an independent minimiser, derivatives by differences).
"""

import math
from dataclasses import fields, replace

import numpy as np
import pytest
from scipy.optimize import least_squares

from idlerwatch.core.conductors import Feed, read_pair
from idlerwatch.core.converter.balance import Balance
from idlerwatch.core.converter.circuit import (
    IDLER,
    BankAmmeter,
    Can,
    CurrentChannel,
    Positions,
    Sample,
    Wiring,
    nominal_positions,
)
from idlerwatch.core.converter.machine import EquivalentCircuit, Iron, sequence_admittances, slip_at_torque
from idlerwatch.core.converter.nameplate import Nameplate, typical_machine, zero_admittance
from idlerwatch.core.converter.recover import ANGLE_PRIOR, CHUNK, Circuit, Recoverer, take
from idlerwatch.core.converter.steady import Machines, capacitors, steady_state, utility
from idlerwatch.core.electrical.sequence import sequence_components

TURN = 2.0 * math.pi / 3.0
VOLTAGE, FREQUENCY = 230.0, 50.0
SHED = Feed(read_pair("L1-N"), VOLTAGE)
PAIRS = ("L3-L1", "L2-L3", "L2-N")
FARADS = np.array([60e-6, 25e-6, 15e-6])
IDLER_KW = 7.5
RATED = 15.0
BASE = RATED / VOLTAGE
WIRING = Wiring(
    rated_current=RATED,
    nominal_voltage=VOLTAGE,
    tied=True,
    hub=3,
    directions=(0.0, -TURN, TURN),
    free=(1, 2),
    cans=tuple(
        Can(ends, 2.0 * math.pi * FREQUENCY * farads / BASE, bank)
        for ends, farads, bank in zip(((2, 0), (1, 2), (1, 3)), FARADS, (0, 0, -1), strict=True)
    ),
    banks=1,
    generated=(CurrentChannel(1, (1, 3)), CurrentChannel(2, (2, 3))),
)
EXTENDED = replace(WIRING, ammeters=(BankAmmeter(0, 2),), lines=((0, 1), (1, 2), (2, 0)))


# --------------------------------------------------------------------------
# Truth: whole converters, solved from slips and torques
# --------------------------------------------------------------------------


def machines(shares):
    """An idler without load and a motor with a share of its rated torque: (n, 2) machines without saturation."""
    typical = [typical_machine(Nameplate(kw, 400.0)) for kw in (IDLER_KW, 3.0)]
    columns = [[getattr(t.circuit, f.name) for t in typical] for f in fields(EquivalentCircuit)]
    irons = [[0.0 if f.name == "saturation" else getattr(t.iron, f.name) for t in typical] for f in fields(Iron)]
    torque = np.stack(
        [np.full(len(shares), typical[0].friction), typical[1].friction + shares * typical[1].rated_torque]
    )
    return Machines(
        EquivalentCircuit(*(np.array(column) for column in columns)),
        Iron(*(np.array(column) for column in irons)),
        np.array([zero_admittance(typical[0], "N"), 0.0]),
        torque.T,
    )


def shop(count=6, seed=11):
    """Steady states at several supply voltages and loads, and what faultless meters in the generated legs tell."""
    rng = np.random.default_rng(seed)
    supply = utility(SHED, 0.1 + 0.05j, 0.05 + 0.02j, VOLTAGE * rng.uniform(0.95, 1.02, count))
    branches = capacitors(tuple(read_pair(name) for name in PAIRS), FARADS, FREQUENCY)
    state = steady_state(supply, branches, machines(rng.uniform(0.1, 1.0, count)))
    legs = state.potentials[:, :3] - state.potentials[:, 3:]
    legs = legs * np.exp(-1j * np.angle(legs[:, :1]))
    motor = state.currents[:, 1, :]
    absolute = motor * np.exp(-1j * np.angle(state.potentials[:, :1] - state.potentials[:, 3:]))
    currents = absolute[:, 1:] / np.exp(1j * np.angle(legs[:, 1:]))
    bank = np.abs(state.through[:, 1] - state.through[:, 0])
    return (
        legs,
        state,
        Sample(
            rays=np.abs(legs),
            currents=currents,
            spreads=np.zeros((count, 2, 2)),
            ammeters=np.zeros((count, 0)),
            lines=np.zeros((count, 0)),
        ),
        bank,
    )


def extended(sample, legs, bank):
    lines = np.abs(np.stack([legs[:, a] - legs[:, b] for a, b in EXTENDED.lines], axis=1))
    return replace(sample, ammeters=bank[:, None], lines=lines)


def idler_of(state, row=0):
    """The idler's own admittances as that solver found them, over the base: nothing bends about this state."""
    admittances = state.admittances[row, 0] / BASE
    return dict(zip(IDLER[:6], np.stack([admittances.real, -admittances.imag], axis=-1).ravel().tolist(), strict=True))


def circuit(wiring, values, spread=0.05, discrepancy=0.002):
    """Parameters, each with a spread of its own, some of them correlated."""
    parameters = np.array([values.get(name, 0.0) for name in wiring.names])
    standard = np.array([spread * abs(values.get(name, 0.0)) + 0.0 for name in wiring.names])
    standard[len(IDLER) :] = 0.004
    correlation = np.eye(len(standard))
    correlation[2, 5] = correlation[5, 2] = 0.5
    rows = np.full(wiring.rows, discrepancy * wiring.rated_current)
    rows[wiring.rows - len(wiring.lines) :] = 0.02
    return Circuit(parameters, correlation * np.outer(standard, standard), np.full(len(standard), 1e-4), rows)


def test_the_truth_of_a_converter_solved_by_torques_comes_back():
    """Each state with its own admittances of the idler; the angles agree to a ten-thousandth of a degree."""
    legs, state, sample, _ = shop()
    for row in range(len(legs)):
        known = circuit(WIRING, idler_of(state, row))
        found = Recoverer(WIRING, nominal_positions(WIRING), known).recover(take(sample, [row]))
        zero, positive, negative = sequence_components(legs[row])
        assert found.angles[0, 0] == pytest.approx(np.angle(legs[row, 1:]), abs=2e-4)
        sizes = [abs(zero), abs(positive), abs(negative)]
        assert found.quantities[0, :3] == pytest.approx(sizes, abs=0.02)
        assert found.quantities[0, 3] == pytest.approx(abs(negative) / abs(positive), abs=1e-4)
        lines = [abs(legs[row, a] - legs[row, b]) for a, b in ((0, 1), (1, 2), (2, 0))]
        assert found.quantities[0, 4:] == pytest.approx(lines, abs=0.03)
        assert found.potentials[0, 0] == pytest.approx(legs[row], abs=0.05)


# --------------------------------------------------------------------------
# The optimum, by another minimiser
# --------------------------------------------------------------------------


def optimum(wiring, positions, known, sample, row, hypothesis):
    """Angles that make the same weighted sum least: whitened residuals and the angles' prior, weights as they end."""
    which = np.array([hypothesis])
    balance = Balance(wiring, positions, which, known.parameters)
    seen = balance.seen(take(sample, [row]))
    nominal = np.array([wiring.directions[leg] for leg in wiring.free])
    weights = weights_of(wiring, positions, known, sample, row, hypothesis)
    root = np.linalg.cholesky(weights).T

    def misfit(angles):
        return np.concatenate([root @ seen.at(angles[None]).residuals()[0], (angles - nominal) / ANGLE_PRIOR])

    return least_squares(misfit, nominal, xtol=1e-14, ftol=1e-14, gtol=1e-14).x


def weights_of(wiring, positions, known, sample, row, hypothesis):
    """The weights: the inverse of what parameters, discrepancy and sample spread, where one step leads (derived)."""
    seen = Balance(wiring, positions, np.array([hypothesis]), known.parameters).seen(take(sample, [row]))
    nominal = np.array([[wiring.directions[leg] for leg in wiring.free]])
    diagonal = known.discrepancy**2
    point = seen.at(nominal)
    slopes, left = point.by_angle()[0], point.residuals()[0]
    normal = (slopes / diagonal) @ slopes.T + np.eye(len(slopes)) / ANGLE_PRIOR**2
    point = seen.at(nominal - np.linalg.solve(normal, (slopes / diagonal) @ left)[None])
    by_parameter = point.by_parameter()[0]
    total = known.covariance + np.diag(known.noise**2)
    spread = by_parameter.T @ total @ by_parameter + np.diag(diagonal) * point.strain()[0] ** 2
    return np.linalg.inv(spread)


def three_ways(wiring):
    """The nominal position, the bank out, and the idler mirrored."""
    whole = nominal_positions(wiring)
    without = replace(
        whole,
        matrices=whole.matrices - whole.bank_matrices[:, 0],
        shares=np.array([[float(can.bank < 0) for can in wiring.cans]]),
        bank_matrices=np.zeros_like(whole.bank_matrices),
    )
    turned = replace(whole, mirrored=np.ones(1, dtype=bool))
    return Positions(
        *(np.concatenate([getattr(way, f.name) for way in (whole, without, turned)]) for f in fields(whole))
    )


@pytest.mark.parametrize("wiring", [WIRING, EXTENDED], ids=["leg meters", "with ammeter and lines"])
def test_the_angles_are_where_another_minimiser_finds_the_least_sum(wiring):
    """To a millionth of a radian, in the positions that are about right."""
    legs, state, sample, bank = shop()
    if wiring is EXTENDED:
        sample = extended(sample, legs, bank)
    disturbed = replace(sample, rays=sample.rays * [1.0, 1.004, 0.997], currents=sample.currents * (1.01 + 0.01j))
    positions, known = three_ways(wiring), circuit(wiring, idler_of(state))
    found = Recoverer(wiring, positions, known).recover(disturbed)
    for row in range(3):
        wanted = optimum(wiring, positions, known, disturbed, row, 0)
        assert found.angles[row, 0] == pytest.approx(wanted, abs=1e-6)


def test_what_is_left_is_weighed_as_the_other_minimiser_weighs_it():
    """Chi-square and likelihood of each position from their definitions (derived)."""
    _, state, sample, _ = shop()
    positions, known = three_ways(WIRING), circuit(WIRING, idler_of(state))
    found = Recoverer(WIRING, positions, known).recover(sample)
    nominal = np.array([-TURN, TURN])
    for hypothesis in range(2):
        weights = weights_of(WIRING, positions, known, sample, 1, hypothesis)
        left, away = found.residuals[1, hypothesis], (found.angles[1, hypothesis] - nominal) / ANGLE_PRIOR
        chi_square = left @ weights @ left + away @ away
        assert found.chi_square[1, hypothesis] == pytest.approx(chi_square, rel=1e-6)
        # with the angles integrated over (Laplace): log det of R and of what the angles' information is
        scale = -np.linalg.slogdet(weights)[1] - np.linalg.slogdet(found.angle_covariance[1, hypothesis])[1]
        assert found.log_likelihood[1, hypothesis] == pytest.approx(-0.5 * (chi_square + scale), rel=1e-6)


def test_the_position_that_holds_is_the_likeliest():
    _, state, sample, _ = shop()
    found = Recoverer(WIRING, three_ways(WIRING), circuit(WIRING, idler_of(state))).recover(sample)
    assert found.likeliest.tolist() == [0] * len(sample.rays)
    assert np.all(found.log_likelihood[:, 1:] < found.log_likelihood[:, :1] - 20.0)


# --------------------------------------------------------------------------
# Uncertainty
# --------------------------------------------------------------------------


@pytest.mark.parametrize("wiring", [WIRING, EXTENDED], ids=["leg meters", "with ammeter and lines"])
def test_stated_uncertainty_is_the_spread_of_many_worlds(wiring):
    """Monte Carlo (JCGM 101): worlds whose parameters are drawn from the covariance, seen with what is believed.

    In each world the sample is what its own parameters make balanced at the same angles: channels, gains and rows
    disturbed. 4000 worlds give standard deviations to 1.1 %; seven quantities and two angles, hence 6 %.
    """
    legs, state, sample, bank = shop(1)
    if wiring is EXTENDED:
        sample = extended(sample, legs, bank)
    known = circuit(wiring, idler_of(state), spread=0.03)
    count, rng = 4000, np.random.default_rng(5)
    drawn = rng.multivariate_normal(known.parameters, known.covariance + np.diag(known.noise**2), count)
    seen = in_world(wiring, drawn, legs[0], known.discrepancy * rng.standard_normal((count, wiring.rows)))
    found = Recoverer(wiring, nominal_positions(wiring), known).recover(seen)
    truth = Recoverer(wiring, nominal_positions(wiring), known).recover(sample)
    names = found.quantities - true_quantities(legs[0])
    assert names.std(axis=0) == pytest.approx(truth.standards[0], rel=0.06)
    # the angles' own covariance leaves out that the rays' gains are unknown: it is what the rows leave open
    angles = np.cov((found.angles[:, 0] - np.angle(legs[0, 1:])).T)
    assert np.sqrt(np.diag(angles)) == pytest.approx(np.sqrt(np.diag(truth.angle_covariance[0, 0])), rel=0.06)
    assert np.mean(found.chi_square) == pytest.approx(wiring.rows - 2, rel=0.08)


def true_quantities(legs):
    zero, positive, negative = np.abs(sequence_components(legs))
    return [zero, positive, negative, negative / positive, *(abs(legs[a] - legs[b]) for a, b in EXTENDED.lines)]


def in_world(wiring, drawn, legs, discrepancy):
    """What meters tell of legs that stand at these potentials, in worlds with these parameters (count, p).

    A gain e multiplies what is told by 1 - e to give what is: told = true / (1 - e).
    """
    count = len(drawn)
    blank = Sample(
        np.tile(np.abs(legs), (count, 1)),
        np.zeros((count, 2), dtype=complex),
        np.zeros((count, 2, 2)),
        np.zeros((count, len(wiring.ammeters))),
        np.zeros((count, len(wiring.lines))),
    )
    gainless = drawn.copy()
    gainless[:, len(IDLER) : wiring.at["can_0"]] = 0.0
    positions, which, angles = nominal_positions(wiring), np.zeros(1, dtype=np.int64), np.angle(legs[1:])[None]
    one = take(blank, slice(0, 1))
    taken = np.concatenate(
        [Balance(wiring, positions, which, world).seen(one).at(angles).residuals() for world in gainless]
    )
    taken = taken - discrepancy
    column = {name: drawn[:, place] for name, place in wiring.at.items()}
    rays = np.abs(legs) / (1.0 - np.stack([column[f"ray_{leg}"] for leg in range(3)], axis=1))
    errors = [column[f"channel_{k}_gain"] + 1j * column[f"channel_{k}_phase"] for k in range(2)]
    currents = np.stack([-(taken[:, 2 * k] + 1j * taken[:, 2 * k + 1]) / (1.0 - errors[k]) for k in range(2)], axis=1)
    told = replace(blank, rays=rays, currents=currents)
    if wiring.ammeters:
        lines = np.stack([taken[:, 5 + k] / (1.0 - column[f"line_{k}"]) for k in range(3)], axis=1)
        told = replace(told, ammeters=(taken[:, 4] / (1.0 - column["ammeter_0"]))[:, None], lines=lines)
    return told


# --------------------------------------------------------------------------
# What is missing; one and many
# --------------------------------------------------------------------------


def is_equal(one, other, rows=slice(None)):
    return all(
        np.allclose(getattr(one, f.name)[rows], getattr(other, f.name), rtol=1e-9, atol=1e-9, equal_nan=True)
        for f in fields(one)
    )


def test_a_missing_ray_is_told_as_nothing_and_harms_no_other_sample():
    _, state, sample, _ = shop()
    rays = sample.rays.copy()
    rays[2, 1] = np.nan
    recoverer = Recoverer(WIRING, three_ways(WIRING), circuit(WIRING, idler_of(state)))
    with np.errstate(invalid="ignore"):
        found = recoverer.recover(replace(sample, rays=rays))
    for name in ("quantities", "standards", "angles", "chi_square", "log_likelihood"):
        assert np.isnan(getattr(found, name)[2]).all()
    rest = [0, 1, 3, 4, 5]
    assert is_equal(found, recoverer.recover(take(sample, rest)), rest)


def test_a_year_is_recovered_as_each_sample_alone_is():
    """More than one chunk: the same as one by one."""
    _, state, sample, _ = shop()
    recoverer = Recoverer(WIRING, three_ways(WIRING), circuit(WIRING, idler_of(state)))
    count = CHUNK // 3 + 50
    year = take(sample, np.arange(count) % len(sample.rays))
    found = recoverer.recover(year)
    assert found.quantities.shape == (count, 7)
    for row in (0, 1, CHUNK // 3 - 1, CHUNK // 3, count - 1):
        assert is_equal(found, recoverer.recover(take(year, [row])), [row])


def test_a_missing_line_or_ammeter_is_as_if_it_were_not_there():
    """Its row has a spread of ten thousand volts and amperes; the rest is untouched to a millionth."""
    legs, state, sample, bank = shop()
    whole = extended(sample, legs, bank)
    missing = replace(whole, lines=np.full_like(whole.lines, np.nan), ammeters=np.full_like(whole.ammeters, np.nan))
    values = idler_of(state)
    without = Recoverer(WIRING, nominal_positions(WIRING), circuit(WIRING, values)).recover(sample)
    found = Recoverer(EXTENDED, nominal_positions(EXTENDED), circuit(EXTENDED, values)).recover(missing)
    assert found.angles == pytest.approx(without.angles, abs=1e-6)
    assert found.quantities == pytest.approx(without.quantities, rel=1e-6)
    assert found.standards == pytest.approx(without.standards, rel=1e-4)


def test_a_measured_line_says_more_than_none():
    legs, state, sample, bank = shop()
    values = idler_of(state)
    whole = extended(sample, legs, bank)
    fewer = replace(whole, lines=np.full_like(whole.lines, np.nan))
    recoverer = Recoverer(EXTENDED, nominal_positions(EXTENDED), circuit(EXTENDED, values, spread=0.2))
    assert np.all(recoverer.recover(whole).standards[:, 3] < recoverer.recover(fewer).standards[:, 3])


def test_a_channel_whose_spread_is_huge_is_not_heeded():
    """A wrong current does no harm where the sample says that it is not to be trusted."""
    _, state, sample, _ = shop()
    recoverer = Recoverer(WIRING, nominal_positions(WIRING), circuit(WIRING, idler_of(state)))
    spreads = sample.spreads.copy()
    spreads[:, 0] = 1e4
    odd = sample.currents.copy()
    odd[:, 0] += 5.0
    trusting = recoverer.recover(replace(sample, spreads=spreads))
    wary = recoverer.recover(replace(sample, spreads=spreads, currents=odd))
    assert wary.quantities[:, 3] == pytest.approx(trusting.quantities[:, 3], abs=1e-6)


def test_normalised_residuals_are_of_size_one_where_the_circuit_is_what_it_is_held_to_be():
    """Over many worlds each has a standard deviation of 1 (Abur and Exposito 2004, chapter 5)."""
    legs, state, _, _ = shop(1)
    known = circuit(WIRING, idler_of(state), spread=0.03)
    rng = np.random.default_rng(8)
    drawn = rng.multivariate_normal(known.parameters, known.covariance + np.diag(known.noise**2), 3000)
    seen = in_world(WIRING, drawn, legs[0], known.discrepancy * rng.standard_normal((3000, WIRING.rows)))
    found = Recoverer(WIRING, nominal_positions(WIRING), known).recover(seen)
    assert found.normalised[:, 0].std(axis=0) == pytest.approx(1.0, abs=0.08)


def test_the_idler_of_that_solver_is_the_machine_by_itself():
    """The truth used here has the admittances of the equivalent circuit at the slip of its torque."""
    machine = typical_machine(Nameplate(IDLER_KW, 400.0))
    legs, state, _, _ = shop(1)
    _, positive, negative = sequence_components(legs[0])
    slip = slip_at_torque(machine.circuit, np.array(machine.friction), positive, negative)
    alone = sequence_admittances(machine.circuit, slip, zero_admittance(machine, "N"))
    assert state.admittances[0, 0] == pytest.approx(alone, rel=1e-6)
