"""The bus thread on real ports against an independent Modbus slave (pymodbus): a tty, and an adapter on a network.

A pseudo-terminal has no pace and no framing errors; those are the virtual line's business.
"""

import asyncio
import os
import select
import socket
import struct
import threading
import time
import tty
from contextlib import contextmanager

import pytest
from pymodbus.server import ModbusSerialServer
from pymodbus.simulator import DataType, SimData, SimDevice
from serial import rfc2217

from fakes.modbus import Deliveries, bus, meter, shipped_map
from idlerwatch.core.values import MeterSilent, Reading

VOLTS = {1: 231.5, 2: 198.25}
MAPS = {name: shipped_map(name) for name in ("din-float32", "discrete-inputs")}


def registers_of(volts):
    """Eighty registers of the spread layout, packed here and not by the program."""
    words = [0] * 80
    for address, value in (
        (0, volts),
        (6, 4.5),
        (12, 500.0),
        (18, 1000.0),
        (24, -866.0),
        (30, 0.5),
        (70, 50.0),
        (72, 3.0),
    ):
        words[address : address + 2] = struct.unpack(">2H", struct.pack(">f", value))
    return words


def devices():
    nothing = SimData(0, values=[0] * 80, datatype=DataType.REGISTERS)
    bits = SimData(0, values=[True, False, True, False, False, False, False, True], datatype=DataType.BITS)
    coils = SimData(0, values=[False] * 8, datatype=DataType.BITS)
    return [
        SimDevice(
            address,
            simdata=(
                [coils],
                [bits],
                [nothing],
                [SimData(0, values=registers_of(volts), datatype=DataType.REGISTERS)],
            ),
        )
        for address, volts in VOLTS.items()
    ]


@contextmanager
def bridge(left, right):
    """Copy bytes between two descriptors until the block ends."""
    over = threading.Event()

    def copy():
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


@contextmanager
def terminal():
    """A pseudo-terminal in raw mode; the far end stays open, or the near one would read an error."""
    near, far = os.openpty()
    tty.setraw(far)
    try:
        yield near, os.ttyname(far)
    finally:
        os.close(near)
        os.close(far)


@contextmanager
def slave():
    """The independent slave on a pseudo-terminal; yields the descriptor that speaks with it."""
    with terminal() as (near, name):
        loop = asyncio.new_event_loop()
        thread = threading.Thread(target=loop.run_forever)
        thread.start()
        server = asyncio.run_coroutine_threadsafe(begin(name), loop).result(5.0)
        try:
            yield near
        finally:
            asyncio.run_coroutine_threadsafe(server.shutdown(), loop).result(5.0)
            loop.call_soon_threadsafe(loop.stop)
            thread.join(5.0)
            loop.close()


async def begin(name):
    server = ModbusSerialServer(devices(), port=name, baudrate=115200)
    await server.serve_forever(background=True)
    return server


@contextmanager
def tty_port():
    with slave() as speaking, terminal() as (near, name), bridge(speaking, near):
        yield name


@contextmanager
def listening():
    with socket.create_server(("127.0.0.1", 0)) as server:
        server.settimeout(10.0)
        yield server, server.getsockname()[1]


@contextmanager
def socket_port():
    """A serial adapter that puts a line's bytes on a network socket as they are."""
    with slave() as speaking, listening() as (server, number):
        over = threading.Event()

        def serve():
            connection, _ = server.accept()
            with connection, bridge(speaking, connection.fileno()):
                over.wait()

        thread = threading.Thread(target=serve)
        thread.start()
        try:
            yield f"socket://127.0.0.1:{number}"
        finally:
            over.set()
            thread.join(5.0)


class Adapter:
    """A serial port as the RFC 2217 manager wants to see one, over a descriptor."""

    baudrate, bytesize, parity, stopbits = 115200, 8, "N", 1
    xonxoff = rtscts = dsrdtr = dtr = rts = break_condition = False
    cts = dsr = ri = cd = True

    def apply_settings(self, *_):
        """The far end keeps its settings."""

    reset_input_buffer = reset_output_buffer = apply_settings


@contextmanager
def rfc2217_port():
    """A serial adapter that also lets its line be set over the network (RFC 2217)."""
    with slave() as speaking, listening() as (server, number):
        over = threading.Event()

        def serve():
            connection, _ = server.accept()
            connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            with connection, connection.makefile("wb", buffering=0) as far:
                manager = rfc2217.PortManager(Adapter(), far)
                while not over.is_set():
                    readable, _, _ = select.select([connection, speaking], [], [], 0.05)
                    if connection in readable:
                        received = connection.recv(512)
                        if not received:
                            return
                        os.write(speaking, b"".join(manager.filter(received)))
                    if speaking in readable:
                        far.write(b"".join(manager.escape(os.read(speaking, 512))))

        thread = threading.Thread(target=serve)
        thread.start()
        try:
            yield f"rfc2217://127.0.0.1:{number}"
        finally:
            over.set()
            thread.join(5.0)


PORTS = pytest.mark.parametrize("port", [tty_port, socket_port, rfc2217_port])


@PORTS
def test_an_independent_slave_is_read_through_every_kind_of_port(port):
    with port() as name, Deliveries(bus(name), [meter("m1", 1), meter("m2", 2)], MAPS) as deliveries:
        for _ in range(4):
            given = deliveries.by_meter()
            assert all(isinstance(one, Reading) for one in given.values()), given
            assert given["m1"].values[1, "voltage"] == 231.5
            assert given["m2"].values[1, "voltage"] == 198.25
            assert given["m1"].values[1, "reactive_power"] == -866.0
            assert given["m1"].values[0, "frequency"] == 50.0


@PORTS
def test_an_exchange_over_any_port_takes_no_tenth_of_a_second(port):
    with port() as name, Deliveries(bus(name), [meter("m1", 1)], MAPS) as deliveries:
        deliveries.cycle()
        began = time.monotonic()
        for _ in range(5):
            assert all(isinstance(one, Reading) for one in deliveries.cycle())
        assert time.monotonic() - began < 5 * 0.1


def test_discrete_inputs_of_an_independent_slave_are_in_order():
    with tty_port() as name, Deliveries(bus(name), [meter("io", 1, "discrete-inputs")], MAPS) as deliveries:
        values = deliveries.by_meter()["io"].values
    assert [values[number, "input"] for number in range(1, 9)] == [1, 0, 1, 0, 0, 0, 0, 1]


def test_an_independent_slaves_refusal_is_told():
    maps = {"din-float32": shipped_map("sunspec-213")}  # asks where that slave has nothing
    with tty_port() as name, Deliveries(bus(name), [meter("m1", 1)], maps) as deliveries:
        given = deliveries.by_meter()["m1"]
    assert isinstance(given, MeterSilent)
    assert given.reason == "refused"
