"""Second step: what each meter says becomes what stands where: voltages of pairs, powers of legs, supply, banks.

Signs and places: a channel at ``leg`` counts towards the machines, at ``supply`` into the converter, at ``bank`` into
the bank; its voltage counts from the conductor its current goes through. Currents, powers and energies of a meter are
multiplied by its current transformer's ratio.

* Several voltmeters on one pair: their mean, weighted by their uncertainty, is the pair's voltage; the conductor map
  is given each of them, so that one that disagrees can be named.
* A channel across two legs gives the current of the leg it goes through, never that leg's power: two such channels
  with a common leg add up to the total (two-wattmeter method).
* A meter whose sign of reactive power is unknown tells none; apparent power is then voltage times current.
* Frequencies are not believed below a fifth of the nominal voltage.

A meter is *asleep* where the pair it lives on is dead by other meters' evidence; the life step adds what its state
says of generated legs.
"""

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass

from idlerwatch.core.conductors import LEGS
from idlerwatch.core.values import Sample
from idlerwatch.core.watch.channel import (
    MISSING,
    NAN,
    NO_POWER,
    Measured,
    Power,
    largest_of,
    power_factor,
    power_of,
    sum_of,
    value_of,
    voltage_of,
)
from idlerwatch.core.watch.plan import ChannelPlan, Height, Plan


@dataclass(frozen=True, slots=True)
class Derived:
    """What one sample says, before any geometry.

    `distances` follows the plan's distances; `voltages` maps pairs such as ``L1-N`` to their combined voltage, `legs`
    legs to power, `total` is active and reactive power towards the machines. `contacts` maps meanings to 1 or 0.
    `generated` is how far the generated legs stand off the fed pair: 0 not turning, 1 nominal, NaN not seen.
    """

    distances: tuple[float, ...]
    voltages: Mapping[str, Measured]
    legs: Mapping[str, Power]
    neutral_current: Measured
    total: Power
    supply: Power
    frequency: Measured
    energy: float
    banks: Mapping[str, Power]
    machines: Mapping[str, Power]
    contacts: Mapping[str, float]
    meters: Mapping[str, str]
    generated: float


def derive(plan: Plan, sample: Sample) -> Derived:
    """Return what a sample says of each pair, leg and place."""
    distances = tuple(voltage_of(sample, channel) for channel in plan.distances)
    voltages = _combine(plan, distances)
    legs = _legs(plan, sample)
    return Derived(
        distances=distances,
        voltages=voltages,
        legs=legs,
        neutral_current=_first_current(sample, plan.neutral_channels),
        total=_total(plan, sample, legs),
        supply=_supply(plan, sample, voltages),
        frequency=_frequency(plan, sample),
        energy=_energy(plan, sample),
        banks={name: _together(sample, channels) for name, channels in plan.bank_channels.items()},
        machines={name: _together(sample, channels) for name, channels in plan.machine_channels.items()},
        contacts={means: value_of(sample, meter, key) for means, (meter, key) in plan.contacts.items()},
        meters=_meters(plan, sample, distances, voltages),
        generated=_generated(plan, voltages),
    )


# --------------------------------------------------------------------------
# Voltages
# --------------------------------------------------------------------------


def _combine(plan: Plan, distances: tuple[float, ...]) -> Mapping[str, Measured]:
    """Return each pair's voltage: the weighted mean of the meters that stand across it."""
    weights: dict[str, float] = {}
    sums: dict[str, float] = {}
    squares: dict[str, float] = {}
    for channel, value in zip(plan.distances, distances, strict=True):
        if math.isnan(value):
            continue
        pair, weight = channel.pair, channel.voltage_gain**-2
        weights[pair] = weights.get(pair, 0.0) + weight
        sums[pair] = sums.get(pair, 0.0) + weight * value
        squares[pair] = squares.get(pair, 0.0) + weight * value * value
    return {pair: Measured(sums[pair] / weight, math.sqrt(squares[pair]) / weight) for pair, weight in weights.items()}


