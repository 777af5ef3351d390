"""From settings to the converter's wiring: every feed, what counts as an equation, and what is lacking."""

import math

import pytest

from fakes.sheds import (
    L1_N,
    LEG_METERS,
    RUN_BANK,
    SPLIT,
    SUPPLY_METER,
    THREE_PHASE,
    build,
    channel,
    meter,
    slipway,
    slipway_lines,
    split_phase,
)
from idlerwatch.core.converter.circuit import Can, CurrentChannel
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.wiring import circuit_plan, lacks

TURN = 2.0 * math.pi / 3.0


def planned(settings):
    return circuit_plan(settings, compile_plan(settings))


def missing(settings):
    return lacks(settings, compile_plan(settings))


def test_l1_n_feed_is_measured_to_n_and_leaves_two_angles_free():
    own = planned(slipway())
    wiring = own.wiring
    assert (wiring.hub, wiring.tied, wiring.free) == (3, True, (1, 2))
    assert wiring.directions == pytest.approx((0.0, -TURN, TURN))
    assert wiring.generated == (CurrentChannel(1, (1, 3)), CurrentChannel(2, (2, 3)))
    assert (wiring.supply, wiring.outgoing) == ((CurrentChannel(0, (0, 3)),),) * 2
    assert [channel.meter for channel in own.channels] == ["leg-2", "leg-3", "leg-1", "supply"]
    assert len(wiring.ammeters) == 1
    assert wiring.rows == 2 * 3 + 1


def test_capacitors_are_ratios_to_the_idler_s_rated_admittance():
    """w C over rated current / leg voltage: 2 pi 50 * 40 uF / (15.2 A / 230 V) (by hand: 0.1902)."""
    settings = slipway(idler=[{"rated_kw": 7.5, "rated_voltage": 400.0, "rated_current": 15.2, "star_point": "N"}])
    (can,) = planned(settings).wiring.cans
    assert can == Can((2, 0), pytest.approx(0.19015, abs=1e-5), 0)


def test_other_rotation_and_another_fed_leg_keep_the_positive_sequence_in_order():
    settings = build(L1_N | {"rotation": "L1-L3-L2"}, "N", (SUPPLY_METER, *LEG_METERS), **RUN_BANK)
    own = planned(settings)
    assert own.order == ("L1", "L3", "L2")
    assert own.wiring.directions == pytest.approx((0.0, -TURN, TURN))
    assert [channel.meter for channel in own.channels[:2]] == ["leg-3", "leg-2"]
    assert own.wiring.cans[0].ends == (1, 0)
    second = build(L1_N | {"feed": "L2-N"}, "N", (meter("supply", "supply", channel("L2-N", "L2")), *LEG_METERS))
    wiring = planned(second).wiring
    assert wiring.free == (0, 2)
    assert wiring.directions == pytest.approx((0.0, -TURN, TURN))


def test_split_phase_measured_to_its_centre_tap_has_opposite_hot_legs_and_one_free_angle():
    settings = build(SPLIT, "floating", (meter("supply", "supply", channel("L1-L2", "L1")), *LEG_METERS))
    own = planned(settings)
    wiring = own.wiring
    assert (wiring.hub, wiring.tied, wiring.free) == (3, False, (2,))
    first, second, third = wiring.directions
    assert math.cos(first - second) == pytest.approx(-1.0)
    assert math.cos(first - third) == pytest.approx(0.0, abs=1e-12)
    assert wiring.generated == (CurrentChannel(2, (2, 3)),)
    assert wiring.supply == (CurrentChannel(0, (0, 1)),)


def test_lines_measured_to_a_leg_make_that_leg_the_hub():
    lines = meter("lines", "leg", channel("L1-L2"), channel("L2-L3", "L2"), channel("L3-L1", "L3"))
    settings = build(SPLIT | {"neutral": "none"}, "floating", (lines,))
    own = planned(settings)
    assert own.wiring.hub == 0
    assert own.rays == ("", "L1-L2", "L3-L1")
    assert own.lines == ("L2-L3",)
    assert own.wiring.generated == (CurrentChannel(2, (2, 0)),)


def test_line_voltages_that_are_measured_add_equations_and_computed_ones_do_not():
    assert planned(slipway_lines()).lines == ("L1-L2", "L2-L3", "L3-L1")
    computed = build(L1_N, "N", (SUPPLY_METER, THREE_PHASE | {"map": "computed"}))
    assert planned(computed).lines == ()


def test_unsigned_reactive_power_makes_its_sign_a_hypothesis():
    legs = tuple(leg | {"map": "unsigned"} for leg in LEG_METERS)
    assert planned(build(L1_N, "N", (SUPPLY_METER, *legs))).unsigned == (0, 1, 2)
    assert planned(slipway()).unsigned == ()


def test_drives_are_known_by_their_current():
    drive = {"name": "saw", "rated_kw": 3.0, "rated_current": 6.5, "starter": "drive"}
    assert planned(slipway(machine=[drive])).drive_current == pytest.approx(6.5)
    assert planned(slipway()).drive_current == 0.0


@pytest.mark.parametrize(
    ("meters", "reason"),
    [
        ((SUPPLY_METER,), "the voltages of all three legs to one conductor are not measured"),
        ((SUPPLY_METER, *LEG_METERS[:2]), "the voltages of all three legs to one conductor are not measured"),
        (
            (SUPPLY_METER, *(leg | {"channels": [channel(f"L{k}-N")]} for k, leg in enumerate(LEG_METERS, 1))),
            "the power of L2 and L3 is not measured",
        ),
    ],
)
def test_what_is_lacking_is_said(meters, reason):
    settings = build(L1_N, "N", meters)
    assert missing(settings) == reason
    assert planned(settings) is None


def test_capacitors_to_n_need_voltages_to_n():
    lines = meter("lines", "leg", channel("L1-L2"), channel("L2-L3", "L2"), channel("L3-L1", "L3"))
    can = {"name": "C1", "between": "L3-N", "microfarads": 20.0}
    settings = build(SPLIT, "floating", (lines,), capacitor=[can])
    assert missing(settings) == "there are capacitors to N, but no voltages to N"


def test_converter_and_arrangement_have_names_that_follow_the_settings():
    first = planned(slipway())
    assert planned(slipway()).converter == first.converter
    other = slipway(idler=[{"rated_kw": 5.5, "rated_voltage": 400.0, "star_point": "N"}])
    assert planned(other).converter != first.converter
    can = [{"name": "C1", "between": "L3-L1", "microfarads": 41.0, "bank": "run"}]
    changed = planned(slipway(capacitor=can))
    assert changed.converter == first.converter
    assert changed.arrangement != first.arrangement


def test_a_split_phase_shed_whose_third_leg_has_no_power_is_not_seen():
    assert missing(split_phase()) == "the power of L3 is not measured"
