"""Learning a circuit from its own meters: worlds made by the balance itself, in which the truth is known exactly.

Currents of a state are what the balance of its potentials asks (so nothing is left out); potentials are drawn. Another
minimiser (scipy's least squares over parameters and angles together) is the witness of the optimum.
"""

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import least_squares

from idlerwatch.core.converter.balance import Balance
from idlerwatch.core.converter.circuit import IDLER, Can, CurrentChannel, Sample, Wiring, nominal_positions
from idlerwatch.core.converter.learn import Prior, Recorded, learn
from idlerwatch.core.converter.nameplate import Nameplate
from idlerwatch.core.converter.prior import Limits, prior_of
from idlerwatch.core.converter.recover import ANGLE_PRIOR

TURN = 2.0 * math.pi / 3.0
TIED = Wiring(
    rated_current=15.0,
    nominal_voltage=230.0,
    tied=True,
    hub=3,
    directions=(0.0, -TURN, TURN),
    free=(1, 2),
    cans=(Can((0, 2), 0.25, 0), Can((1, 2), 0.1, 0), Can((1, 3), 0.07, -1)),
    banks=1,
    generated=(CurrentChannel(1, (1, 3)), CurrentChannel(2, (2, 3))),
)
CENTRE_TAP = replace(
    TIED,
    nominal_voltage=240.0 / math.sqrt(3.0),
    tied=False,
    directions=(0.0, math.pi, math.pi / 2.0),
    free=(2,),
    cans=(Can((0, 2), 0.25, 0), Can((1, 2), 0.1, 0)),
    generated=(CurrentChannel(2, (2, 3)),),
)
DELTA = replace(TIED, tied=False, cans=tuple(Can(pair, 0.15, -1) for pair in ((0, 1), (1, 2), (2, 0))), banks=0)
SQUARE_ROOT_OF_THREE = math.sqrt(3.0)


def plate_prior(wiring):
    """What a plate of 7.5 kW, meters of class 0.5 and marking say."""
    line = round(wiring.nominal_voltage * SQUARE_ROOT_OF_THREE)
    limits = Limits([0.0005 * SQUARE_ROOT_OF_THREE] * len(wiring.rays), [0.01] * len(wiring.channels))
    return prior_of(wiring, [Nameplate(7.5, line)], limits)


def world(wiring, parameters, states=12, seed=3):
    """Load states whose potentials are drawn, and the currents that then balance: (sample, angles)."""
    rng = np.random.default_rng(seed)
    free = list(wiring.free)
    rays = wiring.nominal_voltage * rng.uniform(0.93, 1.08, (states, 1)) * rng.uniform(0.97, 1.04, (states, 3))
    if not wiring.tied and len(free) == 1:
        rays[:, :2] = 120.0 * rng.uniform(0.95, 1.06, (states, 1))
        rays[:, 2] = 120.0 * SQUARE_ROOT_OF_THREE * rng.uniform(0.95, 1.05, states)
    angles = np.array([wiring.directions[leg] for leg in free]) + rng.uniform(-0.05, 0.05, (states, len(free)))
    count = len(wiring.channels)
    blank = Sample(
        rays,
        np.zeros((states, count), dtype=complex),
        np.zeros((states, count, 2)),
        np.zeros((states, 0)),
        np.zeros((states, 0)),
    )
    balance = Balance(wiring, nominal_positions(wiring), np.zeros(states, dtype=np.int64), parameters)
    taken = balance.seen(blank).at(angles).residuals().reshape(states, count, 2)
    errors = np.array(
        [
            parameters[wiring.at[f"channel_{k}_gain"]] + 1j * parameters[wiring.at[f"channel_{k}_phase"]]
            for k in range(count)
        ]
    )
    return replace(blank, currents=-(taken[..., 0] + 1j * taken[..., 1]) / (1.0 - errors)), angles


def recorded(wiring, sample):
    return Recorded(sample, nominal_positions(wiring), np.zeros(len(sample.rays), dtype=np.int64))


def discrepancy(wiring, share=0.002):
    return np.full(wiring.rows, share * wiring.rated_current)


def drawn(prior, seed, sigmas=1.0):
    return prior.mean + sigmas * prior.standard * np.random.default_rng(seed).standard_normal(len(prior.mean))


