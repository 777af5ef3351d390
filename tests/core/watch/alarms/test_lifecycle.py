"""The life cycle: the table, people, suppression, latching, restart, chronic and explained alarms."""

import pytest

from fakes.alarm_scenes import STATES, Player, assessment, house, of, shed
from idlerwatch.core.values import Acknowledge, Shelve
from idlerwatch.core.watch import lifecycle
from idlerwatch.core.watch.alarms import begin_alarms, judge_alarms, overdue, restore

L2 = ("leg", "l2", "voltage_ratio")
LOW, VERY_LOW, LOST = {L2: 0.88}, {L2: 0.78}, {L2: 0.3}
EARTH = ("earthing", "converter", "neutral_earth_voltage")


def acknowledge(tag, subject="l2"):
    return (Acknowledge(0.0, tag, subject, "anna"),)


def shelve(tag, seconds, subject="l2"):
    return (Shelve(0.0, tag, subject, "anna", seconds),)


# -------------------------------------------------------------------------- the table


def test_table_answers_every_finding_in_every_state():
    assert set(lifecycle.TABLE) == {(s, f) for s in lifecycle.STATES for f in lifecycle.FINDINGS}
    assert set(lifecycle.TABLE.values()) == set(lifecycle.STATES)


@pytest.mark.parametrize("state", lifecycle.STATES)
def test_every_state_can_be_left_for_normal(state):
    reached, fresh = {state}, {state}
    while fresh:
        fresh = {lifecycle.follow(s, f) for s in fresh for f in lifecycle.FINDINGS} - reached
        reached |= fresh
    assert "normal" in reached


def test_out_of_service_answers_nothing_but_the_settings():
    for finding in lifecycle.FINDINGS:
        expected = "normal" if finding == "enable" else "out-of-service"
        assert lifecycle.follow("out-of-service", finding) == expected


# -------------------------------------------------------------------------- people


def test_high_alarm_latches_until_it_is_acknowledged():
    player = Player(shed())
    player.play(30)
    player.play(15, figures=VERY_LOW)
    player.play(40)
    assert player.state_of("leg-very-low") == "returned"
    assert player.lamp == "look"
    player.play(1, told=acknowledge("leg-very-low"))
    assert player.state_of("leg-very-low") == "normal"
    assert player.lamp == "fine"


def test_acknowledged_high_alarm_returns_to_normal_and_is_told_once_more():
    player = Player(shed())
    player.play(30)
    player.play(15, figures=VERY_LOW)
    player.play(1, figures=VERY_LOW, told=acknowledge("leg-very-low"))
    assert player.state_of("leg-very-low") == "acknowledged"
    player.play(40)
    events = of(player.events, "leg-very-low")
    assert [event.alarm.state for event in events] == ["unacknowledged", "acknowledged", "normal"]
    assert [event.is_told for event in events] == [True, False, True]
    assert [event.identity.rpartition("/")[2] for event in events] == ["1", "2", "3"]


def test_acknowledging_what_does_not_stand_does_nothing():
    player = Player(shed())
    assert player.play(3, told=acknowledge("leg-low")) == []
    assert player.play(3, told=acknowledge("no-such-alarm")) == []


def test_returned_alarm_comes_again_as_a_new_occurrence():
    player = Player(shed())
    player.play(30)
    for _ in range(2):
        player.play(15, figures=VERY_LOW)
        player.play(40)
    events = [event for event in of(player.events, "leg-very-low") if event.alarm.state == "unacknowledged"]
    assert len({event.alarm.occurrence for event in events}) == 2
    assert events[1].previous == "returned"


def test_shelved_alarm_is_quiet_and_comes_back_by_the_timer():
    player = Player(shed())
    player.play(30)
    player.play(70, figures=LOW)
    player.play(1, figures=LOW, told=shelve("leg-low", 100.0))
    assert player.state_of("leg-low") == "shelved"
    assert player.play(99, figures=LOW) == []
    (event,) = player.play(1, figures=LOW)
    assert event.alarm.state == "unacknowledged"
    assert event.is_told


def test_shelving_lasts_eight_hours_at_most():
    player = Player(shed())
    player.play(1, told=shelve("leg-low", 1e6))
    player.at += 8 * 3600 - 2
    player.play(1)
    assert player.state_of("leg-low") == "shelved"
    player.play(1)
    assert player.state_of("leg-low") == "normal"


def test_shelving_is_taken_back_by_no_time():
    player = Player(shed())
    player.play(1, told=shelve("leg-low", 100.0))
    player.play(1, told=shelve("leg-low", 0.0))
    assert player.state_of("leg-low") == "normal"


