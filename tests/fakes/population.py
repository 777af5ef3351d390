"""Random converters on the rig, in steady states, seen by imperfect meters: what the recovery is tried on.

The rig's machine is not the core's (deep bars, another law of saturation, windings that differ), its meters have gain
and phase errors, steps, and a refresh interval. Everything is drawn from one seed.
"""

from dataclasses import dataclass, replace

import numpy as np

from idlerwatch.core.conductors import Feed, Pair
from idlerwatch.core.converter.circuit import BankAmmeter, Can, CurrentChannel, Sample, Wiring
from idlerwatch.core.electrical.sequence import TO_COMPONENTS
from idlerwatch.rig import plant as rig
from idlerwatch.rig.machine import Induction
from idlerwatch.rig.values import Banks, Capacitors, Loads, Motors, Phase, Plant, Source, Starting, View

FEEDS = {
    "L1-N": Feed(Pair("L1", "N"), 230.0),
    "split-phase": Feed(Pair("L1", "L2"), 240.0, neutral="centre-tap"),
    "line": Feed(Pair("L1", "L2"), 400.0, neutral="none"),
}
SETTLING_STEPS = 60


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
    is_saturating: bool = True
    has_supply_meter: bool = False
    has_bank_ammeter: bool = False
    has_lines: bool = False
    quantised: bool = True


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
        friction=0.045 * kilowatts * 1e3 * (1.0 + 0.4 * chance.uniform(-1.0, 1.0, shape)),
        rated_power=kilowatts * 1e3,
        asymmetry=np.ones((*shape, 3)),
    )


PAIRS = {
    "L1-N": ((0, 2), (1, 2), (1, 3), (0, 2)),
    "split-phase": ((0, 2), (1, 2), (0, 2), (1, 2)),
    "line": ((0, 2), (1, 2), (0, 2), (1, 2)),
}
"""C1 and C2 in the run bank, C3 always in, CS the start bank's."""


