"""The converter's circuit at one instant: which node stands where, what joins them, and what flows.

    utility --- B1 ---[K]--- T1 --- idler          B  bus: where the supply meter, and the pass-through to machines, is
                             T2 --- idler          T  converter terminals: banks and the idler's leads
                B2 --------- T2                    M  behind the leg meters: the machines
                B3 --------- T3                    S  the idler's star point
       bond --- N  --[star]- S                     N  the converter's neutral bar

A fed leg passes straight through to the machines, converter on or off; the contactor K isolates the idler from it.
Earth at the bond is the reference. Open switches are a billion ohms, so nothing is ever singular; each node also has
ten megohms to earth, as a meter and insulation would.
"""

import itertools
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from idlerwatch.core.converter import network
from idlerwatch.core.converter.network import Complexes, Floats
from idlerwatch.core.electrical.sequence import TO_PHASORS
from idlerwatch.rig import machine
from idlerwatch.rig.values import OPEN, Faults, Loads, Orders, Phase, Plant, State

BUS, TERMINAL, MACHINE = (0, 1, 2), (3, 4, 5), (6, 7, 8)
NEUTRAL, STAR, NODES = 9, 10, 11

_CLOSED: Final = 1.0e3
_LEG_METER: Final = 200.0
_INSULATION: Final = 1.0e-7
_IDLER_NODES: Final = [*TERMINAL, STAR]
_BANK_NODES: Final = [*TERMINAL, NEUTRAL]
_LOAD_NODES: Final = [*MACHINE, NEUTRAL]


@dataclass(frozen=True, slots=True)
class Solution:
    """Potentials (n, 11), the electrical frequency (n,) and whether the idler coasts (n,), and what flows.

    `source` (n, 3) from the utility, `supply` (n, 3) of it past the base load, `out` (n, 3) through the leg meters,
    `bank` (n, b, 4), `motor` (n, m, 3), `load` (n, l, 4), `idler` (n, 3) into its windings, `winding` (n, 3) the
    voltage across them, `motor_voltage` (n, m, 3).
    """

    nodes: Complexes
    frequency: Floats
    coasting: np.ndarray
    source: Complexes
    supply: Complexes
    out: Complexes
    bank: Complexes
    motor: Complexes
    load: Complexes
    idler: Complexes
    winding: Complexes
    motor_voltage: Complexes


@dataclass(frozen=True, slots=True)
class _Branch:
    """One kind of two-ended branch: node pairs, admittances (n, k), forces in series (n, k)."""

    pairs: tuple[tuple[int, int], ...]
    admittances: Complexes
    forces: Complexes

    @classmethod
    def of(cls, pairs: tuple[tuple[int, int], ...], admittances: object, count: int, forces: object = 0.0) -> "_Branch":
        shape = (count, len(pairs))
        return cls(
            pairs,
            np.broadcast_to(np.asarray(admittances, dtype=np.complex128), shape),
            np.broadcast_to(np.asarray(forces, dtype=np.complex128), shape),
        )

    def currents(self, nodes: Complexes) -> Complexes:
        """Return the current from the first node to the second: (n, k), driven by the force from second to first."""
        across = nodes @ network.incidence(NODES, self.pairs).T
        return np.asarray(self.admittances * (across - self.forces))


def solve(plant: Plant, state: State, orders: Orders, faults: Faults) -> Solution:
    """Return what the circuit does with contactors, speeds and fluxes as they stand."""
    coasts = coasting(plant, state, faults)
    frequency = np.where(coasts, np.maximum(np.abs(state.speed), 0.02), 1.0)
    branches = _branches(plant, state, orders, faults, frequency)
    matrix, injections = _assemble(branches)
    idler, idler_source = _idler(plant, state, faults, coasts, frequency)
    banks = _banks(plant, state, faults, frequency)
    motors = _motors(plant, state, orders, faults, frequency)
    matrix += _spread(idler, _IDLER_NODES)
    injections[:, _IDLER_NODES] += idler_source
    matrix += _spread(banks.sum(axis=1), _BANK_NODES)
    matrix += _spread(motors.sum(axis=1), MACHINE)
    nodes = network.solve_nodes(matrix, injections)
    at_machines = nodes[:, None, list(MACHINE)]
    motor = _times(motors, at_machines)
    through_idler = _times(idler, nodes[:, _IDLER_NODES]) - idler_source
    return Solution(
        nodes=nodes,
        frequency=frequency,
        coasting=coasts,
        source=_source_currents(plant, branches["source"], nodes),
        supply=_source_currents(plant, branches["source"], nodes) - _base_currents(plant, branches["base"], nodes),
        out=branches["out"].currents(nodes),
        bank=_times(banks, nodes[:, None, _BANK_NODES]),
        motor=motor,
        load=_load_currents(plant.loads, branches["loads"], nodes),
        idler=through_idler[:, :3],
        winding=nodes[:, list(TERMINAL)] - faults.lead_resistance * through_idler[:, :3] - nodes[:, [STAR]],
        motor_voltage=at_machines - faults.motor_resistance * motor,
    )


