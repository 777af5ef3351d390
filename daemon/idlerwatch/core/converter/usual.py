"""What the generated legs would read with the circuit as it ought to be, at the load there is.

The currents that flow now, each relative to its own voltage, are put into the balance of the circuit in its expected
position; the generated legs' potentials, both magnitude and angle, are then what makes it hold (Newton). What was
measured against that is how far the converter is off its normal for this load.
"""

from dataclasses import replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from idlerwatch.core.converter.balance import Balance
from idlerwatch.core.converter.circuit import Complexes, Floats, Positions, Sample, Wiring

ITERATIONS: Final = 6
FARTHEST: Final = 0.3
"""Longest step in angle and logarithm of magnitude."""
SETTLED: Final = 1e-5
"""A solution that still moves by more is none."""


def usual_potentials(wiring: Wiring, positions: Positions, sample: Sample, parameters: Floats) -> Complexes:
    """Return the potentials of the legs to the hub that the expected circuit would have at these currents.

    Parameters
    ----------
    positions
        One: the position expected.
    sample
        n samples; the rays of the generated legs only begin the search.
    parameters : (p,)

    Returns
    -------
    (n, 3)
        NaN where there is none: the circuit could not carry such currents. [V]
    """
    generated = [channel.leg for channel in wiring.generated]
    count = len(sample.rays)
    balance = Balance(wiring, positions, np.zeros(count, dtype=np.int64), parameters)
    angles = np.tile([wiring.directions[leg] for leg in wiring.free], (count, 1))
    rays, step = sample.rays, np.zeros((count, 2 * len(generated)))
    for _ in range(ITERATIONS):
        step = _step(balance, replace(sample, rays=rays), angles, generated)
        angles = angles + step[:, : len(generated)]
        rays = rays.copy()
        rays[:, generated] *= np.exp(step[:, len(generated) :])
    potentials = balance.seen(replace(sample, rays=rays)).at(angles).potentials
    potentials[np.abs(step).max(axis=1) > SETTLED] = np.nan
    return potentials


def _step(balance: Balance, sample: Sample, angles: Floats, generated: list[int]) -> Floats:
    """Return Newton's step of angles and logarithms of magnitudes: (n, 2g)."""
    wiring = balance.wiring
    point = balance.seen(sample).at(angles)
    rows = 2 * len(generated)
    places = [wiring.rays.index(leg) for leg in generated]
    by_size = -point.by_ray()[:, places, :rows] * balance.kept[generated][None, :, None]
    slopes = np.concatenate([point.by_angle()[:, :, :rows], by_size], axis=1).swapaxes(1, 2)
    return _bounded(np.linalg.solve(slopes, -point.residuals()[:, :rows, None])[..., 0])


def _bounded(step: NDArray[np.floating]) -> Floats:
    return np.clip(np.asarray(step, dtype=np.float64), -FARTHEST, FARTHEST)
