"""Apparent power in three definitions against IEEE Std 1459's formulas on published examples (``power.toml``)."""

import cmath
import math
import tomllib
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from idlerwatch.core.electrical.power import (
    arithmetic_apparent_power,
    effective_apparent_power,
    effective_apparent_power_without_neutral,
    neutral_current,
    power_factor,
    two_wattmeter_power,
    vector_apparent_power,
)

DATA = tomllib.loads((Path(__file__).parent / "power.toml").read_text())
TURNS = np.exp(-2j * np.pi * np.arange(3) / 3.0)


def polar(pairs):
    return np.array([cmath.rect(magnitude, math.radians(degrees)) for magnitude, degrees in pairs])


def powers(voltages, currents):
    """Complex powers, and the magnitudes that meters would give."""
    lines = np.abs(voltages - np.roll(voltages, -1))
    return voltages * currents.conj(), np.abs(voltages), lines, np.abs(currents)


@pytest.mark.parametrize("row", DATA["row"], ids=lambda row: row["source"])
def test_apparent_powers_of_the_example(row):
    voltages, currents = row["voltage"] * TURNS, polar(row["currents"])
    each, legs, lines, amperes = powers(voltages, currents)
    assert each.real.sum() == pytest.approx(row["active"], rel=1e-4)
    assert float(arithmetic_apparent_power(legs, amperes)) == pytest.approx(row["arithmetic"], rel=1e-4)
    assert float(vector_apparent_power(each.real, each.imag)) == pytest.approx(row["vector"], rel=1e-4)
    through_neutral = neutral_current(currents)
    assert float(through_neutral) == pytest.approx(row["neutral"], abs=6e-3)
    assert float(effective_apparent_power(legs, lines, amperes, through_neutral)) == pytest.approx(
        row["effective"], rel=1e-4
    )


def test_the_closed_form_of_a_resistor_between_two_lines():
    """Power factors sqrt(3)/2 arithmetic, 1 vector, 1/sqrt 2 effective (derived)."""
    each, legs, lines, amperes = powers(127.0 * TURNS, polar([[22.727, 30], [22.727, -150], [0, 0]]))
    active = each.real.sum()
    assert power_factor(active, arithmetic_apparent_power(legs, amperes)) == pytest.approx(math.sqrt(3) / 2, rel=1e-4)
    assert power_factor(active, vector_apparent_power(each.real, each.imag)) == pytest.approx(1.0, rel=1e-6)
    effective = effective_apparent_power_without_neutral(lines, amperes)
    assert power_factor(active, effective) == pytest.approx(1 / math.sqrt(2), rel=1e-6)


finite = st.floats(-50.0, 50.0, allow_nan=False)
some = st.lists(st.tuples(finite, finite), min_size=3, max_size=3).map(
    lambda pairs: np.array([complex(*p) for p in pairs])
)


@given(some, some)
def test_effective_is_not_less_than_arithmetic_nor_that_than_vector_nor_that_than_active(off, currents):
    voltages = 230.0 * TURNS + (off - off.mean())  # no zero sequence: else the first two need no order
    each, legs, lines, amperes = powers(voltages, currents)
    through = neutral_current(currents)
    ranked = [
        float(effective_apparent_power(legs, lines, amperes, through)),
        float(arithmetic_apparent_power(legs, amperes)),
        float(vector_apparent_power(each.real, each.imag)),
        abs(each.real.sum()),
    ]
    assert ranked[0] >= ranked[1] - 1e-6
    assert ranked[1] >= ranked[2] - 1e-6
    assert ranked[2] >= ranked[3] - 1e-6


@given(some)
def test_two_wattmeters_with_a_common_line_measure_the_power_of_three_wires(currents):
    """Blondel's theorem, by its definition: sum of leg powers, any reference."""
    currents = currents - currents.mean()
    voltages = 230.0 * TURNS
    first = ((voltages[0] - voltages[1]) * currents[0].conjugate()).real
    second = ((voltages[2] - voltages[1]) * currents[2].conjugate()).real
    assert two_wattmeter_power(first, second) == pytest.approx((voltages * currents.conj()).real.sum(), abs=1e-6)
