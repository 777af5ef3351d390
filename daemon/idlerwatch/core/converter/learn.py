"""Learning a converter's circuit from load states seen by its own meters.

Angles and parameters are found together: the weighted sum of squared residuals of all states, with a prior for every
parameter (plate, class limits, marking) and for every angle, is made least by damped Gauss-Newton steps
(Levenberg-Marquardt); the angles of each state are eliminated first (Schur complement), so that one step costs one
small system. What the data say little of keeps its prior and its width: the joint covariance says so.

References
----------
D. W. Marquardt 1963; J. Nocedal and S. Wright, Numerical Optimization, 2006, chapter 10; A. Abur and A. Gomez
Exposito, 2004, chapter 7 (estimation of parameters).
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from idlerwatch.core.converter.balance import Balance
from idlerwatch.core.converter.circuit import Floats, Positions, Sample, Wiring
from idlerwatch.core.converter.recover import ANGLE_PRIOR, row_spreads

LONGEST_SEARCH: Final = 40
SETTLED: Final = 0.02
"""A step that moves no parameter by more than this share of its standard deviation is the last."""


@dataclass(frozen=True, slots=True)
class Recorded:
    """Load states: one row of `sample` each, best the mean of many, and which position the switches then had."""

    sample: Sample
    positions: Positions
    which: NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Prior:
    """What is believed of each parameter before: mean and standard deviation, (p,)."""

    mean: Floats
    standard: Floats


@dataclass(frozen=True, slots=True)
class Learned:
    """What the states say of the parameters together with the prior.

    Attributes
    ----------
    parameters, covariance : (p,), (p, p)
    angles : (states, free)
        Of each state. [rad]
    chi_square : float
        Weighted sum of squares at the end, priors included; about the number of rows where the model holds. [1]
    degrees_of_freedom : int
        Rows of all states; each parameter and angle has its own prior.
    has_converged : bool
    condition : float
        Of the parameters' information, each in units of its prior. [1]
    """

    parameters: Floats
    covariance: Floats
    angles: Floats
    chi_square: float
    degrees_of_freedom: int
    has_converged: bool
    condition: float


def learn(wiring: Wiring, recorded: Recorded, prior: Prior, discrepancy: Floats) -> Learned:
    """Find the parameters that explain all states best.

    Parameters
    ----------
    recorded
        The load states.
    prior
        Of the parameters.
    discrepancy : (rows,)
        Standard deviation of each row: what the model leaves out. [A, V]

    References
    ----------
    Marquardt 1963.
    """
    search = _Search(wiring, recorded, prior, discrepancy)
    state = search.begin()
    damping, has_converged = 1e-3, False
    for _ in range(LONGEST_SEARCH):
        equations = search.equations(state)
        trial, step = search.step(state, equations, damping)
        if trial.cost <= state.cost:
            gained, state = state.cost - trial.cost, trial
            damping = max(damping * 0.1, 1e-9)
            if np.abs(step / prior.standard).max() < SETTLED and gained < 0.1:
                has_converged = True
                break
        elif damping > 1e6:
            break
        else:
            damping *= 10.0
    return search.end(state, has_converged=has_converged)


@dataclass(frozen=True, slots=True)
class _State:
    parameters: Floats
    angles: Floats
    residuals: Floats
    cost: float


@dataclass(frozen=True, slots=True)
class _Equations:
    """Normal equations after the angles were eliminated, and what gives them back."""

    reduced: Floats
    gradient: Floats
    of_angles: Floats
    angle_gradient: Floats
    mixed: Floats


class _Search:
    def __init__(self, wiring: Wiring, recorded: Recorded, prior: Prior, discrepancy: Floats) -> None:
        sample = recorded.sample
        self._wiring, self._positions, self._which = wiring, recorded.positions, recorded.which
        self._sample, self._prior = sample, prior
        self._weights = 1.0 / (discrepancy**2 + row_spreads(wiring, sample) ** 2)
        self._nominal = np.array([wiring.directions[leg] for leg in wiring.free])

    def begin(self) -> _State:
        angles = np.broadcast_to(self._nominal, (len(self._which), len(self._nominal)))
        return self._at(self._prior.mean, angles)

    def _at(self, parameters: Floats, angles: Floats) -> _State:
        balance = Balance(self._wiring, self._positions, self._which, parameters)
        residuals = balance.seen(self._sample).at(angles).residuals()
        cost = float((residuals**2 * self._weights).sum() + (((angles - self._nominal) / ANGLE_PRIOR) ** 2).sum())
        cost += float((((parameters - self._prior.mean) / self._prior.standard) ** 2).sum())
        return _State(parameters, angles, residuals, cost)

    def equations(self, state: _State) -> _Equations:
        balance = Balance(self._wiring, self._positions, self._which, state.parameters)
        point = balance.seen(self._sample).at(state.angles)
        by_angle, by_parameter = point.by_angle(), point.by_parameter()
        weighted = by_parameter * self._weights[:, None, :]
        of_angles = (by_angle * self._weights[:, None, :]) @ by_angle.swapaxes(1, 2)
        of_angles = of_angles + np.eye(len(self._nominal)) / ANGLE_PRIOR**2
        angle_gradient = (by_angle * (self._weights * state.residuals)[:, None, :]).sum(axis=-1)
        angle_gradient = angle_gradient + (state.angles - self._nominal) / ANGLE_PRIOR**2
        mixed = weighted @ by_angle.swapaxes(1, 2)
        solved = np.linalg.solve(of_angles, mixed.swapaxes(1, 2))
        reduced = (weighted @ by_parameter.swapaxes(1, 2) - mixed @ solved).sum(axis=0)
        gradient = (weighted @ state.residuals[..., None])[..., 0]
        gradient = (gradient - (solved.swapaxes(1, 2) @ angle_gradient[..., None])[..., 0]).sum(axis=0)
        gradient = gradient + (state.parameters - self._prior.mean) / self._prior.standard**2
        reduced = reduced + np.diag(1.0 / self._prior.standard**2)
        return _Equations(reduced, gradient, of_angles, angle_gradient, mixed)

    def step(self, state: _State, equations: _Equations, damping: float) -> tuple[_State, Floats]:
        damped = equations.reduced + damping * np.diag(np.diag(equations.reduced))
        step = -np.asarray(np.linalg.solve(damped, equations.gradient), dtype=np.float64)
        pull = equations.angle_gradient + equations.mixed.swapaxes(1, 2) @ step
        turn = -np.linalg.solve(equations.of_angles, pull[..., None])[..., 0]
        return self._at(state.parameters + step, state.angles + np.clip(turn, -0.2, 0.2)), step

    def end(self, state: _State, *, has_converged: bool) -> Learned:
        equations = self.equations(state)
        scale = np.outer(self._prior.standard, self._prior.standard)
        return Learned(
            parameters=state.parameters,
            covariance=np.asarray(np.linalg.inv(equations.reduced), dtype=np.float64),
            angles=state.angles,
            chi_square=state.cost,
            degrees_of_freedom=int((self._weights > 1e-6).sum()),
            has_converged=has_converged,
            condition=float(np.linalg.cond(equations.reduced * scale)),
        )
