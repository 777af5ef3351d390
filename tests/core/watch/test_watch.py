import math

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from fakes.sheds import (
    SURGE,
    cycle,
    cycles,
    running,
    said,
    slipway,
    slipway_lines,
    split_phase,
    split_running,
    stopped,
)
from idlerwatch.core.values import (
    Acknowledge,
    AlarmEvent,
    Assessment,
    CycleEnd,
    MeterSilent,
    Reading,
    Shelve,
    Trouble,
    WindowRow,
)
from idlerwatch.core.watch.watch import Watch


def fed(shed, stream):
    watch, outputs = Watch.begin(shed), []
    for event in stream:
        watch, told = watch.take(event)
        outputs += told
    return outputs


def assessments(outputs):
    return [output for output in outputs if isinstance(output, Assessment)]


def a_day(shed_running, shed_stopped):
    return list(cycles((3, shed_stopped), (15, shed_running), (3, shed_stopped), (5, shed_running)))


def test_only_a_cycles_end_gives_anything_and_it_gives_one_assessment_first():
    watch = Watch.begin(slipway())
    for event in cycles((15, running())):
        watch, told = watch.take(event)
        if isinstance(event, CycleEnd):
            assert isinstance(told[0], Assessment)
            assert not any(isinstance(output, Assessment) for output in told[1:])
        else:
            assert told == ()


def test_events_come_before_rows():
    watch = Watch.begin(slipway())
    for event in cycles((25, running())):
        watch, told = watch.take(event)
        order = [isinstance(output, WindowRow) for output in told]
        assert order == sorted(order)


@pytest.mark.parametrize(
    "event",
    [
        Acknowledge(1.0, "leg-low", "l2", "owner"),
        Shelve(1.0, "leg-low", "l2", "owner", 60.0),
        Trouble(1.0, "disk", "full"),
    ],
)
def test_what_people_and_the_tool_say_waits_for_the_cycles_end(event):
    watch, told = Watch.begin(slipway()).take(event)
    assert told == ()
    assert watch.told == (event,)
    for each in cycle(2.0, running()):
        watch, _ = watch.take(each)
    assert watch.told == ()


def test_a_watch_is_a_value_and_may_be_taken_up_again_where_it_was():
    stream = a_day(running(), stopped())
    watch = Watch.begin(slipway())
    for event in stream[:40]:
        watch, _ = watch.take(event)

    def rest(start):
        outputs = []
        for event in stream[40:]:
            start, told = start.take(event)
            outputs += told
        return outputs

    assert repr(rest(watch)) == repr(rest(watch))


@pytest.mark.parametrize(
    ("shed", "on", "off"),
    [
        (slipway(), running(), stopped()),
        (split_phase(), split_running(), split_running(current=0.0)),
    ],
)
def test_the_same_inputs_give_the_same_outputs(shed, on, off):
    stream = a_day(on, off)
    assert repr(fed(shed, stream)) == repr(fed(shed, stream))


def test_a_slipway_shed_starts_runs_and_stops():
    outputs = fed(slipway(), cycles((3, stopped()), (2, stopped(supply=SURGE)), (5, running()), (5, stopped())))
    told = [assessment.state for assessment in assessments(outputs)]
    assert told[2] == "stopped"
    assert told[3:5] == ["starting"] * 2
    assert told[5:11] == ["running"] * 6
    assert told[-1] == "stopped"
    assert assessments(outputs)[9].figure("converter", "converter", "start_time").value == 2.0


def test_every_window_of_ten_seconds_is_told_with_its_meters_legs_and_supply():
    rows = [output for output in fed(slipway(), cycles((35, running()))) if isinstance(output, WindowRow)]
    assert {row.start_utc for row in rows} == {1_700_000_000.0 + k for k in (0.0, 10.0, 20.0)}
    first = {(row.measurement, row.subject): row.fields for row in rows if row.start_utc == 1_700_000_000.0}
    assert first["leg", "l2"]["voltage"] == pytest.approx(226.0)
    assert first["supply", "supply"]["current"] == pytest.approx(11.7)
    assert first["meter", "leg-3"]["answering"] == 1.0
    assert first["earthing", "converter"]["neutral_earth_voltage"] == pytest.approx(1.5)
    assert all(not math.isnan(value) for row in rows for value in row.fields.values())


