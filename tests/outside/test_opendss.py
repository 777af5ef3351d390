"""Every node voltage of a converter against OpenDSS, an independent network solver, over random circuits.

The idler is a Reactor with unequal Z1, Z2 and Z0; capacitors, loads and the utility are elements of their own. OpenDSS
agrees within 1e-5: it adds some millionths of each element's admittance to earth, lest anything float.
"""

import cmath
import math
import warnings

import numpy as np
import pytest

from idlerwatch.core.conductors import Feed, read_pair
from idlerwatch.core.converter.steady import NODES, Branches, capacitors, linear_potentials, utility

with warnings.catch_warnings():
    warnings.simplefilter("ignore")
    from opendssdirect import dss

RELATIVE = 1e-5
CIRCUITS_A_FEED = 60
FREQUENCY = 50.0
PAIRS = tuple(read_pair(name) for name in ("L1-L2", "L2-L3", "L3-L1", "L1-N", "L2-N", "L3-N"))
LINE = PAIRS[:3]

SHED = Feed(read_pair("L1-N"), 230.0)
HOUSE = Feed(read_pair("L1-L2"), 240.0, neutral="centre-tap")
TRANSFORMER = Feed(read_pair("L1-L2"), 400.0, neutral="none")
BACKWARDS = Feed(read_pair("L2-N"), 230.0, rotation="L1-L3-L2")


def node(conductor):
    return NODES.index(conductor) + 1


def impedance(rng, least, most):
    """A random impedance, inductive."""
    return complex(*(10.0 ** rng.uniform(np.log10(least), np.log10(most), 2)))


def random_circuit(rng, feed, star_point):
    """Impedances of utility and idler, capacitors and loads, spread over what converters of 1 to 30 kW have."""
    positive, negative = impedance(rng, 2.0, 60.0), impedance(rng, 0.3, 4.0)
    zero = impedance(rng, 0.1, 3.0) if star_point == "N" else None
    pairs = PAIRS if feed.has_neutral else LINE
    return {
        "line": impedance(rng, 0.01, 1.0),
        "neutral": impedance(rng, 0.01, 1.0),
        "idler": (zero, positive, negative),
        "farads": {pair: 1e-6 * rng.uniform(5.0, 150.0) for pair in pairs if rng.random() < 0.6},
        "loads": {pair: impedance(rng, 5.0, 200.0) for pair in pairs if rng.random() < 0.5},
        "motor": (None, impedance(rng, 5.0, 60.0), impedance(rng, 0.5, 8.0)),
    }


def windings(circuit):
    rows = [[0.0 if z is None else 1.0 / z for z in circuit[name]] for name in ("idler", "motor")]
    return np.array(rows, dtype=np.complex128)


def branches(circuit):
    cans = capacitors(tuple(circuit["farads"]), np.array(list(circuit["farads"].values())), FREQUENCY)
    loads = Branches(tuple(circuit["loads"]), 1.0 / np.array(list(circuit["loads"].values()), dtype=np.complex128))
    return cans.beside(loads)


def ours(feed, circuit, neutral):
    return linear_potentials(utility(feed, circuit["line"], neutral), branches(circuit), windings(circuit))


def bracketed(z):
    return f"[{z.real!r}, {z.imag!r}]"


def machine_lines(name, sequence, star, feed):
    """A three-phase Reactor; one whose star point floats is given a node of its own for it."""
    legs = ".".join(str(node(leg)) for leg in feed.rotation.split("-"))
    zero, positive, negative = sequence
    zero = positive if zero is None else zero
    parts = " ".join(f"Z{k}={bracketed(z)}" for k, z in ((1, positive), (2, negative), (0, zero)))
    yield f"New Reactor.{name} phases=3 bus1=b.{legs} bus2=b.{star}.{star}.{star} {parts}"


def source_lines(feed, line):
    """One single-phase source for each fed leg, or one across the pair where there is no neutral."""
    points = feed.nominal_points()
    if feed.has_neutral:
        fed = [(leg, points[leg] - points["N"], 0, line) for leg in feed.supply_legs]
    else:
        first, second = feed.supply_legs
        fed = [(first, points[first] - points[second], node(second), 2.0 * line)]
    for number, (leg, force, other, z) in enumerate(fed):
        verb = f"New Vsource.s{number}" if number else "New Circuit.c"
        series = " ".join(f"Z{sequence}={bracketed(z)}" for sequence in (1, 2, 0))
        yield (
            f"{verb} phases=1 bus1=b.{node(leg)} bus2=b.{other} basekv={abs(force) / 1000.0!r} pu=1 "
            f"angle={math.degrees(cmath.phase(force))!r} basefreq={FREQUENCY} {series}"
        )