def _spread(block: Complexes, nodes: Sequence[int]) -> Complexes:
    """Return a block of admittances (n, k, k) at its nodes in the whole circuit (n, 11, 11)."""
    rows = np.asarray(nodes)
    whole = np.zeros((len(block), NODES, NODES), dtype=np.complex128)
    whole[:, rows[:, None], rows] = block
    return whole


def coasting(plant: Plant, state: State, faults: Faults) -> np.ndarray:
    """Return whether nothing feeds the idler, so that its own rotor flux makes the voltages: (n,)."""
    pony = (state.phase == Phase.STARTING) & _is_hand_started(plant, state)
    connected = ((state.phase == Phase.STARTING) | (state.phase == Phase.RUNNING)) & ~pony
    dead = (faults.supply_resistance > 1e3) | (faults.supply_ratio < 0.2)
    if not plant.feed.is_line_feed:
        dead = dead | (faults.neutral_resistance > 1e3)
    return np.asarray(~connected | dead)


def _is_hand_started(plant: Plant, state: State) -> np.ndarray:
    return np.full(len(state.speed), plant.starting.method == "pony-motor") | (state.speed * plant.sense < -0.01)


def _times(matrix: Complexes, vector: Complexes) -> Complexes:
    return np.asarray((matrix @ vector[..., None])[..., 0])


def _assemble(branches: dict[str, _Branch]) -> tuple[Complexes, Complexes]:
    pairs = tuple(pair for branch in branches.values() for pair in branch.pairs)
    admittances = np.concatenate([branch.admittances for branch in branches.values()], axis=1)
    forces = np.concatenate([branch.forces for branch in branches.values()], axis=1)
    return network.pair_matrix(NODES, pairs, admittances), (admittances * forces) @ network.incidence(NODES, pairs)


def _branches(plant: Plant, state: State, orders: Orders, faults: Faults, frequency: Floats) -> dict[str, _Branch]:
    n = plant.count
    running = state.phase == Phase.RUNNING
    starting = (state.phase == Phase.STARTING) & ~_is_hand_started(plant, state)
    generated = tuple(k for k in range(3) if k not in plant.fed)
    star_tied = np.where(starting, plant.starting.star_tied, plant.star_on_neutral)
    aid = 2j * np.pi * plant.frequency * plant.starting.aid_farads * frequency
    return {
        "source": _source(plant, faults),
        "neutral": _neutral(plant, faults),
        "base": _Branch.of((_fed_nodes(plant),), 1.0 / plant.source.base_load[:, None], n),
        "insulation": _Branch.of(tuple((node, -1) for node in range(NODES)), _INSULATION, n),
        "contactor": _Branch.of(tuple((BUS[k], TERMINAL[k]) for k in plant.fed), _switch(running), n),
        "start": _Branch.of(plant.starting.joins, _switch(starting), n),
        "star": _Branch.of(((STAR, NEUTRAL),), _switch(star_tied), n),
        "made": _Branch.of(tuple((TERMINAL[k], BUS[k]) for k in generated), _CLOSED, n),
        "out": _Branch.of(tuple(zip(BUS, MACHINE, strict=True)), 1.0 / (1.0 / _LEG_METER + faults.leg_resistance), n),
        "aid": _Branch.of((plant.starting.aid_pair,), (aid * starting)[:, None], n),
        "loads": _loads(plant, state, orders),
    }


