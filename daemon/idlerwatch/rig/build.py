"""From settings to a plant: what stands in the nameplates and in the wiring, the rest as usual, with a little chance.

What the settings do not say is common practice, no source: a supply of 0.3 ohm, machines of usual constants, a starter
with a capacitor of its own. What the core's model leaves out is drawn by the seed: windings that differ by a percent,
capacitors that differ from their marking, a volt of others' load on the neutral.
"""

import cmath
import math
from dataclasses import replace
from typing import Final

import numpy as np

from idlerwatch.core.conductors import LEGS, Pair
from idlerwatch.core.settings.model import Bank, Settings, Start
from idlerwatch.core.settings.model import Machine as MachineSettings
from idlerwatch.rig.circuit import BUS, NEUTRAL, TERMINAL
from idlerwatch.rig.machine import Induction, stack, typical_machine
from idlerwatch.rig.values import PHASE_NAMES, Banks, Capacitors, Loads, Motors, Plant, Source, Starting

SUPPLY_RATIO: Final = 1.05
LOOP_IMPEDANCE: Final = 0.18 + 0.07j
NEUTRAL_OHMS: Final = 0.12
LEAKAGE_OHMS: Final = 20_000.0
NEUTRAL_OFFSET_VOLTS: Final = 0.6
LOAD_AHEAD_OHMS: Final = 400.0
WINDING_SPREAD: Final = 0.01
CAPACITOR_SPREAD: Final = 0.03
AID_SIEMENS: Final = 1.6
"""Susceptance of a starter's capacitor over the idler's rated admittance a phase."""
MACHINE_INERTIA_S: Final = 0.6
_CONDUCTOR: Final = {"L1": 0, "L2": 1, "L3": 2, "N": 3}


def build_plant(settings: Settings, seed: int = 1, count: int = 1) -> Plant:
    """Return converters of these settings, alike but for what chance adds."""
    chance = np.random.default_rng(seed)
    three_phase = [m for m in settings.machine if m.connected == "three-phase" and m.starter != "drive"]
    others = [m for m in settings.machine if m not in three_phase]
    return Plant(
        feed=settings.supply.as_feed,
        frequency=settings.supply.frequency,
        source=_source(settings, count),
        starting=_starting(settings),
        star_on_neutral=settings.idler[0].star_point == "N",
        idler=_idler(settings, chance, count),
        capacitors=_capacitors(settings, chance, count),
        banks=_banks(settings),
        motors=_motors(settings, three_phase, count),
        loads=_loads(others, count),
    )


def _source(settings: Settings, count: int) -> Source:
    feed = settings.supply.as_feed
    points = feed.nominal_points()
    middle = points["N"] if feed.has_neutral else (points[feed.pair.first] + points[feed.pair.second]) / 2.0
    emf = np.array([points[leg] - middle if leg in feed.supply_legs else 0j for leg in LEGS])
    turn = cmath.exp(-1j * cmath.phase(emf[LEGS.index(feed.supply_legs[0])] or 1.0))
    return Source(
        emf=np.tile(emf * turn * SUPPLY_RATIO, (count, 1)),
        impedance=np.full((count, 3), LOOP_IMPEDANCE),
        neutral_resistance=np.full(count, NEUTRAL_OHMS),
        offset=np.full(count, NEUTRAL_OFFSET_VOLTS + 0j),
        base_load=np.full(count, LOAD_AHEAD_OHMS),
        leakage=np.full(count, 1.0 / LEAKAGE_OHMS),
    )


def _rated_current(kilowatts: float, line_voltage: float) -> float:
    return kilowatts * 1e3 / (math.sqrt(3.0) * line_voltage * 0.87 * 0.82)


def _idler(settings: Settings, chance: np.random.Generator, count: int) -> Induction:
    """Return the idler; several idlers are one of their summed ratings (admittances add)."""
    plates = settings.idler
    first = plates[0]
    kilowatts = sum(plate.rated_kw for plate in plates)
    currents = [plate.rated_current or _rated_current(plate.rated_kw, plate.rated_voltage) for plate in plates]
    magnetising = [plate.magnetising_current for plate in plates if plate.magnetising_current]
    own = typical_machine(
        kilowatts, first.rated_voltage, sum(currents), sum(magnetising) if len(magnetising) == len(plates) else None
    )
    spread = 1.0 + WINDING_SPREAD * chance.uniform(-1.0, 1.0, (count, 3))
    return replace(stack((own,) * count), asymmetry=spread)


