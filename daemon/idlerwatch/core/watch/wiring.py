"""From the settings to the converter's wiring: which channels give the circuit its equations, and what is known before.

The circuit needs the magnitudes of all three legs to one conductor (N, or a fed leg where there is no neutral), and the
power of each generated leg with its voltage; supply meters, bank ammeters and line voltages add equations. `lacks` says
in a few words what an installation has not got.
"""

import cmath
import hashlib
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from idlerwatch.core.conductors import Conductor, Feed, Leg, read_pair
from idlerwatch.core.converter.circuit import (
    IDLER,
    BankAmmeter,
    Can,
    CurrentChannel,
    Ends,
    Floats,
    Wiring,
)
from idlerwatch.core.converter.learn import Prior
from idlerwatch.core.converter.nameplate import Nameplate, believed, typical_machine
from idlerwatch.core.converter.prior import Limits, prior_of
from idlerwatch.core.settings.model import Idler, Settings
from idlerwatch.core.values import ConverterState
from idlerwatch.core.watch.plan import ChannelPlan, Plan

NOISE: Final = 0.00025
"""Standard deviation of a meter's gain from one sample to the next: repeatability and last digit (common practice)."""
DISCREPANCY: Final = 0.002
"""What the circuit leaves out, of the idler's rated current: chosen in the study of `tests/bench/bench_recovery.py`."""
LINE_DISCREPANCY: Final = 0.0001
"""The same of a line voltage, of nominal."""
MOST_BANKS: Final = 4
"""More would be more hypotheses than a sample has time for."""


@dataclass(frozen=True, slots=True, eq=False)
class CircuitPlan:
    """A converter's wiring with the channels of the settings that fill it.

    `order` names legs 0, 1, 2; `rays` the pair measured for each (empty for the hub); `channels`, `ammeters` and
    `lines` follow the wiring's; `unsigned` are channels whose reactive power has no sign; `has_drives` says that
    machines on drives are described, whose currents are no linear loads.
    """

    wiring: Wiring
    order: tuple[Leg, ...]
    rays: tuple[str, ...]
    channels: tuple[ChannelPlan, ...]
    ammeters: tuple[ChannelPlan, ...]
    lines: tuple[str, ...]
    banks: tuple[str, ...]
    cans: tuple[str, ...]
    unsigned: tuple[int, ...]
    drive_current: float
    prior: Prior
    noise: Floats
    discrepancy: Floats
    converter: str
    arrangement: str

    def expected(self, settings: Settings, state: ConverterState) -> tuple[float, ...]:
        """Return each bank's position in a state: 1 closed, 0 open; a free bank counts as open."""
        return tuple(
            float(bank.closed_when != "free" and state in bank.closed_when)
            for bank in settings.bank
            if bank.name in self.banks
        )


def lacks(settings: Settings, plan: Plan) -> str:
    """Return what this installation lacks to see its converter as a circuit; empty where nothing is lacking."""
    hub = _hub(plan)
    if hub is None:
        return "the voltages of all three legs to one conductor are not measured"
    missing = [leg for leg in plan.feed.generated_legs if _channel(plan, plan.leg_channels, leg, hub) is None]
    if missing:
        return f"the power of {' and '.join(missing)} is not measured"
    if hub != "N" and any("N" in str(can.between) for can in settings.capacitor):
        return "there are capacitors to N, but no voltages to N"
    return f"more than {MOST_BANKS} banks are not looked at" if len(settings.bank) > MOST_BANKS else ""


