import math

import pytest

from fakes.sheds import (
    L1_N,
    SUPPLY_METER,
    THREE_PHASE,
    build,
    channel,
    meter,
    register_map,
    slipway,
    slipway_lines,
    split_phase,
)
from idlerwatch.core.watch.compile import compile_plan


def test_currents_that_count_follow_from_the_nameplates():
    levels = compile_plan(slipway()).levels
    assert levels.full == pytest.approx(7500.0 / 230.0)
    assert levels.flow == pytest.approx(0.04 * 7500.0 / 230.0)
    assert levels.surge == pytest.approx(2.0 * 7500.0 / 230.0)
    assert levels.machine == pytest.approx(0.15 * 3.4)


def test_a_machine_without_a_rated_current_is_given_a_usual_one():
    # 3 kW at 400 V: about 6 A
    levels = compile_plan(slipway(machine=[{"name": "moulder", "rated_kw": 3.0}])).levels
    assert levels.machine == pytest.approx(0.15 * 6.0, rel=0.02)


def test_without_machines_a_tenth_of_the_idler_stands_for_the_smallest():
    assert compile_plan(slipway(machine=[])).levels.machine == pytest.approx(0.15 * 1.5, rel=0.02)


def test_voltages_of_supply_legs_and_earth_are_distances_and_those_behind_switches_are_not():
    settings = slipway_lines(
        meter("bank", "bank:run", channel("L3-L1", "L3")), meter("at-planer", "machine:planer", channel("L1-N", "L1"))
    )
    assert {each.meter for each in compile_plan(settings).distances} == {"supply", "legs", "earth"}


def test_an_artificial_star_point_is_no_neutral():
    maps = {"full": register_map(), "star": register_map(star="artificial")}
    settings = build(L1_N, "N", (SUPPLY_METER, THREE_PHASE | {"map": "star"}), maps=maps)
    pairs = {each.pair for each in compile_plan(settings).distances if each.meter == "legs"}
    assert pairs == {"L1-L2", "L2-L3", "L3-L1"}


def test_what_the_settings_alone_make_worth_saying_is_said():
    plan = compile_plan(build(L1_N, "N", (SUPPLY_METER, meter("leg-2", "leg", channel("L2-N", "L2"), map="none"))))
    assert plan.remarks == ("leg-2 gives no reactive power: reactive power of L2 is not told",)
    assert compile_plan(slipway()).remarks == ()


def test_meters_that_live_on_a_generated_leg_are_known():
    assert compile_plan(slipway()).on_generated == {"leg-2", "leg-3"}


def test_a_self_powered_meter_needs_seven_tenths_unless_the_settings_say_better():
    usable = meter("usable", "leg", channel("L2-N", "L2"), powered_by="L2-N", usable_from_volts=60.0)
    thresholds = compile_plan(slipway(usable)).thresholds
    assert thresholds["leg-3"] == ("L3-N", pytest.approx(161.0))
    assert thresholds["usable"] == ("L2-N", 60.0)
    assert "supply" not in thresholds


def test_two_wattmeters_are_found_by_their_common_leg():
    (pair,) = compile_plan(split_phase()).two_wattmeters
    assert (pair.first.through, pair.second.through) == ("L1", "L2")


def test_a_line_fed_converter_measured_all_round_is_judged_by_the_median():
    assert compile_plan(split_phase()).median == ("L1-L2", "L3-L1", "L2-L3")
    assert compile_plan(slipway_lines()).median is None


@pytest.mark.parametrize(("pair", "dead"), [("L2-N", 0.0), ("L1-L2", 1.0 / math.sqrt(3.0)), ("L2-L3", 0.0)])
def test_what_a_dead_leg_reads_on_an_l1_n_feed(pair, dead):
    # a dead leg rests on N: L1-L2 then reads 230 of 398 V
    plan = compile_plan(build(L1_N, "N", (SUPPLY_METER, meter("one", "leg", channel(pair)))))
    (height,) = plan.heights
    assert height.dead == pytest.approx(dead)


def test_the_third_leg_of_a_corner_earthed_feed_floats_to_half():
    settings = build(
        {"feed": "L1-L2", "voltage": 415.0, "neutral": "L1"}, "floating", (meter("one", "leg", channel("L3-N")),)
    )
    plan = compile_plan(settings)
    assert plan.heights[0].dead == pytest.approx(0.5)
    assert plan.neutral_earth_pair == "L1-PE"
