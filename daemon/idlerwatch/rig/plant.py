"""The plant in time: its control, contactors, speeds and fluxes, a step at a time, from the circuit of each instant.

Quasi-steady phasors: the circuit is solved with contactors, speeds and fluxes as they stand, then these move on by one
step. J dw/dt = T, with energies: dw/dt = T / (2 E), E the kinetic energy at synchronous speed, T in synchronous watts.
Steps of 20 ms are short enough for everything here but a chattering contactor's contacts, which follow the clock.

The control is a contactor that holds itself: a start is asked for by switching on, a supply below half for a tenth of a
second lets go, and after that it must be switched on again.
"""

from dataclasses import replace
from typing import Final

import numpy as np

from idlerwatch.core.converter.network import Complexes, Floats
from idlerwatch.core.electrical.sequence import TO_COMPONENTS
from idlerwatch.rig import machine
from idlerwatch.rig.circuit import BUS, MACHINE, NEUTRAL, NODES, TERMINAL, Solution, solve, starter_ratio
from idlerwatch.rig.values import Booleans, Faults, Integers, Orders, Phase, Plant, State, View

STEP_S: Final = 0.02
LETS_GO_BELOW: Final = 0.5
LETS_GO_AFTER_S: Final = 0.1
STANDS_BELOW: Final = 0.02
_FLUX_FOLLOWS: Final = 0.5
_NUDGE: Final = 1e-5


def begin(plant: Plant) -> State:
    """Return the plant standing still, the supply on: all shapes of `State`."""
    n, motors, banks = plant.count, len(plant.motors.names), len(plant.banks.names)
    return State(
        time=0.0,
        phase=np.full(n, int(Phase.STOPPED)),
        phase_since=np.zeros(n),
        switch=np.zeros(n, dtype=bool),
        held=np.zeros(n, dtype=bool),
        low_for=np.zeros(n),
        speed=np.zeros(n),
        emf=np.zeros(n, dtype=np.complex128),
        flux=np.zeros(n),
        motor_speed=np.zeros((n, motors)),
        motor_flux=np.zeros((n, motors)),
        motor_on_for=np.zeros((n, motors)),
        bank_closed=np.zeros((n, banks), dtype=bool),
        bank_moving_for=np.zeros((n, banks)),
        nodes=np.zeros((n, NODES), dtype=np.complex128),
    )


def no_orders(plant: Plant) -> Orders:
    """Return everything switched off, machines at light work once they run."""
    n, motors, loads = plant.count, len(plant.motors.names), len(plant.loads.names)
    return Orders(
        run=np.zeros(n, dtype=bool),
        backwards=np.zeros(n, dtype=bool),
        motor_on=np.zeros((n, motors), dtype=bool),
        motor_load=np.full((n, motors), 0.25),
        load_on=np.zeros((n, loads), dtype=bool),
        bank_by_hand=np.zeros((n, len(plant.banks.names)), dtype=bool),
    )


def no_faults(plant: Plant) -> Faults:
    """Return a plant in which nothing is broken."""
    n, banks = plant.count, len(plant.banks.names)
    return Faults(
        supply_ratio=np.ones(n),
        supply_resistance=np.zeros(n),
        neutral_resistance=np.zeros(n),
        leg_resistance=np.zeros((n, 3)),
        lead_resistance=np.zeros((n, 3)),
        motor_resistance=np.zeros((n, len(plant.motors.names), 3)),
        pole_resistance=np.zeros((n, banks, 4)),
        welded=np.zeros((n, banks), dtype=bool),
        coil_open=np.zeros((n, banks), dtype=bool),
        chatter=np.zeros((n, banks)),
        capacitor_ratio=np.ones((n, len(plant.capacitors.names))),
    )


def step(plant: Plant, state: State, orders: Orders, faults: Faults, seconds: float = STEP_S) -> tuple[State, Solution]:
    """Return the plant one step later, and the circuit as it was during the step."""
    solution = solve(plant, state, orders, faults)
    moved = _controlled(plant, state, orders, solution, seconds)
    called = _called(plant, moved, orders) & _has_voltage(plant, moved, solution)
    moved = _banks_moved(plant, moved, faults, called, seconds)
    moved = _idler_turned(plant, moved, state, solution, seconds)
    moved = _motors_turned(plant, moved, orders, solution, seconds)
    return replace(moved, time=state.time + seconds, nodes=solution.nodes), solution


