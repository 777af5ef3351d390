r"""The daemon: builds the parts from the settings, joins them, and owns threads and shutdown.

    bus threads --Input--> mailbox --> this thread: take() --> journal --> outlets (a thread each)
                                                      \--> live sinks (console, assessment topic)

One thread, the caller's, owns the core and the journal's writing end. Every other thread only puts into the mailbox:
the buses their readings, the outlets and the journal their troubles, MQTT what people acknowledge, and signals their
wishes. The mailbox is bounded; a bus that finds it full waits, which is right, since its readings would be late anyway.

A cycle: all buses begin at once, each ends when its meters have answered or been given up, `CycleEnd` follows, and the
core answers with one assessment. Events are on the disk before anything is sent.

Reload (SIGHUP) reads the settings again: valid ones replace the parts whole, faulty ones are refused, told, and the old
stay in force.
"""

import logging
import queue
import threading
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Final, Protocol

from idlerwatch.core.settings.faults import Fault, SettingsError
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.values import (
    Acknowledge,
    AlarmEvent,
    Assessment,
    CycleEnd,
    Input,
    MeterSilent,
    Output,
    Reading,
    Shelve,
    Trouble,
    WindowRow,
)
from idlerwatch.core.watch.circuit import NOT_LEARNED
from idlerwatch.core.watch.watch import Watch
from idlerwatch.edges import board, systemd
from idlerwatch.edges.bus import BusThread
from idlerwatch.edges.circuit_file import in_force
from idlerwatch.edges.clock import Clock, ClockWait, is_synchronised
from idlerwatch.edges.influx import Influx
from idlerwatch.edges.journal import Cursor, Journal, JournalReader, Keep
from idlerwatch.edges.mqtt import Mqtt
from idlerwatch.edges.outlet import Outlet

log = logging.getLogger(__name__)

MAILBOX_SIZE: Final = 4096
"""Items; four meters and a bus put fewer than ten a cycle."""
REMEMBERED_S: Final = 900.0
"""How much of the journal is fed to the core at start, so that states and timers are as if it had never stopped."""
BOARD_EVERY_S: Final = 60.0
THIN_AFTER_S: Final = 60.0
THIN_EVERY_S: Final = 60.0
"""Standstill that lasts this long is journaled once a minute only."""
RUNTIME_KEEP: Final = Keep(1.0 / 24.0, 1.0 / 24.0)
"""Without ``[journal]`` the runtime folder keeps an hour."""
INFLUX_CURSOR_S: Final = 300.0
"""A window written twice is the same window, so that cursor need not be written with every window."""


@dataclass(frozen=True, slots=True)
class BusDone:
    """A bus has ended its cycle."""


@dataclass(frozen=True, slots=True)
class Stop:
    """End the service."""


@dataclass(frozen=True, slots=True)
class Reload:
    """Read the settings again."""


Mail = Input | BusDone | Stop | Reload


class Live(Protocol):
    """Something shown as it happens; what it cannot show in time it drops."""

    def show(self, assessment: Assessment) -> None:
        """Take the newest assessment; returns at once."""

    def tell(self, event: AlarmEvent) -> None:
        """Take an event that people are told; returns at once."""


@dataclass
class Parts:
    """What one settings file makes: replaced whole by a reload."""

    settings: Settings
    journal: Journal
    buses: Sequence[BusThread]
    outlets: Sequence[Outlet]
    live: Sequence[Live]

    def start(self) -> None:
        """Start the threads, the ways out first."""
        for outlet in self.outlets:
            outlet.start()
        for bus in self.buses:
            bus.start()

    def stop(self) -> None:
        """Stop the threads, the buses first, and bring everything to the disk."""
        for bus in self.buses:
            bus.stop()
        self.journal.flush()
        for outlet in self.outlets:
            outlet.stop()
        self.journal.close()


