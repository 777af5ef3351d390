import math

import pytest

from fakes.sheds import (
    L1_N,
    LEG_METERS,
    SUPPLY_METER,
    THREE_PHASE,
    build,
    channel,
    cycle,
    meter,
    numbered,
    numbered_lines,
    running,
    said,
    slipway,
    slipway_lines,
    split_phase,
    split_running,
    stopped,
    supply_says,
)
from idlerwatch.core.watch.align import begin_align, step
from idlerwatch.core.watch.assess import assess
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.derive import derive
from idlerwatch.core.watch.estimate import estimate
from idlerwatch.core.watch.life import begin_life, judge_life


def assessed(settings, meters, samples=2):
    plan = compile_plan(settings)
    align, life, sample = begin_align(plan.slow), begin_life(), None
    for at in range(samples):
        for event in cycle(float(at), meters):
            align, sample = step(align, event)
        derived = derive(plan, sample)
        life = judge_life(plan, life, sample.at, derived)
    return assess(plan, sample, derived, estimate(plan, derived), life)


def legs(*each):
    """Three legs' (voltage, current, active, reactive)."""
    return {f"leg_{k}": said(*values) for k, values in enumerate(each, 1)}


def six(neutrals, lines, currents=(0.0, 0.0, 0.0), powers=(0.0, 0.0, 0.0), reactives=(0.0, 0.0, 0.0)):
    """What the three-phase meter says: three voltages to N with currents and powers, three between lines."""
    to_neutral = [
        {"voltage": v, "current": i, "power": p, "reactive": q}
        for v, i, p, q in zip(neutrals, currents, powers, reactives, strict=True)
    ]
    return {
        "supply": supply_says(voltage=neutrals[0]),
        "legs": numbered(*to_neutral, *({"voltage": v} for v in lines)),
        "earth": said(1.5),
    }


PERFECT = six((230.0,) * 3, (230.0 * math.sqrt(3.0),) * 3)


def value(assessment, measurement, subject, quantity):
    return assessment.figure(measurement, subject, quantity).value


# --------------------------------------------------------------------------
# Legs and lines
# --------------------------------------------------------------------------


def test_a_leg_is_told_over_nominal_and_over_the_supply():
    # supply 207 V: 10 % low; leg 2 at 207 V follows it, leg 3 at 230 V stands 11 % above it
    told = assessed(slipway(), running(supply=supply_says(voltage=207.0), leg_1=said(207.0), leg_2=said(207.0)))
    assert told.leg("L2", "voltage_ratio").value == pytest.approx(0.9)
    assert told.leg("L2", "supply_ratio").value == pytest.approx(1.0)
    assert told.leg("L3", "supply_ratio").value == pytest.approx((234.0 / 230.0) / 0.9)


def test_a_voltage_carries_its_expanded_uncertainty():
    # class 0.5 %: 0.005 / sqrt 3, with 0.0002 of noise, twice
    figure = assessed(slipway(), running()).leg("L2", "voltage")
    assert figure.uncertainty == pytest.approx(2 * 226.0 * math.hypot(0.005 / math.sqrt(3.0), 0.0002))
    assert figure.known == "measured"


def test_line_voltages_are_measured_against_root_three_of_nominal():
    told = assessed(slipway_lines(), PERFECT)
    assert value(told, "line", "l2-l3", "voltage_ratio") == pytest.approx(1.0)
    assert value(told, "line", "l2-l3", "supply_ratio") == pytest.approx(1.0)


def test_what_no_meter_says_is_unknown_and_never_zero():
    told = assessed(slipway(), stopped())
    for quantity in ("voltage", "voltage_ratio", "supply_ratio", "current", "active_power", "power_factor"):
        figure = told.leg("L2", quantity)
        assert math.isnan(figure.value)
        assert figure.known == "not measured"


def test_the_figures_are_the_same_set_in_every_state():
    keys = assessed(slipway(), running()).figures.keys()
    assert assessed(slipway(), stopped()).figures.keys() == keys
    assert assessed(slipway(), dict.fromkeys(running(), "no answer")).figures.keys() == keys


# --------------------------------------------------------------------------
# Unbalance
# --------------------------------------------------------------------------