def _switch(closed: np.ndarray) -> Floats:
    return np.where(closed, _CLOSED, 1.0 / OPEN)[:, None]


def _fed_nodes(plant: Plant) -> tuple[int, int]:
    return (BUS[plant.fed[0]], BUS[plant.fed[1]] if plant.feed.is_line_feed else NEUTRAL)


def _source(plant: Plant, faults: Faults) -> _Branch:
    """Return the utility: each fed leg against the bond, or one winding between two legs where nothing is bonded."""
    fed = list(plant.fed)
    force = plant.source.emf[:, fed] * faults.supply_ratio[:, None]
    impedance = plant.source.impedance[:, fed] + faults.supply_resistance[:, None]
    if plant.feed.has_neutral:
        return _Branch.of(tuple((BUS[k], -1) for k in fed), 1.0 / impedance, plant.count, force)
    pair = ((BUS[fed[0]], BUS[fed[1]]),)
    return _Branch.of(pair, 1.0 / impedance.sum(1, keepdims=True), plant.count, force[:, :1] - force[:, 1:])


def _source_currents(plant: Plant, source: _Branch, nodes: Complexes) -> Complexes:
    currents = np.zeros((plant.count, 3), dtype=np.complex128)
    flow = -source.currents(nodes)
    fed = list(plant.fed)
    currents[:, fed] = flow if plant.feed.has_neutral else np.concatenate([flow, -flow], axis=1)
    return currents


def _base_currents(plant: Plant, base: _Branch, nodes: Complexes) -> Complexes:
    currents = np.zeros((plant.count, 3), dtype=np.complex128)
    flow = base.currents(nodes)[:, 0]
    currents[:, plant.fed[0]] = flow
    if plant.feed.is_line_feed:
        currents[:, plant.fed[1]] = -flow
    return currents


def _neutral(plant: Plant, faults: Faults) -> _Branch:
    leak = plant.source.leakage
    match plant.feed.neutral:
        case "none":
            return _Branch.of(((NEUTRAL, -1),), _INSULATION, plant.count)
        case "L1" | "L2" | "L3" as leg:
            return _Branch.of(((NEUTRAL, BUS[int(leg[1]) - 1]),), _CLOSED, plant.count)
        case _:
            bond = 1.0 / (plant.source.neutral_resistance + faults.neutral_resistance)
            admittances = np.stack([bond, leak], axis=1)
            forces = np.stack([plant.source.offset, np.zeros(plant.count)], axis=1)
            return _Branch.of(((NEUTRAL, -1), (NEUTRAL, -1)), admittances, plant.count, forces)


def _idler(
    plant: Plant, state: State, faults: Faults, coasts: np.ndarray, frequency: Floats
) -> tuple[Complexes, Complexes]:
    """Return the idler at L1, L2, L3, S as admittances (n, 4, 4) and the currents its rotor flux drives (n, 4)."""
    idler = plant.idler
    positive, negative = machine.phase_branches(idler, np.where(coasts, 0.0, state.speed), frequency, state.flux)
    rotor = machine.transient(idler, frequency, state.flux, np.full(plant.count, 2.0 * np.pi * plant.frequency))
    forwards = state.speed >= 0.0
    y_positive = np.where(coasts & forwards, rotor.admittance, positive.phase)
    y_negative = np.where(coasts & ~forwards, rotor.admittance, negative.phase)
    matrix = machine.windings(idler, machine.zero_admittance(idler, frequency), y_positive, y_negative)
    leads = np.concatenate([faults.lead_resistance, np.zeros((plant.count, 1))], axis=1)
    seen = network.behind_impedances(network.with_terminal(matrix), leads)
    column = np.where(forwards[:, None], TO_PHASORS[:, 1], TO_PHASORS[:, 2])
    force = np.asarray(column * (np.where(coasts, state.emf, 0.0) * frequency)[:, None], dtype=np.complex128)
    return seen, _times(seen[:, :, :3], force)


