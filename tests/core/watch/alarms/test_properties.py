"""What holds whatever comes in."""

import math

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from fakes.alarm_scenes import SHEDS, STATES, Player, alarm_list, assessment, normal, of, shed
from idlerwatch.core.values import Acknowledge, Shelve, Trouble, WindowRow
from idlerwatch.core.watch.alarms import begin_alarms, judge_alarms
from idlerwatch.core.watch.lifecycle import STATES as ALARM_STATES

BUILT = {feed: build() for feed, build in SHEDS.items()}
KEYS = {feed: sorted(normal(built)) for feed, built in BUILT.items()}
VALUES = st.one_of(st.floats(allow_nan=True, allow_infinity=True), st.floats(0.0, 2.0), st.just(math.nan))
TAGS = sorted(tag for tag, _ in alarm_list(is_line=True))
SUBJECTS = st.sampled_from(("l2", "converter", "supply", "panel", "disk", "nobody"))
TOLD = st.one_of(
    st.builds(Acknowledge, st.just(0.0), st.sampled_from(TAGS), SUBJECTS, st.just("anna")),
    st.builds(Shelve, st.just(0.0), st.sampled_from(TAGS), SUBJECTS, st.just("anna"), st.floats(-1.0, 1e5)),
    st.builds(
        Trouble, st.just(0.0), st.sampled_from(("disk", "mqtt", "bus panel", "x")), st.sampled_from(("", "gone"))
    ),
)
ROWS = st.builds(
    WindowRow,
    st.sampled_from(("10s", "10min", "1h")),
    st.just(0.0),
    st.just("converter"),
    st.just("converter"),
    st.dictionaries(st.sampled_from(("voltage_unbalance_factor", "flagged")), st.floats(0.0, 1.0)),
)
MODEST = settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.too_slow])


@st.composite
def days(draw):
    """A feed and a sequence of anything that may happen."""
    feed = draw(st.sampled_from(sorted(SHEDS)))
    names = [meter.name for meter in BUILT[feed].meter]
    figures = st.dictionaries(st.sampled_from(KEYS[feed]), VALUES, max_size=8)
    meters = st.dictionaries(
        st.sampled_from(names), st.sampled_from(("answering", "asleep", "booting", "no answer", "not asked"))
    )
    step = st.tuples(
        st.sampled_from(sorted(STATES)),
        figures,
        meters,
        st.lists(TOLD, max_size=2).map(tuple),
        st.lists(ROWS, max_size=1).map(tuple),
        st.integers(1, 40),
    )
    return feed, draw(st.lists(step, min_size=1, max_size=6))


def run(day):
    feed, steps = day
    player = Player(BUILT[feed])
    for letter, figures, meters, told, rows, seconds in steps:
        player.play(seconds, letter, figures, meters=meters, told=told, rows=rows)
    return player


@MODEST
@given(days())
def test_anything_gives_values_and_never_an_exception(day):
    player = run(day)
    for alarm in player.standing:
        assert alarm.state in ALARM_STATES
        assert alarm.state != "normal"
        assert len(alarm.text) <= 240


@MODEST
@given(days())
def test_replay_gives_the_same_events_under_the_same_names(day):
    first, second = run(day), run(day)
    assert [repr(event) for event in first.events] == [repr(event) for event in second.events]


@MODEST
@given(days())
def test_no_event_without_a_transition_and_no_name_twice(day):
    events = run(day).events
    for event in events:
        assert event.previous != event.alarm.state or event.is_told
    names = [event.identity for event in events]
    assert len(names) == len(set(names))


@MODEST
@given(st.floats(0.55, 0.79), st.integers(1, 9))
def test_excess_shorter_than_the_delay_is_not_told(ratio, seconds):
    player = Player(BUILT["L1-N"])
    player.play(5)
    player.play(seconds, figures={("leg", "l2", "voltage_ratio"): ratio})
    player.play(100)
    assert player.events == []


def test_normal_day_tells_nothing():
    for feed, built in BUILT.items():
        player = Player(built)
        for letter in "SACULMLUDS":
            player.play(3 if letter in "ACMD" else 120, letter, still(letter))
        assert player.events == [], feed


def still(letter):
    """No machine draws while the converter does not run."""
    return {} if letter in "LM" else {("leg", leg, "current"): 0.0 for leg in ("l1", "l2", "l3")}


def test_unknown_figure_keeps_a_standing_alarm():
    player = Player(shed())
    low = ("leg", "l2", "voltage_ratio")
    player.play(30)
    player.play(70, figures={low: 0.88})
    player.play(600, figures={low: math.nan})
    assert player.state_of("leg-low") == "unacknowledged"


@pytest.mark.parametrize("feed", SHEDS)
def test_occurrence_carries_tag_subject_and_the_instant_it_rose(feed):
    built = BUILT[feed]
    state = begin_alarms(built)
    for at in range(20):
        given_ = assessment(built, float(at), "L", {("supply", "supply", "voltage_ratio"): 0.8})
        state, events, _, _ = judge_alarms(state, given_)
        for event in of(events, "supply-very-low"):
            assert event.identity == "supply-very-low/converter/2026-05-28T20:26:50.000Z/1"
            return
    pytest.fail("was not raised")
