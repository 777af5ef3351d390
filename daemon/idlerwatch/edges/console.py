"""What a person at the terminal sees: a live table, or plain lines where the output is a file or a pipe.

`show` and `tell` only leave something for the console's own thread, so a terminal that has stopped scrolling never
holds up the watch: of the assessments the newest counts, of the messages the last few are kept.
"""

import threading
from collections import deque
from collections.abc import Iterator, Mapping
from typing import Final, TextIO

from rich.box import SIMPLE_HEAD
from rich.console import Console as Terminal
from rich.console import Group, RenderableType
from rich.live import Live
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from idlerwatch.core.conductors import LEGS
from idlerwatch.core.values import AlarmEvent, Assessment, Figure, StandingAlarm
from idlerwatch.core.wording import (
    NOT_MEASURED,
    amperes,
    clock_time,
    factor,
    hertz,
    joined,
    percent,
    power,
    silent_meters,
    state,
    told,
    told_with_uncertainty,
    volts,
)

LINE_EVERY_S: Final = 10.0
REFRESH_S: Final = 0.5
MESSAGES_SHOWN: Final = 6
MESSAGES_KEPT: Final = 200
"""Messages that wait to be written; when a pipe is stuck the oldest go first."""

LAMP_STYLES: Final = {"fine": "bold green", "look": "bold yellow", "stop": "bold white on red", "blind": "bold magenta"}
PRIORITY_STYLES: Final = {"high": "bold red", "medium": "yellow", "low": "cyan", "log": "dim"}
PEOPLES_STATES: Final = {
    "unacknowledged": "new",
    "acknowledged": "seen",
    "returned": "over",
    "shelved": "put aside",
    "suppressed": "suppressed",
    "out-of-service": "out of service",
}


class Console:
    """Shows the newest assessment and the last messages; a live sink of the service.

    Parameters
    ----------
    out
        Where to write; a terminal gets the table, anything else lines.
    title
        What is watched, in a few words.
    labels
        What people here call a conductor, such as ``L3`` -> ``grey``.
    """

    def __init__(self, out: TextIO, title: str, labels: Mapping[str, str] | None = None) -> None:
        self._terminal = Terminal(file=out)
        self._view = _View(title, labels or {})
        self._latest: Assessment | None = None
        self._told: deque[AlarmEvent] = deque(maxlen=MESSAGES_SHOWN)
        self._unwritten: deque[AlarmEvent | str] = deque(maxlen=MESSAGES_KEPT)
        self._note = ""
        self._is_stopping = threading.Event()
        run = self._run_table if self._terminal.is_terminal else self._run_lines
        self._thread = threading.Thread(target=run, name="console", daemon=True)

    def start(self) -> None:
        """Begin to show."""
        self._thread.start()

    def show(self, assessment: Assessment) -> None:
        """Take the newest assessment."""
        self._latest = assessment

    def tell(self, event: AlarmEvent) -> None:
        """Take an event; what people are not told is not shown."""
        if event.is_told:
            self._told.append(event)
            self._unwritten.append(event)

    def note(self, text: str) -> None:
        """Take a sentence about what happens around the converter: what a demo does to it."""
        self._note = text
        self._unwritten.append(text)

    def stop(self) -> None:
        """Show the last state and end."""
        self._is_stopping.set()
        if self._thread.ident is not None:
            self._thread.join(2.0)

    def _run_table(self) -> None:
        with Live(console=self._terminal, auto_refresh=False, vertical_overflow="crop") as live:
            while not self._is_stopping.wait(REFRESH_S):
                live.update(self._picture(), refresh=True)
            live.update(self._picture(), refresh=True)

    def _picture(self) -> RenderableType:
        table = self._view.table(self._latest, tuple(self._told))
        return Group(Text(f"* {self._note}", style="italic"), table) if self._note else table

    def _run_lines(self) -> None:
        due = -float("inf")
        while True:
            is_last = self._is_stopping.wait(REFRESH_S)
            offset = self._latest.local_offset if self._latest else 0.0
            while self._unwritten:
                item = self._unwritten.popleft()
                self._write(f"          * {item}" if isinstance(item, str) else message_line(item, offset))
            if self._latest is not None and self._latest.at >= due:
                due = self._latest.at + LINE_EVERY_S
                self._write(status_line(self._latest))
            if is_last:
                return

    def _write(self, line: str) -> None:
        try:
            self._terminal.file.write(line + "\n")
            self._terminal.file.flush()
        except (OSError, ValueError):  # whoever read the pipe has gone; the watch goes on
            self._is_stopping.set()


