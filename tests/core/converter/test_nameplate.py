"""Machines made of nameplates keep what their plates say, and lie about textbook machines as far off as they claim."""

import dataclasses
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from idlerwatch.core.converter.machine import (
    airgap_power,
    airgap_voltage,
    phase_admittance,
    saturated,
    slip_at_torque,
)
from idlerwatch.core.converter.nameplate import EFFICIENCY, Nameplate, typical_machine, zero_admittance

KILOWATTS = st.floats(0.5, 30.0)


def phase(plate):
    return plate.rated_voltage / math.sqrt(3.0)


def at_rated(plate):
    """Slip, line current, power factor and efficiency of the machine when it delivers its rated torque."""
    machine = typical_machine(plate)
    slip = slip_at_torque(machine.circuit, np.array(machine.rated_torque + machine.friction), phase(plate), 0.0)
    admittance = complex(phase_admittance(machine.circuit, slip))
    went_in = 3.0 * phase(plate) ** 2 * admittance.real
    shaft = (1.0 - float(slip)) * machine.rated_torque
    return float(slip), phase(plate) * abs(admittance), admittance.real / abs(admittance), shaft / went_in


def no_load_current(plate):
    """Line current with friction only, the reactance brought to its airgap voltage by many small steps."""
    machine = typical_machine(plate)
    circuit, slip = machine.circuit, np.array(0.0)
    for _ in range(300):
        across = airgap_voltage(circuit, slip, phase(plate))
        wanted = saturated(machine.circuit, machine.iron, across).magnetising_reactance
        middle = 0.8 * circuit.magnetising_reactance + 0.2 * wanted
        circuit = dataclasses.replace(circuit, magnetising_reactance=middle)
        slip = slip_at_torque(circuit, np.array(machine.friction), phase(plate), 0.0)
    return phase(plate) * abs(complex(phase_admittance(circuit, slip)))


def test_a_full_plate_is_kept():
    """7.5 kW, 400 V, 15.2 A, 1455 rpm, 0.82: an efficiency of 0.8685 follows from these (derived)."""
    slip, amperes, factor, efficiency = at_rated(Nameplate(7.5, 400.0, 50.0, 15.2, 1455.0, 0.82))
    assert slip == pytest.approx(0.03, rel=1e-3)
    assert amperes == pytest.approx(15.2, rel=5e-3)
    assert factor == pytest.approx(0.82, abs=5e-3)
    assert efficiency == pytest.approx(7500.0 / (math.sqrt(3.0) * 400.0 * 15.2 * 0.82), abs=5e-3)


@given(KILOWATTS, st.sampled_from([208.0, 230.0, 400.0, 480.0]))
def test_a_machine_of_usual_figures_has_the_efficiency_of_its_class(kilowatts, volts):
    """IE1 between the rows of the table (IEC 60034-30-1)."""
    _, _, _, efficiency = at_rated(Nameplate(kilowatts, volts))
    rows = np.array(list(EFFICIENCY.items()))
    assert efficiency == pytest.approx(np.interp(np.log(kilowatts), np.log(rows[:, 0]), rows[:, 1]), abs=1e-6)


@given(KILOWATTS)
def test_the_same_machine_wound_for_another_voltage_has_impedances_in_its_square(kilowatts):
    low, high = (typical_machine(Nameplate(kilowatts, volts)) for volts in (230.0, 460.0))
    for field in dataclasses.fields(low.circuit):
        assert 4.0 * getattr(low.circuit, field.name) == pytest.approx(getattr(high.circuit, field.name))
    assert low.friction == pytest.approx(high.friction)


def test_power_over_the_airgap_at_rated_slip_is_shaft_and_friction():
    machine = typical_machine(Nameplate(4.0, 400.0))
    power = float(airgap_power(machine.circuit, np.array(machine.rated_slip), 400.0 / math.sqrt(3.0)))
    assert power == pytest.approx(machine.rated_torque + machine.friction, rel=1e-9)
    assert (1.0 - machine.rated_slip) * machine.rated_torque == pytest.approx(4000.0)


@pytest.mark.parametrize(
    ("plate", "share"),
    [
        (Nameplate(18.5, 400.0, 50.0, 32.85, 1462.0, 0.896), 11.0 / 32.85),  # measured, Modelica Standard Library
        (Nameplate(1.5, 400.0), 0.6),  # small machines 0.5 to 0.7 of rated: common practice, no source
        (Nameplate(0.75, 400.0), 0.6),
    ],
)
def test_no_load_current_is_as_uncertain_as_is_claimed(plate, share):
    machine = typical_machine(plate)
    off = math.log(no_load_current(plate) / (share * machine.rated_current))
    assert abs(off) < machine.relative["magnetising_reactance"]


