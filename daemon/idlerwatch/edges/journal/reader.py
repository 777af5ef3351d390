"""Reading a journal, while it is written or years later."""

import json
import sqlite3
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from itertools import zip_longest
from pathlib import Path
from typing import Any, Final

from idlerwatch.core import payloads
from idlerwatch.core.blocks import Cycle, Event, Kind, Record, Window, read_cycles, read_windows, unpack
from idlerwatch.core.values import Input, StandingAlarm
from idlerwatch.edges.journal.files import first_of, list_files, open_for_reading

_MANY: Final = 1_000_000
_BLOCKS: Final = "SELECT last, body FROM blocks WHERE last > ? AND until >= ? AND since <= ? ORDER BY first LIMIT ?"
_EVENTS: Final = "SELECT sequence, utc, name, body FROM events WHERE sequence > ? ORDER BY sequence LIMIT ?"


def _nothing() -> Sequence[Event]:
    return ()


class JournalReader:
    """Reads committed records in the order of their sequence numbers; one reader belongs to one thread.

    `unwritten` gives events that the disk has refused so far (`Journal.unwritten`): an alarm must reach a phone though
    the disk be full. No read transaction outlives a call, so a reader never holds back the writer's checkpoint.
    """

    def __init__(self, folder: str | Path, unwritten: Callable[[], Sequence[Event]] = _nothing) -> None:
        self._folder = Path(folder)
        self._unwritten = unwritten
        self._open: dict[Path, sqlite3.Connection] = {}
        self._shapes: dict[Path, dict[int, str]] = {}

    def close(self) -> None:
        """Close the files."""
        while self._open:
            self._open.popitem()[1].close()

    def read(self, after: int, kind: Kind, limit: int = 1000) -> list[Record]:
        """Return records of a kind with sequence numbers greater than `after`, in order.

        Blocks are read whole, so at least `limit` records are returned where there are that many.
        """
        found: list[Record] = []
        files = self._files(kind)
        for path, successor in zip_longest(files, files[1:]):
            if len(found) >= limit:
                return found
            if successor is None or first_of(successor) > after + 1:
                found.extend(self._read_file(path, kind, after, limit - len(found)))
        if kind == "event" and len(found) < limit:
            last = found[-1].sequence if found else after
            found.extend(event for event in self._unwritten() if event.sequence > last)
        return found

    def last_sequence(self) -> int:
        """Return the largest sequence number in the files, 0 where there is none."""
        return max((self._last(kind) for kind in ("cycle", "window", "event")), default=0)

    def events(self, name: str, after: int = 0) -> Iterator[Event]:
        """Yield the events of a name, oldest first."""
        for path in self._files("event"):
            question = "SELECT sequence, utc, name, body FROM events WHERE name = ? AND sequence > ? ORDER BY sequence"
            yield from map(_event, self._ask(path, question, name, after))

    def last_event(self, name: str) -> Event | None:
        """Return the newest event of a name."""
        question = "SELECT sequence, utc, name, body FROM events WHERE name = ? ORDER BY sequence DESC LIMIT 1"
        for path in reversed(self._files("event")):
            for row in self._ask(path, question, name):
                return _event(row)
        return None

    def standing(self) -> tuple[StandingAlarm, ...]:
        """Return the alarms that were not normal at the end of the journal, in the order of tag and subject.

        Each file of events begins with those standing then (``standing``), so only the newest is read.
        """
        latest: dict[tuple[str, str], StandingAlarm] = {}
        question = "SELECT name, body FROM events WHERE name IN ('alarm', 'standing') ORDER BY sequence DESC"
        for path in reversed(self._files("event")):
            for name, text in self._ask(path, question):
                body = json.loads(text)
                alarms = body["alarms"] if name == "standing" else [body["alarm"]]
                for alarm in map(payloads.read_standing, alarms):
                    latest.setdefault((alarm.tag, alarm.subject), alarm)
                if name == "standing":
                    return _not_normal(latest)
        return _not_normal(latest)

    def cycles(self, since_utc: float = -float("inf"), until_utc: float = float("inf")) -> Iterator[Cycle]:
        """Yield the cycles that ended between two stamps (both included)."""
        for path in self._files("cycle"):
            for _, body in self._ask(path, _BLOCKS, -1, since_utc, until_utc, _MANY):
                found = read_cycles(unpack(body), self._shapes_of(path))
                yield from (cycle for cycle in found if since_utc <= cycle.utc <= until_utc)

    def inputs(self, since_utc: float = -float("inf"), until_utc: float = float("inf")) -> Iterator[Input]:
        """Yield exactly what the core was given between two stamps, in its order, bit for bit.

        What people and the tool's own parts told (events ``told``) stand where they stood among the meters' readings.
        """
        told = deque(event for event in self.events("told") if since_utc <= event.utc)
        for cycle in self.cycles(since_utc, until_utc):
            given: list[Input] = list(cycle.inputs)
            for already, event in enumerate(_before(told, cycle.sequence)):
                what, place = payloads.read_told(event.body)
                given.insert(place + already, what)
            yield from (*given, cycle.end)
        yield from (payloads.read_told(event.body)[0] for event in told if event.utc <= until_utc)

    def recent(self, seconds: float) -> Iterator[Input]:
        """Yield the inputs of the last so many seconds before the journal's last cycle."""
        last = self._last_stamp()
        if last is not None:
            yield from self.inputs(since_utc=last - seconds)

    def _files(self, kind: Kind) -> list[Path]:
        files = list_files(self._folder, kind)
        for path in [path for path in self._open if path not in files and path.name.startswith(kind)]:
            self._open.pop(path).close()
        return files

    def _ask(self, path: Path, question: str, *values: object) -> list[Any]:
        connection = self._open.get(path)
        try:
            if connection is None:
                connection, is_live = open_for_reading(path)
                if is_live:
                    self._open[path] = connection
            return connection.execute(question, values).fetchall()
        except sqlite3.OperationalError as error:
            if "no such table" in str(error):  # just being made
                return []
            raise
        except sqlite3.DatabaseError:  # a spoilt file is passed over, the others still tell
            return []
        finally:
            if connection is not None and path not in self._open:
                connection.close()

    def _read_file(self, path: Path, kind: Kind, after: int, limit: int) -> list[Record]:
        if kind == "event":
            return [_event(row) for row in self._ask(path, _EVENTS, after, limit)]
        found: list[Record] = []
        for _, body in self._ask(path, _BLOCKS, after, -float("inf"), float("inf"), limit):
            items, shapes = unpack(body), self._shapes_of(path)
            records: Iterator[Cycle | Window]
            records = read_cycles(items, shapes) if kind == "cycle" else read_windows(items, shapes)
            found.extend(record for record in records if record.sequence > after)
            if len(found) >= limit:
                break
        return found

    def _shapes_of(self, path: Path) -> dict[int, str]:
        # a shape is committed with the first block that uses it, and never changes
        known = self._shapes.setdefault(path, {})
        known.update(self._ask(path, "SELECT number, text FROM shapes WHERE number > ?", max(known, default=0)))
        return known

    def _last(self, kind: Kind) -> int:
        column, table = ("sequence", "events") if kind == "event" else ("last", "blocks")
        for path in reversed(self._files(kind)):
            for (last,) in self._ask(path, f"SELECT max({column}) FROM {table}"):  # noqa: S608 - two fixed words
                return max(int(last or 0), first_of(path) - 1)
            return first_of(path)  # spoilt
        return 0

    def _last_stamp(self) -> float | None:
        for path in reversed(self._files("cycle")):
            for (body,) in self._ask(path, "SELECT body FROM blocks ORDER BY first DESC LIMIT 1"):
                return [cycle.utc for cycle in read_cycles(unpack(body), self._shapes_of(path))][-1]
        return None


def _before(events: deque[Event], sequence: int) -> list[Event]:
    found: list[Event] = []
    while events and events[0].sequence < sequence:
        found.append(events.popleft())
    return found


def _event(row: tuple[int, float, str, str]) -> Event:
    sequence, utc, name, body = row
    return Event(sequence, utc, name, json.loads(body))


def _not_normal(latest: dict[tuple[str, str], StandingAlarm]) -> tuple[StandingAlarm, ...]:
    return tuple(latest[key] for key in sorted(latest) if latest[key].state != "normal")
