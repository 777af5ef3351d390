"""Random converters on the rig, in steady states, seen by imperfect meters: what the recovery is tried on.

The rig's machine is not the core's (deep bars, another law of saturation, windings that differ), its meters have gain
and phase errors, steps, and read one after the other while the supply drifts. Everything is drawn from one seed.
"""

import math
from dataclasses import dataclass, fields, replace

import numpy as np

from idlerwatch.core.conductors import Feed, Pair
from idlerwatch.core.converter.circuit import (
    IDLER,
    BankAmmeter,
    Can,
    CurrentChannel,
    Positions,
    Sample,
    Wiring,
    nominal_positions,
)
from idlerwatch.core.converter.hypotheses import Hypothesis, catalogue
from idlerwatch.core.converter.learn import Learned, Prior, Recorded, learn
from idlerwatch.core.converter.nameplate import Nameplate
from idlerwatch.core.converter.prior import Limits, prior_of
from idlerwatch.core.converter.recover import MISSING_SPREAD, Circuit, Recoverer
from idlerwatch.core.electrical.sequence import TO_COMPONENTS
from idlerwatch.rig import plant as rig
from idlerwatch.rig.circuit import BUS, NEUTRAL
from idlerwatch.rig.machine import Induction
from idlerwatch.rig.values import Banks, Capacitors, Loads, Motors, Phase, Plant, Source, Starting, View

FEEDS = {
    "L1-N": Feed(Pair("L1", "N"), 230.0),
    "split-phase": Feed(Pair("L1", "L2"), 240.0, neutral="centre-tap"),
    "line": Feed(Pair("L1", "L2"), 400.0, neutral="none"),
}
SETTLING_STEPS = 40
REGULATED_STEPS = 30
SUPPLY = (216.0 / 230.0, 253.0 / 230.0)
"""Between which the supply stands where it enters the converter, over the declared voltage."""
MEANT = 10
"""Readings behind each load state that is learned from."""


@dataclass(frozen=True)
class Options:
    """What the study varies."""

    feed: str = "L1-N"
    count: int = 1000
    asymmetry: float = 0.01
    capacitor_spread: float = 0.05
    phase_error: float = 0.3
    gain: float = 0.005
    trimmed: float | None = 0.0005
    smallest_can: float = 0.05
    largest_can: float | None = None
    drift: float = 0.002
    is_saturating: bool = True
    is_unsigned: bool = False
    drive: float = 0.0
    least_load: float = 0.0
    at_machines: float = 0.0
    has_supply_meter: bool = False
    has_bank_ammeter: bool = False
    has_lines: bool = False
    quantised: bool = True


IDEAL = {"asymmetry": 0.0, "capacitor_spread": 0.0, "phase_error": 0.0, "drift": 0.0}
"""Options of converters and meters without what the model leaves out (with `is_saturating` and `quantised` False)."""


@dataclass
class Population:
    """Converters, their wiring as a person would write it down, and their meters' fixed errors."""

    options: Options
    plant: Plant
    kilowatts: np.ndarray
    marked: np.ndarray
    voltage_gain: np.ndarray
    current_gain: np.ndarray
    line_gain: np.ndarray
    ammeter_gain: np.ndarray
    chance: np.random.Generator

    @property
    def base(self) -> np.ndarray:
        """Rated current over nominal voltage of each converter's plate. [S]"""
        return rated_current(self.kilowatts, self.plant.feed.line_voltage) / self.plant.feed.leg_voltage


DRIVE_SPREAD = 0.1
"""What is not known of a drive's current, of itself."""


def rated_current(kilowatts, line_voltage):
    """Current of a plate of 0.72 apparent efficiency (common practice). [A]"""
    return kilowatts * 1e3 / (np.sqrt(3.0) * line_voltage * 0.72)


