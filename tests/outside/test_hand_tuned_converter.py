"""A hand-tuned converter on an L1-N feed, with a light machine (common practice, no source).

Read were 239, 246, 244 V to neutral; 416, 419, 432 V between lines, which pair read which was not noted; 2 V neutral to
earth; 1.68, 2.26, 2.18 A.
"""

import itertools

import numpy as np
import pytest

from idlerwatch.cli.assess import contrast
from idlerwatch.core.byhand import Circumstances, Moment, assess_by_hand
from idlerwatch.core.conductors import LINE_PAIRS, NEUTRAL_PAIRS, Feed, Pair
from idlerwatch.core.converter.conductor_map import fit_conductors
from idlerwatch.core.electrical.sequence import sequence_components, unbalance_factor
from idlerwatch.core.electrical.unbalance import phase_voltage_unbalance_rate, voltage_unbalance_factor

LEGS = (239.0, 246.0, 244.0)
LINES = (416.0, 419.0, 432.0)
ASSIGNMENTS = pytest.mark.parametrize("lines", list(itertools.permutations(LINES)))
CLASS = 0.005 / np.sqrt(3.0)


def test_the_lines_say_what_the_legs_hide():
    assert 100.0 * float(voltage_unbalance_factor(np.array(LINES))) == pytest.approx(2.34, abs=0.01)
    assert 100.0 * float(phase_voltage_unbalance_rate(np.array(LEGS))) == pytest.approx(1.65, abs=0.005)


@ASSIGNMENTS
def test_all_six_voltages_fit_whatever_pair_read_which(lines):
    voltages = np.array([*LEGS, *lines])
    found = fit_conductors(Feed(Pair("L1", "N"), 230.0), (*NEUTRAL_PAIRS, *LINE_PAIRS), voltages, CLASS * voltages)
    factor = 100.0 * float(unbalance_factor(sequence_components(found.points[:3] - found.points[3])))
    assert 2.30 <= factor <= 2.34
    assert found.misfit == -1
    assert found.degrees_of_freedom == 1


@ASSIGNMENTS
def test_the_assessment_makes_the_contrast_plain(lines):
    words = dict(zip(map(str, (*NEUTRAL_PAIRS, *LINE_PAIRS)), (*LEGS, *lines), strict=True))
    readings = {**words, "N-PE": 2.0, "L1": 1.68, "L2": 2.26, "L3": 2.18}
    (given,) = assess_by_hand([Moment("", readings)], Circumstances())
    factor = given.figure("converter", "converter", "voltage_unbalance_factor")
    assert 0.0230 <= factor.value <= 0.0234
    assert 0.0 < factor.uncertainty < 0.01
    assert given.figure("earthing", "converter", "neutral_earth_voltage").value == 2.0
    assert not [remark for remark in given.remarks if "fit" in remark]
    assert contrast(given).startswith("The legs look more even than the lines are: 1.6 % to neutral")
