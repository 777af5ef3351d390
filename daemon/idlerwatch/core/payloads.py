"""What goes out, as JSON-ready mappings, topics and line protocol; and what comes in from a phone.

Machines read SI, plain ratios, and ISO 8601 UTC with milliseconds; a number that is missing is null, never NaN. The
JSON Schemas in ``idlerwatch/schemas`` describe the same; the tests hold one against the other.

The journal keeps an `AlarmEvent` in full (`event_body`, `read_event`), so that the message is made from what was
committed. Topics follow MQTT 5.0 section 4.7, line protocol the description of the InfluxDB v2 API: measurement
escapes comma and space; tag keys, tag values and field keys comma, equals sign and space.
"""

import json
import math
from collections.abc import Mapping
from datetime import UTC, datetime, timedelta
from typing import Any, Final

from idlerwatch.core.values import (
    Acknowledge,
    AlarmEvent,
    Assessment,
    Figure,
    Shelve,
    StandingAlarm,
    Trouble,
    WindowRow,
)

VERSION: Final = 1
LONGEST_SHELVING_S: Final = 8 * 3600.0
_EPOCH: Final = datetime(1970, 1, 1, tzinfo=UTC)

# --------------------------------------------------------------------------
# Topics
# --------------------------------------------------------------------------


def topic(*levels: str) -> str:
    """Join levels to a topic; a level must not be empty or hold ``/``, ``+``, ``#`` or NUL (MQTT 5.0, 4.7).

    Examples
    --------
    >>> topic("idlerwatch", "slipway", "boatshed", "lamp")
    'idlerwatch/slipway/boatshed/lamp'
    """
    for level in levels:
        if not level or any(sign in level for sign in "/+#\0"):
            raise ValueError(f"a topic's level is {level!r}, must be some text without / + # and NUL")
    return "/".join(levels)


def prefix(site: str, converter: str) -> str:
    """Return what all topics of a converter begin with."""
    return topic("idlerwatch", site, converter)


def alarm_topic(beginning: str, tag: str, subject: str) -> str:
    """Return the topic of an alarm's retained record."""
    return f"{beginning}/{topic('alarm', tag, subject)}"


# --------------------------------------------------------------------------
# JSON
# --------------------------------------------------------------------------


def stamp(utc: float) -> str:
    """Return POSIX seconds as ISO 8601 UTC with milliseconds.

    Examples
    --------
    >>> stamp(1796104800.0625)
    '2026-12-01T06:00:00.062Z'
    """
    moment = _EPOCH + timedelta(milliseconds=round(utc * 1000.0))
    return moment.strftime("%Y-%m-%dT%H:%M:%S.") + f"{moment.microsecond // 1000:03d}Z"


def number(value: float) -> float | None:
    """Return a number that JSON can carry; None for one that is missing."""
    return float(value) if math.isfinite(value) else None


def record(alarm: StandingAlarm) -> dict[str, Any]:
    """Return an alarm as it stands: the retained record."""
    return {
        "version": VERSION,
        "occurrence": alarm.occurrence,
        "tag": alarm.tag,
        "subject": alarm.subject,
        "state": alarm.state,
        "priority": alarm.priority,
        "raised_at": stamp(alarm.raised_at),
        "value": number(alarm.value),
        "uncertainty": number(alarm.uncertainty),
        "usual": number(alarm.usual),
        "setpoint": number(alarm.setpoint),
        "unit": alarm.unit,
        "text": alarm.text,
        "cause": alarm.cause,
        "advice": alarm.advice,
    }


def message(event: AlarmEvent) -> dict[str, Any]:
    """Return one transition as a phone gets it: the record with its identity, its instant and the state before."""
    return {**record(event.alarm), "id": event.identity, "at": stamp(event.utc), "previous": event.previous}


def assessment(given: Assessment) -> dict[str, Any]:
    """Return everything that is known about one sample."""
    return {
        "version": VERSION,
        "at": stamp(given.utc),
        "settings": given.settings,
        "state": given.state,
        "state_since": stamp(given.utc - (given.at - given.state_since)),
        "loading": given.loading,
        "lamp": given.lamp,
        "angles": given.angles,
        "figures": _figures(given.figures),
        "meters": dict(given.meters),
        "remarks": list(given.remarks),
        "alarms": [record(alarm) for alarm in given.alarms],
    }


def _figures(figures: Mapping[tuple[str, str, str], Figure]) -> dict[str, Any]:
    tree: dict[str, Any] = {}
    for (measurement, subject, quantity), figure in figures.items():
        tree.setdefault(measurement, {}).setdefault(subject, {})[quantity] = {
            "value": number(figure.value),
            "uncertainty": number(figure.uncertainty),
            "known": figure.known,
        }
    return tree


def text(body: Mapping[str, Any]) -> str:
    """Return a mapping as JSON text without needless blanks; NaN is refused."""
    return json.dumps(body, separators=(",", ":"), ensure_ascii=False, allow_nan=False)


# --------------------------------------------------------------------------
# What the journal keeps
# --------------------------------------------------------------------------

_NUMBERS: Final = ("value", "uncertainty", "usual", "setpoint")
_ALARM: Final = tuple(StandingAlarm.__dataclass_fields__)
_TOLD: Final = {"acknowledge": Acknowledge, "shelve": Shelve, "trouble": Trouble}


