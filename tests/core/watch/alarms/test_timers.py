"""Setpoint, deadband and delays, each on both sides."""

import math

import pytest

from idlerwatch.core.settings.model import Alarm
from idlerwatch.core.watch.conditions.timers import BRIDGE_S, IDLE, IN, Delays, advance, band_of, remaining


def played(places, delays, step=1.0, timer=IDLE):
    """The instants at which the condition is in."""
    found = []
    for number, place in enumerate(places):
        timer = advance(timer, place, number * step, delays)
        if timer.is_in:
            found.append(number * step)
    return found


TEN = Delays(10.0, 10.0, 0.5)


def test_excess_comes_in_when_it_has_held_the_whole_delay():
    assert played(["beyond"] * 12, TEN) == [10.0, 11.0]


def test_excess_shorter_than_the_delay_does_not_come_in():
    assert played(["beyond"] * 10 + ["between"] * 5, TEN) == []


@pytest.mark.parametrize("good", ["back", "between"])
def test_any_return_restarts_the_delay(good):
    assert played(["beyond"] * 9 + [good] + ["beyond"] * 11, TEN) == [20.0]


def test_delay_has_passed_half_a_cycle_early_and_not_before():
    assert played(["beyond"] * 3, Delays(10.0, 0.0, 0.5), step=4.75) == [9.5]
    assert played(["beyond"] * 2 + ["back"], Delays(10.0, 0.0, 0.5), step=9.49) == []


def test_off_delay_keeps_it_in_through_short_returns():
    places = ["back"] * 9 + ["between"] + ["back"] * 11
    assert len(played(places, TEN, timer=IN)) == 20


def test_without_a_delay_it_comes_and_goes_at_once():
    assert played(["beyond", "back", "beyond"], Delays(0.0, 0.0, 0.5)) == [0.0, 2.0]


def test_unknown_samples_neither_raise_nor_return():
    assert played(["unknown"] * 50, TEN) == []
    assert len(played(["unknown"] * 50, TEN, timer=IN)) == 50


def test_short_gap_is_bridged_but_the_delay_does_not_pass_in_it():
    gap = ["unknown"] * int(BRIDGE_S)
    assert played(["beyond"] * 8 + gap + ["beyond"], TEN) == [13.0]


def test_long_gap_restarts_the_delay():
    gap = ["unknown"] * (int(BRIDGE_S) + 2)
    assert played(["beyond"] * 8 + gap + ["beyond"] * 11, TEN) == [25.0]


def test_remaining_delay_is_infinite_where_none_runs():
    assert remaining(IDLE, 0.0, TEN) == math.inf
    assert remaining(IN, 0.0, TEN) == math.inf
    assert remaining(advance(IDLE, "beyond", 3.0, TEN), 5.0, TEN) == 8.0


def alarm(**given):
    return Alarm(tag="x", watches="x", priority="low", **given)


@pytest.mark.parametrize(
    ("sense", "given", "value", "place"),
    [
        ("above", {"setpoint": 10.0, "deadband": 2.0}, 10.0, "between"),
        ("above", {"setpoint": 10.0, "deadband": 2.0}, 10.001, "beyond"),
        ("above", {"setpoint": 10.0, "deadband": 2.0}, 8.0, "back"),
        ("above", {"setpoint": 10.0, "deadband": 2.0}, 8.001, "between"),
        ("below", {"setpoint": 0.5, "clears_at": 0.85}, 0.5, "between"),
        ("below", {"setpoint": 0.5, "clears_at": 0.85}, 0.4999, "beyond"),
        ("below", {"setpoint": 0.5, "clears_at": 0.85}, 0.849, "between"),
        ("below", {"setpoint": 0.5, "clears_at": 0.85}, 0.85, "back"),
        ("yes", {}, 1.0, "beyond"),
        ("yes", {}, 0.0, "back"),
        ("above", {"setpoint": 10.0}, math.nan, "unknown"),
    ],
)
def test_bounds(sense, given, value, place):
    assert band_of(sense, alarm(**given), given.get("setpoint", math.nan)).place(value) == place
