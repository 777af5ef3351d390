"""What the generated legs would read with the circuit as it ought to be, at the load there is.

The currents that flow now, each relative to its own voltage, are put into the balance of the circuit in its expected
position; the generated legs' potentials, both magnitude and angle, are then what makes it hold (Newton). What was
measured against that is how far the converter is off its normal for this load.
"""

from dataclasses import replace
from typing import Final

import numpy as np

from idlerwatch.core.converter.balance import Balance
from idlerwatch.core.converter.circuit import Complexes, Floats, Positions, Sample, Wiring

LONGEST_SEARCH: Final = 8
FARTHEST: Final = 0.3
"""Longest step in angle and logarithm of magnitude."""
NEAR: Final = 1e-4
"""After a step this short the next one would be its square."""


class UsualLegs:
    """The circuit in the position expected of it, ready for any number of samples.

    Parameters
    ----------
    positions
        One: the position expected.
    parameters : (p,)
    """

    def __init__(self, wiring: Wiring, positions: Positions, parameters: Floats) -> None:
        self._wiring, self._positions, self._parameters = wiring, positions, parameters
        self._generated = [channel.leg for channel in wiring.generated]
        self._places = [wiring.rays.index(leg) for leg in self._generated]
        self._balances: dict[int, Balance] = {}

    def potentials(self, sample: Sample, angles: Floats | None = None) -> Complexes:
        """Return the potentials of the legs to the hub that the expected circuit would have at these currents.

        Parameters
        ----------
        sample
            n samples; the rays of the generated legs only begin the search.
        angles : (n, free)
            Where the search begins; nominal ones without. [rad]

        Returns
        -------
        (n, 3)
            NaN where there is none: the circuit could not carry such currents. [V]
        """
        wiring, generated = self._wiring, self._generated
        count = len(sample.rays)
        if angles is None:
            angles = np.tile([wiring.directions[leg] for leg in wiring.free], (count, 1))
        rays, balance = sample.rays.copy(), self._balance(count)
        step = np.full((count, 1), np.inf)
        for _ in range(LONGEST_SEARCH):
            step = self._step(balance, replace(sample, rays=rays), angles)
            angles = angles + step[:, : len(generated)]
            rays[:, generated] *= np.exp(step[:, len(generated) :])
            if np.abs(step).max() < NEAR:
                break
        potentials = balance.seen(replace(sample, rays=rays)).at(angles).potentials
        potentials[np.abs(step).max(axis=1) >= NEAR] = np.nan
        return potentials

    def _balance(self, count: int) -> Balance:
        found = self._balances.get(count)
        if found is None:
            which = np.zeros(count, dtype=np.int64)
            found = self._balances[count] = Balance(self._wiring, self._positions, which, self._parameters)
        return found

    def _step(self, balance: Balance, sample: Sample, angles: Floats) -> Floats:
        """Return Newton's step of angles and logarithms of magnitudes: (n, 2g)."""
        point = balance.seen(sample).at(angles)
        rows = 2 * len(self._generated)
        by_size = -point.by_ray()[:, self._places, :rows] * balance.kept[self._generated][None, :, None]
        slopes = np.concatenate([point.by_angle()[:, :, :rows], by_size], axis=1).swapaxes(1, 2)
        step = np.linalg.solve(slopes, -point.residuals()[:, :rows, None])[..., 0]
        return np.asarray(np.clip(step, -FARTHEST, FARTHEST), dtype=np.float64)