def _starting(settings: Settings) -> Starting:
    start = settings.start or Start(method="pony-motor")
    feed = settings.supply.as_feed
    idler = settings.idler[0]
    current = idler.rated_current or _rated_current(idler.rated_kw, idler.rated_voltage)
    admittance = current / (idler.rated_voltage / np.sqrt(3.0))
    joins, star_tied, ends = _joins(settings, start)
    third = next(k for k in range(3) if k not in ends)
    leader = ends[0] if feed.rotation == "L1-L2-L3" or len(ends) == 1 else ends[1]
    if len(ends) == 1:
        step = -1 if feed.rotation == "L1-L2-L3" else 1
        third = (ends[0] + step) % 3
    return Starting(
        method=start.method,
        joins=joins,
        star_tied=star_tied,
        aid_pair=(TERMINAL[leader], TERMINAL[third]),
        aid_farads=0.0
        if start.method == "pony-motor"
        else float(AID_SIEMENS * admittance / (2.0 * np.pi * settings.supply.frequency)),
        until_speed=0.9,
        change_over_s=0.15,
        pony_watts=0.35 * idler.rated_kw * 1e3,
    )


def _joins(settings: Settings, start: Start) -> tuple[tuple[tuple[int, int], ...], bool, tuple[int, ...]]:
    """Return which nodes are joined while starting, whether the star point stays tied, and which legs are then fed."""
    feed = settings.supply.as_feed
    fed = tuple(LEGS.index(leg) for leg in feed.supply_legs)
    if (
        start.method == "two-legs"
        and start.between is not None
        and not feed.is_line_feed
        and "N" not in str(start.between)
    ):
        ends = tuple(LEGS.index(leg) for leg in start.between.legs)
        ends = (ends[1], ends[0]) if str(start.between) == "L3-L1" else ends
        live = fed[0] if fed[0] in ends else ends[0]
        other = next(k for k in ends if k != live)
        return ((BUS[fed[0]], TERMINAL[live]), (NEUTRAL, TERMINAL[other])), False, ends
    joins = tuple((BUS[k], TERMINAL[k]) for k in fed)
    ends = (fed[1], fed[0]) if str(feed.pair) == "L3-L1" else fed
    return joins, settings.idler[0].star_point == "N", ends


def _capacitors(settings: Settings, chance: np.random.Generator, count: int) -> Capacitors:
    cans = settings.capacitor
    banks = [bank.name for bank in settings.bank]
    marked = np.array([can.microfarads * 1e-6 for can in cans])
    spread = 1.0 + CAPACITOR_SPREAD * chance.uniform(-1.0, 1.0, (count, len(cans)))
    return Capacitors(
        names=tuple(can.name for can in cans),
        pairs=tuple(_pair(can.between) for can in cans),
        bank=tuple(-1 if can.bank is None else banks.index(can.bank) for can in cans),
        farads=marked * spread,
    )


def _pair(pair: Pair) -> tuple[int, int]:
    return _CONDUCTOR[pair.first], _CONDUCTOR[pair.second]


def _banks(settings: Settings) -> Banks:
    banks = settings.bank
    return Banks(
        names=tuple(bank.name for bank in banks),
        wanted=np.array([_wanted(bank) for bank in banks], dtype=bool).reshape(len(banks), len(PHASE_NAMES)),
        free=tuple(bank.closed_when == "free" for bank in banks),
        closes_after=np.array([bank.closes_after_s for bank in banks]),
        coil=tuple(None if bank.coil is None else _pair(bank.coil) for bank in banks),
        coil_voltage=np.array([bank.coil_voltage or 1.0 for bank in banks]),
        pull_in=np.full(len(banks), 0.8),
        drop_out=np.full(len(banks), 0.45),
        operating_time=0.04,
    )


def _wanted(bank: Bank) -> list[bool]:
    return [bank.closed_when != "free" and name in bank.closed_when for name in PHASE_NAMES]


def _motors(settings: Settings, machines: list[MachineSettings], count: int) -> Motors:
    line = settings.supply.as_feed.line_voltage
    own = [typical_machine(m.rated_kw, line, m.rated_current, inertia=MACHINE_INERTIA_S) for m in machines]
    empty = typical_machine(1.0, line)
    constants = stack(tuple(own)) if own else stack((empty,)).part(slice(0, 0))
    return Motors(
        names=tuple(m.name for m in machines),
        starter=tuple(m.starter for m in machines),
        constants=stack((constants,) * count),
    )


def _loads(machines: list[MachineSettings], count: int) -> Loads:
    return Loads(
        names=tuple(m.name for m in machines),
        pairs=tuple(_pair(m.connected) if isinstance(m.connected, Pair) else None for m in machines),
        watts=np.tile(np.array([m.rated_kw * 1e3 * 0.6 for m in machines]), (count, 1)),
    )