def _banks(plant: Plant, state: State, faults: Faults, frequency: Floats) -> Complexes:
    """Return each bank at L1, L2, L3, N behind its poles; the first is what is always connected: (n, 1 + b, 4, 4)."""
    angular = 2j * np.pi * plant.frequency * frequency
    admittances = angular[:, None] * plant.capacitors.farads * faults.capacitor_ratio
    matrices = [
        network.pair_matrix(
            4, plant.capacitors.pairs, admittances * (np.asarray(plant.capacitors.bank, dtype=int) == bank)
        )
        for bank in range(-1, len(plant.banks.names))
    ]
    always = np.ones((plant.count, 1), dtype=bool)
    closed = np.concatenate([always, state.bank_closed], axis=1)
    poles = np.concatenate([np.zeros((plant.count, 1, 4)), faults.pole_resistance], axis=1)
    return network.behind_impedances(np.stack(matrices, axis=1) * closed[..., None, None], poles)


def starter_ratio(plant: Plant, state: State) -> Floats:
    """Return each motor's starter as the square of its voltage ratio: star-delta 4 s, soft start 3 s: (n, m). [1]"""
    soft = np.clip(0.35 + 0.65 * state.motor_on_for / 3.0, 0.35, 1.0) ** 2
    star = np.where(state.motor_on_for < 4.0, 1.0 / 3.0, 1.0)
    kinds = np.asarray(plant.motors.starter, dtype=object)
    return np.where(kinds == "soft", soft, np.where(kinds == "star-delta", star, 1.0))


def _motors(plant: Plant, state: State, orders: Orders, faults: Faults, frequency: Floats) -> Complexes:
    motors = plant.motors.constants
    wide = np.broadcast_to(frequency[:, None], state.motor_speed.shape)
    positive, negative = machine.phase_branches(motors, state.motor_speed, wide, state.motor_flux)
    zero = np.zeros(state.motor_speed.shape, dtype=np.complex128)
    matrix = machine.windings(motors, zero, positive.phase, negative.phase)
    switched = orders.motor_on * starter_ratio(plant, state)
    return network.behind_impedances(matrix * switched[..., None, None], faults.motor_resistance)


def load_pairs(loads: Loads) -> tuple[tuple[int, int], ...]:
    """Return the branches of all loads: one for a load on a pair, three for a drive."""
    three = ((6, 7), (7, 8), (8, 6))
    nodes = tuple(three if pair is None else ((_LOAD_NODES[pair[0]], _LOAD_NODES[pair[1]]),) for pair in loads.pairs)
    return tuple(pair for group in nodes for pair in group)


def _loads(plant: Plant, state: State, orders: Orders) -> _Branch:
    """Return single-phase machines as impedances of power factor 0.8, drives as a rectifier of constant power.

    A rectifier charges from the highest pair: the shares go with the eighth power of the pairs' voltages.
    """
    pairs = load_pairs(plant.loads)
    nominal = plant.feed.line_voltage
    columns: list[Complexes] = []
    for k, pair in enumerate(plant.loads.pairs):
        watts = plant.loads.watts[:, k] * orders.load_on[:, k]
        if pair is None:
            across = np.abs(state.nodes[:, [6, 7, 8]] - state.nodes[:, [7, 8, 6]]) / nominal
            shares = across**8 / np.maximum((across**8).sum(1, keepdims=True), 1e-6)
            draws = np.clip(shares * watts[:, None] / np.maximum(across, 0.5) ** 2, 0.0, None) * (1.0 - 0.33j)
            columns.append(np.asarray(draws / nominal**2, dtype=np.complex128))
        else:
            declared = plant.feed.leg_voltage if 3 in pair else nominal
            columns.append(np.asarray((watts / declared**2 * (1.0 - 0.75j))[:, None], dtype=np.complex128))
    empty = np.zeros((plant.count, 0), dtype=np.complex128)
    return _Branch.of(pairs, np.concatenate([empty, *columns], axis=1), plant.count)


def _load_currents(loads: Loads, branch: _Branch, nodes: Complexes) -> Complexes:
    flows = branch.currents(nodes)[..., None] * network.incidence(NODES, branch.pairs)[:, _LOAD_NODES]
    starts = np.cumsum([0, *(3 if pair is None else 1 for pair in loads.pairs)])
    groups = [flows[:, a:b].sum(axis=1) for a, b in itertools.pairwise(starts.tolist())]
    return np.stack(groups, axis=1) if groups else np.zeros((len(nodes), 0, 4), dtype=np.complex128)
