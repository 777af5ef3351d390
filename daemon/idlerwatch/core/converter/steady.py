"""One steady state of a whole converter: utility, idlers, capacitors and machines on the conductors L1 L2 L3 N.

    E1 --- Z --- L1 ---+---------+----------+
    E2 --- Z --- L2 ---+         |          |
                 L3 ---+      machines   branches
    0  --- Z --- N  ---+--(star)-+          |
    |                                       |
    bond (the reference)                    (any pair)

The utility is electromotive forces behind impedances; which conductors it feeds, and with what, follows from the feed.
The reference is the point where its neutral is bonded, or the middle of the fed pair where there is no neutral. Idlers
and motors are the same thing here: windings with an equivalent circuit and a torque on the shaft, which tie their star
point to N (a zero-sequence admittance) or do not (none). Branches are capacitors and single-phase loads.

Everything has the cases on leading axes, machines on one axis behind them. Potentials, currents and constants are of
one frequency, in steady state. A slip lies where the torques balance, a magnetising reactance where the airgap voltage
puts it; both follow from the voltages, and these from them. The unknowns are found together, by a few damped
substitutions from synchronous speed, which keep to the branch where machines run, and then Newton's method.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from idlerwatch.core.conductors import LINE_PAIRS, Conductor, Feed, Pair
from idlerwatch.core.converter.machine import (
    EquivalentCircuit,
    Iron,
    airgap_voltage,
    corrected_slip,
    saturated,
    sequence_admittances,
)
from idlerwatch.core.converter.network import (
    Complexes,
    Floats,
    incidence,
    pair_matrix,
    potentials_behind,
    star_matrix,
)
from idlerwatch.core.electrical.sequence import phasors_from_sequence, sequence_components

NODES: Final[tuple[Conductor, ...]] = ("L1", "L2", "L3", "N")
"""Where a conductor stands on the last axis of potentials."""

_SUBSTITUTIONS: Final = 12
_STEPS: Final = 20
_PROBE: Final = 1e-6
_SETTLED: Final = 1e-10
"""How near slips and logarithms of reactances must come to what their voltages ask."""


@dataclass(frozen=True, slots=True)
class Utility:
    """Electromotive forces (..., 4) [V] behind impedances (..., 4) [ohm] in series with L1 L2 L3 N.

    An infinite impedance is a conductor that is not fed. `order` says which legs peak first, second and third.
    """

    forces: Complexes
    impedances: Complexes
    order: tuple[int, int, int] = (0, 1, 2)


@dataclass(frozen=True, slots=True)
class Branches:
    """Admittances (..., k) between `pairs` of L1 L2 L3 N. [S]"""

    pairs: tuple[Pair, ...]
    admittances: Complexes

    def beside(self, others: "Branches") -> "Branches":
        """Return these and the others."""
        shape = np.broadcast_shapes(self.admittances.shape[:-1], others.admittances.shape[:-1])
        both = [np.broadcast_to(a, (*shape, a.shape[-1])) for a in (self.admittances, others.admittances)]
        return Branches(self.pairs + others.pairs, np.concatenate(both, axis=-1))


@dataclass(frozen=True, slots=True)
class Machines:
    """Idlers and three-phase motors, each constant (..., m).

    `zero_admittance` is nought for a star point that floats, and for a delta. [S] `torque` is that of shaft and
    friction together; an idler has friction only. [synchronous W]
    """

    circuit: EquivalentCircuit
    iron: Iron
    zero_admittance: Complexes
    torque: Floats


@dataclass(frozen=True, slots=True)
class SteadyState:
    """What a converter settles to; NaN in all but Y0 of a case in which a machine stalls.

    `potentials` (..., 4) of L1 L2 L3 N to the bond [V]; `supply` (..., 4) what the utility gives into each [A];
    `slips`, `magnetising_reactances` (..., m) [1], [ohm]; `admittances` (..., m, 3) Y0 Y1 Y2 [S]; `currents`
    (..., m, 3) from each leg into a machine [A]; `through` (..., k) from the first conductor of a branch [A].
    """

    potentials: Complexes
    supply: Complexes
    slips: Floats
    magnetising_reactances: Floats
    admittances: Complexes
    currents: Complexes
    through: Complexes


def utility(
    feed: Feed,
    line_impedance: Complexes | complex,
    neutral_impedance: Complexes | complex,
    voltage: Floats | float | None = None,
) -> Utility:
    """Return the utility of a feed, seen from the converter.

    Parameters
    ----------
    feed
        Which conductors are fed, with what declared voltage, and what N is.
    line_impedance, neutral_impedance : (...)
        In series with each fed leg, and with N. An infinite one of N is a neutral that is lost. [ohm]
    voltage : (...)
        Across the fed pair with nothing connected; the declared voltage where None. [V]

    Returns
    -------
    Utility
        A feed without neutral leaves N open.

    Examples
    --------
    >>> from idlerwatch.core.conductors import read_pair
    >>> house = utility(Feed(read_pair("L1-L2"), 240.0, neutral="centre-tap"), 0.1, 0.1)
    >>> np.abs(house.forces).round(6).tolist(), house.impedances.real.tolist()
    ([120.0, 120.0, 0.0, 0.0], [0.1, 0.1, inf, 0.1])
    """
    points = feed.nominal_points()
    middle = (points[feed.pair.first] + points[feed.pair.second]) / 2.0 if "N" not in points else points["N"]
    fed = [node in feed.supply_legs for node in NODES]
    forces = np.array([points[node] - middle if is_fed else 0.0 for node, is_fed in zip(NODES, fed, strict=True)])
    ratio = np.asarray(1.0 if voltage is None else np.asarray(voltage) / feed.voltage)
    neutral = neutral_impedance if feed.has_neutral else math.inf
    series = [line_impedance if is_fed else math.inf for is_fed in fed[:3]]
    impedances = np.stack(
        np.broadcast_arrays(*(np.asarray(z, dtype=np.complex128) for z in (*series, neutral))), axis=-1
    )
    return Utility(ratio[..., None] * forces, impedances, (0, 1, 2) if feed.rotation == "L1-L2-L3" else (0, 2, 1))


def capacitors(pairs: tuple[Pair, ...], capacitances: Floats, frequency: Floats | float) -> Branches:
    """Return the branches that capacitances (..., k) are at a frequency (...). [F] [Hz]"""
    angular = 2.0 * np.pi * np.asarray(frequency)[..., None]
    return Branches(pairs, np.asarray(1j * angular * capacitances, dtype=np.complex128))


@np.errstate(invalid="ignore")
def linear_potentials(supply: Utility, branches: Branches, windings: Complexes) -> Complexes:
    """Return the potentials of L1 L2 L3 N to the bond, of a circuit whose admittances are known.

    Parameters
    ----------
    supply, branches
        (..., 4) and (..., k)
    windings : (..., m, 3)
        Y0, Y1, Y2 of each machine, Y0 = 0 where its star point floats. [S]

    Returns
    -------
    (..., 4)
        NaN where an admittance is. [V]

    Examples
    --------
    >>> from idlerwatch.core.conductors import read_pair
    >>> shed = utility(Feed(read_pair("L1-N"), 230.0), 0.0, 0.0)
    >>> better_than_any = np.array([[1e6, 0.02 - 0.07j, 1e6]])
    >>> nothing = Branches((), np.zeros(0))
    >>> np.abs(linear_potentials(shed, nothing, better_than_any)).round(3).tolist()
    [230.0, 230.0, 230.0, 0.0]
    """
    matrix = _branch_matrix(branches) + _machine_matrix(windings, supply.order)
    return potentials_behind(matrix, supply.forces, supply.impedances)


@np.errstate(invalid="ignore")
def steady_state(supply: Utility, branches: Branches, machines: Machines) -> SteadyState:
    """Return the steady state in which every torque and every magnetisation is met.

    Parameters
    ----------
    supply, branches, machines
        (..., 4), (..., k) and (..., m), of at least one machine; their leading axes broadcast.

    Returns
    -------
    SteadyState
        Of each case. Where a machine has not got the torque asked, or an input is missing, all but Y0 is NaN.
    """

    def misfit(unknowns: Floats) -> Floats:
        return _misfit(supply, branches, machines, unknowns)

    count = np.shape(machines.circuit.rotor_resistance)[-1]
    start = np.zeros_like(misfit(np.zeros(2 * count)))
    slips, bends = np.split(_settle(misfit, start), 2, axis=-1)
    circuit, windings = _at(machines, slips, bends)
    potentials = linear_potentials(supply, branches, windings)
    taken = _winding_components(potentials, supply.order)[..., None, :] * windings
    given = (_branch_matrix(branches) + _machine_matrix(windings, supply.order)) @ potentials[..., None]
    return SteadyState(
        potentials=potentials,
        supply=np.where(np.isinf(supply.impedances), 0.0, given[..., 0]),
        slips=slips,
        magnetising_reactances=np.asarray(circuit.magnetising_reactance, dtype=np.float64),
        admittances=windings,
        currents=phasors_from_sequence(taken)[..., list(supply.order)],
        through=branches.admittances * (potentials @ _ends(branches).T),
    )


def line_voltages(potentials: Complexes) -> Complexes:
    """Return the phasors L1-L2, L2-L3, L3-L1 of potentials (..., 4): (..., 3). [V]"""
    pattern = incidence(len(NODES), [_numbers(pair) for pair in LINE_PAIRS])
    return np.asarray(potentials @ pattern.T, dtype=np.complex128)


def _numbers(pair: Pair) -> tuple[int, int]:
    return NODES.index(pair.first), NODES.index(pair.second)


def _ends(branches: Branches) -> Floats:
    return incidence(len(NODES), [_numbers(pair) for pair in branches.pairs])


def _branch_matrix(branches: Branches) -> Complexes:
    return pair_matrix(len(NODES), [_numbers(pair) for pair in branches.pairs], branches.admittances)


def _machine_matrix(windings: Complexes, order: tuple[int, int, int]) -> Complexes:
    """Return the nodal admittances of all machines: (..., m, 3) -> (..., 4, 4). [S]"""
    nodes = [*order, NODES.index("N")]
    return star_matrix(windings.sum(axis=-2))[..., nodes, :][..., :, nodes]


def _winding_components(potentials: Complexes, order: tuple[int, int, int]) -> Complexes:
    """Return V0 V1 V2 of the legs to N: (..., 4) -> (..., 3). Only V0 asks whether a star point is tied. [V]"""
    return sequence_components((potentials[..., :3] - potentials[..., 3:])[..., list(order)])


def _at(machines: Machines, slips: Floats, bends: Floats) -> tuple[EquivalentCircuit, Complexes]:
    """Return the circuits at logarithms of Xm / Xm0, and their sequence admittances (..., m, 3)."""
    bent = replace(machines.circuit, magnetising_reactance=machines.circuit.magnetising_reactance * np.exp(bends))
    return bent, sequence_admittances(bent, slips, machines.zero_admittance)


def _misfit(supply: Utility, branches: Branches, machines: Machines, unknowns: Floats) -> Floats:
    """Return by how much slips and bends would change with the voltages they cause: (..., 2m) -> (..., 2m)."""
    slips, bends = np.split(unknowns, 2, axis=-1)
    circuit, windings = _at(machines, slips, bends)
    components = _winding_components(linear_potentials(supply, branches, windings), supply.order)
    positive, negative = components[..., 1, None], components[..., 2, None]
    wanted = corrected_slip(circuit, machines.torque, slips, positive, negative)
    across = airgap_voltage(circuit, slips, positive)
    reactance = saturated(machines.circuit, machines.iron, across).magnetising_reactance
    bent = np.log(reactance / machines.circuit.magnetising_reactance)
    return np.concatenate(np.broadcast_arrays(wanted - slips, bent - bends), axis=-1)


def _settle(misfit: Callable[[Floats], Floats], start: Floats) -> Floats:
    """Return where the misfit (..., 2m) is nought; NaN in a case that does not get there.

    A machine that has not got its torque on the way keeps its slip, until the voltages may have risen.
    """
    at = start
    for _ in range(_SUBSTITUTIONS):
        at = at + 0.5 * _held(misfit(at))
    for _ in range(_STEPS):
        rest = misfit(at)
        if not np.any(np.abs(_held(rest)) > _SETTLED):
            break
        onward = at - _newton_step(misfit, at, rest)
        is_better = _size(misfit(onward)) < _size(rest)
        at = np.where(is_better, onward, at + 0.5 * _held(rest))
    return np.where(_size(misfit(at)) <= _SETTLED, at, np.nan)


def _held(rest: Floats) -> Floats:
    """Return the misfit with nought for slips that have none."""
    slips, bends = np.split(rest, 2, axis=-1)
    return np.concatenate([np.where(np.isnan(slips), 0.0, slips), bends], axis=-1)


def _size(misfit: Floats) -> Floats:
    return np.asarray(np.abs(misfit).max(axis=-1, keepdims=True), dtype=np.float64)


def _newton_step(misfit: Callable[[Floats], Floats], at: Floats, rest: Floats) -> Floats:
    """Return J^-1 rest, the derivatives J by differences along a new first axis."""
    probes = _PROBE * np.eye(at.shape[-1]).reshape(at.shape[-1], *(1,) * (at.ndim - 1), at.shape[-1])
    slopes = np.moveaxis((misfit(at + probes) - rest) / _PROBE, 0, -1)
    is_usable = np.abs(np.linalg.det(slopes))[..., None, None] > 0.0
    solved = np.linalg.solve(np.where(is_usable, slopes, np.eye(at.shape[-1])), rest[..., None])
    return np.asarray(solved[..., 0], dtype=np.float64)
