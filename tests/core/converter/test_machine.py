"""Torque, slip and saturation against mesh equations solved numerically, root finding, and textbook formulas."""

import dataclasses

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from idlerwatch.core.converter.machine import (
    EquivalentCircuit,
    Iron,
    airgap_power,
    airgap_torque,
    airgap_voltage,
    phase_admittance,
    saturated,
    slip_at_torque,
)

VOLTS = 230.0


def circuit_of(rs, xs, xm, rr, xr, core=float("inf")):
    return EquivalentCircuit(*(np.array(value) for value in (rs, xs, xm, rr, xr, core)))


FITZGERALD = circuit_of(0.294, 0.503, 13.25, 0.144, 0.209)
"""Fitzgerald, Electric Machinery, example 6.2: 220 V, 60 Hz, six poles, star."""
IDLER = circuit_of(0.7, 1.3, 34.0, 0.5, 1.4, 420.0)


def mesh(machine, slip, volts):
    """Currents of stator, magnetising branch, core and rotor by Kirchhoff's laws, one row an equation."""
    rs, xs, xm, rr, xr, core = (float(getattr(machine, field.name)) for field in dataclasses.fields(machine))
    rows = np.array(
        [
            [rs + 1j * xs, 1j * xm, 0, 0],
            [0, 1j * xm, -core, 0],
            [0, 1j * xm, 0, -(rr / slip + 1j * xr)],
            [1, -1, -1, -1],
        ]
    )
    return np.linalg.solve(rows, np.array([volts, 0, 0, 0], dtype=complex))


def mesh_torque(machine, slip, volts):
    return 3.0 * abs(mesh(machine, slip, volts)[3]) ** 2 * float(machine.rotor_resistance) / slip


machines = st.builds(
    circuit_of,
    st.floats(0.1, 2.0),
    st.floats(0.5, 3.0),
    st.floats(15.0, 80.0),
    st.floats(0.1, 1.5),
    st.floats(0.5, 3.0),
    st.floats(200.0, 2000.0),
)


@given(machines, st.floats(0.002, 2.0))
def test_current_and_airgap_power_are_those_of_the_mesh_equations(machine, slip):
    stator, _, _, _ = mesh(machine, slip, VOLTS)
    assert VOLTS * complex(phase_admittance(machine, np.array(slip))) == pytest.approx(stator, rel=1e-9)
    assert float(airgap_power(machine, np.array(slip), VOLTS)) == pytest.approx(mesh_torque(machine, slip, VOLTS))


@given(machines, st.floats(0.002, 0.9), st.floats(0.0, 40.0))
def test_what_goes_in_is_lost_or_turns_the_shaft(machine, slip, negative):
    """Both sequences: input = copper, core and (1 - s) of the net airgap power."""
    went_in = lost = 0.0
    for volts, seen in ((VOLTS, slip), (negative, 2.0 - slip)):
        stator, _, core, rotor = mesh(machine, seen, volts)
        went_in += 3.0 * volts * stator.real
        for current, ohms in ((stator, machine.stator_resistance), (rotor, machine.rotor_resistance)):
            lost += 3.0 * abs(current) ** 2 * float(ohms)
        lost += 3.0 * abs(core) ** 2 * float(machine.core_resistance)
    shaft = (1.0 - slip) * float(airgap_torque(machine, np.array(slip), VOLTS, negative))
    assert went_in == pytest.approx(lost + shaft, rel=1e-9, abs=1e-6)


@settings(deadline=None)
@given(machines, st.floats(0.05, 0.85), st.floats(0.0, 40.0))
def test_slip_is_where_a_root_finder_has_it(machine, share, negative):
    def net(slip):
        braking = mesh_torque(machine, 2.0 - slip, negative) if negative else 0.0
        return mesh_torque(machine, slip, VOLTS) - braking

    grid = np.linspace(1e-4, 1.0, 400)
    torques = np.array([net(slip) for slip in grid])
    top = int(torques.argmax())
    torque = share * torques[top]
    wanted = brentq(lambda slip: net(slip) - torque, 1e-9, grid[top], xtol=1e-13)
    assert float(slip_at_torque(machine, np.array(torque), VOLTS, negative)) == pytest.approx(wanted, rel=1e-6)


