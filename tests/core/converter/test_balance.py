"""The balance of currents: Kirchhoff's law by another route, and every derivative against differences.

Values come from a nodal matrix written down again here, from closed forms of Fortescue's components, and from central
differences of the residuals (both derived).
"""

import cmath
import math
from dataclasses import fields, replace

import numpy as np
import pytest

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
from idlerwatch.core.converter.network import behind_impedances, winding_matrix, with_terminal

TURN = 2.0 * math.pi / 3.0
TIED = Wiring(
    rated_current=20.0,
    nominal_voltage=230.0,
    tied=True,
    hub=3,
    directions=(0.0, -TURN, TURN),
    free=(1, 2),
    cans=(Can((0, 2), 0.25, 0), Can((1, 2), 0.1, 0), Can((1, 3), 0.07, -1)),
    banks=1,
    generated=(CurrentChannel(1, (1, 3)), CurrentChannel(2, (2, 3))),
)
SUPPLIED = replace(
    TIED,
    supply=(CurrentChannel(0, (0, 3)),),
    outgoing=(CurrentChannel(0, (0, 3)),),
    ammeters=(BankAmmeter(0, 2), BankAmmeter(0, 0)),
    lines=((0, 1), (1, 2), (2, 0)),
)
CENTRE_TAP = replace(
    TIED,
    nominal_voltage=240.0 / math.sqrt(3.0),
    tied=False,
    directions=(0.0, math.pi, math.pi / 2.0),
    free=(2,),
    cans=(Can((0, 2), 0.25, 0), Can((1, 2), 0.1, -1)),
    generated=(CurrentChannel(2, (2, 3)),),
    supply=(CurrentChannel(0, (0, 1)),),
    outgoing=(CurrentChannel(0, (0, 1)),),
)
TWO_LINES = replace(
    TIED,
    tied=False,
    hub=0,
    directions=(0.0, math.pi, 2.0 * math.pi / 3.0),
    free=(2,),
    cans=(Can((0, 2), 0.25, 0),),
    generated=(CurrentChannel(2, (2, 0)),),
    lines=((1, 2),),
)
WIRINGS = [
    pytest.param(TIED, id="L1-N feed"),
    pytest.param(SUPPLIED, id="L1-N feed with supply meter, ammeters and lines"),
    pytest.param(CENTRE_TAP, id="split phase with supply meter"),
    pytest.param(TWO_LINES, id="two lines, measured to a leg"),
]
USUAL = dict(
    zip(IDLER, (7.0, 12.0, 0.05, 0.48, 2.0, 5.7, 2.0, 8.0, 0.6, 0.45, 0.0, 0.0), strict=True),
)


def parameters_of(wiring, **changes):
    values = dict.fromkeys(wiring.names, 0.0) | USUAL | changes
    return np.array([values[name] for name in wiring.names])


def somewhere(wiring, rows, seed=4):
    """Random parameters near the usual, samples and angles: all derivatives differ there."""
    rng = np.random.default_rng(seed)
    parameters = parameters_of(wiring) + 0.02 * rng.standard_normal(len(wiring.names))
    sides = np.array([0.0 if leg == wiring.hub else 1.0 for leg in range(3)])
    ray = wiring.nominal_voltage * (math.sqrt(3.0) if wiring.hub < 3 else 1.0)
    size = wiring.rated_current * rng.uniform(0.2, 0.8, (rows, len(wiring.channels)))
    sample = Sample(
        rays=ray * sides * rng.uniform(0.93, 1.09, (rows, 3)),
        currents=size * np.exp(-1j * rng.uniform(0.2, 1.2, size.shape)),
        spreads=np.zeros((*size.shape, 2)),
        ammeters=rng.uniform(2.0, 8.0, (rows, len(wiring.ammeters))),
        lines=400.0 * rng.uniform(0.95, 1.05, (rows, len(wiring.lines))),
    )
    nominal = np.array([wiring.directions[leg] for leg in wiring.free])
    return parameters, sample, nominal + rng.uniform(-0.08, 0.08, (rows, len(nominal)))


def two_ways(wiring):
    """Positions forwards and mirrored, the latter with a channel's reactive power the other way, and a loose bank."""
    first = nominal_positions(wiring)
    signs = first.signs.copy()
    signs[:, 0] = -1.0
    second = replace(
        first,
        mirrored=np.ones(1, dtype=bool),
        signs=signs,
        matrices=0.5 * first.matrices,
        shares=0.5 * first.shares,
        bank_matrices=0.5 * first.bank_matrices,
        loose=0.12 * first.matrices,
    )
    return Positions(*(np.concatenate([getattr(way, f.name) for way in (first, second)]) for f in fields(Positions)))


