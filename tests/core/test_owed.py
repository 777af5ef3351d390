"""How long a meter is waited for, and what may still come."""

import pytest

from idlerwatch.core.frames import Shape
from idlerwatch.core.owed import (
    FIRST_PATIENCE_S,
    LEAST_PATIENCE_S,
    MOST_PATIENCE_S,
    MOST_QUIET_S,
    QUIET_S,
    Owed,
    Patience,
    oldest,
    quiet_s,
    still_owed,
)

SHAPE = Shape(1, 4, 64)


def after(*delays):
    patience = Patience()
    for delay in delays:
        patience = patience.after(delay)
    return patience


def test_an_unknown_meter_is_waited_for_a_while():
    assert Patience().limit_s == FIRST_PATIENCE_S


def test_a_quick_meter_is_waited_for_the_least_time():
    assert after(*[0.005] * 20).limit_s == LEAST_PATIENCE_S


@pytest.mark.parametrize("delay", [0.1, 0.3, 0.6])
def test_a_steadily_slow_meter_is_waited_for_longer_than_it_takes(delay):
    assert delay < after(*[delay] * 50).limit_s < delay + 0.1


def test_nobody_is_waited_for_longer_than_the_most():
    assert after(5.0, 5.0).limit_s == MOST_PATIENCE_S


def test_one_late_answer_is_soon_forgotten():
    assert after(*[0.02] * 20, 1.0).limit_s > 0.5
    assert after(*[0.02] * 20, 1.0, *[0.02] * 20).limit_s < 0.2


def test_an_answer_is_owed_until_its_time_is_over():
    owed = (Owed(SHAPE, 0.0, 2.0),)
    assert still_owed(owed, 1.999) == owed
    assert still_owed(owed, 2.0) == ()


def test_the_oldest_of_a_shape_is_found():
    first, second = Owed(SHAPE, 0.0, 2.0), Owed(SHAPE, 1.0, 3.0)
    assert oldest((first, second), SHAPE) == first
    assert oldest((first, second), Shape(2, 4, 64)) is None


def test_the_quiet_that_is_waited_for_follows_the_lateness_within_bounds():
    assert quiet_s(0.0) == QUIET_S
    assert quiet_s(0.1) == pytest.approx(0.12)
    assert quiet_s(1.0) == MOST_QUIET_S
