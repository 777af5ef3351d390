r"""Unbalance of three magnitudes, each definition under its own name.

For magnitudes :math:`u` with mean :math:`m`: the *rate* is the largest deviation from the mean over the mean, taken of
the line voltages (NEMA), the leg-to-neutral voltages (IEEE) or the currents. The *factor* is :math:`|V_2|/|V_1|` (IEC)
and follows exactly from three line voltages, since those close a triangle. Leg-to-neutral magnitudes do not show the
angles: they can look even while the lines are not.
"""

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def line_voltage_unbalance_rate(line_voltages: Floats) -> Floats:
    r"""Largest deviation of the line voltages from their mean, over the mean (LVUR).

    Parameters
    ----------
    line_voltages : (..., 3)
        Root-mean-square voltages L1-L2, L2-L3, L3-L1. [V]

    Returns
    -------
    (...)
        The rate; NaN where a voltage is missing or the mean is zero. [1]

    Examples
    --------
    >>> round(float(line_voltage_unbalance_rate(np.array([462.0, 463.0, 455.0]))), 4)
    0.0109

    References
    ----------
    NEMA MG 1, 14.36 (clause number from memory).
    """
    return _largest_deviation(line_voltages)


def phase_voltage_unbalance_rate(leg_voltages: Floats) -> Floats:
    r"""Largest deviation of the leg-to-neutral voltages from their mean, over the mean (PVUR).

    It does not see angles, and is meaningless on a centre-tapped supply: a perfect 240 V set reads 120/120/208 V.

    Parameters
    ----------
    leg_voltages : (..., 3)
        Root-mean-square voltages L1-N, L2-N, L3-N. [V]

    Returns
    -------
    (...)
        The rate; NaN where a voltage is missing or the mean is zero. [1]

    Examples
    --------
    >>> round(float(phase_voltage_unbalance_rate(np.array([230.0, 226.0, 234.0]))), 4)
    0.0174

    References
    ----------
    IEEE Std 141 and IEEE Std 112, as compared by Pillay and Manyage, Definitions of voltage unbalance (2001).
    """
    return _largest_deviation(leg_voltages)


def current_unbalance_rate(currents: Floats) -> Floats:
    """Largest deviation of the leg currents from their mean, over the mean.

    Parameters
    ----------
    currents : (..., 3)
        Root-mean-square currents in L1, L2, L3. [A]

    Returns
    -------
    (...)
        The rate; NaN where a current is missing or the mean is zero. [1]

    Examples
    --------
    >>> float(current_unbalance_rate(np.array([4.0, 5.0, 6.0])))
    0.2
    """
    return _largest_deviation(currents)


def voltage_unbalance_factor(line_voltages: Floats) -> Floats:
    r"""Negative over positive sequence voltage (VUF), exact from three line voltages.

    With :math:`\beta = \sum a^4 / (\sum a^2)^2` it is
    :math:`\sqrt{(1-\sqrt{3-6\beta}) / (1+\sqrt{3-6\beta})}`; :math:`\beta` is 1/3 for even voltages and 1/2 for a
    triangle that has collapsed.

    Parameters
    ----------
    line_voltages : (..., 3)
        Root-mean-square voltages L1-L2, L2-L3, L3-L1. [V]

    Returns
    -------
    (...)
        The factor; NaN where a voltage is missing, all are zero, or the three cannot close a triangle. [1]

    Examples
    --------
    >>> round(float(voltage_unbalance_factor(np.array([460.0, 467.0, 450.0]))), 4)
    0.0215
    >>> float(voltage_unbalance_factor(np.array([100.0, 100.0, 201.0])))
    nan

    References
    ----------
    IEC 61000-4-30, unbalance (the closed form, after CIGRE, from memory).
    """
    squares = np.asarray(line_voltages, dtype=np.float64) ** 2
    with np.errstate(invalid="ignore", divide="ignore"):
        beta = np.sum(squares**2, axis=-1) / np.sum(squares, axis=-1) ** 2
        # rounding can bring a perfect set to 3 - 6 beta just above 1, a flat triangle to just below 0
        inside = 3.0 - 6.0 * beta
        inside = np.where(inside < -_ROUNDING, np.nan, np.clip(inside, 0.0, 1.0))
        root = np.sqrt(inside)
        factor: Floats = np.sqrt((1.0 - root) / (1.0 + root))
    return factor


_ROUNDING = 1e-12


def _largest_deviation(magnitudes: Floats) -> Floats:
    values = np.asarray(magnitudes, dtype=np.float64)
    mean = values.sum(axis=-1, keepdims=True) / values.shape[-1]
    rate: Floats = np.abs(values - mean).max(axis=-1) / np.where(mean == 0.0, np.nan, mean)[..., 0]
    return rate
