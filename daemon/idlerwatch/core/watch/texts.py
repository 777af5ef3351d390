"""What a phone says about an alarm: the words stand in `texts_data`, the figures are put in here.

The first word says when to act: NOW (high), TODAY (all others), OK (over). A template's parts in square brackets are
left out where one of their figures is unknown, and from the last one backwards where the text would be longer than a
phone shows at once. What is not measured is left out, never written as nought.
"""

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Final

from idlerwatch.core.conductors import LEGS, Pair, read_pair
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.values import StandingAlarm
from idlerwatch.core.watch.conditions import means
from idlerwatch.core.watch.conditions.plan import Item
from idlerwatch.core.watch.conditions.view import Address, View
from idlerwatch.core.watch.texts_data import TEXTS

LONGEST: Final = 240
MOST_SURE: Final = 0.999
"""Nothing is called surer than this, since nothing was shown to be."""
LEAST_LEFT: Final = 0.01

_PART: Final = re.compile(r"\[([^\]]*)\]")
_FIELD: Final = re.compile(r"\{(\w+)\}")
_KNOWN: Final[Mapping[str, str]] = {
    "measured": "Measured",
    "mapped": "From the map of voltages",
    "recovered": "From recovered angles",
    "computed": "Computed",
    "learned": "Learned",
    "declared": "Declared",
}


@dataclass(frozen=True, slots=True)
class Scene:
    """All that a text can be about: one alarm in one sample."""

    settings: Settings
    item: Item
    view: View
    alarm: StandingAlarm
    value: float


def rising(scene: Scene) -> str:
    """Return the call to act."""
    first = "NOW: " if scene.alarm.priority == "high" else "TODAY: "
    return fill(first + TEXTS[scene.alarm.tag].call, scene)


def returning(scene: Scene) -> str:
    """Return the all clear."""
    return fill("OK again {now}: " + TEXTS[scene.alarm.tag].clear + "[ It lasted {lasted}.][ {please}]", scene)


def fill(template: str, scene: Scene) -> str:
    """Put the figures in, leave out the parts that lack one, and the last parts where it gets too long."""
    texts = [
        _part(piece, scene) if place % 2 else _always(piece, scene) for place, piece in enumerate(_PART.split(template))
    ]
    for place in range(len(texts) - 2, 0, -2):
        if len("".join(texts)) <= LONGEST:
            break
        texts[place] = ""
    text = "".join(texts)
    return text if len(text) <= LONGEST else text[: LONGEST - 1].rstrip() + "…"


def _part(piece: str, scene: Scene) -> str:
    """Return a part with its figures, nothing where one is unknown."""
    found = _fields(piece, scene)
    return "" if "" in found.values() else piece.format(**found)


def _always(piece: str, scene: Scene) -> str:
    """Return what is always said, with the words for what is unknown."""
    return piece.format(**{name: text or "not measured" for name, text in _fields(piece, scene).items()})


def _fields(piece: str, scene: Scene) -> dict[str, str]:
    return {name: FIELDS[name](scene) for name in _FIELD.findall(piece)}


# --------------------------------------------------------------------------
# Things and times
# --------------------------------------------------------------------------


def _thing(scene: Scene) -> str:
    """The subject by the name people here use."""
    subject = scene.alarm.subject
    labels = scene.settings.supply.labels
    conductors = subject.upper().split("-")
    if not set(conductors) <= set(LEGS):
        return subject
    named = [f"{one} ({labels[one]})" if one in labels else one for one in conductors]
    return "-".join(named)


def _clock(scene: Scene, utc: float) -> str:
    return datetime.fromtimestamp(utc + scene.view.assessment.local_offset, UTC).strftime("%H:%M")


def _now(scene: Scene) -> str:
    return _clock(scene, scene.view.assessment.utc)


def _since(scene: Scene) -> str:
    return _clock(scene, scene.alarm.raised_at - scene.item.delays.on)


def _lasted(scene: Scene) -> str:
    return duration(scene.view.assessment.utc - scene.alarm.raised_at + scene.item.delays.on)


