"""The third step of the alarms: the life cycle of one alarm as a table, state x finding -> state.

States are those of IEC 62682 (ISA-18.2). Findings are what happened to the alarm in a sample:

* ``come``: its condition has come in (delays and suppression have been seen to). ``gone``: it has gone;
  ``gone unseen``: the same for an alarm that needs acknowledgement and has none.
* ``acknowledge``, ``shelve``: what a person does. ``unshelve in``, ``unshelve out``: the time is over, or a person
  takes it back, while the condition is in or out.
* ``suppress``: the converter enters a state in which the alarm is not judged. ``resume``, ``resume seen``: it has left
  it and the condition is still in, the alarm then is what it was before. ``release``, ``release unseen``: it has
  left it and the condition has gone meanwhile.
* ``disable``, ``enable``: the settings take the alarm out of service and back.

A suppressed alarm does not come. One that stands when the suppression begins becomes ``suppressed`` and is told
nothing about: after at most `BRIEF_S` (a machine's start) it resumes as it was, after longer it waits for the
condition: beyond, it resumes; back for its off-delay, it returns quietly. An acknowledgement or a shelving meanwhile
is kept.
"""

from collections.abc import Mapping
from typing import Final, Literal, get_args

from idlerwatch.core.values import AlarmState

Finding = Literal[
    "come",
    "gone",
    "gone unseen",
    "acknowledge",
    "shelve",
    "unshelve in",
    "unshelve out",
    "suppress",
    "resume",
    "resume seen",
    "release",
    "release unseen",
    "disable",
    "enable",
]

FINDINGS: Final[tuple[Finding, ...]] = get_args(Finding)
STATES: Final[tuple[AlarmState, ...]] = get_args(AlarmState)

BRIEF_S: Final = 60.0
LONGEST_SHELF_S: Final = 8 * 3600.0
"""Shelving is bounded in time."""

_MOVES: Final[Mapping[AlarmState, Mapping[Finding, AlarmState]]] = {
    "normal": {
        "come": "unacknowledged",
        "shelve": "shelved",
        "disable": "out-of-service",
    },
    "unacknowledged": {
        "gone": "normal",
        "gone unseen": "returned",
        "acknowledge": "acknowledged",
        "shelve": "shelved",
        "suppress": "suppressed",
        "disable": "out-of-service",
    },
    "acknowledged": {
        "gone": "normal",
        "gone unseen": "normal",
        "shelve": "shelved",
        "suppress": "suppressed",
        "disable": "out-of-service",
    },
    "returned": {
        "come": "unacknowledged",
        "acknowledge": "normal",
        "shelve": "shelved",
        "disable": "out-of-service",
    },
    "shelved": {
        "unshelve in": "unacknowledged",
        "unshelve out": "normal",
        "disable": "out-of-service",
    },
    "suppressed": {
        "resume": "unacknowledged",
        "resume seen": "acknowledged",
        "release": "normal",
        "release unseen": "returned",
        "shelve": "shelved",
        "disable": "out-of-service",
    },
    "out-of-service": {
        "enable": "normal",
    },
}

TABLE: Final[Mapping[tuple[AlarmState, Finding], AlarmState]] = {
    (state, finding): _MOVES[state].get(finding, state) for state in STATES for finding in FINDINGS
}
"""Every state answers every finding; where nothing moves, the state stays."""


def follow(state: AlarmState, finding: Finding) -> AlarmState:
    """Return the state after a finding.

    Examples
    --------
    >>> follow("unacknowledged", "acknowledge"), follow("unacknowledged", "gone unseen"), follow("normal", "gone")
    ('acknowledged', 'returned', 'normal')
    """
    return TABLE[state, finding]
