import io
import math
import os
import pty
import threading

import pytest

from fakes.findings import alarm, assessment, event, figures
from idlerwatch.core.values import Figure
from idlerwatch.edges.console import Console, message_line, status_line
from servers import wait_until


@pytest.fixture
def quick(monkeypatch):
    monkeypatch.setattr("idlerwatch.edges.console.REFRESH_S", 0.01)


def stand_still():
    """Return the shed with the converter stopped and its leg meters dead with it."""
    dead = {key: Figure() if key[0] in ("leg", "line", "converter") else figure for key, figure in figures().items()}
    return assessment(state="stopped", loading="", lamp="fine", figures=dead, alarms=())


def test_the_line_says_state_legs_unbalance_and_local_time():
    assert status_line(assessment()) == (
        "07:00:00  look   running, loaded for 12 min 34 s  L1 231 V L2 198 V L3 220 V  unbalance 4.5 %  "
        "supply 23.4 A  N-PE not measured  alarms 1"
    )


def test_what_is_not_measured_is_never_zero_volts():
    line = status_line(stand_still())
    assert "L1 not measured L2 not measured L3 not measured" in line
    assert " 0 V" not in line


def test_a_message_stands_as_it_reaches_a_phone():
    assert message_line(event(1), 3600.0) == f"07:00:01  MESSAGE (medium) {alarm().text}"


def test_a_pipe_gets_a_line_each_ten_seconds_and_every_message(quick):
    out = io.StringIO()
    console = Console(out, "slipway / boatshed")
    console.start()
    for second in range(25):
        console.show(assessment(5000.0 + second))
        wait_until(lambda second=second: second % 10 or out.getvalue().count("running") == second // 10 + 1)
    console.tell(event(1))
    console.tell(event(2, is_told=False))
    console.stop()
    lines = out.getvalue().splitlines()
    assert sum("running" in line for line in lines) == 3
    assert sum("MESSAGE" in line for line in lines) == 1
    assert "\x1b" not in out.getvalue()


def test_a_pipe_whose_reader_has_gone_does_not_hold_up_the_watch(quick):
    class Gone(io.StringIO):
        def write(self, _):
            raise BrokenPipeError

    console = Console(Gone(), "slipway / boatshed")
    console.start()
    console.show(assessment())
    wait_until(lambda: not console._thread.is_alive())
    console.show(assessment(5001.0))
    console.stop()


@pytest.mark.parametrize("columns", [80, 100])
def test_a_terminal_shows_the_table_with_legs_alarms_and_messages(quick, monkeypatch, columns):
    monkeypatch.setenv("COLUMNS", str(columns))
    monkeypatch.setenv("LINES", "40")
    monkeypatch.setenv("TERM", "xterm")
    shown = []
    ours, theirs = pty.openpty()

    def read():
        try:
            while data := os.read(ours, 4096):
                shown.append(data.decode(errors="replace"))
        except OSError:
            pass

    reader = threading.Thread(target=read)
    reader.start()
    with os.fdopen(theirs, "w") as out:
        console = Console(out, "slipway / boatshed", {"L3": "grey"})
        console.start()
        console.tell(event(1))
        console.show(assessment())
        wait_until(lambda: "Messages" in "".join(shown))
        console.stop()
    reader.join(5.0)
    os.close(ours)
    text = "".join(shown)
    for words in ("L3 grey", "198 V", "86 %", "L1-L2 372 V", "4.5 % ± 0.4 %", "not measured", "3 of 4 answer", "LOOK"):
        assert words in text


def test_before_the_first_assessment_the_table_says_what_it_waits_for():
    console = Console(io.StringIO(), "slipway / boatshed")
    assert "waiting" in str(console._view.table(None, ()))


def test_showing_and_telling_never_wait_and_keep_a_bounded_number():
    console = Console(io.StringIO(), "slipway / boatshed")
    for n in range(10_000):
        console.tell(event(n))
        console.show(assessment(5000.0 + n, figures={}))
    assert len(console._unwritten) == 200
    assert not math.isnan(console._latest.at)
