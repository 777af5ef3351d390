"""Neutral to earth. What it cannot see: a neutral lost upstream of the bond lifts neutral and earth together."""

import math
from collections.abc import Mapping
from typing import Final

from idlerwatch.core.conductors import Pair
from idlerwatch.core.settings.model import Alarm, Settings
from idlerwatch.core.watch.conditions import means
from idlerwatch.core.watch.conditions.supply import CURRENT
from idlerwatch.core.watch.conditions.view import Address, View
from idlerwatch.core.watch.conditions.watch import CONVERTER, Subject, Watch, figure

VOLTAGE: Final[Address] = ("earthing", "converter", "neutral_earth_voltage")

_TT_MORE: Final = 3.0
"""On TT systems 1 to 8 V are usual: so much is added to the setpoint. [V]"""
_BUSY: Final = 0.50


def _lacks_earth(settings: Settings) -> str:
    if settings.supply.earthing == "IT":
        return "not applicable on an IT system"
    if settings.supply.neutral == "none":
        return "the supply has no neutral"
    pairs = means.measured_pairs(settings)
    to_earth = [pair for pair in pairs if "PE" in (pair.first, pair.second)]
    if Pair("N", "PE") in pairs or len(to_earth) > 1:
        return ""
    return "no transducer stands across N-PE"


def _high(settings: Settings, alarm: Alarm) -> tuple[Subject, ...]:
    more = _TT_MORE if settings.supply.earthing == "TT" else 0.0
    limit = math.nan if alarm.setpoint is None else alarm.setpoint + more
    return (Subject(CONVERTER, figure(CONVERTER, VOLTAGE).measure, VOLTAGE, lambda _view: limit),)


def _absolute(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return (figure(CONVERTER, VOLTAGE),)


def _jump(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    def height(view: View) -> float:
        voltage, before = view.value(VOLTAGE), view.memory.earth.before_jump
        if math.isnan(voltage):
            return math.nan
        return 0.0 if math.isnan(before) else voltage - before

    return (Subject(CONVERTER, height, VOLTAGE),)


def _near_zero(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    def while_busy(view: View) -> float:
        return view.value(VOLTAGE) if view.value(CURRENT) > _BUSY else math.nan

    return (Subject(CONVERTER, while_busy, VOLTAGE),)


def _lacks_load(settings: Settings) -> str:
    if lacking := _lacks_earth(settings):
        return lacking
    known = means.has_supply_current(settings) and settings.supply.breaker_amperes
    return "" if known else "needs the supply's current and supply.breaker_amperes"


WATCHES: Final[Mapping[str, Watch]] = {
    "neutral-earth-high": Watch("above", _high, _lacks_earth),
    "neutral-earth-high-absolute": Watch("above", _absolute, _lacks_earth),
    "neutral-earth-jump": Watch("above", _jump, _lacks_earth),
    "neutral-earth-near-zero": Watch("below", _near_zero, _lacks_load),
}
