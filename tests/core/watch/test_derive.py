import math

import pytest

from fakes.sheds import (
    L1_N,
    SUPPLY_METER,
    build,
    channel,
    cycle,
    meter,
    running,
    said,
    slipway,
    slipway_lines,
    split_phase,
    supply_says,
)
from idlerwatch.core.watch.align import begin_align, step
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.derive import derive


def derived(settings, meters):
    plan = compile_plan(settings)
    state, sample = begin_align(plan.slow), None
    for event in cycle(1.0, meters):
        state, sample = step(state, event)
    return derive(plan, sample)


def numbered(*channels):
    return {
        key: value for number, values in enumerate(channels, 1) for key, value in said(**values, number=number).items()
    }


SPLIT_RUNNING = {
    "supply": numbered(
        {"voltage": 121.0, "current": 20.0, "power": 1500.0, "reactive": 1800.0},
        {"voltage": 119.0, "current": 19.0, "power": 1400.0, "reactive": 1700.0},
    ),
    "lines": numbered(
        {"voltage": 236.0, "current": 10.0, "power": 1200.0, "reactive": 900.0},
        {"voltage": 230.0, "current": 11.0, "power": 900.0, "reactive": 700.0},
        {"voltage": 240.0},
        {"current": 9.0},
    ),
}


def test_two_voltmeters_on_a_pair_are_combined_and_each_kept():
    # both of class 0.5: the plain mean
    each = derived(slipway(), running(supply=supply_says(voltage=232.0)))
    assert each.voltages["L1-N"].value == pytest.approx(231.0)
    assert each.distances[:2] == (232.0, 230.0)


def test_the_better_voltmeter_weighs_more():
    better = meter("better", "leg", channel("L1-N"), accuracy={"voltage": 0.0005})
    each = derived(
        build(L1_N, "N", (SUPPLY_METER, better)), {"supply": supply_says(voltage=232.0), "better": said(230.0)}
    )
    assert 230.0 < each.voltages["L1-N"].value < 230.05
    assert each.voltages["L1-N"].standard < 230.0 * 0.0005 / math.sqrt(3.0) + 230.0 * 0.0002


def test_a_ratio_multiplies_currents_and_powers_and_no_voltage():
    each = derived(
        build(L1_N, "N", (SUPPLY_METER | {"ratio": 20.0},)),
        {"supply": supply_says(current=0.6, power=30.0, reactive=90.0) | {(1, "active_energy_import"): 100.0}},
    )
    assert each.supply.voltage.value == 230.0
    assert each.supply.current.value == pytest.approx(12.0)
    assert each.supply.active.value == pytest.approx(600.0)
    assert each.supply.reactive.value == pytest.approx(1800.0)
    assert each.energy == pytest.approx(2000.0)


def test_power_factor_of_a_leg_is_active_over_apparent_power_with_its_sign():
    each = derived(slipway(), running(leg_2=said(230.0, 2.8, -79.0, 600.0)))
    assert each.legs["L2"].factor.value == pytest.approx(-79.0 / (230.0 * 2.8))


def test_power_factor_of_next_to_nothing_is_not_told():
    assert not derived(slipway(), running(leg_2=said(230.0, 0.02, 1.0, 1.0))).legs["L2"].factor.is_known
    assert derived(slipway(), running(leg_2=said(230.0, 0.03, 1.0, 1.0))).legs["L2"].factor.is_known


def test_a_negative_current_reading_is_a_magnitude():
    assert derived(slipway(), running(leg_2=said(230.0, -2.0, -100.0))).legs["L2"].current.value == 2.0


@pytest.mark.parametrize("kind", ["unsigned", "none"])
def test_reactive_power_without_a_sign_is_not_told_and_is_remarked(kind):
    settings = build(L1_N, "N", (SUPPLY_METER, meter("leg-2", "leg", channel("L2-N", "L2"), map=kind)))
    each = derived(settings, {"supply": supply_says(), "leg-2": said(230.0, 3.0, 400.0, 500.0)})
    assert not each.legs["L2"].reactive.is_known
    assert each.legs["L2"].apparent.value == pytest.approx(690.0)
    assert any("reactive" in remark and "L2" in remark for remark in compile_plan(settings).remarks)


def test_a_meter_across_two_legs_does_not_give_the_power_of_its_leg():
    each = derived(split_phase(), SPLIT_RUNNING)
    assert each.legs["L1"].current.value == 10.0
    assert not each.legs["L1"].active.is_known
    assert not each.legs["L1"].factor.is_known
    assert any("L1 alone" in remark for remark in compile_plan(split_phase()).remarks)


def test_two_wattmeters_with_a_common_leg_add_up_to_the_total():
    each = derived(split_phase(), SPLIT_RUNNING)
    assert each.total.active.value == pytest.approx(2100.0)
    assert each.total.reactive.value == pytest.approx(1600.0)


def test_three_line_channels_without_a_common_leg_give_no_total():
    lines = meter("lines", "leg", channel("L1-L2", "L1"), channel("L2-L3", "L2"), channel("L3-L1", "L3"))
    settings = build({"feed": "L1-L2", "voltage": 400.0, "neutral": "none"}, "floating", (lines,))
    power = {"voltage": 400.0, "current": 3.0, "power": 500.0, "reactive": 500.0}
    assert not derived(settings, {"lines": numbered(power, power, power)}).total.active.is_known


def test_the_total_is_the_sum_of_three_legs_and_missing_where_one_is():
    legs = {f"leg_{k}": said(230.0, 3.0, 100.0 * k, 10.0 * k) for k in (1, 2, 3)}
    each = derived(slipway(), running(**legs))
    assert (each.total.active.value, each.total.reactive.value) == (600.0, 60.0)
    assert not derived(slipway(), running(**legs | {"leg_3": "no answer"})).total.active.is_known