def _machines(chance, kilowatts, feed, *, spread=0.15, saturating=True):
    """Constants about the usual, each drawn by itself."""
    shape = kilowatts.shape
    ohms = feed.leg_voltage / rated_current(kilowatts, feed.line_voltage)

    def near(value):
        return value * ohms * (1.0 + spread * chance.uniform(-1.0, 1.0, shape))

    return Induction(
        rated_voltage=np.full(shape, feed.leg_voltage),
        stator_resistance=near(0.035),
        stator_reactance=near(0.075),
        magnetising_reactance=near(1.95),
        rotor_resistance=near(0.028),
        rotor_reactance=near(0.085),
        zero_reactance=near(0.06),
        saturation=chance.uniform(6.0, 16.0, shape) if saturating else np.zeros(shape),
        deep_bar=chance.uniform(0.3, 1.2, shape),
        kinetic_energy=0.7 * kilowatts * 1e3,  # steady states only: slow enough for steps of 20 ms
        # with core loss, which this machine has not: a third of an IE1 machine's loss (5.5 % at 7.5 kW)
        friction=0.055 * kilowatts * 1e3 * (1.0 + 0.4 * chance.uniform(-1.0, 1.0, shape)),
        rated_power=kilowatts * 1e3,
        asymmetry=np.ones((*shape, 3)),
    )


PAIRS = {
    "L1-N": ((0, 2), (1, 2), (1, 3), (0, 2)),
    "split-phase": ((0, 2), (1, 2), (0, 2), (1, 2)),
    "line": ((0, 2), (1, 2), (0, 2), (1, 2)),
}
"""C1 and C2 in the run bank, C3 always in, CS the start bank's."""
COMPENSATED = {"L1-N": (1, 3), "split-phase": (0, 2), "line": (0, 2)}
"""Where CM stands, which belongs to the machines: a leg meter sees it, nobody wrote it down."""


def draw(options: Options, seed: int) -> Population:
    """Draw converters, their capacitors and their meters."""
    chance = np.random.default_rng(seed)
    feed, n = FEEDS[options.feed], options.count
    kilowatts = chance.uniform(4.0, 15.0, n)
    idler = _machines(chance, kilowatts, feed, saturating=options.is_saturating)
    idler = replace(idler, asymmetry=1.0 + options.asymmetry * chance.uniform(-1.0, 1.0, (n, 3)))
    base = rated_current(kilowatts, feed.line_voltage) / feed.leg_voltage
    pairs = PAIRS[options.feed]
    siemens = base[:, None] * _cans(chance, options)
    marked = siemens / (2.0 * np.pi * 50.0)
    farads = marked * (1.0 + options.capacitor_spread * chance.uniform(-1.0, 1.0, marked.shape))
    compensation = base * options.at_machines * chance.uniform(0.5, 1.5, n) / (2.0 * np.pi * 50.0)
    drives = np.zeros((n, 0)) if not options.drive else options.drive * kilowatts[:, None] * 1e3
    motors = _machines(chance, kilowatts[:, None] * chance.uniform(0.12, 0.45, (n, 3)), feed)
    motors = replace(motors, kinetic_energy=0.8 * motors.rated_power)
    plant = Plant(
        feed=feed,
        frequency=50.0,
        source=_source(chance, feed, n),
        starting=Starting("pony-motor", (), True, (3, 5), 0.0, 0.9, 0.15, 1000.0),
        star_on_neutral=options.feed == "L1-N",
        idler=idler,
        capacitors=Capacitors(
            ("C1", "C2", "C3", "CS", "CM"),
            (*pairs, COMPENSATED[options.feed]),
            (0, 0, -1, 1, -1),
            np.column_stack([farads, compensation]),
        ),
        banks=Banks(
            ("run", "start"),
            np.zeros((2, 5), dtype=bool),
            (True, True),
            np.zeros(2),
            (None, None),
            np.ones(2),
            np.full(2, 0.8),
            np.full(2, 0.45),
            0.04,
        ),
        motors=Motors(("a", "b", "c"), ("direct",) * 3, motors),
        loads=Loads(("drive",), (None,), drives) if options.drive else Loads((), (), drives),
    )
    gain = options.gain

    def voltage_errors(shape):
        if options.trimmed is None:
            return 1.0 + gain * chance.uniform(-1.0, 1.0, shape)
        return 1.0 + options.trimmed * chance.standard_normal(shape)

    channels = len(channels_of(options))
    return Population(
        options,
        plant,
        kilowatts,
        marked,
        voltage_gain=voltage_errors((n, 3)),
        current_gain=(1.0 + 2.0 * gain * chance.uniform(-1.0, 1.0, (n, channels)))
        * np.exp(1j * np.radians(options.phase_error) * chance.uniform(-1.0, 1.0, (n, channels))),
        line_gain=voltage_errors((n, 3)),
        ammeter_gain=1.0 + gain * chance.uniform(-1.0, 1.0, (n, 1)),
        chance=chance,
    )


