import math
from itertools import pairwise

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from idlerwatch.core.values import UNKNOWN, Assessment, Figure, StandingAlarm
from idlerwatch.core.watch.windows import begin_windows, is_flagged, step_windows

VOLTAGE = ("leg", "l2", "voltage")
POWER = ("leg", "l2", "active_power")
ENERGY = ("supply", "supply", "active_energy_import")
NOON = 1_700_000_400.0 - 1_700_000_400.0 % 3600.0  # a whole hour


def alarm(state="unacknowledged"):
    return StandingAlarm("leg-low", "l2", "leg-low/l2/0", state, "medium", 0.0, 0.88, 0.01, 1.0, 0.9, "1", "", "", "")


def assessment(at, figures, utc=None, alarms=()):
    return Assessment(
        at=at,
        utc=NOON + at if utc is None else utc,
        local_offset=0.0,
        settings=1,
        state="running",
        state_since=0.0,
        loading="",
        lamp="fine",
        angles="not seen",
        figures=figures,
        meters={},
        remarks=(),
        alarms=tuple(alarms),
    )


def volts(value):
    return {VOLTAGE: Figure(value, 1.0, "measured")}


def rows_of(assessments, cycle_s=1.0):
    state, rows = begin_windows(cycle_s), []
    for each in assessments:
        state, closed = step_windows(state, each)
        rows += closed
    return rows


def of(rows, window="10s", measurement="leg"):
    return [row for row in rows if (row.window, row.measurement) == (window, measurement)]


def test_a_voltage_is_the_root_of_the_mean_of_squares_and_a_power_the_mean():
    stream = [assessment(k, {VOLTAGE: Figure(v), POWER: Figure(v)}) for k, v in enumerate([3.0, 4.0] * 5)]
    (row,) = of(rows_of([*stream, assessment(10.0, volts(1.0))]))
    assert row.fields["voltage"] == pytest.approx(math.sqrt(12.5))
    assert row.fields["active_power"] == pytest.approx(3.5)
    assert (row.fields["voltage_min"], row.fields["voltage_max"]) == (3.0, 4.0)
    assert (row.fields["count"], row.fields["flagged"]) == (10.0, 0.0)


def test_a_counter_is_its_last_value():
    stream = [assessment(k, {ENERGY: Figure(100.0 + k)}) for k in range(11)]
    assert of(rows_of(stream), measurement="supply")[0].fields["active_energy_import"] == 109.0


def test_windows_lie_on_boundaries_of_the_clock():
    rows = of(rows_of(assessment(k + 7.3, volts(230.0)) for k in range(40)))
    assert [row.start_utc - NOON for row in rows] == [0.0, 10.0, 20.0, 30.0]


@pytest.mark.parametrize(("missing", "flagged"), [(1, 0.0), (2, 1.0)])
def test_a_row_is_flagged_where_more_than_a_tenth_is_missing(missing, flagged):
    stream = [assessment(k, volts(230.0 if k >= missing else math.nan)) for k in range(11)]
    row = of(rows_of(stream))[0]
    assert (row.fields["count"], row.fields["flagged"]) == (10.0 - missing, flagged)


def test_a_figure_never_seen_is_left_out_and_so_is_a_row_without_any():
    stream = [
        assessment(k, {VOLTAGE: UNKNOWN, POWER: UNKNOWN, ("leg", "l1", "voltage"): Figure(1.0)}) for k in range(11)
    ]
    (row,) = of(rows_of(stream))
    assert row.subject == "l1"
    stream = [assessment(k, {VOLTAGE: Figure(1.0), POWER: UNKNOWN}) for k in range(11)]
    assert "active_power" not in of(rows_of(stream))[0].fields


def test_every_field_is_a_float():
    for row in rows_of(assessment(k, volts(230), alarms=[alarm()]) for k in range(3700)):
        assert all(type(value) is float for value in row.fields.values())


def test_long_windows_are_made_of_the_short_ones():
    values = [230.0 + math.sin(k) for k in range(3601)]
    rows = rows_of(assessment(float(k), volts(v)) for k, v in enumerate(values))
    (hour,) = of(rows, "1h")
    assert hour.fields["count"] == 3600.0
    assert hour.fields["voltage"] == pytest.approx(math.sqrt(sum(v * v for v in values[:-1]) / 3600.0), rel=1e-12)
    assert hour.fields["voltage_max"] == max(values[:-1])
    tens = of(rows, "10min")
    assert [row.fields["count"] for row in tens] == [600.0] * 6
    assert math.sqrt(sum(row.fields["voltage"] ** 2 for row in tens) / 6.0) == pytest.approx(hour.fields["voltage"])


