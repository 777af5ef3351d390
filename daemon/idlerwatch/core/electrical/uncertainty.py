"""Uncertainty after the GUM: class limits, first-order propagation with correlation, quantiles."""

from collections.abc import Callable
from typing import Final

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

COVERAGE: Final = 2.0
"""Coverage factor of expanded uncertainties (about 95 % for a normal distribution)."""
CHI_SQUARE_999: Final = (10.83, 10.83, 13.82, 16.27, 18.47, 20.52, 22.46, 24.32, 26.12, 27.88, 29.59)
"""0.999 quantiles of chi-square, by degrees of freedom up to 10 (standard table); entry 0 serves distances that cannot
close a figure, which is an inequality with one spare."""


def standard_uncertainty_of_class(limit: Floats) -> Floats:
    """Standard uncertainty of a gain that lies anywhere within its class limit.

    Parameters
    ----------
    limit : (...)
        Half-width of the limits, any unit.

    Returns
    -------
    (...)
        Same unit.

    References
    ----------
    JCGM 100 (GUM) 4.3.7: rectangular distribution, half-width over sqrt 3.
    """
    standard: Floats = np.asarray(limit) / np.sqrt(3.0)
    return standard


def propagate_covariance(jacobian: Floats, covariance: Floats) -> Floats:
    """Covariance of linear combinations: J U J^T.

    Parameters
    ----------
    jacobian : (..., p, n)
        Derivatives of the results by the inputs.
    covariance : (..., n, n)
        Of the inputs, correlations included.

    Returns
    -------
    (..., p, p)

    References
    ----------
    JCGM 100 (GUM) 5.2.2; JCGM 102, 6.2.
    """
    return np.asarray(jacobian) @ np.asarray(covariance) @ np.swapaxes(np.asarray(jacobian), -1, -2)


def numerical_jacobian(function: Callable[[Floats], Floats], inputs: Floats, steps: Floats) -> Floats:
    """Derivatives of a function by central differences, in one vectorised call.

    Parameters
    ----------
    function
        Takes (..., n), gives (..., p).
    inputs : (n,)
        Where.
    steps : (n,)
        Small against the scale of each input, same units.

    Returns
    -------
    (p, n)

    References
    ----------
    JCGM 100 (GUM) 5.1.3, note 2: sensitivity coefficients found numerically.
    """
    moves = np.diag(steps)
    difference = function(inputs + moves) - function(inputs - moves)
    jacobian: Floats = (difference / (2.0 * np.asarray(steps)[:, None])).T
    return jacobian
