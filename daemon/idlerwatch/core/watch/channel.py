"""What one channel of one meter says, as values with their standard uncertainties.

A channel's voltage counts from the conductor its current goes through. Currents, powers and energies are multiplied by
the current transformer's ratio. Where a meter's sign of reactive power is unknown none is told.
"""

import math
from collections.abc import Iterable
from typing import Final, NamedTuple

from idlerwatch.core.values import FigureKey, Sample
from idlerwatch.core.watch.plan import ChannelPlan

NAN: Final = math.nan
SMALLEST_APPARENT_POWER: Final = 5.0
"""Below this a power factor is noise over noise and is not told. [VA]"""


class Measured(NamedTuple):
    """A value and its standard uncertainty; NaN where it is missing.

    A named tuple, since a sample makes some two hundred of them and a dataclass takes three times as long.
    """

    value: float = NAN
    standard: float = NAN

    @property
    def is_known(self) -> bool:
        """Whether there is a value."""
        return not math.isnan(self.value)


MISSING: Final = Measured()


class Power(NamedTuple):
    """What one place says: voltage, current, powers and power factor, each with its uncertainty."""

    voltage: Measured = MISSING
    current: Measured = MISSING
    active: Measured = MISSING
    reactive: Measured = MISSING
    apparent: Measured = MISSING
    factor: Measured = MISSING


NO_POWER: Final = Power()


def value_of(sample: Sample, meter: str, key: FigureKey) -> float:
    """Return one value of one meter; NaN where it is missing."""
    values = sample.values.get(meter)
    return NAN if values is None else values.get(key, NAN)


def voltage_of(sample: Sample, channel: ChannelPlan) -> float:
    """Return the voltage across a channel; NaN where it is missing. [V]"""
    return abs(value_of(sample, channel.meter, (channel.channel, "voltage")))


def power_of(sample: Sample, channel: ChannelPlan) -> Power:
    """Return what a channel says at its place; reactive power only where it has a sign."""
    values = sample.values.get(channel.meter)
    if values is None:
        return NO_POWER
    number, ratio = channel.channel, channel.ratio
    voltage = abs(values.get((number, "voltage"), NAN))
    current = abs(values.get((number, "current"), NAN)) * ratio
    active = values.get((number, "active_power"), NAN) * ratio
    reactive = values.get((number, "reactive_power"), NAN) * ratio if channel.reactive == "signed" else NAN
    watts = Measured(active, abs(active) * channel.power_gain)
    apparent = _apparent(channel, values.get((number, "apparent_power"), NAN) * ratio, voltage * current)
    return Power(
        voltage=Measured(voltage, voltage * channel.voltage_gain),
        current=Measured(current, current * channel.current_gain),
        active=watts,
        reactive=Measured(reactive, abs(reactive) * channel.power_gain),
        apparent=apparent,
        factor=power_factor(watts, apparent, values.get((number, "power_factor"), NAN)),
    )


def _apparent(channel: ChannelPlan, told: float, product: float) -> Measured:
    """Return what the meter tells, else voltage times current."""
    if math.isnan(told):
        return Measured(product, product * math.hypot(channel.voltage_gain, channel.current_gain))
    return Measured(abs(told), abs(told) * channel.power_gain)


def power_factor(active: Measured, apparent: Measured, told: float = NAN) -> Measured:
    """Return active over apparent power; what the meter itself says where one is missing; nothing below 5 VA."""
    if apparent.value < SMALLEST_APPARENT_POWER:
        return MISSING
    if active.is_known and apparent.is_known:
        value = active.value / apparent.value
        standard = math.hypot(active.standard, value * apparent.standard) / apparent.value
        return Measured(min(1.0, max(-1.0, value)), standard)
    return MISSING if math.isnan(told) else Measured(told)


def sum_of(values: Iterable[Measured]) -> Measured:
    """Return the sum of values with independent errors; missing where one is."""
    known = tuple(values)
    return Measured(sum(value.value for value in known), math.hypot(*(value.standard for value in known)))


def largest_of(values: Iterable[Measured]) -> Measured:
    """Return the largest of the values that are known."""
    return max((value for value in values if value.is_known), key=lambda value: value.value, default=MISSING)
