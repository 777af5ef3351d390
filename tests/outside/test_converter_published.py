"""Whole converters against published and derived figures (``converter_published.toml``) and closed forms."""

import cmath
import math
import tomllib
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from idlerwatch.core.conductors import Feed, read_pair
from idlerwatch.core.converter.machine import EquivalentCircuit, Iron, sequence_admittances
from idlerwatch.core.converter.nameplate import Nameplate, typical_machine
from idlerwatch.core.converter.network import pair_matrix, potentials_behind
from idlerwatch.core.converter.steady import (
    NODES,
    Branches,
    Machines,
    capacitors,
    line_voltages,
    linear_potentials,
    steady_state,
    utility,
)
from idlerwatch.core.electrical.sequence import sequence_components, unbalance_factor
from idlerwatch.core.electrical.unbalance import line_voltage_unbalance_rate

DATA = tomllib.loads((Path(__file__).parent / "converter_published.toml").read_text())
LINE_CANS = tuple(read_pair(name) for name in ("L3-L1", "L2-L3"))
SHED_CANS = tuple(read_pair(name) for name in ("L2-L3", "L3-L1", "L2-N", "L3-N"))


def two_lines(volts):
    return utility(Feed(read_pair("L1-L2"), volts, neutral="none"), 0.0, math.inf)


def unbalance(potentials):
    return float(unbalance_factor(sequence_components(line_voltages(potentials))))


def across(potentials, pairs):
    return np.array([potentials[NODES.index(p.first)] - potentials[NODES.index(p.second)] for p in pairs])


def balanced_current(degrees, ratio=0.08, zero=0.0):
    """Windings that take I/V = ratio lagging by an angle; the other sequences as of a motor."""
    taken = cmath.rect(ratio, -math.radians(degrees))
    return np.array([[zero, taken, 6.0 * abs(taken) * cmath.exp(-1.1j)]])


@pytest.mark.parametrize("row", DATA["balance"], ids=lambda row: f"{row['degrees']} degrees")
def test_exact_balance_on_two_lines(row):
    star, amperes = 230.0 / math.sqrt(3.0), 10.0
    load = balanced_current(row["degrees"], amperes / star)
    cans = capacitors(LINE_CANS, 1e-6 * np.array([row["l3_l1"], row["l2_l3"]]), 50.0)
    nodes = linear_potentials(two_lines(230.0), cans, load)
    assert np.abs(line_voltages(nodes)) == pytest.approx([230.0] * 3, abs=1e-3)
    assert unbalance(nodes) < 1e-5  # microfarads are printed to a thousandth
    var = (np.abs(across(nodes, LINE_CANS)) ** 2 * cans.admittances.imag).sum()
    power = 3.0 * star**2 * complex(load[0, 1]).conjugate()
    assert var == pytest.approx(row["capacitor_var"], abs=0.02)
    assert power.real == pytest.approx(row["watts"], abs=0.02)
    assert power.imag == pytest.approx(row["machine_var"], abs=0.02)


@given(st.floats(20.0, 90.0), st.floats(0.01, 0.5))
def test_two_capacitors_balance_any_current_on_two_lines(degrees, ratio):
    """(2/3)(I/V) sin(phi +- 60 degrees) on the leading and the lagging pair; substitution leaves nothing (derived)."""
    susceptances = [2.0 / 3.0 * ratio * math.sin(math.radians(degrees + turn)) for turn in (60.0, -60.0)]
    branches = Branches(LINE_CANS, 1j * np.array(susceptances))
    assert unbalance(linear_potentials(two_lines(400.0), branches, balanced_current(degrees, ratio))) < 1e-10


@given(st.floats(20.0, 90.0), st.floats(0.01, 0.5), st.floats(0.1, 3.0))
def test_four_capacitors_balance_any_current_on_a_leg_and_the_neutral(degrees, ratio, zero):
    """Closed form with g = (2/sqrt 3)(I/V) cos phi; V0 and V2 both vanish (derived)."""
    lag = math.radians(degrees)
    g, q = 2.0 / math.sqrt(3.0) * ratio * math.cos(lag), ratio * math.sin(lag)
    branches = Branches(SHED_CANS, 1j * np.array([g, 2.0 * g, q - 1.5 * g, q - 4.5 * g]))
    supply = utility(Feed(read_pair("L1-N"), 230.0), 0.0, 0.0)
    nodes = linear_potentials(supply, branches, balanced_current(degrees, ratio, zero - 1.5j * zero))
    zero_sequence, positive, negative = sequence_components(nodes[:3] - nodes[3])
    assert positive == pytest.approx(230.0, rel=1e-9)
    assert abs(zero_sequence) < 230.0 * 1e-10
    assert abs(negative) < 230.0 * 1e-10