def build(
    settings: Settings,
    post: Callable[[Mail], None],
    runtime: Path,
    live: Sequence[Live] = (),
    is_clock_right: Callable[[], bool] = is_synchronised,
) -> Parts:
    """Make all parts of the daemon from its settings.

    Trends wait for a clock that is right (or for ten minutes); messages do not: one that comes now with a wrong stamp
    is worth more than one ten minutes late.

    Parameters
    ----------
    settings
        In force from now on.
    post
        The mailbox's entry.
    runtime
        Where the journal lies when the settings have none.
    live
        What shows assessments besides the ways out: the console.
    is_clock_right
        Whether stamps can be believed yet.

    Raises
    ------
    SettingsError
        A file with a secret cannot be read.
    """

    def report(part: str) -> Callable[[str], None]:
        return lambda text: post(Trouble(Clock().monotonic(), part, text))

    journal = _journal(settings, runtime, report("disk"), is_clock_right)
    outlets: list[Outlet] = []
    shown = list(live)
    if settings.mqtt is not None:
        secret = _secret("mqtt", "password_file", settings.mqtt.password_file)
        names = (settings.site.name, settings.site.converter)
        mqtt = Mqtt(settings.mqtt, *names, password=secret, command=post, report=report("mqtt"))
        cursor = Cursor(journal.path, "mqtt", journal.last_sequence)
        outlets.append(Outlet("event", journal, cursor, mqtt, report=lambda _: None))
        shown.append(mqtt)
    if settings.influx is not None:
        secret = _secret("influx", "token_file", settings.influx.token_file)
        influx = Influx(settings.influx, settings.site.name, settings.site.converter, token=secret, folder=journal.path)
        cursor = Cursor(journal.path, "influx", 0, INFLUX_CURSOR_S)
        outlets.append(
            Outlet("window", journal, cursor, influx, report=report("influx"), is_ready=ClockWait(is_clock_right))
        )
    buses = [
        BusThread(
            bus,
            [meter for meter in settings.meter if meter.bus == bus.name],
            settings.maps,
            post,
            lambda: post(BusDone()),
            cycle_s=settings.site.cycle_s,
        )
        for bus in settings.bus
    ]
    return Parts(settings, journal, buses, outlets, shown)


def _journal(
    settings: Settings, runtime: Path, report: Callable[[str], None], is_clock_right: Callable[[], bool]
) -> Journal:
    if settings.journal is None:
        log.warning("no [journal] in the settings: only the last hour is kept, in %s", runtime)
        return Journal(runtime, keep=RUNTIME_KEEP, report=report, is_synchronised=is_clock_right)
    keep = Keep(settings.journal.keep_cycles_days, settings.journal.keep_windows_days)
    return Journal(
        settings.journal.path, settings.journal.commit_s, keep=keep, report=report, is_synchronised=is_synchronised
    )


def _secret(table: str, key: str, file: str | None) -> str | None:
    credential = f"{table}-{key.removesuffix('_file')}"
    try:
        return systemd.read_secret(credential, file) or None
    except OSError as error:
        fault = Fault(f"{table}.{key}", f"{file!r} ({error.strerror})", "must be a file that can be read")
        raise SettingsError([fault]) from error


Build = Callable[[Settings, Callable[[Mail], None]], Parts]


