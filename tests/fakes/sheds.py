"""Settings of two sheds and what their meters say, for tests of the chain without any wire.

`slipway` is fed L1-N at 230 V: a supply meter, three leg meters that live on their legs, a transducer N-PE, a bank
ammeter and a discrete input. `slipway_lines` has a three-phase meter that measures L-N and L-L instead. `split_phase`
is a 240 V line feed with a centre tap and the same kinds of meters across lines.
"""

import itertools
import math

from idlerwatch.core.conductors import Pair, read_pair
from idlerwatch.core.registers import Point, RegisterMap
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.values import CycleEnd, MeterSilent, Reading

QUANTITIES = ("voltage", "current", "active_power", "reactive_power", "apparent_power", "power_factor")


def register_map(name="full", channels=6, reactive="signed", line_voltages="measured", star="conductor"):
    points = [
        Point(quantity, channel, "input", 100 * channel + 2 * index, "float32")
        for channel in range(1, channels + 1)
        for index, quantity in enumerate(QUANTITIES)
    ]
    points.append(Point("frequency", 0, "input", 10, "float32"))
    points.append(Point("active_energy_import", 1, "input", 12, "float32", group="slow"))
    return RegisterMap(name, name, tuple(points), reactive, line_voltages, star)


INPUTS = RegisterMap(
    "inputs", "inputs", (Point("state", 1, "discrete", 0, "bit"), Point("state", 2, "discrete", 1, "bit"))
)


def meter(name, at, *channels, **other):
    other = {"powered_by": "own", "bus": "panel", "address": 1, "map": "full"} | other
    return {"name": name, "at": at, "channels": [dict(channel) for channel in channels], **other}


def channel(across=None, through=None):
    return {key: value for key, value in (("across", across), ("through", through)) if value}


MACHINES = (
    {"name": "resaw", "rated_kw": 5.5, "rated_current": 11.3},
    {"name": "planer", "rated_kw": 4.0, "rated_current": 8.4},
    {"name": "extractor", "rated_kw": 1.5, "rated_current": 3.4},
    {"name": "moulder", "rated_kw": 3.0, "rated_current": 6.3},
)


def build(supply, star_point, meters, **other):
    document = {
        "site": {"name": "slipway", "converter": "boatshed", "cycle_s": 1.0},
        "supply": supply,
        "idler": [{"rated_kw": 7.5, "rated_voltage": 400.0, "rated_current": 15.2, "star_point": star_point}],
        "bus": [{"name": "panel", "port": "socket://localhost:1"}],
        "meter": list(meters),
        "machine": list(MACHINES),
        "maps": {
            "full": register_map(),
            "inputs": INPUTS,
            "unsigned": register_map(reactive="unsigned"),
            "none": register_map(reactive="none"),
            "computed": register_map(line_voltages="computed"),
        },
    } | other
    return Settings.model_validate(document)


L1_N = {"feed": "L1-N", "voltage": 230.0, "breaker_amperes": 40}
SPLIT = {"feed": "L1-L2", "voltage": 240.0, "frequency": 60.0, "neutral": "centre-tap", "breaker_amperes": 60}

SUPPLY_METER = meter("supply", "supply", channel("L1-N", "L1"))
LEG_METERS = tuple(
    meter(f"leg-{leg[1]}", "leg", channel(f"{leg}-N", leg), powered_by=f"{leg}-N", boot_s=2.0)
    for leg in ("L1", "L2", "L3")
)
EARTH = meter("earth", "earth", channel("N-PE"), input_megohm=1.0)
BANK_METER = meter("bank", "bank:run", channel(None, "L3"))
THREE_PHASE = meter(
    "legs",
    "leg",
    channel("L1-N", "L1"),
    channel("L2-N", "L2"),
    channel("L3-N", "L3"),
    channel("L1-L2"),
    channel("L2-L3"),
    channel("L3-L1"),
)
RUN_BANK = {
    "bank": [{"name": "run", "closed_when": ["running"]}],
    "capacitor": [{"name": "C1", "between": "L3-L1", "microfarads": 40.0, "bank": "run"}],
}


def slipway(*more, **other):
    """Supply meter, three self-powered leg meters, earth transducer, bank ammeter: wiring level 2s and some of 3."""
    return build(L1_N, "N", (SUPPLY_METER, *LEG_METERS, EARTH, BANK_METER, *more), **(RUN_BANK | other))