def test_high_alarm_unacknowledged_for_ten_minutes_is_overdue():
    player = Player(shed())
    player.play(30)
    player.play(12, figures=VERY_LOW)
    raised = of(player.events, "leg-very-low")[0].utc
    assert overdue(player.state, raised + 599.0) == ()
    assert len(overdue(player.state, raised + 600.0)) == 1


# -------------------------------------------------------------------------- suppression


def test_suppressed_alarm_does_not_come():
    player = Player(shed())
    assert of(player.play(100, "S", LOW), "leg-low") == []


@pytest.mark.parametrize(("letter", "is_raised"), [("L", True), ("U", True), ("M", False), ("A", False), ("D", False)])
def test_letters_of_the_list_decide(letter, is_raised):
    player = Player(shed())
    assert bool(of(player.play(100, letter, LOW), "leg-low")) == is_raised


def test_delay_does_not_run_while_suppressed():
    player = Player(shed())
    player.play(50, "L", LOW)
    player.play(5, "M", LOW)
    assert of(player.play(60, "L", LOW), "leg-low") == []
    assert of(player.play(1, "L", LOW), "leg-low") != []


def test_machine_start_suspends_a_standing_alarm_which_then_resumes_and_returns_as_told():
    player = Player(shed())
    player.play(70, "L", LOW)
    player.play(5, "M", LOW)
    assert player.state_of("leg-low") == "suppressed"
    player.play(1, "L")
    assert player.state_of("leg-low") == "unacknowledged"
    player.play(61, "L")
    events = of(player.events, "leg-low")
    assert [event.alarm.state for event in events] == ["unacknowledged", "suppressed", "unacknowledged", "normal"]
    assert [event.is_told for event in events] == [True, False, False, True]
    assert len({event.alarm.occurrence for event in events}) == 1


def test_after_a_long_suppression_it_returns_quietly():
    player = Player(shed())
    player.play(70, "L", LOW)
    player.play(3600, "S", LOW)
    assert player.state_of("leg-low") == "suppressed"
    player.play(61, "L")
    events = of(player.events, "leg-low")
    assert [event.alarm.state for event in events] == ["unacknowledged", "suppressed", "normal"]
    assert not events[-1].is_told


def test_after_a_long_suppression_it_resumes_where_it_is_beyond():
    player = Player(shed())
    player.play(70, "L", LOW)
    player.play(3600, "S", LOW)
    player.play(1, "L", LOW)
    assert player.state_of("leg-low") == "unacknowledged"


def test_acknowledgement_during_a_suppression_is_kept():
    player = Player(shed())
    player.play(70, "L", LOW)
    player.play(5, "M", LOW, told=acknowledge("leg-low"))
    player.play(1, "L", LOW)
    assert player.state_of("leg-low") == "acknowledged"


# -------------------------------------------------------------------------- what is told


def test_log_priority_is_an_event_but_not_told_and_becomes_told_with_the_load():
    player = Player(shed())
    player.play(100, "U", LOW)
    (event,) = of(player.events, "leg-low")
    assert event.alarm.priority == "log"
    assert not event.is_told
    player.play(1, "L", LOW)
    again = of(player.events, "leg-low")[-1]
    assert again.is_told
    assert again.alarm.priority == "medium"
    assert again.alarm.occurrence == event.alarm.occurrence


def test_cause_that_is_in_keeps_its_consequences_quiet():
    player = Player(shed())
    player.play(30)
    player.play(200, figures=LOST)
    assert [event.is_told for event in of(player.events, "leg-lost")] == [True]
    assert [event.is_told for event in of(player.events, "leg-very-low")] == [False]
    assert [event.is_told for event in of(player.events, "leg-low")] == [False]


def test_consequence_is_told_when_its_cause_has_gone_and_it_is_still_beyond():
    player = Player(shed())
    player.play(30)
    player.play(100, figures=LOST)
    player.play(30, figures=LOW)
    assert [event.is_told for event in of(player.events, "leg-low")] == [False]
    player.play(20, figures=LOW)
    assert [event.is_told for event in of(player.events, "leg-low")][-1]


def test_cause_with_a_slightly_longer_delay_still_wins():
    player = Player(shed())
    player.play(30)
    events = player.play(10, figures={EARTH: 212.0})
    assert [event.alarm.tag for event in events if event.is_told] == ["neutral-earth-jump"]


