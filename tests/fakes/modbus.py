"""Meters for a virtual line, and what a bus thread is given to deliver to."""

import queue
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Self

from idlerwatch.core.registers import RegisterKey, RegisterMap, Table, image, read_register_map
from idlerwatch.core.settings.model import Bus, Channel, Meter
from idlerwatch.core.values import Input, MeterSilent, Reading, Trouble
from idlerwatch.edges.bus import BusThread
from idlerwatch.rig.line import ModbusExceptionCode

MAPS = Path(__file__).resolve().parents[2] / "config" / "meters"


def shipped_map(name: str) -> RegisterMap:
    return read_register_map(name, tomllib.loads((MAPS / f"{name}.toml").read_text(encoding="utf-8")))


@dataclass
class FakeMeter:
    """Holds registers; addresses that hold nothing read 0. `is_silent` and `refusal` as the test wants."""

    registers: dict[RegisterKey, int] = field(default_factory=dict)
    answer_delay_s: float = 0.002
    is_silent: bool = False
    refusal: int = 0

    def read(self, table: Table, address: int, count: int) -> list[int] | ModbusExceptionCode | None:
        if self.is_silent:
            return None
        if self.refusal:
            return ModbusExceptionCode(self.refusal)
        return [self.registers.get((table, address + index), 0) for index in range(count)]


class Deliveries:
    """Runs cycles of a bus thread and keeps what it delivered."""

    def __init__(self, bus: Bus, meters: list[Meter], maps: Mapping[str, RegisterMap], cycle_s: float = 1.0) -> None:
        self._given: queue.Queue[Input | None] = queue.Queue()
        self.thread = BusThread(bus, meters, maps, self._given.put, lambda: self._given.put(None), cycle_s=cycle_s)

    def __enter__(self) -> Self:
        self.thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self.thread.stop()

    def cycle(self) -> list[Input]:
        """Let one cycle run and return all it delivered."""
        self.thread.begin_cycle()
        given: list[Input] = []
        while (one := self._given.get(timeout=20.0)) is not None:
            given.append(one)
        return given

    def by_meter(self) -> dict[str, Reading | MeterSilent]:
        given = [one for one in self.cycle() if not isinstance(one, Trouble)]
        assert len({one.meter for one in given}) == len(given)
        return {one.meter: one for one in given}


def bus(port: str, baudrate: int = 115200) -> Bus:
    return Bus(name="panel", port=port, baudrate=baudrate)


def meter(name: str, address: int, map_name: str = "din-float32", boot_s: float = 0.0) -> Meter:
    channels = (Channel(across="L1-N", through="L1"),) if map_name == "din-float32" else ()
    return Meter(name=name, bus="panel", address=address, map=map_name, at="leg", boot_s=boot_s, channels=channels)


def holding(map_name: str, voltage: float) -> dict[RegisterKey, int]:
    """Registers of a meter that reads `voltage` volts, and something plausible else."""
    register_map = shipped_map(map_name)
    return image(register_map, {point.key: _usual(point.quantity, voltage) for point in register_map.points})


def _usual(quantity: str, voltage: float) -> float:
    return {"voltage": voltage, "frequency": 50.0, "power_factor": 0.5, "input": 1.0}.get(quantity, 10.0)
