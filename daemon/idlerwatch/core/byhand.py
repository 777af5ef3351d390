"""Readings typed by hand, or in a table, as an installation of virtual meters: the same chain assesses them.

A column's word says what was read: a pair such as ``L1-N``, ``L2-L3``, ``N-PE`` its voltage, a leg such as ``L1`` its
current, ``P_L1`` and ``Q_L1`` active and reactive power of a leg towards the machines. Each is a meter of its own.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Final

from idlerwatch.core.conductors import LEGS, read_pair
from idlerwatch.core.registers import as_float32
from idlerwatch.core.settings.faults import Fault, SettingsError
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.settings.read import read_settings
from idlerwatch.core.values import Assessment, FigureKey, Sample
from idlerwatch.core.watch.assess import assess
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.derive import derive
from idlerwatch.core.watch.estimate import estimate
from idlerwatch.core.watch.life import begin_life

WANTED: Final = "must be a pair (L1-N, L1-L2, N-PE), a leg (L1), or P_L1, Q_L1 for a leg's power"
_MAP: Final = "by-hand"
_QUANTITIES: Final = ("voltage", "current", "active_power", "reactive_power")
_MAPS: Final[Mapping[str, Any]] = {
    _MAP: {
        "title": "readings by hand",
        "quantity": [
            {"name": name, "table": "input", "encoding": "float32", "addresses": {"1": 2 * index}}
            for index, name in enumerate(_QUANTITIES)
        ],
    }
}


@dataclass(frozen=True, slots=True)
class Moment:
    """The readings of one moment: word -> value in volts, amperes, watts, var; `place` for sentences about it."""

    place: str
    readings: Mapping[str, float]


@dataclass(frozen=True, slots=True)
class Circumstances:
    """What is known besides: the feed, its voltage, what N is, and the class limit of the voltmeters."""

    feed: str = "L1-N"
    voltage: float = 230.0
    neutral: str = "supply"
    accuracy: float = 0.005


def read_word(word: str) -> str:
    """Return a column's word in its usual form. Raises ValueError with what was wanted.

    Examples
    --------
    >>> read_word("L1-L3"), read_word("p_l2"), read_word("L3")
    ('L3-L1', 'P_L2', 'L3')
    """
    upper = word.strip().upper()
    if upper in LEGS or (upper[:2] in ("P_", "Q_") and upper[2:] in LEGS):
        return upper
    try:
        return str(read_pair(upper))
    except ValueError as error:
        raise ValueError(f"{word!r} {WANTED}") from error


def assess_by_hand(moments: Sequence[Moment], circumstances: Circumstances) -> list[Assessment]:
    """Return the assessment of each moment.

    Raises
    ------
    SettingsError
        What was read does not go with the feed, or cannot be.
    """
    faults = [
        Fault(f"{moment.place}{word}", f"{value:g}", "must not be negative")
        for moment in moments
        for word, value in moment.readings.items()
        if value < 0.0 and word[:2] not in ("P_", "Q_")
    ]
    if faults:
        raise SettingsError(faults)
    words = tuple(dict.fromkeys(word for moment in moments for word in moment.readings))
    settings = _settings(words, circumstances)
    plan = compile_plan(settings)
    found = []
    for number, moment in enumerate(moments):
        sample = _sample(settings, moment, float(number))
        derived = derive(plan, sample)
        found.append(_in_the_readers_words(assess(plan, sample, derived, estimate(plan, derived), begin_life()), words))
    return found


def _in_the_readers_words(given: Assessment, words: Iterable[str]) -> Assessment:
    """Return the assessment with readings named by their words alone: there are no meters to a clamp and a pencil."""
    remarks = given.remarks
    for word in words:
        remarks = tuple(remark.replace(f"{_meter_name(word)}'s {word}", word) for remark in remarks)
    return replace(given, remarks=remarks)


def _settings(words: Iterable[str], circumstances: Circumstances) -> Settings:
    is_line_feed = "N" not in circumstances.feed.upper().split("-")
    accuracy = {"voltage": circumstances.accuracy, "current": circumstances.accuracy}
    document = {
        "site": {"name": "by-hand", "converter": "by-hand"},
        "supply": {"feed": circumstances.feed, "voltage": circumstances.voltage, "neutral": circumstances.neutral},
        "idler": [
            {"rated_kw": 1.0, "rated_voltage": 400.0, "star_point": "floating" if is_line_feed else "N"},
        ],
        "bus": [{"name": "paper", "port": "paper"}],
        "meter": [
            {"name": _meter_name(word), "bus": "paper", "address": number, "map": _MAP, "at": _place(word),
             "powered_by": "own", "input_megohm": 10.0, "accuracy": accuracy, "channels": [channel]}
            for number, (word, channel) in enumerate(_channels(words).items(), 1)
        ],
    }  # fmt: skip
    return read_settings(document, _MAPS, {})


def _meter_name(word: str) -> str:
    return word.lower()


def _place(word: str) -> str:
    return "earth" if "PE" in word else "leg"


def _channels(words: Iterable[str]) -> dict[str, dict[str, str]]:
    """Return meters by name: a voltmeter for each pair, and for each leg with a current or power one through it."""
    channels: dict[str, dict[str, str]] = {}
    given = tuple(words)
    for word in given:
        if "-" in word:
            channels[word] = {"across": word}
    for leg in LEGS:
        if {leg, f"P_{leg}", f"Q_{leg}"} & set(given):
            pair = f"{leg}-N"
            channel = channels.pop(pair, {})
            channels[pair if channel else leg] = {**channel, "through": leg}
    return channels


def _sample(settings: Settings, moment: Moment, at: float) -> Sample:
    values: dict[str, dict[FigureKey, float]] = {}
    for meter in settings.meter:
        channel = meter.channels[0]
        told: dict[FigureKey, float] = {}
        if channel.across is not None and str(channel.across) in moment.readings:
            told[1, "voltage"] = as_float32(moment.readings[str(channel.across)])
        for word, quantity in ((str(channel.through), "current"), (f"P_{channel.through}", "active_power"),
                               (f"Q_{channel.through}", "reactive_power")):  # fmt: skip
            if word in moment.readings:
                told[1, quantity] = as_float32(moment.readings[word])
        if told:
            values[meter.name] = told
    missing = {meter.name: "not read" for meter in settings.meter if meter.name not in values}
    return Sample(at, at, 0.0, values, missing)
