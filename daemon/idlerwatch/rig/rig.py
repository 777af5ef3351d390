"""The rig: a plant in real time with virtual meters on virtual serial lines, and a scenario that happens to it."""

import threading
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Final

from idlerwatch.core.registers import Table
from idlerwatch.core.settings.model import Bus, Settings
from idlerwatch.rig.build import build_plant
from idlerwatch.rig.line import Device, Line, ModbusExceptionCode
from idlerwatch.rig.meters import VirtualMeter, virtual_meters
from idlerwatch.rig.plant import STEP_S, begin, look, no_faults, no_orders, pulled_backwards, step
from idlerwatch.rig.scenario import Course, Event, Scenario, play

FARTHEST_BEHIND_S: Final = 0.5
"""A rig that falls behind by more lets that time pass unseen instead of hurrying after it."""


@dataclass
class _Silenced:
    """A meter that can be silenced by the scenario, as by a cut cable."""

    meter: VirtualMeter
    answer_delay_s: float
    is_silent: bool = False

    def read(self, table: Table, address: int, count: int) -> list[int] | ModbusExceptionCode | None:
        """Return what the meter says, None while it is silenced."""
        return None if self.is_silent else self.meter.read(table, address, count)


class Rig:
    """A virtual converter for some settings; `ports` are where its meters answer.

    Parameters
    ----------
    settings
        Any settings: their meters, maps and buses are what the rig makes.
    scenario
        What happens.
    say
        Told each event's sentence when it happens; called in the rig's thread.
    """

    def __init__(self, settings: Settings, scenario: Scenario, say: Callable[[Event], None] = lambda _: None) -> None:
        self._scenario = scenario
        self._say = say
        self._plant = build_plant(settings, scenario.seed)
        meters = virtual_meters(settings, scenario.seed)
        self._meters = {
            meter.settings.name: _Silenced(meter, meter.answer_delay_s)
            for on_bus in meters.values()
            for meter in on_bus.values()
        }
        self._lines = {bus.name: self._line(bus, meters[bus.name]) for bus in settings.bus}
        self._is_over = threading.Event()
        self._thread = threading.Thread(target=self._run, name="rig", daemon=True)

    def _line(self, bus: Bus, meters: Mapping[int, VirtualMeter]) -> Line:
        devices: dict[int, Device] = {address: self._meters[meter.settings.name] for address, meter in meters.items()}
        bits = 1 + 8 + (bus.parity != "none") + bus.stopbits
        return Line(devices, bus.baudrate, bits, seed=self._scenario.seed)

    @property
    def ports(self) -> Mapping[str, str]:
        """Bus name -> port."""
        return {name: line.port for name, line in self._lines.items()}

    @property
    def lines(self) -> Mapping[str, Line]:
        """Bus name -> line, to spoil its answers or pull its adapter out."""
        return self._lines

    def start(self) -> None:
        """Begin; the scenario's time begins now."""
        for line in self._lines.values():
            line.start()
        self._thread.start()

    def stop(self) -> None:
        """End, ports included."""
        self._is_over.set()
        if self._thread.is_alive():
            self._thread.join(5.0)
        for line in self._lines.values():
            line.stop()

    def _run(self) -> None:
        plant, state = self._plant, begin(self._plant)
        course = Course(no_orders(plant), no_faults(plant))
        pending = list(self._scenario.event)
        began = time.monotonic()
        while not self._is_over.is_set():
            while pending and pending[0].at_s <= state.time:
                event = pending.pop(0)
                course = play(course, event, plant)
                self._say(event)
            if course.pulled_backwards:
                state = pulled_backwards(plant, state)
                course = replace(course, pulled_backwards=False)
            state, solution = step(plant, state, course.orders, course.faults)
            view = look(plant, state, solution)
            for name, silenced in self._meters.items():
                silenced.is_silent = name in course.silent
                silenced.meter.feed(view)
            ahead = state.time - (time.monotonic() - began)
            if ahead > 0.0:
                self._is_over.wait(ahead)
            elif ahead < -FARTHEST_BEHIND_S:
                began -= ahead + STEP_S


def on_rig(settings: Settings, ports: Mapping[str, str]) -> Settings:
    """Return the settings with their buses on the rig's ports."""
    buses = tuple(bus.model_copy(update={"port": ports[bus.name]}) for bus in settings.bus)
    return settings.model_copy(update={"bus": buses})
