"""Three clocks: monotonic for durations, UTC for stamps, local time for people; and whether UTC is right.

UTC is monotonic time plus an offset that is held as long as it stays within a millisecond, so that stamps do not
jitter. A jump of more than half a second between two looks is a step, reported once by `take_step`; a board without a
battery-backed clock makes one shortly after each start.

Whether the clock is synchronised is asked of the kernel (``adjtimex``, state TIME_ERROR means no); where a sandbox
forbids that, the mark that systemd-timesyncd leaves is looked for.
"""

import ctypes
import time
from collections.abc import Callable, Iterable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Final

from idlerwatch.core.values import CycleEnd, Input

FOLLOWED_S: Final = 0.001
STEP_S: Final = 0.5
LONGEST_WAIT_S: Final = 600.0
TIMESYNC_MARK: Final = Path("/run/systemd/timesync/synchronized")
_TIME_ERROR: Final = 5
_TIMEX_BYTES: Final = 512  # more than struct timex on any platform; all zero means "only look"


def local_offset(utc: float) -> float:
    """Return local time minus UTC at a stamp. [s]"""
    return float(time.localtime(utc).tm_gmtoff)


class Clock:
    """The clocks of the board; each can be replaced for a test or a rig."""

    def __init__(
        self,
        monotonic: Callable[[], float] = time.monotonic,
        utc: Callable[[], float] = time.time,
        local_offset: Callable[[float], float] = local_offset,
    ) -> None:
        self.monotonic = monotonic
        self._utc = utc
        self._local_offset = local_offset
        self._offset = utc() - monotonic()
        self._step = 0.0

    def utc(self) -> float:
        """Return the stamp of this moment, POSIX seconds."""
        return self.monotonic() + self._look()

    def cycle_end(self) -> CycleEnd:
        """Return the end of a cycle, now."""
        offset = self._look()
        at = self.monotonic()
        return CycleEnd(at, offset, self._local_offset(at + offset))

    def take_step(self) -> float:
        """Return by how much UTC has stepped since this was last asked, 0 where it has not. [s]"""
        step, self._step = self._step, 0.0
        return step

    def rebase(self, inputs: Iterable[Input], within_s: float) -> Iterator[Input]:
        """Yield earlier inputs on the present monotonic clock, as if the board had not been restarted since.

        Cycles that ended longer ago than `within_s`, or (the clock is wrong) later than now, are left out.
        """
        now, offset = self.monotonic(), self._look()
        waiting: list[Input] = []
        for given in inputs:
            if not isinstance(given, CycleEnd):
                waiting.append(given)
                continue
            shift = given.utc_offset - offset
            if now - within_s <= given.at + shift <= now:
                yield from (replace(earlier, at=earlier.at + shift) for earlier in waiting)
                yield CycleEnd(given.at + shift, offset, given.local_offset)
            waiting = []

    def _look(self) -> float:
        offset = self._utc() - self.monotonic()
        change = offset - self._offset
        if abs(change) > STEP_S:
            self._step += change
        if abs(change) > FOLLOWED_S:
            self._offset = offset
        return self._offset


def is_synchronised() -> bool:
    """Whether the kernel, or failing that systemd-timesyncd, says that UTC is right."""
    try:
        state = ctypes.CDLL(None).adjtimex(ctypes.create_string_buffer(_TIMEX_BYTES))
    except (OSError, AttributeError):
        state = -1
    return TIMESYNC_MARK.exists() if state < 0 else state != _TIME_ERROR


class ClockWait:
    """Called: whether stamps can go out, because the clock is synchronised or has had ten minutes to become so."""

    def __init__(
        self,
        is_synchronised: Callable[[], bool] = is_synchronised,
        longest_s: float = LONGEST_WAIT_S,
        monotonic: Callable[[], float] = time.monotonic,
    ) -> None:
        self._is_synchronised = is_synchronised
        self._monotonic = monotonic
        self._until = monotonic() + longest_s
        self._is_over = False

    def __call__(self) -> bool:
        """Whether the wait is over; once over, over for good."""
        self._is_over = self._is_over or self._monotonic() >= self._until or self._is_synchronised()
        return self._is_over