def draw(options: Options, seed: int) -> Population:
    """Draw converters, their capacitors and their meters."""
    chance = np.random.default_rng(seed)
    feed, n = FEEDS[options.feed], options.count
    kilowatts = chance.uniform(4.0, 15.0, n)
    idler = _machines(chance, kilowatts, feed, saturating=options.is_saturating)
    idler = replace(idler, asymmetry=1.0 + options.asymmetry * chance.uniform(-1.0, 1.0, (n, 3)))
    base = rated_current(kilowatts, feed.line_voltage) / feed.leg_voltage
    pairs = PAIRS[options.feed]
    least = options.smallest_can
    siemens = base[:, None] * np.stack(
        [
            chance.uniform(max(least, 0.15), 0.35, n),
            chance.uniform(least, 0.2, n),
            chance.uniform(least, 0.1, n),
            chance.uniform(0.3, 0.8, n),
        ],
        axis=1,
    )
    marked = siemens / (2.0 * np.pi * 50.0)
    farads = marked * (1.0 + options.capacitor_spread * chance.uniform(-1.0, 1.0, marked.shape))
    motors = _machines(chance, kilowatts[:, None] * chance.uniform(0.12, 0.45, (n, 3)), feed)
    motors = replace(motors, kinetic_energy=0.8 * motors.rated_power)
    plant = Plant(
        feed=feed,
        frequency=50.0,
        source=_source(chance, feed, n),
        starting=Starting("pony-motor", (), True, (3, 5), 0.0, 0.9, 0.15, 1000.0),
        star_on_neutral=options.feed == "L1-N",
        idler=idler,
        capacitors=Capacitors(("C1", "C2", "C3", "CS"), pairs, (0, 0, -1, 1), farads),
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
        loads=Loads((), (), np.zeros((n, 0))),
    )
    gain = options.gain

    def voltage_errors(shape):
        if options.trimmed is None:
            return 1.0 + gain * chance.uniform(-1.0, 1.0, shape)
        return 1.0 + options.trimmed * chance.standard_normal(shape)

    return Population(
        options,
        plant,
        kilowatts,
        marked,
        voltage_gain=voltage_errors((n, 3)),
        current_gain=(1.0 + 2.0 * gain * chance.uniform(-1.0, 1.0, (n, 4)))
        * np.exp(1j * np.radians(options.phase_error) * chance.uniform(-1.0, 1.0, (n, 4))),
        line_gain=voltage_errors((n, 3)),
        ammeter_gain=1.0 + gain * chance.uniform(-1.0, 1.0, (n, 1)),
        chance=chance,
    )


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
    """Let all converters settle in one state; shapes (n,), (n,), (n,), (n, 3), (n, 3)."""
    plant, chance, n = population.plant, population.chance, population.options.count
    supply = chance.uniform(0.92, 1.08, n) if supply is None else supply
    on = chance.random((n, 3)) < 0.5 if on is None else on
    load = chance.uniform(0.0, 0.9, (n, 3)) if load is None else load
    state = rig.begin(plant)
    sense = -1.0 if backwards else 1.0
    closed = np.stack(
        [np.ones(n, bool) if run_in is None else run_in, np.zeros(n, bool) if start_in is None else start_in], axis=1
    )
    state = replace(
        state,
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
    orders = replace(rig.no_orders(plant), run=np.ones(n, bool), motor_on=on, motor_load=load, bank_by_hand=closed)
    faults = rig.no_faults(plant) if faults is None else faults
    nominal = np.abs(plant.source.emf).max(axis=1) / (plant.feed.voltage / (1 if not plant.feed.is_line_feed else 2))
    faults = replace(faults, supply_ratio=supply / nominal)
    for _ in range(SETTLING_STEPS):
        state, solution = rig.step(plant, state, orders, faults)
    return rig.look(plant, state, solution)


def measure(population: Population, view: View, noise: float = 0.0002) -> Seen:
    """Return what the meters make of a state."""
    options, chance = population.options, population.chance
    points, out = view.potentials["leg"], view.currents["leg"]
    legs = points[:, :3]
    hub = points[:, 3:4] if options.feed != "line" else points[:, 0:1]
    rays = np.abs(legs - hub) * population.voltage_gain
    channels = channels_of(options)
    currents = []
    for index, (leg, across, place) in enumerate(channels):
        at, flow = (points, out) if place == "leg" else (view.potentials["supply"], view.currents["supply"])
        voltage = at[:, across[0]] - at[:, across[1]]
        current = flow[:, leg] * population.current_gain[:, index]
        power = voltage * current.conj()
        if options.quantised:
            power = np.round(power.real) + 1j * np.round(power.imag)
        told = np.abs(voltage) * (population.voltage_gain[:, leg] if place == "leg" else 1.0)
        currents.append((power / told).conj())
    currents = np.stack(currents, axis=1)
    currents = currents * (1.0 + noise * chance.standard_normal(currents.shape))
    rays = rays * (1.0 + noise * chance.standard_normal(rays.shape))
    if options.quantised:
        rays = np.round(rays, 1)
    n = options.count
    lines = np.zeros((n, 0))
    if options.has_lines or options.feed == "line":
        pairs = ((1, 2),) if options.feed == "line" else ((0, 1), (1, 2), (2, 0))
        lines = np.stack(
            [np.abs(legs[:, a] - legs[:, b]) * population.line_gain[:, k] for k, (a, b) in enumerate(pairs)], axis=1
        )
        lines = np.round(lines * (1.0 + noise * chance.standard_normal(lines.shape)), 1)
    ammeters = np.zeros((n, 0))
    if options.has_bank_ammeter:
        ammeters = np.round(np.abs(view.currents["bank:run"][:, 2:3]) * population.ammeter_gain, 2)
    components = (legs - points[:, 3:4] * (options.feed == "L1-N")) @ TO_COMPONENTS.T
    return Seen(
        Sample(rays, currents, np.zeros((*currents.shape, 2)), ammeters, lines),
        np.abs(components[:, 2] / components[:, 1]),
        components,
        np.abs(out[:, :3]).mean(axis=1),
        view,
    )


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
    lines = ()
    if options.feed == "line":
        lines = ((1, 2),)
    elif options.has_lines:
        lines = ((0, 1), (1, 2), (2, 0))
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
        lines=lines,
    )
