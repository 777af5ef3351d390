"""What each capacitor still has: recursive least squares over load states, weeks long.

Once the circuit was learned, what a capacitor has lost since shows in the balance of every later load state. The losses
are estimated as a random walk; all that was uncertain when the circuit was learned is uncertain still, and in the same
way in every state, so it is carried along with its correlations but never estimated again (a Schmidt-Kalman filter): a
circuit is not silently re-learned. Cans whose losses act alike (across one pair, or delta-connected against the
idler's own susceptance) keep a wide uncertainty each: they are not separable, and are said to be so.

References
----------
S. F. Schmidt 1966; R. E. Kalman 1960; A. H. Jazwinski, Stochastic Processes and Filtering Theory, 1970, 8.4.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from idlerwatch.core.converter.balance import Balance
from idlerwatch.core.converter.circuit import Floats, Positions, Sample, Wiring
from idlerwatch.core.converter.recover import ANGLE_PRIOR, Circuit, row_spreads

PRIOR: Final = 0.1
"""Standard deviation of what a capacitor may have lost when tracking begins, of its capacitance."""
WANDERS: Final = 0.02
"""Standard deviation by which a capacitor may change in thirty days."""
MONTH_S: Final = 30.0 * 86400.0
DOUBT: Final = 2.0
"""A single sample's meters look at slightly different instants: the discrepancy counts so much more."""
SEPARABLE: Final = 0.06
"""A capacitor known no better than this, of its capacitance, is not separable from others."""


@dataclass(frozen=True, slots=True)
class Tracking:
    """Changes since the circuit was learned.

    Attributes
    ----------
    change, covariance : (cans,), (cans, cans)
        Of each capacitance, of its marked one; negative is a loss. [1]
    cross : (cans, parameters)
        Covariance with the parameters, which stay as they were learned.
    states : int
        Load states it rests on.
    """

    change: Floats
    covariance: Floats
    cross: Floats
    states: int = 0

    @property
    def standards(self) -> Floats:
        """Standard uncertainty of each change: (cans,). [1]"""
        return np.asarray(np.sqrt(np.diag(self.covariance)), dtype=np.float64)


def begin_tracking(wiring: Wiring) -> Tracking:
    """Return what is known of the changes before the first state: nothing but that they are seldom large."""
    cans = len(wiring.cans)
    return Tracking(np.zeros(cans), PRIOR**2 * np.eye(cans), np.zeros((cans, len(wiring.names))))


def track(
    tracking: Tracking, wiring: Wiring, positions: Positions, sample: Sample, circuit: Circuit, *, elapsed: float
) -> Tracking:
    """Return the tracking after one load state.

    Parameters
    ----------
    positions
        One: the position the switches have.
    sample
        One, best the mean over the state.
    circuit
        As it was learned.
    elapsed
        Since the state before. [s]

    References
    ----------
    Schmidt 1966.
    """
    residuals, by_parameter, spread = _innovation(wiring, positions, sample, circuit, tracking.change)
    start = wiring.at["can_0"]
    own = by_parameter[start : start + len(wiring.cans)].T
    rest = by_parameter.T
    covariance = tracking.covariance + WANDERS**2 * max(elapsed, 0.0) / MONTH_S * np.eye(len(wiring.cans))
    cross = tracking.cross
    with_residuals = covariance @ own.T + cross @ rest.T
    mixed = own @ cross @ rest.T
    total = own @ covariance @ own.T + mixed + mixed.T + rest @ circuit.covariance @ rest.T + spread
    gain = np.linalg.solve(total, with_residuals.T).T
    return Tracking(
        change=tracking.change - gain @ residuals,
        covariance=_symmetric(covariance - gain @ with_residuals.T),
        cross=cross - gain @ (own @ cross + rest @ circuit.covariance),
        states=tracking.states + 1,
    )


def _innovation(
    wiring: Wiring, positions: Positions, sample: Sample, circuit: Circuit, change: Floats
) -> tuple[Floats, Floats, Floats]:
    """Return residuals (rows,), their slopes by the parameters (p, rows), and their own covariance.

    The free angles are found first; what they take up of the residuals is noise without limit for the rest.
    """
    parameters = circuit.parameters.copy()
    start = wiring.at["can_0"]
    parameters[start : start + len(wiring.cans)] += change
    seen = Balance(wiring, positions, np.zeros(1, dtype=np.int64), parameters).seen(sample)
    nominal = np.array([[wiring.directions[leg] for leg in wiring.free]])
    diagonal = (DOUBT * circuit.discrepancy) ** 2 + row_spreads(wiring, sample)[0] ** 2
    angles = nominal
    for _ in range(4):
        point = seen.at(angles)
        by_angle, residuals = point.by_angle()[0], point.residuals()[0]
        weighted = by_angle / diagonal
        normal = weighted @ by_angle.T + np.eye(len(by_angle)) / ANGLE_PRIOR**2
        pull = weighted @ residuals + (angles - nominal)[0] / ANGLE_PRIOR**2
        angles = angles - np.linalg.solve(normal, pull)
    point = seen.at(angles)
    by_angle, by_parameter = point.by_angle()[0], point.by_parameter()[0]
    noise = by_parameter.T @ (circuit.noise[:, None] ** 2 * by_parameter)
    # a residual at the fitted angles is one at the nominal angles, less what the fit took: their prior's width comes in
    unfitted = point.residuals()[0] + (nominal - angles)[0] @ by_angle
    return unfitted, by_parameter, np.diag(diagonal) + noise + ANGLE_PRIOR**2 * by_angle.T @ by_angle


def _symmetric(matrix: Floats) -> Floats:
    half: Floats = 0.5 * (matrix + matrix.T)
    return half


def is_separable(tracking: Tracking) -> tuple[bool, ...]:
    """Return for each capacitor whether its change is known apart from all others'."""
    return tuple((tracking.standards < SEPARABLE).tolist())