def _cans(chance, options):
    """Susceptances over the base admittance; the start bank's is never like the run bank's across the same pair."""
    n, least = options.count, options.smallest_can
    if options.largest_can is not None:
        first, second, third = chance.uniform(least, options.largest_can, (3, n))
        return np.stack([first, second, third, chance.uniform(1.2, 3.0, n) * np.maximum(first, second)], axis=1)
    first = chance.uniform(max(least, 0.15), 0.35, n)
    second, third = chance.uniform(least, 0.2, n), chance.uniform(least, 0.1, n)
    return np.stack([first, second, third, chance.uniform(np.maximum(0.3, 1.2 * first), 0.8, n)], axis=1)


def _source(chance, feed, n):
    points = feed.nominal_points()
    middle = points["N"] if feed.has_neutral else (points[feed.pair.first] + points[feed.pair.second]) / 2.0
    emf = np.array([points[leg] - middle if leg in feed.supply_legs else 0j for leg in ("L1", "L2", "L3")])
    first = emf[np.abs(emf) > 0][0]
    emf = emf * np.exp(-1j * np.angle(first))
    scale = chance.uniform(0.98, 1.06, n)
    return Source(
        emf=emf * scale[:, None],
        impedance=np.full((n, 3), 0.15 + 0.06j),
        neutral_resistance=np.full(n, 0.1),
        offset=np.full(n, 0.6 + 0j),
        base_load=np.full(n, 400.0),
        leakage=np.full(n, 1.0 / 20_000.0),
    )


@dataclass
class Seen:
    """One steady state of all converters: the sample for the recovery, and the truth."""

    sample: Sample
    factor: np.ndarray
    components: np.ndarray
    mean_current: np.ndarray
    view: View


def running(
    population: Population, run_in=None, start_in=None, supply=None, load=None, on=None, faults=None, *, backwards=False
):
    """Let all converters settle in one state; shapes (n,), (n,), (n,), (n, 3), (n, 3).

    `supply` is the voltage where the supply enters, over the declared one: the source gives what that takes.
    """
    plant, chance, n = population.plant, population.chance, population.options.count
    supply = chance.uniform(*SUPPLY, n) if supply is None else supply
    on = chance.random((n, 3)) < 0.5 if on is None else on
    load = chance.uniform(population.options.least_load, 0.9, (n, 3)) if load is None else load
    closed = np.stack(
        [np.ones(n, bool) if run_in is None else run_in, np.zeros(n, bool) if start_in is None else start_in], axis=1
    )
    state = _turning(plant, on, closed, -1.0 if backwards else 1.0)
    orders = replace(rig.no_orders(plant), run=np.ones(n, bool), motor_on=on, motor_load=load, bank_by_hand=closed)
    if population.options.drive:
        orders = replace(orders, load_on=chance.random((n, 1)) < 0.7)
    faults = rig.no_faults(plant) if faults is None else faults
    nominal = np.abs(plant.source.emf).max(axis=1) / (plant.feed.voltage / (1 if not plant.feed.is_line_feed else 2))
    faults = replace(faults, supply_ratio=supply / nominal)
    for count in range(SETTLING_STEPS):
        state, solution = rig.step(plant, state, orders, faults)
        if count < REGULATED_STEPS:
            faults = replace(faults, supply_ratio=faults.supply_ratio * supply / supply_of(plant, solution))
    return rig.look(plant, state, solution)