def standing_body(alarm: StandingAlarm) -> dict[str, Any]:
    """Return an alarm with all its numbers unrounded, null for NaN."""
    body = {name: getattr(alarm, name) for name in _ALARM}
    return {**body, **{name: number(body[name]) for name in _NUMBERS}}


def read_standing(body: Mapping[str, Any]) -> StandingAlarm:
    """Return the alarm that `standing_body` was given."""
    numbers = {name: math.nan if body[name] is None else body[name] for name in _NUMBERS}
    return StandingAlarm(**{**body, **numbers})


def event_body(event: AlarmEvent) -> dict[str, Any]:
    """Return a transition as the journal keeps it."""
    return {
        "identity": event.identity,
        "at": event.at,
        "utc": event.utc,
        "previous": event.previous,
        "is_told": event.is_told,
        "alarm": standing_body(event.alarm),
    }


def read_event(body: Mapping[str, Any]) -> AlarmEvent:
    """Return the transition that `event_body` was given."""
    return AlarmEvent(**{**body, "alarm": read_standing(body["alarm"])})


def told_body(told: Acknowledge | Shelve | Trouble, place: int) -> dict[str, Any]:
    """Return what a person or a part of the tool told the core; `place` counts the cycle's inputs before it."""
    what = type(told).__name__.lower()
    return {"what": what, "place": place, **{name: getattr(told, name) for name in told.__dataclass_fields__}}


def read_told(body: Mapping[str, Any]) -> tuple[Acknowledge | Shelve | Trouble, int]:
    """Return what `told_body` was given."""
    fields = {name: value for name, value in body.items() if name not in ("what", "place")}
    return _TOLD[body["what"]](**fields), body["place"]


# --------------------------------------------------------------------------
# What a phone sends
# --------------------------------------------------------------------------


def read_command(command: str, payload: bytes, at: float) -> Acknowledge | Shelve:
    """Return what the payload of the topic `acknowledge` or `shelve` asks for; ValueError with one sentence if nothing.

    Examples
    --------
    >>> read_command("shelve", b'{"tag": "leg-low", "subject": "l2", "by": "Jo", "for_s": 3600}', 5.0)
    Shelve(at=5.0, tag='leg-low', subject='l2', by='Jo', for_s=3600.0)
    """
    try:
        body = json.loads(payload)
    except (ValueError, RecursionError):
        raise ValueError(f"{command} is {payload[:80]!r}, must be JSON") from None
    if not isinstance(body, dict):
        raise ValueError(f"{command} is {payload[:80]!r}, must be an object with tag, subject and by")  # noqa: TRY004 - one kind of fault
    tag, subject = _word(command, body, "tag"), _word(command, body, "subject")
    by = _word(command, {"by": "somebody", **body}, "by")
    if command == "acknowledge":
        return Acknowledge(at, tag, subject, by)
    return Shelve(at, tag, subject, by, _shelving(body.get("for_s")))


def _word(command: str, body: Mapping[str, Any], key: str) -> str:
    word = body.get(key)
    if not isinstance(word, str) or not 0 < len(word) <= 100:
        raise ValueError(f"{command}: {key} is {str(word)[:80]!r}, must be a word")
    return word


def _shelving(seconds: object) -> float:
    is_number = isinstance(seconds, int | float) and not isinstance(seconds, bool)
    if not is_number or not 0.0 <= float(seconds) <= LONGEST_SHELVING_S:  # type: ignore[arg-type]
        raise ValueError(f"shelve: for_s is {str(seconds)[:80]!r}, must be 0 to {LONGEST_SHELVING_S:.0f} seconds")
    return float(seconds)  # type: ignore[arg-type]


# --------------------------------------------------------------------------
# Line protocol
# --------------------------------------------------------------------------

_MEASUREMENT: Final = str.maketrans({",": "\\,", " ": "\\ ", "\n": "\\ "})
_KEY: Final = str.maketrans({",": "\\,", "=": "\\=", " ": "\\ ", "\n": "\\ "})


def line(row: WindowRow, site: str, converter: str) -> str:
    """Return a window row as one line of line protocol, its time in milliseconds; empty where it has no number.

    Numbers are always written as floats (a field's type is fixed by its first write) with the seven digits that a
    float32 has.

    Examples
    --------
    >>> row = WindowRow("10s", 1796104800.0, "leg", "l2", {"voltage": 230.0, "count": 10.0})
    >>> line(row, "slipway", "boatshed")
    'leg,converter=boatshed,site=slipway,subject=l2,window=10s voltage=230,count=10 1796104800000'
    """
    fields = ",".join(f"{_escape(name)}={value:.7g}" for name, value in row.fields.items() if math.isfinite(value))
    if not fields:
        return ""
    tags = {"converter": converter, "site": site, "subject": row.subject, "window": row.window}
    tagged = ",".join(f"{name}={_escape(word)}" for name, word in tags.items() if word)
    return f"{row.measurement.translate(_MEASUREMENT)},{tagged} {fields} {round(row.start_utc * 1000.0)}"


def _escape(word: str) -> str:
    # a backslash at the end would escape the sign that follows
    return word.rstrip("\\").translate(_KEY)