def circuit_plan(settings: Settings, plan: Plan) -> CircuitPlan | None:
    """Return the converter's wiring; None where `lacks` says why."""
    if lacks(settings, plan):
        return None
    hub = _hub(plan) or "N"
    feed = plan.feed
    order = _order(feed)
    number = {leg: index for index, leg in enumerate(order)} | {"N": 3}
    generated = [_channel(plan, plan.leg_channels, leg, hub) for leg in order if leg in feed.generated_legs]
    supply = [
        (out, into)
        for leg in order
        if leg in feed.supply_legs
        if (out := _channel(plan, plan.leg_channels, leg, hub)) is not None
        if (into := _channel(plan, plan.supply_channels, leg, hub)) is not None
    ]
    chosen = [
        *(channel for channel in generated if channel is not None),
        *(out for out, _ in supply),
        *(into for _, into in supply),
    ]
    made = [_as_channel(channel, number) for channel in chosen]
    count, sides = len(generated), len(supply)
    ammeters = [(k, channel) for k, bank in enumerate(settings.bank) for channel in _ammeters(plan, bank.name)]
    rays = tuple("" if leg == hub else str(read_pair(f"{leg}-{hub}")) for leg in order)
    lines = tuple(_lines(plan, order, rays))
    wiring = Wiring(
        rated_current=_rated_current(settings),
        nominal_voltage=feed.leg_voltage,
        tied=not feed.is_line_feed and all(idler.star_point == "N" for idler in settings.idler),
        hub=number[hub],
        directions=_directions(feed, order, hub),
        free=tuple(number[leg] for leg in order if leg in feed.generated_legs),
        cans=tuple(_cans(settings, number)),
        banks=len(settings.bank),
        generated=tuple(made[:count]),
        outgoing=tuple(made[count : count + sides]),
        supply=tuple(made[count + sides :]),
        ammeters=tuple(BankAmmeter(bank, number[str(channel.through)]) for bank, channel in ammeters),
        lines=tuple((number[pair.first], number[pair.second]) for pair in map(read_pair, lines)),
    )
    limits = Limits(
        rays=[_limit(plan, pair) for pair in rays if pair],
        channels=[plan.meters[channel.meter].accuracy.power for channel in chosen],
        ammeters=[plan.meters[channel.meter].accuracy.current for _, channel in ammeters],
        lines=[_limit(plan, pair) for pair in lines],
    )
    drives = [machine for machine in settings.machine if machine.starter == "drive"]
    return CircuitPlan(
        wiring=wiring,
        order=order,
        rays=rays,
        channels=tuple(chosen),
        ammeters=tuple(channel for _, channel in ammeters),
        lines=lines,
        banks=tuple(bank.name for bank in settings.bank),
        cans=tuple(can.name for can in settings.capacitor),
        unsigned=tuple(index for index, channel in enumerate(chosen) if channel.reactive != "signed"),
        drive_current=sum(machine.rated_current or machine.rated_kw * 1e3 / feed.line_voltage for machine in drives),
        prior=prior_of(wiring, [believed(plate_of(settings, idler))[0] for idler in settings.idler], limits),
        noise=noise_of(wiring),
        discrepancy=discrepancy_of(wiring),
        converter=_fingerprint(settings.idler, settings.supply.as_feed, settings.supply.frequency),
        arrangement=_fingerprint(
            settings.capacitor, settings.bank, [(c.meter, c.channel, c.pair) for c in chosen], lines
        ),
    )


def noise_of(wiring: Wiring) -> Floats:
    """Return the standard deviation of each parameter from one sample to the next: of the meters' gains only."""
    noisy = [not name.startswith("can_") and index >= len(IDLER) for index, name in enumerate(wiring.names)]
    return np.where(noisy, NOISE, 0.0)


def discrepancy_of(wiring: Wiring) -> Floats:
    """Return the standard deviation of each row that the circuit leaves out. [A, V]"""
    discrepancy = np.full(wiring.rows, DISCREPANCY * wiring.rated_current)
    if wiring.lines:
        discrepancy[-len(wiring.lines) :] = LINE_DISCREPANCY * math.sqrt(3.0) * wiring.nominal_voltage
    return discrepancy


# --------------------------------------------------------------------------
# What stands where
# --------------------------------------------------------------------------


def _order(feed: Feed) -> tuple[Leg, ...]:
    return ("L1", "L2", "L3") if feed.rotation == "L1-L2-L3" else ("L1", "L3", "L2")