def test_only_magnitudes_to_neutral_give_no_unbalance_factor_and_say_why():
    told = assessed(slipway(), running())
    assert told.angles == "not seen"
    # 230, 226, 234 V: mean 230, largest deviation 4 V
    assert value(told, "converter", "converter", "phase_voltage_unbalance_rate") == pytest.approx(4.0 / 230.0)
    for quantity in (
        "voltage_unbalance_factor",
        "line_voltage_unbalance_rate",
        "derating_factor",
        "added_temperature_rise",
        "negative_sequence_voltage",
    ):
        assert not told.figure("converter", "converter", quantity).is_known
    assert any("angles" in remark and "not seen" in remark for remark in told.remarks)


def test_a_perfect_set_has_no_unbalance():
    told = assessed(slipway_lines(), PERFECT)
    assert told.angles == "measured"
    assert value(told, "converter", "converter", "voltage_unbalance_factor") == pytest.approx(0.0, abs=1e-6)
    assert value(told, "converter", "converter", "positive_sequence_voltage") == pytest.approx(230.0)
    assert value(told, "converter", "converter", "derating_factor") == pytest.approx(1.0)
    assert value(told, "converter", "converter", "added_temperature_rise") == pytest.approx(0.0, abs=1e-9)
    assert told.figure("converter", "converter", "voltage_unbalance_factor").uncertainty > 0.0


@pytest.mark.parametrize(
    "lines",
    [
        (416.0, 419.0, 432.0),
        (432.0, 416.0, 419.0),
        (419.0, 432.0, 416.0),
        (416.0, 432.0, 419.0),
        (419.0, 416.0, 432.0),
        (432.0, 419.0, 416.0),
    ],
)
def test_a_hand_tuned_converter_for_every_assignment_of_its_line_voltages(lines):
    # common practice, no source: 239, 246, 244 V to neutral; lines 416, 419, 432 V; PVUR 1.65 %, VUF of lines 2.34 %
    told = assessed(slipway_lines(), six((239.0, 246.0, 244.0), lines))
    assert value(told, "converter", "converter", "phase_voltage_unbalance_rate") == pytest.approx(0.0165, abs=5e-5)
    assert 0.0230 <= value(told, "converter", "converter", "voltage_unbalance_factor") <= 0.0234
    assert not any("fit" in remark or "contradict" in remark for remark in told.remarks)
    mean = (416.0 + 419.0 + 432.0) / 3.0
    rate = value(told, "converter", "converter", "line_voltage_unbalance_rate")
    assert rate == pytest.approx((432.0 - mean) / mean)
    # 2 x (percent)^2 percent of the rise
    assert value(told, "converter", "converter", "added_temperature_rise") == pytest.approx(2.0 * rate**2 * 100.0)


def doubled(**changed):
    """The three-phase meter and, on the same three pairs to N, three meters of their own."""
    legs = {f"leg-{k}": said(230.0, 0.0, 0.0, 0.0) for k in (1, 2, 3)}
    return PERFECT | legs | {name.replace("_", "-"): values for name, values in changed.items()}


def test_the_voltmeter_that_does_not_fit_is_named_and_left_out():
    told = assessed(slipway_lines(*LEG_METERS), doubled(leg_3=said(260.0)))
    assert "leg-3's L3-N does not fit the other voltages and is left out" in told.remarks
    assert value(told, "converter", "converter", "voltage_unbalance_factor") == pytest.approx(0.0, abs=1e-6)
    leg = told.leg("L3", "voltage")
    assert (leg.value, leg.known) == (pytest.approx(230.0), "mapped")


def test_where_several_may_be_wrong_all_are_named():
    # one distance to spare: any of five may be the wrong one; only the doubled L1-N is above suspicion
    told = assessed(slipway_lines(), six((230.0, 230.0, 238.0), (230.0 * math.sqrt(3.0),) * 3))
    (remark,) = (remark for remark in told.remarks if "contradict" in remark)
    assert "legs's L3-N" in remark
    assert "supply's L1-N" not in remark
    assert told.figure("converter", "converter", "voltage_unbalance_factor").is_known


