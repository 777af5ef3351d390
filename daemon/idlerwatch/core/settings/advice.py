"""What an installation can and cannot see, and what would be better: sentences for whoever has just written settings.

Nothing here is a fault. The wiring levels are those of the README: 1 the supply meter alone, 2 a three-phase meter with
line voltages measured and a supply of its own, 2s a meter on each leg that lives on that leg, 3 with ammeters in the
banks, a transducer between neutral and earth, or contacts. (Common practice, no source.)
"""

import itertools
from collections.abc import Callable, Iterable, Iterator, Sequence
from typing import Final

from idlerwatch.core.conductors import LEGS, NEUTRAL_PAIRS, Pair
from idlerwatch.core.converter.placing import NUMBER, find_order
from idlerwatch.core.polling import LineTiming, MeterPlan, plan_meter, plan_time_s
from idlerwatch.core.settings.model import Bus, Meter, Settings
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.wiring import lacks

BUSIEST: Final = 0.9
"""Of the cycle; what is left serves retries and a silent meter."""
NEUTRAL_PAIR: Final = Pair("N", "PE")
TOUCH_LIMIT_VOLTS: Final = 50.0
"""Conventional touch-voltage limit (IEC 60364-4-41)."""


def advise(settings: Settings) -> tuple[str, ...]:
    """Return what is seen, what is not, and what would be better, a sentence each."""
    return tuple(itertools.chain.from_iterable(say(settings) for say in _ADVISERS))


def wiring_level(settings: Settings) -> str:
    """Return the wiring level, ``1``, ``2``, ``2s`` or ``3``; ``0`` where no meter sees supply or legs."""
    legs = [meter for meter in settings.meter if meter.at == "leg"]
    if not legs:
        return "1" if _supply_meters(settings) else "0"
    if _sees_banks(settings) or NEUTRAL_PAIR in _pairs(settings) or settings.contact:
        return "3"
    return "2" if _sees_lines(settings) and all(meter.power_pair is None for meter in legs) else "2s"


# --------------------------------------------------------------------------
# What is seen
# --------------------------------------------------------------------------


def _unbalance(settings: Settings) -> Iterator[str]:
    if _sees_lines(settings):
        yield "Unbalance is measured: the voltages across the legs make a rigid figure."
    elif not lacks(settings, compile_plan(settings)):
        yield (
            "Angles between the legs are not measured; they are recovered from the converter's own circuit. Until "
            "that is learned and accepted (idlerwatch circuit) the idler's plate serves, and the unbalance is known "
            "to a point or so; line voltages measured would show it directly."
        )
    elif set(NEUTRAL_PAIRS) & set(_pairs(settings)):
        yield (
            "Angles between the legs are not seen: leg-to-neutral voltages can look even while the lines "
            "are not. The true unbalance is not available, and never told as normal; line voltages measured "
            "would show it."
        )
    else:
        yield "The legs are not seen: no meter stands across them."


def _supply(settings: Settings) -> Iterator[str]:
    if not _supply_meters(settings):
        yield (
            "No meter stands at the supply: when the leg meters fall silent nothing can tell a stopped "
            'converter from a cut cable, and the state is then "blind". A supply meter is the best single '
            "meter there is."
        )
        return
    own = [meter for meter in _supply_meters(settings) if meter.power_pair is None]
    if own:
        yield "Stopped, starting, running and blind are told apart by the supply current, whatever the leg meters do."
    if settings.bank:
        yield "The supply meter's current and var show the bank's position at idle; a start shows it for a few samples."


def _starts(settings: Settings) -> Iterator[str]:
    on_generated = [meter.name for meter in settings.meter if _lives_on_generated(settings, meter)]
    if on_generated:
        yield (
            f"{_list(on_generated)} live on generated legs: they are silent while the converter is off or "
            "starting, and reset when a heavy machine pulls the legs down. Their silence is then no fault, "
            "and what happens in it is not seen."
        )
    if settings.bank and not _sees_banks(settings) and not settings.contact:
        yield (
            "Whether a bank is in during a start can hardly be seen at this wiring: an ammeter in the bank "
            "or an auxiliary contact of its contactor would show it."
        )


def _earth(settings: Settings) -> Iterator[str]:
    if NEUTRAL_PAIR in _pairs(settings):
        yield (
            "Neutral to earth is measured. It shows a neutral broken between the N-PE bond and the "
            "converter; one broken before the bond lifts neutral and earth together and does not show."
        )
    elif settings.supply.as_feed.has_neutral:
        yield "Neutral to earth is not measured: a lifted neutral will not be told."