def test_the_alarm_step_is_given_the_rows_of_the_sample_before():
    watch = Watch.begin(slipway())
    for event in cycles((11, running())):
        watch, told = watch.take(event)
    assert watch.rows == tuple(output for output in told if isinstance(output, WindowRow))
    assert watch.rows
    for event in cycle(11.0, running()):
        watch, _ = watch.take(event)
    assert watch.rows == ()


# --------------------------------------------------------------------------
# Whatever comes in
# --------------------------------------------------------------------------

SHEDS = [slipway(), slipway_lines(), split_phase()]
METERS = ["supply", "leg-1", "leg-2", "leg-3", "legs", "lines", "earth", "bank", "stranger"]
QUANTITIES = [
    "voltage",
    "current",
    "active_power",
    "reactive_power",
    "apparent_power",
    "power_factor",
    "frequency",
    "active_energy_import",
    "state",
]
numbers = (
    st.floats(width=32)
    | st.floats(0.0, 500.0)
    | st.sampled_from([0.0, -0.0, 230.0, 398.4, math.nan, math.inf, -math.inf, 3.4e38, 1e-38])
)
instants = st.floats(0.0, 1e5) | st.sampled_from([math.nan, math.inf, -1.0])
readings = st.builds(
    Reading,
    st.sampled_from(METERS),
    instants,
    st.dictionaries(st.tuples(st.integers(0, 6), st.sampled_from(QUANTITIES)), numbers, max_size=20),
)
silences = st.builds(
    MeterSilent, st.sampled_from(METERS), instants, st.sampled_from(["no answer", "booting", "refused"])
)
others = (
    st.builds(Acknowledge, instants, st.sampled_from(["leg-low", "x"]), st.sampled_from(["l2", ""]), st.just("me"))
    | st.builds(Shelve, instants, st.just("leg-low"), st.just("l2"), st.just("me"), st.floats(0, 1e5))
    | st.builds(Trouble, instants, st.sampled_from(["disk", "bus panel"]), st.sampled_from(["", "gone"]))
)
ends = st.builds(CycleEnd, instants, st.floats(-1e9, 4e9) | st.just(math.nan), st.floats(-5e4, 5e4))
streams = st.lists(st.one_of(readings, readings, readings, silences, ends, ends, others), max_size=60)


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(st.sampled_from(SHEDS), streams)
def test_whatever_comes_in_every_cycle_ends_in_one_assessment_and_nothing_is_raised(shed, stream):
    outputs = fed(shed, stream)
    assert len(assessments(outputs)) == sum(isinstance(event, CycleEnd) for event in stream)
    for assessment in assessments(outputs):
        assert assessment.state in ("stopped", "starting", "change-over", "running", "run-down", "blind")
    assert all(isinstance(output, (Assessment, AlarmEvent, WindowRow)) for output in outputs)


volts = st.floats(0.0, 300.0)


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(volts, volts, volts, volts), min_size=1, max_size=4), st.sampled_from([0.0, 11.7, 110.0]))
def test_any_voltages_whatsoever_are_assessed(samples, current):
    shed = slipway_lines()
    meters = [
        {
            "supply": said(first, current, 100.0, 100.0),
            "earth": said(fourth),
            "legs": {(k, "voltage"): v for k, v in enumerate((first, second, third, second, third, fourth), 1)},
        }
        for first, second, third, fourth in samples
    ]
    outputs = fed(shed, cycles(*((2, each) for each in meters)))
    for assessment in assessments(outputs):
        factor = assessment.figure("converter", "converter", "voltage_unbalance_factor")
        assert math.isnan(factor.value) or factor.value >= 0.0
