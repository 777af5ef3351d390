"""A virtual serial line: Modbus RTU meters on a pseudo-terminal, at the pace of the wire and with its faults.

A request takes its bytes, then comes the silence that ends a frame, then what the meter thinks, then the bytes of the
answer; the answer is handed over whole at the instant its last byte would have come. A late answer comes whenever it
comes, whatever is being said by then. The port has a stable name, a link to the pseudo-terminal of the moment, so that
an adapter can be pulled out (`unplug`) and put back (`plug`).
"""

import contextlib
import heapq
import itertools
import os
import random
import select
import tempfile
import threading
import time
import tty
from collections import Counter, deque
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Final, Literal, Protocol

from idlerwatch.core.frames import FUNCTIONS, REQUEST_BYTES, crc16, data_bytes, silence_s, with_crc
from idlerwatch.core.registers import Table

FaultKind = Literal["lost", "corrupted", "late", "truncated", "foreign"]
FAULT_KINDS: Final[tuple[FaultKind, ...]] = ("lost", "corrupted", "late", "truncated", "foreign")
POISON: Final = 0x4AC0
"""What foreign frames hold: as a float32 some six million, in any map a value that nobody has set."""
_TABLES: Final[Mapping[int, Table]] = {function: table for table, function in FUNCTIONS.items()}


class ModbusExceptionCode(int):
    """A meter's refusal: 1 function, 2 address, 3 value, 4 failure, 6 busy."""


class Device(Protocol):
    """A meter on the line."""

    answer_delay_s: float

    def read(self, table: Table, address: int, count: int) -> list[int] | ModbusExceptionCode | None:
        """Return registers (or bits), a refusal, or None to be silent."""


@dataclass(frozen=True, slots=True)
class Faults:
    """What share of the answers is spoiled, by kind; a late one comes up to `latest_s` after its time."""

    lost: float = 0.0
    corrupted: float = 0.0
    late: float = 0.0
    truncated: float = 0.0
    foreign: float = 0.0
    latest_s: float = 1.0


@dataclass(frozen=True, slots=True)
class Request:
    """What was asked."""

    slave: int
    function: int
    address: int
    count: int


