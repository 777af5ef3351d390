"""How the converter may stand: banks closed or open, capacitors lost, poles open, the idler turned round.

Every way is a different capacitance matrix (or sense) in the balance of currents, one row of `Positions`. A bank's
contactor breaks every conductor its capacitors touch; an open pole leaves the ends at that conductor joined at a
floating node, which is eliminated (Kron). Ways that come to the same matrix are one hypothesis with several names:
nobody can tell them apart.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from idlerwatch.core.converter.circuit import Floats, Positions, Wiring

PART: Final = 0.5
"""Share of the time a chattering bank is in, on the mean."""
PART_SPREAD: Final = 0.1
"""Standard deviation of that share: wholly in or out is five of them away."""
Row = tuple[Floats, Floats, Floats, Floats]
_SAME: Final = 1e-9
_UNLIKELY: Final = 0.3


@dataclass(frozen=True, slots=True)
class Hypothesis:
    """One way the converter may stand.

    `closed` is each bank's share closed: 1, 0, or `PART`; `lost` the can that is lost, `pole` (bank, conductor) the
    pole that is open; `flipped` the channel whose reactive power has the other sign. `weight` is what it is believed
    beforehand, over that of a plain position of the banks.
    """

    closed: tuple[float, ...]
    lost: int | None = None
    pole: tuple[int, int] | None = None
    mirrored: bool = False
    flipped: int | None = None
    weight: float = 1.0


@dataclass(frozen=True, slots=True)
class Catalogue:
    """All hypotheses of one wiring, ready to be evaluated; `alike` lists for each those it cannot be told from."""

    hypotheses: tuple[Hypothesis, ...]
    alike: tuple[tuple[Hypothesis, ...], ...]
    positions: Positions

    @property
    def weights(self) -> Floats:
        """What each is believed beforehand: (h,)."""
        return np.array([hypothesis.weight for hypothesis in self.hypotheses])


def catalogue(wiring: Wiring, expected: Sequence[float], unsigned: Sequence[int] = ()) -> Catalogue:
    """Return every hypothesis, where the banks are expected closed (1) or open (0).

    The first of them is the one expected; `unsigned` are channels that give no sign of reactive power.
    """
    told: list[Hypothesis] = []
    alike: list[list[Hypothesis]] = []
    rows: list[Row] = []
    for hypothesis in _ways(wiring, tuple(expected), unsigned):
        row = _row(wiring, hypothesis)
        twin = next((k for k, other in enumerate(rows) if _is_same(wiring, told[k], other, hypothesis, row)), None)
        if twin is None:
            told.append(hypothesis)
            alike.append([])
            rows.append(row)
        else:
            alike[twin].append(hypothesis)
    matrices, shares, banks, loose = (np.stack(parts) for parts in zip(*rows, strict=True))
    signs = np.ones((len(told), len(wiring.channels)))
    for index, hypothesis in enumerate(told):
        if hypothesis.flipped is not None:
            signs[index, hypothesis.flipped] = -1.0
    mirrored = np.array([hypothesis.mirrored for hypothesis in told])
    positions = Positions(matrices, shares, banks, loose, mirrored, signs)
    return Catalogue(tuple(told), tuple(map(tuple, alike)), positions)


def _ways(wiring: Wiring, expected: tuple[float, ...], unsigned: Sequence[int]) -> Iterator[Hypothesis]:
    yield Hypothesis(expected)
    for number in range(2**wiring.banks):
        closed = tuple(float(number >> bank & 1) for bank in range(wiring.banks))
        if closed != expected:
            yield Hypothesis(closed)
    for bank in range(wiring.banks):
        yield Hypothesis((*expected[:bank], PART, *expected[bank + 1 :]), weight=0.3 * _UNLIKELY)
    for index, can in enumerate(wiring.cans):
        if can.bank < 0 or expected[can.bank] > 0.0:
            yield Hypothesis(expected, lost=index, weight=_UNLIKELY)
    for bank, share in enumerate(expected):
        touched = sorted({end for can in wiring.cans if can.bank == bank for end in can.ends})
        if share > 0.0:
            yield from (Hypothesis(expected, pole=(bank, end), weight=_UNLIKELY) for end in touched)
    yield Hypothesis(expected, mirrored=True, weight=_UNLIKELY)
    for channel in unsigned:
        yield Hypothesis(expected, flipped=channel)


def _row(wiring: Wiring, hypothesis: Hypothesis) -> Row:
    """Return the matrix, the share of each can, each bank's matrix, and the loose one."""
    shares = np.array([_share(can.bank, index, hypothesis) for index, can in enumerate(wiring.cans)])
    each = shares[:, None, None] * wiring.patterns
    of_bank = np.array([can.bank for can in wiring.cans], dtype=int)
    banks = np.zeros((wiring.banks, 4, 4))
    loose = np.zeros((4, 4))
    for bank in range(wiring.banks):
        banks[bank] = each[of_bank == bank].sum(axis=0)
        if hypothesis.closed[bank] == PART:
            loose += PART_SPREAD / PART * banks[bank]
    if hypothesis.pole is not None:
        bank, conductor = hypothesis.pole
        banks[bank] = _without(banks[bank], conductor)
        shares = np.where(of_bank == bank, 0.0, shares)
    return each[of_bank < 0].sum(axis=0) + banks.sum(axis=0), shares, banks, loose


def _share(bank: int, index: int, hypothesis: Hypothesis) -> float:
    if hypothesis.lost == index:
        return 0.0
    return 1.0 if bank < 0 else hypothesis.closed[bank]


def _without(matrix: Floats, node: int) -> Floats:
    """Return a nodal matrix with one node floating: eliminated (Kron reduction)."""
    if abs(matrix[node, node]) < _SAME:
        return matrix
    reduced: Floats = matrix - np.outer(matrix[:, node], matrix[node]) / matrix[node, node]
    return reduced


def _is_same(wiring: Wiring, first: Hypothesis, one: Row, second: Hypothesis, other: Row) -> bool:
    """Return whether two hypotheses make the same currents where any are measured."""
    if first.mirrored != second.mirrored or first.flipped != second.flipped or PART in (*first.closed, *second.closed):
        return False
    seen = [channel.leg for channel in (*wiring.generated, *wiring.supply)]
    is_alike = np.allclose(one[0][seen], other[0][seen], atol=_SAME)
    ammeters = [(ammeter.bank, ammeter.conductor) for ammeter in wiring.ammeters]
    return is_alike and all(np.allclose(one[2][at], other[2][at], atol=_SAME) for at in ammeters)