def _hub(plan: Plan) -> Conductor | None:
    """Return the conductor to which all legs are measured: N, or a fed leg."""
    feed = plan.feed
    measured = {channel.pair for channel in plan.distances}
    if feed.neutral in ("supply", "centre-tap") and all(f"{leg}-N" in measured for leg in _order(feed)):
        return "N"
    if not feed.is_line_feed:
        return None
    for hub in feed.supply_legs:
        if all(str(read_pair(f"{leg}-{hub}")) in measured for leg in _order(feed) if leg != hub):
            return hub
    return None


def _channel(plan: Plan, channels: Sequence[ChannelPlan], leg: Leg, hub: Conductor) -> ChannelPlan | None:
    """Return the channel that gives a leg's current relative to a voltage between known conductors."""
    known = {"N"} if hub == "N" else set()
    found = [
        channel
        for channel in channels
        if channel.through == leg and channel.across is not None and channel.is_distance
        if leg in (channel.across.first, channel.across.second)
        if channel.across.other(leg) in {*_order(plan.feed), *known}
    ]
    return min(found, key=lambda channel: not channel.gives_leg_power, default=None)


def _as_channel(channel: ChannelPlan, number: Mapping[str, int]) -> CurrentChannel:
    through, across = channel.through, channel.across
    if through is None or across is None:
        raise ValueError(f"channel {channel.channel} of {channel.meter} has no voltage or no current")
    return CurrentChannel(number[through], (number[through], number[across.other(through)]))


def _ammeters(plan: Plan, bank: str) -> Iterator[ChannelPlan]:
    return (channel for channel in plan.bank_channels.get(bank, ()) if channel.through is not None)


def _lines(plan: Plan, order: tuple[Leg, ...], rays: tuple[str, ...]) -> Iterator[str]:
    """Yield the line pairs that are measured besides the rays."""
    measured = {channel.pair for channel in plan.distances}
    for index, leg in enumerate(order):
        pair = str(read_pair(f"{leg}-{order[(index + 1) % 3]}"))
        if pair in measured and pair not in rays:
            yield pair


def _directions(feed: Feed, order: tuple[Leg, ...], hub: Conductor) -> tuple[float, float, float]:
    points = feed.nominal_points()
    first, second, third = (cmath.phase(points[leg] - points[hub]) if leg != hub else 0.0 for leg in order)
    return first, second, third


def _cans(settings: Settings, number: Mapping[str, int]) -> Iterator[Can]:
    banks = [bank.name for bank in settings.bank]
    base = _rated_current(settings) / settings.supply.as_feed.leg_voltage
    for can in settings.capacitor:
        siemens = 2.0 * math.pi * settings.supply.frequency * can.microfarads * 1e-6
        ends: Ends = (number[can.between.first], number[can.between.second])
        yield Can(ends, siemens / base, -1 if can.bank is None else banks.index(can.bank))


def plate_of(settings: Settings, idler: Idler) -> Nameplate:
    """Return what an idler's plate says, as it was copied."""
    return Nameplate(
        rated_kw=idler.rated_kw,
        rated_voltage=idler.rated_voltage,
        frequency=settings.supply.frequency,
        rated_current=idler.rated_current,
        rated_speed_rpm=idler.rated_speed_rpm,
        rated_power_factor=idler.rated_power_factor,
        magnetising_current=idler.magnetising_current,
    )


def _rated_current(settings: Settings) -> float:
    return sum(typical_machine(believed(plate_of(settings, idler))[0]).rated_current for idler in settings.idler)


def _limit(plan: Plan, pair: str) -> float:
    """Return the class limit of the best voltmeter across a pair."""
    return min(plan.meters[channel.meter].accuracy.voltage for channel in plan.distances if channel.pair == pair)


def _fingerprint(*parts: object) -> str:
    """Return a short name of what these settings say; another converter, or another arrangement, has another."""
    return hashlib.sha256(repr(parts).encode()).hexdigest()[:12]
