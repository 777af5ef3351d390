"""By how much the currents of a converter fail to balance, and how that follows from everything in it.

One `Balance` holds what a wiring, its positions and parameters make constant; `at` evaluates it at angles. Rows are
the equations: each channel's complex balance as its active and reactive part (in the direction of its own voltage),
generated legs first, then the supply, then magnitudes of bank ammeters, then of line voltages. The idler follows
voltage and slip by

    G1(V) = G1 (1 + phi ((Vn/V1)^2 - 1)) + beta G2 (V2/V1)^2       friction takes constant power; V2 brakes
    B1(V) = B1 (1 + sum_i kappa_i (h_i(V1/Vn) - h_i(1))),  h_i(v) = max(0, v - knee_i)^2    iron saturates

Everything works on flat rows `b`, one for each pair of a sample and a position, so that every product is one call.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
from numpy.typing import NDArray

from idlerwatch.core.converter.circuit import IDLER, Complexes, Floats, Positions, Sample, Wiring, between
from idlerwatch.core.electrical.sequence import TO_COMPONENTS, TO_PHASORS

KNEES: Final = np.array([0.9, 1.0])
"""Ratios of nominal voltage from which iron bends, and bends more (common practice, no source)."""
_AT_NOMINAL: Final = (1.0 - KNEES) ** 2
LEAST_RATIO: Final = 0.5
LARGEST_SHARE: Final = 0.1
"""Limits of V1 over nominal and of (V2/V1)^2 between which the idler's admittance follows its laws."""
ORDINARY_RATIO, STRAINING_RATIO = 1.1, 0.03
ORDINARY_FACTOR, STRAINING_FACTOR = 0.1, 0.05
"""Beyond these ratios of V1 and factors V2/V1 what the model leaves out grows by itself with every further step."""
Index = slice | list[int]
_TINY: Final = 1e-9
_SPREAD: Final = np.array([[1.0, 0.0, -1.0], [0.0, 1.0, -1.0]])
"""How the two asymmetries spread over the legs."""
_FROM_LEGS: Final = np.ascontiguousarray(TO_COMPONENTS.T)
_TO_LEGS: Final = np.ascontiguousarray(TO_PHASORS.T)
_SWAPPED: Final = [0, 2, 1]