# --------------------------------------------------------------------------
# Control and contactors
# --------------------------------------------------------------------------


def _controlled(plant: Plant, state: State, orders: Orders, solution: Solution, seconds: float) -> State:
    low = _supply_ratio(plant, solution) < LETS_GO_BELOW
    low_for = np.where(low, state.low_for + seconds, 0.0)
    asked = orders.run & ~state.switch & ~low
    held = (state.held | asked) & orders.run & (low_for < LETS_GO_AFTER_S)
    since = state.phase_since + seconds
    phase = _next_phase(plant, state, held, since)
    return replace(
        state,
        phase=phase,
        phase_since=np.where(phase == state.phase, since, 0.0),
        switch=orders.run,
        held=held,
        low_for=low_for,
    )


def _supply_ratio(plant: Plant, solution: Solution) -> Floats:
    first = BUS[plant.fed[0]]
    second = BUS[plant.fed[1]] if plant.feed.is_line_feed else NEUTRAL
    return np.asarray(np.abs(solution.nodes[:, first] - solution.nodes[:, second]) / plant.feed.voltage)


def _next_phase(plant: Plant, state: State, held: Booleans, since: Floats) -> Integers:
    up = np.abs(state.speed) >= plant.starting.until_speed
    stands = np.abs(state.speed) < STANDS_BELOW
    choices = [
        (held & ((state.phase == Phase.STOPPED) | (state.phase == Phase.RUN_DOWN)), Phase.STARTING),
        (held & (state.phase == Phase.STARTING) & up, Phase.CHANGE_OVER),
        (held & (state.phase == Phase.CHANGE_OVER) & (since >= plant.starting.change_over_s), Phase.RUNNING),
        (~held & (state.phase != Phase.STOPPED) & (state.phase != Phase.RUN_DOWN), Phase.RUN_DOWN),
        (~held & (state.phase == Phase.RUN_DOWN) & stands, Phase.STOPPED),
    ]
    return np.select([chosen for chosen, _ in choices], [int(phase) for _, phase in choices], state.phase)


def _banks_moved(plant: Plant, state: State, faults: Faults, called: Booleans, seconds: float) -> State:
    wanted = called & ~faults.coil_open
    moving = np.where(wanted == state.bank_closed, 0.0, state.bank_moving_for + seconds)
    arrived = moving >= plant.banks.operating_time
    closed = np.where(arrived, wanted, state.bank_closed)
    swings = np.floor(2.0 * faults.chatter * (state.time + seconds)) % 2 == 0
    closed = np.where((faults.chatter > 0.0) & wanted, swings, closed)
    closed = closed | (faults.welded & state.bank_closed)
    return replace(state, bank_closed=closed, bank_moving_for=np.where(arrived, 0.0, moving))


def _called(plant: Plant, state: State, orders: Orders) -> Booleans:
    """Return which banks the control calls for: (n, b). A coil on the legs themselves holds on into the run-down."""
    by_phase = plant.banks.wanted[:, state.phase].T & (state.phase_since[:, None] >= plant.banks.closes_after)
    hangs_on_legs = np.array([coil is not None for coil in plant.banks.coil], dtype=bool)
    holds_on = hangs_on_legs & state.bank_closed & (state.phase == Phase.RUN_DOWN)[:, None]
    return np.where(np.array(plant.banks.free, dtype=bool), orders.bank_by_hand, by_phase | holds_on)


def _has_voltage(plant: Plant, state: State, solution: Solution) -> Booleans:
    """Return whether each coil has enough voltage to pull in, or to hold where it is in: (n, b)."""
    nodes = [*TERMINAL, NEUTRAL]
    columns = [np.zeros((plant.count, 0), dtype=bool)]
    for bank, coil in enumerate(plant.banks.coil):
        if coil is None:
            columns.append((_supply_ratio(plant, solution) > LETS_GO_BELOW)[:, None])
            continue
        across = np.abs(solution.nodes[:, nodes[coil[0]]] - solution.nodes[:, nodes[coil[1]]])
        ratio = across / plant.banks.coil_voltage[bank]
        holds = np.where(
            state.bank_closed[:, bank], ratio > plant.banks.drop_out[bank], ratio > plant.banks.pull_in[bank]
        )
        columns.append(holds[:, None])
    return np.concatenate(columns, axis=1)


