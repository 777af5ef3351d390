"""Nodal equations of a small network of phasors: windings, capacitors, switches, sources behind an impedance.

Every matrix has its two node axes last and any axes before them; everything is linear algebra over those, so many
converters, load states or hypotheses are one call. Potentials are complex rms values to the node left out (earth).

The winding matrix is that of symmetrical components (C. L. Fortescue, 1918): Y = A diag(Y0, Y1, Y2) A^-1 with
a = exp(j 2 pi/3), for the sequence L1-L2-L3.
"""

from collections.abc import Sequence
from typing import Final

import numpy as np
from numpy.typing import NDArray

from idlerwatch.core.electrical.sequence import TO_COMPONENTS, TO_PHASORS

Complexes = NDArray[np.complex128]
Floats = NDArray[np.float64]

_INSULATION: Final = 1e-12
"""What an open node has to the reference, so that one that is joined to nothing stands there. [S]"""


def winding_matrix(sequence_admittances: Complexes) -> Complexes:
    """Return the admittances of three windings between the legs and their star point.

    Parameters
    ----------
    sequence_admittances : (..., 3)
        Y0, Y1, Y2 a phase; Y0 = 0 for a floating star point. [S]

    Returns
    -------
    (..., 3, 3)
        Y with I = Y V, V to the star point. [S]

    Examples
    --------
    >>> y = winding_matrix(np.array([0.0, 2.0 - 3.0j, 2.0 - 3.0j]))
    >>> positive = TO_PHASORS[:, 1]
    >>> bool(np.allclose(y @ positive, (2.0 - 3.0j) * positive))
    True
    """
    matrix: Complexes = (TO_PHASORS * sequence_admittances[..., None, :]) @ TO_COMPONENTS
    return matrix


def star_matrix(sequence_admittances: Complexes) -> Complexes:
    """Return the nodal admittances of three windings whose star point is the fourth node: (..., 3) -> (..., 4, 4). [S]

    Equal potentials of the legs send Y0 a leg into the star point, so one that floats has exact noughts there.
    """
    legs = winding_matrix(sequence_admittances)
    to_star = np.repeat(-sequence_admittances[..., None, :1], 3, axis=-1)
    upper = np.concatenate([legs, np.swapaxes(to_star, -1, -2)], axis=-1)
    lower = np.concatenate([to_star, 3.0 * sequence_admittances[..., None, :1]], axis=-1)
    return np.concatenate([upper, lower], axis=-2)


def with_terminal(matrix: Complexes) -> Complexes:
    """Return the matrix with one more node, through which all currents return: (..., k, k) -> (..., k+1, k+1)."""
    column = -matrix.sum(axis=-1, keepdims=True)
    wide = np.concatenate([matrix, column], axis=-1)
    row = -wide.sum(axis=-2, keepdims=True)
    return np.concatenate([wide, row], axis=-2)


def behind_impedances(matrix: Complexes, impedances: Complexes | Floats) -> Complexes:
    """Return the admittances of a network seen through an impedance in series with each of its nodes.

    A large impedance is an open pole: the node behind it floats, and is thereby eliminated (Kron reduction); the matrix
    may be singular, as that of a floating star is.

    Parameters
    ----------
    matrix : (..., k, k)
        Nodal admittances. [S]
    impedances : (..., k)
        Impedance in series with each node. [ohm]

    Returns
    -------
    (..., k, k)
        (1 + Y Z)^-1 Y. [S]
    """
    through = np.eye(matrix.shape[-1]) + matrix * impedances[..., None, :]
    return np.asarray(np.linalg.solve(through, matrix), dtype=np.complex128)


def pair_matrix(nodes: int, pairs: Sequence[tuple[int, int]], admittances: Complexes) -> Complexes:
    """Return the nodal pattern of admittances between pairs of nodes.

    Parameters
    ----------
    nodes
        How many nodes there are.
    pairs
        For each admittance the two nodes it joins; a negative second node is the earth that was left out.
    admittances : (..., len(pairs))
        The admittances. [S]

    Returns
    -------
    (..., nodes, nodes)
        The sum of their patterns. [S]

    Examples
    --------
    >>> pair_matrix(2, [(0, 1), (1, -1)], np.array([2.0 + 0j, 5.0 + 0j])).real.tolist()
    [[2.0, -2.0], [-2.0, 7.0]]
    """
    pattern = incidence(nodes, pairs)
    matrix: Complexes = np.swapaxes(pattern, 0, 1) @ (admittances[..., None] * pattern)
    return matrix


def incidence(nodes: int, pairs: Sequence[tuple[int, int]]) -> Floats:
    """Return the incidence matrix (len(pairs), nodes): +1 at the first node of a pair, -1 at the second."""
    pattern = np.zeros((len(pairs), nodes))
    for row, (first, second) in enumerate(pairs):
        pattern[row, first] += 1.0
        if second >= 0:
            pattern[row, second] -= 1.0
    return pattern


def solve_nodes(matrix: Complexes, injections: Complexes) -> Complexes:
    """Return the potentials that make the nodal currents balance.

    Parameters
    ----------
    matrix : (..., k, k)
        Nodal admittances to the reference. [S]
    injections : (..., k)
        Current put into each node; a source E behind the admittance y puts in y E. [A]

    Returns
    -------
    (..., k)
        Potentials to the reference; NaN where an admittance is. [V]
    """
    missing = np.isnan(matrix).any(axis=(-2, -1), keepdims=True)
    there = np.where(missing, np.eye(matrix.shape[-1]), matrix)  # a solver may take a NaN for a singular matrix
    solved = np.linalg.solve(there, injections[..., None])
    return np.asarray(np.where(missing, np.nan, solved)[..., 0], dtype=np.complex128)


def potentials_behind(matrix: Complexes, forces: Complexes, impedances: Complexes | Floats) -> Complexes:
    """Return the potentials of nodes, each fed from a source behind an impedance or left open.

    Parameters
    ----------
    matrix : (..., k, k)
        Nodal admittances of what is fed, to the reference. [S]
    forces : (..., k)
        Electromotive force to the reference behind each node; of no effect at an open one. [V]
    impedances : (..., k)
        From source to node. Nought is a stiff source, infinite an open node. [ohm]

    Returns
    -------
    (..., k)
        Potentials to the reference; `matrix @ potentials` is the current each source gives. [V]

    Examples
    --------
    >>> load = pair_matrix(2, [(0, 1), (1, -1)], np.array([0.1, 0.1]))
    >>> potentials_behind(load, np.array([100.0, 0.0]), np.array([5.0, np.inf])).real.round(6).tolist()
    [80.0, 40.0]

    References
    ----------
    Kirchhoff's laws: Z (Y V) + V = E at a fed node, Y V = 0 at an open one.
    """
    is_open = np.isinf(impedances)
    through = np.where(is_open, 1.0, impedances)
    standing = np.where(is_open, _INSULATION, 1.0)
    whole = through[..., :, None] * matrix + standing[..., :, None] * np.eye(matrix.shape[-1])
    return solve_nodes(whole, np.where(is_open, 0.0, forces))
