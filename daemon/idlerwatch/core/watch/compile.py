"""Compiling the plan: what only depends on the settings, worked out once.

What counts as a measurement:

* a channel across two legs only where the meter measures it (a map may say that it is computed from 120 degrees);
* a channel to N only where the meter's star point is the conductor;
* voltages of ``supply``, ``leg`` and ``earth`` meters; those of banks and machines stand behind switches, and read
  nothing of the converter while these are open.
"""

import math
from collections.abc import Iterator, Mapping

from idlerwatch.core.conductors import LEGS, LINE_PAIRS, NEUTRAL_PAIRS, Conductor, Feed, Pair, read_pair
from idlerwatch.core.settings.model import Meter, Settings
from idlerwatch.core.values import FigureKey
from idlerwatch.core.watch.explained import compile_machines
from idlerwatch.core.watch.plan import (
    CapacitorPlan,
    ChannelPlan,
    Height,
    Levels,
    Place,
    Plan,
    TwoWattmeters,
    gain_uncertainty,
)


def compile_plan(settings: Settings) -> Plan:
    """Work out everything that only depends on the settings."""
    feed = settings.supply.as_feed
    channels = tuple(_channels(settings))
    distances = tuple(channel for channel in channels if channel.is_distance)
    measured = frozenset(channel.pair for channel in distances)
    return Plan(
        number=settings.number,
        cycle_s=settings.site.cycle_s,
        feed=feed,
        fed_pair=str(feed.pair),
        generated=feed.generated_legs,
        nominal={str(pair): feed.nominal_voltage(pair) for pair in (*LINE_PAIRS, *NEUTRAL_PAIRS)},
        points=feed.nominal_points(),
        frequency=settings.supply.frequency,
        breaker=settings.supply.breaker_amperes or math.nan,
        channels=channels,
        distances=distances,
        leg_channels=_through(channels, "leg", LEGS),
        supply_channels=tuple(channel for channel in channels if channel.place == "supply"),
        neutral_channels=_through(channels, "leg", ("N",)),
        bank_channels=_by_name(channels, "bank"),
        machine_channels=_by_name(channels, "machine"),
        two_wattmeters=tuple(_two_wattmeters(channels)),
        contacts={
            contact.means: (contact.meter, _input_key(settings, contact.meter, contact.input))
            for contact in settings.contact
        },
        bank_capacitors=_bank_capacitors(settings),
        meters={meter.name: meter for meter in settings.meter},
        slow={meter.name: _slow_keys(settings, meter) for meter in settings.meter},
        thresholds=_thresholds(settings, feed),
        on_generated=frozenset(
            meter.name
            for meter in settings.meter
            if meter.power_pair and set(meter.power_pair.legs) & set(feed.generated_legs)
        ),
        heights=tuple(_heights(feed, measured)),
        median=_median(feed, measured),
        levels=_levels(settings, feed),
        boot_s=max((meter.boot_s for meter in settings.meter), default=0.0),
        has_neutral_loads=any(
            isinstance(machine.connected, Pair) and machine.connected.second == "N" for machine in settings.machine
        ),
        banks=settings.bank,
        machines=settings.machine,
        capacitors=tuple(capacitor.name for capacitor in settings.capacitor),
        explaining=compile_machines(settings),
        remarks=tuple(_remarks(channels)),
    )


def _channels(settings: Settings) -> Iterator[ChannelPlan]:
    for meter in settings.meter:
        register_map = settings.maps.get(meter.map)
        place, _, name = meter.at.partition(":")
        for number, channel in enumerate(meter.channels, start=1):
            yield ChannelPlan(
                meter=meter.name,
                channel=number,
                place=place,  # type: ignore[arg-type]  # the pattern of the settings allows these words only
                name=name,
                across=channel.across,
                through=channel.through,
                ratio=meter.ratio,
                reactive="signed" if register_map is None else register_map.reactive,
                voltage_gain=gain_uncertainty(meter.accuracy.voltage),
                current_gain=gain_uncertainty(meter.accuracy.current),
                power_gain=gain_uncertainty(meter.accuracy.power),
                is_distance=place in ("supply", "leg", "earth") and _is_measured(settings, meter, channel.across),
            )


def _is_measured(settings: Settings, meter: Meter, across: Pair | None) -> bool:
    if across is None:
        return False
    register_map = settings.maps.get(meter.map)
    if register_map is None:
        return True
    if len(across.legs) == 2:
        return register_map.line_voltages == "measured"
    return register_map.star == "conductor" or "N" not in (across.first, across.second)


def _through(channels: tuple[ChannelPlan, ...], place: Place, conductors: tuple[str, ...]) -> tuple[ChannelPlan, ...]:
    return tuple(channel for channel in channels if channel.place == place and channel.through in conductors)


def _by_name(channels: tuple[ChannelPlan, ...], place: Place) -> Mapping[str, tuple[ChannelPlan, ...]]:
    names = dict.fromkeys(channel.name for channel in channels if channel.place == place)
    return {
        name: tuple(channel for channel in channels if (channel.place, channel.name) == (place, name)) for name in names
    }


def _two_wattmeters(channels: tuple[ChannelPlan, ...]) -> Iterator[TwoWattmeters]:
    """Yield the pairs of line channels whose powers add up to the total (two-wattmeter method)."""
    lines = [
        channel
        for channel in channels
        if channel.place == "leg"
        and channel.across
        and len(channel.across.legs) == 2
        and channel.through in channel.across.legs
    ]
    for index, first in enumerate(lines):
        for second in lines[index + 1 :]:
            if first.through != second.through and _common(first) == _common(second):
                yield TwoWattmeters(first, second)


