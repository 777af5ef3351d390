"""One alarm through one sample: what people say, what its condition does, and whether it is told.

The states and what leads from one to another stand in `lifecycle`; here is found out which finding it is, and the
event is made. `alarms` says what is told and what is not.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from typing import Final

from idlerwatch.core.values import Acknowledge, AlarmEvent, Shelve, StandingAlarm, Trouble
from idlerwatch.core.watch import texts
from idlerwatch.core.watch.causes import RANK, is_explained, is_held_back, priority_now
from idlerwatch.core.watch.conditions.plan import Item, Plan
from idlerwatch.core.watch.conditions.timers import Place, Timer
from idlerwatch.core.watch.conditions.usual import Usual, usual_of
from idlerwatch.core.watch.conditions.view import View
from idlerwatch.core.watch.lifecycle import BRIEF_S, LONGEST_SHELF_S, Finding, follow

Told = Acknowledge | Shelve | Trouble
Key = tuple[str, str]

_DAY_S: Final = 86400.0
_WORSE: Final = 1.2
_CLEARING: Final[Mapping[str, Finding]] = {
    "returned": "acknowledge",
    "shelved": "unshelve out",
    "suppressed": "release",
    "out-of-service": "enable",
}
"""What brings a state to normal where there is no condition any more; ``gone`` for the others."""


@dataclass(frozen=True, slots=True)
class Held:
    """An alarm that is not normal: its record, and what the record does not say. Instants are monotonic."""

    alarm: StandingAlarm
    is_told: bool
    is_seen: bool = False
    suppressed: float = math.nan
    shelved_until: float = math.nan


@dataclass(frozen=True, slots=True)
class Said:
    """When a chronic alarm was last told (UTC, since it outlives a restart), and how far it was from good."""

    utc: float
    badness: float


@dataclass(frozen=True, slots=True)
class Round:
    """One sample, as far as it is known before the life cycles take it."""

    plan: Plan
    view: View
    values: tuple[float, ...]
    places: tuple[Place, ...]
    timers: tuple[Timer, ...]
    usual: Usual


@dataclass(frozen=True, slots=True)
class Turn:
    """What one alarm's life cycle makes of a sample."""

    held: Held | None
    events: tuple[AlarmEvent, ...] = ()
    said: Said | None = None


def restored(alarm: StandingAlarm) -> Held:
    """Return an alarm that stood before a restart."""
    return Held(alarm, alarm.priority != "log", is_seen=alarm.state == "acknowledged")


def said_before(plan: Plan, alarm: StandingAlarm) -> Said:
    """What stood before a restart has been told when it rose."""
    return Said(alarm.raised_at, abs(alarm.value - plan.items[plan.places[alarm.tag, alarm.subject]].watch.good))


def take(seen: Round, key: Key, held: Held | None, said: Said | None, told: tuple[Told, ...]) -> Turn:
    """Take one alarm through a sample: what people said first, then what its condition does."""
    place = seen.plan.places.get(key)
    if place is None:
        return Turn(None) if held is None else _withdraw(seen, held)
    turn = Turn(held, (), said)
    for news in told:
        if not isinstance(news, Trouble) and (news.tag, news.subject) == key:
            turn = _join(turn, _obey(seen, place, turn.held, news))
    return _join(turn, _live(seen, place, turn.held, turn.said))


def _join(first: Turn, second: Turn) -> Turn:
    return Turn(second.held, first.events + second.events, second.said or first.said)


# --------------------------------------------------------------------------
# What the condition does
# --------------------------------------------------------------------------


def _live(seen: Round, place: int, held: Held | None, said: Said | None) -> Turn:
    """Move one alarm by its condition."""
    item, is_in = seen.plan.items[place], seen.timers[place].is_in
    is_suppressed = seen.view.letter in item.suppressed_in
    match None if held is None else held.alarm.state:
        case None | "returned" if is_in and not is_suppressed:
            is_held_back_now = is_held_back(seen.plan, item, seen.timers, seen.view)
            return Turn(held) if is_held_back_now else _rise(seen, place, held, said)
        case "unacknowledged" | "acknowledged" if held is not None:
            if is_suppressed:
                return _move(seen, place, replace(held, suppressed=seen.view.at), "suppress")
            return _tell_again(seen, place, held, said) if is_in else _return(seen, place, held)
        case "suppressed" if held is not None and not is_suppressed:
            return _leave_suppression(seen, place, held)
        case "shelved" if held is not None and not seen.view.at < held.shelved_until:
            return _unshelve(seen, place, held)
        case "out-of-service" if held is not None:
            return _move(seen, place, held, "enable")
        case _:
            return Turn(held)


