"""Unbalance against worked examples of pages and books (``unbalance.toml`` names each), right and wrong ones."""

import tomllib
from pathlib import Path

import numpy as np
import pytest

from idlerwatch.core.conductors import LINE_PAIRS, NEUTRAL_PAIRS, Feed, Pair
from idlerwatch.core.electrical.unbalance import (
    line_voltage_unbalance_rate,
    phase_voltage_unbalance_rate,
    voltage_unbalance_factor,
)

DATA = tomllib.loads((Path(__file__).parent / "unbalance.toml").read_text())
ROWS = [pytest.param(row, id="/".join(map(str, row["voltages"]))) for row in DATA["row"]]


def rate_of(row):
    return float(line_voltage_unbalance_rate(np.array(row["voltages"], dtype=float)))


@pytest.mark.parametrize("row", ROWS)
def test_rate_and_factor_are_those_of_the_definitions(row):
    digits = 5e-6 if row["source"][0] == "h" else 5e-7
    assert rate_of(row) == pytest.approx(row["rate"], abs=digits)
    assert float(voltage_unbalance_factor(np.array(row["voltages"], dtype=float))) == pytest.approx(
        row["factor"], abs=digits
    )


@pytest.mark.parametrize("row", [row for row in ROWS if "printed" in row.values[0]])
def test_printed_values_hold_unless_the_source_is_wrong(row):
    half_a_digit = 0.5 * 10.0 ** -len(str(row["printed"]).partition(".")[2])
    assert (abs(rate_of(row) - row["printed"]) <= half_a_digit + 1e-9) is ("wrong" not in row)


@pytest.mark.parametrize("row", DATA["spread"])
def test_the_factor_lies_where_the_published_table_says(row):
    rate = row["rate"]
    # every triangle of that rate and mean 1: one deviation is the rate, the others share it the other way
    shares = np.linspace(0.0, 1.0, 2001)
    found = []
    for sign in (1.0, -1.0):
        triangles = np.stack([np.full_like(shares, 1.0 + sign * rate), 1.0 - sign * rate * shares,
                              1.0 - sign * rate * (1.0 - shares)], axis=-1)  # fmt: skip
        assert np.allclose(line_voltage_unbalance_rate(triangles), rate)
        found.append(voltage_unbalance_factor(triangles))
    assert np.nanmax(found) == pytest.approx(row["highest"], abs=0.0006)
    assert np.nanmin(found) == pytest.approx(row["lowest"], rel=0.04)
    assert np.nanmin(found) < row["lowest"], "the factor is not always the larger one"


def test_even_lines_of_a_centre_tapped_supply_look_uneven_to_neutral():
    """A perfect 240 V set with the neutral in the middle of one side reads 120/120/208 V (geometry)."""
    house = Feed(Pair("L1", "L2"), 240.0, neutral="centre-tap")
    to_neutral = np.array([house.nominal_voltage(pair) for pair in NEUTRAL_PAIRS])
    assert to_neutral == pytest.approx([120.0, 120.0, 207.846], abs=1e-3)
    assert float(phase_voltage_unbalance_rate(to_neutral)) == pytest.approx(0.3923, abs=5e-5)
    lines = np.array([house.nominal_voltage(pair) for pair in LINE_PAIRS])
    assert float(line_voltage_unbalance_rate(lines)) == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize(
    ("voltages", "factor"), [([100, 100, 200], 1.0), ([200, 200, 0], 1.0), ([100, 100, 200.1], np.nan)]
)
def test_a_flat_triangle_is_wholly_unbalanced_and_one_that_cannot_close_is_bad_data(voltages, factor):
    found = float(voltage_unbalance_factor(np.array(voltages, dtype=float)))
    assert found == pytest.approx(factor, nan_ok=True)


def test_many_at_once_equal_each_alone():
    rows = np.array([row["voltages"] for row in DATA["row"]], dtype=float)
    for function in (line_voltage_unbalance_rate, voltage_unbalance_factor, phase_voltage_unbalance_rate):
        assert np.array_equal(function(rows), [function(row) for row in rows])
