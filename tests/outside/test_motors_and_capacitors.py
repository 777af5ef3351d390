"""Derating, heat, insulation and capacitors against handbooks and worked examples; each source beside its check."""

import numpy as np
import pytest

from idlerwatch.core.electrical.capacitor import (
    capacitance_in_circuit,
    capacitor_current,
    capacitor_reactive_power,
    discharge_time,
)
from idlerwatch.core.electrical.derating import (
    NEMA_DERATING,
    added_temperature_rise,
    derating_factor,
    insulation_life_factor,
)
from idlerwatch.core.electrical.unbalance import line_voltage_unbalance_rate


# The curve of NEMA MG 1 as engineeringtoolbox.com d_648 tabulates it (seen); other readings differ by 0.01 to 0.02.
@pytest.mark.parametrize(
    ("percent", "factor", "tolerance"),
    [
        (0.0, 1.00, 0.001), (1.5, 0.97, 0.001), (2.0, 0.95, 0.001), (2.5, 0.93, 0.001), (3.0, 0.89, 0.001),
        (3.5, 0.85, 0.001), (4.0, 0.82, 0.001), (4.5, 0.78, 0.001), (5.0, 0.76, 0.001),
        (1.0, 1.00, 0.02),  # curve reading (b), from memory
        (1.96, 0.95, 0.01),  # tools.gera.services, seen
        (2.58, 0.92, 0.01),  # Hubert, example 5.14, seen
        (3.0, 0.90, 0.02),  # summary of IEC TS 60034-26, seen
        (5.0, 0.75, 0.01),  # summary of IEC TS 60034-26, seen
    ],
)  # fmt: skip
def test_derating_is_that_of_the_published_curve(percent, factor, tolerance):
    found = float(derating_factor(np.array(percent / 100.0), NEMA_DERATING))
    assert found == pytest.approx(factor, abs=tolerance + 1e-9)


def test_no_motor_should_run_beyond_the_curve():
    """Operation above 5 % is not recommended (NEMA MG 1, as restated by engineeringtoolbox.com d_648)."""
    assert np.isnan(derating_factor(np.array(0.0501), NEMA_DERATING))
    assert not np.isnan(derating_factor(np.array(0.05), NEMA_DERATING))


def test_the_chain_of_a_textbook_example():
    """Hubert, Electric Machines, example 5.14: 2.58 %, 13.31 %, 0.3624 of the life, 27.6 of 30 hp (0.5 %).

    The book applies the added rise to the whole 110 C; its temperature is followed here only to check the life.
    """
    rate = line_voltage_unbalance_rate(np.array([460.0, 455.0, 440.0]))
    assert float(rate) == pytest.approx(0.0258, abs=5e-5)
    rise = added_temperature_rise(rate)
    assert float(rise) == pytest.approx(0.1331, rel=5e-3)
    warmer = 110.0 * float(rise)
    assert float(insulation_life_factor(np.array(warmer))) == pytest.approx(0.3624, rel=5e-3)
    assert 20.0 * float(insulation_life_factor(np.array(warmer))) == pytest.approx(7.25, rel=5e-3)
    assert 30.0 * float(derating_factor(rate, NEMA_DERATING)) == pytest.approx(27.6, rel=5e-3)


def test_three_percent_adds_eighteen_percent_of_rise():
    """voltdropcalc.com and a public code file: 3 % unbalance, 18 % more rise."""
    assert float(added_temperature_rise(np.array(0.03))) == pytest.approx(0.18)


@pytest.mark.parametrize(
    ("kelvin", "factor"),
    [(-20, 4.0), (-10, 2.0), (0, 1.0), (10, 0.5), (20, 0.25), (25, 0.17678), (-25, 5.657)],
)
def test_life_halves_for_each_ten_kelvin(kelvin, factor):
    """Montsinger's rule; -25 K is class F insulation at a class B rise, 5.6 in print (tnlab.com)."""
    assert float(insulation_life_factor(np.array(float(kelvin)))) == pytest.approx(factor, rel=1e-4)


@pytest.mark.parametrize(
    ("microfarads", "volts", "hertz", "var"),
    [
        (1.0, 230.0, 50.0, 16.619), (1.0, 400.0, 50.0, 50.265), (1.0, 240.0, 60.0, 21.715),  # derived
        (12.536, 460.0, 60.0, 1000.0),  # allinterview.com: 12.54 uF a kvar
        (202.69, 400.0, 50.0, 10188.0),  # electricaltechnology.org: 12 kW from 0.6 to 0.9
        (94.63, 400.0, 50.0, 4756.5),  # Mehta, example 6.6
    ],
)  # fmt: skip
def test_reactive_power_of_a_capacitor(microfarads, volts, hertz, var):
    assert float(capacitor_reactive_power(1e-6 * microfarads, volts, hertz)) == pytest.approx(var, rel=1e-4)


def test_current_and_capacitance_in_circuit():
    """70 uF on 230 V, 50 Hz: 5.0580 A (derived); 2652.6 I/U at 60 Hz (oceanhvac.com prints 2652)."""
    assert float(capacitor_current(70e-6, 230.0, 50.0)) == pytest.approx(5.0580, abs=5e-5)
    assert 1e6 * float(capacitance_in_circuit(1.0, 1.0, 60.0)) == pytest.approx(2652.6, abs=0.05)
    assert np.isnan(capacitance_in_circuit(1.0, 0.0, 50.0))


@pytest.mark.parametrize(
    ("microfarads", "ohms", "volts", "residual", "seconds"),
    [
        (331.57, 268.67e3, 400.0, 75.0, 180.0),  # 50 kvar delta, one resistor each: a maker's note, 268 kohm
        (331.57, 74.59e3, 400.0, 50.0, 60.0),  # the same, 74.5 kohm
        (70.0, 1.7527e6, 230.0, 75.0, 180.0), (70.0, 100e3, 230.0, 75.0, 10.270),  # derived
        (70.0, 100e3, 230.0, 60.0, 11.832), (70.0, 42.26e3, 230.0, 60.0, 5.0),  # derived
    ],
)  # fmt: skip
def test_discharge_through_a_resistor(microfarads, ohms, volts, residual, seconds):
    assert float(discharge_time(1e-6 * microfarads, ohms, volts, residual)) == pytest.approx(seconds, rel=2e-3)
