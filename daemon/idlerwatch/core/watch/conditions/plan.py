"""The alarm list and the settings, compiled once into the items that are judged each sample.

An item is one alarm for one subject. The plan also says of each alarm of the list why an installation does not have it.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Final

from idlerwatch.core.settings.model import Alarm, Settings
from idlerwatch.core.watch.conditions import circuit, earth, legs, means, starting, supply, watching
from idlerwatch.core.watch.conditions.memory import Habits
from idlerwatch.core.watch.conditions.timers import Band, Delays, Place, band_of
from idlerwatch.core.watch.conditions.view import View
from idlerwatch.core.watch.conditions.watch import Subject, Watch

WATCHES: Final[Mapping[str, Watch]] = {
    **supply.WATCHES,
    **legs.WATCHES,
    **starting.WATCHES,
    **earth.WATCHES,
    **watching.WATCHES,
    **circuit.WATCHES,
}

NEEDS: Final[Mapping[str, str]] = {
    "machine-thermal": "needs the machines' heat to be followed",
    "idler-thermal": "needs the idler's heat to be followed",
    "bank-stuck-closed": "needs bank positions at rest",
    "bank-chatter": "needs bank positions from second to second",
    "bank-reclosed-charged": "needs bank positions at rest",
    "coil-margin": "needs the coils' voltages to be followed",
}
"""What the list watches and no condition computes yet."""

_LOADED: Final = 0.30  # of the smallest machine's rated current, for an ammeter's direction


_LONGEST_CYCLE_S: Final = 5.0


@dataclass(frozen=True, slots=True)
class Item:
    """One alarm for one subject. `causes` are the places in the plan of the items that explain it."""

    alarm: Alarm
    subject: Subject
    watch: Watch
    band: Band
    delays: Delays
    suppressed_in: frozenset[str]
    causes: tuple[int, ...] = ()

    @property
    def key(self) -> tuple[str, str]:
        """Tag and subject."""
        return self.alarm.tag, self.subject.name

    def delays_at(self, cycle: float) -> Delays:
        """Return the delays for samples so far apart, where the settings leave the cycle to the bus."""
        if self.delays.slack > 0 or math.isnan(cycle):
            return self.delays
        return Delays(self.delays.on, self.delays.off, min(max(cycle, 0.0), _LONGEST_CYCLE_S) / 2.0)

    def setpoint(self, view: View) -> float:
        """Return the setpoint in force at a sample."""
        if self.subject.limit is not None:
            return self.subject.limit(view)
        return math.nan if self.alarm.setpoint is None else self.alarm.setpoint

    def place(self, value: float, view: View) -> Place:
        """Return where a value stands against the setpoint in force."""
        band = self.band
        if self.subject.limit is not None:
            band = band_of(self.watch.sense, self.alarm, self.subject.limit(view))
        return band.place(value)


@dataclass(frozen=True, slots=True)
class Plan:
    """All items of an installation, and what its settings say that the later steps need."""

    settings: Settings
    items: tuple[Item, ...]
    places: Mapping[tuple[str, str], int]
    habits: Habits


def availability(settings: Settings) -> Mapping[str, str]:
    """Return for each alarm of the list why it is not available here; empty where it is."""
    return {tag: _lacks(alarm, settings) for (tag, subject), alarm in settings.alarms.items() if not subject}


def _lacks(alarm: Alarm, settings: Settings) -> str:
    is_line = settings.supply.as_feed.is_line_feed
    if alarm.feeds != "both" and (alarm.feeds == "line") != is_line:
        return f"only on {'a line' if alarm.feeds == 'line' else 'an L1-N'} feed"
    watch = WATCHES.get(alarm.watches)
    if watch is None:
        return NEEDS.get(alarm.watches, f"watches {alarm.watches}, which is not known")
    if watch.sense != "yes" and alarm.setpoint is None:
        return "logged, not alarmed"
    if not alarm.enabled:
        return "out of service by the settings"
    return watch.lacks(settings)


def compile_plan(settings: Settings) -> Plan:
    """Compile list and settings; alarms that are not available give no item."""
    lacking = availability(settings)
    bare = [
        _item(settings, _for_subject(settings, tag, subject.name), subject, WATCHES[alarm.watches])
        for (tag, of), alarm in settings.alarms.items()
        if not of and not lacking[tag]
        for subject in WATCHES[alarm.watches].subjects(settings, alarm)
    ]
    enabled = [item for item in bare if item.alarm.enabled]
    items = tuple(_with_causes(settings, item, enabled) for item in enabled)
    return Plan(settings, items, {item.key: place for place, item in enumerate(items)}, _habits(settings))


def _for_subject(settings: Settings, tag: str, subject: str) -> Alarm:
    return settings.alarms.get((tag, subject), settings.alarms[tag, ""])


def _item(settings: Settings, alarm: Alarm, subject: Subject, watch: Watch) -> Item:
    setpoint = math.nan if alarm.setpoint is None else alarm.setpoint
    return Item(
        alarm,
        subject,
        watch,
        band_of(watch.sense, alarm, setpoint),
        Delays(alarm.on_delay_s, alarm.off_delay_s, settings.site.cycle_s / 2.0),
        frozenset(alarm.suppressed_in),
    )


def _with_causes(settings: Settings, item: Item, items: list[Item]) -> Item:
    causes = tuple(place for place, cause in enumerate(items) if _explains(settings, cause, item))
    return replace(item, causes=causes)


def _explains(settings: Settings, cause: Item, item: Item) -> bool:
    """Whether one item is the cause of another; a bus explains the silence of its own meters only."""
    if item.alarm.tag not in cause.alarm.explains:
        return False
    if cause.alarm.watches != "bus-down":
        return True
    bus = next((meter.bus for meter in settings.meter if meter.name == item.subject.name), cause.subject.name)
    return bus == cause.subject.name


def _habits(settings: Settings) -> Habits:
    alarm = settings.alarms.get(("neutral-earth-jump", ""))
    limits = (20.0, 15.0)
    if alarm is not None and alarm.setpoint is not None:
        limits = (alarm.setpoint, alarm.setpoint - alarm.deadband)
    return Habits(limits, _LOADED * (means.smallest_machine(settings) or math.nan))