class Service:
    """The daemon's one thread; `run` returns when it was asked to stop.

    Parameters
    ----------
    load
        Reads the settings; raises `SettingsError`. Called at start and for each reload, with the number they get.
    build
        Makes the parts from the settings and the mailbox's entry.
    clock
        Monotonic time, and how far UTC and local time are from it.
    """

    def __init__(self, load: Callable[[int], Settings], build: Build, clock: Clock) -> None:
        self._load = load
        self._build = build
        self._clock = clock
        self._mailbox: queue.Queue[Mail] = queue.Queue(MAILBOX_SIZE)
        self._given: list[Input] = []
        self._board: Mapping[str, str] = {}
        self._board_at = -float("inf")
        self._stopped_since: float | None = None
        self._thread = threading.get_ident()

    def post(self, mail: Mail) -> None:
        """Put something into the mailbox; any other thread waits while it is full, this one never does."""
        if threading.get_ident() == self._thread and not isinstance(mail, BusDone | Stop | Reload):
            self._given.append(mail)
        else:
            self._mailbox.put(mail)

    def run(self) -> None:
        """Watch until asked to stop. Raises `SettingsError` when the settings at start are wrong."""
        settings: Settings | None = self._load(1)
        while settings is not None:
            parts = self._build(settings, self.post)
            try:
                settings = self._watch(parts)
            finally:
                parts.stop()
        systemd.notify("STOPPING=1")

    def _watch(self, parts: Parts) -> Settings | None:
        """Watch with these parts; return the settings that replace them, or None to end."""
        parts.journal.add_event("settings", {"number": parts.settings.number, "text": parts.settings.model_dump_json()})
        watch = self._remember(parts)
        parts.start()
        systemd.notify("READY=1")
        due = self._clock.monotonic()
        while True:
            for bus in parts.buses:
                bus.begin_cycle()
            wish = self._collect(len(parts.buses))
            if isinstance(wish, Stop):
                return None
            watch = self._end_cycle(parts, watch)
            systemd.notify("WATCHDOG=1")
            due = max(due + parts.settings.site.cycle_s, self._clock.monotonic())
            wish = wish or self._collect(0, until=due)
            if isinstance(wish, Stop):
                return None
            if isinstance(wish, Reload) and (settings := self._reread(parts)) is not None:
                return settings

    def _collect(self, buses: int, until: float | None = None) -> Stop | Reload | None:
        """Take mail until so many buses are done and the instant is reached; a wish to stop ends it at once."""
        wish: Reload | None = None
        while buses or until is not None:
            left = None if until is None else until - self._clock.monotonic()
            if not buses and left is not None and left <= 0.0:
                break
            try:
                mail = self._mailbox.get(timeout=left)
            except queue.Empty:
                break
            match mail:
                case Stop():
                    return mail
                case Reload():
                    wish = mail
                case BusDone():
                    buses -= 1
                case _:
                    self._given.append(mail)
        return wish

    def _end_cycle(self, parts: Parts, watch: Watch) -> Watch:
        """Feed the core, keep what it was given and what it said, and show it; events are on the disk first."""
        self._look_at_board(parts)
        given, self._given = self._given, []
        end = self._clock.cycle_end()
        step = self._clock.take_step()
        if step:
            parts.journal.add_event("clock", {"step_s": step})
        for item in given:
            watch, _ = watch.take(item)
        watch, outputs = watch.take(end)
        _keep_given(parts.journal, given, end, parts.settings.number)
        _keep_outputs(parts, outputs)
        return watch

    def _look_at_board(self, parts: Parts) -> None:
        now = self._clock.monotonic()
        if now - self._board_at < BOARD_EVERY_S:
            return
        self._board_at = now
        found = board.find_troubles(parts.journal.path)
        changed = {part: text for part, text in found.items() if bool(text) != bool(self._board.get(part, ""))}
        self._board = found
        for part, text in changed.items():
            self._given.append(Trouble(now, part, text))

    def _remember(self, parts: Parts) -> Watch:
        """Return a core that was fed the journal's last minutes, and knows the alarms that stood."""
        reader = JournalReader(parts.journal.path)
        known, sentence = in_force(parts.journal.path)
        if sentence:
            log.log(logging.INFO if sentence == NOT_LEARNED else logging.WARNING, "%s", sentence)
        try:
            watch = Watch.begin(parts.settings, known=known, remark=sentence)
            for item in self._clock.rebase(reader.recent(REMEMBERED_S), REMEMBERED_S):
                watch, _ = watch.take(item)
            return watch.with_standing(reader.standing())
        finally:
            reader.close()

    def _reread(self, parts: Parts) -> Settings | None:
        """Return the settings as they are now, or None (told, and journaled) when they are faulty."""
        systemd.notify("RELOADING=1")
        try:
            return self._load(parts.settings.number + 1)
        except SettingsError as error:
            log.warning("settings refused, the old ones stay in force:\n%s", error)
            parts.journal.add_event("settings-refused", {"text": str(error)})
            return None
        finally:
            systemd.notify("READY=1")


def _keep_given(journal: Journal, given: Sequence[Input], end: CycleEnd, settings: int) -> None:
    """Journal what the core was given; what was told besides readings is an event with its place among them."""
    readings: list[Reading | MeterSilent] = []
    for item in given:
        match item:
            case Reading() | MeterSilent():
                readings.append(item)
            case Acknowledge() | Shelve() | Trouble():
                journal.add_told(item, len(readings))
            case CycleEnd():
                pass
    journal.add_cycle(readings, end, settings)


def _keep_outputs(parts: Parts, outputs: Sequence[Output]) -> None:
    """Bring events to the disk, windows to the next commit, and everything to the live sinks."""
    for output in outputs:
        match output:
            case AlarmEvent():
                parts.journal.add_alarm(output)
                for sink in parts.live:
                    sink.tell(output)
            case WindowRow():
                pass
            case Assessment():
                parts.journal.thin(_thinning(output))
                for sink in parts.live:
                    sink.show(output)
    parts.journal.add_windows(output for output in outputs if isinstance(output, WindowRow))


def _thinning(assessment: Assessment) -> float:
    """Return how seldom cycles are kept: at standstill, once it has lasted and nothing stands, one a minute. [s]"""
    has_stood = assessment.state == "stopped" and assessment.at - assessment.state_since > THIN_AFTER_S
    return THIN_EVERY_S if has_stood and not assessment.alarms else 0.0
