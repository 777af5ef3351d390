import threading

import pytest

from fakes.findings import event, row
from idlerwatch.edges.journal import Cursor, Journal
from idlerwatch.edges.outlet import Away, Outlet, Pace, Troubles
from servers import wait_until

QUICK = Pace(records=5, first_s=0.01, longest_s=0.05)


class FarSide:
    """A far side that can be away, and remembers what it was sent."""

    def __init__(self):
        self.got = []
        self.is_away = threading.Event()
        self.tries = 0
        self.takes = 1000

    def start(self, hurry):
        self.hurry = hurry

    def send(self, records):
        self.tries += 1
        if self.is_away.is_set():
            raise Away("the far side is away")
        taken = records[: self.takes]
        self.got += [record.sequence for record in taken]
        return taken[-1].sequence

    def close(self):
        self.is_closed = True


@pytest.fixture
def journal(tmp_path):
    journal = Journal(tmp_path)
    yield journal
    journal.close()


@pytest.fixture
def far_side():
    return FarSide()


@pytest.fixture
def make(journal, far_side):
    made = []

    def outlet(kind="event", said=None, name="far", **more):
        cursor = Cursor(journal.path, name, at_first=0)
        report = (said if said is not None else []).append
        made.append(Outlet(kind, journal, cursor, more.pop("sender", far_side), report=report, pace=QUICK, **more))
        made[-1].start()
        return made[-1]

    yield outlet
    for one in made:
        one.stop()


def test_what_is_committed_is_sent_in_order_and_once(journal, far_side, make):
    make()
    for n in range(30):
        journal.add_alarm(event(n))
    wait_until(lambda: len(far_side.got) == 30)
    assert far_side.got == list(range(1, 31))


def test_what_is_not_committed_is_not_sent(journal, far_side, make):
    make("window")
    journal.add_windows([row()])
    assert far_side.got == []
    journal.flush()
    wait_until(lambda: far_side.got == [1])


def test_the_cursor_moves_only_to_what_was_acknowledged(journal, far_side, make):
    far_side.takes = 1
    make()
    for n in range(7):
        journal.add_alarm(event(n))
    wait_until(lambda: len(far_side.got) == 7)
    assert far_side.got == list(range(1, 8))


def test_a_far_side_that_was_away_gets_everything_and_it_is_said_once_each_way(journal, far_side, make):
    far_side.is_away.set()
    said = []
    make(said=said)
    for n in range(10):
        journal.add_alarm(event(n))
    wait_until(lambda: far_side.tries > 3)
    assert said == ["the far side is away"]
    far_side.is_away.clear()
    wait_until(lambda: len(far_side.got) == 10)
    wait_until(lambda: said == ["the far side is away", ""])


def test_after_a_restart_nothing_is_sent_again(journal, far_side, make):
    first = make()
    journal.add_alarm(event())
    wait_until(lambda: far_side.got == [1])
    first.stop()
    make()
    journal.add_alarm(event(2))
    wait_until(lambda: far_side.got == [1, 2])


def test_a_backlog_of_windows_does_not_delay_an_event(journal, make):
    slow, quick = FarSide(), FarSide()
    slow.is_away.set()
    journal.add_windows([row(n) for n in range(500)])
    journal.flush()
    make("window", sender=slow, name="slow")
    make("event", sender=quick, name="quick")
    wait_until(lambda: slow.tries)
    sequence = journal.add_alarm(event())
    wait_until(lambda: quick.got == [sequence], 1.0)


def test_nothing_is_sent_before_the_clock_is_ready(journal, far_side, make, monkeypatch):
    monkeypatch.setattr("idlerwatch.edges.outlet.LOOK_AT_CLOCK_S", 0.01)
    ready = threading.Event()
    asked = []
    make(is_ready=lambda: bool(asked.append(1)) or ready.is_set())
    journal.add_alarm(event())
    wait_until(lambda: len(asked) > 3)
    assert far_side.got == []
    ready.set()
    wait_until(lambda: far_side.got == [1])


def test_a_sender_that_hears_that_the_far_side_is_back_hurries_the_loop(journal, far_side, tmp_path):
    cursor = Cursor(journal.path, "far", at_first=0)
    outlet = Outlet(
        "event", journal, cursor, far_side, report=lambda _: None, pace=Pace(first_s=600.0, longest_s=600.0)
    )
    far_side.is_away.set()
    outlet.start()
    journal.add_alarm(event())
    wait_until(lambda: far_side.tries == 1)
    far_side.is_away.clear()
    wait_until(lambda: far_side.hurry() or far_side.got == [1])
    outlet.stop()


def test_a_stopping_outlet_sends_what_is_committed_and_keeps_its_place(journal, far_side, make):
    outlet = make()
    for n in range(20):
        journal.add_alarm(event(n))
    outlet.stop()
    assert far_side.got == list(range(1, 21))
    assert Cursor(journal.path, "far", at_first=0).at == 20
    assert far_side.is_closed


@pytest.mark.parametrize(
    ("failures", "asked", "waits"),
    [(1, 0.0, 1.0), (2, 0.0, 2.0), (6, 0.0, 32.0), (7, 0.0, 60.0), (1000, 0.0, 60.0), (1, 30.0, 30.0), (1, 1e9, 600.0)],
)
def test_the_wait_doubles_up_to_a_bound_and_honours_what_the_far_side_asks(failures, asked, waits):
    assert Pace().wait_s(failures, Away("away", asked)) == waits


def test_several_causes_are_said_once_when_the_first_begins_and_once_when_the_last_is_over():
    said = []
    troubles = Troubles(said.append)
    for cause, text in [("a", "x"), ("b", "y"), ("a", "x"), ("a", ""), ("b", ""), ("b", "")]:
        troubles.say(cause, text)
    assert said == ["x", ""]