def duration(seconds: float) -> str:
    """Return a duration as people say it.

    Examples
    --------
    >>> [duration(seconds) for seconds in (7.2, 540, 22_200)]
    ['7 s', '9 min', '6 h 10']
    """
    seconds = max(seconds, 0.0)
    if seconds < 100:
        return f"{seconds:.0f} s"
    minutes = round(seconds / 60)
    return f"{minutes} min" if minutes < 100 else f"{minutes // 60} h {minutes % 60:02d}"


def _please(scene: Scene) -> str:
    return "Please acknowledge." if scene.alarm.state == "returned" else ""


# --------------------------------------------------------------------------
# Figures
# --------------------------------------------------------------------------


def volts(value: float) -> str:
    """Return a voltage; a small one is not written as nought.

    Examples
    --------
    >>> volts(184.6), volts(4.26), volts(0.02), volts(float("nan"))
    ('185 V', '4.3 V', 'under 0.1 V', '')
    """
    if math.isnan(value):
        return ""
    if abs(value) < 0.05:
        return "under 0.1 V"
    return f"{value:.1f} V" if abs(value) < 10.0 else f"{value:.0f} V"


def percent(value: float, uncertainty: float = math.nan) -> str:
    """Return a ratio in percent, with its uncertainty where one is stated.

    Examples
    --------
    >>> percent(0.0912, 0.004), percent(0.0912)
    ('9.1 ± 0.4 %', '9.1 %')
    """
    if math.isnan(value):
        return ""
    sure = "" if math.isnan(uncertainty) else f" ± {100 * uncertainty:.1f}"
    return f"{100 * value:.1f}{sure} %"


def _plain(value: float, unit: str = "") -> str:
    return "" if math.isnan(value) else f"{value:.1f}{unit}"


def _nominal(scene: Scene) -> float:
    """Nominal voltage of the alarm's pair, or of the supply. [V]"""
    feed = scene.settings.supply.as_feed
    conductors = scene.alarm.subject.upper()
    if conductors in LEGS:
        return feed.nominal_voltage(Pair(conductors, "N"))
    try:
        return feed.nominal_voltage(read_pair(conductors))
    except ValueError:
        return feed.voltage


def _said(scene: Scene, value: float) -> str:
    """Return a value or limit of the alarm in the unit people use."""
    watches, unit = scene.item.alarm.watches, scene.item.alarm.unit
    if "-voltage-" in watches:
        return volts(value * _nominal(scene))
    if watches == "supply-current-high":
        return _plain(value * (scene.settings.supply.breaker_amperes or math.nan), " A")
    if unit == "V":
        return volts(value)
    if unit == "s":
        return "" if math.isnan(value) else duration(value)
    if unit == "K":
        return "" if math.isnan(value) else f"{value - 273.15:.0f} °C"
    return _plain(value, f" {unit}") if unit != "1" else percent(value)


def _value(scene: Scene) -> str:
    if scene.item.alarm.watches in ("unbalance", "unbalance-window"):
        return percent(scene.value, scene.alarm.uncertainty)
    return _said(scene, scene.value)


def _figure(address: Address, unit: str, scale: float = 1.0) -> Callable[[Scene], str]:
    return lambda scene: _plain(scene.view.value(address) * scale, unit)


def _legs(scene: Scene) -> str:
    """The voltages on which the legs are judged, as far as known."""
    is_line = scene.settings.supply.as_feed.is_line_feed
    pairs = list(means.generated_pairs(scene.settings))
    pairs = [scene.settings.supply.as_feed.pair, *pairs] if is_line else [Pair(leg, "N") for leg in LEGS]
    said = [
        f"{str(pair) if is_line else pair.first} {found}"
        for pair in pairs
        if (found := volts(scene.view.value((means.measurement_of(pair), means.subject_of(pair), "voltage"))))
    ]
    return ", ".join(said)


def _amperes(scene: Scene) -> str:
    found = [(leg, scene.view.value(("leg", leg.lower(), "current"))) for leg in LEGS]
    return ", ".join(f"{leg} {amperes:.1f} A" for leg, amperes in found if not math.isnan(amperes))


def _supply_volts(scene: Scene) -> str:
    return volts(scene.view.value(("supply", "supply", "voltage")))


def _earth_volts(scene: Scene) -> str:
    return volts(scene.view.value(("earthing", "converter", "neutral_earth_voltage")))