def supply_of(plant, solution):
    """Voltage across the fed pair, over the declared one."""
    second = BUS[plant.fed[1]] if plant.feed.is_line_feed else NEUTRAL
    return np.abs(solution.nodes[:, BUS[plant.fed[0]]] - solution.nodes[:, second]) / plant.feed.voltage


def _turning(plant, on, closed, sense):
    """Where the search for a steady state begins: everything near its speed."""
    n = plant.count
    return replace(
        rig.begin(plant),
        phase=np.full(n, int(Phase.RUNNING)),
        switch=np.ones(n, bool),
        held=np.ones(n, bool),
        speed=np.full(n, sense * 0.995),
        flux=np.full(n, 0.98),
        motor_flux=np.full((n, 3), 0.95),
        motor_speed=np.where(on, 0.99 * sense, 0.0),
        motor_on_for=np.full((n, 3), 99.0),
        bank_closed=closed,
    )


def measure(population: Population, view: View, noise: float = 0.0002) -> Seen:
    """Return what the meters make of a state, each at its own instant while the supply drifts."""
    options, n = population.options, population.options.count
    points, out = view.potentials["leg"], view.currents["leg"]
    legs = points[:, :3]
    drift = options.drift * population.chance.uniform(-1.0, 1.0, (n, 1))

    def read(values, step=None, order=1):
        told = values * (1.0 + drift * population.chance.random(values.shape)) ** order
        told = told * (1.0 + noise * population.chance.standard_normal(values.shape))
        return told if step is None or not options.quantised else np.round(told / step) * step

    hub = points[:, 3:4] if options.feed != "line" else points[:, 0:1]
    lines = [np.abs(legs[:, a] - legs[:, b]) for a, b in lines_of(options)]
    ammeters = np.abs(view.currents["bank:run"][:, 2:3]) if options.has_bank_ammeter else np.zeros((n, 0))
    components = (legs - points[:, 3:4] * (options.feed == "L1-N")) @ TO_COMPONENTS.T
    return Seen(
        Sample(
            rays=read(np.abs(legs - hub) * population.voltage_gain, 0.1),
            currents=_currents(population, view, read),
            spreads=_spreads(population, view),
            ammeters=read(ammeters * population.ammeter_gain[:, : ammeters.shape[1]], 0.01),
            lines=read(np.stack([np.zeros(n), *lines], axis=1)[:, 1:] * population.line_gain[:, : len(lines)], 0.1),
        ),
        np.abs(components[:, 2] / components[:, 1]),
        components,
        np.abs(out[:, :3]).mean(axis=1),
        view,
    )


def _currents(population, view, read):
    """What power and reactive power over voltage make of each channel's current, in watts and var."""
    options = population.options
    voltages, currents = [], []
    for leg, across, place in channels_of(options):
        points = view.potentials[place]
        voltages.append(points[:, across[0]] - points[:, across[1]])
        distorted = _distortion(population, view, leg, place) * voltages[-1]
        currents.append(view.currents[place][:, leg] + distorted + _compensation(population, view, leg, place))
    voltages, currents = np.stack(voltages, axis=1), np.stack(currents, axis=1)
    power = read(voltages * (currents * population.current_gain).conj(), order=2)
    if options.quantised:
        power = np.round(power.real) + 1j * np.round(power.imag)
    if options.is_unsigned:
        power = power.real + 1j * np.abs(power.imag)
    gains = [population.voltage_gain[:, leg] ** (place == "leg") for leg, _, place in channels_of(options)]
    return (power / read(np.abs(voltages) * np.stack(gains, axis=1), 0.1)).conj()


def _compensation(population, view, leg, place):
    """What a leg meter sees of the capacitor at the machines, which the rig has at the converter's terminals."""
    pair = COMPENSATED[population.options.feed]
    if place != "leg" or leg not in pair:
        return 0.0
    points = view.potentials["leg"]
    through = 2j * np.pi * 50.0 * population.plant.capacitors.farads[:, 4] * (points[:, pair[0]] - points[:, pair[1]])
    return through if leg == pair[0] else -through