def residuals(wiring, positions, which, parameters, sample, angles):
    return Balance(wiring, positions, which, parameters).seen(sample).at(angles).residuals()


# --------------------------------------------------------------------------
# Kirchhoff's law by another route
# --------------------------------------------------------------------------


def taken(wiring, potentials, values):
    """What idler and capacitors take from the legs, by a matrix of self and mutual admittances (derived).

    Y_jk = (Y0 + a^(j-k) Y1 + a^-(j-k) Y2) / 3 for the sequence in which leg 1 lags leg 0.
    """
    base, turn = wiring.rated_current / wiring.nominal_voltage, cmath.exp(1j * TURN)
    ahead = (potentials[0] + turn * potentials[1] + turn**2 * potentials[2]) / 3.0
    behind = (potentials[0] + turn**2 * potentials[1] + turn * potentials[2]) / 3.0
    ratio, share = abs(ahead) / wiring.nominal_voltage, abs(behind / ahead) ** 2
    conductance = values["g1"] * (1.0 + values["friction"] * (ratio**-2 - 1.0))
    conductance += values["braking"] * values["g2"] * share
    bend = values["saturation_1"] * (max(0.0, ratio - 0.9) ** 2 - 0.01) + values["saturation_2"] * (
        max(0.0, ratio - 1.0) ** 2
    )
    zero = base * complex(values["g0"], -values["b0"]) * wiring.tied
    positive = base * complex(conductance, -values["b1"] * (1.0 + bend))
    negative = base * complex(values["g2"], -values["b2"])
    currents = [
        sum((zero + turn ** (k - j) * positive + turn ** (j - k) * negative) / 3.0 * potentials[k] for k in range(3))
        for j in range(3)
    ]
    nodes = [*potentials, 0.0]  # N, where the feed has one, is the hub; else no capacitor stands on it
    for can in wiring.cans:
        through = 1j * base * can.susceptance * (nodes[can.ends[0]] - nodes[can.ends[1]])
        for end, sign in zip(can.ends, (1.0, -1.0), strict=True):
            if end < 3:
                currents[end] += sign * through
    return currents


@pytest.mark.parametrize("wiring", WIRINGS)
def test_the_currents_that_close_kirchhoffs_law_leave_nothing(wiring):
    _, sample, angles = somewhere(wiring, 1)
    turned = dict(zip(wiring.free, angles[0], strict=True))
    potentials = [sample.rays[0, leg] * cmath.exp(1j * turned.get(leg, wiring.directions[leg])) for leg in range(3)]
    drawn = taken(wiring, potentials, USUAL)
    nodes = [*potentials, 0.0]
    units = [cmath.exp(1j * cmath.phase(nodes[c.across[0]] - nodes[c.across[1]])) for c in wiring.channels]
    first, second = len(wiring.generated), len(wiring.generated) + len(wiring.outgoing)
    flows = [-drawn[channel.leg] for channel in wiring.generated]
    flows += [3.0 - 2.0j for _ in wiring.outgoing]
    flows += [drawn[channel.leg] + 3.0 - 2.0j for channel in wiring.channels[second:]]
    whole = wiring.rated_current / wiring.nominal_voltage
    banks = [
        abs(
            sum(
                whole * can.susceptance * (nodes[ammeter.conductor] - nodes[sum(can.ends) - ammeter.conductor])
                for can in wiring.cans
                if can.bank == ammeter.bank and ammeter.conductor in can.ends
            )
        )
        for ammeter in wiring.ammeters
    ]
    sample = replace(
        sample,
        currents=np.array([[flow / unit for flow, unit in zip(flows, units, strict=True)]]),
        ammeters=np.array([banks]).reshape(1, -1),
        lines=np.array([[abs(potentials[a] - potentials[b]) for a, b in wiring.lines]]).reshape(1, -1),
    )
    left = residuals(
        wiring, nominal_positions(wiring), np.zeros(1, dtype=np.int64), parameters_of(wiring), sample, angles
    )
    assert first + second > 0
    assert left.shape == (1, wiring.rows)
    assert np.abs(left).max() < 1e-6  # volts and amperes: a hundred-millionth


def test_a_mirrored_idler_takes_what_a_forward_one_takes_of_the_legs_exchanged():
    """Turning round exchanges the sequences; so does exchanging legs 2 and 3 (Fortescue)."""
    bare = replace(TIED, cans=(), banks=0)
    parameters, sample, angles = somewhere(bare, 1)
    parameters = parameters_of(bare)
    exchanged = replace(sample, rays=sample.rays[:, [0, 2, 1]], currents=sample.currents[:, [1, 0]])
    forwards = nominal_positions(bare)
    mirrored = replace(forwards, mirrored=np.ones(1, dtype=bool))
    which = np.zeros(1, dtype=np.int64)
    one = residuals(bare, forwards, which, parameters, sample, angles)
    other = residuals(bare, mirrored, which, parameters, exchanged, angles[:, [1, 0]])
    assert other[:, [2, 3, 0, 1]] == pytest.approx(one, rel=1e-9, abs=1e-9)


