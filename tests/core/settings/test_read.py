"""Settings from mappings: all faults at once, each a sentence with its place."""

import copy
import math
import tomllib

import pytest

from idlerwatch.core.settings.faults import SettingsError
from idlerwatch.core.settings.read import read_settings
from idlerwatch.core.settings.refusals import find_no_way_out
from idlerwatch.edges.files import config_directory

FOLDER = config_directory()
MAPS = {path.stem: tomllib.loads(path.read_text()) for path in (FOLDER / "meters").glob("*.toml")}
LIST = tomllib.loads((FOLDER / "alarms.toml").read_text())
EXAMPLE = tomllib.loads((FOLDER / "example.toml").read_text())
SPLIT = {"feed": "L1-L2", "voltage": 240.0, "frequency": 60.0, "neutral": "centre-tap"}
SHORT_LIST = {
    "leg-low": {
        "watches": "leg-low", "setpoint": 0.9, "deadband": 0.02, "priority": "medium", "line": {"setpoint": 0.88},
    }
}  # fmt: skip


@pytest.fixture
def document():
    return copy.deepcopy(EXAMPLE)


def faults_of(document, alarm_list=LIST):
    with pytest.raises(SettingsError) as caught:
        read_settings(document, MAPS, alarm_list)
    return [str(fault) for fault in caught.value.faults]


def only_fault(document, alarm_list=LIST):
    (fault,) = faults_of(document, alarm_list)
    return fault


def meter(document, name):
    return next(entry for entry in document["meter"] if entry["name"] == name)


def line_fed(document):
    document["supply"] = dict(SPLIT)
    document["idler"][0]["star_point"] = "floating"
    return document


def test_example_is_without_fault_and_every_meter_has_its_map(document):
    settings = read_settings(document, MAPS, LIST)
    assert {entry.map for entry in settings.meter} == set(settings.maps)
    assert settings.meter[0].at == "supply"
    assert set(LIST) == {tag for tag, subject in settings.alarms if not subject}


def test_all_faults_are_told_at_once(document):
    document["supply"]["voltage"] = 0
    document["bus"][0]["stopbits"] = 3
    meter(document, "leg2")["adress"] = 5
    document["alarms"] = {"leg-low": {"deadband": -1}}
    places = [fault.split(" is ")[0] for fault in faults_of(document)]
    assert {"supply.voltage", "bus.panel.stopbits", "meter.leg2.adress", "alarms.leg-low.deadband"} <= set(places)


def test_negative_deadband_is_told_with_its_place(document):
    document["alarms"] = {"leg-low": {"deadband": -1}}
    assert only_fault(document) == "alarms.leg-low.deadband is -1, must not be negative"


def test_deadband_of_nothing_is_accepted(document):
    document["alarms"] = {"leg-low": {"deadband": 0}}
    assert read_settings(document, MAPS, LIST).alarms["leg-low", ""].deadband == 0


def test_unknown_key_suggests_the_nearest_known_one(document):
    meter(document, "leg2")["adress"] = 5
    assert only_fault(document) == "meter.leg2.adress is an unknown key, did you mean address?"


def test_unknown_table_suggests_the_nearest_known_one(document):
    document["suply"] = {}
    assert only_fault(document) == "suply is an unknown key, did you mean supply?"


def test_unknown_map_lists_those_that_are_there(document):
    meter(document, "leg2")["map"] = "foo"
    fault = only_fault(document)
    assert fault.startswith("meter.leg2.map is 'foo', must be")
    assert "din-float32" in fault


def test_missing_key_is_told_as_missing(document):
    del document["supply"]["feed"]
    assert only_fault(document) == "supply.feed is missing, must be given"