class Balance:
    """The equations of one wiring for rows that each have a position.

    Parameters
    ----------
    positions
        The hypotheses; `which` (b,) says which of them each row has.
    parameters : (p,)
    """

    def __init__(self, wiring: Wiring, positions: Positions, which: NDArray[np.int64], parameters: Floats) -> None:
        self.wiring = wiring
        self._parameters = parameters
        self.legs = _index([channel.leg for channel in wiring.generated])
        self.fed = _index([channel.leg for channel in wiring.supply])
        self.fed_count = len(wiring.supply)
        self.first = len(wiring.generated)
        self.second = self.first + len(wiring.outgoing)
        self.frames = np.ascontiguousarray(between([channel.across for channel in wiring.channels])[:, :3].T)
        self.lines = between(wiring.lines)[:, :3]
        self.free = _index(wiring.free)
        self.rays = _index(wiring.rays)
        self._directions = np.exp(1j * np.asarray(wiring.directions))
        self.nominal = np.array([wiring.directions[leg] for leg in wiring.free])
        self._place_parameters()
        self._place_positions(positions, which)

    def _place_parameters(self) -> None:
        wiring = self.wiring
        named = {name: float(self._parameters[wiring.at[name]]) for name in IDLER}
        self.g1, self.b1, self.g2 = named["g1"], named["b1"], named["g2"]
        self.friction, self.braking = named["friction"], named["braking"]
        self.bending = self._block("saturation_1", len(KNEES))
        self.y0 = complex(named["g0"], -named["b0"]) * wiring.tied
        self.y2 = complex(named["g2"], -named["b2"])
        self._place_windings()
        self.kept = np.ones(3)
        self.kept[self.rays] = 1.0 - self._block(f"ray_{wiring.rays[0]}", len(wiring.rays))
        errors = self._block("channel_0_gain", 2 * len(wiring.channels))
        self._told_scale = 1.0 - errors[0::2] - 1j * errors[1::2]
        self._ammeter_scale = 1.0 - self._block("ammeter_0", len(wiring.ammeters))
        self._line_scale = 1.0 - self._block("line_0", len(wiring.lines))

    def _place_windings(self) -> None:
        """What the sequences see of the legs (3, 3), and what the legs get of them: unlike windings mix them.

        A star point that floats stands where the currents' sum is nought; to first order in the asymmetry that takes
        the legs' mean out of the voltages, and out of the currents (derived).
        """
        scale = 1.0 + 0.5 * (self._block("asymmetry_1", 2) @ _SPREAD)
        self.passing = np.eye(3) if self.wiring.tied else np.eye(3) - 1.0 / 3.0
        self.seen_by = (self.passing * scale) @ _FROM_LEGS
        self.given_by = (_TO_LEGS * scale) @ self.passing

    def _block(self, first: str, count: int) -> Floats:
        start = self.wiring.at[first] if count else 0
        return self._parameters[start : start + count]

    def _place_positions(self, positions: Positions, which: NDArray[np.int64]) -> None:
        wiring = self.wiring
        cans = self._block("can_0", len(wiring.cans))
        shares = positions.shares[which]
        patterns = wiring.patterns[:, :3, :3]
        deviation = np.einsum("bk,kij->bij", shares * cans, patterns)
        self.capacitive = 1j * wiring.base * (positions.matrices[which][:, :3, :3] + deviation)
        self.drawn_by = np.ascontiguousarray(self.capacitive.swapaxes(1, 2))
        self.by_can = 1j * wiring.base * (shares[:, :, None, None] * patterns)
        self.loose = np.asarray(1j * wiring.base * positions.loose[which][:, :3, :3], dtype=np.complex128)
        self.has_loose = bool(positions.loose.any())
        self.mirrored = positions.mirrored[which][:, None]
        self.has_mirrored = bool(positions.mirrored.any())
        self._signs = positions.signs[which]
        if wiring.ammeters:
            self._place_ammeters(positions, which, shares * cans)

    def _place_ammeters(self, positions: Positions, which: NDArray[np.int64], deviations: Floats) -> None:
        wiring = self.wiring
        banks = [ammeter.bank for ammeter in wiring.ammeters]
        conductors = [ammeter.conductor for ammeter in wiring.ammeters]
        belongs = np.array([[can.bank == bank for can in wiring.cans] for bank in banks], dtype=float)
        patterns = wiring.patterns[:, conductors, :3] * belongs.T[:, :, None]
        nominal = positions.bank_matrices[which][:, banks, conductors, :3]
        self.bank = 1j * wiring.base * (nominal + np.einsum("bk,kai->bai", deviations, patterns))
        self.bank_by_can = 1j * wiring.base * positions.shares[which][:, :, None, None] * patterns

    def seen(self, sample: Sample) -> "Seen":
        """Return the equations with what b samples say put in."""
        signed = sample.currents.real + 1j * (sample.currents.imag * self._signs)
        reals = [
            _filled(magnitudes) * scale
            for magnitudes, scale in ((sample.ammeters, self._ammeter_scale), (sample.lines, self._line_scale))
            if magnitudes.shape[-1]
        ]
        rays = np.asarray((sample.rays * self.kept) * self._directions, dtype=np.complex128)
        return Seen(self, sample, rays, signed, signed * self._told_scale, reals)


@dataclass(frozen=True, slots=True)
class Seen:
    """The equations with samples in them: potentials at the nominal directions, currents as told and as corrected."""

    balance: Balance
    sample: Sample
    potentials: Complexes
    signed: Complexes
    told: Complexes
    magnitudes: list[Floats]

    def at(self, angles: Floats) -> "Point":
        """Evaluate at angles (b, free)."""
        return Point(self, angles)


