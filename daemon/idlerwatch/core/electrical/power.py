r"""Apparent power of three legs in the three definitions of IEEE Std 1459, and what belongs to it.

Where legs are uneven or a neutral carries current, the definitions differ, and so do their power factors:
:math:`S_e \ge S_A \ge S_V \ge |P|`. Each is named as what it is.
"""

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


def power_factor(active_power: Floats, apparent_power: Floats) -> Floats:
    """Active over apparent power.

    Parameters
    ----------
    active_power, apparent_power : (...)
        [W], [VA]

    Returns
    -------
    (...)
        The factor, with the sign of the active power; NaN where there is no apparent power. [1]

    Examples
    --------
    >>> float(power_factor(np.array(600.0), np.array(1000.0)))
    0.6

    References
    ----------
    IEEE Std 1459-2010, 3.1 (clause from memory).
    """
    apparent = np.asarray(apparent_power, dtype=np.float64)
    with np.errstate(invalid="ignore", divide="ignore"):
        factor: Floats = np.asarray(active_power) / np.where(apparent == 0.0, np.nan, apparent)
    return factor


def arithmetic_apparent_power(voltages: Floats, currents: Floats) -> Floats:
    """Sum of the legs' products of voltage and current.

    Parameters
    ----------
    voltages, currents : (..., 3)
        Leg-to-neutral voltages and leg currents. [V], [A]

    Returns
    -------
    (...)
        [VA]

    References
    ----------
    IEEE Std 1459-2010, 3.2.2 (arithmetic apparent power; clause from memory).
    """
    total: Floats = (np.asarray(voltages) * np.asarray(currents)).sum(axis=-1)
    return total


def vector_apparent_power(active_powers: Floats, reactive_powers: Floats) -> Floats:
    """Magnitude of total active and total reactive power.

    Parameters
    ----------
    active_powers, reactive_powers : (..., n)
        Of the legs, or of the whole (n = 1). [W], [var]

    Returns
    -------
    (...)
        [VA]

    References
    ----------
    IEEE Std 1459-2010, 3.2.2 (vector apparent power; clause from memory).
    """
    total: Floats = np.hypot(np.asarray(active_powers).sum(axis=-1), np.asarray(reactive_powers).sum(axis=-1))
    return total


def effective_voltage(leg_voltages: Floats, line_voltages: Floats) -> Floats:
    """Leg-to-neutral voltage of the balanced set with the same losses, four conductors.

    Parameters
    ----------
    leg_voltages, line_voltages : (..., 3)
        [V]

    Returns
    -------
    (...)
        [V]

    References
    ----------
    IEEE Std 1459-2010, 3.2.2 (effective voltage; clause from memory).
    """
    legs = (np.asarray(leg_voltages) ** 2).sum(axis=-1)
    lines = (np.asarray(line_voltages) ** 2).sum(axis=-1)
    voltage: Floats = np.sqrt((3.0 * legs + lines) / 18.0)
    return voltage


def effective_current(currents: Floats, neutral_current: Floats, resistance_ratio: float = 1.0) -> Floats:
    """Leg current of the balanced set with the same losses, four conductors.

    Parameters
    ----------
    currents : (..., 3)
        Leg currents. [A]
    neutral_current : (...)
        [A]
    resistance_ratio
        Resistance of the neutral conductor over that of a leg. [1]

    Returns
    -------
    (...)
        [A]

    References
    ----------
    IEEE Std 1459-2010, 3.2.2 (effective current; clause from memory).
    """
    legs = (np.asarray(currents) ** 2).sum(axis=-1)
    current: Floats = np.sqrt((legs + resistance_ratio * np.asarray(neutral_current) ** 2) / 3.0)
    return current


def effective_apparent_power(
    leg_voltages: Floats, line_voltages: Floats, currents: Floats, neutral_current: Floats
) -> Floats:
    """Apparent power of the balanced set with the same losses, four conductors.

    Parameters
    ----------
    leg_voltages, line_voltages, currents : (..., 3)
        [V], [V], [A]
    neutral_current : (...)
        [A]

    Returns
    -------
    (...)
        [VA]

    References
    ----------
    IEEE Std 1459-2010, 3.2.2 (effective apparent power; clause from memory).
    """
    product: Floats = (
        3.0 * effective_voltage(leg_voltages, line_voltages) * effective_current(currents, neutral_current)
    )
    return product


def effective_apparent_power_without_neutral(line_voltages: Floats, currents: Floats) -> Floats:
    """Apparent power of the balanced set with the same losses, three conductors.

    Parameters
    ----------
    line_voltages, currents : (..., 3)
        [V], [A]

    Returns
    -------
    (...)
        [VA]

    References
    ----------
    IEEE Std 1459-2010, 3.2.2 (effective apparent power, three-wire; clause from memory).
    """
    voltage = np.sqrt((np.asarray(line_voltages) ** 2).sum(axis=-1)) / 3.0
    current = np.sqrt((np.asarray(currents) ** 2).sum(axis=-1) / 3.0)
    product: Floats = 3.0 * voltage * current
    return product


def two_wattmeter_power(first: Floats, second: Floats) -> Floats:
    """Total power of three conductors from two wattmeters whose voltages share one conductor.

    Parameters
    ----------
    first, second : (...)
        Active (or reactive) powers, each current taken towards the load. [W]

    Returns
    -------
    (...)
        [W]

    References
    ----------
    A. Blondel 1893 (n conductors need n - 1 wattmeters); Aron's connection.
    """
    total: Floats = np.asarray(first) + np.asarray(second)
    return total


def neutral_current(currents: Complexes) -> Floats:
    """Magnitude of the current that returns through the neutral conductor.

    Parameters
    ----------
    currents : (..., 3)
        Phasors of the leg currents. [A]

    Returns
    -------
    (...)
        [A]

    Examples
    --------
    >>> a = np.exp(2j * np.pi / 3)
    >>> round(float(neutral_current(np.array([34.8, 26.1 * a**2, 43.5 * a]))), 2)
    15.07

    References
    ----------
    Kirchhoff's current law.
    """
    magnitude: Floats = np.abs(np.asarray(currents).sum(axis=-1))
    return magnitude