@pytest.mark.parametrize(
    ("change", "place"),
    [
        (lambda d: meter(d, "leg1").update(bus="attic"), "meter.leg1.bus"),
        (lambda d: meter(d, "leg1").update(address=12), "meter.leg1.address"),
        (lambda d: meter(d, "leg1").update(at="bank:start"), "meter.leg1.at"),
        (lambda d: meter(d, "leg1").update(channels=[{}]), "meter.leg1.channels.1"),
        (lambda d: meter(d, "leg1").update(channels=[{"through": "L1"}, {"through": "L2"}]), "meter.leg1.channels"),
        (lambda d: d["capacitor"][0].update(bank="start"), "capacitor.C1.bank"),
        (lambda d: d["capacitor"][0].update(between="L1-PE"), "capacitor.C1.between"),
        (lambda d: d["machine"][1].update(name="resaw"), "machine.resaw.name"),
        (lambda d: d["start"].pop("between"), "start.between"),
        (lambda d: d["people"].update(working_hours="07:30-24:00"), "people.working_hours"),
        (lambda d: d["idler"][0].update(star_point="floating"), "idler.idler.star_point"),
        (lambda d: d["supply"].update(neutral="none"), "supply.neutral"),
        (lambda d: d.update(contact=[{"meter": "io", "input": 1, "means": "sequence right"}]), "contact.1.meter"),
        (lambda d: d.update(alarms={"leg-low": {"l4": {"setpoint": 0.8}}}), "alarms.leg-low.l4"),
        (lambda d: d.update(alarms={"leg-lw": {"setpoint": 0.8}}), "alarms.leg-lw"),
    ],
)
def test_what_does_not_fit_together_is_refused_at_its_place(document, change, place):
    change(document)
    assert place in [fault.split(" is ")[0] for fault in faults_of(document)]


def test_line_feed_with_the_star_point_on_n_is_refused(document):
    line_fed(document)["idler"][0]["star_point"] = "N"
    assert any(fault.startswith("idler.idler.star_point") for fault in faults_of(document))


def test_line_feed_without_neutral_refuses_every_channel_to_n(document):
    line_fed(document)["supply"]["neutral"] = "none"
    places = {fault.split(" is ")[0] for fault in faults_of(document)}
    assert {f"meter.leg{leg}.channels.1.across" for leg in (1, 2, 3)} <= places


def test_autotransformer_must_name_the_leg_that_is_neutral(document):
    line_fed(document)["supply"].update(source="autotransformer", neutral="none")
    assert any(fault.startswith("supply.neutral is 'none'") for fault in faults_of(document))


@pytest.mark.parametrize("power", ["N-PE", None])
def test_transducer_is_refused_when_it_lives_on_what_it_measures(document, power):
    """A supply current in the protective conductor trips a residual-current device."""
    earth = meter(document, "earth")
    earth.pop("powered_by")
    if power:
        earth["powered_by"] = power
    assert only_fault(document).startswith("meter.earth.powered_by is ")


@pytest.mark.parametrize(("megohm", "is_refused"), [(0.99, True), (1.0, False), (None, True)])
def test_transducer_needs_a_megohm_and_must_state_it(document, megohm, is_refused):
    earth = meter(document, "earth")
    earth.pop("input_megohm")
    if megohm is not None:
        earth["input_megohm"] = megohm
    if is_refused:
        assert only_fault(document).startswith("meter.earth.input_megohm is ")
    else:
        read_settings(document, MAPS, LIST)


def test_alarm_takes_the_variant_of_its_feed(document):
    on_phase = read_settings(document, MAPS, SHORT_LIST)
    on_lines = read_settings(line_fed(document), MAPS, SHORT_LIST)
    assert on_phase.alarms["leg-low", ""].setpoint == pytest.approx(0.9)
    assert on_lines.alarms["leg-low", ""].setpoint == pytest.approx(0.88)


def test_subject_is_overridden_on_top_of_its_tag(document):
    document["alarms"] = {"leg-low": {"setpoint": 0.92, "l3": {"on_delay_s": 120}}}
    alarms = read_settings(document, MAPS, SHORT_LIST).alarms
    assert (alarms["leg-low", ""].setpoint, alarms["leg-low", ""].on_delay_s) == (0.92, 0.0)
    assert (alarms["leg-low", "l3"].setpoint, alarms["leg-low", "l3"].on_delay_s) == (0.92, 120.0)


def test_nothing_but_a_terminal_is_no_way_out(document):
    assert find_no_way_out(read_settings(document, MAPS, LIST)) == []
    for table in ("mqtt", "influx", "journal"):
        del document[table]
    assert len(find_no_way_out(read_settings(document, MAPS, LIST))) == 1


@pytest.mark.parametrize("value", [math.nan, math.inf])
@pytest.mark.parametrize(
    ("table", "key"), [("site", "cycle_s"), ("supply", "voltage"), ("supply", "breaker_amperes"), ("mqtt", "port")]
)
def test_what_is_no_finite_number_is_refused(document, table, key, value):
    document[table][key] = value
    assert f"{table}.{key}" in [fault.split(" is ")[0] for fault in faults_of(document)]


def test_what_a_word_must_look_like_is_said_in_words(document):
    document["site"]["name"] = "My Shed"
    assert only_fault(document) == "site.name is 'My Shed', must be lower-case letters, digits and hyphens"
