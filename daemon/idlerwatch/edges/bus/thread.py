"""The thread that owns a port and everything on it.

A port that vanishes is closed and opened again for ever by its name, once a cycle; it is told once that it is gone and
once that it is back. Meanwhile every meter is silent with the reason ``port gone``.
"""

import threading
import time
from collections.abc import Callable, Mapping, Sequence
from typing import Final

from idlerwatch.core.polling import LineTiming
from idlerwatch.core.registers import RegisterMap
from idlerwatch.core.settings.model import Bus, Meter
from idlerwatch.core.values import Input, Trouble
from idlerwatch.edges.bus.cycle import Cycle, on_bus
from idlerwatch.edges.bus.exchange import Master, MeterStatistics
from idlerwatch.edges.bus.port import PORT_LOST, RtuPort, character_bits, open_port

REOPEN_S: Final = 0.25
"""A port that is not there is not tried more often than this."""
UNPACED_S: Final = 1.0
"""Cycles without a pace (``cycle_s`` 0) may ask again within this."""
STOP_S: Final = 10.0


class BusThread:
    """Polls the meters of one bus, a cycle each time `begin_cycle` is called.

    In each cycle `deliver` gets one `Reading` or `MeterSilent` of every meter (and a `Trouble` when the port went or
    came back), then `done` is called once; both in the bus's thread. `cycle_s` is the time a cycle may take: what is
    asked again only uses what is left of it.
    """

    def __init__(
        self,
        bus: Bus,
        meters: Sequence[Meter],
        maps: Mapping[str, RegisterMap],
        deliver: Callable[[Input], None],
        done: Callable[[], None],
        *,
        cycle_s: float = 1.0,
    ) -> None:
        timing = LineTiming(bus.baudrate, character_bits(bus))
        self._bus = bus
        self._deliver = deliver
        self._done = done
        self._cycle_s = cycle_s or UNPACED_S
        self._master = Master(timing)
        self._addresses = {meter.name: meter.address for meter in meters if meter.bus == bus.name}
        here = [on_bus(meter, maps[meter.map], timing) for meter in meters if meter.bus == bus.name]
        self._cycle = Cycle(here, self._master, deliver)
        self._port: RtuPort | None = None
        self._is_gone = False
        self._tried_at = float("-inf")
        self._due = threading.Semaphore(0)
        self._stopping = threading.Event()
        self._thread = threading.Thread(target=self._run, name=f"bus {bus.name}", daemon=True)

    def start(self) -> None:
        """Start the thread; it waits for `begin_cycle`."""
        self._thread.start()

    def begin_cycle(self) -> None:
        """Let one cycle run."""
        self._due.release()

    def stop(self) -> None:
        """End after the exchange going on, and close the port."""
        self._stopping.set()
        self._due.release()
        if self._thread.is_alive():
            self._thread.join(STOP_S)

    def statistics(self) -> Mapping[str, MeterStatistics]:
        """Return what each meter is like on the wire, by its name."""
        return {name: self._master.statistics(address) for name, address in self._addresses.items()}

    def _run(self) -> None:
        while self._due.acquire() and not self._stopping.is_set():
            self._run_cycle(time.monotonic())
            self._done()
        self._close()

    def _run_cycle(self, began: float) -> None:
        try:
            self._open()
            self._cycle.run(began + self._cycle_s)
        except PORT_LOST as error:
            self._lose(error)

    def _open(self) -> None:
        if self._port is not None:
            return
        self._stopping.wait(max(self._tried_at + REOPEN_S - time.monotonic(), 0.0))
        self._tried_at = time.monotonic()
        self._cycle.expect_everybody()
        self._port = open_port(self._bus)
        self._master.attach(self._port)
        if self._is_gone:
            self._is_gone = False
            self._deliver(Trouble(time.monotonic(), f"bus {self._bus.name}", ""))

    def _lose(self, error: Exception) -> None:
        self._close()
        if not self._is_gone:
            self._is_gone = True
            text = f"port {self._bus.port} is gone: {error}"
            self._deliver(Trouble(time.monotonic(), f"bus {self._bus.name}", text))
        self._cycle.give_up("port gone")

    def _close(self) -> None:
        if self._port is not None:
            self._port.close()
            self._port = None