# --------------------------------------------------------------------------
# What turns
# --------------------------------------------------------------------------


def _idler_turned(plant: Plant, state: State, before: State, solution: Solution, seconds: float) -> State:
    idler, frequency = plant.idler, solution.frequency
    voltage = solution.winding @ TO_COMPONENTS.T
    current = solution.idler @ TO_COMPONENTS.T
    own = np.where(before.speed >= 0.0, 1, 2)
    rows = np.arange(plant.count)
    v_own, i_own = voltage[rows, own], current[rows, own]
    driven = machine.torque(idler, before.speed, frequency, before.flux, (voltage[:, 1], voltage[:, 2]))
    given = (solution.winding * np.conj(solution.idler)).real.sum(axis=1) / np.maximum(np.abs(before.speed), 0.05)
    electric = np.where(solution.coasting, np.sign(before.speed) * np.minimum(given, 0.0), driven)
    friction = idler.friction * (0.3 * np.tanh(before.speed / 0.01) + 0.7 * before.speed * np.abs(before.speed))
    rate = (electric - friction + _pony(plant, before, state)) / (2.0 * idler.kinetic_energy)
    faster = machine.torque(idler, before.speed + _NUDGE, frequency, before.flux, (voltage[:, 1], voltage[:, 2]))
    stiffness = np.where(solution.coasting, 0.0, faster - driven) / _NUDGE / (2.0 * idler.kinetic_energy)
    rotor = machine.transient(idler, frequency, before.flux, np.full(plant.count, 2.0 * np.pi * plant.frequency))
    built = (v_own - i_own / rotor.admittance) / frequency
    airgap = v_own - (idler.stator_resistance + 1j * frequency * idler.stator_reactance) * i_own
    flux = np.abs(airgap) / (frequency * idler.rated_voltage)
    return replace(
        state,
        speed=_turned(before.speed, _change(rate, stiffness, seconds)),
        emf=np.where(solution.coasting, machine.decayed(rotor, before.emf, i_own, seconds), built),
        flux=before.flux + _FLUX_FOLLOWS * (np.clip(flux, 0.0, 1.6) - before.flux),
    )


def _change(rate: Floats, stiffness: Floats, seconds: float) -> Floats:
    """Return how far a speed goes in a step when its rate falls by `stiffness` with it (exponential Euler).

    A machine near synchronous speed answers within 10 ms and less at a high voltage: a plain step of 20 ms would swing.
    """
    falls = np.minimum(stiffness * seconds, -1e-9)
    return np.asarray(rate * seconds * np.expm1(falls) / falls)


def _turned(speed: Floats, change: Floats) -> Floats:
    """Return the speed after a step; what stands and is not driven stays where it is."""
    moved = speed + np.clip(change, -0.25, 0.25)
    return np.where((np.abs(moved) < 1e-3) & (np.sign(moved) != np.sign(change)), 0.0, moved)


def _pony(plant: Plant, before: State, state: State) -> Floats:
    """Return the torque of a pony motor or a pulled rope, which may go the wrong way. [synchronous W]"""
    starting = state.phase == Phase.STARTING
    by_hand = (plant.starting.method == "pony-motor") | (before.speed * plant.sense < -STANDS_BELOW / 4.0)
    direction = np.where(before.speed == 0.0, plant.sense, np.sign(before.speed))
    torque = plant.starting.pony_watts / np.maximum(np.abs(before.speed), 0.2)
    return np.where(starting & by_hand, direction * torque, 0.0)


def pulled_backwards(plant: Plant, state: State) -> State:
    """Return a standing idler that somebody has just begun to turn the wrong way."""
    stands = np.abs(state.speed) < STANDS_BELOW
    return replace(state, speed=np.where(stands, -plant.sense * STANDS_BELOW, state.speed))


