"""Capacitors on a sinusoidal voltage: current, reactive power, capacitance, discharge."""

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def capacitor_current(capacitance: Floats, voltage: Floats, frequency: Floats) -> Floats:
    """Root-mean-square current of a capacitor.

    Parameters
    ----------
    capacitance, voltage, frequency : (...)
        [F], [V], [Hz]

    Returns
    -------
    (...)
        [A]

    Examples
    --------
    >>> round(float(capacitor_current(np.array(40e-6), np.array(400.0), np.array(50.0))), 2)
    5.03

    References
    ----------
    Ohm's law with the reactance 1 / (2 pi f C).
    """
    current: Floats = 2.0 * np.pi * np.asarray(frequency) * np.asarray(capacitance) * np.asarray(voltage)
    return current


def capacitor_reactive_power(capacitance: Floats, voltage: Floats, frequency: Floats) -> Floats:
    """Reactive power that a capacitor delivers.

    Parameters
    ----------
    capacitance, voltage, frequency : (...)
        [F], [V], [Hz]

    Returns
    -------
    (...)
        [var]

    References
    ----------
    Q = 2 pi f C U^2.
    """
    power: Floats = capacitor_current(capacitance, voltage, frequency) * np.asarray(voltage)
    return power


def capacitance_in_circuit(current: Floats, voltage: Floats, frequency: Floats) -> Floats:
    """Capacitance from what a clamp meter and a voltmeter read on the running circuit.

    Parameters
    ----------
    current, voltage, frequency : (...)
        [A], [V], [Hz]

    Returns
    -------
    (...)
        NaN where there is no voltage or no frequency. [F]

    Examples
    --------
    >>> round(float(capacitance_in_circuit(np.array(5.06), np.array(230.0), np.array(50.0))) * 1e6, 2)
    70.03

    References
    ----------
    C = I / (2 pi f U).
    """
    product = 2.0 * np.pi * np.asarray(frequency, dtype=np.float64) * np.asarray(voltage)
    with np.errstate(invalid="ignore", divide="ignore"):
        capacitance: Floats = np.asarray(current) / np.where(product == 0.0, np.nan, product)
    return capacitance


def discharge_time(capacitance: Floats, resistance: Floats, voltage: Floats, residual: Floats) -> Floats:
    """Time in which a resistor across a capacitor brings it from the crest of a voltage to a residual voltage.

    Parameters
    ----------
    capacitance, resistance : (...)
        [F], [ohm]
    voltage : (...)
        Root-mean-square voltage it was charged from. [V]
    residual : (...)
        [V]

    Returns
    -------
    (...)
        [s]

    Examples
    --------
    >>> round(float(discharge_time(70e-6, 100e3, 230.0, 75.0)), 2)
    10.27

    References
    ----------
    Exponential discharge from sqrt(2) U, as in IEC 60831-1.
    """
    crest = np.sqrt(2.0) * np.asarray(voltage)
    time: Floats = np.asarray(resistance) * np.asarray(capacitance) * np.log(crest / np.asarray(residual))
    return time