def test_a_gross_contradiction_that_several_may_explain_tells_no_unbalance():
    told = assessed(slipway_lines(), six((230.0, 230.0, 260.0), (230.0 * math.sqrt(3.0),) * 3))
    assert any("contradict" in remark for remark in told.remarks)
    for quantity in ("voltage_unbalance_factor", "line_voltage_unbalance_rate", "derating_factor"):
        assert not told.figure("converter", "converter", quantity).is_known
    assert told.leg("L3", "voltage").value == 260.0


def test_lines_that_close_no_triangle_give_no_unbalance():
    said_lines = numbered_lines(100.0, 100.0, 240.0)
    told = assessed(split_phase(), split_running() | {"lines": said_lines}, samples=1)
    assert told.angles == "not seen"
    for quantity in ("voltage_unbalance_factor", "line_voltage_unbalance_rate"):
        assert not told.figure("converter", "converter", quantity).is_known


def test_a_centre_tapped_supply_is_told_no_phase_voltage_unbalance():
    told = assessed(split_phase(), split_running())
    assert not told.figure("converter", "converter", "phase_voltage_unbalance_rate").is_known
    assert value(told, "converter", "converter", "voltage_unbalance_factor") == pytest.approx(0.0, abs=1e-6)
    assert told.angles == "measured"


def test_a_line_fed_converter_without_measured_supply_uses_the_halves_of_its_centre_tap():
    lines = meter("lines", "leg", channel("L3-L1", "L1"), channel("L2-L3", "L2"))
    settings = build(
        {"feed": "L1-L2", "voltage": 240.0, "neutral": "centre-tap"},
        "floating",
        (meter("supply", "supply", channel("L1-N", "L1"), channel("L2-N", "L2")), lines),
    )
    told = assessed(settings, split_running() | {"lines": numbered({"voltage": 234.0}, {"voltage": 240.0})})
    line = told.figure("line", "l1-l2", "voltage")
    assert (line.value, line.known) == (pytest.approx(240.0), "computed")
    rate = value(told, "converter", "converter", "line_voltage_unbalance_rate")
    assert rate == pytest.approx(4.0 / 238.0)  # 240, 240, 234: mean 238


def test_current_unbalance_is_a_rate_and_nothing_below_a_tenth_of_an_ampere():
    told = assessed(slipway(), running(**legs((230, 1.68, 200, 0), (226, 2.26, 200, 0), (234, 2.18, 200, 0))))
    mean = (1.68 + 2.26 + 2.18) / 3.0
    assert value(told, "converter", "converter", "current_unbalance_rate") == pytest.approx((mean - 1.68) / mean)
    told = assessed(slipway(), running(**legs((230, 0.09, 0, 0), (226, 0.10, 0, 0), (234, 0.09, 0, 0))))
    assert not told.figure("converter", "converter", "current_unbalance_rate").is_known


def test_at_standstill_no_unbalance_of_remanence_is_told():
    own = slipway_lines()
    told = assessed(own, six((5.0, 3.0, 4.0), (5.0, 4.0, 3.0)))
    assert not told.figure("converter", "converter", "line_voltage_unbalance_rate").is_known
    assert not told.figure("converter", "converter", "voltage_unbalance_factor").is_known


# --------------------------------------------------------------------------
# Powers
# --------------------------------------------------------------------------


def test_the_three_apparent_powers_and_their_power_factors():
    # 3 kW machine on a healthy converter: leg powers 937, 426, 782 W
    told = assessed(
        slipway_lines(),
        six((230.0,) * 3, (230.0 * math.sqrt(3.0),) * 3, (6.0, 5.0, 4.0), (937.0, 426.0, 782.0), (900.0, 950.0, 300.0)),
    )
    active, reactive = 2145.0, 2150.0
    arithmetic = 230.0 * 15.0
    vector = math.hypot(active, reactive)
    # IEEE 1459, three-wire: Ie = sqrt(sum I^2 / 3), Ve = sqrt(sum Vll^2 / 9)
    effective = 3.0 * 230.0 * math.sqrt((36.0 + 25.0 + 16.0) / 3.0)
    for name, apparent in (("arithmetic", arithmetic), ("vector", vector), ("effective", effective)):
        assert value(told, "converter", "converter", f"{name}_apparent_power") == pytest.approx(apparent)
        assert value(told, "converter", "converter", f"{name}_power_factor") == pytest.approx(active / apparent)


