"""Starting, stopping and idling: what the state's letters and their times tell."""

import math
from collections.abc import Mapping
from typing import Final

from idlerwatch.core.conductors import LEGS
from idlerwatch.core.settings.model import Alarm, Settings
from idlerwatch.core.watch.conditions import means
from idlerwatch.core.watch.conditions.legs import current_of
from idlerwatch.core.watch.conditions.supply import CURRENT
from idlerwatch.core.watch.conditions.view import View
from idlerwatch.core.watch.conditions.watch import CONVERTER, Subject, Watch, yes

_STARTS_IN_TEN_MINUTES: Final = 3
_STARTS_IN_AN_HOUR: Final = 8
_AFTER_STOP_S: Final = 3.0
_DRAWS: Final = 0.05  # of the smallest machine's rated current
_GENERATES_NOTHING: Final = 0.10  # of the supply legs' current

# --------------------------------------------------------------------------
# Starts
# --------------------------------------------------------------------------


def _start_time(settings: Settings, alarm: Alarm) -> tuple[Subject, ...]:
    declared = settings.start.usual_s if settings.start else None
    unlearned = math.nan if alarm.setpoint is None else alarm.setpoint

    def longest(view: View) -> float:
        learned = view.memory.life.learned_start_time
        usual = (declared or math.nan) if math.isnan(learned) else learned
        return unlearned if math.isnan(usual) else max(2.0 * usual, usual + 2.0)

    def so_far(view: View) -> float:
        if view.letter == "B":
            return math.nan
        return view.memory.life.start_time if view.letter in ("A", "C") else 0.0

    return (Subject(CONVERTER, so_far, ("converter", "converter", "start_time"), longest),)


def _starts(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    def over_the_usual(view: View) -> float:
        starts = view.memory.life.starts
        if not starts:
            return 0.0
        ages = [view.at - start for start in starts]
        recent = sum(age < 600.0 for age in ages) / _STARTS_IN_TEN_MINUTES
        return max(recent, sum(age < 3600.0 for age in ages) / _STARTS_IN_AN_HOUR)

    return (Subject(CONVERTER, over_the_usual),)


# --------------------------------------------------------------------------
# Machines on a converter that does not run
# --------------------------------------------------------------------------


def _supply_legs(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    """Current in all the supply legs, none in the generated ones, over the smallest machine's rated current.

    What single-phase machines may draw from a supply leg is allowed for.
    """
    feed = settings.supply.as_feed
    smallest = means.smallest_machine(settings) or math.nan
    fed = tuple((current_of(leg), means.single_phase_current(settings, leg)) for leg in feed.supply_legs)
    generated = tuple(current_of(leg) for leg in feed.generated_legs)

    def drawn(view: View) -> float:
        amperes = min(view.value(address) - allowed for address, allowed in fed)
        elsewhere = max((amps for at in generated if not math.isnan(amps := view.value(at))), default=0.0)
        if math.isnan(amperes):
            return math.nan
        return 0.0 if elsewhere > _GENERATES_NOTHING * amperes else max(0.0, amperes) / smallest

    return (Subject(CONVERTER, drawn, fed[0][0]),)


def _lacks_fed_currents(settings: Settings) -> str:
    measured = means.ammeter_legs(settings)
    missing = [leg for leg in settings.supply.as_feed.supply_legs if leg not in measured]
    if missing:
        return f"no ammeter stands in {' and '.join(missing)} towards the machines"
    return "" if means.smallest_machine(settings) else "no three-phase machine is described"


def _stopped(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    draws = _DRAWS * (means.smallest_machine(settings) or 1.0)
    legs = tuple(current_of(leg) for leg in LEGS)

    def condition(view: View) -> bool:
        stopped_at = view.memory.life.stopped_under_load_at
        if math.isnan(stopped_at):
            return False
        return view.at - stopped_at <= _AFTER_STOP_S or any(view.value(leg) > draws for leg in legs)

    return (Subject(CONVERTER, yes(condition), CURRENT),)


def _lacks_load(settings: Settings) -> str:
    if means.ammeter_legs(settings) or means.has_supply_current(settings):
        return ""
    return "no current is measured"


# --------------------------------------------------------------------------
# Left on
# --------------------------------------------------------------------------


def _idle_time(view: View) -> float:
    if view.letter == "B":
        return math.nan
    return view.at - view.memory.life.idle_since if view.letter == "U" else 0.0


def _idling(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return (Subject(CONVERTER, _idle_time),)


def _idling_after_hours(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    opens, closes = _hours(settings.people.working_hours or "00:00-24:00")

    def outside(view: View) -> float:
        minute = (view.assessment.utc + view.assessment.local_offset) % 86400.0 / 60.0
        is_open = opens <= minute < closes if opens <= closes else not closes <= minute < opens
        return 0.0 if is_open else _idle_time(view)

    return (Subject(CONVERTER, outside),)


def _hours(text: str) -> tuple[float, float]:
    """Return when work begins and ends. [min of the day]"""
    opens, closes = (int(part[:2]) * 60.0 + int(part[3:]) for part in text.split("-"))
    return opens, closes


def _lacks_hours(settings: Settings) -> str:
    return "" if settings.people.working_hours else "people.working_hours is not given"


WATCHES: Final[Mapping[str, Watch]] = {
    "start-time": Watch("above", _start_time),
    "starts-too-many": Watch("above", _starts),
    "supply-legs-only": Watch("above", _supply_legs, _lacks_fed_currents),
    "stopped-under-load": Watch("yes", _stopped, _lacks_load),
    "idling-time": Watch("above", _idling, _lacks_load),
    "idling-time-after-hours": Watch("above", _idling_after_hours, _lacks_hours),
}
