"""How far an outlet has come: one number in a small file, written in place.

Twenty digits lie in one sector, so they are the old number or the new one. A number lost in a power cut only makes an
outlet send again what the far side already has.
"""

import os
import time
from collections.abc import Callable
from pathlib import Path
from typing import Final

_DIGITS: Final = 20


class Cursor:
    """The last sequence number that the far side has acknowledged.

    `at_first` is where an outlet begins that has no cursor yet: 0 for the oldest record, the journal's last number for
    "from now on". `every_s` spares the disk: the number is written that seldom at most (a window written twice is the
    same window), and when the cursor is closed.
    """

    def __init__(
        self,
        folder: Path,
        outlet: str,
        at_first: int,
        every_s: float = 0.0,
        monotonic: Callable[[], float] = time.monotonic,
    ) -> None:
        self._path = folder / f"cursor.{outlet}"
        self._every_s = every_s
        self._monotonic = monotonic
        found = _read(self._path)
        self.at = at_first if found is None else found
        self._written = found
        self._written_at = -float("inf")
        if found is None:
            self._write()

    def move(self, sequence: int) -> None:
        """Remember that everything up to a sequence number has been acknowledged."""
        self.at = max(self.at, sequence)
        if self._monotonic() - self._written_at >= self._every_s:
            self._write()

    def close(self) -> None:
        """Write the number if the file does not hold it yet."""
        self._write()

    def _write(self) -> None:
        if self._written == self.at:
            return
        try:
            descriptor = os.open(self._path, os.O_WRONLY | os.O_CREAT | os.O_CLOEXEC, 0o640)
        except OSError:
            return  # the journal tells what is wrong with the disk; the next move tries again
        try:
            os.pwrite(descriptor, f"{self.at:0{_DIGITS}d}\n".encode(), 0)
            self._written = self.at
        except OSError:
            return
        finally:
            os.close(descriptor)
        self._written_at = self._monotonic()


def _read(path: Path) -> int | None:
    try:
        return int(path.read_text())
    except (FileNotFoundError, ValueError):
        return None


def last_of_all(folder: Path) -> int:
    """Return the largest number in any cursor, 0 where there is none."""
    return max((_read(path) or 0 for path in folder.glob("cursor.*")), default=0)
