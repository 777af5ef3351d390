"""The nodal solver and the machine against textbook circuits; each source beside its check."""

import cmath
import math

import numpy as np
import pytest

from idlerwatch.core.converter.machine import EquivalentCircuit, phase_admittance, sequence_admittances
from idlerwatch.core.converter.network import (
    behind_impedances,
    pair_matrix,
    solve_nodes,
    winding_matrix,
    with_terminal,
)
from idlerwatch.core.electrical.sequence import sequence_components, unbalance_factor

FITZGERALD = EquivalentCircuit(*(np.array(value) for value in (0.294, 0.503, 13.25, 0.144, 0.209)))
"""Fitzgerald, Electric Machinery, example 6.2: 220 V, 60 Hz, six poles, star."""
OMEGA = 2.0 * math.pi * 60.0


@pytest.mark.parametrize(
    ("slip", "amperes", "factor"),
    [(0.02, 18.778, 0.84557), (0.01, 12.390, 0.6634), (0.05, 39.353, 0.9180), (0.10, 67.556, 0.8903),
     (1.0, 152.64, 0.521)],
)  # fmt: skip
def test_current_and_power_factor_of_the_textbook_machine(slip, amperes, factor):
    """18.778 A at slip 0.02 is printed (seen); the others are the same circuit worked out (derived)."""
    current = 220.0 / math.sqrt(3.0) * complex(phase_admittance(FITZGERALD, np.array(slip)))
    assert abs(current) == pytest.approx(amperes, rel=1e-4)
    assert math.cos(cmath.phase(current)) == pytest.approx(factor, abs=5e-4)


def test_shaft_power_and_efficiency_of_the_textbook_machine():
    """Fitzgerald 6.2: 5221.6 W at the shaft with 403 W of rotational loss, efficiency 0.8630 (seen)."""
    slip = 0.02
    voltage = 220.0 / math.sqrt(3.0)
    current = voltage * complex(phase_admittance(FITZGERALD, np.array(slip)))
    power = 3.0 * voltage * current.real
    airgap = power - 3.0 * abs(current) ** 2 * 0.294
    shaft = (1.0 - slip) * airgap - 403.0
    assert power == pytest.approx(6050.4, rel=1e-4)
    assert shaft == pytest.approx(5221.6, rel=1e-4)
    assert shaft / power == pytest.approx(0.8630, abs=5e-5)


def idle(slip, ca_farads, cb_farads):
    """L1-L2 fed with 220 V, floating star, capacitors L3-L1 and L2-L3: the lines, and the supply amperes."""
    machine = winding_matrix(sequence_admittances(FITZGERALD, np.array(slip), 0.0))
    cans = pair_matrix(3, [(2, 0), (1, 2)], 1j * OMEGA * np.array([ca_farads, cb_farads]))
    stiff = 1e6
    fed = pair_matrix(3, [(0, -1), (1, -1)], np.array([stiff, stiff], dtype=complex))
    force = np.array([110.0 * stiff, -110.0 * stiff, 0.0], dtype=complex)
    nodes = solve_nodes(machine + cans + fed, force)
    lines = np.array([nodes[0] - nodes[1], nodes[1] - nodes[2], nodes[2] - nodes[0]])
    supply = (machine + cans) @ nodes
    return lines, abs(supply[0])


@pytest.mark.parametrize(
    ("slip", "ca", "cb", "v23", "v31", "vuf", "amperes"),
    [
        (0.002, 0, 0, 199.617, 205.581, 5.872, 15.340), (0.002, 50, 0, 206.846, 213.715, 3.558, 11.767),
        (0.002, 100, 0, 215.054, 222.422, 1.974, 8.047), (0.002, 200, 0, 234.825, 241.750, 5.490, 4.227),
        (0.002, 100, 100, 233.742, 222.812, 3.748, 3.602), (0.002, 200, 200, 281.134, 244.832, 14.607, 22.193),
        (0.020, 0, 0, 201.024, 179.334, 11.788, 29.483), (0.020, 100, 0, 213.731, 192.760, 7.789, 27.507),
        (0.020, 200, 200, 269.230, 202.234, 18.257, 36.012),
    ],
)  # fmt: skip
def test_the_idler_with_capacitors(slip, ca, cb, v23, v31, vuf, amperes):
    """The same machine as an idler on two lines, worked out by nodal analysis in another program (derived)."""
    lines, supply = idle(slip, 1e-6 * ca, 1e-6 * cb)
    assert np.abs(lines) == pytest.approx([220.0, v23, v31], abs=6e-3)
    assert 100.0 * float(unbalance_factor(sequence_components(lines))) == pytest.approx(vuf, abs=6e-4)
    assert supply == pytest.approx(amperes, abs=6e-4)