def test_without_line_voltages_there_is_no_effective_apparent_power():
    told = assessed(slipway(), running(**legs(*((230.0, 5.0, 900.0, 300.0),) * 3)))
    assert not told.figure("converter", "converter", "effective_apparent_power").is_known
    assert value(told, "converter", "converter", "arithmetic_apparent_power") == pytest.approx(3450.0)


def test_a_machine_on_neutral_takes_the_three_wire_form_away():
    machine = [{"name": "lamp", "rated_kw": 0.5, "connected": "L1-N"}]
    told = assessed(slipway_lines(machine=machine), PERFECT | six((230.0,) * 3, (398.0,) * 3, (5.0,) * 3))
    assert not told.figure("converter", "converter", "effective_apparent_power").is_known


def test_the_supply_has_its_own_power_factor_and_the_idle_loss_is_what_no_machine_gets():
    told = assessed(
        slipway(),
        running(
            supply=supply_says(current=15.0, power=2900.0, reactive=1200.0),
            **legs((230, 4, 700, 500), (226, 4, 700, 500), (234, 4, 800, 500)),
        ),
    )
    assert value(told, "supply", "supply", "power_factor") == pytest.approx(2900.0 / (230.0 * 15.0))
    assert value(told, "supply", "supply", "idle_loss") == pytest.approx(700.0)
    assert value(told, "supply", "supply", "current_ratio") == pytest.approx(15.0 / 40.0)
    loss = told.figure("supply", "supply", "idle_loss")
    gain = 2 * math.hypot(0.01 / math.sqrt(3.0), 0.0002)
    assert loss.uncertainty == pytest.approx(gain * math.sqrt(2900.0**2 + 700.0**2 + 700.0**2 + 800.0**2))


def test_without_leg_powers_no_idle_loss_is_told():
    told = assessed(build(L1_N, "N", (SUPPLY_METER,)), {"supply": supply_says()})
    assert not told.figure("supply", "supply", "idle_loss").is_known


def test_neutral_shift_is_one_half_of_a_split_supply_against_the_other():
    halves = numbered({"voltage": 127.0, "current": 5.0}, {"voltage": 113.0, "current": 5.0})
    told = assessed(split_phase(), split_running() | {"supply": halves})
    assert value(told, "supply", "supply", "neutral_shift") == pytest.approx(14.0)
    assert not assessed(slipway(), running()).figure("supply", "supply", "neutral_shift").is_known


# --------------------------------------------------------------------------
# Banks, earth, machines, meters
# --------------------------------------------------------------------------


def test_a_banks_current_over_what_its_capacitors_should_take():
    # a bank meter across its capacitor: 40 uF, 400 V, 50 Hz: 5.03 A
    bank = meter("bank", "bank:run", channel("L3-L1", "L3"))
    capacitor = [{"name": "C1", "between": "L3-L1", "microfarads": 40.0, "bank": "run"}]
    settings = build(
        L1_N, "N", (SUPPLY_METER, bank), bank=[{"name": "run", "closed_when": ["running"]}], capacitor=capacitor
    )
    told = assessed(settings, {"supply": supply_says(), "bank": said(400.0, 2.5133)})
    ratio = told.figure("bank", "run", "current_ratio")
    assert ratio.value == pytest.approx(0.5, rel=1e-4)
    assert ratio.known == "measured"


def test_a_bank_across_a_line_nobody_measures_is_computed_from_its_legs_and_less_certain():
    # L1 230 V, L3 234 V, 120 degrees apart: 401.9 V; 40 uF at 50 Hz takes 5.05 A
    line = math.sqrt(230.0**2 + 234.0**2 + 230.0 * 234.0)
    expected = 2 * math.pi * 50.0 * 40e-6 * line
    ratio = assessed(slipway(), running(bank=said(current=expected))).figure("bank", "run", "current_ratio")
    assert ratio.value == pytest.approx(1.0)
    assert ratio.known == "computed"
    assert ratio.uncertainty > 0.04