def _common(channel: ChannelPlan) -> Conductor | None:
    if channel.across is None or channel.through is None:
        return None
    return channel.across.other(channel.through)


def _input_key(settings: Settings, meter_name: str, number: int) -> FigureKey:
    """Return the key under which a discrete input's value arrives: the map's bit of that channel."""
    meter = next((meter for meter in settings.meter if meter.name == meter_name), None)
    register_map = None if meter is None else settings.maps.get(meter.map)
    points = () if register_map is None else register_map.points
    for point in points:
        if point.channel == number and (point.encoding == "bit" or point.table in ("discrete", "coil")):
            return (number, point.quantity)
    return (number, "input")


def _bank_capacitors(settings: Settings) -> Mapping[str, tuple[CapacitorPlan, ...]]:
    return {
        bank.name: tuple(
            CapacitorPlan(capacitor.between, capacitor.microfarads * 1e-6)
            for capacitor in settings.capacitor
            if capacitor.bank == bank.name
        )
        for bank in settings.bank
    }


def _slow_keys(settings: Settings, meter: Meter) -> frozenset[FigureKey]:
    register_map = settings.maps.get(meter.map)
    points = () if register_map is None else register_map.points
    return frozenset((point.channel, point.quantity) for point in points if point.group == "slow")


def _thresholds(settings: Settings, feed: Feed) -> Mapping[str, tuple[str, float]]:
    """Meter -> the pair it lives on and the voltage below which it is asleep.

    Where the settings do not say, a self-powered meter needs about 70 % of its voltage (common practice: 160-180 V
    of 230 V).
    """
    return {
        meter.name: (str(meter.power_pair), meter.usable_from_volts or 0.7 * feed.nominal_voltage(meter.power_pair))
        for meter in settings.meter
        if meter.power_pair is not None
    }


def _heights(feed: Feed, measured: frozenset[str]) -> Iterator[Height]:
    """Yield what each measured pair tells of the generated legs; a pair to N tells most."""
    for leg in feed.generated_legs:
        for other in (*LEGS, "N"):
            if other == leg or other in feed.generated_legs:
                continue
            pair = read_pair(f"{leg}-{other}")
            nominal = feed.nominal_voltage(pair)
            if str(pair) in measured and nominal > 0.0:
                yield Height(str(pair), nominal, _dead_ratio(feed, other, nominal))
    if not feed.is_line_feed:
        first, second = feed.generated_legs
        pair = read_pair(f"{first}-{second}")
        if str(pair) in measured:
            yield Height(str(pair), feed.nominal_voltage(pair), 0.0)


def _dead_ratio(feed: Feed, other: str, nominal: float) -> float:
    """Return the ratio a pair reads while the leg floats: in the middle of the fed pair, or on N."""
    rests_on = feed.nominal_points()
    middle = (rests_on[feed.pair.first] + rests_on[feed.pair.second]) / 2.0 if feed.is_line_feed else rests_on["N"]
    return abs(rests_on[other] - middle) / nominal  # type: ignore[index]  # `other` is a leg or N


def _median(feed: Feed, measured: frozenset[str]) -> tuple[str, str, str] | None:
    """Return fed pair and both lines to the generated leg, where all are measured: the median is its height."""
    if not feed.is_line_feed:
        return None
    (leg,) = feed.generated_legs
    first, second = (str(read_pair(f"{leg}-{fed}")) for fed in feed.supply_legs)
    wanted = (str(feed.pair), first, second)
    return wanted if set(wanted) <= measured else None


def _levels(settings: Settings, feed: Feed) -> Levels:
    """Return the current levels that follow from the nameplates.

    Rated power over the fed voltage is the measure of the supply's current. An idler idles on 6 to 10 % of its rated
    power at least, whatever its capacitors compensate: 4 % is flow, less is not. From rest it starts at 0.6 times that
    current at least, at reduced voltage too; a loaded converter takes as much, so in any state only twice is a surge.
    A motor without load draws a third of its rated current or more: 15 % is on; one that starts draws five to seven
    times: 3 times is a start. (Common practice, no source.)
    """
    rated_watts = sum(idler.rated_kw for idler in settings.idler) * 1000.0
    full = rated_watts / feed.voltage
    machines = [machine.rated_current or _usual_current(machine.rated_kw, feed) for machine in settings.machine]
    smallest = min(machines, default=0.1 * _usual_current(rated_watts / 1000.0, feed))
    smallest_kw = min((machine.rated_kw for machine in settings.machine), default=0.1 * rated_watts / 1000.0)
    return Levels(
        full=full,
        flow=0.04 * full,
        start=0.6 * full,
        surge=2.0 * full,
        machine=0.15 * smallest,
        machine_surge=3.0 * smallest,
        machine_supply=smallest_kw * 1000.0 / feed.voltage,
    )


def _usual_current(rated_kw: float, feed: Feed) -> float:
    """Return a motor's rated current where its plate was not copied: 0.72 of apparent power is shaft power. [A]"""
    return rated_kw * 1000.0 / (math.sqrt(3.0) * feed.line_voltage * 0.72)


def _remarks(channels: tuple[ChannelPlan, ...]) -> Iterator[str]:
    """Yield what the settings alone make worth saying with every assessment."""
    for channel in channels:
        if channel.place not in ("leg", "supply") or channel.through is None or channel.across is None:
            continue
        if channel.reactive == "unsigned":
            yield f"{channel.meter} gives no sign of reactive power: reactive power of {channel.through} is not told"
        elif channel.reactive == "none":
            yield f"{channel.meter} gives no reactive power: reactive power of {channel.through} is not told"
        if channel.place == "leg" and not channel.gives_leg_power:
            yield (
                f"{channel.meter} stands across {channel.pair}: "
                f"power and power factor of {channel.through} alone are not measured"
            )