def _generated(plan: Plan, voltages: Mapping[str, Measured]) -> float:
    """Return the height of the generated leg that stands highest; one leg lost does not stop the converter."""
    height = _triangle_height(plan, voltages)
    if not math.isnan(height):
        return height
    heights = [_height(rule, voltages[rule.pair].value) for rule in plan.heights if rule.pair in voltages]
    return max(heights, default=NAN)


def _triangle_height(plan: Plan, voltages: Mapping[str, Measured]) -> float:
    """Return the median to the generated leg over its nominal length (Apollonius' theorem)."""
    base, first, second = (voltages.get(pair, MISSING).value for pair in plan.median or ("", "", ""))
    square = 2.0 * first * first + 2.0 * second * second - base * base
    nominal = math.sqrt(3.0) * plan.feed.voltage
    return math.nan if math.isnan(square) else math.sqrt(max(0.0, square)) / nominal


def _height(rule: Height, value: float) -> float:
    return max(0.0, (value / rule.nominal - rule.dead) / (1.0 - rule.dead))


# --------------------------------------------------------------------------
# Currents and powers
# --------------------------------------------------------------------------


def _legs(plan: Plan, sample: Sample) -> Mapping[str, Power]:
    """Return each leg's current, and its power where a channel stands from it to N; the first that answers counts."""
    legs: dict[str, Power] = dict.fromkeys(LEGS, NO_POWER)
    for channel in plan.leg_channels:
        leg = str(channel.through)
        known = legs[leg]
        if known.current.is_known and (known.active.is_known or not channel.gives_leg_power):
            continue
        power = power_of(sample, channel)
        if channel.gives_leg_power:
            legs[leg] = power
        elif power.current.is_known and not known.current.is_known:
            legs[leg] = Power(current=power.current)
    return legs


def _first_current(sample: Sample, channels: tuple[ChannelPlan, ...]) -> Measured:
    return next(
        (power.current for channel in channels if (power := power_of(sample, channel)).current.is_known), MISSING
    )


def _total(plan: Plan, sample: Sample, legs: Mapping[str, Power]) -> Power:
    """Return power towards the machines: the sum of three legs, or of two wattmeters with a common leg."""
    active = sum_of(legs[leg].active for leg in LEGS)
    if active.is_known or not plan.two_wattmeters:
        return Power(active=active, reactive=sum_of(legs[leg].reactive for leg in LEGS))
    for pair in plan.two_wattmeters:
        powers = (power_of(sample, pair.first), power_of(sample, pair.second))
        active = sum_of(power.active for power in powers)
        if active.is_known:
            return Power(active=active, reactive=sum_of(power.reactive for power in powers))
    return NO_POWER


def _supply(plan: Plan, sample: Sample, voltages: Mapping[str, Measured]) -> Power:
    """Return what goes into the converter; channels to a centre tap add up, the larger current loads the breaker."""
    powers = [
        power
        for channel in plan.supply_channels
        if (power := power_of(sample, channel)).voltage.is_known or power.current.is_known
    ]
    voltage = _supply_voltage(plan, voltages)
    if not powers:
        return Power(voltage=voltage)
    if len(powers) < sum(channel.through is not None for channel in plan.supply_channels):
        return Power(voltage=voltage, current=largest_of(power.current for power in powers))
    active = sum_of(power.active for power in powers)
    apparent = sum_of(power.apparent for power in powers)
    return Power(
        voltage=voltage,
        current=largest_of(power.current for power in powers),
        active=active,
        reactive=sum_of(power.reactive for power in powers),
        apparent=apparent,
        factor=power_factor(active, apparent, powers[0].factor.value if len(powers) == 1 else NAN),
    )


