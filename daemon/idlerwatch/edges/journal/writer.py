"""Writing the journal: blocks now and then, events at once, and what to do when the disk refuses."""

import json
import sqlite3
import time
from collections import deque
from collections.abc import Callable, Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any, Final

from idlerwatch.core import payloads
from idlerwatch.core.blocks import Cycle, Event, Item, Kind, Window, cycle_items, pack, window_item
from idlerwatch.core.values import Acknowledge, AlarmEvent, CycleEnd, MeterSilent, Reading, Shelve, Trouble, WindowRow
from idlerwatch.edges.journal.cursor import last_of_all
from idlerwatch.edges.journal.files import (
    Keep,
    file_name,
    list_files,
    open_for_writing,
    period_of,
    unlink_old,
)
from idlerwatch.edges.journal.reader import JournalReader

MOST_CYCLES: Final = 3600
"""Cycles kept in memory while the disk refuses; the oldest go first, and are counted."""
MOST_WINDOWS: Final = 20_000
MOST_EVENTS: Final = 2000
HELD_CYCLES: Final = 10
"""Cycles at standstill that are still kept in full when the standstill ends: what led to the start."""

Report = Callable[[str], None]


def _always() -> bool:
    return True


class Journal:
    """Gives every record its sequence number and brings it to the disk.

    All methods are called from one thread. Nothing raises because of the disk: what it refuses waits in memory, within
    bounds, `report` is told once with a sentence and once with an empty text when all is well again, and how much was
    lost is then an event (``journal``). Listeners are called after a commit, in the same thread; they must only wake.

    Parameters
    ----------
    path
        The folder; made where it is missing.
    commit_s
        Cycles and windows are committed that often, in the time of the cycles.
    keep
        For how many days; see `Keep`.
    report
        Told what is wrong with the disk, empty when it is right again.
    is_synchronised
        Whether the clock is right; nothing old is unlinked while it is not.
    utc
        The stamp for events, POSIX seconds.
    """

    def __init__(
        self,
        path: str | Path,
        commit_s: float = 30.0,
        *,
        keep: Keep = Keep(),  # noqa: B008 - frozen
        report: Report = lambda _: None,
        is_synchronised: Callable[[], bool] = _always,
        utc: Callable[[], float] = time.time,
    ) -> None:
        self.path = Path(path)
        self._commit_s = commit_s
        self._report = report
        self._utc = utc
        self._files = {kind: _File(self.path, kind, keep, is_synchronised) for kind in ("cycle", "window", "event")}
        self._listeners: list[tuple[Kind, Callable[[], None]]] = []
        self._cycles: deque[Cycle] = deque(maxlen=MOST_CYCLES)
        self._windows: deque[Window] = deque(maxlen=MOST_WINDOWS)
        self._events: deque[Event] = deque(maxlen=MOST_EVENTS)
        self._held: deque[Cycle] = deque(maxlen=HELD_CYCLES)
        self._every_s = 0.0
        self._kept_at = -float("inf")
        self._committed_at: float | None = None
        self._lost = 0
        self._is_well = True
        self._sequence = self._last_sequence()

    @property
    def last_sequence(self) -> int:
        """The number of the newest record."""
        return self._sequence

    def unwritten(self) -> Sequence[Event]:
        """Return the events that the disk has refused so far; may be called from any thread."""
        return tuple(self._events)

    def listen(self, kind: Kind, wake: Callable[[], None]) -> None:
        """Call `wake` whenever records of a kind have been committed."""
        self._listeners.append((kind, wake))

    def thin(self, every_s: float) -> None:
        """Keep one cycle each `every_s` from now on (at standstill), 0 for all; the last few before 0 are kept too."""
        if not every_s and self._every_s:
            self._cycles.extend(self._held)
            self._held.clear()
        self._every_s = every_s

    def add_cycle(self, inputs: Iterable[Reading | MeterSilent], end: CycleEnd, settings: int) -> int:
        """Keep what the core was given in one cycle; commits all that waits if `commit_s` have passed."""
        cycle = Cycle(self._next(), tuple(inputs), end, settings)
        if end.at - self._kept_at < self._every_s:
            self._held.append(cycle)
        else:
            self._held.clear()
            self._make_room(self._cycles)
            self._cycles.append(cycle)
            self._kept_at = end.at
        if self._committed_at is None:
            self._committed_at = end.at
        if end.at - self._committed_at >= self._commit_s:
            self._committed_at = end.at
            self.flush()
        return cycle.sequence

    def add_windows(self, rows: Iterable[WindowRow]) -> None:
        """Keep window rows; they are committed with the cycles."""
        for row in rows:
            self._make_room(self._windows)
            self._windows.append(Window(self._next(), row))

    def add_event(self, name: str, body: Mapping[str, Any]) -> int:
        """Commit and sync an event (a JSON-ready body) and return its sequence number."""
        json.dumps(body, allow_nan=False)  # a body that is none is our mistake: told now, not whenever it is written
        utc = self._utc()
        if not self._events and self._files["event"].ends_before(utc):
            self._add_standing(utc)
        sequence = self._next()
        self._make_room(self._events)
        self._events.append(Event(sequence, utc, name, body))
        self._commit("event", self._write_events)
        return sequence

    def add_alarm(self, event: AlarmEvent) -> int:
        """Commit and sync an alarm's transition."""
        return self.add_event("alarm", payloads.event_body(event))

    def add_told(self, told: Acknowledge | Shelve | Trouble, place: int) -> int:
        """Commit what the core was told besides readings; `place` counts the readings of this cycle before it."""
        return self.add_event("told", payloads.told_body(told, place))

    def flush(self) -> None:
        """Commit everything that waits."""
        self._commit("cycle", self._write_cycles)
        self._commit("window", self._write_windows)
        self._commit("event", self._write_events)

    def close(self) -> None:
        """Commit everything and close the files."""
        self.flush()
        for file in self._files.values():
            file.close()

    def _next(self) -> int:
        self._sequence += 1
        return self._sequence

    def _make_room(self, waiting: deque[Any]) -> None:
        self._lost += len(waiting) == waiting.maxlen

    def _last_sequence(self) -> int:
        reader = JournalReader(self.path)
        try:
            return max(reader.last_sequence(), last_of_all(self.path))
        except (sqlite3.Error, OSError) as error:
            self._say(f"the journal in {self.path} cannot be read: {error}")
            return last_of_all(self.path)
        finally:
            reader.close()

    def _add_standing(self, utc: float) -> None:
        """Begin a file of events with the alarms that stand, so that a start need not read all older files."""
        reader = JournalReader(self.path)
        try:
            alarms = [payloads.standing_body(alarm) for alarm in reader.standing()]
        except (sqlite3.Error, OSError):
            return  # the older files then still say it
        finally:
            reader.close()
        self._events.append(Event(self._next(), utc, "standing", {"alarms": alarms}))

    def _commit(self, kind: Kind, write: Callable[[], bool]) -> None:
        try:
            has_written = write()
        except (sqlite3.Error, OSError) as error:
            if getattr(error, "sqlite_errorcode", 0) != sqlite3.SQLITE_FULL:
                self._files[kind].close()  # else it stays open: readers need what an open file keeps beside it
            self._say(f"the journal in {self.path} cannot be written: {error}")
            return
        if has_written:
            self._say("")
            for wanted, wake in self._listeners:
                if wanted == kind:
                    wake()

    def _say(self, text: str) -> None:
        if self._is_well == (not text):
            return
        self._is_well = not text
        self._report(text)
        if self._is_well and self._lost:
            lost, self._lost = self._lost, 0
            self.add_event("journal", {"text": f"{lost} records were lost while the disk refused them", "lost": lost})

    def _write_cycles(self) -> bool:
        cycles = tuple(self._cycles)
        file = self._files["cycle"]
        if cycles:
            file.begin(cycles[0].sequence, cycles[0].utc)
            file.add_block(cycles, lambda number: [item for cycle in cycles for item in cycle_items(cycle, number)])
            self._cycles.clear()
        return bool(cycles)

    def _write_windows(self) -> bool:
        windows = tuple(self._windows)
        file = self._files["window"]
        if windows:
            file.begin(windows[0].sequence, windows[0].utc)
            file.add_block(windows, lambda number: [window_item(window, number) for window in windows])
            self._windows.clear()
        return bool(windows)

    def _write_events(self) -> bool:
        events = tuple(self._events)
        file = self._files["event"]
        if events:
            file.begin(events[0].sequence, events[0].utc)
            file.add_events(events)
            self._events.clear()
        return bool(events)