def test_the_most_torque_and_the_slip_it_comes_at():
    """3 V'^2 / (2 (R' + sqrt(R'^2 + X^2))) at s = Rr / sqrt(R'^2 + X^2), Thevenin's source (Fitzgerald 6.5)."""
    stator = 0.294 + 0.503j
    share = 13.25j / (stator + 13.25j)
    source, behind = abs(127.017 * share), stator * share + 0.209j
    most = 3.0 * source**2 / (2.0 * (behind.real + abs(behind)))
    below = slip_at_torque(FITZGERALD, np.array(most * (1.0 - 1e-9)), 127.017, 0.0)
    assert float(below) == pytest.approx(0.144 / abs(behind), rel=1e-3)
    assert np.isnan(slip_at_torque(FITZGERALD, np.array(most * (1.0 + 1e-9)), 127.017, 0.0))


def test_the_negative_sequence_brakes():
    even = slip_at_torque(IDLER, np.array(300.0), VOLTS, 0.0)
    uneven = slip_at_torque(IDLER, np.array(300.0), VOLTS, 30.0)
    assert float(uneven) > float(even)
    assert float(airgap_torque(IDLER, uneven, VOLTS, 30.0)) == pytest.approx(300.0, rel=1e-9)


def test_a_machine_that_is_driven_runs_above_synchronous_speed():
    slip = slip_at_torque(IDLER, np.array(-2000.0), VOLTS, 0.0)
    assert float(slip) < 0.0
    assert float(airgap_power(IDLER, slip, VOLTS)) == pytest.approx(-2000.0, rel=1e-9)


def test_nothing_to_turn_is_synchronous_speed():
    assert float(slip_at_torque(IDLER, np.array(0.0), VOLTS, 0.0)) == 0.0


def test_without_voltage_or_with_a_figure_missing_there_is_no_slip():
    torques, volts = np.array([300.0, 300.0, np.nan, 300.0]), np.array([0.0, np.nan, 230.0, 230.0])
    slips = slip_at_torque(IDLER, torques, volts, 0.0)
    assert np.isnan(slips).tolist() == [True, True, True, False]


def test_many_at_once_equal_each_alone():
    torques = np.linspace(100.0, 9000.0, 12).reshape(3, 4)
    negatives = np.linspace(0.0, 40.0, 4)
    together = slip_at_torque(IDLER, torques, VOLTS, negatives)
    alone = [[slip_at_torque(IDLER, t, VOLTS, v) for t, v in zip(row, negatives, strict=True)] for row in torques]
    assert together == pytest.approx(np.array(alone), rel=1e-12)


def no_load(saturation, ratio):
    """No-load current at a ratio of the rated voltage, found by a root finder on the airgap voltage."""
    iron = Iron(np.array(saturation), np.array(VOLTS / (1.0 + 1.3 / 34.0)))
    machine = circuit_of(0.0, 1.3, 34.0, 0.5, 1.4)

    def miss(across):
        bent = saturated(machine, iron, np.array(across))
        return float(airgap_voltage(bent, np.array(0.0), ratio * VOLTS)) - across

    across = brentq(miss, 50.0, 400.0)
    return ratio * VOLTS * abs(complex(phase_admittance(saturated(machine, iron, np.array(across)), np.array(0.0))))


@pytest.mark.parametrize(("saturation", "climb"), [(0.0, 1.1), (0.10, 1.2), (0.72, 1.5)])
def test_the_no_load_current_climbs_by_a_fifth_to_a_half_at_ten_percent_more_voltage(saturation, climb):
    """Common practice, no source; without saturation it climbs as the voltage does."""
    assert no_load(saturation, 1.1) / no_load(saturation, 1.0) == pytest.approx(climb, abs=0.01)


def test_the_reactance_is_the_circuits_own_at_the_reference_voltage_and_falls_above():
    iron = Iron(np.array(0.25), np.array(220.0))
    found = saturated(IDLER, iron, 220.0 * np.array([0.5, 1.0, 1.05, 1.1])).magnetising_reactance
    assert found[1] == pytest.approx(34.0)
    assert np.all(np.diff(found) < 0.0)
    assert found[0] == pytest.approx(34.0 * 1.25, rel=2e-3)
