"""The second step of the alarms: which of the conditions that are in are told, and which are explained by another.

* A cause that is in explains its consequences (`explains` in the alarm list): they stand, but are not told.
* What was told before its cause came is not withdrawn.
* A cause with a slightly longer delay still wins: a consequence that is about to come in is held back while the
  on-delay of a cause is running and has at most `HOLD_S` left. If the cause does not come, the consequence comes then.
* When the cause has gone and the consequence is still beyond its setpoint, it is told then.
* What is itself only logged explains nothing, since nobody would hear of either.
"""

from collections.abc import Mapping, Sequence
from typing import Final

from idlerwatch.core.settings.model import Alarm
from idlerwatch.core.values import Priority
from idlerwatch.core.watch.conditions.plan import Item, Plan
from idlerwatch.core.watch.conditions.timers import Timer, remaining
from idlerwatch.core.watch.conditions.view import View

HOLD_S: Final = 5.0
_MACHINES_S: Final = 10.0
RANK: Final[Mapping[Priority, int]] = {"log": 0, "low": 1, "medium": 2, "high": 3}


def priority_now(plan: Plan, alarm: Alarm, view: View) -> Priority:
    """Return an alarm's priority in this sample: the highest that applies, else the list's."""
    if not alarm.priority_when:
        return alarm.priority
    holds = {view.letter: True, "machines": view.at - view.memory.life.machines_at <= _MACHINES_S}
    holds["generator"] = plan.settings.supply.source == "generator"
    found = [priority for when, priority in alarm.priority_when.items() if holds.get(when)]
    return max(found, key=RANK.__getitem__, default=alarm.priority)


def is_explained(plan: Plan, item: Item, timers: Sequence[Timer], view: View) -> bool:
    """Whether a cause of the item is in and is itself more than logged."""
    return any(timers[place].is_in and _speaks(plan, plan.items[place], view) for place in item.causes)


def is_held_back(plan: Plan, item: Item, timers: Sequence[Timer], view: View) -> bool:
    """Whether a cause of the item is about to come in."""
    return any(
        remaining(timers[place], view.at, plan.items[place].delays) <= HOLD_S and _speaks(plan, plan.items[place], view)
        for place in item.causes
    )


def _speaks(plan: Plan, cause: Item, view: View) -> bool:
    return view.letter not in cause.suppressed_in and priority_now(plan, cause.alarm, view) != "log"