def test_the_four_are_capacitors_only_below_a_power_factor_of_nineteen_hundredths():
    """q = 4.5 g: tan phi = 4.5 * 2/sqrt 3 (derived)."""
    assert math.cos(math.atan(4.5 * 2.0 / math.sqrt(3.0))) == pytest.approx(0.19, abs=2e-3)


@pytest.mark.parametrize("row", DATA["idler"]["row"], ids=lambda row: f"slip {row['slip']}, {row['microfarads']} uF")
def test_the_textbook_machine_as_an_idler(row):
    circuit = EquivalentCircuit(*(np.array([value]) for value in DATA["idler"]["constants"]))
    windings = sequence_admittances(circuit, np.array([row["slip"]]), 0.0)
    cans = capacitors(LINE_CANS, 1e-6 * np.array(row["microfarads"]), 60.0)
    supply = two_lines(220.0)
    nodes = linear_potentials(supply, cans, windings)
    lines = np.abs(line_voltages(nodes))
    assert lines == pytest.approx(row["volts"], abs=6e-3)
    assert 100.0 * float(line_voltage_unbalance_rate(lines)) == pytest.approx(row["lvur"], abs=2e-3)
    assert 100.0 * unbalance(nodes) == pytest.approx(row["vuf"], abs=2e-3)
    if "amperes" in row:
        can_currents = cans.admittances * across(nodes, LINE_CANS)
        winding = windings[0] * sequence_components(nodes[:3])
        current = winding.sum() - can_currents[0]  # L1: the winding's, and out to L3
        power = (nodes[0] - nodes[1]) * current.conjugate()
        assert np.abs(can_currents) == pytest.approx(row["can_amperes"], abs=6e-3)
        assert abs(current) == pytest.approx(row["amperes"], abs=6e-4)
        assert power.real / abs(power) == pytest.approx(row["factor"], abs=6e-5)
        assert ("lag" if power.imag > 0.0 else "lead") == row["side"]


@pytest.mark.parametrize("row", DATA["steinmetz"]["row"], ids=lambda row: f"load {row['k']}")
def test_the_induction_phase_converter_of_steinmetz(row):
    data = DATA["steinmetz"]
    exciting, impedance, load = (complex(*data[name]) for name in ("exciting", "impedance", "load"))
    taken = min(row["k"], 1e9) * load
    matrix = pair_matrix(2, [(0, -1), (0, 1), (1, -1)], np.array([exciting, 0.5 / impedance, exciting + taken]))
    nodes = potentials_behind(matrix, np.array([100.0, 0.0]), np.array([0.0, np.inf]))
    current = complex((matrix @ nodes)[0])
    volts, amperes = abs(nodes[1]), abs(nodes[1] * taken)
    assert volts == pytest.approx(row["volts"], abs=6e-4)
    assert amperes == pytest.approx(row["load_amperes"], abs=6e-4)
    assert abs(current) == pytest.approx(row["supply_amperes"], abs=6e-4)
    assert volts * amperes / (100.0 * abs(current)) == pytest.approx(row["apparent_efficiency"], abs=6e-5)


def spread(typical, rng, count):
    """Machines about the nameplate's, each constant as uncertain as it is said to be: (count, 1)."""

    def some(name, value):
        return np.asarray(value) * np.exp(typical.relative.get(name, 0.0) * rng.standard_normal((count, 1)))

    names = ("stator_resistance", "stator_reactance", "magnetising_reactance", "rotor_resistance", "rotor_reactance")
    return Machines(
        EquivalentCircuit(
            *(some(name, getattr(typical.circuit, name)) for name in names),
            core_resistance=some("core_resistance", typical.circuit.core_resistance),
        ),
        Iron(some("saturation", typical.iron.saturation), typical.iron.reference_voltage[None]),
        np.zeros(1),
        some("friction", typical.friction),
    )


@pytest.mark.parametrize("row", DATA["shop"], ids=lambda row: row["source"])
def test_measured_idlers_lie_among_those_their_nameplates_allow(row):
    """Sign and size: each ratio within the middle 95 % of 2000 machines of 230 V, 60 Hz plates."""
    rng = np.random.default_rng(7)
    idlers = spread(typical_machine(Nameplate(row["kilowatts"], 230.0, 60.0)), rng, 2000)
    sides = np.stack([np.full(2000, row["microfarads"]), row["other_side"] * rng.random(2000)], axis=-1)
    cans = capacitors(LINE_CANS, 1e-6 * rng.permuted(sides, axis=-1), 60.0)
    state = steady_state(two_lines(row["volts"]), cans, idlers)
    ratios = np.sort(np.abs(line_voltages(state.potentials))[:, 1:], axis=-1)[:, ::-1] / row["volts"]
    low, high = np.nanpercentile(ratios, [2.5, 97.5], axis=0)
    for measured, least, most in zip(row["ratios"], low, high, strict=True):
        assert math.isnan(measured) or least < measured < most
    assert np.isfinite(ratios).all(axis=-1).mean() > 0.99
