"""Angles between the legs from per-phase meters, for every position of the capacitors at once.

The state estimation of power networks on one converter: the balance of currents (`balance`) is fulfilled as well as
its uncertainty allows by the free angles, which have a weak prior about where the legs stand nominally. What is fixed
but not known exactly (gains, admittances, capacitances) has one joint covariance; it is not estimated again from each
sample, its uncertainty goes into the weights: R = Jp S Jp' + discrepancy + what a sample adds.

Two steps with the discrepancy's weights alone bring the angles near; there R is worked out, once; two more steps with
it, each with exact derivatives, end where the sum of weighted squares is least.

The same function serves one live sample and a year of them.

References
----------
F. C. Schweppe and J. Wildes 1970; A. Abur and A. Gomez Exposito, Power System State Estimation, 2004, chapters 2, 5.
"""

import math
from dataclasses import dataclass, fields
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from idlerwatch.core.converter.balance import Balance, Point
from idlerwatch.core.converter.circuit import Complexes, Floats, Positions, Sample, Wiring
from idlerwatch.core.electrical.sequence import TO_COMPONENTS

ANGLE_PRIOR: Final = math.radians(8.0)
"""Standard deviation of a leg's angle about its nominal one before anything is measured (common practice)."""
NEARING, SETTLING = 1, 2
"""Steps before and after the weights are worked out."""
CHUNK: Final = 2048
"""Rows worked on at once: what they need stays in the processor's cache."""
MISSING_SPREAD: Final = 1e4
"""Standard deviation of what is not measured: a number far beyond any current or voltage here. [A, V]"""
QUANTITIES: Final = ("zero", "positive", "negative", "factor", "line_0", "line_1", "line_2")
"""What follows from the potentials: |V0|, |V1|, |V2|, |V2|/|V1|, and the voltages between legs 0-1, 1-2, 2-0."""
_LINES: Final = np.array([[1.0, -1.0, 0.0], [0.0, 1.0, -1.0], [-1.0, 0.0, 1.0]])
_TO_QUANTITIES: Final = np.concatenate([TO_COMPONENTS, _LINES])


@dataclass(frozen=True, slots=True)
class Circuit:
    """What is known of a converter: parameters, their joint covariance, and what the model leaves out.

    `parameters` (p,); `covariance` (p, p); `noise` (p,) standard deviation of each parameter from one sample to the
    next (a meter's repeatability); `discrepancy` (rows,) standard deviation of each row. [A, V]
    """

    parameters: Floats
    covariance: Floats
    noise: Floats
    discrepancy: Floats


@dataclass(frozen=True, slots=True)
class Recovery:
    """What each sample says under each position; leading axes (n, h).

    Attributes
    ----------
    potentials : (n, h, 3)
        Of the legs, to the hub. [V]
    angles, angle_covariance : (n, h, free), (n, h, free, free)
        Of the free legs. [rad]
    chi_square : (n, h)
        Weighted square of the residuals, the angles' departure from their prior included. [1]
    log_likelihood : (n, h)
        Of the sample, up to a constant. [1]
    residuals : (n, h, rows)
        After the fit. [A, V]
    normalised : (n, h, rows)
        Each residual over its standard deviation after the fit. [1]
    likeliest : (n,)
        The position under which the sample is likeliest.
    quantities, standards : (n, 7)
        `QUANTITIES` under that position, and their standard uncertainties. [V, 1]
    """

    potentials: Complexes
    angles: Floats
    angle_covariance: Floats
    chi_square: Floats
    log_likelihood: Floats
    residuals: Floats
    normalised: Floats
    likeliest: NDArray[np.int64]
    quantities: Floats
    standards: Floats


