"""What uneven line voltages do to a motor: less load, more heat, a shorter life. Estimates, no relay settings."""

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

NEMA_DERATING: Floats = np.array(
    [
        [0.000, 1.00],
        [0.005, 1.00],
        [0.015, 0.97],
        [0.020, 0.95],
        [0.025, 0.93],
        [0.030, 0.89],
        [0.035, 0.85],
        [0.040, 0.82],
        [0.045, 0.78],
        [0.050, 0.76],
    ]
)
"""Line voltage unbalance rate and load factor: the curve of NEMA MG 1 as a handbook table gives it. Published readings
of the curve differ by 0.01 to 0.02."""

MONTSINGER_K = 10.0
"""The rise in temperature that halves the life of insulation. [K]"""


def derating_factor(unbalance_rate: Floats, table: Floats) -> Floats:
    """Share of its rated load that a motor can carry.

    Parameters
    ----------
    unbalance_rate : (...)
        Line voltage unbalance rate (LVUR). [1]
    table : (n, 2)
        Rates, rising, and factors; straight lines in between. [1]

    Returns
    -------
    (...)
        The factor; NaN where the rate is missing or beyond the table: there no motor should run. [1]

    Examples
    --------
    >>> derating_factor(np.array([0.0, 0.02, 0.06]), NEMA_DERATING).tolist()
    [1.0, 0.95, nan]

    References
    ----------
    NEMA MG 1, figure 14-1 (figure number from memory).
    """
    factor: Floats = np.interp(unbalance_rate, table[:, 0], table[:, 1], right=np.nan)
    return factor


def added_temperature_rise(unbalance_rate: Floats) -> Floats:
    """Share by which the temperature *rise* of a motor grows, not its temperature.

    Parameters
    ----------
    unbalance_rate : (...)
        Line voltage unbalance rate (LVUR). [1]

    Returns
    -------
    (...)
        Added rise over the rise at even voltages: twice the square of the rate in percent, in percent. [1]

    Examples
    --------
    >>> round(float(added_temperature_rise(np.array(0.03))), 6)
    0.18

    References
    ----------
    NEMA MG 1 rule, as in C. I. Hubert, Electric Machines, example 5.14.
    """
    rise: Floats = 200.0 * np.asarray(unbalance_rate) ** 2
    return rise


def insulation_life_factor(temperature_difference: Floats) -> Floats:
    """Life of insulation over its life at its reference temperature.

    Parameters
    ----------
    temperature_difference : (...)
        Above the reference temperature. [K]

    Returns
    -------
    (...)
        [1]

    Examples
    --------
    >>> insulation_life_factor(np.array([-10.0, 0.0, 20.0])).tolist()
    [2.0, 1.0, 0.25]

    References
    ----------
    V. M. Montsinger, Loading transformers by temperature, AIEE 1930.
    """
    factor: Floats = 2.0 ** (-np.asarray(temperature_difference) / MONTSINGER_K)
    return factor
