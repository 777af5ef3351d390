"""What an installation is told it can and cannot see."""

import copy
import tomllib

import pytest

from idlerwatch.core.settings.advice import advise, wiring_level
from idlerwatch.core.settings.read import read_settings
from idlerwatch.edges.files import config_directory

FOLDER = config_directory()
MAPS = {path.stem: tomllib.loads(path.read_text()) for path in (FOLDER / "meters").glob("*.toml")}
LIST = tomllib.loads((FOLDER / "alarms.toml").read_text())
EXAMPLE = tomllib.loads((FOLDER / "example.toml").read_text())
THREE_PHASE = {
    "name": "legs", "bus": "panel", "address": 40, "map": "sunspec-213", "at": "leg", "powered_by": "own",
}  # fmt: skip


def across(*pairs):
    return THREE_PHASE | {"channels": [{"across": pair} for pair in pairs]}


def settings(*names, more=(), **changes):
    """The example with only the meters named, and others beside them."""
    document = copy.deepcopy(EXAMPLE)
    document["meter"] = [meter for meter in document["meter"] if meter["name"] in names] + list(more)
    document.update(changes)
    return read_settings(document, MAPS, LIST)


def told(given):
    return " ".join(advise(given))


SIX = ("L1-N", "L2-N", "L3-N", "L1-L2", "L2-L3", "L3-L1")


@pytest.mark.parametrize(
    ("given", "level"),
    [
        (settings("supply"), "1"),
        (settings("earth"), "0"),
        (settings("supply", "earth", "bank"), "1"),
        (settings("supply", "leg1", "leg2", "leg3"), "2s"),
        (settings("supply", more=[across(*SIX)]), "2"),
        (settings("supply", "leg1", "leg2", "leg3", "earth"), "3"),
    ],
)
def test_the_wiring_level_is_that_of_the_readme(given, level):
    assert wiring_level(given) == level


@pytest.mark.parametrize(
    ("pairs", "sees"),
    [
        (("L1-L2", "L2-L3", "L3-L1"), True),
        (SIX[:5], True),  # two lines and three legs to neutral are rigid too
        (SIX[:3], False),
        (("L1-N", "L2-N", "L3-N", "L1-L2"), False),
    ],
)
def test_angles_are_seen_where_the_voltages_make_a_rigid_figure(pairs, sees):
    given = settings("supply", more=[across(*pairs)])
    assert ("Unbalance is measured" in told(given)) is sees
    assert ("Angles between the legs are not seen" in told(given)) is not sees


def test_without_a_supply_meter_silence_is_blind():
    assert "No meter stands at the supply" in told(settings("leg1", "leg2", "leg3"))
    assert "No meter stands at the supply" not in told(settings("supply", "leg1"))


def test_a_cycle_that_the_bus_cannot_keep_is_told():
    slow = settings("supply", "leg1", "leg2", "leg3", bus=[{"name": "panel", "port": "x", "baudrate": 1200}])
    assert "The bus panel needs" in told(slow)
    assert "The bus panel needs" not in told(settings("supply", "leg1"))


def test_a_loosened_touch_limit_gets_its_sentence():
    loose = settings("supply", "earth", alarms={"neutral-earth-dangerous": {"setpoint": 60.0}})
    assert "neutral-earth-dangerous is set to 60 V: above 50 V" in told(loose)
    assert "above 50 V" not in told(settings("supply", "earth"))


def test_a_high_alarm_that_is_off_gets_its_sentence():
    off = settings("supply", alarms={"supply-very-low": {"enabled": False}})
    assert "The high alarm supply-very-low is switched off" in told(off)