def _earth_before(scene: Scene) -> str:
    return volts(scene.view.memory.earth.before_jump)


def _usual_start(scene: Scene) -> str:
    learned = scene.view.memory.life.learned_start_time
    declared = scene.settings.start.usual_s if scene.settings.start else None
    return _plain(declared or math.nan if math.isnan(learned) else learned, " s")


def _machines(scene: Scene) -> str:
    names = [machine.name for machine in scene.settings.machine][:4]
    return ", ".join(names[:-1]) + f" and {names[-1]}" if len(names) > 1 else "".join(names) or "every machine"


def _starts(scene: Scene) -> str:
    starts, at = scene.view.memory.life.starts, scene.view.at
    return f"{sum(at - s < 600 for s in starts)} starts in 10 min, {sum(at - s < 3600 for s in starts)} in an hour"


def _sure(scene: Scene) -> str:
    figure = scene.view.figures.get(scene.item.subject.figure) if scene.item.subject.figure else None
    return "" if figure is None or not figure.is_known else _KNOWN.get(figure.known, "")


def _sure_from(scene: Scene) -> str:
    """On what the circuit's judgement rests."""
    figure = scene.view.figures.get(scene.item.subject.figure) if scene.item.subject.figure else None
    if figure is None or not figure.is_known:
        return ""
    return "from currents and the learned circuit" if figure.known == "learned" else "from currents and the plate"


def _capacitor(scene: Scene) -> str:
    """The capacitor's name as it is written in the settings."""
    names = {capacitor.name.lower(): capacitor.name for capacitor in scene.settings.capacitor}
    return names.get(scene.alarm.subject, scene.alarm.subject)


def _usual_legs(scene: Scene) -> str:
    """What the generated legs would read at this load, where a circuit was learned."""
    found = [(leg, volts(scene.view.value(("leg", leg.lower(), "usual_voltage")))) for leg in LEGS]
    return ", ".join(f"{leg} {said}" for leg, said in found if said)


_WAYS: Final[Mapping[str, str]] = {"mqtt": "the broker", "influx": "the database"}


def _trouble(scene: Scene) -> str:
    text = scene.view.memory.troubles.get(scene.alarm.subject, "")
    return text if len(text) <= 90 else text[:89] + "…"


def _machine_at(scene: Scene) -> str:
    """When a machine last ran, where that is known."""
    ago = scene.view.at - scene.view.memory.life.machines_at
    return "" if math.isnan(ago) else _clock(scene, scene.view.assessment.utc - ago)


FIELDS: Final[Mapping[str, Callable[[Scene], str]]] = {
    "thing": _thing,
    "value": _value,
    "limit": lambda scene: _said(scene, scene.alarm.setpoint),
    "usual": lambda scene: _said(scene, scene.alarm.usual),
    "now": _now,
    "since": _since,
    "lasted": _lasted,
    "please": _please,
    "legs": _legs,
    "amperes": _amperes,
    "supply_volts": _supply_volts,
    "supply_amperes": _figure(("supply", "supply", "current"), " A"),
    "supply_kw": _figure(("supply", "supply", "active_power"), " kW", 1e-3),
    "frequency": _figure(("supply", "supply", "frequency"), " Hz"),
    "breaker": lambda scene: f"{scene.settings.supply.breaker_amperes or 0:.0f} A",
    "earth": _earth_volts,
    "earth_before": _earth_before,
    "usual_start": _usual_start,
    "machines": _machines,
    "machine_at": _machine_at,
    "starts": _starts,
    "sure": _sure,
    "sure_from": _sure_from,
    "odds": lambda scene: f"{100.0 * min(scene.value, MOST_SURE):.1f} %",
    "left": lambda scene: "is gone" if scene.value < LEAST_LEFT else f"takes {percent(scene.value)} of its current",
    "bank": lambda scene: scene.alarm.subject.capitalize(),
    "capacitor": _capacitor,
    "usual_legs": _usual_legs,
    "trouble": _trouble,
    "way": lambda scene: _WAYS.get(scene.alarm.subject, scene.alarm.subject),
    "closing": lambda scene: (scene.settings.people.working_hours or "").rpartition("-")[2],
}
