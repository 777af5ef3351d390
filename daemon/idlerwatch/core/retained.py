"""What a broker holds of us, retained, as a function of the newest assessment: lamp, alarm records, the assessment.

Only what has changed is published; after a new connection everything is, since a broker's acknowledgement does not mean
that its disk has it. Records the broker holds of alarms that no longer stand are emptied.
"""

from dataclasses import dataclass, replace

from idlerwatch.core import payloads
from idlerwatch.core.values import Assessment, StandingAlarm


@dataclass(frozen=True, slots=True)
class Publication:
    """Something retained: the topic below the prefix, the text (empty deletes) and the quality of service."""

    level: str
    payload: str
    qos: int


class Picture:
    """What the broker holds, and what must be published to make it that of the newest assessment.

    An assessment is published at most every `assessment_s` in the time of the assessments.
    """

    def __init__(self, assessment_s: float) -> None:
        self._assessment_s = assessment_s
        self.forget()

        self._held: set[str] = set()

    def forget(self) -> None:
        """Publish everything again."""
        self._lamp = ""
        self._records: dict[str, StandingAlarm] = {}
        self._due = -float("inf")

    def note_held(self, level: str) -> None:
        """Remember that the broker holds a record."""
        self._held.add(level)

    def publications(self, assessment: Assessment) -> list[Publication]:
        """Return what has changed since the last time."""
        return [*self._lamp_word(assessment), *self._alarms(assessment), *self._assessment(assessment)]

    def _lamp_word(self, assessment: Assessment) -> list[Publication]:
        if assessment.lamp == self._lamp:
            return []
        self._lamp = assessment.lamp
        return [Publication("lamp", assessment.lamp, qos=1)]

    def _alarms(self, assessment: Assessment) -> list[Publication]:
        standing = {
            f"alarm/{payloads.topic(alarm.tag, alarm.subject)}": replace(alarm, value=0.0, uncertainty=0.0)
            for alarm in assessment.alarms
        }
        full = dict(zip(standing, assessment.alarms, strict=True))
        changed = [level for level, alarm in standing.items() if self._records.get(level) != alarm]
        gone = sorted((self._records.keys() | self._held) - standing.keys())
        self._records = standing
        self._held.clear()
        records = [Publication(level, payloads.text(payloads.record(full[level])), qos=1) for level in changed]
        return [*records, *(Publication(level, "", qos=1) for level in gone)]

    def _assessment(self, assessment: Assessment) -> list[Publication]:
        if assessment.at < self._due:
            return []
        # a little early is on time: cycles are not exact
        self._due = assessment.at + 0.9 * self._assessment_s
        return [Publication("assessment", payloads.text(payloads.assessment(assessment)), qos=0)]
