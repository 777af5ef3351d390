"""The alarms' thresholds, delays and states against published rules (``alarm_thresholds.toml``)."""

import tomllib
from pathlib import Path

import pytest

from idlerwatch.core.settings.model import Alarm
from idlerwatch.core.watch.conditions.timers import IDLE, Delays, advance, band_of
from idlerwatch.core.watch.lifecycle import follow

DATA = tomllib.loads(Path(__file__).with_name("alarm_thresholds.toml").read_text(encoding="utf-8"))


@pytest.mark.parametrize("case", DATA["case"], ids=lambda case: case["title"])
def test_values_a_second_apart_are_in_as_published(case):
    alarm = Alarm(tag="x", watches="x", priority="low", setpoint=case["setpoint"], deadband=case["deadband"])
    band = band_of(case["sense"], alarm, case["setpoint"])
    timer, found = IDLE, []
    for at, value in enumerate(case["values"]):
        timer = advance(timer, band.place(value), float(at), Delays(case.get("on_delay_s", 0.0), 0.0, 0.5))
        found.append(timer.is_in)
    assert found == case["is_in"]


@pytest.mark.parametrize("move", DATA["move"], ids=lambda move: f"{move['state']}, {move['finding']}")
def test_moves_of_the_alarm_standards(move):
    # ISA-18.2 / IEC 62682 state model: A to D seen in public code, shelving from memory
    assert follow(move["state"], move["finding"]) == move["next"]