def test_two_unequal_capacitors_balance_the_idling_machine_exactly():
    """85.914 and 41.859 uF at slip 0.002 (closed form, derived; substitution leaves nothing)."""
    lines, supply = idle(0.002, 85.914e-6, 41.859e-6)
    assert np.abs(lines) == pytest.approx([220.0, 220.0, 220.0], abs=6e-3)
    assert supply == pytest.approx(6.172, abs=6e-4)


@pytest.mark.parametrize(
    ("degrees", "ca", "cb"),
    [(60.0, 138.396, 0.0), (80.0, 102.721, 54.657), (90.0, 79.903, 79.903)],
)
def test_exact_balance_of_any_balanced_current(degrees, ca, cb):
    """230 V between lines, 10 A lagging, 50 Hz: (2/3)(I/V) sin(phi +- 60) with the star voltage V (derived)."""
    admittance = 10.0 * math.sqrt(3.0) / 230.0 * cmath.exp(-1j * math.radians(degrees))
    load = winding_matrix(np.array([0.0, admittance, 5.0 * admittance]))  # as of a motor; equal ones would resonate
    cans = pair_matrix(3, [(2, 0), (1, 2)], 2j * math.pi * 50.0 * 1e-6 * np.array([ca, cb]))
    stiff = 1e7
    fed = pair_matrix(3, [(0, -1), (1, -1)], np.array([stiff, stiff], dtype=complex))
    half = 115.0
    nodes = solve_nodes(load + cans + fed, np.array([half * stiff, -half * stiff, 0.0], dtype=complex))
    lines = np.array([nodes[0] - nodes[1], nodes[1] - nodes[2], nodes[2] - nodes[0]])
    assert float(unbalance_factor(sequence_components(lines))) < 1e-4


def test_lamps_in_series_on_a_broken_neutral():
    """100 W and 150 W lamps for 230 V on 400 V with the neutral lost: 240 and 160 V (Mehta, example 14.11, seen)."""
    matrix = pair_matrix(3, [(0, 1), (1, 2), (0, -1), (2, -1)], np.array([100.0, 150.0, 1e9, 1e9]) / 230.0**2 + 0j)
    nodes = solve_nodes(matrix, np.array([400.0, 0.0, 0.0]) * 1e9 / 230.0**2 + 0j)
    assert abs(nodes[0] - nodes[1]) == pytest.approx(240.0, abs=1e-3)
    assert abs(nodes[1] - nodes[2]) == pytest.approx(160.0, abs=1e-3)


def test_a_star_of_unequal_resistors_whose_neutral_is_lost():
    """10, 8 and 5 kW on 400 V: neutral at 43.767 V, legs 197.53, 230.07 and 271.66 V (derived)."""
    legs = 400.0 / math.sqrt(3.0) * np.exp(-2j * np.pi * np.arange(3) / 3.0)
    conductances = np.array([10e3, 8e3, 5e3]) / (400.0**2 / 3.0)
    matrix = pair_matrix(1, [(0, -1)] * 3, conductances + 0j)
    neutral = complex(solve_nodes(matrix, np.array([(conductances * legs).sum()]))[0])
    assert abs(neutral) == pytest.approx(43.767, abs=1e-3)
    assert np.abs(legs - neutral) == pytest.approx([197.53, 230.07, 271.66], abs=6e-3)


def test_equal_sequence_admittances_are_three_windings_that_know_nothing_of_each_other():
    y = 0.2 - 0.4j
    assert winding_matrix(np.array([y, y, y])) == pytest.approx(y * np.eye(3))


def test_an_open_pole_eliminates_its_node():
    """Kron reduction by hand: of a triangle of admittances y with a corner open, y + y/2 is left between the others."""
    y = 0.3 + 0.1j
    triangle = pair_matrix(3, [(0, 1), (1, 2), (2, 0)], np.array([y, y, y]))
    seen = behind_impedances(triangle, np.array([0.0, 0.0, 1e9]))
    assert seen[0, 1] == pytest.approx(-1.5 * y, rel=1e-6)
    assert abs(seen[2]).max() < 1e-8


def test_the_terminal_of_a_star_takes_what_the_legs_bring():
    matrix = with_terminal(winding_matrix(np.array([1.0 - 1j, 0.2 - 0.3j, 0.4 - 0.5j])))
    assert matrix.sum(axis=0) == pytest.approx(np.zeros(4), abs=1e-12)
    assert matrix.sum(axis=1) == pytest.approx(np.zeros(4), abs=1e-12)


def test_many_circuits_at_once_equal_each_alone():
    slips = np.array([0.002, 0.01, 0.02, 0.5])
    together = winding_matrix(sequence_admittances(FITZGERALD, slips, 0.0))
    for index, slip in enumerate(slips):
        alone = winding_matrix(sequence_admittances(FITZGERALD, np.array(slip), 0.0))
        assert together[index] == pytest.approx(alone)
