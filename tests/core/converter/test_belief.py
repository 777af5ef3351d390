"""The filter: three clear samples decide, none decides alone, a steady doubt stays one, a change is noticed."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from idlerwatch.core.converter.belief import BOUND, SURE, begin_belief, believe, decided, probabilities, probability_of

CLEAR = np.array([0.0, -1000.0])
EVEN = np.ones(2)


def after(samples, start=None):
    belief = begin_belief(2) if start is None else start
    for sample in samples:
        belief = believe(belief, np.asarray(sample))
    return belief


@pytest.mark.parametrize(("samples", "is_decided"), [(1, False), (2, False), (3, True), (20, True)])
def test_three_clear_samples_decide(samples, is_decided):
    assert (probabilities(after([CLEAR] * samples), EVEN)[0] > SURE) == is_decided


def test_one_wild_sample_among_sound_ones_decides_nothing():
    sound = after([CLEAR] * 20)
    wild = after([CLEAR[::-1]], sound)
    assert probabilities(wild, EVEN)[0] > 0.9


def test_a_change_is_noticed_within_six_samples_whatever_was_believed():
    settled = after([CLEAR] * 10_000)
    assert probabilities(after([CLEAR[::-1]] * 6, settled), EVEN)[1] > SURE


@pytest.mark.parametrize("ratio", [2.0, 5.0, 6.8])
def test_a_steady_load_is_evidence_once(ratio):
    """A thousand alike samples tell no more than the likelihood ratio of one (odds e^ratio)."""
    share = probabilities(after([(0.0, -ratio)] * 1000), EVEN)[0]
    assert share == pytest.approx(1.0 / (1.0 + np.exp(-ratio)), rel=1e-9)
    assert share < SURE


def test_what_was_believed_beforehand_counts():
    assert probabilities(begin_belief(2), np.array([1.0, 3.0])).tolist() == [0.25, 0.75]


def test_missing_sample_changes_nothing():
    belief = after([CLEAR] * 2)
    assert believe(belief, np.array([np.nan, 0.0])) is belief


def test_exclusive_things_add_up_and_the_sure_one_is_decided():
    shares = np.array([0.5, 0.4995, 0.0005])
    assert probability_of(lambda number: number < 2, shares) == pytest.approx(0.9995)
    assert decided((0.9995, 0.0005)) == 0
    assert decided((0.998, 0.002)) is None


@given(st.lists(st.tuples(*[st.floats(-1e6, 1e6)] * 3), min_size=1, max_size=40))
def test_evidence_stays_bounded_and_probabilities_are_such(samples):
    belief = begin_belief(3)
    for sample in samples:
        belief = believe(belief, np.array(sample))
    assert np.abs(belief.evidence).max() <= BOUND + 1e-9
    shares = probabilities(belief, np.ones(3))
    assert shares.sum() == pytest.approx(1.0)
    assert (shares >= 0.0).all()