@dataclass(frozen=True, slots=True)
class _Flows:
    """The idler's sequences: components (b, 3) it sees, its admittances (b, 3), and what they follow."""

    components: Complexes
    admittances: Complexes
    square: Floats
    ratio: Floats
    eased: Floats
    share: Floats
    bend: Floats
    bent: Floats


class Point:
    """The equations at one set of angles."""

    def __init__(self, seen: Seen, angles: Floats) -> None:
        balance = seen.balance
        self._balance, self._sample = balance, seen.sample
        self._signed, self._told, self._magnitudes = seen.signed, seen.told, seen.magnitudes
        self.potentials = seen.potentials.copy()
        self.potentials[:, balance.free] *= np.exp(1j * (angles - balance.nominal))
        self._flows = self._see()
        self._taken = self._take()
        across = self.potentials @ balance.frames
        self._across = across + _TINY
        self._units = across / np.abs(self._across)

    def _see(self) -> _Flows:
        """Return what the idler sees at these potentials."""
        balance = self._balance
        components = self.potentials @ balance.seen_by
        if balance.has_mirrored:
            components = np.where(balance.mirrored, components[:, _SWAPPED], components)
        squares = components.real**2 + components.imag**2
        square = squares[:, 1] + _TINY
        height = np.maximum(square / balance.wiring.nominal_voltage**2, LEAST_RATIO**2)
        share = np.minimum(squares[:, 2] / square, LARGEST_SHARE)
        ratio = np.sqrt(height)
        bent = np.maximum(0.0, ratio[:, None] - KNEES)
        bend = bent * bent - _AT_NOMINAL
        eased = 1.0 / height - 1.0
        conductance = balance.g1 + (balance.g1 * balance.friction) * eased + (balance.braking * balance.g2) * share
        susceptance = balance.b1 + balance.b1 * (bend @ balance.bending)
        admittances = np.empty_like(components)
        admittances[:, 0], admittances[:, 2] = balance.y0, balance.y2
        admittances[:, 1] = conductance - 1j * susceptance
        admittances *= balance.wiring.base
        return _Flows(components, admittances, square, ratio, eased, share, bend, bent)

    def _take(self) -> Complexes:
        """Return what idler and capacitors take from each leg: (b, 3)."""
        self._idler = self._to_legs(self._flows.admittances * self._flows.components)
        return self._idler + _times(self._balance.capacitive, self.potentials)

    def _to_legs(self, flows: Complexes) -> Complexes:
        """Return currents of the legs from those of the sequences: (b, ..., 3)."""
        balance = self._balance
        if balance.has_mirrored:
            mirrored = balance.mirrored[:, None] if flows.ndim > 2 else balance.mirrored
            flows = np.where(mirrored, flows[..., _SWAPPED], flows)
        currents: Complexes = flows @ balance.given_by
        return currents

    def strain(self) -> Floats:
        """Return how much less the laws of the idler are to be trusted here than in ordinary operation: (b,). [1]

        Far above the voltage and unbalance it was learned at the iron's law is an extrapolation.
        """
        flows = self._flows
        over = np.maximum(0.0, flows.ratio - ORDINARY_RATIO) / STRAINING_RATIO
        uneven = np.maximum(0.0, np.sqrt(flows.share) - ORDINARY_FACTOR) / STRAINING_FACTOR
        return 1.0 + over + uneven

    # Rows -----------------------------------------------------------------

    def residuals(self) -> Floats:
        """Return by how much each equation fails: (b, rows). [A, V]"""
        balance = self._balance
        first, second = balance.first, balance.second
        complexes = np.empty((len(self.potentials), first + balance.fed_count), dtype=np.complex128)
        complexes[:, :first] = self._units[:, :first].conj() * self._taken[:, balance.legs] + self._told[:, :first]
        if balance.fed_count:
            complexes[:, first:] = self._units[:, second:].conj() * self._inflow - self._told[:, second:]
        rows = complexes.view(np.float64)
        reals = self._real_rows()
        return rows if not reals else np.concatenate([rows, *reals], axis=1)

    @cached_property
    def _outgoing(self) -> Complexes:
        part = slice(self._balance.first, self._balance.second)
        return self._units[:, part] * self._told[:, part]

    @cached_property
    def _inflow(self) -> Complexes:
        return self._taken[:, self._balance.fed] + self._outgoing

    @cached_property
    def _bank_currents(self) -> Complexes:
        return _times(self._balance.bank, self.potentials)

    def _real_rows(self) -> list[Floats]:
        balance, rows = self._balance, []
        if balance.wiring.ammeters:
            rows.append(np.abs(self._bank_currents) - self._magnitudes[0])
        if balance.wiring.lines:
            rows.append(np.abs(self.potentials @ balance.lines.T) - self._magnitudes[-1])
        return rows

    # Slopes ---------------------------------------------------------------

    def by_angle(self) -> Floats:
        """Return how the rows follow the free angles: (b, free, rows)."""
        free = self._balance.free
        return self._by_moves(1j * self.potentials[:, free], free)

    def by_ray(self) -> Floats:
        """Return how the rows follow the gains of the rays: (b, rays, rows)."""
        balance = self._balance
        rays = balance.rays
        return self._by_moves(-self.potentials[:, rays] / balance.kept[rays], rays)

    def _by_moves(self, moves: Complexes, legs: Index) -> Floats:
        """Return how the rows follow moves (b, q) of the potentials of single legs (q): (b, q, rows)."""
        balance = self._balance
        first, second = balance.first, balance.second
        taken = self._taken_by(moves, legs)
        turns = ((moves[:, :, None] * balance.frames[legs]) / self._across[:, None, :]).imag
        complexes = np.empty((*moves.shape, first + balance.fed_count), dtype=np.complex128)
        own = self._taken[:, None, balance.legs]
        complexes[..., :first] = self._units[:, None, :first].conj() * (
            taken[..., balance.legs] - 1j * turns[..., :first] * own
        )
        if balance.fed_count:
            moved = taken[..., balance.fed] + 1j * (
                turns[..., first:second] * self._outgoing[:, None] - turns[..., second:] * self._inflow[:, None]
            )
            complexes[..., first:] = self._units[:, None, second:].conj() * moved
        rows = complexes.view(np.float64)
        reals = self._real_by_moves(moves, legs)
        return rows if not reals else np.concatenate([rows, *reals], axis=-1)

    def _taken_by(self, moves: Complexes, legs: Index) -> Complexes:
        """Return how what idler and capacitors take follows moves of single legs: (b, q, 3)."""
        balance, flows = self._balance, self._flows
        components = moves[:, :, None] * balance.seen_by[legs]
        if balance.has_mirrored:
            components = np.where(balance.mirrored[:, :, None], components[..., _SWAPPED], components)
        sequences = flows.admittances[:, None, :] * components
        sequences[..., 1] += flows.components[:, 1, None] * self._bent_by(components)
        taken: Complexes = self._to_legs(sequences) + moves[:, :, None] * balance.drawn_by[:, legs]
        return taken

    def _bent_by(self, components: Complexes) -> Complexes:
        """Return how the positive-sequence admittance follows moves of the components (b, q, 3): (b, q)."""
        flows = self._flows
        along = (flows.components.conj()[:, None, 1:] * components[..., 1:]).real / flows.square[:, None, None]
        by_ratio, by_share = self._slopes
        own = along[..., 0]
        bent: Complexes = by_ratio[:, None] * own + by_share[:, None] * (along[..., 1] - flows.share[:, None] * own)
        return bent

    @cached_property
    def _slopes(self) -> tuple[Complexes, Floats]:
        """How the positive-sequence admittance follows ln V1 and half of (V2/V1)^2; nothing beyond the laws' limits."""
        balance, flows = self._balance, self._flows
        base = balance.wiring.base
        iron = flows.ratio * (2.0 * flows.bent @ balance.bending)
        by_ratio = (-2.0 * balance.g1 * balance.friction * (flows.eased + 1.0) - 1j * balance.b1 * iron) * base
        by_share = np.where(flows.share < LARGEST_SHARE, 2.0 * balance.braking * balance.g2 * base, 0.0)
        return np.where(flows.ratio > LEAST_RATIO, by_ratio, 0.0), by_share

    def _real_by_moves(self, moves: Complexes, legs: Index) -> list[Floats]:
        balance, rows = self._balance, []
        if balance.wiring.ammeters:
            currents = self._bank_currents
            units = currents.conj() / (np.abs(currents) + _TINY)
            rows.append((units[:, None] * balance.bank.swapaxes(1, 2)[:, legs] * moves[:, :, None]).real)
        if balance.wiring.lines:
            spans = self.potentials @ balance.lines.T
            units = spans.conj() / (np.abs(spans) + _TINY)
            rows.append((units[:, None] * balance.lines.T[legs] * moves[:, :, None]).real)
        return rows

    def by_parameter(self) -> Floats:
        """Return how the rows follow the parameters: (b, p, rows)."""
        balance = self._balance
        wiring = balance.wiring
        slopes = np.zeros((len(self.potentials), len(wiring.names), wiring.rows))
        slopes[:, : len(IDLER)] = self._rows_of_taken(self._taken_by_idler())
        start = wiring.at[f"ray_{wiring.rays[0]}"]
        slopes[:, start : start + len(wiring.rays)] = self.by_ray()
        self._by_channels(slopes)
        self._by_cans(slopes)
        self._by_gains(slopes)
        return slopes

    def _rows_of_taken(self, taken: Complexes) -> Floats:
        """Return rows (b, q, rows) of changes (b, q, 3) in what idler and capacitors take."""
        balance = self._balance
        first = balance.first
        complexes = np.empty((*taken.shape[:-1], first + balance.fed_count), dtype=np.complex128)
        complexes[..., :first] = self._units[:, None, :first].conj() * taken[..., balance.legs]
        if balance.fed_count:
            complexes[..., first:] = self._units[:, None, balance.second :].conj() * taken[..., balance.fed]
        rows = complexes.view(np.float64)
        rest = balance.wiring.rows - rows.shape[-1]
        return rows if rest == 0 else np.concatenate([rows, np.zeros((*rows.shape[:-1], rest))], axis=-1)

    def _taken_by_idler(self) -> Complexes:
        """Return how what the idler takes follows its parameters: (b, 12, 3)."""
        balance, flows = self._balance, self._flows
        zero, positive, negative = (balance.wiring.base * flows.components[:, index] for index in range(3))
        sequences = np.zeros((len(positive), len(IDLER), 3), dtype=np.complex128)
        if balance.wiring.tied:
            sequences[:, 0, 0], sequences[:, 1, 0] = zero, -1j * zero
        sequences[:, 2, 1] = positive * (1.0 + balance.friction * flows.eased)
        sequences[:, 3, 1] = -1j * positive * (1.0 + flows.bend @ balance.bending)
        sequences[:, 4, 1] = positive * balance.braking * flows.share
        sequences[:, 4, 2] = negative
        sequences[:, 5, 2] = -1j * negative
        sequences[:, 6:8, 1] = (-1j * positive * balance.b1)[:, None] * flows.bend
        sequences[:, 8, 1] = positive * balance.g1 * flows.eased
        sequences[:, 9, 1] = positive * balance.g2 * flows.share
        taken = self._to_legs(sequences)
        taken[:, 10:] = self._taken_by_asymmetry()
        return taken

    def _taken_by_asymmetry(self) -> Complexes:
        """Return how what the idler takes follows its asymmetries (the slip's answer aside): (b, 2, 3)."""
        balance = self._balance
        spread = 0.5 * _SPREAD
        moved = ((self.potentials @ balance.passing)[:, None, :] * spread) @ _FROM_LEGS
        flows = self._flows.admittances * self._flows.components
        if balance.has_mirrored:
            moved = np.where(balance.mirrored[:, :, None], moved[..., _SWAPPED], moved)
            flows = np.where(balance.mirrored, flows[:, _SWAPPED], flows)
        through = self._to_legs(self._flows.admittances[:, None, :] * moved)
        taken: Complexes = through + ((flows @ _TO_LEGS)[:, None, :] * spread) @ balance.passing
        return taken

    def _by_channels(self, slopes: Floats) -> None:
        """Gains and phases stretch and turn what a channel tells."""
        balance = self._balance
        first, second = balance.first, balance.second
        start = balance.wiring.at["channel_0_gain"]
        for row in range(first):
            _set(slopes, row, start + 2 * row, -self._signed[:, row])
        for row in range(balance.fed_count):
            out = self._units[:, second + row].conj() * self._units[:, first + row] * self._signed[:, first + row]
            _set(slopes, first + row, start + 2 * (first + row), -out)
            _set(slopes, first + row, start + 2 * (second + row), self._signed[:, second + row])

    def _by_cans(self, slopes: Floats) -> None:
        balance = self._balance
        wiring = balance.wiring
        count = len(wiring.cans)
        if not count:
            return
        start = wiring.at["can_0"]
        taken = np.einsum("bkij,bj->bki", balance.by_can, self.potentials)
        slopes[:, start : start + count] = self._rows_of_taken(taken)
        if wiring.ammeters:
            currents = self._bank_currents
            units = currents.conj() / (np.abs(currents) + _TINY)
            moved = np.einsum("bkai,bi->bka", balance.bank_by_can, self.potentials)
            row = 2 * (balance.first + balance.fed_count)
            slopes[:, start : start + count, row : row + len(wiring.ammeters)] = (units[:, None] * moved).real

    def _by_gains(self, slopes: Floats) -> None:
        wiring = self._balance.wiring
        row = 2 * (self._balance.first + self._balance.fed_count)
        for index in range(len(wiring.ammeters)):
            slopes[:, wiring.at[f"ammeter_{index}"], row + index] = _filled(self._sample.ammeters[:, index])
        row += len(wiring.ammeters)
        for index in range(len(wiring.lines)):
            slopes[:, wiring.at[f"line_{index}"], row + index] = _filled(self._sample.lines[:, index])

    def loose(self) -> Floats | None:
        """Return the rows that one standard deviation of a bank's unknown share makes (b, rows); None without one."""
        if not self._balance.has_loose:
            return None
        return self._rows_of_taken(_times(self._balance.loose, self.potentials)[:, None])[:, 0]


def _index(numbers: Sequence[int]) -> Index:
    """Return what picks these: a slice where they follow each other, which costs nothing."""
    if not numbers or list(numbers) != list(range(numbers[0], numbers[-1] + 1)):
        return list(numbers)
    return slice(numbers[0], numbers[-1] + 1)


def _filled(values: Floats) -> Floats:
    """Return values with nothing for what is missing."""
    return np.where(np.isnan(values), 0.0, values)


def _times(matrix: Complexes, vector: Complexes) -> Complexes:
    product: Complexes = (matrix @ vector[..., None])[..., 0]
    return product


def _set(slopes: Floats, row: int, column: int, by_gain: Complexes) -> None:
    """Put a complex row's derivative by a gain, and by a phase (j times it), into two parameters' slopes."""
    slopes[:, column, 2 * row], slopes[:, column, 2 * row + 1] = by_gain.real, by_gain.imag
    slopes[:, column + 1, 2 * row], slopes[:, column + 1, 2 * row + 1] = -by_gain.imag, by_gain.real
