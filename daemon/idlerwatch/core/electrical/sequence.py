r"""Symmetrical components of three phasors.

With :math:`a = e^{j 2\pi/3}`: :math:`V_0 = (A+B+C)/3`, :math:`V_1 = (A+aB+a^2C)/3`, :math:`V_2 = (A+a^2B+aC)/3`. The
phasors stand in the order of the declared rotation, so that a converter running forwards is nearly all :math:`V_1`.

References
----------
C. L. Fortescue, Method of symmetrical co-ordinates applied to the solution of polyphase networks, AIEE 1918.
"""

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

A = complex(np.exp(2j * np.pi / 3.0))
"""The operator that turns a phasor by 120 degrees."""
TO_PHASORS: Complexes = np.array([[1, 1, 1], [1, A**2, A], [1, A, A**2]], dtype=np.complex128)
"""Columns: zero, positive and negative sequence; rows: the three phasors."""
TO_COMPONENTS: Complexes = np.array([[1, 1, 1], [1, A, A**2], [1, A**2, A]], dtype=np.complex128) / 3.0


def sequence_components(phasors: Complexes) -> Complexes:
    """Zero, positive and negative sequence components of three phasors.

    Parameters
    ----------
    phasors : (..., 3)
        In the order of rotation; any unit.

    Returns
    -------
    (..., 3)
        V0, V1, V2 in the same unit; NaN where a phasor is missing.

    Examples
    --------
    >>> np.abs(sequence_components(np.array([10.0, -10.0, 0.0]))).round(4).tolist()
    [0.0, 5.7735, 5.7735]

    References
    ----------
    Fortescue 1918; J. J. Grainger and W. D. Stevenson, Power System Analysis, chapter 11.
    """
    components: Complexes = np.asarray(phasors) @ TO_COMPONENTS.T
    return components


def phasors_from_sequence(components: Complexes) -> Complexes:
    """Three phasors from their zero, positive and negative sequence components.

    Parameters
    ----------
    components : (..., 3)
        V0, V1, V2; any unit.

    Returns
    -------
    (..., 3)
        The phasors in the order of rotation, same unit.

    Examples
    --------
    >>> abs(phasors_from_sequence(np.array([30.0, 30.0, 30.0]))).round(6).tolist()
    [90.0, 0.0, 0.0]

    References
    ----------
    Fortescue 1918.
    """
    phasors: Complexes = np.asarray(components) @ TO_PHASORS.T
    return phasors


def unbalance_factor(components: Complexes) -> Floats:
    """Magnitude of the negative over the positive sequence component.

    Parameters
    ----------
    components : (..., 3)
        V0, V1, V2 (or currents); any unit.

    Returns
    -------
    (...)
        The factor; NaN where there is no positive sequence. [1]

    References
    ----------
    IEC 61000-4-30, supply voltage unbalance.
    """
    return _over_positive(components, 2)


def zero_sequence_factor(components: Complexes) -> Floats:
    """Magnitude of the zero over the positive sequence component.

    Parameters
    ----------
    components : (..., 3)
        V0, V1, V2 (or currents); any unit.

    Returns
    -------
    (...)
        The factor; NaN where there is no positive sequence. [1]

    References
    ----------
    IEC 61000-4-30, supply voltage unbalance (zero sequence).
    """
    return _over_positive(components, 0)


def _over_positive(components: Complexes, index: int) -> Floats:
    magnitudes = np.abs(components)
    positive = magnitudes[..., 1]
    with np.errstate(invalid="ignore", divide="ignore"):
        factor: Floats = magnitudes[..., index] / np.where(positive == 0.0, np.nan, positive)
    return factor