def _motors_turned(plant: Plant, state: State, orders: Orders, solution: Solution, seconds: float) -> State:
    if not plant.motors.names:
        return state
    motors = plant.motors.constants
    frequency = np.broadcast_to(solution.frequency[:, None], state.motor_speed.shape)
    voltage = solution.motor_voltage @ TO_COMPONENTS.T
    positive, _ = machine.phase_branches(motors, state.motor_speed, frequency, state.motor_flux)
    driven = machine.torque(motors, state.motor_speed, frequency, state.motor_flux, (voltage[..., 1], voltage[..., 2]))
    driven = np.where(orders.motor_on, driven * starter_ratio(plant, state), 0.0)
    speed = state.motor_speed
    work = np.where(orders.motor_on, orders.motor_load, 0.0) * motors.rated_power * speed**2 * np.sign(speed)
    friction = motors.friction * (0.3 * np.tanh(speed / 0.01) + 0.7 * speed * np.abs(speed))
    rate = (driven - work - friction) / (2.0 * motors.kinetic_energy)
    sequences = (voltage[..., 1], voltage[..., 2])
    faster = machine.torque(motors, state.motor_speed + _NUDGE, frequency, state.motor_flux, sequences)
    faster = np.where(orders.motor_on, faster * starter_ratio(plant, state), 0.0)
    stiffness = (faster - driven) / _NUDGE / (2.0 * motors.kinetic_energy)
    flux = machine.airgap_flux(motors, positive, voltage[..., 1], frequency)
    return replace(
        state,
        motor_speed=_turned(speed, _change(rate, stiffness, seconds)),
        motor_flux=state.motor_flux + _FLUX_FOLLOWS * (np.clip(flux, 0.0, 1.6) - state.motor_flux),
        motor_on_for=np.where(orders.motor_on, state.motor_on_for + seconds, 0.0),
    )


# --------------------------------------------------------------------------
# What can be measured
# --------------------------------------------------------------------------


def look(plant: Plant, state: State, solution: Solution) -> View:
    """Return all potentials and currents during the step that `solution` stands for."""
    banks = {f"bank:{name}": solution.bank[:, 1 + k] for k, name in enumerate(plant.banks.names)}
    motors = {f"machine:{name}": _with_return(solution.motor[:, k]) for k, name in enumerate(plant.motors.names)}
    loads = {f"machine:{name}": solution.load[:, k] for k, name in enumerate(plant.loads.names)}
    machines = motors | loads
    at_bus, at_terminals, at_machines = (_points(solution, nodes) for nodes in (BUS, TERMINAL, MACHINE))
    return View(
        time=state.time,
        supply_frequency=plant.frequency,
        generated_frequency=np.where(solution.coasting, np.abs(state.speed), 1.0),
        potentials={
            "supply": at_bus,
            "earth": at_bus,
            "contacts": at_bus,
            "leg": at_machines,
            **dict.fromkeys(banks, at_terminals),
            **dict.fromkeys(machines, at_machines),
        },
        currents={
            "supply": _with_return(solution.supply),
            "leg": _with_return(solution.out),
            **banks,
            **machines,
        },
        phase=state.phase,
        speed=state.speed,
        motor_speed=state.motor_speed,
        bank_closed=state.bank_closed,
        source_power=(solution.nodes[:, list(BUS)] * np.conj(solution.source)).sum(axis=1)
        - solution.nodes[:, NEUTRAL] * np.conj(solution.source.sum(axis=1)),
    )


def _points(solution: Solution, nodes: tuple[int, int, int]) -> Complexes:
    """Return L1, L2, L3, N, PE (n, 5); earth at the bond is the reference."""
    earth = np.zeros((len(solution.nodes), 1), dtype=np.complex128)
    return np.concatenate([solution.nodes[:, [*nodes, NEUTRAL]], earth], axis=1)


def _with_return(currents: Complexes) -> Complexes:
    """Return the currents with what comes back through N: (n, 3) -> (n, 4)."""
    return np.concatenate([currents, -currents.sum(axis=1, keepdims=True)], axis=1)