def test_consequence_comes_when_the_cause_does_not():
    player = Player(shed())
    player.play(30)
    for volts in range(3, 60, 2):
        player.play(1, figures={EARTH: float(volts)})
    player.play(3, figures={EARTH: 60.0})
    assert "neutral-earth-dangerous" in [event.alarm.tag for event in player.events if event.is_told]
    assert of(player.events, "neutral-earth-jump") == []


def test_what_was_told_before_its_cause_came_is_not_withdrawn():
    player = Player(shed())
    player.play(30)
    player.play(70, figures=LOW)
    player.play(30, figures=LOST)
    assert [event.alarm.state for event in of(player.events, "leg-low")] == ["unacknowledged"]
    assert [event.is_told for event in of(player.events, "leg-low")] == [True]


def test_supply_lost_is_urgent_where_a_machine_ran_in_the_last_ten_seconds():
    gone = {("supply", "supply", "voltage_ratio"): 0.1}
    for letter, priority in (("L", "high"), ("U", "medium")):
        player = Player(shed())
        player.play(30, letter)
        player.play(5, "D", gone)
        assert of(player.events, "supply-lost")[0].alarm.priority == priority


def test_chronic_alarm_is_told_once_a_day_and_again_when_a_fifth_worse():
    player = Player(shed())
    told = []
    for ratio in (0.88, 0.88, 0.87, 0.85):
        player.play(70, figures={L2: ratio})
        player.play(70)
    told = [event.is_told for event in of(player.events, "leg-low") if event.alarm.state == "unacknowledged"]
    assert told == [True, False, False, True]


def test_chronic_alarm_is_told_again_the_next_day():
    player = Player(shed())
    player.play(70, figures=LOW)
    player.play(70)
    player.at += 86_400
    player.play(1)
    player.play(70, figures=LOW)
    told = [event.is_told for event in of(player.events, "leg-low") if event.alarm.state == "unacknowledged"]
    assert told == [True, True]


def test_return_of_what_was_not_told_is_not_told():
    player = Player(shed())
    player.play(100, "U", LOW)
    player.play(100, "U")
    assert [event.is_told for event in of(player.events, "leg-low")] == [False, False]


# -------------------------------------------------------------------------- restart and settings


def test_restart_keeps_the_occurrence_and_goes_on_counting():
    before = Player(shed())
    before.play(70, figures=LOW)
    after = Player(shed())
    after.state = begin_alarms(after.settings, before.standing)
    after.at = before.at
    assert after.play(5, figures=LOW) == []
    after.play(61)
    (event,) = after.events
    assert event.identity == f"{before.standing[0].occurrence}/2"
    assert event.is_told
    assert "It lasted 2 min" in event.alarm.text


def test_alarms_raised_while_the_last_minutes_are_fed_again_are_replaced_by_those_that_stood():
    before = Player(shed())
    before.play(70, figures=LOW)
    again = Player(shed())
    again.play(70, figures=VERY_LOW)
    again.state = restore(again.state, before.standing)
    again.play(1, figures=LOW)
    assert again.standing == before.standing


def test_alarm_taken_out_of_service_leaves_its_state_without_being_told():
    before = Player(shed())
    before.play(70, figures=LOW)
    after = Player(shed(leg_low={"enabled": False}))
    after.state = begin_alarms(after.settings, before.standing)
    (event,) = after.play(2, figures=LOW)
    assert event.alarm.state == "out-of-service"
    assert not event.is_told


def test_alarm_of_a_subject_that_is_no_more_is_cleared():
    before = Player(shed())
    before.play(70, figures=LOW)
    after = Player(house())
    after.state = begin_alarms(after.settings, before.standing)
    (event,) = after.play(2)
    assert (event.previous, event.alarm.state, event.is_told) == ("unacknowledged", "normal", False)


def test_every_state_has_a_word_for_the_lamp():
    settings = shed()
    for letter in STATES:
        lamp = judge_alarms(begin_alarms(settings), assessment(settings, 0.0, letter))[3]
        assert lamp == ("blind" if letter == "B" else "fine")


def test_lamp_is_never_fine_where_no_meter_answers():
    settings = shed()
    silent = {meter.name: "no answer" for meter in settings.meter}
    assert judge_alarms(begin_alarms(settings), assessment(settings, 0.0, "S", meters=silent))[3] == "blind"


def test_lamp_says_stop_for_a_high_alarm_and_look_for_a_medium_one():
    player = Player(shed())
    player.play(70, figures=LOW)
    assert player.lamp == "look"
    player.play(15, figures=VERY_LOW)
    assert player.lamp == "stop"