@pytest.mark.parametrize("wiring", [TIED, CENTRE_TAP], ids=["L1-N feed", "split phase"])
def test_a_circuit_that_leaves_nothing_out_is_found_again_exactly(wiring):
    """With what is fixed known beforehand and the rest hardly, all admittances and angles come back."""
    prior = plate_prior(wiring)
    truth = drawn(prior, 1)
    known = np.array([name not in IDLER[: 8 if wiring.tied else 6] for name in wiring.names])
    if not wiring.tied:
        known[:4] = True  # a floating star has no Y0, and what Y1 takes by itself is what the next test is about
    easy = Prior(np.where(known, truth, prior.mean), np.where(known, 1e-6, 1e3 * prior.standard))
    sample, angles = world(wiring, truth, states=20)
    found = learn(wiring, recorded(wiring, sample), easy, discrepancy(wiring, 1e-6))
    assert found.has_converged
    assert found.parameters == pytest.approx(truth, rel=1e-4, abs=1e-4)
    assert found.angles == pytest.approx(angles, abs=1e-5)


@pytest.mark.parametrize("wiring", [TIED, CENTRE_TAP], ids=["L1-N feed", "split phase"])
@pytest.mark.parametrize("seed", range(5))
def test_learning_converges_from_what_the_plate_says(wiring, seed):
    """Truths as far off as the plate may be: converged, and as near as the covariance says (chi-square, 0.999)."""
    prior = plate_prior(wiring)
    truth = drawn(prior, 10 + seed)
    sample, _ = world(wiring, truth, seed=seed)
    rng = np.random.default_rng(seed)
    spread = 0.002 * wiring.rated_current * rng.standard_normal((*sample.currents.shape, 2))
    told = replace(sample, currents=sample.currents + spread[..., 0] + 1j * spread[..., 1])
    found = learn(wiring, recorded(wiring, told), prior, discrepancy(wiring))
    off = found.parameters - truth
    assert found.has_converged
    assert off @ np.linalg.solve(found.covariance, off) < 3.0 * len(truth)  # 0.999 quantile for 20: 45
    assert found.degrees_of_freedom == 12 * wiring.rows
    assert found.chi_square < 1.6 * found.degrees_of_freedom  # 0.999 for 48 rows: 84


def test_the_optimum_is_where_another_minimiser_finds_it():
    """The same sum of squares over parameters and angles together, minimised by scipy."""
    prior = plate_prior(TIED)
    truth = drawn(prior, 4, 0.5)
    sample, _ = world(TIED, truth, states=6)
    told = replace(sample, currents=sample.currents * 1.003)
    kept, rows = recorded(TIED, told), discrepancy(TIED)
    found = learn(TIED, kept, prior, rows)
    nominal, size = np.array([-TURN, TURN]), len(prior.mean)

    def misfit(unknowns):
        parameters, angles = prior.mean + prior.standard * unknowns[:size], unknowns[size:].reshape(-1, 2)
        point = Balance(TIED, kept.positions, kept.which, parameters).seen(told).at(angles)
        away = (angles - nominal) / ANGLE_PRIOR
        return np.concatenate([(point.residuals() / rows).ravel(), unknowns[:size], away.ravel()])

    start = np.concatenate([np.zeros(size), np.tile(nominal, 6)])
    witness = least_squares(misfit, start, xtol=1e-12, ftol=1e-12, gtol=1e-12)
    assert found.chi_square == pytest.approx(2.0 * witness.cost, rel=1e-3)
    assert (found.parameters - prior.mean) / prior.standard == pytest.approx(witness.x[:size], abs=0.02)
    assert found.angles.ravel() == pytest.approx(witness.x[size:], abs=1e-4)
    # and the covariance is the inverse of that information, angles eliminated (derived)
    whole = np.linalg.inv(witness.jac.T @ witness.jac)[:size, :size]
    scaled = found.covariance / np.outer(prior.standard, prior.standard)
    assert np.sqrt(np.diag(scaled)) == pytest.approx(np.sqrt(np.diag(whole)), rel=0.02)


def test_states_that_say_nothing_leave_what_was_believed():
    """Huge spreads: the prior stays, and so does its width."""
    prior = plate_prior(TIED)
    sample, _ = world(TIED, drawn(prior, 5), states=3)
    blind = replace(sample, spreads=np.full_like(sample.spreads, 1e7))
    found = learn(TIED, recorded(TIED, blind), prior, discrepancy(TIED))
    assert found.has_converged
    assert found.parameters == pytest.approx(prior.mean, abs=1e-3)
    assert np.sqrt(np.diag(found.covariance)) == pytest.approx(prior.standard, rel=1e-3)
    assert found.degrees_of_freedom == 0
    assert found.condition == pytest.approx(1.0, abs=1e-3)