def script(feed, circuit, neutral):
    yield "Clear"
    yield f"Set DefaultBaseFrequency={FREQUENCY}"
    yield from source_lines(feed, circuit["line"])
    if not feed.has_neutral:  # a reference, through which no current can flow
        yield f"New Reactor.reference phases=1 bus1=b.{node(feed.pair.second)} R=1 X=0"
    elif not math.isinf(abs(neutral)):
        yield f"New Reactor.neutral phases=1 bus1=b.4 bus2=b.0 R={neutral.real!r} X={neutral.imag!r}"
    idler_star = 4 if circuit["idler"][0] is not None else 5
    yield from machine_lines("idler", circuit["idler"], idler_star, feed)
    yield from machine_lines("motor", circuit["motor"], 6, feed)
    for kind, values in (("farads", circuit["farads"]), ("loads", circuit["loads"])):
        for pair, value in values.items():
            yield branch_line(kind, pair, value)


def branch_line(kind, pair, value):
    ends = f"phases=1 bus1=b.{node(pair.first)} bus2=b.{node(pair.second)}"
    name = str(pair).replace("-", "")
    if kind == "farads":
        return f"New Capacitor.c{name} {ends} kv=1 cuf=[{1e6 * value!r}]"
    return f"New Reactor.z{name} {ends} R={value.real!r} X={value.imag!r}"


def theirs(feed, circuit, neutral):
    """Potentials of L1 L2 L3 N as OpenDSS finds them; a conductor that is not there stands at the reference."""
    for line in script(feed, circuit, neutral):
        dss.Text.Command(line)
    dss.Text.Command("Solve mode=direct")
    dss.Circuit.SetActiveBus("b")
    flat = np.array(dss.Bus.Voltages())
    found = dict(zip(dss.Bus.Nodes(), flat[0::2] + 1j * flat[1::2], strict=True))
    return np.array([found.get(number, 0j) for number in range(1, 5)])


def voltages(potentials, feed):
    """Across every pair there is, and from the neutral to the bond."""
    pairs = PAIRS if feed.has_neutral else LINE
    across = [potentials[node(pair.first) - 1] - potentials[node(pair.second) - 1] for pair in pairs]
    return np.array([*across, potentials[3]] if feed.has_neutral else across)


def assert_the_same(feed, circuit, neutral):
    found = voltages(ours(feed, circuit, neutral), feed)
    wanted = voltages(theirs(feed, circuit, neutral), feed)
    assert found == pytest.approx(wanted, rel=RELATIVE, abs=RELATIVE * 0.05 * feed.voltage)


FEEDS = [
    pytest.param(SHED, "N", id="L1-N feed, star point on N"),
    pytest.param(BACKWARDS, "N", id="L2-N feed, star point on N, rotation L1-L3-L2"),
    pytest.param(HOUSE, "floating", id="split-phase, N the centre tap, star point floating"),
    pytest.param(TRANSFORMER, "floating", id="two lines without N, star point floating"),
]


@pytest.mark.parametrize(("feed", "star_point"), FEEDS)
def test_every_voltage_is_that_of_another_solver(feed, star_point):
    rng = np.random.default_rng(20)
    for _ in range(CIRCUITS_A_FEED):
        circuit = random_circuit(rng, feed, star_point)
        assert_the_same(feed, circuit, circuit["neutral"])


@pytest.mark.parametrize(("feed", "star_point"), [(SHED, "N"), (HOUSE, "floating")])
def test_every_voltage_is_that_of_another_solver_with_the_neutral_lost(feed, star_point):
    rng = np.random.default_rng(21)
    for _ in range(20):
        circuit = random_circuit(rng, feed, star_point)
        for pair in PAIRS[3:]:  # something must hold N, or it is nowhere
            circuit["loads"].setdefault(pair, impedance(rng, 5.0, 200.0))
        assert_the_same(feed, circuit, math.inf)


def test_half_the_loads_of_a_house_rise_when_its_neutral_is_lost():
    """1 kW and 3 kW at 120 V in series across 240 V: 180 and 60 V, by Ohm's law (derived)."""
    pairs = PAIRS[3:5]
    loads = Branches(pairs, np.array([1000.0, 3000.0]) / 120.0**2 + 0j)
    found = linear_potentials(utility(HOUSE, 0.0, math.inf), loads, np.array([[0.0, 0.02 - 0.07j, 0.3 - 0.7j]]))
    assert np.abs(voltages(found, HOUSE)[3:5]) == pytest.approx([180.0, 60.0], rel=1e-9)
