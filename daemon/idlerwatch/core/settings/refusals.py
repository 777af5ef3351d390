"""What the settings must be to each other: each function yields the faults of one subject.

The refusals are the trade's: a self-powered meter on the protective conductor, a neutral that is not there, a star
point against the feed, line voltages that were never measured. (Common practice, no source, unless a rule is named.)
"""

import itertools
from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Sequence
from typing import Final

from idlerwatch.core.conductors import NEUTRAL_PAIRS, Pair
from idlerwatch.core.settings.faults import Fault
from idlerwatch.core.settings.model import Channel, Meter, Settings

LEAST_INPUT_MEGOHM: Final = 1.0
"""Keeps a transducer's current into the protective conductor below 0.3 mA at 230 V."""


def find_refusals(settings: Settings) -> list[Fault]:
    """Return every fault between keys, in the order of the settings file."""
    return list(itertools.chain.from_iterable(find(settings) for find in _FINDERS))


def find_no_way_out(settings: Settings) -> list[Fault]:
    """Return the fault of a daemon that nobody would ever hear: no outlet (and, says the caller, no terminal)."""
    if settings.mqtt or settings.influx or settings.journal:
        return []
    return [
        Fault("the settings", "without any way out", "must hold [mqtt], [influx] or [journal]: nobody would hear it")
    ]


def _supply(settings: Settings) -> Iterator[Fault]:
    supply = settings.supply
    feed = supply.as_feed
    neutral = supply.neutral
    if "PE" in (feed.pair.first, feed.pair.second):
        yield Fault("supply.feed", repr(str(feed.pair)), "must be a leg and N, or two legs")
        return
    if not feed.is_line_feed and neutral != "supply":
        yield Fault(
            "supply.neutral", repr(neutral), f'must be "supply" with the feed {feed.pair}: N is a fed conductor'
        )
    if neutral in ("L1", "L2", "L3") and neutral not in feed.supply_legs:
        yield Fault("supply.neutral", repr(neutral), f"must be a fed leg, one of {', '.join(feed.supply_legs)}")
    if supply.source == "autotransformer" and neutral == "none":
        wanted = f"must name the fed leg that is the utility's neutral ({' or '.join(feed.supply_legs)}): an "
        yield Fault("supply.neutral", "'none'", wanted + "autotransformer does not part the two sides")
    for label in supply.labels:
        if label not in ("L1", "L2", "L3", "N", "PE"):
            yield Fault(f"supply.labels.{label}", "an unknown conductor", "must be one of L1, L2, L3, N, PE")


def _idlers(settings: Settings) -> Iterator[Fault]:
    feed = settings.supply.as_feed
    for idler in settings.idler:
        place = f"idler.{idler.name}.star_point"
        if feed.is_line_feed and idler.star_point == "N":
            yield Fault(place, "'N'", f'must be "floating" with the feed {feed.pair}: N would short-circuit a winding')
        if not feed.is_line_feed and idler.star_point == "floating":
            yield Fault(place, "'floating'", f'must be "N" with the feed {feed.pair}: one winding would be fed alone')


def _start(settings: Settings) -> Iterator[Fault]:
    start = settings.start
    if start is None:
        return
    if start.method == "two-legs" and start.between is None:
        yield Fault("start.between", "missing", "must name the pair that the supply is put across while starting")
    if start.between is not None:
        yield from _conductors_are_there(settings, start.between, "start.between")


def _capacitors(settings: Settings) -> Iterator[Fault]:
    banks = [bank.name for bank in settings.bank]
    for capacitor in settings.capacitor:
        place = f"capacitor.{capacitor.name}"
        yield from _conductors_are_there(settings, capacitor.between, f"{place}.between")
        if "PE" in (capacitor.between.first, capacitor.between.second):
            yield Fault(f"{place}.between", repr(str(capacitor.between)), "must not be to PE")
        if capacitor.bank is not None and capacitor.bank not in banks:
            yield Fault(f"{place}.bank", repr(capacitor.bank), _one_of("a bank", banks))
    for bank in settings.bank:
        if bank.name not in {capacitor.bank for capacitor in settings.capacitor}:
            yield Fault(
                f"bank.{bank.name}", "without capacitors", f'must be named by a capacitor\'s bank = "{bank.name}"'
            )
        if (bank.coil is None) != (bank.coil_voltage is None):
            missing = "coil" if bank.coil is None else "coil_voltage"
            yield Fault(f"bank.{bank.name}.{missing}", "missing", "must be given: coil and coil_voltage go together")
        if bank.closed_when != "free" and not bank.closed_when:
            yield Fault(f"bank.{bank.name}.closed_when", "empty", 'must name a state, or be "free"')
        if bank.coil is not None:
            yield from _conductors_are_there(settings, bank.coil, f"bank.{bank.name}.coil")


