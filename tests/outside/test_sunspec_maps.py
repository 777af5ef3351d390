"""The shipped SunSpec maps against the model definitions inside the pysunspec2 package (seen)."""

import json
from importlib.resources import files

import pytest

from fakes.modbus import shipped_map
from idlerwatch.core.polling import LineTiming, plan_meter
from idlerwatch.core.registers import figures

BASE = 40070
LETTERS = {1: "A", 2: "B", 3: "C"}
PAIRS = {4: "AB", 5: "BC", 6: "CA"}
STEMS = {"current": "A", "active_power": "W", "apparent_power": "VA", "reactive_power": "VAR", "power_factor": "PF"}
MODELS = [201, 202, 203, 204, 211, 212, 213, 214]
UNITS = {"A": 1.0, "V": 1.0, "W": 1.0, "VA": 1.0, "var": 1.0, "Hz": 1.0, "Wh": 3600.0, "Pct": 0.01, "PF": 1.0}
ENCODINGS = {"int16": "int16", "acc32": "uint32", "float32": "float32"}
ABSENT = {"int16": 0x8000, "acc32": 0, "float32": None}


def model(number):
    """Name -> (offset from the identifier, definition), and the registers of the whole."""
    text = files("sunspec2").joinpath(f"models/json/model_{number}.json").read_text(encoding="utf-8")
    offset, points = 0, {}
    for point in json.loads(text)["group"]["points"]:
        points[point["name"]] = (offset, point)
        offset += point["size"]
    return points, offset


def names(quantity, channel):
    """What the models call a quantity of a channel; line to line has two spellings."""
    if quantity == "voltage":
        return (
            {f"PhVph{LETTERS[channel]}"} if channel in LETTERS else {f"{p}{PAIRS[channel]}" for p in ("PPVph", "PhVph")}
        )
    if quantity == "frequency":
        return {"Hz"}
    if quantity == "active_energy_import":
        return {"TotWhImp"}
    stem = STEMS[quantity]
    return {stem} if channel == 0 else {f"{stem}ph{LETTERS[channel]}"}


@pytest.mark.parametrize("number", MODELS)
def test_every_point_stands_where_the_model_has_it(number):
    points, _ = model(number)
    for point in shipped_map(f"sunspec-{number}").points:
        (name,) = names(point.quantity, point.channel) & set(points)
        offset, definition = points[name]
        assert (point.table, point.address) == ("holding", BASE + offset)
        assert point.encoding == ENCODINGS[definition["type"]]
        assert point.absent == ABSENT[definition["type"]]
        assert point.scale == UNITS[definition["units"]]
        scale = definition.get("sf")
        assert point.scale_address == (None if scale is None else BASE + points[scale][0])


@pytest.mark.parametrize(("number", "registers"), [(n, 107 if n < 210 else 126) for n in MODELS])
def test_the_models_have_the_length_that_was_read(number, registers):
    assert model(number)[1] == registers


@pytest.mark.parametrize("number", MODELS)
@pytest.mark.parametrize("baudrate", [9600, 115200])
def test_no_request_asks_for_more_than_a_request_may(number, baudrate):
    plan = plan_meter(shipped_map(f"sunspec-{number}"), 0, LineTiming(baudrate))
    assert all(block.count <= 124 for block in (*plan.fast, *plan.slow))


def test_percent_becomes_a_ratio_in_the_integer_models_only():
    integer, real = shipped_map("sunspec-203"), shipped_map("sunspec-213")
    pf = [point for point in integer.points if point.key == (1, "power_factor")]
    registers = {("holding", pf[0].address): 85, ("holding", pf[0].scale_address): 0}
    assert figures(pf, registers)[0][1, "power_factor"] == pytest.approx(0.85, abs=1e-7)
    pf = [point for point in real.points if point.key == (1, "power_factor")]
    registers = {("holding", pf[0].address): 0x3F59, ("holding", pf[0].address + 1): 0x999A}  # 0.85
    assert figures(pf, registers)[0][1, "power_factor"] == pytest.approx(0.85, abs=1e-7)


@pytest.mark.parametrize("name", ["sunspec-203", "sunspec-213"])
def test_what_is_not_implemented_is_missing_with_that_reason(name):
    register_map = shipped_map(name)
    nan = {0: 0x7FC0, 1: 0x0000}
    registers = {}
    for point in register_map.points:
        for index in range(point.words):
            word = nan[index] if point.encoding == "float32" else (0x8000 if point.words == 1 else 0)
            registers[point.table, point.address + index] = word
        if point.scale_address is not None:
            registers[point.table, point.scale_address] = 0
    _, reasons = figures(register_map.points, registers)
    assert reasons == {point.key: "not implemented" for point in register_map.points}


def test_an_absent_scale_factor_makes_its_values_missing():
    volts = [point for point in shipped_map("sunspec-203").points if point.key == (1, "voltage")]
    registers = {("holding", volts[0].address): 2300, ("holding", volts[0].scale_address): 0x8000}
    assert figures(volts, registers)[1] == {(1, "voltage"): "not implemented"}


def test_energy_of_zero_cannot_be_told_from_none_and_is_missing():
    energy = [point for point in shipped_map("sunspec-203").points if point.quantity == "active_energy_import"]
    address, factor = energy[0].address, energy[0].scale_address
    zero = {("holding", address): 0, ("holding", address + 1): 0, ("holding", factor): 0}
    assert figures(energy, zero)[1] == {(0, "active_energy_import"): "not implemented"}
    assert figures(energy, {**zero, ("holding", address + 1): 1})[0] == {(0, "active_energy_import"): 3600.0}
