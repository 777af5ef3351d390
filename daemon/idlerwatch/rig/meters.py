"""Virtual meters: what inexpensive meters make of the plant, through the registers of any settings' maps.

A meter averages over its refresh interval, then shows a new picture: with the gain errors of its channels (fixed,
within its class), a little noise, and the steps of its registers. It lives on the pair its settings name: below its
least voltage it is silent, and when the voltage is back it says nothing for half of its boot time and nonsense
(zeros, then halves) for the rest. Reactive power comes out signed, unsigned or not at all, line voltages computed
from 120 degrees where the map says so.
"""

import math
import threading
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Final

import numpy as np

from idlerwatch.core.conductors import LEGS, Pair
from idlerwatch.core.registers import RegisterKey, RegisterMap, Table, image
from idlerwatch.core.settings.model import Accuracy, Channel, Contact, Meter, Settings
from idlerwatch.rig.line import ModbusExceptionCode
from idlerwatch.rig.values import View

ILLEGAL_ADDRESS: Final = ModbusExceptionCode(2)
CLASS_SHARE: Final = 0.5
"""How much of its class limit a meter's gain may use; bought meters are mostly better than their class."""
NOISE: Final = 0.0002
REFRESH_S: Final = 0.3
WEAKEST_FREQUENCY: Final = 10.0
"""Below this voltage a frequency counter counts noise. [V]"""

Figures = dict[tuple[int, str], float]


@dataclass(frozen=True, slots=True)
class _Gains:
    """Fixed gain errors of one channel: voltage, current, power."""

    voltage: float
    current: float
    power: float


@dataclass
class _Sums:
    """What a channel has seen since the last picture: squares of voltage and current, and complex power."""

    voltage: float = 0.0
    current: float = 0.0
    power: complex = 0j
    count: int = 0


@dataclass
class VirtualMeter:
    """One meter of a rig: fed by the plant's thread, asked by the line's."""

    settings: Meter
    register_map: RegisterMap
    contacts: tuple[Contact, ...]
    chance: np.random.Generator
    answer_delay_s: float
    refresh_s: float = REFRESH_S
    gains: tuple[_Gains, ...] = ()
    _sums: list[_Sums] = field(default_factory=list)
    _since: float = 0.0
    _fed_at: float | None = None
    _has_begun: bool = False
    _energies: dict[int, float] = field(default_factory=dict)
    _picture: dict[RegisterKey, int] = field(default_factory=dict)
    _is_silent: bool = True
    _lock: threading.Lock = field(default_factory=threading.Lock)
    _known: frozenset[Table] = frozenset()

    def __post_init__(self) -> None:
        limits = self.settings.accuracy
        self.gains = tuple(
            _Gains(*(1.0 + CLASS_SHARE * limit * self.chance.uniform(-1.0, 1.0) for limit in _limits(limits)))
            for _ in self.settings.channels
        )
        self._sums = [_Sums() for _ in self.settings.channels]
        self._known = frozenset(point.table for point in self.register_map.points)

    # Asked by the line ----------------------------------------------------

    def read(self, table: Table, address: int, count: int) -> list[int] | ModbusExceptionCode | None:
        """Return registers as they stand in the last picture; unused ones between are 0."""
        with self._lock:
            if self._is_silent or not self._picture:
                return None
            if table not in self._known:
                return ILLEGAL_ADDRESS
            return [self._picture.get((table, address + index), 0) for index in range(count)]

    # Fed by the plant -----------------------------------------------------

    def feed(self, view: View, converter: int = 0) -> None:
        """Take one instant of the plant."""
        alive_for = self._alive_for(view, converter)
        self._has_begun = True
        if alive_for is None:
            self._fed_at = None
            self._sums = [_Sums() for _ in self.settings.channels]
            with self._lock:
                self._is_silent = True
            return
        for channel, sums in zip(self.settings.channels, self._sums, strict=True):
            self._add(channel, sums, view, converter)
        if view.time - self._since >= self.refresh_s or not self._picture:
            self._show(view, converter, alive_for)

    def _alive_for(self, view: View, converter: int) -> float | None:
        """Return for how long the meter has had its supply, None while it has not enough. [s]"""
        pair = self.settings.power_pair
        if pair is not None and _across(view, self.settings.at, pair, converter) < self.settings.usable_from_volts:
            return None
        if self._fed_at is None:
            # what has its supply when the rig begins has had it for long
            self._fed_at = view.time if self._has_begun else -math.inf
        return view.time - self._fed_at if pair is not None else math.inf

    def _add(self, channel: Channel, sums: _Sums, view: View, converter: int) -> None:
        place = self.settings.at
        voltage = 0j
        if channel.across is not None:
            voltage = complex(view.voltage(place, channel.across)[converter])
        current = 0j
        if channel.through is not None:
            current = complex(view.current(place, channel.through)[converter]) / self.settings.ratio
            current *= -1.0 if channel.across is not None and channel.across.second == channel.through else 1.0
        sums.voltage += abs(voltage) ** 2
        sums.current += abs(current) ** 2
        sums.power += voltage * current.conjugate()
        sums.count += 1

    def _show(self, view: View, converter: int, alive_for: float) -> None:
        seconds = min(view.time - self._since, 1.0)
        self._since = view.time
        figures = self._figures(view, converter, seconds)
        boot_s = self.settings.boot_s
        picture = image(self.register_map, _half(figures, alive_for / boot_s) if alive_for < boot_s else figures)
        with self._lock:
            self._picture = picture
            self._is_silent = alive_for < 0.5 * boot_s

    def _figures(self, view: View, converter: int, seconds: float) -> Figures:
        figures: Figures = {}
        for number, (channel, gains) in enumerate(zip(self.settings.channels, self.gains, strict=True), 1):
            sums, self._sums[number - 1] = self._sums[number - 1], _Sums()
            told = self._channel(channel, gains, sums)
            self._energies[number] = self._energies.get(number, 0.0) + max(told["active_power"], 0.0) * seconds
            told["active_energy_import"] = self._energies[number]
            figures.update({(number, quantity): value for quantity, value in told.items()})
        if self.register_map.line_voltages == "computed":
            figures.update(self._computed_lines(figures))
        figures[0, "frequency"] = self._frequency(view, converter, figures)
        figures.update(_inputs(self.contacts, view, converter))
        return figures

    def _channel(self, channel: Channel, gains: _Gains, sums: _Sums) -> dict[str, float]:
        count = max(sums.count, 1)
        voltage = self._seen(math.sqrt(sums.voltage / count) * gains.voltage)
        current = self._seen(math.sqrt(sums.current / count) * gains.current)
        power = sums.power / count * gains.power
        apparent = voltage * current
        active, reactive = self._seen(power.real), self._seen(power.imag)
        factor = max(-1.0, min(1.0, active / apparent)) if apparent > 0.0 else 1.0
        told = {
            "voltage": voltage if channel.across is not None else 0.0,
            "current": current,
            "active_power": active,
            "apparent_power": apparent,
            "reactive_power": reactive,
            "power_factor": factor,
        }
        if self.register_map.reactive != "signed":
            told["reactive_power"] = math.sqrt(max(apparent**2 - active**2, 0.0))
            told["power_factor"] = abs(factor)
        return told

    def _seen(self, value: float) -> float:
        return value * (1.0 + NOISE * float(self.chance.standard_normal()))

    def _computed_lines(self, figures: Figures) -> Figures:
        """Return what a meter gives that computes a line voltage from two to neutral, assuming 120 degrees."""
        to_neutral = {
            channel.across.first: figures[number, "voltage"]
            for number, channel in enumerate(self.settings.channels, 1)
            if channel.across is not None and channel.across.second == "N"
        }
        lines: Figures = {}
        for number, channel in enumerate(self.settings.channels, 1):
            if (
                channel.across is not None
                and set(channel.across.legs) <= set(to_neutral)
                and len(channel.across.legs) > 1
            ):
                first, second = (to_neutral[leg] for leg in channel.across.legs)
                lines[number, "voltage"] = math.sqrt(first**2 + second**2 + first * second)
        return lines

    def _frequency(self, view: View, converter: int, figures: Figures) -> float:
        if figures.get((1, "voltage"), 0.0) < WEAKEST_FREQUENCY:
            return 0.0
        first = self.settings.channels[0].across if self.settings.channels else None
        is_generated = first is not None and self.settings.at != "supply"
        ratio = float(view.generated_frequency[converter]) if is_generated else 1.0
        return view.supply_frequency * ratio + 0.005 * float(self.chance.standard_normal())


