"""Meters played by pymodbus, an independent Modbus implementation, on a pseudo-terminal; their registers can be set."""

import asyncio
import contextlib
import os
import select
import struct
import threading
import tty
from collections.abc import Iterator, Mapping

from pymodbus.server import ModbusSerialServer
from pymodbus.simulator import DataType, SimData, SimDevice

REGISTERS = 80
FLOATS = {
    "voltage": 0,
    "current": 6,
    "active_power": 12,
    "apparent_power": 18,
    "reactive_power": 24,
    "power_factor": 30,
    "frequency": 70,
    "active_energy_import": 72,
}
"""The spread layout of float32 input registers, high word first: stated here, not taken from the program."""


def words_of(value: float) -> list[int]:
    return list(struct.unpack(">2H", struct.pack(">f", value)))


class Peer:
    """A server with some meters; `port` is where the daemon finds them."""

    def __init__(self, port: str, loop: asyncio.AbstractEventLoop, server: ModbusSerialServer) -> None:
        self.port = port
        self._loop = loop
        self._server = server

    def set(self, address: int, **values: float) -> None:
        """Set quantities of one meter, all of them between two requests."""

        async def write() -> None:
            for quantity, value in values.items():
                result = await self._server.async_setValues(address, 4, FLOATS[quantity], words_of(value))
                assert result is None, result

        asyncio.run_coroutine_threadsafe(write(), self._loop).result(5.0)


@contextlib.contextmanager
def peer(meters: Mapping[int, Mapping[str, float]]) -> Iterator[Peer]:
    """Play meters by address until the block ends."""
    with _terminal() as (speaking, far), _terminal() as (near, name), _bridge(speaking, near):
        loop = asyncio.new_event_loop()
        thread = threading.Thread(target=loop.run_forever)
        thread.start()
        server = asyncio.run_coroutine_threadsafe(_begin(far, meters), loop).result(5.0)
        try:
            yield Peer(name, loop, server)
        finally:
            asyncio.run_coroutine_threadsafe(server.shutdown(), loop).result(5.0)
            loop.call_soon_threadsafe(loop.stop)
            thread.join(5.0)
            loop.close()


async def _begin(port: str, meters: Mapping[int, Mapping[str, float]]) -> ModbusSerialServer:
    server = ModbusSerialServer([_device(address, values) for address, values in meters.items()], port=port,
                                baudrate=115200)  # fmt: skip
    await server.serve_forever(background=True)
    return server


def _device(address: int, values: Mapping[str, float]) -> SimDevice:
    words = [0] * REGISTERS
    for quantity, value in values.items():
        words[FLOATS[quantity] : FLOATS[quantity] + 2] = words_of(value)
    bits = SimData(0, values=[False] * 8, datatype=DataType.BITS)
    empty = SimData(0, values=[0] * REGISTERS, datatype=DataType.REGISTERS)
    inputs = SimData(0, values=words, datatype=DataType.REGISTERS)
    return SimDevice(address, simdata=([bits], [bits], [empty], [inputs]))


@contextlib.contextmanager
def _terminal() -> Iterator[tuple[int, str]]:
    near, far = os.openpty()
    tty.setraw(far)
    try:
        yield near, os.ttyname(far)
    finally:
        os.close(near)
        os.close(far)


@contextlib.contextmanager
def _bridge(left: int, right: int) -> Iterator[None]:
    over = threading.Event()

    def copy() -> None:
        while not over.is_set():
            for readable in select.select([left, right], [], [], 0.05)[0]:
                os.write(right if readable == left else left, os.read(readable, 512))

    thread = threading.Thread(target=copy)
    thread.start()
    try:
        yield
    finally:
        over.set()
        thread.join(5.0)
