"""One question and its answer, and which answers may still come.

minimalmodbus makes the request and takes the answer apart; what kind of failure it was is told from the frame itself.
A block is only asked for in a shape of which nothing is owed (see `owed`), so that what fits is no older answer.
"""

import time
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Final

import minimalmodbus

from idlerwatch.core.frames import FUNCTIONS, Shape, shape_of, sound_frames
from idlerwatch.core.owed import LATEST_S, Owed, Patience, oldest, quiet_s, still_owed
from idlerwatch.core.polling import Block, LineTiming
from idlerwatch.core.registers import RegisterKey
from idlerwatch.edges.bus.port import RtuPort

HEAD_BYTES: Final = 3
"""Sender, function, count: what says whose answer a frame is."""


@dataclass(frozen=True, slots=True)
class Answer:
    """What came of one question: the registers, or why not (``no answer``, ``wrong answer``, ``refused``)."""

    registers: Mapping[RegisterKey, int]
    failure: str
    began: float
    ended: float


@dataclass(frozen=True, slots=True)
class MeterStatistics:
    """What a meter is like on the wire: its last and usual answer delay, questions, and failures by kind."""

    answer_delay_s: float = 0.0
    usual_delay_s: float = 0.0
    asked: int = 0
    failed: Mapping[str, int] = field(default_factory=dict)


class Master:
    """Asks meters on one port. What is owed and how patient to be outlives the port (`attach` gives a new one)."""

    def __init__(self, timing: LineTiming) -> None:
        self._timing = timing
        self._port: RtuPort | None = None
        self._instruments: dict[int, minimalmodbus.Instrument] = {}
        self._owed: tuple[Owed, ...] = ()
        self._patience: dict[int, Patience] = {}
        self._asked: dict[int, int] = {}
        self._failed: dict[int, dict[str, int]] = {}
        self._worst_lateness_s = 0.0

    def attach(self, port: RtuPort) -> None:
        """Use a freshly opened port from now on."""
        self._port = port
        self._instruments = {}

    def owed_by(self, slave: int) -> tuple[Shape, ...]:
        """Return the shapes that may still come from a meter."""
        self._owed = still_owed(self._owed, time.monotonic())
        return tuple(one.shape for one in self._owed if one.shape.slave == slave)

    def statistics(self, slave: int) -> MeterStatistics:
        """Return what is known of a meter; may be called from any thread."""
        patience = self._patience.get(slave, Patience())
        failed = dict(self._failed.get(slave, {}))
        return MeterStatistics(patience.last_s, patience.mean_s, self._asked.get(slave, 0), failed)

    def longest_s(self, slave: int, block: Block) -> float:
        """Return how long a question may take at most, answered or not. [s]"""
        limit = self._patience.get(slave, Patience()).limit_s
        return self._timing.exchange_s(block.table, block.count) - self._timing.answer_delay_s + limit

    def ask(self, slave: int, block: Block) -> Answer:
        """Ask for a block. Raises one of `PORT_LOST` when the port is gone."""
        port = self._open_port
        was_owed = bool(self.owed_by(slave))
        port.patience_s = self.longest_s(slave, block)
        self._asked[slave] = self._asked.get(slave, 0) + 1
        began = time.monotonic()
        words = self._read(slave, block)
        ended = time.monotonic()
        self._sort_out(port.take_stray())
        if words is not None and shape_of(port.frame) == block.shape(slave):
            self._note_delay(slave, ended - port.sent_at - self._busy_s(block))
            registers = {(block.table, block.address + index): word for index, word in enumerate(words)}
            return Answer(registers, "", port.sent_at, ended)
        failure = self._failure(port.frame, slave)
        self._sort_out(port.frame)
        if was_owed or not _is_spent(port.frame, block.shape(slave)):
            self._owed = (*self._owed, Owed(block.shape(slave), began, ended + LATEST_S))
        kinds = self._failed.setdefault(slave, {})
        kinds[failure] = kinds.get(failure, 0) + 1
        return Answer({}, failure, began, ended)

    def drain(self, until: float) -> None:
        """After a failure: wait until the line has been quiet longer than the worst lateness seen, within bounds."""
        if self._owed:
            self._open_port.drain(quiet_s(self._worst_lateness_s), until)
            self._sort_out(self._open_port.take_stray())

    @property
    def _open_port(self) -> RtuPort:
        if self._port is None:
            raise RuntimeError("no port was attached")
        return self._port

    def _read(self, slave: int, block: Block) -> list[int] | None:
        instrument = self._instrument(slave)
        function = FUNCTIONS[block.table]
        try:
            if block.table in ("coil", "discrete"):
                return list(instrument.read_bits(block.address, block.count, function))
            return list(instrument.read_registers(block.address, block.count, function))
        except minimalmodbus.ModbusException:
            return None

    def _instrument(self, slave: int) -> minimalmodbus.Instrument:
        instrument = self._instruments.get(slave)
        if instrument is None:
            instrument = minimalmodbus.Instrument(self._open_port, slave)
            instrument.clear_buffers_before_each_transaction = False
            self._instruments[slave] = instrument
        return instrument

    def _failure(self, frame: bytes, slave: int) -> str:
        shape = shape_of(frame)
        if shape is not None and shape.size == 0 and shape.slave == slave:
            return "refused"
        return "wrong answer" if frame else "no answer"

    def _busy_s(self, block: Block) -> float:
        """Return what an exchange takes beside the meter's own delay and the silence before it. [s]"""
        whole = self._timing.exchange_s(block.table, block.count)
        return whole - self._timing.answer_delay_s - self._timing.silence_s

    def _note_delay(self, slave: int, delay_s: float) -> None:
        self._patience[slave] = self._patience.get(slave, Patience()).after(max(delay_s, 0.0))

    def _sort_out(self, data: bytes) -> None:
        """Learn from what was owed and has come late: how late, and so how long to wait."""
        for shape in sound_frames(data):
            late = oldest(self._owed, shape)
            if late is not None:
                lateness = max(time.monotonic() - (late.until - LATEST_S), 0.0)
                self._worst_lateness_s = max(lateness, 0.9 * self._worst_lateness_s)
                self._note_delay(shape.slave, time.monotonic() - late.asked_at)


def _is_spent(frame: bytes, shape: Shape) -> bool:
    """Whether a wrong frame was the answer asked for, so that no other will come: refused, or damaged on the way."""
    if shape_of(frame) == Shape(shape.slave, shape.function, 0):
        return True
    is_whole = len(frame) == shape.frame_bytes and shape_of(frame) is None
    return is_whole and frame[:HEAD_BYTES] == bytes([shape.slave, shape.function, shape.size])