def virtual_meters(settings: Settings, seed: int = 1) -> Mapping[str, Mapping[int, VirtualMeter]]:
    """Return bus name -> address -> meter, for every meter of the settings."""
    chance = np.random.default_rng(seed)
    buses: dict[str, dict[int, VirtualMeter]] = {bus.name: {} for bus in settings.bus}
    for meter in settings.meter:
        register_map = settings.maps[meter.map]
        buses[meter.bus][meter.address] = VirtualMeter(
            settings=meter,
            register_map=register_map,
            contacts=tuple(contact for contact in settings.contact if contact.meter == meter.name),
            chance=np.random.default_rng(chance.integers(2**32)),
            answer_delay_s=register_map.answer_delay_s,
        )
    return buses


def _limits(accuracy: Accuracy) -> tuple[float, float, float]:
    return accuracy.voltage, accuracy.current, accuracy.power


def _across(view: View, place: str, pair: Pair, converter: int) -> float:
    return float(abs(view.voltage(place, pair)[converter]))


def _half(figures: Figures, share: float) -> Figures:
    """Return what a meter shows while it boots: nothing at first, then half of the truth."""
    factor = 0.0 if share < 0.75 else 0.5
    return {key: value * factor for key, value in figures.items()}


def _inputs(contacts: tuple[Contact, ...], view: View, converter: int) -> Figures:
    states: dict[str, Callable[[str], bool]] = {
        "bank": lambda name: bool(view.bank_closed[converter, _bank_number(view, name)]),
        "coil": lambda name: bool(view.bank_closed[converter, _bank_number(view, name)]),
        "sequence": lambda _: bool(view.speed[converter] > 0.0),
        "breaker": lambda _: _across(view, "supply", Pair(LEGS[0], "N"), converter) < 1.0,
    }
    told: Figures = {}
    for contact in contacts:
        kind, name, *_ = contact.means.split()
        told[contact.input, "input"] = float(states[kind](name))
    return told


def _bank_number(view: View, name: str) -> int:
    return [place for place in view.currents if place.startswith("bank:")].index(f"bank:{name}")
