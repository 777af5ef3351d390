"""What an installation can measure, from its settings: which pairs, currents and machines its meters reach."""

from collections.abc import Iterator

from idlerwatch.core.conductors import LEGS, LINE_PAIRS, Leg, Pair
from idlerwatch.core.settings.model import Machine, Meter, Settings


def meters_at(settings: Settings, place: str) -> tuple[Meter, ...]:
    """Return the meters whose `at` is a place, or begins with it where it ends in a colon."""
    return tuple(
        meter for meter in settings.meter if meter.at == place or (place.endswith(":") and meter.at.startswith(place))
    )


def measured_pairs(settings: Settings) -> frozenset[Pair]:
    """Return the pairs a voltmeter stands across, wherever its current is taken."""
    return frozenset(channel.across for meter in settings.meter for channel in meter.channels if channel.across)


def has_pair(settings: Settings, pair: Pair) -> bool:
    """Whether the voltage of a pair is measured, or follows from others by geometry."""
    pairs = measured_pairs(settings)
    return pair in pairs or {pair.first, pair.second} <= _placed(settings, pairs)


def has_supply(settings: Settings) -> bool:
    """Whether the voltage of the fed pair can be known: itself, or both halves of a centre-tapped one."""
    feed = settings.supply.as_feed
    if has_pair(settings, feed.pair):
        return True
    halves = {Pair(leg, "N") for leg in feed.supply_legs}
    return feed.neutral == "centre-tap" and halves <= measured_pairs(settings)


def _placed(settings: Settings, pairs: frozenset[Pair]) -> set[str]:
    """Conductors whose place follows: begin with the fed pair, add what stands across two that are placed."""
    feed = settings.supply.as_feed.pair
    if feed not in pairs:
        return set()
    placed: set[str] = {feed.first, feed.second}
    while more := set(_next(pairs, placed)):
        placed |= more
    return placed


def _next(pairs: frozenset[Pair], placed: set[str]) -> Iterator[str]:
    for conductor in {"L1", "L2", "L3", "N"} - placed:
        reached = [pair for pair in pairs if conductor in (pair.first, pair.second)]
        if sum(1 for pair in reached if {pair.first, pair.second} - {conductor} <= placed) > 1:
            yield conductor


def has_lines(settings: Settings) -> bool:
    """Whether all three line voltages can be known."""
    return all(has_pair(settings, pair) for pair in LINE_PAIRS)


def ammeter_legs(settings: Settings, place: str = "leg") -> tuple[Leg, ...]:
    """Return the legs whose current is measured at a place."""
    through = {channel.through for meter in meters_at(settings, place) for channel in meter.channels}
    return tuple(leg for leg in LEGS if leg in through)


def has_supply_current(settings: Settings) -> bool:
    """Whether the supply's current is measured."""
    return any(channel.through for meter in meters_at(settings, "supply") for channel in meter.channels)


def generated_pairs(settings: Settings) -> tuple[Pair, ...]:
    """Return the pairs on which the generated legs are judged: to N on an L1-N feed, else between legs."""
    feed = settings.supply.as_feed
    if feed.is_line_feed:
        return tuple(pair for pair in LINE_PAIRS if pair != feed.pair)
    return tuple(Pair(leg, "N") for leg in feed.generated_legs)


def subject_of(pair: Pair) -> str:
    """Return the subject of a pair: the leg where it stands to N.

    Examples
    --------
    >>> subject_of(Pair("L2", "N")), subject_of(Pair("L3", "L1"))
    ('l2', 'l3-l1')
    """
    return pair.first.lower() if pair.second == "N" else str(pair).lower()


def measurement_of(pair: Pair) -> str:
    """Return under which measurement a pair's figures stand."""
    return "leg" if pair.second == "N" else "line"


def rated_current(machine: Machine, settings: Settings) -> float:
    """Return a machine's rated current, from its power (efficiency 0.85, power factor 0.8) where not given. [A]"""
    if machine.rated_current is not None:
        return machine.rated_current
    feed = settings.supply.as_feed
    if isinstance(machine.connected, Pair):
        return machine.rated_kw * 1000.0 / (0.68 * feed.nominal_voltage(machine.connected))
    return machine.rated_kw * 1000.0 / (0.68 * 3.0 * feed.leg_voltage)


def smallest_machine(settings: Settings) -> float | None:
    """Return the rated current of the smallest three-phase machine, None where none is described. [A]"""
    rated = [rated_current(machine, settings) for machine in settings.machine if machine.connected == "three-phase"]
    return min(rated, default=None)


def single_phase_current(settings: Settings, leg: Leg) -> float:
    """Return what single-phase machines may draw from a leg together. [A]"""
    return sum(
        rated_current(machine, settings)
        for machine in settings.machine
        if isinstance(machine.connected, Pair) and leg in machine.connected.legs
    )


def has_signed_power(settings: Settings, place: str) -> bool:
    """Whether every meter at a place tells the sign of reactive power."""
    maps = [settings.maps.get(meter.map) for meter in meters_at(settings, place)]
    return bool(maps) and all(known is None or known.reactive == "signed" for known in maps)
