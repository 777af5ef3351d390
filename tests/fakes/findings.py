"""Assessments, alarms and readings of the slipway shed, for tests of what goes out."""

import math
from dataclasses import replace

import numpy as np

from idlerwatch.core.values import (
    AlarmEvent,
    Assessment,
    CycleEnd,
    Figure,
    MeterSilent,
    Reading,
    StandingAlarm,
    WindowRow,
)

UTC = 1796104800.0  # 2026-12-01 06:00:00


def single(value: float) -> float:
    return float(np.float32(value))


def alarm(tag: str = "leg-low", subject: str = "l2", state: str = "unacknowledged", **changes) -> StandingAlarm:
    given = StandingAlarm(
        tag=tag,
        subject=subject,
        occurrence=f"{tag}/{subject}/2026-12-01T06:00:00.000Z",
        state=state,
        priority="medium",
        raised_at=UTC,
        value=0.86,
        uncertainty=0.005,
        usual=math.nan,
        setpoint=0.9,
        unit="1",
        text="TODAY: lighter cuts on the planer. L2 is low: 198 V for 60 s (limit 207, usual 221).",
        cause="the load is more than the idler can carry",
        advice="Start the resaw first, then the planer.",
    )
    return replace(given, **changes)


def event(n: int = 1, *, is_told: bool = True, previous: str = "normal", of: StandingAlarm | None = None) -> AlarmEvent:
    standing = of or alarm()
    return AlarmEvent(f"{standing.occurrence}/{n}", 5000.0 + n, UTC + n, previous, standing, is_told)


def figures() -> dict[tuple[str, str, str], Figure]:
    found = {}
    for leg, (voltage, current, watts, factor) in {
        "l1": (231.4, 9.1, 1450.0, 0.69),
        "l2": (198.2, 8.2, 840.0, 0.52),
        "l3": (219.9, 8.6, 1610.0, 0.85),
    }.items():
        found["leg", leg, "voltage"] = Figure(voltage, 1.2, "measured")
        found["leg", leg, "voltage_ratio"] = Figure(voltage / 230.0, 0.005, "measured")
        found["leg", leg, "current"] = Figure(current, 0.1, "measured")
        found["leg", leg, "active_power"] = Figure(watts, 20.0, "measured")
        found["leg", leg, "power_factor"] = Figure(factor, math.nan, "computed")
    for pair, voltage in {"l1-l2": 372.0, "l2-l3": 361.0, "l3-l1": 391.0}.items():
        found["line", pair, "voltage"] = Figure(voltage, 2.0, "mapped")
    found["converter", "converter", "voltage_unbalance_factor"] = Figure(0.0453, 0.004, "mapped")
    found["converter", "converter", "current_unbalance_rate"] = Figure(0.12, math.nan, "computed")
    found["converter", "converter", "active_power"] = Figure(3900.0, 40.0, "computed")
    found["converter", "converter", "derating_factor"] = Figure(0.84, math.nan, "computed")
    found["supply", "supply", "voltage"] = Figure(231.4, 1.2, "measured")
    found["supply", "supply", "current"] = Figure(23.4, 0.2, "measured")
    found["supply", "supply", "active_power"] = Figure(4520.0, 45.0, "measured")
    found["supply", "supply", "power_factor"] = Figure(0.83, math.nan, "measured")
    found["supply", "supply", "frequency"] = Figure(50.02, math.nan, "measured")
    found["supply", "supply", "idle_loss"] = Figure(620.0, 60.0, "computed")
    found["bank", "run", "current"] = Figure(5.0, 0.1, "measured")
    found["earthing", "converter", "neutral_earth_voltage"] = Figure()
    return found


def assessment(at: float = 5000.0, **changes) -> Assessment:
    given = Assessment(
        at=at,
        utc=UTC + at - 5000.0,
        local_offset=3600.0,
        settings=1,
        state="running",
        state_since=at - 754.0,
        loading="loaded",
        lamp="look",
        angles="measured",
        figures=figures(),
        meters={"supply": "answering", "leg-1": "answering", "leg-2": "answering", "earth": "no answer"},
        remarks=("the neutral-earth transducer does not answer",),
        alarms=(alarm(),),
    )
    return replace(given, **changes)


def row(n: int = 0, subject: str = "l2", **fields: float) -> WindowRow:
    values = fields or {"voltage": 230.25, "voltage_min": 229.5, "voltage_max": 231.0, "count": 10.0, "flagged": 0.0}
    return WindowRow("10s", UTC + 10.0 * n, "leg", subject, values)


def cycle(n: int) -> tuple[tuple[Reading | MeterSilent, ...], CycleEnd]:
    """Return what two meters and a silent one said in the n-th cycle; the energy comes every fourth time."""
    at = 5000.0 + n
    values = {(1, "voltage"): single(230.1 + 0.1 * n), (1, "current"): single(8.0 / (n + 1)), (0, "frequency"): 50.0}
    if n % 4 == 0:
        values[1, "active_energy_import"] = single(3.6e9 + 1000.0 * n)
    second = {(1, "voltage"): single(398.2), (2, "voltage"): math.nan}
    reasons = {(2, "voltage"): "implausible"}
    inputs = (
        Reading("supply", at + 0.1 + 1e-9 * n, values),
        MeterSilent("leg-2", at + 0.2, "no answer" if n % 3 else "booting"),
        Reading("leg-1", at + 1.0 / 3.0, second, reasons),
    )
    return inputs, CycleEnd(at + 0.7, UTC - 5000.0, 3600.0)