class _File:
    """The file of a kind that is written now."""

    def __init__(self, folder: Path, kind: Kind, keep: Keep, is_synchronised: Callable[[], bool]) -> None:
        self._folder = folder
        self._kind: Kind = kind
        self._keep = keep
        self._is_synchronised = is_synchronised
        self._path: Path | None = None
        self._connection: sqlite3.Connection | None = None
        self._shapes: dict[str, int] = {}

    def ends_before(self, utc: float) -> bool:
        """Whether there is a file and a record of this stamp begins another."""
        path = self._path or self._newest()
        return path is not None and period_of(path) != self._keep.period(self._kind, utc)

    def begin(self, first: int, utc: float) -> None:
        """Open the file that a record belongs into: the newest, or a new one in a new week."""
        period = self._keep.period(self._kind, utc)
        path = self._path or self._newest()
        if path is None or period_of(path) != period:
            path = self._folder / file_name(self._kind, first, period)
        if path != self._path or self._connection is None:
            self.close()
            self._open(path, first, utc)

    def add_block(self, records: Sequence[Cycle | Window], items: Callable[[Callable[[str], int]], list[Item]]) -> None:
        """Commit records as one block."""
        connection = self._connected()
        new: dict[str, int] = {}

        def number(shape: str) -> int:
            known = self._shapes.get(shape, new.get(shape))
            return new.setdefault(shape, len(self._shapes) + len(new) + 1) if known is None else known

        body = pack(items(number))
        stamps = [record.utc for record in records]
        block = (records[0].sequence, records[-1].sequence, min(stamps), max(stamps), body)
        with _transaction(connection):
            connection.executemany("INSERT INTO shapes (text, number) VALUES (?, ?)", new.items())
            connection.execute("INSERT INTO blocks VALUES (?, ?, ?, ?, ?)", block)
        self._shapes.update(new)

    def add_events(self, events: Sequence[Event]) -> None:
        """Commit and sync events."""
        connection = self._connected()
        rows = [(event.sequence, event.utc, event.name, json.dumps(event.body, allow_nan=False)) for event in events]
        with _transaction(connection):
            connection.executemany("INSERT INTO events VALUES (?, ?, ?, ?)", rows)

    def close(self) -> None:
        """Close the file; the next record opens it again."""
        if self._connection is not None:
            self._connection.close()
        self._connection = None

    def _connected(self) -> sqlite3.Connection:
        if self._connection is None:
            raise sqlite3.OperationalError("no file is open")
        return self._connection

    def _newest(self) -> Path | None:
        files = list_files(self._folder, self._kind)
        return files[-1] if files else None

    def _open(self, path: Path, first: int, utc: float) -> None:
        try:
            self._connection = open_for_writing(path, self._kind)
        except sqlite3.OperationalError:
            raise
        except sqlite3.DatabaseError:  # spoilt: it stays for whoever can read it, and another is begun
            path = self._folder / file_name(self._kind, first, self._keep.period(self._kind, utc))
            self._connection = open_for_writing(path, self._kind)
        self._path = path
        if self._kind != "event":
            self._shapes = dict(self._connection.execute("SELECT text, number FROM shapes"))
        if self._is_synchronised():
            unlink_old(self._folder, self._kind, self._keep, utc)


class _transaction:  # noqa: N801 - reads as a word in a with statement
    """All or nothing; a failure leaves no transaction open."""

    def __init__(self, connection: sqlite3.Connection) -> None:
        self._connection = connection

    def __enter__(self) -> None:
        self._connection.execute("BEGIN IMMEDIATE")

    def __exit__(self, kind: type[BaseException] | None, *_: object) -> None:
        if kind is None:
            self._connection.execute("COMMIT")
        elif self._connection.in_transaction:
            self._connection.execute("ROLLBACK")
