"""The alarms: conditions, then causes, then the life cycle of each, threaded through one sample.

An occurrence is named ``<tag>/<subject>/<UTC of its rise>`` and its n-th transition ``<occurrence>/<n>``, so a replay
names all of them alike. After a restart `restore` brings the standing alarms back under their own names.

What is told. Each transition is an event; people are told of a rise and of the return of what they were told, except:
what is only logged; what another alarm explains (see `causes`); a chronic alarm within a day, unless it is a fifth
worse; suppressions, shelvings and acknowledgements. An alarm that stands untold is told as soon as these reasons
have gone and it is still beyond its setpoint, and one whose priority rises is told again; such an event keeps the
state. A high alarm that nobody has acknowledged for ten minutes is `overdue`: for a second person.
"""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from typing import Final

from idlerwatch.core.settings.model import Settings
from idlerwatch.core.values import AlarmEvent, Assessment, Lamp, Shelve, StandingAlarm, Trouble, WindowRow
from idlerwatch.core.watch.conditions import plan as plans
from idlerwatch.core.watch.conditions.memory import Memory, remember
from idlerwatch.core.watch.conditions.plan import Plan, compile_plan
from idlerwatch.core.watch.conditions.timers import IDLE, IN, Timer, advance
from idlerwatch.core.watch.conditions.usual import Usual, learn
from idlerwatch.core.watch.conditions.view import View, letter_of
from idlerwatch.core.watch.lamp import lamp_of
from idlerwatch.core.watch.turns import Held, Key, Round, Said, Told, restored, said_before, take

_OVERDUE_S: Final = 600.0

availability = plans.availability


@dataclass(frozen=True, slots=True)
class AlarmsState:
    """Everything the alarms keep from one sample to the next."""

    plan: Plan
    timers: tuple[Timer, ...]
    memory: Memory = field(default_factory=Memory)
    usual: Usual = field(default_factory=Usual)
    held: Mapping[Key, Held] = field(default_factory=dict)
    said: Mapping[Key, Said] = field(default_factory=dict)


def begin_alarms(settings: Settings, standing: Iterable[StandingAlarm] = ()) -> AlarmsState:
    """Return the state before the first sample, with the alarms that stood at the end of the last run."""
    plan = compile_plan(settings)
    return restore(AlarmsState(plan, (IDLE,) * len(plan.items)), standing)


def restore(state: AlarmsState, standing: Iterable[StandingAlarm]) -> AlarmsState:
    """Return the state with exactly these alarms standing, under their own occurrences.

    To be used again after the last minutes have been fed at a start, since those raise alarms of their own.
    """
    held = {(alarm.tag, alarm.subject): restored(alarm) for alarm in standing}
    said = {key: said_before(state.plan, kept.alarm) for key, kept in held.items() if key in state.plan.places}
    timers = list(state.timers)
    for key, place in state.plan.places.items():
        was_in = key in held and held[key].alarm.state not in ("returned", "out-of-service")
        timers[place] = IN if was_in else IDLE
    return replace(state, held=held, timers=tuple(timers), said={**state.said, **said})


def overdue(state: AlarmsState, utc: float) -> tuple[str, ...]:
    """Return the occurrences of high priority that nobody has acknowledged for ten minutes."""
    return tuple(
        held.alarm.occurrence
        for held in state.held.values()
        if held.alarm.priority == "high"
        and held.alarm.state == "unacknowledged"
        and utc - held.alarm.raised_at >= _OVERDUE_S
    )


# --------------------------------------------------------------------------
# One sample
# --------------------------------------------------------------------------


def judge_alarms(
    state: AlarmsState, assessment: Assessment, told: tuple[Told, ...] = (), rows: tuple[WindowRow, ...] = ()
) -> tuple[AlarmsState, tuple[AlarmEvent, ...], tuple[StandingAlarm, ...], Lamp]:
    """Take one sample, what people and the tool's parts have said since the last, and the windows that have closed.

    Returns the state, the transitions in the order of the plan, the standing alarms, and the lamp's word.
    """
    seen = _look(state, assessment, told, rows)
    held, said = dict(state.held), dict(state.said)
    events: list[AlarmEvent] = []
    for key in _concerned(seen, held, told):
        turn = take(seen, key, held.get(key), said.get(key), told)
        events.extend(turn.events)
        if turn.said is not None:
            said[key] = turn.said
        if turn.held is None:
            held.pop(key, None)
        else:
            held[key] = turn.held
    after = AlarmsState(state.plan, seen.timers, seen.view.memory, seen.usual, held, said)
    standing = tuple(kept.alarm for kept in held.values() if kept.alarm.state != "normal")
    return after, tuple(events), standing, lamp_of(assessment, standing)


def _look(state: AlarmsState, assessment: Assessment, told: tuple[Told, ...], rows: tuple[WindowRow, ...]) -> Round:
    letter = letter_of(assessment)
    news: tuple[Trouble | WindowRow, ...] = (*(said for said in told if isinstance(said, Trouble)), *rows)
    memory = remember(state.memory, state.plan.habits, assessment, letter, news)
    view = View(assessment, assessment.figures, letter, assessment.at, memory)
    values, places, timers = [], [], []
    for item, timer in zip(state.plan.items, state.timers, strict=True):
        value = item.subject.measure(view)
        place = item.place(value, view)
        values.append(value)
        places.append(place)
        if letter in item.suppressed_in:
            timers.append(IN if timer.is_in and item.key in state.held else IDLE)
        elif timer is IDLE and place != "beyond":
            timers.append(IDLE)
        else:
            timers.append(advance(timer, place, view.at, item.delays_at(memory.cycle)))
    usual = learn(state.usual, letter, view.at, values, timers)
    return Round(state.plan, view, tuple(values), tuple(places), tuple(timers), usual)


def _concerned(seen: Round, held: Mapping[Key, Held], told: tuple[Told, ...]) -> list[Key]:
    """The alarms that are in, stand, or are spoken of, each once, in a fixed order."""
    keys = [item.key for item, timer in zip(seen.plan.items, seen.timers, strict=True) if timer.is_in]
    keys += held
    keys += [(news.tag, news.subject) for news in told if isinstance(news, Shelve)]
    return list(dict.fromkeys(keys))