class Line:
    """The line and its thread. `faults` may be set at any time; `script` spoils the next answers one by one.

    `requests` are the last that were seen on the wire, `spoiled` counts faults by kind.
    """

    def __init__(
        self,
        devices: Mapping[int, Device],
        baudrate: int = 9600,
        character_bits: int = 10,
        *,
        faults: Faults | None = None,
        seed: int = 1,
    ) -> None:
        self._devices = devices
        self._baudrate = baudrate
        self._character_s = character_bits / baudrate
        self._chance = random.Random(seed)  # noqa: S311  # faults for tests, not secrets
        self._folder = tempfile.TemporaryDirectory(prefix="line-")
        self.port = str(Path(self._folder.name) / "port")
        self.faults = faults or Faults()
        self.script: deque[FaultKind | Literal[""]] = deque()
        self.requests: deque[Request] = deque(maxlen=10_000)
        self.spoiled: Counter[str] = Counter()
        self._due: list[tuple[float, int, bytes]] = []
        self._order = itertools.count()
        self._terminal: tuple[int, int] | None = None
        self._lock = threading.Lock()
        self._wake_out, self._wake_in = os.pipe()
        self._is_over = False
        self._thread = threading.Thread(target=self._run, name="line", daemon=True)

    def start(self) -> None:
        """Put the port there and begin to answer."""
        self.plug()
        self._thread.start()

    def stop(self) -> None:
        """Take the port away and end."""
        self._is_over = True
        self._wake()
        if self._thread.is_alive():
            self._thread.join(5.0)
        self.unplug()
        self._folder.cleanup()
        for descriptor in (self._wake_out, self._wake_in):
            with contextlib.suppress(OSError):
                os.close(descriptor)

    def plug(self) -> None:
        """Put the adapter in: a new pseudo-terminal under the same name."""
        with self._lock:
            if self._terminal is None:
                self._terminal = os.openpty()
                tty.setraw(self._terminal[1])
                Path(self.port).symlink_to(os.ttyname(self._terminal[1]))
        self._wake()

    def unplug(self) -> None:
        """Pull the adapter out: whoever has the port open finds it gone."""
        with self._lock:
            if self._terminal is not None:
                Path(self.port).unlink(missing_ok=True)
                for descriptor in self._terminal:
                    os.close(descriptor)
                self._terminal = None
                self._due.clear()
        self._wake()

    def _wake(self) -> None:
        with contextlib.suppress(OSError):
            os.write(self._wake_in, b".")

    # The line's own thread ------------------------------------------------

    def _run(self) -> None:
        received, received_at = b"", 0.0
        while not self._is_over:
            chunk = self._wait()
            now = time.monotonic()
            if received and now - received_at > 10.0 * silence_s(self._baudrate):
                received = b""  # a request that stops is none
            if chunk:
                received, received_at = received + chunk, now
            while len(received) >= REQUEST_BYTES:
                self._take(received[:REQUEST_BYTES], received_at)
                received = received[REQUEST_BYTES:]
            self._send_due()

    def _wait(self) -> bytes:
        """Return what was said on the line, at the latest when something is due."""
        with self._lock:
            master = None if self._terminal is None else self._terminal[0]
            wait_s = max(self._due[0][0] - time.monotonic(), 0.0) if self._due else 0.5
        watched = [self._wake_out] if master is None else [self._wake_out, master]
        try:
            readable, _, _ = select.select(watched, [], [], wait_s)
            if self._wake_out in readable:
                os.read(self._wake_out, 64)
            return os.read(master, 256) if master is not None and master in readable else b""
        except (OSError, ValueError):  # pulled out in between
            return b""

    def _send_due(self) -> None:
        with self._lock:
            while self._due and self._due[0][0] <= time.monotonic():
                _, _, answer = heapq.heappop(self._due)
                if self._terminal is not None:
                    with contextlib.suppress(OSError):
                        os.write(self._terminal[0], answer)

    def _take(self, frame: bytes, received_at: float) -> None:
        """Answer a request, if there is somebody with that address."""
        request = Request(frame[0], frame[1], int.from_bytes(frame[2:4], "big"), int.from_bytes(frame[4:6], "big"))
        if crc16(frame) != 0:
            return
        self.requests.append(request)
        device = self._devices.get(request.slave)
        answer = None if device is None else _answer(device, request)
        if device is None or answer is None:
            return
        asked_at = received_at + REQUEST_BYTES * self._character_s + silence_s(self._baudrate)
        kind = self.script.popleft() if self.script else self._fault()
        answer, late_s = self._spoil(kind, request, answer)
        due = asked_at + device.answer_delay_s + len(answer) * self._character_s + late_s
        if answer:
            with self._lock:
                heapq.heappush(self._due, (due, next(self._order), answer))

    def _fault(self) -> FaultKind | Literal[""]:
        drawn = self._chance.random()
        for kind in FAULT_KINDS:
            drawn -= getattr(self.faults, kind)
            if drawn < 0.0:
                return kind
        return ""

    def _spoil(self, kind: FaultKind | Literal[""], request: Request, answer: bytes) -> tuple[bytes, float]:
        """Return what becomes of an answer, and how late it is."""
        if kind:
            self.spoiled[kind] += 1
        match kind:
            case "lost":
                return b"", 0.0
            case "corrupted":
                return self._flipped(answer), 0.0
            case "late":
                return answer, self._chance.uniform(0.05, 1.0) * self.faults.latest_s
            case "truncated":
                return answer[: self._chance.randrange(1, len(answer))], 0.0
            case "foreign":
                return self._foreign(request, answer), 0.0
            case _:
                return answer, 0.0

    def _flipped(self, answer: bytes) -> bytes:
        index = self._chance.randrange(len(answer))
        return answer[:index] + bytes([answer[index] ^ self._chance.randrange(1, 256)]) + answer[index + 1 :]

    def _foreign(self, request: Request, answer: bytes) -> bytes:
        """Return a sound answer to something else: of another meter, to another function, or of another length."""
        size = answer[2]
        others = (
            (request.slave % 247 + 1, request.function, size),
            (request.slave, 7 - request.function, size),
            (request.slave, request.function, size + 2 * self._chance.choice((-1, 1, 2)) if size > 2 else size + 2),
        )
        slave, function, size = self._chance.choice(others)
        return with_crc(bytes([slave, function, size]) + POISON.to_bytes(2, "big") * (size // 2) + bytes(size % 2))


def _answer(device: Device, request: Request) -> bytes | None:
    table = _TABLES.get(request.function)
    if table is None:
        return _refusal(request, ModbusExceptionCode(1))
    words = device.read(table, request.address, request.count)
    if words is None or isinstance(words, ModbusExceptionCode):
        return None if words is None else _refusal(request, words)
    size = data_bytes(table, request.count)
    return with_crc(bytes([request.slave, request.function, size]) + _data(table, words, size))


def _refusal(request: Request, code: ModbusExceptionCode) -> bytes:
    return with_crc(bytes([request.slave, request.function | 0x80, code]))


def _data(table: Table, words: list[int], size: int) -> bytes:
    if table in ("coil", "discrete"):
        return sum(bool(bit) << index for index, bit in enumerate(words)).to_bytes(size, "little")
    return b"".join(word.to_bytes(2, "big") for word in words)