def _names(settings: Settings) -> Iterator[Fault]:
    tables: dict[str, Sequence[str]] = {
        "idler": [entry.name for entry in settings.idler],
        "capacitor": [entry.name for entry in settings.capacitor],
        "bank": [entry.name for entry in settings.bank],
        "bus": [entry.name for entry in settings.bus],
        "meter": [entry.name for entry in settings.meter],
        "machine": [entry.name for entry in settings.machine],
    }
    for table, names in tables.items():
        for name in _repeated(names):
            yield Fault(f"{table}.{name}.name", f"{name!r} twice", "must be another name for each")
    for port in _repeated(bus.port for bus in settings.bus):
        yield Fault("bus.port", f"{port!r} twice", "must be another port for each bus")


def _meters(settings: Settings) -> Iterator[Fault]:
    buses = [bus.name for bus in settings.bus]
    taken = Counter((meter.bus, meter.address) for meter in settings.meter)
    for meter in settings.meter:
        place = f"meter.{meter.name}"
        if meter.bus not in buses:
            yield Fault(f"{place}.bus", repr(meter.bus), _one_of("a bus", buses))
        if taken[meter.bus, meter.address] > 1:
            yield Fault(f"{place}.address", str(meter.address), f"must be used once on the bus {meter.bus}")
        yield from _place_of(settings, meter)
        yield from _earth(meter)
        known = settings.maps[meter.map].channels
        if len(meter.channels) > known:
            yield Fault(
                f"{place}.channels", f"{len(meter.channels)} channels", f"must be at most {known} with {meter.map}"
            )
        for number, channel in enumerate(meter.channels, 1):
            yield from _channel(settings, meter, channel, f"{place}.channels.{number}")
        if isinstance(meter.powered_by, Pair):
            yield from _conductors_are_there(settings, meter.powered_by, f"{place}.powered_by")


def _place_of(settings: Settings, meter: Meter) -> Iterator[Fault]:
    kind, _, name = meter.at.partition(":")
    known = {
        "bank": [bank.name for bank in settings.bank],
        "machine": [machine.name for machine in settings.machine],
    }.get(kind)
    if known is not None and name not in known:
        yield Fault(f"meter.{meter.name}.at", repr(meter.at), _one_of(f"a {kind}", known))


def _earth(meter: Meter) -> Iterator[Fault]:
    """Refuse a meter whose supply current would flow into the protective conductor: it trips an RCD, is forbidden."""
    if not any(channel.across and "PE" in (channel.across.first, channel.across.second) for channel in meter.channels):
        return
    pair = meter.power_pair
    place = f"meter.{meter.name}"
    if pair is not None and "PE" in (pair.first, pair.second):
        wanted = 'must be "own" or a pair without PE: its supply current would flow into the protective conductor'
        yield Fault(f"{place}.powered_by", str(pair) if meter.powered_by else "missing", wanted)
    if meter.input_megohm is None or meter.input_megohm < LEAST_INPUT_MEGOHM:
        found = "missing" if meter.input_megohm is None else f"{meter.input_megohm:g}"
        yield Fault(f"{place}.input_megohm", found, f"must be stated and at least {LEAST_INPUT_MEGOHM:g} across PE")


