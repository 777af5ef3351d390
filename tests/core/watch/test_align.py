import math
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fakes.sheds import cycle, running, slipway
from idlerwatch.core.values import Acknowledge, CycleEnd, MeterSilent, Reading, Sample
from idlerwatch.core.watch.align import begin, begin_align, step

V = (1, "voltage")
E = (1, "active_energy_import")
ON = (1, "state")
METERS = {"a": frozenset({E}), "b": frozenset(), "c": frozenset()}


def run(*events):
    state, samples = begin_align(METERS), []
    for event in events:
        state, sample = step(state, event)
        if sample is not None:
            samples.append(sample)
    return samples


def test_each_cycle_end_gives_one_sample_and_nothing_else_gives_any():
    samples = run(Reading("a", 0.1, {V: 1.0}), Acknowledge(0.2, "leg-low", "l2", "owner"), CycleEnd(1.0), CycleEnd(2.0))
    assert len(samples) == 2


def test_the_instant_is_the_earliest_of_the_latest_readings():
    (sample,) = run(
        Reading("b", 0.7, {V: 2.0}), Reading("a", 0.3, {V: 1.0}), Reading("c", 0.5, {V: 1.0}), CycleEnd(1.0)
    )
    assert sample.at == 0.3


def test_later_meters_are_interpolated_to_the_instant_between_their_last_two_readings():
    _, sample = run(
        Reading("a", 0.0, {V: 230.0}),
        Reading("b", 0.4, {V: 200.0}),
        CycleEnd(0.5),
        Reading("a", 1.0, {V: 230.0}),
        Reading("b", 1.4, {V: 210.0}),
        CycleEnd(1.5),
    )
    assert sample.at == 1.0
    assert sample.values["a"][V] == 230.0
    assert sample.values["b"][V] == pytest.approx(200.0 + 10.0 * 0.6)  # 0.6 s of the 1.0 s between the two


def test_a_linear_ramp_seen_with_skew_is_brought_back_onto_the_ramp():
    ramp = [
        Reading(name, k + skew, {V: 10.0 * (k + skew)}) for k in range(3) for name, skew in (("a", 0.1), ("b", 0.8))
    ]
    events = [ramp[0], ramp[1], CycleEnd(0.9), ramp[2], ramp[3], CycleEnd(1.9), ramp[4], ramp[5], CycleEnd(2.9)]
    for sample in run(*events)[1:]:
        assert sample.values["b"][V] == pytest.approx(10.0 * sample.at)


def test_a_discrete_input_takes_the_value_in_force_at_the_instant():
    _, sample = run(
        Reading("a", 0.0, {V: 1.0}),
        Reading("b", 0.4, {ON: 0.0}),
        CycleEnd(0.5),
        Reading("a", 1.0, {V: 1.0}),
        Reading("b", 1.4, {ON: 1.0}),
        CycleEnd(1.5),
    )
    assert sample.values["b"][ON] == 0.0


def test_slow_quantities_are_the_last_read():
    _, sample = run(Reading("a", 0.0, {V: 1.0, E: 3.6e6}), CycleEnd(0.5), Reading("a", 1.0, {V: 1.0}), CycleEnd(1.5))
    assert sample.values["a"][E] == 3.6e6


def test_a_meter_given_up_is_missing_with_its_reason_and_never_stale():
    first, second = run(
        Reading("a", 0.0, {V: 1.0, E: 5.0}),
        Reading("b", 0.0, {V: 1.0}),
        CycleEnd(0.5),
        MeterSilent("a", 1.0, "wrong answer"),
        Reading("b", 1.0, {V: 1.0}),
        CycleEnd(1.5),
    )
    assert "a" in first.values
    assert "a" not in second.values
    assert second.missing["a"] == "wrong answer"


def test_a_meter_never_heard_of_in_a_cycle_is_missing_as_well():
    (sample,) = run(Reading("b", 0.0, {V: 1.0}), CycleEnd(0.5))
    assert sample.missing == {"a": "no answer", "c": "no answer"}


