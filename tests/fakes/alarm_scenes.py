"""Two sheds that measure everything the alarms can use, and assessments of them without any meter."""

import math
import tomllib
from dataclasses import dataclass, replace
from pathlib import Path

from fakes import sheds
from idlerwatch.core.settings.model import Alarm
from idlerwatch.core.values import Assessment, Figure
from idlerwatch.core.watch.alarms import begin_alarms, judge_alarms

CONFIG = Path(__file__).parents[2] / "config" / "alarms.toml"
LIST = tomllib.loads(CONFIG.read_text(encoding="utf-8"))
UTC = 1_780_000_000.0

STATES = {
    "S": ("stopped", ""),
    "A": ("starting", ""),
    "C": ("change-over", ""),
    "U": ("running", "unloaded"),
    "L": ("running", "loaded"),
    "M": ("running", "machine starting"),
    "D": ("run-down", ""),
    "B": ("blind", ""),
}


def alarm_list(is_line, **overrides):
    """The shipped list for a feed; `overrides` are by tag with underscores."""
    found = {}
    for tag, table in LIST.items():
        given = {key: value for key, value in table.items() if key != "line"}
        given |= table.get("line", {}) if is_line else {}
        found[tag, ""] = Alarm.model_validate({"tag": tag} | given | overrides.get(tag.replace("-", "_"), {}))
    return found


EXTRA = {
    "people": {"working_hours": "00:00-00:01"},
    "mqtt": {},
    "influx": {"url": "http://localhost:8086", "bucket": "converter"},
}


def _with_list(settings, **overrides):
    thermometer = sheds.register_map("thermometer", 1)
    point = replace(thermometer.points[0], quantity="temperature")
    maps = dict(settings.maps) | {"thermometer": replace(thermometer, points=(point,))}
    alarms = alarm_list(settings.supply.as_feed.is_line_feed, **overrides)
    return settings.model_copy(update={"alarms": alarms, "maps": maps})


THERMOMETERS = tuple(
    sheds.meter(f"{name}-heat", f"machine:{name}", address=20 + number, map="thermometer")
    for number, name in enumerate(("idler", "planer"))
)


def shed(**overrides):
    """The L1-N shed."""
    return _with_list(sheds.slipway_lines(*THERMOMETERS, **EXTRA), **overrides)


def house(**overrides):
    """The split-phase shed."""
    return _with_list(sheds.split_phase(sheds.EARTH, *THERMOMETERS, **EXTRA), **overrides)


def generator(**overrides):
    """The L1-N shed on a generator."""
    settings = shed(**overrides)
    return settings.model_copy(update={"supply": settings.supply.model_copy(update={"source": "generator"})})


SHEDS = {"L1-N": shed, "line": house}


def normal(settings):
    """Figures of a converter on which all is well."""
    feed = settings.supply.as_feed
    found = {("supply", "supply", name): value for name, value in SUPPLY.items()}
    found["supply", "supply", "voltage"] = feed.voltage
    found["supply", "supply", "frequency"] = settings.supply.frequency
    for leg in ("L1", "L2", "L3"):
        volts = feed.nominal_voltage(sheds.read_pair(f"{leg}-N"))
        values = {"voltage": volts, "voltage_ratio": 1.0, "current": 8.0, "active_power": 900.0}
        found |= {("leg", leg.lower(), name): value for name, value in values.items()}
        found["leg", leg.lower(), "apparent_power"] = 1500.0
    for pair in ("l1-l2", "l2-l3", "l3-l1"):
        found |= {("line", pair, "voltage_ratio"): 1.0, ("line", pair, "voltage"): feed.line_voltage}
    rates = ("voltage_unbalance_factor", "line_voltage_unbalance_rate", "current_unbalance_rate")
    found |= {("converter", "converter", name): 0.02 for name in rates}
    found["earthing", "converter", "neutral_earth_voltage"] = 2.0
    found |= {("machine", name, "temperature"): 310.0 for name in ("idler", "planer")}
    return found


SUPPLY = {
    "voltage_ratio": 1.0,
    "current": 11.7,
    "current_ratio": 0.3,
    "active_power": 1900.0,
    "reactive_power": 1000.0,
    "apparent_power": 2150.0,
    "power_factor": 0.3,
    "neutral_shift": 1.0,
}


def assessment(settings, at, letter="L", figures=(), *, meters=(), utc=UTC):
    """One sample: normal but for the figures and meters given."""
    state, loading = STATES[letter]
    values = normal(settings) | dict(figures)
    seen = {meter.name: "answering" for meter in settings.meter} | dict(meters)
    return Assessment(
        at=at,
        utc=utc + at,
        local_offset=7200.0,
        settings=1,
        state=state,
        state_since=0.0,
        loading=loading,
        lamp="fine",
        angles="measured",
        figures={key: Figure(value, 0.004, "measured") for key, value in values.items() if not math.isnan(value)},
        meters=seen,
        remarks=(),
    )


@dataclass
class Player:
    """Feeds samples a second apart and keeps what came out."""

    settings: object
    at: float = 0.0

    def __post_init__(self):
        self.state = begin_alarms(self.settings)
        self.events = []
        self.standing = ()
        self.lamp = None

    def play(self, seconds, letter="L", figures=(), *, meters=(), told=(), rows=()):
        """Feed so many samples; what is told comes with the first. Returns their events."""
        new = []
        for _ in range(round(seconds)):
            given = assessment(self.settings, self.at, letter, figures, meters=meters)
            self.state, events, self.standing, self.lamp = judge_alarms(self.state, given, told, rows)
            new += events
            told, rows = (), ()
            self.at += 1.0
        self.events += new
        return new

    def state_of(self, tag, subject=None):
        """The state of an alarm."""
        for alarm in self.standing:
            if alarm.tag == tag and subject in (None, alarm.subject):
                return alarm.state
        return "normal"


def of(events, tag):
    """The events of one alarm."""
    return [event for event in events if event.alarm.tag == tag]