def message_line(event: AlarmEvent, local_offset: float) -> str:
    """Return a message as it reaches a phone, after the time and its priority."""
    return f"{clock_time(event.utc, local_offset)}  MESSAGE ({event.alarm.priority}) {event.alarm.text}"


def status_line(given: Assessment) -> str:
    """Return the state in one line that reads well in a file."""
    legs = " ".join(f"{leg} {told(given.leg(leg, 'voltage'), volts)}" for leg in LEGS)
    parts = [
        clock_time(given.utc, given.local_offset),
        f"{given.lamp:<5}",
        state(given),
        legs,
        f"unbalance {told(_converter(given, 'voltage_unbalance_factor'), percent)}",
        f"supply {told(given.figure('supply', 'supply', 'current'), amperes)}",
        f"N-PE {told(given.figure('earthing', 'converter', 'neutral_earth_voltage'), volts)}",
        f"alarms {len(given.alarms)}",
    ]
    return "  ".join(parts)


class _View:
    """The live table."""

    def __init__(self, title: str, labels: Mapping[str, str]) -> None:
        self._title = title
        self._labels = labels

    def table(self, given: Assessment | None, told_events: tuple[AlarmEvent, ...]) -> RenderableType:
        if given is None:
            return Text(f"{self._title}: waiting for the first answers of the meters")
        parts: list[RenderableType] = [self._head(given), self._legs(given), _rows(_lines(given))]
        if given.alarms:
            parts.append(_section("Standing alarms", [_alarm_row(alarm) for alarm in given.alarms]))
        if told_events:
            rows = [_message_row(event, given.local_offset) for event in reversed(told_events)]
            parts.append(_section("Messages, as they reach a phone", rows))
        return Group(*parts)

    def _head(self, given: Assessment) -> Table:
        head = Table.grid(expand=True)
        head.add_column()
        head.add_column(justify="right")
        lamp = Text(f" {given.lamp.upper()} ", style=LAMP_STYLES[given.lamp])
        head.add_row(
            Text.assemble((self._title, "bold"), "  ", lamp, "  ", state(given)),
            clock_time(given.utc, given.local_offset),
        )
        return head

    def _legs(self, given: Assessment) -> Table:
        table = Table(expand=True, box=SIMPLE_HEAD, pad_edge=False, header_style="dim")
        table.add_column("leg")
        for title in ("to neutral", "of nominal", "current", "power", "power factor"):
            table.add_column(title, justify="right")
        for leg in LEGS:
            label = f"{leg} {self._labels[leg]}" if leg in self._labels else leg
            cells = [
                _cell(given.leg(leg, quantity), formatter)
                for quantity, formatter in (
                    ("voltage", volts),
                    ("voltage_ratio", percent),
                    ("current", amperes),
                    ("active_power", power),
                    ("power_factor", factor),
                )
            ]
            table.add_row(Text(label, style="bold"), *cells)
        return table


def _cell(figure: Figure, formatter: object) -> Text:
    text = told(figure, formatter)  # type: ignore[arg-type]
    return Text(text, style="dim" if text == NOT_MEASURED else "")


def _converter(given: Assessment, quantity: str) -> Figure:
    return given.figure("converter", "converter", quantity)