def test_a_floating_star_takes_no_zero_sequence_current():
    wiring = replace(TIED, tied=False, cans=(), banks=0)
    _, sample, _ = somewhere(wiring, 1)
    alike = replace(sample, rays=np.full((1, 3), 230.0), currents=np.zeros_like(sample.currents))
    together = np.array([[0.0, 0.0]])  # all legs in phase: V0 alone
    parameters = parameters_of(wiring)
    left = residuals(wiring, nominal_positions(wiring), np.zeros(1, dtype=np.int64), parameters, alike, together)
    assert np.abs(left).max() < 1e-9


def test_iron_and_friction_follow_the_voltage_as_the_laws_say():
    """At 1.1 of nominal: B1 b1 (1 + k1 (0.2^2 - 0.1^2) + k2 0.1^2), G1 g1 (1 + f (1/1.21 - 1)), by hand."""
    wiring = replace(TIED, cans=(), banks=0)
    sample = Sample(
        np.full((1, 3), 253.0), np.zeros((1, 2), dtype=complex), np.zeros((1, 2, 2)), np.zeros((1, 0)), np.zeros((1, 0))
    )
    left = residuals(
        wiring,
        nominal_positions(wiring),
        np.zeros(1, dtype=np.int64),
        parameters_of(wiring),
        sample,
        np.array([[-TURN, TURN]]),
    )
    conductance, susceptance = 0.05 * (1.0 + 0.6 * (1.0 / 1.21 - 1.0)), 0.48 * (1.0 + 2.0 * 0.03 + 8.0 * 0.01)
    wanted = 20.0 / 230.0 * 253.0 * np.array([conductance, -susceptance])
    assert left[0] == pytest.approx(np.tile(wanted, 2), rel=1e-9)


# --------------------------------------------------------------------------
# Derivatives
# --------------------------------------------------------------------------


def differences(function, at, step):
    """Central differences of rows (b, rows) by the columns of `at` (b, k): (b, k, rows)."""
    columns = []
    for k in range(at.shape[1]):
        move = np.zeros_like(at)
        move[:, k] = step
        columns.append((function(at + move) - function(at - move)) / (2.0 * step))
    return np.stack(columns, axis=1)


@pytest.mark.parametrize("wiring", WIRINGS)
def test_how_the_rows_follow_the_angles(wiring):
    parameters, sample, angles = somewhere(wiring, 6)
    positions, which = two_ways(wiring), np.array([0, 1, 0, 1, 0, 1])
    seen = Balance(wiring, positions, which, parameters).seen(sample)
    wanted = differences(lambda at: seen.at(at).residuals(), angles, 1e-6)
    assert seen.at(angles).by_angle() == pytest.approx(wanted, rel=1e-6, abs=2e-6 * wiring.rated_current)


@pytest.mark.parametrize("wiring", WIRINGS)
def test_how_the_rows_follow_the_parameters(wiring):
    """The asymmetries stand for the windings alone: how the slip answers them is left out, as it is small."""
    parameters, sample, angles = somewhere(wiring, 6)
    positions, which = two_ways(wiring), np.array([0, 1, 0, 1, 0, 1])
    found = Balance(wiring, positions, which, parameters).seen(sample).at(angles).by_parameter()
    wanted = differences(lambda at: residuals(wiring, positions, which, at[0], sample, angles), parameters[None], 1e-6)
    exact = [name for name in wiring.names if not name.startswith("asymmetry")]
    columns = [wiring.at[name] for name in exact]
    assert found[:, columns] == pytest.approx(wanted[:, columns], rel=1e-6, abs=1e-5 * wiring.rated_current)
    rest = [wiring.at["asymmetry_1"], wiring.at["asymmetry_2"]]
    size = np.abs(wanted[:, rest]).max()
    assert np.abs(found[:, rest] - wanted[:, rest]).max() < 0.1 * size


@pytest.mark.parametrize("wiring", WIRINGS)
def test_how_the_rows_follow_a_bank_that_is_in_by_an_unknown_share(wiring):
    """One standard deviation of the share moves the rows by what the loose matrix draws."""
    parameters, sample, angles = somewhere(wiring, 2)
    positions, which = two_ways(wiring), np.array([1, 1])
    loose = Balance(wiring, positions, which, parameters).seen(sample).at(angles).loose()
    more, less = (replace(positions, matrices=positions.matrices + s * positions.loose) for s in (0.5, -0.5))
    wanted = residuals(wiring, more, which, parameters, sample, angles) - residuals(
        wiring, less, which, parameters, sample, angles
    )
    assert loose == pytest.approx(wanted, rel=1e-7, abs=1e-9)


