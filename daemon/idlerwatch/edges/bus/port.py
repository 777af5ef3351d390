"""A port as minimalmodbus wants it, round whatever `serial_for_url` returns (tty, ``socket://``, ``rfc2217://``).

minimalmodbus reads as many bytes as a good answer has, and so waits the whole time-out for an exception answer and for
a short one. Here an answer's first five bytes are read (the shortest answer is an exception), then what function and
count promise; an answer that stops ends after a gap.

The port's own time-out stays at `POLL_S`, and deadlines are kept here: setting one renegotiates an RFC 2217 port.
What lies in the input before a request belongs to nobody and is kept as `stray`, for the exchange to look at; the
library's clearing of buffers is off, which over RFC 2217 would cost 100 ms an exchange.
"""

import contextlib
import itertools
import termios
import time
from typing import Final, Protocol, cast

import serial

from idlerwatch.core.frames import SHORTEST_ANSWER, promised_bytes, silence_s
from idlerwatch.core.polling import LineTiming
from idlerwatch.core.settings.model import Bus

POLL_S: Final = 0.02
GAP_S: Final = 0.03
"""An answer may pause this long: adapters hand over what they received every 16 ms."""
WRITE_S: Final = 1.0
"""Longer than any request takes: a port that does not take it in is lost."""
STRAY_BYTES: Final = 4096
"""More than this before a request is noise, and dropped."""
PORT_LOST: Final = (serial.SerialException, termios.error, OSError)
"""What an unplugged port raises; `termios.error` is no OSError."""

_PARITY: Final = {"none": serial.PARITY_NONE, "even": serial.PARITY_EVEN, "odd": serial.PARITY_ODD}
_numbers = itertools.count()


class SerialPort(Protocol):
    """What is used of pyserial's ports."""

    is_open: bool
    in_waiting: int

    def read(self, size: int, /) -> bytes:
        """Return at most `size` bytes, fewer after the time-out."""

    def write(self, data: bytes, /) -> int | None:
        """Send."""

    def close(self) -> None:
        """Close."""


def character_bits(bus: Bus) -> int:
    """Return the bits a character takes: start, eight of data, parity, stop."""
    return 9 + (bus.parity != "none") + bus.stopbits


def open_port(bus: Bus) -> "RtuPort":
    """Open a bus's port. Raises one of `PORT_LOST` where it is not there."""
    line = {"baudrate": bus.baudrate, "parity": _PARITY[bus.parity], "stopbits": bus.stopbits}
    if not bus.port.startswith("rfc2217://"):  # which knows no such time-out
        line["write_timeout"] = WRITE_S
    try:
        opened = serial.serial_for_url(bus.port, timeout=POLL_S, **line)
    except ValueError as error:
        raise serial.SerialException(str(error)) from error
    with contextlib.suppress(AttributeError, NotImplementedError, ValueError, *PORT_LOST):
        opened.set_low_latency_mode(True)  # a pty and a network port have no such mode
    return RtuPort(cast("SerialPort", opened), LineTiming(bus.baudrate, character_bits(bus)))


class RtuPort:
    """The wrapper. `patience_s` is how long the next answer's first byte may take, `frame` what the last answer was."""

    def __init__(self, opened: SerialPort, timing: LineTiming) -> None:
        self._opened = opened
        self._timing = timing
        self.baudrate = timing.baudrate
        self.timeout = POLL_S
        self.port = f"bus-{next(_numbers)}"  # minimalmodbus keeps its silences by this name
        self.patience_s = 1.0
        self.frame = b""
        self.sent_at = 0.0
        self.last_byte_at = 0.0
        self._stray = b""

    @property
    def is_open(self) -> bool:
        """Whether the port is open."""
        return self._opened.is_open

    def open(self) -> None:
        """Refuse: a port that was closed is made anew."""
        raise serial.SerialException("the port is closed")

    def close(self) -> None:
        """Close, whatever state the port is in."""
        with contextlib.suppress(*PORT_LOST):
            self._opened.close()

    def write(self, request: bytes) -> None:
        """Send a request, after what lies in the input was put aside and the line was silent."""
        self._stray = (self._stray + self._waiting())[-STRAY_BYTES:]
        silent_for = time.monotonic() - self.last_byte_at
        if silent_for < silence_s(self.baudrate):
            time.sleep(silence_s(self.baudrate) - silent_for)
        self.frame = b""
        self.sent_at = time.monotonic()
        self._opened.write(request)

    def read(self, _size: int) -> bytes:
        """Return an answer: its head, then what that promises; what has come when it stops."""
        head = self._collect(SHORTEST_ANSWER, self.patience_s)
        self.frame = head
        if len(head) == SHORTEST_ANSWER:
            self.frame += self._collect(promised_bytes(head) - SHORTEST_ANSWER, self._gap_s)
        return self.frame

    def drain(self, quiet_s: float, until: float) -> None:
        """Put aside whatever comes until nothing has come for `quiet_s`, at the latest at `until`."""
        quiet_since = time.monotonic()
        while (now := time.monotonic()) - quiet_since < quiet_s and now < until:
            chunk = self._opened.read(1) + self._waiting()
            if chunk:
                self._stray = (self._stray + chunk)[-STRAY_BYTES:]
                quiet_since = self.last_byte_at = time.monotonic()

    def take_stray(self) -> bytes:
        """Return what came and answered nothing, once."""
        stray, self._stray = self._stray, b""
        return stray

    def reset_input_buffer(self) -> None:
        """Do nothing: `write` puts the input aside."""

    def reset_output_buffer(self) -> None:
        """Do nothing: requests are never left over."""

    @property
    def _gap_s(self) -> float:
        return max(GAP_S, self._timing.bytes_s(5))

    def _collect(self, size: int, first_s: float) -> bytes:
        """Read `size` bytes: the first within `first_s`, each next within a gap."""
        data = b""
        deadline = time.monotonic() + first_s
        while len(data) < size:
            chunk = self._opened.read(size - len(data))
            now = time.monotonic()
            if chunk:
                data += chunk
                self.last_byte_at = now
                deadline = now + self._gap_s
            elif now >= deadline:
                break
        return data

    def _waiting(self) -> bytes:
        """Return what lies in the input; not more than noise could be, so that a babbling line cannot hold us."""
        data = b""
        while len(data) < STRAY_BYTES and (count := self._opened.in_waiting):
            data += self._opened.read(count)
            self.last_byte_at = time.monotonic()
        return data
