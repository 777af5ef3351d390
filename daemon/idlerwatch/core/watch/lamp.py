"""One word for a lamp or sounder that phones cannot replace under ear muffs.

``stop``: an alarm of high priority stands. ``blind``: the converter cannot be seen. ``look``: an alarm of medium
priority stands, or a high one has gone that nobody has acknowledged. ``fine``: none of these. Low ones are notes and
light nothing: what is chronic in many sheds would keep the lamp lit for ever.
"""

from collections.abc import Iterable
from typing import Final

from idlerwatch.core.values import Assessment, Lamp, StandingAlarm

_ACTIVE: Final = ("unacknowledged", "acknowledged")
_BLINDING: Final = ("blind", "bus-down", "supply-meter-silent")


def lamp_of(assessment: Assessment, standing: Iterable[StandingAlarm]) -> Lamp:
    """Return the lamp's word; never ``fine`` where no meter answers."""
    standing = tuple(standing)
    active = [alarm for alarm in standing if alarm.state in _ACTIVE]
    if any(alarm.priority == "high" for alarm in active):
        return "stop"
    if _sees_nothing(assessment) or any(alarm.tag in _BLINDING for alarm in active):
        return "blind"
    if any(alarm.priority == "medium" for alarm in active) or any(alarm.state == "returned" for alarm in standing):
        return "look"
    return "fine"


def _sees_nothing(assessment: Assessment) -> bool:
    return assessment.state == "blind" or "answering" not in assessment.meters.values()
