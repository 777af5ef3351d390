"""Register maps: what the shipped files hold, decoding and encoding, and faults of a map."""

import math
import struct
import tomllib
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fakes.modbus import MAPS, shipped_map
from idlerwatch.core.registers import Point, decode, encode, figures, image, read_register_map
from idlerwatch.core.settings.faults import SettingsError

NAMES = sorted(path.stem for path in Path(MAPS).glob("*.toml"))
WORD = st.integers(0, 0xFFFF)


def single(encoding="uint16", **more):
    return Point("voltage", 1, "input", 0, encoding, **more)


@pytest.mark.parametrize("name", NAMES)
def test_every_shipped_map_reads_back_what_it_encodes(name):
    register_map = shipped_map(name)
    wanted = {point.key: 1.0 for point in register_map.points}
    values, reasons = figures(register_map.points, image(register_map, wanted))
    is_coarse = {point.key: point.scale * 10.0**point.exponent for point in register_map.points}
    assert all(values[key] == pytest.approx(1.0, abs=is_coarse[key] / 2) for key in wanted if key not in reasons)
    assert set(reasons) <= {key for key in wanted if is_coarse[key] > 1.0}  # less than a count is nothing counted


@pytest.mark.parametrize("name", NAMES)
@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_any_registers_become_a_float32_or_a_reason(name, data):
    register_map = shipped_map(name)
    places = {(p.table, p.address + i) for p in register_map.points for i in range(p.words)}
    places |= {(p.table, p.scale_address) for p in register_map.points if p.scale_address is not None}
    registers = {place: data.draw(WORD) for place in sorted(places)}
    values, reasons = figures(register_map.points, registers)
    for point in register_map.points:
        value = values[point.key]
        assert math.isnan(value) == (point.key in reasons)
        if not math.isnan(value):
            assert point.plausible[0] <= value <= point.plausible[1]
            assert struct.unpack(">f", struct.pack(">f", value))[0] == value


def test_word_orders_are_told_apart():
    assert decode(single("uint32"), (1, 2)) == 65538.0
    assert decode(single("uint32", word_order="low first"), (1, 2)) == 131073.0


def test_signed_numbers_have_a_sign():
    assert decode(single("int16"), (0xFFFF,)) == -1.0
    assert decode(single("int16"), (0x7FFF,)) == 32767.0
    assert decode(single("int32"), (0xFFFF, 0xFFFE)) == -2.0
    assert decode(single("uint16"), (0xFFFF,)) == 65535.0


def test_plausible_bounds_belong_to_the_range():
    point = single(plausible=(0.0, 400.0))
    assert figures([point], {("input", 0): 400}) == ({(1, "voltage"): 400.0}, {})
    values, reasons = figures([point], {("input", 0): 401})
    assert math.isnan(values[1, "voltage"])
    assert reasons == {(1, "voltage"): "implausible"}


@pytest.mark.parametrize("word", [0x7F80, 0xFF80])
def test_an_infinite_float_is_implausible(word):
    assert figures([single("float32")], {("input", 0): word, ("input", 1): 0})[1] == {(1, "voltage"): "implausible"}


def test_what_was_not_read_is_not_answered():
    assert figures([single("float32")], {("input", 0): 1})[1] == {(1, "voltage"): "not answered"}


def test_a_scale_factor_is_a_signed_power_of_ten():
    point = single("int16", scale_address=5)
    assert figures([point], {("input", 0): 2305, ("input", 5): 0xFFFF})[0] == {(1, "voltage"): 230.5}
    assert figures([point], {("input", 0): 23, ("input", 5): 1})[0] == {(1, "voltage"): 230.0}


@pytest.mark.parametrize(("factor", "reason"), [(0xFFF6, ""), (0xFFF5, "not implemented"), (10, ""), (11, "x")])
def test_a_scale_factor_lies_within_ten(factor, reason):
    _, reasons = figures([single("int16", scale_address=5)], {("input", 0): 1, ("input", 5): factor})
    assert bool(reasons) == bool(reason)


def test_encoding_is_clamped_to_what_can_be_told():
    assert encode(single("int16"), 1e9) == (0x7FFF,)
    assert encode(single("uint16"), -5.0) == (0,)
    assert encode(single("int16", absent=0x8000), math.nan) == (0x8000,)


GOOD = {"title": "t", "quantity": [{"name": "voltage", "table": "input", "encoding": "int16", "addresses": {"1": 0}}]}


def faults_of(**changes):
    with pytest.raises(SettingsError) as caught:
        read_register_map("mine", {**GOOD, **changes})
    return [str(fault) for fault in caught.value.faults]


def quantity(**changes):
    return [{**GOOD["quantity"][0], **changes}]


def test_base_is_added_to_every_address():
    points = read_register_map("mine", {**GOOD, "base": 40070, "quantity": quantity(scale_address=3)}).points
    assert [(point.address, point.scale_address) for point in points] == [(40070, 40073)]


def test_all_faults_of_a_map_are_told_at_once_with_their_place():
    told = faults_of(base=-1, frob=3, quantity=quantity(encoding="int8"))
    assert len(told) == 3
    assert any("map mine: base is -1" in sentence for sentence in told)
    assert any("map mine: frob" in sentence for sentence in told)
    assert any("map mine: quantity.0.encoding is 'int8', must be" in sentence for sentence in told)


@pytest.mark.parametrize(
    "changes",
    [
        {"quantity": quantity(table="discrete")},
        {"quantity": quantity(plausible=[1.0, 1.0])},
        {"quantity": quantity() + quantity()},
        {"base": 65535, "quantity": quantity(encoding="int32")},
        {"largest_block": 126},
        {"largest_block": 1, "quantity": quantity(encoding="int32")},
        {"quantity": []},
    ],
)
def test_a_map_that_cannot_be_is_refused(changes):
    assert faults_of(**changes)


def test_edges_of_a_map_are_accepted():
    assert read_register_map("mine", {**GOOD, "largest_block": 125})
    assert read_register_map("mine", {**GOOD, "base": 65535})
    assert tomllib.loads("a = { 1 = 0 }") == {"a": {"1": 0}}
