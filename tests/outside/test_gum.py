"""Propagation of uncertainty against the GUM's example H.2 (JCGM 100, Annex H.2; figures as in the GTC package).

`propagate` takes independent inputs. Readings that correlate, as those of one meter do, follow from independent ones (a
root of their covariance, as from the gains that a meter's figures share); moving those carries the correlation along.
"""

import math

import numpy as np
import pytest

from idlerwatch.core.watch.channel import Measured
from idlerwatch.core.watch.plan import NOISE, gain_uncertainty
from idlerwatch.core.watch.propagate import propagate

READINGS = np.array(
    [
        [5.007, 4.994, 5.005, 4.990, 4.999],
        [0.019663, 0.019639, 0.019640, 0.019685, 0.019678],
        [1.0456, 1.0438, 1.0468, 1.0428, 1.0433],
    ]
)
"""Volts, amperes and radians of annex H.2."""
MEANS = READINGS.mean(axis=1)
COVARIANCE = np.cov(READINGS) / READINGS.shape[1]
QUANTITIES = {"resistance": (127.7322, 0.071071), "reactance": (219.8465, 0.295582), "impedance": (254.2597, 0.236336)}


def of(quantity, volts, amperes, radians):
    turn = {"resistance": np.cos(radians), "reactance": np.sin(radians), "impedance": 1.0}[quantity]
    return volts / amperes * turn


@pytest.mark.parametrize(("quantity", "value", "standard"), [(name, *told) for name, told in QUANTITIES.items()])
def test_resistance_reactance_and_impedance_of_annex_h2(quantity, value, standard):
    root = np.linalg.cholesky(COVARIANCE)

    def from_independent(causes):
        return of(quantity, *np.moveaxis(MEANS + causes @ root.T, -1, 0))

    found = propagate(from_independent, (Measured(0.0, 1.0),) * 3)
    assert found.value == pytest.approx(value, rel=1e-5)
    # moved by a whole standard uncertainty, not by an infinitesimal one: second order shows in the third digit
    assert found.standard == pytest.approx(standard, rel=1e-3)


@pytest.mark.parametrize(
    ("quantity", "without"), [("resistance", 0.19454), ("reactance", 0.20091), ("impedance", 0.20408)]
)
def test_correlation_must_not_be_dropped(quantity, without):
    """Taken as independent, the same readings give another answer, for the resistance 2.7 times too much (derived)."""
    inputs = tuple(map(Measured, MEANS.tolist(), np.sqrt(np.diag(COVARIANCE)).tolist()))
    found = propagate(lambda values: of(quantity, *np.moveaxis(values, -1, 0)), inputs)
    assert found.standard == pytest.approx(without, rel=1e-3)
    assert abs(found.standard / QUANTITIES[quantity][1] - 1.0) > 0.1


def test_a_class_limit_is_a_rectangular_distribution():
    """JCGM 100, 4.3.7: half-width over the root of three; the repeatability beside it adds by squares."""
    assert gain_uncertainty(0.005) == pytest.approx(math.hypot(0.0028868, NOISE), abs=5e-8)