def _alone(settings: Settings) -> Iterator[str]:
    if settings.supply.source == "isolating-transformer" and settings.supply.earthing == "IT":
        yield "A first earth fault is noticed by no protective device here: have an electrician see to its monitoring."


# --------------------------------------------------------------------------
# What would be better
# --------------------------------------------------------------------------


def _wire_time(settings: Settings) -> Iterator[str]:
    for bus in settings.bus:
        needed = bus_time_s(settings, bus)
        if settings.site.cycle_s and needed > BUSIEST * settings.site.cycle_s:
            yield (
                f"The bus {bus.name} needs {needed:.2f} s for its meters, the cycle is "
                f"{settings.site.cycle_s:g} s: cycles will be longer. A higher baud rate, a second bus or a "
                "longer cycle_s helps."
            )
        alive = [meter.name for meter in settings.meter if meter.bus == bus.name and meter.power_pair is None]
        if alive and len(alive) < sum(meter.bus == bus.name for meter in settings.meter):
            yield (
                f"On the bus {bus.name}, let an always-powered meter ({_list(alive)}) stand at the far end "
                "of the cable: a cut then silences it too, and is told."
            )


def _ways_out(settings: Settings) -> Iterator[str]:
    mqtt = settings.mqtt
    if mqtt is None:
        yield "There is no [mqtt]: no message can reach a phone."
    elif mqtt.host in ("localhost", "127.0.0.1", "::1"):
        yield (
            "The broker is on this board: when the shed's supply goes, messages go with it. A broker "
            "outside the shed's supply, or a small uninterruptible supply for board and router, is better."
        )
    if settings.journal is None:
        yield "There is no [journal]: only the last hour is kept, and nothing of it survives a restart of the board."


def _loosened(settings: Settings) -> Iterator[str]:
    for (tag, subject), alarm in settings.alarms.items():
        name = f"{tag}.{subject}" if subject else tag
        if not alarm.enabled and alarm.priority == "high":
            yield f"The high alarm {name} is switched off: what it watches for will not be told."
        touched = tag == "neutral-earth-dangerous" and alarm.setpoint is not None
        if touched and alarm.setpoint is not None and alarm.setpoint > TOUCH_LIMIT_VOLTS:
            yield f"{name} is set to {alarm.setpoint:g} V: above 50 V a touch can kill before it is told."


_ADVISERS: Final[tuple[Callable[[Settings], Iterable[str]], ...]] = (
    _unbalance, _supply, _starts, _earth, _alone, _wire_time, _ways_out, _loosened,
)  # fmt: skip


# --------------------------------------------------------------------------
# Questions about settings
# --------------------------------------------------------------------------


def bus_time_s(settings: Settings, bus: Bus) -> float:
    """Return the wire time of one cycle on a bus: every meter's fast group, and the longest slow one. [s]"""
    bits = 1 + 8 + (bus.parity != "none") + bus.stopbits
    fast, slow = 0.0, [0.0]
    for meter in settings.meter:
        if meter.bus == bus.name:
            timing = LineTiming(bus.baudrate, bits, settings.maps[meter.map].answer_delay_s)
            plan: MeterPlan = plan_meter(settings.maps[meter.map], len(meter.channels), timing)
            fast += plan_time_s(plan.fast, timing)
            slow.append(plan_time_s(plan.slow, timing))
    return fast + max(slow)


def _pairs(settings: Settings) -> tuple[Pair, ...]:
    return tuple(channel.across for meter in settings.meter for channel in meter.channels if channel.across)


def _sees_lines(settings: Settings) -> bool:
    """Return whether the three legs are a rigid figure: three line voltages, or enough others."""
    pairs = _pairs(settings)
    order = find_order(settings.supply.as_feed, pairs, (True,) * len(pairs))
    return order is not None and {NUMBER[leg] for leg in LEGS} <= set(order.placed)


def _supply_meters(settings: Settings) -> Sequence[Meter]:
    return [meter for meter in settings.meter if meter.at == "supply" and any(c.through for c in meter.channels)]


def _sees_banks(settings: Settings) -> bool:
    return any(meter.at.startswith("bank:") for meter in settings.meter)


def _lives_on_generated(settings: Settings, meter: Meter) -> bool:
    pair = meter.power_pair
    return pair is not None and bool(set(pair.legs) & set(settings.supply.as_feed.generated_legs))


def _list(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
