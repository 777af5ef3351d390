"""What would be usual at this load: against the rig's own voltages with the bank in, seen with the bank out."""

from dataclasses import replace

import numpy as np
import pytest

from idlerwatch.core.converter.circuit import Can, CurrentChannel, N, Sample, Wiring, nominal_positions
from idlerwatch.core.converter.hypotheses import catalogue
from idlerwatch.core.converter.nameplate import Nameplate, typical_machine
from idlerwatch.core.converter.prior import Limits, prior_of
from idlerwatch.core.converter.recover import Circuit, Recoverer
from idlerwatch.core.converter.usual import UsualLegs

TURN = 2.0 * np.pi / 3.0
WIRING = Wiring(
    rated_current=typical_machine(Nameplate(7.5, 400.0)).rated_current,
    nominal_voltage=230.0,
    tied=True,
    hub=N,
    directions=(0.0, -TURN, TURN),
    free=(1, 2),
    cans=(Can((2, 0), 0.24, 0), Can((1, 2), 0.17, 0)),
    banks=1,
    generated=(CurrentChannel(1, (1, 3)), CurrentChannel(2, (2, 3))),
)
PARAMETERS = prior_of(WIRING, [Nameplate(7.5, 400.0)], Limits([0.005] * 3, [0.01] * 2)).mean
CLOSED = nominal_positions(WIRING)
USUAL = UsualLegs(WIRING, CLOSED, PARAMETERS)


def balanced(positions, currents):
    """A sample whose currents are what is told and whose voltages follow from the circuit in these positions."""
    begin = np.array([[235.0, 228.0, 228.0]] * len(currents))
    blank = np.zeros((len(currents), 0))
    sample = Sample(begin, currents, np.zeros((len(currents), 2, 2)), blank, blank)
    potentials = UsualLegs(WIRING, positions, PARAMETERS).potentials(sample)
    return replace(sample, rays=np.abs(potentials)), potentials


CURRENTS = np.array([[0j, 0j], [4.0 - 3.0j, 3.0 - 4.0j], [9.0 - 6.0j, 8.0 - 7.0j]])


def test_the_balance_holds_where_it_says_the_legs_would_stand():
    """Recovered from those magnitudes, the angles are the same and nothing is left over."""
    sample, potentials = balanced(CLOSED, CURRENTS)
    size = len(PARAMETERS)
    known = Circuit(PARAMETERS, np.zeros((size, size)), np.full(size, 1e-6), np.full(WIRING.rows, 1e-3))
    found = Recoverer(WIRING, CLOSED, known).recover(sample)
    assert np.abs(found.residuals).max() < 1e-5
    assert found.potentials[:, 0] == pytest.approx(potentials, abs=1e-3)


def test_with_the_bank_out_the_usual_voltages_are_those_with_it_in():
    ways = catalogue(WIRING, (1.0,)).positions
    opened = type(ways)(*(getattr(ways, name)[1:2] for name in ways.__slots__))
    out, _ = balanced(opened, CURRENTS)
    closed, potentials = balanced(CLOSED, CURRENTS)
    again = USUAL.potentials(out)
    assert again == pytest.approx(potentials, abs=1e-3)
    assert (out.rays[:, 1:] < 0.97 * closed.rays[:, 1:]).all()


def test_what_no_circuit_could_carry_has_no_usual_voltage():
    absurd = np.array([[900.0 + 0j, 900.0 + 0j]])
    sample = Sample(np.array([[230.0, 230.0, 230.0]]), absurd, np.zeros((1, 2, 2)), np.zeros((1, 0)), np.zeros((1, 0)))
    assert np.isnan(USUAL.potentials(sample)).all()


def test_many_at_once_equal_each_alone():
    sample, potentials = balanced(CLOSED, CURRENTS)
    for row in range(len(CURRENTS)):
        one = Sample(*(getattr(sample, name)[row : row + 1] for name in Sample.__slots__))
        assert USUAL.potentials(one)[0] == pytest.approx(potentials[row], abs=1e-6)
