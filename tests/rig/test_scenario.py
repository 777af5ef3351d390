"""Scenarios: every fault is one sentence, and what can happen does happen."""

import tomllib
from importlib.resources import files

import numpy as np
import pytest

from idlerwatch.core.settings.faults import SettingsError
from idlerwatch.edges.files import config_directory, load_settings
from idlerwatch.rig.build import build_plant
from idlerwatch.rig.plant import no_faults, no_orders
from idlerwatch.rig.scenario import ACTIONS, Course, Event, play, read_scenario

SHED = load_settings(config_directory() / "example.toml")
UNDOES = {
    "stop converter": "start converter",
    "stop machine": "start machine",
    "open bank by hand": "close bank by hand",
    "restore supply": "sag supply",
    "return supply": "cut supply",
    "restore neutral": "lift neutral",
    "restore idler lead": "open idler lead",
    "restore leg": "open leg",
    "restore leg at machine": "open leg at machine",
    "free bank": "weld bank",
    "restore bank coil": "open bank coil",
    "calm bank": "chatter bank",
    "restore meter": "silence meter",
}
"""What puts things right, and what it puts right again."""
PLANT = build_plant(SHED)
METERS = ("supply", "leg1")
SHIPPED = sorted(p for p in (files("idlerwatch.rig") / "scenarios").iterdir() if p.name.endswith(".toml"))


def scenario(**event):
    return {"title": "test", "lasts_s": 10.0, "event": [{"at_s": 1.0, **event}]}


@pytest.mark.parametrize(
    ("document", "sentence"),
    [
        (scenario(do="dance"), "bad: event 1.do is 'dance', must be one of age capacitor,"),
        (scenario(do="start machine", what="lathe"), "bad: event 1.what is 'lathe', must be a machine: resaw, planer,"),
        (scenario(do="open leg", what="L4"), "bad: event 1.what is 'L4', must be a leg: L1, L2, L3"),
        (scenario(do="sag supply"), "bad: event 1.to is missing, must be given with 'sag supply'"),
        (scenario(do="silence meter", what="leg9"), "bad: event 1.what is 'leg9', must be a meter: supply, leg1"),
        ({"title": "test"}, "bad: lasts_s is missing, must be given"),
        ({"title": "test", "lasts_s": 0}, "bad: lasts_s is 0, must be greater than 0"),
        ({"title": "test", "lasts_s": 5, "evnt": []}, "bad: evnt is an unknown key, did you mean event?"),
    ],
)
def test_what_is_wrong_with_a_scenario_is_one_sentence(document, sentence):
    with pytest.raises(SettingsError) as caught:
        read_scenario("bad", document, PLANT, METERS)
    assert str(caught.value).startswith(sentence)
    assert len(caught.value.faults) == 1


def test_events_come_in_the_order_of_time():
    document = {"title": "test", "lasts_s": 9.0, "event": [
        {"at_s": 5.0, "do": "stop converter"}, {"at_s": 1.0, "do": "start converter"}]}  # fmt: skip
    assert [event.at_s for event in read_scenario("ok", document, PLANT).event] == [1.0, 5.0]


@pytest.mark.parametrize("do", sorted(ACTIONS))
def test_every_kind_of_event_changes_something_and_only_its_own_copy(do):
    course = Course(no_orders(PLANT), no_faults(PLANT))
    names = ACTIONS[do].names(PLANT)
    event = Event(
        at_s=0.0,
        do=do,
        what=names[0] if names else "leg1",
        to=0.5 if ACTIONS[do].needs_to or do == "restore supply" else None,
    )
    before = play(course, event.model_copy(update={"do": UNDOES[do]}), PLANT) if do in UNDOES else course
    untouched = repr(before)
    after = play(before, event, PLANT)
    assert repr(after) != untouched
    assert repr(before) == untouched
    if do in UNDOES:
        assert repr(after) == repr(course)


def test_a_lost_capacitor_is_none_and_an_aged_one_is_less():
    course = Course(no_orders(PLANT), no_faults(PLANT))
    lost = play(course, Event(at_s=0.0, do="lose capacitor", what="C2"), PLANT)
    assert lost.faults.capacitor_ratio.tolist() == [[1.0, 0.0]]
    aged = play(course, Event(at_s=0.0, do="age capacitor", what="C1", to=0.9), PLANT)
    assert np.allclose(aged.faults.capacitor_ratio, [[0.9, 1.0]])


@pytest.mark.parametrize("path", SHIPPED, ids=lambda path: path.name)
def test_every_shipped_scenario_can_be_played_in_the_shed_and_has_one_sentence_for_a_title(path):
    document = tomllib.loads(path.read_text(encoding="utf-8"))
    scenario = read_scenario(path.name, document, PLANT, [meter.name for meter in SHED.meter])
    assert scenario.title.endswith(".")
    assert max(event.at_s for event in scenario.event) < scenario.lasts_s
