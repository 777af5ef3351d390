"""Messages that were given to the MQTT library and wait for the broker's answer."""

import threading
from collections.abc import Callable, Iterable
from typing import Final

MOST_ANSWERS: Final = 4096
"""Answers nobody has asked for yet; the oldest go first, and their messages are then waited for in vain and sent again
after the next start."""


class Flight:
    """Messages that were given to the library: by sequence number, and what the broker answered."""

    def __init__(self) -> None:
        self._mids: dict[int, int] = {}
        self._answers: dict[int, str] = {}
        self._news = threading.Condition()

    def holds(self, sequence: int) -> bool:
        """Whether a message is on its way."""
        return sequence in self._mids

    def add(self, sequence: int, mid: int) -> None:
        """Note the number that the library gave a message."""
        with self._news:
            self._mids[sequence] = mid

    def answer(self, mid: int, failure: str) -> None:
        """Note what the broker answered, empty for success."""
        with self._news:
            self._answers[mid] = failure
            while len(self._answers) > MOST_ANSWERS:
                self._answers.pop(next(iter(self._answers)))
            self._news.notify_all()

    def notify(self) -> None:
        """Let those who wait look again, the connection has gone."""
        with self._news:
            self._news.notify_all()

    def wait(self, sequences: Iterable[int], longest_s: float, is_connected: Callable[[], bool]) -> None:
        """Wait until all are answered, the connection is lost, or the time is over."""

        def is_over() -> bool:
            return not is_connected() or all(self._mids[sequence] in self._answers for sequence in sequences)

        with self._news:
            self._news.wait_for(is_over, longest_s)

    def take(self, sequence: int) -> str | None:
        """Return the failure (empty for success) and forget the message; None while there is no answer."""
        with self._news:
            answer = self._answers.pop(self._mids[sequence], None)
            if answer is not None:
                del self._mids[sequence]
            return answer