def _distortion(population, view, leg, place):
    """What a meter makes wrong of a rectifier's current: up to a tenth of it, active or not, as an admittance."""
    if not population.options.drive or place != "leg":
        return 0.0
    amperes = DRIVE_SPREAD * np.abs(view.currents["machine:drive"][:, leg])
    real, imaginary = population.chance.uniform(-1.0, 1.0, (2, len(amperes)))
    return amperes * (real + 1j * imaginary) / population.plant.feed.leg_voltage


def _spreads(population, view):
    channels = channels_of(population.options)
    spreads = np.zeros((population.options.count, len(channels), 2))
    if population.options.drive:
        for index, (leg, _, place) in enumerate(channels):
            if place == "leg":
                spreads[:, index] = DRIVE_SPREAD * np.abs(view.currents["machine:drive"][:, leg, None])
    return spreads


def lines_of(options: Options):
    """Pairs of legs that have a voltmeter besides the rays."""
    if options.feed == "line":
        return ((1, 2),)
    return ((0, 1), (1, 2), (2, 0)) if options.has_lines else ()


def measured_for_long(population: Population, view: View, count: int = MEANT) -> Seen:
    """Return the mean of many readings of one state."""
    seen = [measure(population, view) for _ in range(count)]
    means = (np.mean([getattr(one.sample, field.name) for one in seen], axis=0) for field in fields(Sample))
    return replace(seen[0], sample=Sample(*means))


def channels_of(options: Options):
    """Return (leg, across, place) of each current channel: generated, outgoing, supply."""
    if options.feed == "L1-N":
        generated = ((1, (1, 3), "leg"), (2, (2, 3), "leg"))
        fed = ((0, (0, 3)),)
    elif options.feed == "split-phase":
        generated = ((2, (2, 3), "leg"),)
        fed = ((0, (0, 1)),)
    else:
        generated = ((2, (2, 0), "leg"),)
        fed = ((0, (0, 1)),)
    if not options.has_supply_meter:
        return generated
    out = tuple((leg, across, "leg") for leg, across in fed)
    return (*generated, *out, *((leg, across, "supply") for leg, across in fed))


def wiring_of(population: Population, index: int = 0) -> Wiring:
    """Return the wiring of one converter as its plate and its capacitors' marking say."""
    options, feed = population.options, population.plant.feed
    turn = 2.0 * np.pi / 3.0
    base = population.base[index]
    cans = tuple(
        Can(pair, 2.0 * np.pi * 50.0 * population.marked[index, k] / base, (0, 0, -1, 1)[k])
        for k, pair in enumerate(PAIRS[options.feed])
    )
    channels = channels_of(options)
    count = len([1 for c in channels if c[2] == "leg"])
    generated = {"L1-N": 2, "split-phase": 1, "line": 1}[options.feed]
    made = tuple(CurrentChannel(leg, across) for leg, across, _ in channels)
    directions = {
        "L1-N": (0.0, -turn, turn),
        "split-phase": (0.0, np.pi, np.pi / 2),
        "line": (0.0, np.pi, 2 * np.pi / 3),
    }[options.feed]
    return Wiring(
        rated_current=rated_current(population.kilowatts[index], feed.line_voltage),
        nominal_voltage=feed.leg_voltage,
        tied=options.feed == "L1-N",
        hub=0 if options.feed == "line" else 3,
        directions=directions,
        free={"L1-N": (1, 2), "split-phase": (2,), "line": (2,)}[options.feed],
        cans=cans,
        banks=2,
        generated=made[:generated],
        outgoing=made[generated:count],
        supply=made[count:],
        ammeters=(BankAmmeter(0, 2),) if options.has_bank_ammeter else (),
        lines=lines_of(options),
    )


# --------------------------------------------------------------------------
# What a person and the learning know of each converter
# --------------------------------------------------------------------------

DISCREPANCY = 0.002
"""Standard deviation of what the model leaves out, over the rated current."""
LINE_DISCREPANCY = 0.02
"""The same of a line voltage. [V]"""
NOISE = 4e-4
CHANNEL_NOISE = 8e-4
"""Repeatability of voltages and ammeters, and of currents out of powers: noise, steps and drift. [1]"""