def slipway_lines(*more, **other):
    """Supply meter, a three-phase meter with L-N and L-L, earth transducer: wiring level 2."""
    return build(L1_N, "N", (SUPPLY_METER, THREE_PHASE, EARTH, *more), **(RUN_BANK | other))


SPLIT_SUPPLY = meter("supply", "supply", channel("L1-N", "L1"), channel("L2-N", "L2"))
SPLIT_LINES = meter(
    "lines", "leg", channel("L3-L1", "L1"), channel("L2-L3", "L2"), channel("L1-L2"), channel(None, "L3")
)


def split_phase(*more, **other):
    """A 240 V split-phase line feed: supply meter on both hot legs, one meter across the lines as two wattmeters."""
    return build(SPLIT, "floating", (SPLIT_SUPPLY, SPLIT_LINES, *more), **other)


# --------------------------------------------------------------------------
# What meters say
# --------------------------------------------------------------------------


def said(voltage=math.nan, current=math.nan, power=math.nan, reactive=math.nan, number=1):
    """One channel's values; apparent power and power factor are left to the chain."""
    values = {"voltage": voltage, "current": current, "active_power": power, "reactive_power": reactive}
    return {(number, quantity): value for quantity, value in values.items() if not math.isnan(value)}


def supply_says(voltage=230.0, current=11.7, power=600.0, reactive=1800.0, frequency=50.0):
    return said(voltage, current, power, reactive) | {(0, "frequency"): frequency}


def running(**changed):
    """The slipway's meters while the converter idles; a meter set to a text is silent for that reason."""
    return {
        "supply": supply_says(),
        "leg-1": said(230.0, 0.0, 0.0, 0.0),
        "leg-2": said(226.0, 0.0, 0.0, 0.0),
        "leg-3": said(234.0, 0.0, 0.0, 0.0),
        "earth": said(1.5),
        "bank": said(current=5.0),
    } | {name.replace("_", "-"): values for name, values in changed.items()}


def stopped(**changed):
    return {
        "supply": supply_says(current=0.0, power=0.0, reactive=0.0),
        "leg-1": said(230.0, 0.0, 0.0, 0.0),
        "leg-2": "no answer",
        "leg-3": "no answer",
        "earth": said(0.5),
        "bank": said(current=0.0),
    } | {name.replace("_", "-"): values for name, values in changed.items()}


def cycle(at, meters, utc_offset=1_700_000_000.0):
    """The inputs of one cycle that ends at `at`: every meter read or given up at that instant."""
    for name, values in meters.items():
        yield MeterSilent(name, at, values) if isinstance(values, str) else Reading(name, at, values)
    yield CycleEnd(at, utc_offset)


def cycles(*stretches, start=0.0, step=1.0):
    """The inputs of many cycles; each stretch is a pair (how many, meters)."""
    at = start
    for count, meters in stretches:
        for _ in range(count):
            yield from cycle(at, meters)
            at += step


def pair(text) -> Pair:
    return read_pair(text)


def names(settings):
    return tuple(itertools.chain(each.name for each in settings.meter))


def numbered(*channels):
    """The values of several channels of one meter."""
    return {
        key: value for number, values in enumerate(channels, 1) for key, value in said(**values, number=number).items()
    }


def numbered_lines(third_first=240.0, second_third=240.0, first_second=240.0, current=0.0):
    """What the split-phase shed's line meter says: L3-L1, L2-L3, L1-L2, and the current of each leg."""
    return numbered(
        {"voltage": third_first, "current": current, "power": 0.0, "reactive": 0.0},
        {"voltage": second_third, "current": current, "power": 0.0, "reactive": 0.0},
        {"voltage": first_second},
        {"current": current},
    )


def split_running(current=12.0):
    """The split-phase shed's meters while the converter idles."""
    half = {"voltage": 120.0, "current": current, "power": 25.0 * current, "reactive": 100.0 * current}
    return {"supply": numbered(half, half) | {(0, "frequency"): 60.0}, "lines": numbered_lines()}


SURGE = supply_says(voltage=212.0, current=110.0, power=9000.0, reactive=21000.0)
"""The supply's meter in a start across the line."""
