"""Virtual meters: what inexpensive meters make of the plant, read back through their registers."""

import math

import numpy as np
import pytest

from idlerwatch.core.registers import figures
from idlerwatch.core.settings.model import Contact
from idlerwatch.edges.files import config_directory, load_settings
from idlerwatch.rig.line import ModbusExceptionCode
from idlerwatch.rig.meters import VirtualMeter
from idlerwatch.rig.values import View

SHED = load_settings(config_directory() / "example.toml")
NAMES = {meter.name: meter for meter in SHED.meter}


def a_view(time=1.0, volts=(230.0, 225.0, 228.0), amperes=(5.0, 4.0, 6.0), lag=30.0, neutral=2.0, *, closed=True):
    """Legs 120 degrees apart to a neutral near earth, currents lagging each by as much."""
    turns = np.exp(-2j * np.pi * np.arange(3) / 3.0)
    points = np.array([[*(np.array(volts) * turns + neutral), neutral, 0.0]])
    flows = np.array(amperes) * turns * np.exp(-1j * math.radians(lag))
    currents = np.array([[*flows, -flows.sum()]])
    places = ("supply", "leg", "earth", "contacts", "bank:run")
    return View(
        time=time,
        supply_frequency=50.0,
        generated_frequency=np.array([1.0]),
        potentials=dict.fromkeys(places, points),
        currents=dict.fromkeys(places, currents),
        phase=np.array([3]),
        speed=np.array([1.0]),
        motor_speed=np.zeros((1, 0)),
        bank_closed=np.array([[closed]]),
        source_power=np.array([0j]),
    )


def virtual(name="leg2", map_name=None, contacts=(), **changes):
    settings = NAMES[name].model_copy(update=changes)
    register_map = SHED.maps[map_name or settings.map]
    return VirtualMeter(settings, register_map, contacts, np.random.default_rng(1), 0.02)


def told(meter):
    """Every figure of the meter, read as a master reads it: block by block through its registers."""
    registers = {}
    for point in meter.register_map.points:
        words = meter.read(point.table, point.address, point.words)
        assert isinstance(words, list)
        registers.update({(point.table, point.address + index): word for index, word in enumerate(words)})
    return figures(meter.register_map.points, registers)[0]


def test_a_meter_tells_what_is_there_within_its_class():
    meter = virtual()
    meter.feed(a_view())
    found = told(meter)
    assert found[1, "voltage"] == pytest.approx(225.0, rel=0.005)
    assert found[1, "current"] == pytest.approx(4.0, rel=0.005)
    assert found[1, "active_power"] == pytest.approx(225.0 * 4.0 * math.cos(math.radians(30.0)), rel=0.01)
    assert found[1, "reactive_power"] == pytest.approx(225.0 * 4.0 * 0.5, rel=0.02)
    assert found[1, "power_factor"] == pytest.approx(0.866, abs=0.02)
    assert found[0, "frequency"] == pytest.approx(50.0, abs=0.05)


def test_a_leading_current_has_negative_reactive_power_unless_the_meter_does_not_tell_signs():
    signed = virtual()
    signed.feed(a_view(lag=-30.0))
    assert told(signed)[1, "reactive_power"] < -400.0
    unsigned = virtual()
    unsigned.register_map = type(signed.register_map)(
        **{field: getattr(signed.register_map, field) for field in signed.register_map.__slots__}
        | {"reactive": "unsigned"}
    )
    unsigned.feed(a_view(lag=-30.0))
    assert told(unsigned)[1, "reactive_power"] > 400.0


def test_a_current_transformer_divides_the_current():
    meter = virtual(ratio=10.0)
    meter.feed(a_view())
    assert told(meter)[1, "current"] == pytest.approx(0.4, rel=0.005)


def test_a_meter_that_lives_on_its_leg_dies_with_it_and_boots_with_wrong_first_readings():
    meter = virtual()
    meter.feed(a_view(time=0.0))
    assert told(meter)[1, "voltage"] > 200.0
    meter.feed(a_view(time=1.0, volts=(230.0, 100.0, 228.0)))
    assert meter.read("input", 0, 2) is None
    boot_s = NAMES["leg2"].boot_s
    seen = []
    for step in range(round(50 * (boot_s + 1.0))):
        meter.feed(a_view(time=2.0 + 0.02 * step))
        words = meter.read("input", 0, 2)
        seen.append(None if words is None else round(told(meter)[1, "voltage"]))
    silent = seen.index(next(value for value in seen if value is not None))
    assert silent * 0.02 == pytest.approx(boot_s / 2.0, abs=0.35)
    assert seen[silent] == 0
    assert 100 < seen[round(50 * (boot_s - 0.2))] < 125
    assert seen[-1] in range(220, 231)


def test_a_meter_whose_supply_is_its_own_reads_next_to_nothing_on_a_dead_leg():
    meter = virtual(powered_by="own")
    meter.feed(a_view(volts=(230.0, 0.001, 228.0)))
    assert told(meter)[1, "voltage"] < 0.1
    assert told(meter)[0, "frequency"] == 0.0


def test_a_new_picture_comes_only_when_the_refresh_interval_is_over_and_averages_it():
    meter = virtual()
    meter.feed(a_view(time=0.0))
    for step in range(1, 15):
        meter.feed(a_view(time=0.02 * step, volts=(230.0, 300.0, 228.0)))
    assert told(meter)[1, "voltage"] == pytest.approx(225.0, rel=0.01)
    for step in range(15, 32):
        meter.feed(a_view(time=0.02 * step, volts=(230.0, 300.0, 228.0)))
    assert told(meter)[1, "voltage"] == pytest.approx(300.0, rel=0.01)


def test_the_transducer_tells_hundredths_of_a_volt_between_neutral_and_earth():
    meter = virtual("earth")
    meter.feed(a_view(neutral=2.345))
    found = told(meter)[1, "voltage"]
    assert found == pytest.approx(2.345, rel=0.01)
    assert round(100.0 * found) == pytest.approx(100.0 * found, abs=1e-4)


def test_contacts_say_where_the_bank_is():
    for closed in (True, False):
        contact = Contact(meter="io", input=1, means="bank run closed")
        meter = virtual("earth", contacts=(contact,))
        meter.feed(a_view(closed=closed))
        assert meter._figures(a_view(closed=closed), 0, 0.3)[1, "input"] == float(closed)


def test_a_table_that_the_meter_does_not_have_is_refused():
    meter = virtual()
    meter.feed(a_view())
    assert meter.read("holding", 0, 2) == ModbusExceptionCode(2)