def test_a_measured_no_load_current_is_kept():
    plate = Nameplate(7.5, 400.0, rated_current=15.2, magnetising_current=6.4)
    assert no_load_current(plate) == pytest.approx(6.4, rel=0.01)
    assert typical_machine(plate).relative["magnetising_reactance"] < 0.1


@pytest.mark.parametrize(
    ("plate", "constants"),
    [
        # Modelica Standard Library, 18.5 kW, delta, measured; to a star phase, and to 90 C (seen)
        (
            Nameplate(18.5, 400.0, 50.0, 32.85, 1462.0, 0.896),
            {
                "stator_resistance": 0.56 * 1.2751 / 3.0,
                "stator_reactance": 1.52 / 3.0,
                "magnetising_reactance": 66.4 / 3.0,
                "rotor_resistance": 0.42 * 1.2751 / 3.0,
                "rotor_reactance": 2.31 / 3.0,
                "core_resistance": 400.0**2 / 482.0,
            },
        ),
        # Fitzgerald 6.2, 220 V, 60 Hz, six poles (seen); its 7.5 kW from memory
        (
            Nameplate(7.5, 220.0, 60.0),
            {
                "stator_resistance": 0.294,
                "stator_reactance": 0.503,
                "magnetising_reactance": 13.25,
                "rotor_resistance": 0.144,
                "rotor_reactance": 0.209,
            },
        ),
    ],
)
def test_constants_of_known_machines_lie_within_twice_the_uncertainty(plate, constants):
    machine = typical_machine(plate)
    for name, value in constants.items():
        off = math.log(float(getattr(machine.circuit, name)) / value)
        assert abs(off) < 2.0 * machine.relative[name], name


def test_rotational_loss_of_a_known_machine_is_friction_and_core():
    """Fitzgerald 6.2: 403 W of friction, windage and core together (seen); within twice the uncertainty."""
    machine = typical_machine(Nameplate(7.5, 220.0, 60.0))
    core = 3.0 * float(machine.iron.reference_voltage) ** 2 / float(machine.circuit.core_resistance)
    assert abs(math.log((core + machine.friction) / 403.0)) < 2.0 * machine.relative["core_resistance"]


def test_a_plate_with_its_speed_makes_the_rotor_better_known():
    with_speed, without = (typical_machine(Nameplate(7.5, 400.0, rated_speed_rpm=rpm)) for rpm in (1455.0, None))
    assert with_speed.relative["rotor_resistance"] < without.relative["rotor_resistance"]


@pytest.mark.parametrize(
    ("rpm", "hertz", "slip"),
    [(2890.0, 50.0, 0.11 / 3), (1455.0, 50.0, 0.03), (1176.0, 60.0, 0.02), (440.0, 50.0, 0.12)],
)
def test_the_synchronous_speed_is_the_next_above(rpm, hertz, slip):
    """3000, 1500, 1200 and 500 rpm."""
    assert typical_machine(Nameplate(7.5, 400.0, hertz, rated_speed_rpm=rpm)).rated_slip == pytest.approx(slip)


@pytest.mark.parametrize(
    ("plate", "complaint"),
    [
        (Nameplate(7.5, 400.0, rated_current=10.0), "rated_current must be above 12.6 A"),
        (Nameplate(7.5, 400.0, rated_current=30.0, rated_power_factor=0.95), "efficiency of 0.38"),
        (Nameplate(7.5, 400.0, rated_current=12.0, rated_power_factor=0.85), "efficiency of 1.06"),
        (Nameplate(7.5, 400.0, rated_speed_rpm=1500.0), "must be a little below 3000"),
        (Nameplate(7.5, 400.0, rated_speed_rpm=3600.0), "must be a little below 3000"),
    ],
)
def test_a_plate_that_no_machine_can_have_is_refused_with_what_was_wanted(plate, complaint):
    with pytest.raises(ValueError, match=complaint):
        typical_machine(plate)


def test_only_a_tied_star_point_lets_zero_sequence_through():
    machine = typical_machine(Nameplate(7.5, 400.0))
    assert complex(zero_admittance(machine, "N")) == pytest.approx(1.0 / machine.zero_impedance)
    assert complex(zero_admittance(machine, "floating")) == 0.0