def test_nothing_is_loose_where_every_bank_is_wholly_in_or_out():
    parameters, sample, angles = somewhere(TIED, 2)
    balance = Balance(TIED, nominal_positions(TIED), np.zeros(2, dtype=np.int64), parameters)
    assert balance.seen(sample).at(angles).loose() is None


@pytest.mark.parametrize("wiring", WIRINGS)
def test_many_at_once_equal_each_alone(wiring):
    parameters, sample, angles = somewhere(wiring, 5)
    positions, which = two_ways(wiring), np.array([0, 1, 1, 0, 1])
    together = Balance(wiring, positions, which, parameters).seen(sample).at(angles)
    for row in range(5):
        one = Sample(*(getattr(sample, f.name)[row : row + 1] for f in fields(Sample)))
        alone = Balance(wiring, positions, which[row : row + 1], parameters).seen(one)
        point = alone.at(angles[row : row + 1])
        for name in ("residuals", "by_angle", "by_ray", "by_parameter", "strain"):
            assert getattr(together, name)()[row] == pytest.approx(getattr(point, name)()[0], rel=1e-10, abs=1e-10)


def test_trust_in_the_laws_ends_beyond_ordinary_voltage_and_unbalance():
    """Nothing up to 1.1 of nominal and a tenth of V2/V1; one more for each 0.03 and 0.05 beyond."""
    _, sample, _ = somewhere(TIED, 1)
    angles = np.array([[-TURN, TURN]])

    def strain(rays):
        balance = Balance(TIED, nominal_positions(TIED), np.zeros(1, dtype=np.int64), parameters_of(TIED))
        return balance.seen(replace(sample, rays=np.array([rays]))).at(angles).strain()[0]

    assert strain([230.0 * 1.099] * 3) == pytest.approx(1.0)
    assert strain([230.0 * 1.16] * 3) == pytest.approx(3.0, rel=1e-6)
    # one ray longer by d: V1 = 230 + d/3, V2 = d/3, so d = 3 * 230 * 0.15/0.85 gives a ratio of 0.15
    uneven = 230.0 * (1.0 + 3.0 * 0.15 / 0.85)
    ratio = (230.0 + 230.0 * 0.15 / 0.85) / 230.0
    assert strain([uneven, 230.0, 230.0]) == pytest.approx(1.0 + (ratio - 1.1) / 0.03 + 1.0, rel=1e-6)


def test_unlike_windings_of_a_floating_star_let_no_zero_sequence_through():
    """Against the nodal solver: the star point a node of its own, joined to nothing (Kron reduction).

    To first order in the asymmetry; the zero-sequence admittance then drops out, whatever it is.
    """
    wiring = replace(TIED, tied=False, cans=(), banks=0)
    values = {"asymmetry_1": 0.002, "asymmetry_2": -0.003}
    rng = np.random.default_rng(2)
    rays, angles = 230.0 * rng.uniform(0.8, 1.05, 3), np.array([[-TURN + 0.3, TURN + 0.2]])
    potentials = rays * np.exp(1j * np.array([0.0, *angles[0]]))
    sample = Sample(
        rays[None], np.zeros((1, 2), dtype=complex), np.zeros((1, 2, 2)), np.zeros((1, 0)), np.zeros((1, 0))
    )
    parameters = parameters_of(wiring, saturation_1=0.0, saturation_2=0.0, friction=0.0, braking=0.0, **values)
    found = residuals(wiring, nominal_positions(wiring), np.zeros(1, dtype=np.int64), parameters, sample, angles)
    units = potentials[1:] / rays[1:]
    root = np.sqrt(1.0 + np.array([0.002, -0.003, 0.001]))
    base = wiring.rated_current / wiring.nominal_voltage
    sequences = base * np.array([7.0 - 12.0j, 0.05 - 0.48j, 2.0 - 5.7j])
    legs = with_terminal(root[:, None] * winding_matrix(sequences) * root)
    wanted = (behind_impedances(legs, np.array([0.0, 0.0, 0.0, 1e9])) @ np.array([*potentials, 0.0]))[1:3]
    told = found.view(np.complex128)[0] * units
    unlike = np.abs(winding_matrix(np.array([0.0, *sequences[1:]])) @ potentials)[1:]
    assert np.abs(told - wanted).max() < 0.02 * 0.003 * unlike.max()