def _lines(given: Assessment) -> Iterator[tuple[str, str]]:
    """Yield what stands below the legs: a word and its figures."""
    pairs = ("l1-l2", "l2-l3", "l3-l1")
    yield "between legs", joined({pair.upper(): (given.figure("line", pair, "voltage"), volts) for pair in pairs})
    yield "unbalance", _unbalance(given)
    yield (
        "supply",
        joined(
            {
                "": (given.figure("supply", "supply", "voltage"), volts),
                " ": (given.figure("supply", "supply", "frequency"), hertz),
                "  ": (given.figure("supply", "supply", "current"), amperes),
                "   ": (given.figure("supply", "supply", "active_power"), power),
                "power factor": (given.figure("supply", "supply", "power_factor"), factor),
            }
        ),
    )
    yield (
        "converter",
        joined(
            {
                "gives": (_converter(given, "active_power"), power),
                "power factor": (_converter(given, "effective_power_factor"), factor),
                "itself takes": (given.figure("supply", "supply", "idle_loss"), power),
                "motors may carry": (_converter(given, "derating_factor"), percent),
            }
        ),
    )
    for measurement in ("bank", "capacitor", "machine"):
        for subject in dict.fromkeys(key[1] for key in given.figures if key[0] == measurement):
            text = _of_thing(given, measurement, subject)
            if measurement != "capacitor" or text != NOT_MEASURED:
                yield f"{measurement} {subject}", text
    yield "circuit", _circuit(given)
    yield "neutral-earth", told_with_uncertainty(given.figure("earthing", "converter", "neutral_earth_voltage"), volts)
    yield "meters", silent_meters(given)


def _of_thing(given: Assessment, measurement: str, subject: str) -> str:
    """Return what is known of a bank, a capacitor or a machine."""
    if measurement == "bank":
        current = given.figure("bank", subject, "current")
        amps = f", {amperes(current.value)}" if current.is_known else ""
        return bank_position(given, subject) + amps
    if measurement == "capacitor":
        ratio = told_with_uncertainty(given.figure("capacitor", subject, "capacitance_ratio"), percent)
        lost = given.figure("capacitor", subject, "lost_probability").value
        return "probably lost" if lost > 0.5 else f"{ratio} of what was learned" if ratio != NOT_MEASURED else ratio
    return joined(
        {
            "": (given.figure(measurement, subject, "current"), amperes),
            " ": (given.figure(measurement, subject, "active_power"), power),
        }
    )


def bank_position(given: Assessment, name: str) -> str:
    """Return a bank's position in words; undecided while the evidence does not suffice."""
    position = given.figure("bank", name, "position")
    sure = given.figure("bank", name, "position_probability")
    if not sure.is_known:
        return "position not seen"
    if not position.is_known:
        return f"undecided: the likeliest is {percent(min(sure.value, 0.999))} sure"
    word = {1.0: "closed", 0.0: "open"}.get(position.value, "partly in: chatter?")
    return f"{word}, over 99.9 % sure from the circuit"


def _circuit(given: Assessment) -> str:
    """Return how far the converter is off what its circuit makes of this load."""
    off = _converter(given, "off_normal")
    if off.is_known:
        return f"{percent(abs(off.value))} off its normal for this load"
    return "not learned" if _converter(given, "circuit_misfit").is_known else NOT_MEASURED


def _unbalance(given: Assessment) -> str:
    voltage = told_with_uncertainty(_converter(given, "voltage_unbalance_factor"), percent)
    angles = "" if given.angles == "measured" else f" (angles {given.angles})"
    current = _converter(given, "current_unbalance_rate")
    return f"voltage {voltage}{angles}" + (f", current {percent(current.value)}" if current.is_known else "")


def _rows(rows: Iterator[tuple[str, str]]) -> Table:
    table = Table.grid(padding=(0, 2))
    table.add_column(style="dim", no_wrap=True)
    table.add_column()
    for word, text in rows:
        table.add_row(word, Text(text, style="dim" if text == NOT_MEASURED else ""))
    return table


def _section(title: str, rows: list[tuple[Text, ...]]) -> RenderableType:
    table = Table.grid(padding=(0, 2))
    for _ in rows[0][:-1]:
        table.add_column(no_wrap=True)
    table.add_column()
    for row in rows:
        table.add_row(*row)
    return Padding(Group(Text(title, style="bold underline"), table), (1, 0, 0, 0))


def _alarm_row(alarm: StandingAlarm) -> tuple[Text, ...]:
    style = PRIORITY_STYLES[alarm.priority]
    return (Text(alarm.priority, style=style), Text(PEOPLES_STATES.get(alarm.state, alarm.state)), Text(alarm.text))


def _message_row(event: AlarmEvent, local_offset: float) -> tuple[Text, ...]:
    return (Text(clock_time(event.utc, local_offset), style="dim"), Text(event.alarm.text))
