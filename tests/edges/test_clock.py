import pytest

from fakes.findings import cycle
from idlerwatch.core.values import CycleEnd, Reading
from idlerwatch.edges.clock import Clock, ClockWait, is_synchronised, local_offset


class Hands:
    def __init__(self):
        self.monotonic, self.utc = 100.0, 1000.0

    def clock(self):
        return Clock(lambda: self.monotonic, lambda: self.utc, lambda _: 3600.0)

    def tick(self, seconds, drift=0.0):
        self.monotonic += seconds
        self.utc += seconds + drift


def test_utc_does_not_jitter_within_a_millisecond_and_follows_beyond():
    hands = Hands()
    clock = hands.clock()
    hands.tick(1.0, drift=0.0009)
    assert clock.cycle_end() == CycleEnd(101.0, 900.0, 3600.0)
    hands.tick(1.0, drift=0.0002)
    assert clock.cycle_end().utc_offset == pytest.approx(900.0011)
    assert clock.take_step() == 0.0


@pytest.mark.parametrize(("jump", "is_step"), [(0.49, False), (0.51, True), (-0.51, True), (56 * 365 * 86400.0, True)])
def test_a_jump_of_more_than_half_a_second_is_a_step_told_once(jump, is_step):
    hands = Hands()
    clock = hands.clock()
    hands.tick(1.0, drift=jump)
    clock.utc()
    assert (clock.take_step() == pytest.approx(jump)) is is_step
    assert clock.take_step() == 0.0


def test_inputs_of_an_earlier_boot_are_moved_onto_this_boots_clock():
    hands = Hands()
    inputs, end = cycle(0)
    hands.utc = end.at + end.utc_offset + 60.0  # a minute later, and the monotonic clock began anew
    moved = list(hands.clock().rebase([*inputs, end], within_s=900.0))
    assert moved[-1].at == pytest.approx(40.0)
    assert moved[-1].at + moved[-1].utc_offset == pytest.approx(end.at + end.utc_offset)
    assert isinstance(moved[0], Reading)
    assert moved[-1].at - moved[0].at == pytest.approx(end.at - inputs[0].at)


@pytest.mark.parametrize(("later", "is_given"), [(899.0, True), (901.0, False), (-1.0, False)])
def test_cycles_too_old_or_of_the_future_are_left_out(later, is_given):
    hands = Hands()
    inputs, end = cycle(0)
    hands.utc = end.at + end.utc_offset + later
    assert bool(list(hands.clock().rebase([*inputs, end], within_s=900.0))) is is_given


def test_the_wait_ends_when_synchronised_and_stays_ended():
    answers = iter([False, True])
    wait = ClockWait(lambda: next(answers), 600.0, lambda: 0.0)
    assert [wait(), wait(), wait()] == [False, True, True]


def test_the_wait_ends_after_ten_minutes():
    now = [0.0]
    wait = ClockWait(lambda: False, 600.0, lambda: now[0])
    now[0] = 599.9
    assert not wait()
    now[0] = 600.0
    assert wait()


def test_the_kernel_gives_an_answer():
    assert is_synchronised() in (True, False)


def test_local_time_is_within_a_day_of_utc():
    assert abs(local_offset(1.8e9)) <= 14 * 3600
