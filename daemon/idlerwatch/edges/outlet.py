"""The one cursor loop: it brings committed records to the far side, in order, and remembers what has arrived.

Every outlet has a thread of its own, so none waits for another. It reads what is committed, gives it to its sender, and
moves the cursor to what the far side has acknowledged. A far side that is away raises `Away`; the loop comes again
after a time that doubles up to a bound, or at once when the sender hears that the far side is back. Trouble is told
once when it begins and once when it is over.
"""

import sqlite3
import threading
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Final, Protocol

from idlerwatch.core.blocks import Kind, Record
from idlerwatch.edges.journal import Cursor, Journal, JournalReader

IDLE_S: Final = 60.0
LAST_CHANCE_S: Final = 3.0
"""How long a stopping outlet still sends what is committed."""
LOOK_AT_CLOCK_S: Final = 1.0


class Away(Exception):  # noqa: N818 - a state of the far side, not an error of ours
    """The far side does not take records now; `text` says why in a sentence."""

    def __init__(self, text: str, retry_after_s: float = 0.0) -> None:
        super().__init__(text)
        self.text = text
        self.retry_after_s = retry_after_s


class Sender(Protocol):
    """Brings records to one far side; all methods but `start` are called from the outlet's thread."""

    def start(self, hurry: Callable[[], None]) -> None:
        """Begin; `hurry` may be called from any thread when the far side is back."""

    def send(self, records: Sequence[Record]) -> int:
        """Return the number of the last record the far side has acknowledged (all before it too). Raises `Away`."""

    def close(self) -> None:
        """End."""


@dataclass(frozen=True, slots=True)
class Pace:
    """How many records at once, and how long to wait after a failure: doubling from the first to the longest."""

    records: int = 100
    first_s: float = 1.0
    longest_s: float = 60.0
    longest_asked_s: float = 600.0
    """The longest wait that the far side may ask for."""

    def wait_s(self, failures: int, away: Away) -> float:
        """Return how long to wait after so many failures in a row."""
        doubled = self.first_s * 2.0 ** min(failures - 1, 30)
        return max(min(doubled, self.longest_s), min(away.retry_after_s, self.longest_asked_s))


class Troubles:
    """Several causes, one report: a sentence when the first begins, an empty text when the last is over."""

    def __init__(self, report: Callable[[str], None]) -> None:
        self._report = report
        self._causes: dict[str, str] = {}
        self._is_told = False
        self._lock = threading.Lock()

    def say(self, cause: str, text: str) -> None:
        """Note what is wrong for one cause; empty when it is right again."""
        with self._lock:
            self._causes = {**{known: old for known, old in self._causes.items() if known != cause}, cause: text}
            worst = next(filter(None, self._causes.values()), "")
            if self._is_told != bool(worst):
                self._is_told = bool(worst)
                self._report(worst)


class Outlet:
    """One way out.

    Parameters
    ----------
    kind
        The kind of record it sends.
    journal
        Where they come from; a commit wakes the outlet.
    cursor
        How far the far side is.
    sender
        The far side.
    report
        Told a sentence when the far side is away, an empty text when it is back. Left out where the sender, which knows
        more, tells it itself (`mqtt.Mqtt`).
    is_ready
        Asked each second until true: whether stamps are right (`clock.ClockWait`).
    """

    def __init__(
        self,
        kind: Kind,
        journal: Journal,
        cursor: Cursor,
        sender: Sender,
        *,
        report: Callable[[str], None] = lambda _: None,
        is_ready: Callable[[], bool] = lambda: True,
        pace: Pace = Pace(),
    ) -> None:
        self._kind: Kind = kind
        self._journal = journal
        self._cursor = cursor
        self._sender = sender
        self._troubles = Troubles(report)
        self._is_ready = is_ready
        self._pace = pace
        self._bell = threading.Event()
        self._hurry = threading.Event()
        self._is_stopping = threading.Event()
        self._thread = threading.Thread(target=self._run, name=f"outlet {kind}", daemon=True)
        journal.listen(kind, self._bell.set)

    def start(self) -> None:
        """Begin to send what is committed."""
        self._sender.start(self.hurry)
        self._thread.start()

    def hurry(self) -> None:
        """Try again now; for a sender that hears that the far side is back."""
        self._hurry.set()

    def stop(self) -> None:
        """Send what is committed if that is quick, then end."""
        self._is_stopping.set()
        self._bell.set()
        self._hurry.set()
        if self._thread.ident is not None:
            self._thread.join(2.0 * LAST_CHANCE_S)
        self._sender.close()
        self._cursor.close()

    def _run(self) -> None:
        while not self._is_ready():
            if self._is_stopping.wait(LOOK_AT_CLOCK_S):
                return
        reader = JournalReader(self._journal.path, self._journal.unwritten)
        try:
            self._send_all(reader)
        finally:
            reader.close()

    def _send_all(self, reader: JournalReader) -> None:
        failures = 0
        last_chance: float | None = None
        while True:
            self._bell.clear()
            self._hurry.clear()
            if self._is_stopping.is_set():
                last_chance = last_chance or time.monotonic() + LAST_CHANCE_S
            try:
                has_sent = self._send_some(reader)
            except Away as away:
                failures += 1
                self._troubles.say(self._kind, away.text)
                if self._is_stopping.is_set():
                    return
                self._hurry.wait(self._pace.wait_s(failures, away))
                continue
            failures = 0
            if has_sent:
                self._troubles.say(self._kind, "")
            if last_chance is not None and (not has_sent or time.monotonic() > last_chance):
                return
            if not has_sent and not self._is_stopping.is_set():
                self._bell.wait(IDLE_S)

    def _send_some(self, reader: JournalReader) -> bool:
        try:
            records = reader.read(self._cursor.at, self._kind, self._pace.records)
        except (sqlite3.Error, OSError) as error:
            raise Away(f"the journal cannot be read: {error}") from error
        if records:
            self._cursor.move(self._sender.send(records))
        return bool(records)
