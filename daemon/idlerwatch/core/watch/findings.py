"""The state machine of the converter's life, as a table: state x finding -> state.

A *finding* is what one sample says, in one word; how it is found stands in `life`.
"""

from collections.abc import Mapping
from typing import Final, Literal

from idlerwatch.core.values import ConverterState

Finding = Literal["still", "coasting", "surging", "humming", "rising", "between", "turning", "unseen", "nothing"]
"""What one sample says.

========== ===========================================================================
still      no supply current for the idler; generated legs dead, or their meters silent
coasting   no supply current for the idler, yet generated legs carry voltage
surging    a start's current (at rest from a lower one on), whatever a start capacitor makes of the legs
humming    the supply's current flows; generated legs dead
rising     the supply's current flows; generated legs between dead and up
between    generated legs between dead and up; supply current not known
turning    generated legs up
unseen     the supply's current flows; the generated legs' meters are silent, none is booting
nothing    nothing that decides
========== ===========================================================================
"""

FINDINGS: Final[tuple[Finding, ...]] = (
    "still",
    "coasting",
    "surging",
    "humming",
    "rising",
    "between",
    "turning",
    "unseen",
    "nothing",
)
STATES: Final[tuple[ConverterState, ...]] = ("stopped", "starting", "change-over", "running", "run-down", "blind")

TABLE: Final[Mapping[ConverterState, Mapping[Finding, ConverterState]]] = {
    "stopped": {
        "still": "stopped", "coasting": "run-down", "surging": "starting", "humming": "stopped", "rising": "starting",
        "between": "starting", "turning": "running", "unseen": "blind", "nothing": "blind",
    },
    "starting": {
        "still": "change-over", "coasting": "change-over", "surging": "starting", "humming": "starting",
        "rising": "starting", "between": "starting", "turning": "running", "unseen": "running", "nothing": "blind",
    },
    "change-over": {
        "still": "stopped", "coasting": "change-over", "surging": "starting", "humming": "starting",
        "rising": "starting", "between": "change-over", "turning": "running", "unseen": "running", "nothing": "blind",
    },
    # a lost leg or a deep sag does not stop a converter whose supply current flows
    "running": {
        "still": "run-down", "coasting": "run-down", "surging": "running", "humming": "running", "rising": "running",
        "between": "run-down", "turning": "running", "unseen": "blind", "nothing": "blind",
    },
    # a lamp on the fed leg draws current while the legs die away: that is no start
    "run-down": {
        "still": "stopped", "coasting": "run-down", "surging": "starting", "humming": "stopped", "rising": "run-down",
        "between": "run-down", "turning": "running", "unseen": "blind", "nothing": "blind",
    },
    "blind": {
        "still": "stopped", "coasting": "run-down", "surging": "starting", "humming": "blind", "rising": "starting",
        "between": "blind", "turning": "running", "unseen": "blind", "nothing": "blind",
    },
}  # fmt: skip
"""The state machine: state x finding -> state."""

CONFIRMATIONS: Final[Mapping[Finding, int]] = {
    "still": 2, "coasting": 2, "surging": 2, "humming": 2, "rising": 2, "between": 2, "turning": 2, "unseen": 3,
    "nothing": 3,
}  # fmt: skip
"""How many samples in a row must find the same before the state moves. Two witnesses in one sample count as two."""
