"""The legs towards the machines: voltages, currents on two legs only, unbalance.

On an L1-N feed legs are judged to N, on a line feed between legs: there a perfect converter reads 120, 120 and 208 V
to N, and a dead L3 floats to half of the supply.
"""

import math
from collections.abc import Mapping
from typing import Final

from idlerwatch.core.conductors import LEGS, LINE_PAIRS, Leg, Pair
from idlerwatch.core.settings.model import Alarm, Settings
from idlerwatch.core.watch.conditions import means
from idlerwatch.core.watch.conditions.circuit import lacks_circuit
from idlerwatch.core.watch.conditions.view import Address, View
from idlerwatch.core.watch.conditions.watch import CONVERTER, Subject, Watch, figure

FACTOR: Final[Address] = ("converter", "converter", "voltage_unbalance_factor")
RATE: Final[Address] = ("converter", "converter", "line_voltage_unbalance_rate")
CURRENT_RATE: Final[Address] = ("converter", "converter", "current_unbalance_rate")
POWER_FACTOR: Final[Address] = ("supply", "supply", "power_factor")

_WINDOW_HOLDS_S: Final = 1200.0
_LOADED: Final = 0.40  # of the smallest machine's rated current
_STARTED_S: Final = 2.0


def current_of(leg: Leg) -> Address:
    """Return where a leg's current stands."""
    return ("leg", leg.lower(), "current")


# --------------------------------------------------------------------------
# Voltages
# --------------------------------------------------------------------------


def _pairs(settings: Settings, pairs: tuple[Pair, ...]) -> tuple[Subject, ...]:
    return tuple(
        figure(means.subject_of(pair), (means.measurement_of(pair), means.subject_of(pair), "voltage_ratio"))
        for pair in pairs
        if means.has_pair(settings, pair)
    )


def _low(settings: Settings, alarm: Alarm) -> tuple[Subject, ...]:
    pairs = means.generated_pairs(settings)
    feed = settings.supply.as_feed
    if alarm.tag == "leg-lost" and not feed.is_line_feed:
        pairs = (feed.pair, *pairs)
    return _pairs(settings, pairs)


def _high(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    feed = settings.supply.as_feed
    between = () if feed.is_line_feed else LINE_PAIRS
    return _pairs(settings, (*means.generated_pairs(settings), *between))


def _very_high(settings: Settings, alarm: Alarm) -> tuple[Subject, ...]:
    """As high, but in a start only after two seconds: its inrush swings."""

    def after_inrush(subject: Subject) -> Subject:
        def measure(view: View) -> float:
            is_fresh = view.letter == "A" and view.at - view.memory.life.since < _STARTED_S
            return math.nan if is_fresh else subject.measure(view)

        return Subject(subject.name, measure, subject.figure)

    return tuple(after_inrush(subject) for subject in _high(settings, alarm))


def _lacks_legs(settings: Settings) -> str:
    pairs = means.generated_pairs(settings)
    if any(means.has_pair(settings, pair) for pair in pairs):
        return ""
    return f"no meter stands across {' or '.join(str(pair) for pair in pairs)}"


# --------------------------------------------------------------------------
# A machine on two legs
# --------------------------------------------------------------------------


def _two_legs(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return tuple(_without(settings, leg) for leg in LEGS)


def _without(settings: Settings, leg: Leg) -> Subject:
    """One leg's current over the mean of the others', 1 unless a machine runs on those."""
    own = current_of(leg)
    smallest = means.smallest_machine(settings) or math.nan
    first, second = (
        (current_of(other), _LOADED * smallest + means.single_phase_current(settings, other))
        for other in LEGS
        if other != leg
    )

    def ratio(view: View) -> float:
        here, one, two = view.value(own), view.value(first[0]), view.value(second[0])
        if math.isnan(here + one + two):
            return math.nan
        return 2.0 * here / (one + two) if one > first[1] and two > second[1] else 1.0

    return Subject(leg.lower(), ratio, own)


def _lacks_currents(settings: Settings) -> str:
    if len(means.ammeter_legs(settings)) < len(LEGS):
        return "the currents of the three legs are not all measured"
    return "" if means.smallest_machine(settings) else "no three-phase machine is described"


# --------------------------------------------------------------------------
# Unbalance
# --------------------------------------------------------------------------


def _unbalance(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    def factor_or_rate(view: View) -> float:
        factor = view.value(FACTOR)
        return view.value(RATE) if math.isnan(factor) else factor

    return (Subject(CONVERTER, factor_or_rate, FACTOR),)


def _window(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    def last_window(view: View) -> float:
        memory = view.memory
        return memory.unbalance if view.at - memory.unbalance_at <= _WINDOW_HOLDS_S else math.nan

    return (Subject(CONVERTER, last_window, FACTOR),)


def _lacks_lines(settings: Settings) -> str:
    if means.has_lines(settings) or not lacks_circuit(settings):
        return ""
    return "the voltages between the legs are not measured: angles are not seen"


def _current_unbalance(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return (figure(CONVERTER, CURRENT_RATE),)


def _lacks_leg_currents(settings: Settings) -> str:
    all_legs = len(means.ammeter_legs(settings)) == len(LEGS)
    return "" if all_legs else "the currents of the three legs are not all measured"


def _power_factor(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return (figure(CONVERTER, POWER_FACTOR),)


def _lacks_power(settings: Settings) -> str:
    return "" if means.has_supply_current(settings) else "no meter measures the supply's current"


# --------------------------------------------------------------------------
# An ammeter the wrong way round
# --------------------------------------------------------------------------


def _reversed(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return tuple(_share(leg) for leg in LEGS if leg in _watt_legs(settings))


def _share(leg: Leg) -> Subject:
    place = LEGS.index(leg)
    return Subject(leg.lower(), lambda view: view.memory.blocks[place].share, ("leg", leg.lower(), "active_power"))


def _watt_legs(settings: Settings) -> frozenset[str]:
    return frozenset(
        channel.through
        for meter in means.meters_at(settings, "leg")
        for channel in meter.channels
        if channel.through and channel.across and str(channel.across) == f"{channel.through}-N"
    )


def _lacks_watts(settings: Settings) -> str:
    if not _watt_legs(settings):
        return "no meter measures a leg's own power (its voltage to N and its current)"
    return "" if means.smallest_machine(settings) else "no three-phase machine is described"


WATCHES: Final[Mapping[str, Watch]] = {
    "leg-voltage-low": Watch("below", _low, _lacks_legs, good=1.0),
    "leg-voltage-high": Watch("above", _high, _lacks_legs, good=1.0),
    "leg-voltage-very-high": Watch("above", _very_high, _lacks_legs, good=1.0),
    "machine-on-two-legs": Watch("below", _two_legs, _lacks_currents, good=1.0),
    "unbalance": Watch("above", _unbalance, _lacks_lines),
    "unbalance-window": Watch("above", _window, _lacks_lines),
    "current-unbalance": Watch("above", _current_unbalance, _lacks_leg_currents),
    "power-factor": Watch("below", _power_factor, _lacks_power),
    "ammeter-reversed": Watch("above", _reversed, _lacks_watts),
}