def _return(seen: Round, place: int, held: Held) -> Turn:
    return _move(seen, place, held, _how_gone(seen.plan.items[place], held), is_told=held.is_told)


def _how_gone(item: Item, held: Held) -> Finding:
    return "gone unseen" if item.alarm.needs_acknowledgement and not held.is_seen else "gone"


def _leave_suppression(seen: Round, place: int, held: Held) -> Turn:
    """Resume after a brief suppression or when beyond; release once the condition has gone; else wait."""
    was_brief = not seen.view.at - held.suppressed > BRIEF_S
    is_in = seen.timers[place].is_in
    if is_in and (was_brief or seen.places[place] == "beyond"):
        return _move(seen, place, held, "resume seen" if held.is_seen else "resume")
    if is_in:
        return Turn(held)
    needs = seen.plan.items[place].alarm.needs_acknowledgement and not held.is_seen
    return _move(seen, place, held, "release unseen" if needs else "release")


def _unshelve(seen: Round, place: int, held: Held) -> Turn:
    is_in = seen.timers[place].is_in and seen.view.letter not in seen.plan.items[place].suppressed_in
    finding: Finding = "unshelve in" if is_in else "unshelve out"
    return _move(seen, place, replace(held, is_seen=False), finding, is_told=is_in and held.alarm.priority != "log")


def _withdraw(seen: Round, held: Held) -> Turn:
    """An alarm that stood before a change of the settings which took it away."""
    known = seen.plan.settings.alarms.get((held.alarm.tag, ""))
    if known is not None and not known.enabled:
        is_out = held.alarm.state == "out-of-service"
        return Turn(held) if is_out else _turn(seen, held, "disable", held.alarm)
    return _turn(seen, held, _CLEARING.get(held.alarm.state, "gone"), held.alarm)


# --------------------------------------------------------------------------
# What people do
# --------------------------------------------------------------------------


def _obey(seen: Round, place: int, held: Held | None, news: Acknowledge | Shelve) -> Turn:
    match news:
        case Acknowledge() if held is not None:
            return _move(seen, place, replace(held, is_seen=True), "acknowledge")
        case Shelve() if news.for_s > 0:
            until = seen.view.at + min(news.for_s, LONGEST_SHELF_S)
            kept = _fresh(seen, place, is_told=False) if held is None else held
            return _move(seen, place, replace(kept, shelved_until=until), "shelve")
        case Shelve() if held is not None and held.alarm.state == "shelved":
            return _unshelve(seen, place, held)
        case _:
            return Turn(held)


# --------------------------------------------------------------------------
# Rising and telling
# --------------------------------------------------------------------------


def _fresh(seen: Round, place: int, *, is_told: bool) -> Held:
    """A new occurrence, not yet in any state but normal."""
    item, view = seen.plan.items[place], seen.view
    tag, subject = item.key
    alarm = StandingAlarm(
        tag=tag,
        subject=subject,
        occurrence=f"{tag}/{subject}/{stamp(view.assessment.utc)}",
        state="normal",
        priority=priority_now(seen.plan, item.alarm, view),
        raised_at=view.assessment.utc,
        value=seen.values[place],
        uncertainty=_uncertainty(item, seen.values[place], view),
        usual=usual_of(seen.usual, view.letter, place),
        setpoint=item.setpoint(view),
        unit=item.alarm.unit,
        text="",
        cause=item.alarm.cause,
        advice=item.alarm.advice,
    )
    return Held(alarm, is_told)


