"""How the converter may stand: which ways there are, and what circuit each is.

Open poles are held to the nodal solver with a billion ohms in the pole (`network.behind_impedances`), another route to
the same circuit; the rest are statements about the catalogue.
"""

import math
from dataclasses import replace

import numpy as np
import pytest

from idlerwatch.core.converter.circuit import BankAmmeter, Can, CurrentChannel, Wiring, nominal_positions
from idlerwatch.core.converter.hypotheses import PART, PART_SPREAD, Hypothesis, catalogue
from idlerwatch.core.converter.network import behind_impedances, pair_matrix

TURN = 2.0 * math.pi / 3.0
OPEN = 1e9
RUN, START = (Can((0, 2), 0.25, 0), Can((1, 2), 0.1, 0)), Can((0, 2), 0.6, 1)
WIRING = Wiring(
    rated_current=15.0,
    nominal_voltage=230.0,
    tied=True,
    hub=3,
    directions=(0.0, -TURN, TURN),
    free=(1, 2),
    cans=(*RUN, Can((1, 3), 0.07, -1), START),
    banks=2,
    generated=(CurrentChannel(1, (1, 3)), CurrentChannel(2, (2, 3))),
)
RUNNING = (1.0, 0.0)


def found(known, **wanted):
    """The number of the hypothesis that is meant, be it named alone or among those that are alike."""
    for number, (hypothesis, alike) in enumerate(zip(known.hypotheses, known.alike, strict=True)):
        for way in (hypothesis, *alike):
            if all(getattr(way, name) == value for name, value in wanted.items()):
                return number
    raise AssertionError(wanted)


def matrix_of(cans):
    """Nodal susceptances over L1 L2 L3 N by the network's own pattern."""
    return pair_matrix(4, [can.ends for can in cans], np.array([can.susceptance for can in cans])).real


def test_what_is_expected_comes_first():
    for expected in ((1.0, 0.0), (0.0, 0.0), (0.0, 1.0), (1.0, 1.0)):
        known = catalogue(WIRING, expected)
        assert known.hypotheses[0] == Hypothesis(expected)
        assert known.weights[0] == 1.0


def test_every_position_of_the_banks_is_there_once():
    known = catalogue(WIRING, RUNNING)
    plain = [h.closed for h in known.hypotheses if h == Hypothesis(h.closed) and PART not in h.closed]
    assert sorted(plain) == [(0.0, 0.0), (0.0, 1.0), (1.0, 0.0), (1.0, 1.0)]


def test_each_position_is_the_circuit_of_what_is_in():
    known = catalogue(WIRING, RUNNING)
    fixed = WIRING.cans[2]
    for closed, cans in {
        (1.0, 0.0): (*RUN, fixed),
        (0.0, 0.0): (fixed,),
        (0.0, 1.0): (fixed, START),
        (1.0, 1.0): (*RUN, fixed, START),
    }.items():
        number = found(known, closed=closed, lost=None, pole=None, mirrored=False)
        assert known.positions.matrices[number] == pytest.approx(matrix_of(cans), abs=1e-12)
        assert known.positions.bank_matrices[number, 0] == pytest.approx(matrix_of(RUN) * closed[0], abs=1e-12)
        assert known.positions.bank_matrices[number, 1] == pytest.approx(matrix_of([START]) * closed[1], abs=1e-12)
        assert known.positions.shares[number] == pytest.approx([closed[0], closed[0], 1.0, closed[1]])
    assert nominal_positions(WIRING).matrices[0] == pytest.approx(matrix_of(WIRING.cans), abs=1e-12)


@pytest.mark.parametrize("lost", [0, 1, 2])
def test_a_lost_capacitor_is_the_circuit_without_it(lost):
    known = catalogue(WIRING, RUNNING)
    number = found(known, lost=lost, mirrored=False)
    left = [can for k, can in enumerate(WIRING.cans) if k not in {lost, 3}]
    assert known.positions.matrices[number] == pytest.approx(matrix_of(left), abs=1e-12)
    assert known.positions.shares[number][lost] == 0.0


def test_what_is_not_in_cannot_be_lost():
    for expected, is_in in ((RUNNING, False), ((1.0, 1.0), True)):
        known = catalogue(WIRING, expected)
        ways = [*known.hypotheses, *(way for alike in known.alike for way in alike)]
        assert any(way.lost == 3 for way in ways) is is_in


@pytest.mark.parametrize("conductor", [0, 1, 2])
def test_an_open_pole_is_the_bank_behind_a_billion_ohms_there(conductor):
    """Both by elimination and by series impedance; the rest of the circuit is untouched."""
    known = catalogue(WIRING, RUNNING)
    number = found(known, pole=(0, conductor))
    series = np.zeros(4)
    series[conductor] = OPEN
    bank = behind_impedances(1j * matrix_of(RUN), series).imag
    assert known.positions.bank_matrices[number, 0] == pytest.approx(bank, abs=1e-8)
    assert known.positions.matrices[number] == pytest.approx(bank + matrix_of([WIRING.cans[2]]), abs=1e-8)


def test_two_capacitors_at_an_open_pole_are_left_in_series_between_their_other_ends():
    """C1 and C2 meet at L3: without it L1-L2 sees b1 b2 / (b1 + b2) (a series connection, by hand)."""
    known = catalogue(WIRING, RUNNING)
    bank = known.positions.bank_matrices[found(known, pole=(0, 2)), 0]
    series = 0.25 * 0.1 / 0.35
    assert bank[0, 1] == pytest.approx(-series)
    assert bank[0, 0] == pytest.approx(series)
    assert bank[2] == pytest.approx(np.zeros(4), abs=1e-12)