def test_more_states_say_more():
    prior = plate_prior(TIED)
    truth = drawn(prior, 6, 0.5)
    widths = []
    for states in (3, 12, 40):
        found = learn(TIED, recorded(TIED, world(TIED, truth, states=states)[0]), prior, discrepancy(TIED))
        widths.append(np.sqrt(np.diag(found.covariance))[:6])
    assert np.all(widths[0] > widths[1])
    assert np.all(widths[1] > widths[2])


def test_learning_that_does_not_settle_is_told():
    """Currents that no converter has: potentials forty times too large ask for a search that does not end."""
    prior = plate_prior(TIED)
    sample, _ = world(TIED, drawn(prior, 7), states=4)
    rng = np.random.default_rng(2)
    odd = replace(
        sample,
        rays=sample.rays * rng.uniform(0.2, 3.0, sample.rays.shape),
        currents=sample.currents * 1e3 * np.exp(1j * rng.uniform(0.0, 2.0 * np.pi, sample.currents.shape)),
    )
    found = learn(TIED, recorded(TIED, odd), Prior(prior.mean, 1e3 * prior.standard), discrepancy(TIED, 1e-6))
    assert not found.has_converged


def test_what_hardly_any_state_tells_apart_shows_in_the_condition():
    """One state again and again fixes a combination only; the rest keeps its prior, and the condition is large."""
    prior = plate_prior(TIED)
    truth = drawn(prior, 8, 0.5)
    many, _ = world(TIED, truth, states=12)
    same = Sample(*(np.repeat(getattr(many, name)[:1], 12, axis=0) for name in Sample.__slots__))
    wide = Prior(prior.mean, np.array([100.0 if name in IDLER[:6] else 1.0 for name in TIED.names]) * prior.standard)
    varied = learn(TIED, recorded(TIED, many), wide, discrepancy(TIED))
    steady = learn(TIED, recorded(TIED, same), wide, discrepancy(TIED))
    assert np.sqrt(np.diag(steady.covariance))[:6].max() > 10.0 * np.sqrt(np.diag(varied.covariance))[:6].max()
    assert steady.condition > 1e5


def delta_of_equals():
    """Three like capacitors in delta about an idler of which nothing is known but that its iron does not bend.

    (Iron that bends in a known way would give the idler's share away: capacitors do not follow the voltage.)
    """
    plate = plate_prior(DELTA)
    standard = np.where(np.isin(DELTA.names, IDLER[:6]), 10.0 * plate.standard, plate.standard)
    is_known = [name.startswith(("saturation", "ray", "channel", "asymmetry")) for name in DELTA.names]
    is_straight = [name.startswith("saturation") for name in DELTA.names]
    prior = Prior(np.where(is_straight, 0.0, plate.mean), np.where(is_known, 1e-6, standard))
    sample, _ = world(DELTA, prior.mean, states=30)
    return learn(DELTA, recorded(DELTA, sample), prior, discrepancy(DELTA, 2e-4))


def spread_of(found, **weights):
    """Standard uncertainty of a weighted sum of parameters."""
    along = np.array([weights.get(name, 0.0) for name in DELTA.names])
    return math.sqrt(along @ found.covariance @ along)


def test_like_capacitors_in_delta_cannot_be_told_from_the_idlers_own_susceptance():
    """Three equal ones add 3wC to both sequences: their mean keeps its width, b1 has it too, b1 less 3wC has not.

    A nodal pattern of a delta in symmetrical components is 3wC (0, 1, 1) (derived).
    """
    found = delta_of_equals()
    mean = {f"can_{k}": 1.0 / 3.0 for k in range(3)}
    added = {f"can_{k}": -0.15 for k in range(3)}  # what each adds to both susceptances for its whole self
    marked = 0.05 / SQUARE_ROOT_OF_THREE
    assert spread_of(found, **mean) == pytest.approx(marked / SQUARE_ROOT_OF_THREE, rel=0.02)
    assert spread_of(found, b1=1.0) == pytest.approx(0.45 * marked / SQUARE_ROOT_OF_THREE, rel=0.05)
    assert spread_of(found, b1=1.0, **added) < 0.1 * spread_of(found, b1=1.0)


def test_what_one_capacitor_has_more_than_its_like_is_seen():
    """A difference couples the sequences, as no idler does whose windings and meters are known."""
    found = delta_of_equals()
    before = math.sqrt(2.0) * 0.05 / SQUARE_ROOT_OF_THREE
    assert spread_of(found, can_0=1.0, can_1=-1.0) < 0.5 * before