def stamp(utc: float) -> str:
    """Return an instant as ISO 8601 in UTC with milliseconds.

    Examples
    --------
    >>> stamp(1760000000.25)
    '2025-10-09T08:53:20.250Z'
    """
    return datetime.fromtimestamp(round(utc, 3), UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")


def _uncertainty(item: Item, value: float, view: View) -> float:
    """The figure's, where the value is the figure itself."""
    figure = view.figures.get(item.subject.figure) if item.subject.figure else None
    return figure.uncertainty if figure is not None and figure.value == value else math.nan


def _rise(seen: Round, place: int, held: Held | None, said: Said | None) -> Turn:
    fresh = _fresh(seen, place, is_told=False)
    if held is not None:
        fresh = replace(fresh, alarm=replace(fresh.alarm, state=held.alarm.state))
    is_told = _ought(seen, place, fresh.alarm, said)
    turn = _move(seen, place, replace(fresh, is_told=is_told), "come", is_told=is_told)
    return replace(turn, said=_said(seen, place)) if is_told else turn


def _tell_again(seen: Round, place: int, held: Held, said: Said | None) -> Turn:
    """Tell what stands untold and no reason keeps quiet any more, is a fifth worse, or has become more urgent."""
    priority = priority_now(seen.plan, seen.plan.items[place].alarm, seen.view)
    is_urgent = RANK[priority] > RANK[held.alarm.priority]
    alarm = replace(held.alarm, priority=priority) if is_urgent else held.alarm
    is_due = is_urgent or not held.is_told or _is_chronic(seen, place)
    if not is_due or alarm.state != "unacknowledged" or seen.places[place] != "beyond":
        return Turn(held)
    if is_held_back(seen.plan, seen.plan.items[place], seen.timers, seen.view) or not _ought(seen, place, alarm, said):
        return Turn(replace(held, alarm=alarm))
    value = seen.values[place]
    alarm = replace(alarm, value=value, uncertainty=_uncertainty(seen.plan.items[place], value, seen.view))
    turn = _turn(seen, replace(held, is_told=True), "come", _worded(seen, place, alarm), is_told=True)
    return replace(turn, said=_said(seen, place))


def _ought(seen: Round, place: int, alarm: StandingAlarm, said: Said | None) -> bool:
    """Whether an alarm that is in ought to be told now."""
    item = seen.plan.items[place]
    if alarm.priority == "log" or is_explained(seen.plan, item, seen.timers, seen.view):
        return False
    return not _is_chronic(seen, place) or said is None or _is_news(seen, place, said)


def _is_chronic(seen: Round, place: int) -> bool:
    return seen.plan.items[place].alarm.chronic


def _is_news(seen: Round, place: int, said: Said) -> bool:
    return seen.view.assessment.utc - said.utc >= _DAY_S or _badness(seen, place) >= _WORSE * said.badness


def _badness(seen: Round, place: int) -> float:
    return abs(seen.values[place] - seen.plan.items[place].watch.good)


def _said(seen: Round, place: int) -> Said:
    return Said(seen.view.assessment.utc, _badness(seen, place))


# --------------------------------------------------------------------------
# Transitions
# --------------------------------------------------------------------------


def _move(seen: Round, place: int, held: Held, finding: Finding, *, is_told: bool = False) -> Turn:
    """Follow a finding; nothing happens where the table keeps the state."""
    state = follow(held.alarm.state, finding)
    if state == held.alarm.state:
        return Turn(held)
    worded = _worded(seen, place, replace(held.alarm, state=state))
    return _turn(seen, held, finding, replace(worded, state=held.alarm.state), is_told=is_told)


def _turn(seen: Round, held: Held, finding: Finding, alarm: StandingAlarm, *, is_told: bool = False) -> Turn:
    """Make the event of a transition, or of telling again where the state stays."""
    previous = alarm.state
    after = replace(alarm, state=follow(previous, finding), transitions=alarm.transitions + 1)
    view = seen.view
    event = AlarmEvent(
        f"{after.occurrence}/{after.transitions}", view.at, view.assessment.utc, previous, after, is_told
    )
    return Turn(None if after.state == "normal" else replace(held, alarm=after), (event,))


def _worded(seen: Round, place: int, alarm: StandingAlarm) -> StandingAlarm:
    """Give a record the text of its state: the call to act while it is in, all clear when it has gone."""
    item = seen.plan.items[place]
    scene = texts.Scene(seen.plan.settings, item, seen.view, alarm, seen.values[place])
    if alarm.state == "unacknowledged":
        return replace(alarm, text=texts.rising(scene))
    if alarm.state in ("normal", "returned"):
        return replace(alarm, text=texts.returning(scene))
    return alarm
