"""The text of a learned circuit: whatever a file holds, reading it gives a circuit or one ValueError."""

import contextlib

from hypothesis import given
from hypothesis import strategies as st

from idlerwatch.core.converter.known import read_known

SCALARS = st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=6)
VALUES = st.recursive(SCALARS, lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=4), inner))
KEYS = ("version", "learned_at", "converter", "states", "parameter", "covariance", "has_converged", "misfit")
SOUND = {
    "version": 1, "learned_at": "", "converter": "", "arrangement": "", "states": 3, "samples": 9,
    "lowest_supply_volts": 216, "highest_supply_volts": 253.0, "misfit": 0.4, "condition": 10.0,
    "has_converged": True, "not_separable": [], "accepted_by": "", "accepted_at": "",
    "parameter": [{"name": "g0", "value": 1}], "covariance": [[0.5]],
}  # fmt: skip


def test_a_sound_mapping_is_read():
    assert read_known(SOUND).names == ("g0",)


@given(st.dictionaries(st.sampled_from(KEYS), VALUES, max_size=4))
def test_any_mapping_is_read_or_refused_with_a_sentence(changes):
    with contextlib.suppress(ValueError):
        read_known(SOUND | changes)