def test_the_first_reading_after_a_silence_is_not_interpolated_with_the_old_one():
    *_, sample = run(
        Reading("a", 0.0, {V: 1.0}),
        Reading("b", 0.4, {V: 0.0}),
        CycleEnd(0.5),
        Reading("a", 1.0, {V: 1.0}),
        MeterSilent("b", 1.4, "no answer"),
        CycleEnd(1.5),
        Reading("a", 2.0, {V: 1.0}),
        Reading("b", 2.4, {V: 230.0}),
        CycleEnd(2.5),
    )
    assert sample.values["b"][V] == 230.0


def test_an_energy_from_before_a_silence_does_not_come_back():
    *_, sample = run(
        Reading("a", 0.0, {E: 5.0}), CycleEnd(0.5), CycleEnd(1.5), Reading("a", 2.0, {V: 1.0}), CycleEnd(2.5)
    )
    assert E not in sample.values["a"]


def test_with_no_meter_answering_the_instant_is_the_cycles_end():
    (sample,) = run(MeterSilent("a", 0.2, "no answer"), CycleEnd(1.0))
    assert sample.at == 1.0
    assert sample.values == {}


def test_of_two_readings_of_one_meter_in_a_cycle_the_later_counts():
    (sample,) = run(Reading("a", 0.1, {V: 1.0}), Reading("a", 0.2, {V: 2.0}), CycleEnd(1.0))
    assert sample.values["a"][V] == 2.0


def test_an_unknown_meter_is_ignored():
    (sample,) = run(Reading("stranger", 0.1, {V: 1.0}), CycleEnd(1.0))
    assert sample.values == {}
    assert "stranger" not in sample.missing


def test_a_missing_value_is_never_filled_from_the_reading_before():
    _, sample = run(
        Reading("a", 0.0, {V: 1.0}),
        Reading("b", 0.4, {V: 230.0}),
        CycleEnd(0.5),
        Reading("a", 1.0, {V: 1.0}),
        Reading("b", 1.4, {V: math.nan}),
        CycleEnd(1.5),
    )
    assert math.isnan(sample.values["b"][V])


def test_an_infinite_value_is_missing():
    (sample,) = run(Reading("a", 0.0, {V: math.inf, E: -math.inf}), CycleEnd(0.5))
    assert math.isnan(sample.values["a"][V])
    assert math.isnan(sample.values["a"][E])


def test_a_step_of_the_wall_clock_leaves_the_durations_alone():
    first, second = run(
        Reading("a", 0.0, {V: 1.0}), CycleEnd(0.5, 1000.0), Reading("a", 1.0, {V: 1.0}), CycleEnd(1.5, 5000.0)
    )
    assert second.at - first.at == 1.0
    assert (first.utc, second.utc) == (1000.0, 5001.0)


def test_settings_say_which_meters_there_are():
    state, sample = begin(slipway()), None
    for event in cycle(1.0, running(earth="no answer")):
        state, sample = step(state, event)
    assert isinstance(sample, Sample)
    assert set(sample.values) == {"supply", "leg-1", "leg-2", "leg-3", "bank"}
    assert sample.missing == {"earth": "no answer"}


numbers = st.floats(allow_nan=True, allow_infinity=True)
instants = st.floats(allow_nan=True, allow_infinity=True) | st.floats(0, 100)
meters = st.sampled_from(["a", "b", "c", "stranger"])
values = st.dictionaries(
    st.tuples(st.integers(0, 2), st.sampled_from(["voltage", "state", "active_energy_import"])), numbers
)
events = (
    st.builds(Reading, meters, instants, values)
    | st.builds(MeterSilent, meters, instants, st.sampled_from(["no answer", "booting"]))
    | st.builds(CycleEnd, instants, numbers, numbers)
)


@given(st.lists(events, max_size=40))
def test_whatever_comes_in_instants_never_run_backwards(stream):
    samples = run(*stream)
    assert len(samples) == sum(isinstance(event, CycleEnd) for event in stream)
    assert all(one.at <= two.at for one, two in pairwise(samples))