def test_a_bank_with_its_line_measured_is_told_from_it():
    told = assessed(
        slipway_lines(meter("bank", "bank:run", channel(None, "L3"))),
        six((230.0,) * 3, (398.0, 398.0, 400.0)) | {"bank": said(current=5.0265)},
    )
    assert told.figure("bank", "run", "current_ratio").value == pytest.approx(1.0, rel=3e-3)


def test_an_open_bank_reads_zero_of_what_it_should():
    assert assessed(slipway(), running(bank=said(current=0.0))).figure("bank", "run", "current_ratio").value == 0.0


def test_a_bank_on_dead_legs_has_no_ratio():
    dead = running(leg_1=said(230.0), leg_3=said(1.0), bank=said(current=0.0))
    assert assessed(slipway(), dead).figure("bank", "run", "current_ratio").value == 0.0
    none = running(supply=supply_says(voltage=1.0), leg_1=said(1.0), leg_3=said(1.0), bank=said(current=0.0))
    assert not assessed(slipway(), none).figure("bank", "run", "current_ratio").is_known


def test_neutral_to_earth_is_measured():
    figure = assessed(slipway(), running()).figure("earthing", "converter", "neutral_earth_voltage")
    assert (figure.value, figure.known) == (1.5, "measured")


def test_neutral_to_earth_is_not_measured_where_nothing_stands_across():
    told = assessed(build(L1_N, "N", (SUPPLY_METER,)), {"supply": supply_says()})
    figure = told.figure("earthing", "converter", "neutral_earth_voltage")
    assert math.isnan(figure.value)
    assert figure.known == "not measured"
    assert any("neutral-to-earth" in remark for remark in told.remarks)


def test_neutral_to_earth_is_mapped_where_voltages_to_earth_are_known():
    # N 10 V off PE, at right angles to L1-N
    to_earth = [
        abs(230.0 * complex(math.cos(a), math.sin(a)) - 10.0j) for a in (0.0, -2 * math.pi / 3, 2 * math.pi / 3)
    ]
    earth = meter("to-earth", "leg", *(channel(f"L{k}-PE") for k in (1, 2, 3)), input_megohm=1.0)
    settings = build(L1_N, "N", (SUPPLY_METER, THREE_PHASE, earth))
    meters = {name: PERFECT[name] for name in ("supply", "legs")}
    told = assessed(settings, meters | {"to-earth": numbered(*({"voltage": v} for v in to_earth))})
    figure = told.figure("earthing", "converter", "neutral_earth_voltage")
    assert figure.known == "mapped"
    assert figure.value == pytest.approx(10.0, abs=0.05)


def test_a_meter_on_a_generated_leg_sleeps_while_the_converter_stands():
    told = assessed(slipway(), stopped(), samples=3)
    assert told.state == "stopped"
    assert told.meters == {
        "supply": "answering",
        "leg-1": "answering",
        "leg-2": "asleep",
        "leg-3": "asleep",
        "earth": "answering",
        "bank": "answering",
    }
    assert value(told, "meter", "leg-2", "answering") == 0.0
    assert value(told, "meter", "leg-1", "answering") == 1.0


def test_it_is_silent_and_not_asleep_while_the_converter_runs():
    told = assessed(slipway(), running(leg_2="wrong answer"))
    assert told.state == "running"
    assert told.meters["leg-2"] == "wrong answer"


def test_contacts_have_figures_of_their_own():
    io = meter("io", "contacts", map="inputs")
    contacts = [
        {"meter": "io", "input": 1, "means": "sequence right"},
        {"meter": "io", "input": 2, "means": "bank run closed"},
    ]
    told = assessed(slipway(io, contact=contacts), running(io={(1, "state"): 1.0, (2, "state"): 0.0}))
    assert value(told, "converter", "converter", "sequence_right") == 1.0
    assert value(told, "bank", "run", "closed") == 0.0


def test_an_unsigned_meter_is_remarked():
    unsigned = meter("leg-2", "leg", channel("L2-N", "L2"), map="unsigned")
    told = assessed(
        build(L1_N, "N", (SUPPLY_METER, unsigned)), {"supply": supply_says(), "leg-2": said(230, 3, 400, 500)}
    )
    assert any("reactive power" in remark for remark in told.remarks)
    assert not told.leg("L2", "reactive_power").is_known