def prior_for(population: Population, wiring: Wiring, index: int = 0) -> Prior:
    """Return what plate, marking and classes say of one converter."""
    options = population.options
    voltmeter = options.gain if options.trimmed is None else math.sqrt(3.0) * options.trimmed
    limits = Limits(
        rays=[voltmeter] * len(wiring.rays),
        channels=[2.0 * options.gain] * len(wiring.channels),
        ammeters=[options.gain] * len(wiring.ammeters),
        lines=[voltmeter] * len(wiring.lines),
    )
    plate = Nameplate(float(population.kilowatts[index]), population.plant.feed.line_voltage)
    return prior_of(wiring, [plate], limits)


def discrepancy_of(wiring: Wiring, share: float = DISCREPANCY):
    """Return the standard deviation of each row that the model leaves out. [A, V]"""
    discrepancy = np.full(wiring.rows, share * wiring.rated_current)
    discrepancy[wiring.rows - len(wiring.lines) :] = LINE_DISCREPANCY
    return discrepancy


def noise_of(wiring: Wiring):
    """Return the repeatability of each parameter: (p,)."""
    noise = np.array([CHANNEL_NOISE if name.startswith("channel") else NOISE for name in wiring.names])
    constant = [name in IDLER or name.startswith("can") for name in wiring.names]
    return np.where(constant, 0.0, noise)


def in_running(wiring: Wiring) -> Positions:
    """Return the position of a running converter: the run bank in, the start bank out."""
    whole = nominal_positions(wiring)
    start = np.zeros_like(whole.bank_matrices)
    start[:, 1] = whole.bank_matrices[:, 1]
    shares = np.array([[float(can.bank != 1) for can in wiring.cans]])
    return replace(
        whole, matrices=whole.matrices - start[:, 1], shares=shares, bank_matrices=whole.bank_matrices - start
    )


def one_of(seen: list[Seen], index: int) -> Sample:
    """Return what one converter showed in several states."""
    return Sample(*(np.stack([getattr(one.sample, f.name)[index] for one in seen]) for f in fields(Sample)))


def learned_from(population: Population, wiring: Wiring, states: list[Seen], index: int) -> Learned:
    """Learn one converter from load states in which the run bank was in."""
    sample, prior = one_of(states, index), prior_for(population, wiring, index)
    recorded = Recorded(sample, in_running(wiring), np.zeros(len(states), dtype=np.int64))
    if population.options.at_machines and population.options.is_unsigned:
        return _learned_with_signs(wiring, recorded, prior)
    return learn(wiring, recorded, prior, discrepancy_of(wiring))


def _learned_with_signs(wiring, recorded, prior):
    """Learn without reactive power, give each state its likeliest sign, and learn again, until no sign changes."""
    sample, ways = recorded.sample, signed_ways(wiring)
    unknown = replace(recorded, sample=replace(sample, spreads=sample.spreads + np.array([0.0, MISSING_SPREAD])))
    learned, which = learn(wiring, unknown, prior, discrepancy_of(wiring)), None
    for _ in range(8):
        likeliest = Recoverer(wiring, ways, circuit_of(wiring, learned)).recover(sample).likeliest
        if np.array_equal(likeliest, which):
            break
        which = likeliest
        learned = learn(wiring, Recorded(sample, ways, which), prior, discrepancy_of(wiring))
    return learned


def signed_ways(wiring: Wiring) -> Positions:
    """Return the running position with each channel's reactive power one way or the other."""
    known = catalogue(wiring, (1.0, 0.0), unsigned=range(len(wiring.channels)))
    wanted = [
        number
        for number, way in enumerate(known.hypotheses)
        if replace(way, flipped=None) == Hypothesis((1.0, 0.0), weight=way.weight)
    ]
    return Positions(*(getattr(known.positions, field.name)[wanted] for field in fields(Positions)))


def circuit_of(wiring: Wiring, learned: Learned) -> Circuit:
    """Return what is known of a converter that was learned."""
    return Circuit(learned.parameters, learned.covariance, noise_of(wiring), discrepancy_of(wiring))
