"""Symmetrical components against textbook examples (``sequence.toml`` names each) and the identities they must obey."""

import cmath
import math
import tomllib
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from idlerwatch.core.electrical.power import neutral_current
from idlerwatch.core.electrical.sequence import (
    phasors_from_sequence,
    sequence_components,
    unbalance_factor,
    zero_sequence_factor,
)

DATA = tomllib.loads((Path(__file__).parent / "sequence.toml").read_text())
OF_TURN = cmath.exp(2j * math.pi / 3.0)


def polar(pairs):
    return np.array([cmath.rect(magnitude, math.radians(degrees)) for magnitude, degrees in pairs])


def rect(pairs):
    return np.array([complex(*pair) for pair in pairs])


def inputs(row):
    return polar(row["phasors"]) if "phasors" in row else rect(row["rect"])


@pytest.mark.parametrize("row", DATA["row"], ids=lambda row: row["source"])
def test_components_are_those_of_the_example(row):
    found = sequence_components(inputs(row))
    if "sequence" in row:
        assert np.abs(found) == pytest.approx([magnitude for magnitude, _ in row["sequence"]], abs=6e-4)
        assert found == pytest.approx(polar(row["sequence"]), rel=2e-4, abs=2e-3)
    else:
        assert found == pytest.approx(rect(row["sequence_rect"]), abs=6e-3)
    if "neutral" in row:
        assert float(neutral_current(inputs(row))) == pytest.approx(row["neutral"], abs=6e-4)


@pytest.mark.parametrize("row", DATA["inverse"], ids=lambda row: row["source"])
def test_phasors_are_those_of_the_example(row):
    components = rect(row["sequence_rect"]) if "sequence_rect" in row else polar(row["sequence_polar"])
    assert phasors_from_sequence(components) == pytest.approx(polar(row["phasors"]), rel=1e-4, abs=3e-2)


def test_the_factors_of_a_nearly_even_set():
    """SYMCOM's example: V2/V1 6.789 %, V0/V1 9.930 %; two conductors swapped exchange V1 and V2."""
    components = sequence_components(polar([[147, 13], [150, 237], [154, 129]]))
    assert float(unbalance_factor(components)) == pytest.approx(0.06789, abs=5e-6)
    assert float(zero_sequence_factor(components)) == pytest.approx(0.09930, abs=5e-6)
    swapped = sequence_components(polar([[147, 13], [154, 129], [150, 237]]))
    assert swapped == pytest.approx(components[[0, 2, 1]])


def test_unequal_resistors_in_delta_on_an_even_supply():
    """R 5/10/20 ohm between lines of 100 V: 20.2073 A and 7.6376 A (Mehta 18.10, Chakrabarti 3.3.4)."""
    lines = 100.0 * np.array([1.0, OF_TURN**2, OF_TURN])
    branches = lines / np.array([5.0, 10.0, 20.0])
    currents = branches - branches[[2, 0, 1]]
    assert np.abs(currents) == pytest.approx([22.9129, 26.4575, 13.2288], abs=6e-5)
    assert np.abs(sequence_components(currents)) == pytest.approx([0.0, 20.2073, 7.6376], abs=6e-5)


complexes = st.complex_numbers(max_magnitude=1e3, allow_nan=False, allow_infinity=False)
triples = st.tuples(complexes, complexes, complexes).map(np.array)


@given(triples, triples, st.floats(0.0, 6.3))
def test_identities(voltages, currents, angle):
    v, i = sequence_components(voltages), sequence_components(currents)
    assert phasors_from_sequence(v) == pytest.approx(voltages, abs=1e-9)
    assert voltages.sum() == pytest.approx(3.0 * v[0], abs=1e-9)
    assert (voltages * currents.conj()).sum() == pytest.approx(3.0 * (v * i.conj()).sum(), abs=1e-6)
    turn = cmath.exp(1j * angle)
    assert sequence_components(turn * voltages) == pytest.approx(turn * v, abs=1e-9)
    lines = sequence_components(voltages - voltages[[1, 2, 0]])
    assert np.abs(lines) == pytest.approx(np.abs([0.0, math.sqrt(3.0) * v[1], math.sqrt(3.0) * v[2]]), abs=1e-9)
