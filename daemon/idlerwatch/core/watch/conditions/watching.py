"""The watch itself: silent meters and buses, a blind state, troubles of the tool, temperatures where measured."""

import math
from collections.abc import Mapping
from typing import Final

from idlerwatch.core.settings.model import Alarm, Meter, Settings
from idlerwatch.core.watch.conditions import means
from idlerwatch.core.watch.conditions.view import View
from idlerwatch.core.watch.conditions.watch import CONVERTER, Measure, Subject, Watch, figure, yes

_HEARD: Final = frozenset(("answering", "asleep", "booting"))
_AFTER_MACHINE_START_S: Final = 15.0
OWN_PARTS: Final = ("disk", "clock", "power")
WAYS_OUT: Final = ("mqtt", "influx")


def is_silent(view: View, meter: str) -> bool:
    """Whether a meter ought to answer and does not; one that sleeps with its leg or boots is not silent."""
    return view.assessment.meters.get(meter, "answering") not in _HEARD


# --------------------------------------------------------------------------
# Meters and buses
# --------------------------------------------------------------------------


def _silence(meter: Meter) -> Subject:
    return Subject(meter.name, yes(lambda view: is_silent(view, meter.name)))


def _supply_meters(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return tuple(_silence(meter) for meter in means.meters_at(settings, "supply"))


def _lacks_supply_meter(settings: Settings) -> str:
    return "" if means.meters_at(settings, "supply") else "there is no supply meter"


def _leg_meters(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return tuple(
        Subject(meter.name, _after_machine_starts(meter))
        for meter in settings.meter
        if meter.at not in ("supply", "earth")
    )


def _after_machine_starts(meter: Meter) -> Measure:
    """A brown-out in a machine's start resets such meters: silence within 15 s of one proves nothing."""

    def silence(view: View) -> float:
        if not is_silent(view, meter.name):
            return 0.0
        return math.nan if view.at - view.memory.life.machine_start_at <= _AFTER_MACHINE_START_S else 1.0

    return silence


def _lacks_leg_meters(settings: Settings) -> str:
    others = any(meter.at not in ("supply", "earth") for meter in settings.meter)
    return "" if others else "there is no meter on the legs, banks or machines"


def _earth_meters(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return tuple(_silence(meter) for meter in means.meters_at(settings, "earth"))


def _lacks_earth_meter(settings: Settings) -> str:
    return "" if means.meters_at(settings, "earth") else "no transducer stands across N-PE"


def _buses(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return tuple(
        _bus(bus.name, tuple(meter.name for meter in settings.meter if meter.bus == bus.name)) for bus in settings.bus
    )


def _bus(name: str, meters: tuple[str, ...]) -> Subject:
    def is_down(view: View) -> bool:
        if f"bus {name}" in view.memory.troubles:
            return True
        awake = [meter for meter in meters if view.assessment.meters.get(meter) != "asleep"]
        return bool(awake) and all(is_silent(view, meter) for meter in awake)

    return Subject(name, yes(is_down))


def _blind(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return (Subject(CONVERTER, yes(lambda view: view.letter == "B"), ("supply", "supply", "current")),)


# --------------------------------------------------------------------------
# The tool
# --------------------------------------------------------------------------


def _own_parts(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return tuple(_trouble(part) for part in OWN_PARTS)


def _ways_out(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return tuple(_trouble(way) for way in WAYS_OUT if getattr(settings, way) is not None)


def _trouble(part: str) -> Subject:
    return Subject(part, yes(lambda view: part in view.memory.troubles))


def _lacks_way_out(settings: Settings) -> str:
    return "" if settings.mqtt or settings.influx else "there is neither a broker nor a database"


# --------------------------------------------------------------------------
# Temperatures
# --------------------------------------------------------------------------


def _measures_temperature(settings: Settings, name: str) -> bool:
    maps = (settings.maps.get(meter.map) for meter in means.meters_at(settings, f"machine:{name}"))
    return any(point.quantity == "temperature" for known in maps if known for point in known.points)


def _temperatures(settings: Settings, names: tuple[str, ...]) -> tuple[Subject, ...]:
    return tuple(
        figure(name, ("machine", name, "temperature")) for name in names if _measures_temperature(settings, name)
    )


def _idlers(settings: Settings) -> tuple[str, ...]:
    return tuple(idler.name for idler in settings.idler)


def _machines(settings: Settings) -> tuple[str, ...]:
    return tuple(machine.name for machine in settings.machine)


def _lacks_idler_temperature(settings: Settings) -> str:
    return "" if _temperatures(settings, _idlers(settings)) else "no temperature of the idler is measured"


def _lacks_machine_temperature(settings: Settings) -> str:
    return "" if _temperatures(settings, _machines(settings)) else "no temperature of a machine is measured"


WATCHES: Final[Mapping[str, Watch]] = {
    "supply-meter-silent": Watch("yes", _supply_meters, _lacks_supply_meter),
    "leg-meter-silent": Watch("yes", _leg_meters, _lacks_leg_meters),
    "earth-transducer-silent": Watch("yes", _earth_meters, _lacks_earth_meter),
    "bus-down": Watch("yes", _buses),
    "blind": Watch("yes", _blind),
    "own-trouble": Watch("yes", _own_parts),
    "way-out-trouble": Watch("yes", _ways_out, _lacks_way_out),
    "idler-temperature": Watch("above", lambda s, _a: _temperatures(s, _idlers(s)), _lacks_idler_temperature),
    "machine-temperature": Watch("above", lambda s, _a: _temperatures(s, _machines(s)), _lacks_machine_temperature),
}
