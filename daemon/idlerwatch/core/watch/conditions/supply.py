"""The supply: voltage, frequency, current, a leading power factor, and the service neutral of a centre tap."""

import math
from collections.abc import Mapping
from typing import Final

from idlerwatch.core.settings.model import Alarm, Settings
from idlerwatch.core.watch.conditions import means
from idlerwatch.core.watch.conditions.view import Address, View
from idlerwatch.core.watch.conditions.watch import CONVERTER, Subject, Watch, figure

VOLTAGE: Final[Address] = ("supply", "supply", "voltage_ratio")
CURRENT: Final[Address] = ("supply", "supply", "current_ratio")
FREQUENCY: Final[Address] = ("supply", "supply", "frequency")
REACTIVE: Final[Address] = ("supply", "supply", "reactive_power")
SHIFT: Final[Address] = ("supply", "supply", "neutral_shift")

_DEAD: Final = 0.20  # of nominal: below it a meter's frequency is nonsense


def _lacks_voltage(settings: Settings) -> str:
    feed = settings.supply.as_feed.pair
    return "" if means.has_supply(settings) else f"no meter stands across {feed}"


def _voltage(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return (figure(CONVERTER, VOLTAGE),)


def _frequency(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    nominal = settings.supply.frequency

    def deviation(view: View) -> float:
        return math.nan if view.value(VOLTAGE) < _DEAD else abs(view.value(FREQUENCY) - nominal)

    return (Subject(CONVERTER, deviation, FREQUENCY),)


def _lacks_network_frequency(settings: Settings) -> str:
    return "the supply is a generator" if settings.supply.source == "generator" else _lacks_voltage(settings)


def _lacks_generator_frequency(settings: Settings) -> str:
    return _lacks_voltage(settings) if settings.supply.source == "generator" else "the supply is no generator"


def _current(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return (figure(CONVERTER, CURRENT),)


def _lacks_current(settings: Settings) -> str:
    if not means.has_supply_current(settings):
        return "no meter measures the supply's current"
    return "" if settings.supply.breaker_amperes else "supply.breaker_amperes is not given"


def _leading(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    def over_idle(view: View) -> float:
        idle = view.memory.idle_apparent_power
        return -view.value(REACTIVE) / idle if idle > 0 else math.nan

    return (Subject(CONVERTER, over_idle, REACTIVE),)


def _lacks_reactive(settings: Settings) -> str:
    if not means.has_supply_current(settings):
        return "no meter measures the supply's current"
    if means.has_signed_power(settings, "supply"):
        return ""
    return "the supply meter does not tell the sign of reactive power"


def _shift(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    feed = settings.supply.as_feed
    legs: tuple[Address, ...] = tuple(("leg", leg.lower(), "voltage") for leg in feed.supply_legs)
    nominal = feed.voltage / 2.0

    def shift(view: View) -> float:
        found = (view.value(SHIFT), *(view.value(leg) - nominal for leg in legs))
        return max((volts for volts in found if not math.isnan(volts)), default=math.nan)

    return (Subject(CONVERTER, shift, SHIFT),)


def _lacks_centre_tap(settings: Settings) -> str:
    if settings.supply.neutral != "centre-tap":
        return "the supply has no centre tap"
    pairs = {str(pair) for pair in means.measured_pairs(settings)}
    wanted = [f"{leg}-N" for leg in settings.supply.as_feed.supply_legs]
    return "" if pairs.issuperset(wanted) else f"no meters stand across {' and '.join(wanted)}"


WATCHES: Final[Mapping[str, Watch]] = {
    "supply-voltage-low": Watch("below", _voltage, _lacks_voltage, good=1.0),
    "supply-voltage-high": Watch("above", _voltage, _lacks_voltage, good=1.0),
    "supply-frequency": Watch("above", _frequency, _lacks_network_frequency),
    "generator-frequency": Watch("above", _frequency, _lacks_generator_frequency),
    "supply-current-high": Watch("above", _current, _lacks_current),
    "supply-leading": Watch("above", _leading, _lacks_reactive),
    "neutral-shift": Watch("above", _shift, _lacks_centre_tap),
}
