"""Propagation of uncertainty against the GUM's example H.2 (JCGM 100, Annex H.2; figures as in the GTC package)."""

import numpy as np
import pytest

from idlerwatch.core.electrical.uncertainty import (
    numerical_jacobian,
    propagate_covariance,
    standard_uncertainty_of_class,
)

VOLTS = np.array([5.007, 4.994, 5.005, 4.990, 4.999])
AMPERES = 1e-3 * np.array([19.663, 19.639, 19.640, 19.685, 19.678])
RADIANS = np.array([1.0456, 1.0438, 1.0468, 1.0428, 1.0433])


def impedances(inputs):
    volts, amperes, radians = np.moveaxis(inputs, -1, 0)
    whole = volts / amperes
    return np.stack([whole * np.cos(radians), whole * np.sin(radians), whole], axis=-1)


@pytest.fixture
def means():
    return np.array([VOLTS.mean(), AMPERES.mean(), RADIANS.mean()])


@pytest.fixture
def covariance():
    return np.cov([VOLTS, AMPERES, RADIANS]) / len(VOLTS)


def test_resistance_reactance_and_impedance_of_annex_h2(means, covariance):
    jacobian = numerical_jacobian(impedances, means, 1e-6 * means)
    found = propagate_covariance(jacobian, covariance)
    standard = np.sqrt(np.diag(found))
    assert impedances(means) == pytest.approx([127.7322, 219.8465, 254.2597], rel=1e-5)
    assert standard == pytest.approx([0.071071, 0.295582, 0.236336], rel=1e-4)
    correlations = found / np.outer(standard, standard)
    assert correlations[np.triu_indices(3, 1)] == pytest.approx([-0.58843, -0.48526, 0.99251], abs=1e-4)


def test_correlation_must_not_be_dropped(means, covariance):
    """Readings of one meter correlate; without that u(R) would come out 0.19454 instead of 0.071071 (derived)."""
    jacobian = numerical_jacobian(impedances, means, 1e-6 * means)
    without = np.sqrt(np.diag(propagate_covariance(jacobian, np.diag(np.diag(covariance)))))
    assert without == pytest.approx([0.19454, 0.20091, 0.20408], rel=1e-4)
    assert abs(without[0] - 0.071071) > 0.1


def test_a_class_limit_is_a_rectangular_distribution():
    """JCGM 100, 4.3.7: half-width over the root of three."""
    assert float(standard_uncertainty_of_class(0.005)) == pytest.approx(0.0028868, abs=5e-8)