class Recoverer:
    """The estimator of one wiring, ready for any number of samples.

    Parameters
    ----------
    positions
        The h hypotheses to be judged.
    circuit
        What is known of the converter.
    """

    def __init__(self, wiring: Wiring, positions: Positions, circuit: Circuit) -> None:
        self.wiring, self.positions, self.circuit = wiring, positions, circuit
        self._hypotheses = len(positions.mirrored)
        self._total = circuit.covariance + np.diag(circuit.noise**2)
        self._nominal = nominal_angles(wiring, positions)
        self._prior = np.eye(len(wiring.free)) / ANGLE_PRIOR**2
        self._balances: dict[int, Balance] = {}

    def recover(self, sample: Sample) -> Recovery:
        """Find the angles under each position, and judge how well the circuit then holds.

        Parameters
        ----------
        sample
            n samples along one axis.

        Returns
        -------
        Recovery
            Leading axes (n, h); NaN where a ray is missing.

        References
        ----------
        Abur and Gomez Exposito 2004, chapters 2 (weighted least squares) and 5 (bad data).
        """
        count = len(sample.rays)
        at_once = max(1, CHUNK // self._hypotheses)
        parts = [self._part(take(sample, slice(start, start + at_once))) for start in range(0, count, at_once)]
        if len(parts) == 1:
            return Recovery(**parts[0])
        return Recovery(**{name: np.concatenate([part[name] for part in parts]) for name in parts[0]})

    def _balance(self, count: int) -> Balance:
        found = self._balances.get(count)
        if found is None:
            which = np.tile(np.arange(self._hypotheses), count)
            found = self._balances[count] = Balance(self.wiring, self.positions, which, self.circuit.parameters)
        return found

    def _part(self, sample: Sample) -> dict[str, Any]:
        count = len(sample.rays)
        flat = take(sample, np.repeat(np.arange(count), self._hypotheses))
        seen = self._balance(count).seen(flat)
        diagonal = self.circuit.discrepancy**2 + row_spreads(self.wiring, flat) ** 2
        nominal = np.tile(self._nominal, (count, 1))
        turned = np.zeros_like(nominal)
        point = seen.at(nominal)
        for _ in range(NEARING):
            by_angle = point.by_angle()
            turned, _ = self._step(by_angle, by_angle / diagonal[:, None, :], point.residuals(), turned)
            point = seen.at(nominal + turned)
        by_parameter = point.by_parameter()
        spread = _row_covariance(by_parameter, self._total, point, diagonal * point.strain()[:, None] ** 2)
        weights = np.asarray(np.linalg.inv(spread), dtype=np.float64)
        for _ in range(SETTLING):
            by_angle = point.by_angle()
            weighted = by_angle @ weights
            turned, covariance = self._step(by_angle, weighted, point.residuals(), turned)
            point = seen.at(nominal + turned)
        judged = self._judged(point, turned, spread=spread, weights=weights, by_angle=by_angle, covariance=covariance)
        best = judged["log_likelihood"].reshape(count, -1).argmax(axis=1)
        at = best + np.arange(count) * self._hypotheses
        quantities, standards = self._quantities(point.potentials[at], by_parameter[at], covariance[at] @ weighted[at])
        found = {"potentials": point.potentials, "angles": nominal + turned, "angle_covariance": covariance, **judged}
        shaped = {name: flat.reshape(count, self._hypotheses, *flat.shape[1:]) for name, flat in found.items()}
        return shaped | {"likeliest": best, "quantities": quantities, "standards": standards}

    def _step(self, by_angle: Floats, weighted: Floats, residuals: Floats, turned: Floats) -> tuple[Floats, Floats]:
        """Return the turns from nominal one Gauss-Newton step on, and the inverse of the normal matrix."""
        normal = weighted @ by_angle.swapaxes(-1, -2) + self._prior
        pull = (weighted @ residuals[..., None])[..., 0] + turned / ANGLE_PRIOR**2
        inverse = _inverse(normal)
        return turned - (inverse @ pull[..., None])[..., 0], inverse

    def _judged(
        self, point: Point, turned: Floats, *, spread: Floats, weights: Floats, by_angle: Floats, covariance: Floats
    ) -> dict[str, Floats]:
        """Return how well the circuit holds at the angles found."""
        residuals = point.residuals()
        chi_square = (residuals * (weights @ residuals[..., None])[..., 0]).sum(axis=-1)
        chi_square += (turned**2).sum(axis=-1) / ANGLE_PRIOR**2
        scale = -np.log(np.linalg.det(weights) * _determinant(covariance))
        left = np.einsum("bii->bi", spread) - ((covariance @ by_angle) * by_angle).sum(axis=-2)
        return {
            "chi_square": chi_square,
            "log_likelihood": -0.5 * (chi_square + scale),
            "residuals": residuals,
            "normalised": residuals / np.sqrt(np.maximum(left, 1e-12)),
        }

    def _quantities(self, potentials: Complexes, by_parameter: Floats, gains: Floats) -> tuple[Floats, Floats]:
        """Return what follows from the potentials, with standard uncertainties; `gains` maps residuals to angles."""
        free, rays = list(self.wiring.free), list(self.wiring.rays)
        phasors = potentials @ _TO_QUANTITIES.T
        sizes = np.abs(phasors)
        turned = (phasors.conj() / (sizes + 1e-12))[:, :, None] * (_TO_QUANTITIES * potentials[:, None, :])
        by_angle, by_gain = -turned[:, :, free].imag, -turned[:, :, rays].real
        through = -(by_angle @ gains)
        sensitivity = through @ by_parameter.swapaxes(-1, -2)
        start = self.wiring.at[f"ray_{rays[0]}"]
        sensitivity[:, :, start : start + len(rays)] += by_gain
        sensitivity, through, sizes = (_with_factor(part, sizes) for part in (sensitivity, through, sizes))
        variance = ((sensitivity @ self._total) * sensitivity).sum(axis=-1) + through**2 @ self.circuit.discrepancy**2
        return sizes, np.sqrt(variance)


def nominal_angles(wiring: Wiring, positions: Positions) -> Floats:
    """Return where the free legs stand nominally under each position: (h, free). [rad]

    An idler that runs the other way round makes the mirror image, about the fed pair.
    """
    ahead = np.array([wiring.directions[leg] for leg in wiring.free])
    fixed = next(leg for leg in wiring.rays if leg not in wiring.free)
    return np.where(positions.mirrored[:, None], 2.0 * wiring.directions[fixed] - ahead, ahead)


def take(sample: Sample, rows: object) -> Sample:
    """Return some of the samples, or each of them several times: `rows` indexes the leading axis."""
    return Sample(*(getattr(sample, field.name)[rows] for field in fields(Sample)))


def _determinant(matrices: Floats) -> Floats:
    """Return determinants of matrices of one or two rows: (..., k, k) -> (...)."""
    if matrices.shape[-1] == 1:
        return matrices[..., 0, 0]
    product: Floats = matrices[..., 0, 0] * matrices[..., 1, 1] - matrices[..., 0, 1] * matrices[..., 1, 0]
    return product


def _inverse(matrices: Floats) -> Floats:
    """Return the inverses of matrices of one or two rows, which LAPACK would take far longer to be called for."""
    if matrices.shape[-1] == 1:
        return 1.0 / matrices
    inverse = np.empty_like(matrices)
    inverse[..., 0, 0], inverse[..., 1, 1] = matrices[..., 1, 1], matrices[..., 0, 0]
    inverse[..., 0, 1], inverse[..., 1, 0] = -matrices[..., 0, 1], -matrices[..., 1, 0]
    inverse /= _determinant(matrices)[..., None, None]
    return inverse


def _row_covariance(by_parameter: Floats, total: Floats, point: Point, diagonal: Floats) -> Floats:
    """Return the covariance of the residuals at given angles: (b, rows, rows)."""
    transposed = np.ascontiguousarray(by_parameter.swapaxes(-1, -2))
    spread: Floats = (transposed @ total) @ by_parameter
    loose = point.loose()
    if loose is not None:
        spread += loose[:, :, None] * loose[:, None, :]
    rows = np.arange(diagonal.shape[-1])
    spread[:, rows, rows] += diagonal
    return spread


def row_spreads(wiring: Wiring, sample: Sample) -> Floats:
    """Return the standard deviation that a sample adds to each row: (b, rows). [A, V]"""
    count = len(sample.rays)
    first, second = len(wiring.generated), len(wiring.generated) + len(wiring.outgoing)
    parts = [sample.spreads[:, :first].reshape(count, -1)]
    if wiring.supply:
        parts.append(np.hypot(sample.spreads[:, first:second], sample.spreads[:, second:]).reshape(count, -1))
    parts += [
        np.where(np.isnan(magnitudes), MISSING_SPREAD, 0.0)
        for magnitudes in (sample.ammeters, sample.lines)
        if magnitudes.shape[-1]
    ]
    return np.concatenate(parts, axis=1) if len(parts) > 1 else parts[0]


def _with_factor(values: Floats, sizes: Floats) -> Floats:
    """Put |V2|/|V1| (or how it follows, to first order) after the three components: (b, 6, ...) -> (b, 7, ...)."""
    negative, positive = sizes[:, 2], sizes[:, 1]
    if values is sizes:
        factor = negative / positive
    else:
        factor = (values[:, 2] - values[:, 1] * (negative / positive)[:, None]) / positive[:, None]
    return np.concatenate([values[:, :3], factor[:, None], values[:, 3:]], axis=1)