def test_at_a_single_capacitor_a_pole_and_the_capacitor_are_one_hypothesis():
    """Nobody can tell them apart, so they are named together."""
    known = catalogue(WIRING, (1.0, 1.0))
    number = found(known, lost=3)
    named = {(way.lost, way.pole) for way in (known.hypotheses[number], *known.alike[number])}
    assert {(3, None), (None, (1, 0)), (None, (1, 2))} <= named


def test_an_only_capacitor_that_is_lost_is_the_bank_open():
    """The start bank has one: open, its capacitor lost, either pole open, all are the same circuit."""
    known = catalogue(WIRING, (1.0, 1.0))
    number = found(known, closed=(1.0, 0.0), lost=None, pole=None, mirrored=False)
    ways = known.alike[number]
    assert any(way.lost == 3 for way in ways)


def test_like_capacitors_across_one_pair_are_alike():
    twins = replace(WIRING, cans=(Can((0, 2), 0.2, 0), Can((0, 2), 0.2, 0), Can((1, 2), 0.1, 0)), banks=1)
    known = catalogue(twins, (1.0,))
    number = found(known, lost=0)
    assert number == found(known, lost=1)
    assert number != found(known, lost=2)


def test_unlike_capacitors_across_one_pair_are_told_apart():
    pair = replace(WIRING, cans=(Can((0, 2), 0.2, 0), Can((0, 2), 0.21, 0), Can((1, 2), 0.1, 0)), banks=1)
    known = catalogue(pair, (1.0,))
    assert found(known, lost=0) != found(known, lost=1)


def test_what_differs_only_in_legs_nobody_measures_is_alike():
    """A capacitor between L1 and N loads the supply alone: lost or not, leg meters cannot see it."""
    blind = replace(WIRING, cans=(Can((0, 3), 0.2, 0), Can((1, 2), 0.1, 0)), banks=1)
    known = catalogue(blind, (1.0,))
    assert found(known, lost=0) == 0
    metered = replace(blind, supply=(CurrentChannel(0, (0, 3)),), outgoing=(CurrentChannel(0, (0, 3)),))
    assert found(catalogue(metered, (1.0,)), lost=0) != 0


def test_an_ammeter_in_the_bank_tells_what_the_legs_do_not():
    """The run bank holds half of what a like one that is always in does: lost in one or the other."""
    cans = (Can((0, 2), 0.2, 0), Can((0, 2), 0.2, -1))
    blind = replace(WIRING, cans=cans, banks=1)
    seeing = replace(blind, ammeters=(BankAmmeter(0, 2),))
    assert found(catalogue(blind, (1.0,)), lost=0) == found(catalogue(blind, (1.0,)), lost=1)
    assert found(catalogue(seeing, (1.0,)), lost=0) != found(catalogue(seeing, (1.0,)), lost=1)


def test_a_bank_part_closed_is_in_by_half_with_a_share_that_is_not_known():
    known = catalogue(WIRING, RUNNING)
    number = found(known, closed=(PART, 0.0))
    fixed = matrix_of([WIRING.cans[2]])
    assert known.positions.matrices[number] == pytest.approx(0.5 * matrix_of(RUN) + fixed, abs=1e-12)
    assert known.positions.loose[number] == pytest.approx(PART_SPREAD * matrix_of(RUN), abs=1e-12)
    assert known.positions.shares[number] == pytest.approx([0.5, 0.5, 1.0, 0.0])
    whole = found(known, closed=RUNNING, lost=None, pole=None, mirrored=False)
    assert not known.positions.loose[whole].any()


def test_the_idler_may_run_backwards():
    known = catalogue(WIRING, RUNNING)
    assert known.positions.mirrored.sum() == 1
    number = int(known.positions.mirrored.argmax())
    assert known.hypotheses[number] == replace(known.hypotheses[0], mirrored=True, weight=known.weights[number])
    assert known.positions.matrices[number] == pytest.approx(known.positions.matrices[0])


def test_reactive_power_without_a_sign_is_a_way_of_its_own_for_each_channel():
    known = catalogue(WIRING, RUNNING, unsigned=(0, 1))
    for channel in (0, 1):
        signs = known.positions.signs[found(known, flipped=channel)]
        assert signs.tolist() == [-1.0 if k == channel else 1.0 for k in range(2)]
    assert known.positions.signs[0].tolist() == [1.0, 1.0]
    assert not any(h.flipped is not None for h in catalogue(WIRING, RUNNING).hypotheses)


def test_what_is_out_of_the_ordinary_is_believed_less_beforehand():
    known = catalogue(WIRING, RUNNING)
    plain = {h.closed for h in known.hypotheses if h == Hypothesis(h.closed)}
    for hypothesis, weight in zip(known.hypotheses, known.weights, strict=True):
        is_plain = hypothesis == Hypothesis(hypothesis.closed) and hypothesis.closed in plain
        assert weight == 1.0 if is_plain else weight < 1.0


def test_every_array_has_a_row_for_each_hypothesis():
    known = catalogue(WIRING, (1.0, 1.0), unsigned=(0,))
    count = len(known.hypotheses)
    assert len(known.alike) == len(known.weights) == count
    for name in ("matrices", "shares", "bank_matrices", "loose", "mirrored", "signs"):
        assert len(getattr(known.positions, name)) == count


def test_a_converter_without_capacitors_has_its_sense_and_no_more():
    bare = replace(WIRING, cans=(), banks=0)
    assert [(h.closed, h.mirrored) for h in catalogue(bare, ()).hypotheses] == [((), False), ((), True)]