def _supply_voltage(plan: Plan, voltages: Mapping[str, Measured]) -> Measured:
    """Return the fed pair's voltage; on a centre-tapped supply its two halves are opposite and add up."""
    measured = voltages.get(plan.fed_pair, MISSING)
    if measured.is_known or plan.feed.neutral != "centre-tap":
        return measured
    first, second = plan.feed.supply_legs
    return sum_of((voltages.get(f"{first}-N", MISSING), voltages.get(f"{second}-N", MISSING)))


def _together(sample: Sample, channels: tuple[ChannelPlan, ...]) -> Power:
    """Return what the channels at one bank or machine say together.

    The voltage is the first channel's, the current the largest; powers add up over channels to N, or over two channels
    with a common leg, and are those of the one channel where there is one.
    """
    powers = [power_of(sample, channel) for channel in channels]
    if len(powers) == 1:
        return powers[0]
    adds_up = all(channel.gives_leg_power for channel in channels) or _is_two_wattmeters(channels)
    active = sum_of(power.active for power in powers) if adds_up else MISSING
    apparent = sum_of(power.apparent for power in powers) if adds_up and len(powers) == 3 else MISSING
    return Power(
        voltage=next((power.voltage for power in powers if power.voltage.is_known), MISSING),
        current=largest_of(power.current for power in powers),
        active=active,
        apparent=apparent,
        factor=power_factor(active, apparent),
    )


def _is_two_wattmeters(channels: tuple[ChannelPlan, ...]) -> bool:
    commons = {
        channel.across.other(channel.through)
        for channel in channels
        if channel.across and channel.through in channel.across.legs
    }
    return len(channels) == 2 and len(commons) == 1 and channels[0].through != channels[1].through


def _frequency(plan: Plan, sample: Sample) -> Measured:
    """Return the first frequency whose meter sees a fifth of its voltage at least, the supply's meter before others."""
    for channel in (*plan.supply_channels, *plan.distances):
        value = value_of(sample, channel.meter, (0, "frequency"))
        if math.isnan(value):
            value = value_of(sample, channel.meter, (channel.channel, "frequency"))
        if not math.isnan(value) and voltage_of(sample, channel) >= 0.2 * plan.nominal.get(channel.pair, NAN):
            return Measured(value)
    return MISSING


def _energy(plan: Plan, sample: Sample) -> float:
    """Return the energy counted into the converter. [J]"""
    energies = [
        value_of(sample, channel.meter, (channel.channel, "active_energy_import")) * channel.ratio
        for channel in plan.supply_channels
        if channel.through is not None
    ]
    if energies and math.isnan(sum(energies)):
        whole = plan.supply_channels[0]
        return value_of(sample, whole.meter, (0, "active_energy_import")) * whole.ratio
    return sum(energies) if energies else NAN


# --------------------------------------------------------------------------
# Meters
# --------------------------------------------------------------------------


def _meters(
    plan: Plan, sample: Sample, distances: tuple[float, ...], voltages: Mapping[str, Measured]
) -> Mapping[str, str]:
    """Return for each meter ``answering``, ``asleep``, ``booting`` or the reason of its silence."""
    if not sample.missing:
        return dict.fromkeys(plan.meters, "answering")
    return {
        name: _silence(plan, name, sample.missing[name], distances, voltages) if name in sample.missing else "answering"
        for name in plan.meters
    }


def _silence(plan: Plan, name: str, reason: str, distances: tuple[float, ...], voltages: Mapping[str, Measured]) -> str:
    threshold = plan.thresholds.get(name)
    if threshold is None or reason == "booting":
        return reason
    pair, needed = threshold
    if any(value < needed for value in _elsewhere(plan, pair, distances)):
        return "asleep"
    supply = _supply_voltage(plan, voltages).value
    return "asleep" if supply < 0.2 * plan.feed.voltage else reason


def _elsewhere(plan: Plan, pair: str, distances: tuple[float, ...]) -> Iterator[float]:
    """Yield what other meters read across a pair."""
    return (value for channel, value in zip(plan.distances, distances, strict=True) if channel.pair == pair)