def test_both_hot_legs_of_a_split_phase_supply_add_up():
    each = derived(split_phase(), SPLIT_RUNNING)
    assert each.supply.active.value == pytest.approx(2900.0)
    assert each.supply.current.value == 20.0
    assert each.supply.apparent.value == pytest.approx(121.0 * 20.0 + 119.0 * 19.0)


def test_the_halves_of_a_centre_tapped_supply_add_up_where_nobody_measures_across():
    supply_only = SPLIT_RUNNING | {"lines": "no answer"}
    assert derived(split_phase(), supply_only).supply.voltage.value == pytest.approx(240.0)


def test_frequency_is_believed_from_a_fifth_of_the_voltage_on():
    assert not derived(slipway(), running(supply=supply_says(voltage=45.9))).frequency.is_known
    assert derived(slipway(), running(supply=supply_says(voltage=46.1))).frequency.value == 50.0


def test_a_line_voltage_that_the_meter_computes_is_no_measurement():
    computed = meter("legs", "leg", channel("L1-N", "L1"), channel("L1-L2"), map="computed")
    settings = build(L1_N, "N", (SUPPLY_METER, computed))
    each = derived(settings, {"supply": supply_says(), "legs": numbered({"voltage": 230.0}, {"voltage": 398.0})})
    assert "L1-L2" not in each.voltages


def test_a_bank_meters_voltage_is_not_the_converters():
    settings = build(L1_N, "N", (SUPPLY_METER, meter("bank", "bank:run", channel("L3-L1", "L3"))))
    each = derived(settings, {"supply": supply_says(), "bank": said(400.0, 5.0)})
    assert "L3-L1" not in each.voltages
    assert each.banks["run"].voltage.value == 400.0


def test_the_height_of_a_generated_leg_is_its_ratio_to_neutral():
    assert derived(slipway(), running(leg_2=said(115.0), leg_3="no answer")).generated == pytest.approx(0.5)


def test_one_lost_leg_does_not_lower_the_height():
    assert derived(slipway(), running(leg_2=said(0.0))).generated == pytest.approx(234.0 / 230.0)


@pytest.mark.parametrize(("lines", "height"), [((240.0, 240.0), 1.0), ((120.0, 120.0), 0.0)])
def test_a_dead_third_leg_floats_to_half_and_has_no_height(lines, height):
    first, second = lines
    said_lines = numbered({"voltage": first}, {"voltage": second}, {"voltage": 240.0})
    each = derived(split_phase(), SPLIT_RUNNING | {"lines": said_lines})
    assert each.generated == pytest.approx(height, abs=1e-9)


def test_height_from_one_line_voltage_alone_counts_from_where_a_dead_leg_floats():
    settings = build(
        {"feed": "L1-L2", "voltage": 240.0, "neutral": "none"},
        "floating",
        (meter("one", "leg", channel("L2-L3", "L2")),),
    )
    assert derived(settings, {"one": said(120.0)}).generated == pytest.approx(0.0)
    assert derived(settings, {"one": said(180.0)}).generated == pytest.approx(0.5)
    assert derived(settings, {"one": said(240.0)}).generated == pytest.approx(1.0)


def test_no_generated_leg_seen_is_no_height():
    assert math.isnan(derived(slipway(), running(leg_2="no answer", leg_3="no answer")).generated)


def test_a_meter_on_a_pair_that_others_see_dead_is_asleep():
    settings = slipway_lines(meter("leg-2", "leg", channel("L2-N", "L2"), powered_by="L2-N", usable_from_volts=160.0))
    dead = numbered({"voltage": 230.0}, {"voltage": 159.0}, {"voltage": 200.0})
    alive = numbered({"voltage": 230.0}, {"voltage": 161.0}, {"voltage": 200.0})
    silent = {"supply": supply_says(), "earth": said(1.0), "leg-2": "no answer"}
    assert derived(settings, silent | {"legs": dead}).meters["leg-2"] == "asleep"
    assert derived(settings, silent | {"legs": alive}).meters["leg-2"] == "no answer"


def test_with_the_supply_gone_every_meter_on_it_is_asleep():
    each = derived(slipway(), running(supply=supply_says(voltage=3.0), leg_1="no answer", leg_2="no answer"))
    assert each.meters["leg-1"] == "asleep"
    assert each.meters["supply"] == "answering"


def test_booting_stays_booting():
    assert derived(slipway(), running(leg_2="booting")).meters["leg-2"] == "booting"


def test_contacts_arrive_under_their_meaning():
    io = meter("io", "contacts", map="inputs")
    contacts = [{"meter": "io", "input": 2, "means": "bank run closed"}]
    each = derived(slipway(io, contact=contacts), running(io={(1, "state"): 0.0, (2, "state"): 1.0}))
    assert each.contacts == {"bank run closed": 1.0}


def test_a_machines_meter_speaks_of_that_machine_alone():
    at_planer = meter("at-planer", "machine:planer", *(channel(f"L{k}-N", f"L{k}") for k in (1, 2, 3)))
    each = derived(
        slipway(at_planer),
        running(
            at_planer=numbered(
                *({"voltage": 228.0, "current": 4.0 + k, "power": 500.0, "reactive": 500.0} for k in range(3))
            )
        ),
    )
    assert each.machines["planer"].current.value == 6.0
    assert each.machines["planer"].active.value == pytest.approx(1500.0)
    assert each.machines["planer"].factor.value == pytest.approx(1500.0 / (228.0 * 15.0))