def test_a_figure_that_comes_up_late_counts_in_the_long_window_all_the_same():
    early, late = ({VOLTAGE: Figure(2.0)}, {POWER: Figure(5.0), VOLTAGE: Figure(2.0)})
    rows = rows_of(assessment(float(k), late if k >= 300 else early) for k in range(601))
    (row,) = of(rows, "10min")
    assert row.fields["active_power"] == 5.0
    assert row.fields["count"] == 600.0


def test_an_alarms_row_tells_which_part_of_the_window_it_stood():
    stream = [assessment(k, volts(1.0), alarms=[alarm()] if k < 3 else [alarm("returned")]) for k in range(11)]
    (row,) = of(rows_of(stream), measurement="alarm")
    assert row.subject == "leg-low/l2"
    assert row.fields == {"standing": 0.3, "count": 10.0, "flagged": 0.0}


def test_a_clock_stepped_forward_closes_the_window_short_and_flagged():
    stream = [assessment(k, volts(1.0)) for k in range(5)]
    stream += [assessment(k, volts(1.0), utc=NOON + k + 3000.0) for k in range(5, 30)]
    rows = of(rows_of(stream))
    assert rows[0].fields["flagged"] == 1.0
    assert [row.start_utc - NOON for row in rows] == [0.0, 3000.0, 3010.0]
    assert sum(row.fields["count"] for row in rows) == 20.0  # the last five are in the open window


def test_a_clock_stepped_back_keeps_the_window_open_until_it_has_caught_up():
    stream = [assessment(k, volts(1.0)) for k in range(15)]
    stream += [assessment(k, volts(1.0), utc=NOON + k - 30.0) for k in range(15, 61)]
    rows = of(rows_of(stream))
    starts = [row.start_utc - NOON for row in rows]
    assert starts == [0.0, 10.0, 20.0]
    assert [row.fields["count"] for row in rows] == [10.0, 40.0, 10.0]
    assert [row.fields["flagged"] for row in rows] == [0.0, 1.0, 0.0]


def test_a_clock_that_was_wrong_by_days_is_believed_once_it_is_set_back():
    stream = [assessment(k, volts(1.0), utc=NOON + 1e6 + k) for k in range(5)]
    stream += [assessment(k, volts(1.0)) for k in range(5, 25)]
    rows = of(rows_of(stream))
    assert [row.start_utc for row in rows[1:]] == [NOON, NOON + 10.0]
    assert rows[0].start_utc > NOON + 9e5


def test_with_free_running_cycles_the_mean_spacing_says_what_a_whole_window_holds():
    stream = [assessment(0.4 * k, volts(1.0)) for k in range(51)]
    assert [row.fields["flagged"] for row in of(rows_of(stream, cycle_s=0.0))] == [0.0, 0.0]
    late = [assessment(5.0 + 0.4 * k, volts(1.0)) for k in range(20)]
    assert of(rows_of(late, cycle_s=0.0))[0].fields["flagged"] == 1.0


def test_the_flag_stands_on_both_sides_of_its_limits():
    assert not is_flagged(9.0, 10.0)
    assert is_flagged(8.9, 10.0)
    assert not is_flagged(12.0, 10.0)
    assert is_flagged(12.1, 10.0)


figures = st.dictionaries(
    st.sampled_from([VOLTAGE, POWER, ENERGY]), st.builds(Figure, st.floats(-1e6, 1e6) | st.just(math.nan))
)


@settings(max_examples=50, deadline=None)
@given(st.lists(st.tuples(st.floats(-3500, 4000), figures), max_size=60))
def test_while_the_clock_swings_by_less_than_an_hour_starts_only_grow_and_nothing_is_counted_twice(stream):
    latest, samples = NOON, []
    for at, (step, values) in enumerate(stream):
        samples.append(assessment(float(at), values, utc=latest + step))
        latest = max(latest, latest + step)
    rows = rows_of(samples)
    for measurement in ("leg", "supply"):
        starts = [row.start_utc for row in of(rows, measurement=measurement)]
        assert all(one < two for one, two in pairwise(starts))
        assert sum(row.fields["count"] for row in of(rows, measurement=measurement)) <= len(samples)