def _channel(settings: Settings, meter: Meter, channel: Channel, place: str) -> Iterator[Fault]:
    if channel.across is None and channel.through is None:
        yield Fault(place, "empty", "must say what it stands across, or what it goes through")
    if channel.across is None:
        return
    yield from _conductors_are_there(settings, channel.across, f"{place}.across")
    register_map = settings.maps[meter.map]
    if len(channel.across.legs) == 2 and register_map.line_voltages == "computed":
        wanted = f"must not be two legs: {meter.map} computes line voltages from 120 degrees it assumes"
        yield Fault(f"{place}.across", repr(str(channel.across)), wanted)
    if channel.across in NEUTRAL_PAIRS and register_map.star == "artificial":
        wanted = f"must not be to N: {meter.map} measures to a star point of its own"
        yield Fault(f"{place}.across", repr(str(channel.across)), wanted)
    if channel.across in NEUTRAL_PAIRS and settings.supply.neutral == channel.across.first:
        wanted = f"must be another pair: {channel.across.first} is the neutral here"
        yield Fault(f"{place}.across", repr(str(channel.across)), wanted)


def _conductors_are_there(settings: Settings, pair: Pair, place: str) -> Iterator[Fault]:
    if "N" in (pair.first, pair.second) and settings.supply.neutral == "none":
        yield Fault(place, repr(str(pair)), 'must be without N: supply.neutral is "none"')


def _contacts(settings: Settings) -> Iterator[Fault]:
    meters = {meter.name: meter for meter in settings.meter}
    banks = [bank.name for bank in settings.bank]
    for number, contact in enumerate(settings.contact, 1):
        place = f"contact.{number}"
        meter = meters.get(contact.meter)
        if meter is None:
            yield Fault(f"{place}.meter", repr(contact.meter), _one_of("a meter", list(meters)))
        else:
            inputs = {point.channel for point in settings.maps[meter.map].points if point.quantity == "input"}
            if contact.input not in inputs:
                wanted = (
                    f"must be one of the inputs of {meter.map}: {', '.join(map(str, sorted(inputs))) or 'it has none'}"
                )
                yield Fault(f"{place}.input", str(contact.input), wanted)
        words = contact.means.split()
        if words[0] in ("bank", "coil") and words[1] not in banks:
            yield Fault(f"{place}.means", repr(contact.means), _one_of("a bank", banks))


def _people(settings: Settings) -> Iterator[Fault]:
    hours = settings.people.working_hours
    for clock in hours.split("-") if hours else ():
        hour, minute = map(int, clock.split(":"))
        if hour > 23 or minute > 59:
            yield Fault("people.working_hours", repr(hours), "must be two times of day, like 07:30-18:00")


def _machines(settings: Settings) -> Iterator[Fault]:
    for machine in settings.machine:
        if isinstance(machine.connected, Pair):
            yield from _conductors_are_there(settings, machine.connected, f"machine.{machine.name}.connected")


def _alarms(settings: Settings) -> Iterator[Fault]:
    subjects = {
        "l1", "l2", "l3", "l1-l2", "l2-l3", "l3-l1", "converter", "supply",
        *(idler.name for idler in settings.idler), *(meter.name for meter in settings.meter),
        *(bus.name for bus in settings.bus), *(bank.name for bank in settings.bank),
        *(capacitor.name for capacitor in settings.capacitor), *(machine.name for machine in settings.machine),
    }  # fmt: skip
    for tag, subject in settings.alarms:
        if subject and subject not in subjects:
            yield Fault(f"alarms.{tag}.{subject}", "an unknown key or subject", _one_of("a subject", sorted(subjects)))
    for alarm in settings.alarms.values():
        for other in alarm.explains:
            if (other, "") not in settings.alarms:
                yield Fault(f"alarms.{alarm.tag}.explains", repr(other), "must be alarms of the list")


def _repeated(words: Iterable[str]) -> list[str]:
    return [word for word, count in Counter(words).items() if count > 1]


def _one_of(what: str, known: Sequence[str]) -> str:
    return f"must be {what} of these settings: {', '.join(known)}" if known else f"must be {what}, and there is none"


_FINDERS: Final[tuple[Callable[[Settings], Iterable[Fault]], ...]] = (
    _supply, _idlers, _start, _names, _capacitors, _meters, _contacts, _machines, _people, _alarms,
)  # fmt: skip
