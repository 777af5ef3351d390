import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fakes.sheds import (
    L1_N,
    SUPPLY_METER,
    build,
    cycles,
    numbered,
    numbered_lines,
    running,
    said,
    slipway,
    split_phase,
    split_running,
    stopped,
    supply_says,
)
from idlerwatch.core.watch.align import begin_align, step
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.derive import derive
from idlerwatch.core.watch.findings import CONFIRMATIONS, FINDINGS, STATES, TABLE
from idlerwatch.core.watch.life import Evidence, LifeState, begin_life, find, judge_life

SILENT = {"leg_2": "no answer", "leg_3": "no answer"}
SURGE = supply_says(voltage=212.0, current=110.0, power=9000.0, reactive=21000.0)
STARTING = stopped(supply=SURGE)
SLOW_STARTING = running(supply=supply_says(current=15.0, power=3000.0), leg_2=said(90.0), leg_3=said(95.0))
COASTING = running(supply=supply_says(current=0.0, power=0.0), leg_2=said(120.0), leg_3=said(110.0))
NO_SUPPLY_METER = {"supply": "no answer"}


def lives(settings, *stretches, step_s=1.0):
    plan = compile_plan(settings)
    align, life, told = begin_align(plan.slow), begin_life(), []
    for event in cycles(*stretches, step=step_s):
        align, sample = step(align, event)
        if sample is not None:
            life = judge_life(plan, life, sample.at, derive(plan, sample))
            told.append(life)
    return told


def states(settings, *stretches):
    return [life.state for life in lives(settings, *stretches)]


def last(settings, *stretches):
    return lives(settings, *stretches)[-1]


# --------------------------------------------------------------------------
# The table
# --------------------------------------------------------------------------


def test_the_table_answers_every_finding_in_every_state():
    assert set(TABLE) == set(STATES)
    for answers in TABLE.values():
        assert set(answers) == set(FINDINGS)
        assert set(answers.values()) <= set(STATES)
    assert set(CONFIRMATIONS) == set(FINDINGS)


def test_every_state_can_be_left_and_reached():
    for state in STATES:
        assert any(following != state for following in TABLE[state].values())
        assert any(state in answers.values() for start, answers in TABLE.items() if start != state)


@pytest.mark.parametrize("state", STATES)
def test_a_turning_converter_is_running_whatever_was_before(state):
    assert TABLE[state]["turning"] == "running"


@pytest.mark.parametrize("state", STATES)
def test_a_supply_current_without_watched_legs_is_never_called_stopped(state):
    assert TABLE[state]["unseen"] != "stopped"
    assert TABLE[state]["nothing"] == "blind"


FOUND = {
    "still": stopped(),
    "coasting": COASTING,
    "surging": STARTING,
    "humming": running(supply=supply_says(current=5.0), leg_2=said(1.0), leg_3=said(2.0)),
    "rising": SLOW_STARTING,
    "between": running(**NO_SUPPLY_METER, leg_2=said(100.0), leg_3=said(90.0)),
    "turning": running(),
    "unseen": running(**SILENT),
    "nothing": dict.fromkeys(running(), "no answer"),
}


@pytest.mark.parametrize("finding", FINDINGS)
@pytest.mark.parametrize("state", STATES)
def test_the_state_follows_the_table_once_the_finding_is_confirmed_and_not_before(state, finding):
    plan = compile_plan(slipway())
    align, life = begin_align(plan.slow), LifeState(state=state, since=0.0)
    wanted, told = TABLE[state][finding], []
    for event in cycles((CONFIRMATIONS[finding], FOUND[finding]), start=1.0):
        align, sample = step(align, event)
        if sample is not None:
            derived = derive(plan, sample)
            life = judge_life(plan, life, sample.at, derived)
            assert life.finding == finding
            told.append(life.state)
    assert told[-1] == wanted
    changes = [following for following in told if following != state]
    assert set(changes) <= {wanted}
    if finding not in ("surging", "turning", "rising"):  # those have two witnesses in one sample
        assert len(changes) <= 1


# --------------------------------------------------------------------------
# Findings, both sides of each threshold
# --------------------------------------------------------------------------


def found(settings=None, life=None, **evidence):
    values = {
        "current": math.nan,
        "power_current": math.nan,
        "supply_ratio": 1.0,
        "generated": math.nan,
        "leg_current": math.nan,
    } | evidence
    values = {"idler_current": values["current"]} | values
    return find(compile_plan(settings or slipway()), life or LifeState(), Evidence(**values))


# 7.5 kW at 230 V: full current 32.6 A, so flow from 1.30 A, surge from 65.2 A
@pytest.mark.parametrize(
    ("evidence", "finding"),
    [
        ({"current": 1.2}, "still"),
        ({"current": 1.4}, "unseen"),
        ({"current": 1.2, "generated": 0.0}, "still"),
        ({"current": 1.2, "generated": 0.21}, "coasting"),
        ({"current": 1.2, "generated": 0.19}, "still"),
        ({"current": 1.4, "generated": 0.19}, "humming"),
        ({"current": 1.4, "generated": 0.21}, "rising"),
        ({"current": 1.4, "generated": 0.69}, "rising"),
        ({"current": 1.4, "generated": 0.71}, "turning"),
        ({"current": 65.0, "generated": 0.1}, "humming"),
        ({"current": 65.5, "generated": 0.1}, "surging"),
        ({"current": 65.0}, "unseen"),
        ({"current": 65.5}, "surging"),
        ({"current": 65.0, "generated": 0.71}, "turning"),
        ({"current": 65.5, "generated": 0.71}, "surging"),
        ({"current": 20.0, "supply_ratio": 0.09, "generated": 0.5}, "coasting"),
        ({"current": 20.0, "supply_ratio": 0.11, "generated": 0.5}, "rising"),
        ({"supply_ratio": 0.09}, "still"),
        ({}, "nothing"),
        ({"generated": 0.1}, "still"),
        ({"generated": 0.5}, "between"),
        ({"generated": 0.9}, "turning"),
    ],
)
def test_a_sample_is_put_into_one_word(evidence, finding):
    assert found(**evidence) == finding


# from rest a start's current is 0.6 of full current, 19.6 A; a converter that runs takes as much loaded
@pytest.mark.parametrize(
    ("state", "evidence", "finding"),
    [
        ("stopped", {"current": 19.5, "generated": 0.1}, "humming"),
        ("stopped", {"current": 19.6, "generated": 0.1}, "surging"),
        ("stopped", {"current": 19.6}, "surging"),
        ("starting", {"current": 30.0, "generated": 0.5}, "surging"),
        ("starting", {"current": 30.0, "generated": 0.7}, "turning"),
        ("starting", {"current": 30.0, "has_woken": True}, "surging"),
        ("starting", {"current": 5.0, "has_woken": True}, "turning"),
        ("running", {"current": 30.0, "generated": 0.1}, "humming"),
        ("running", {"current": 30.0, "has_woken": True}, "turning"),
        ("running", {"current": 30.0}, "unseen"),
        ("blind", {"current": 30.0}, "unseen"),
    ],
)
def test_at_rest_a_smaller_current_is_a_starts_and_a_booting_meter_tells_of_its_leg(state, evidence, finding):
    assert found(life=LifeState(state=state), **evidence) == finding


def test_half_of_the_known_idling_current_is_flow():
    idling = LifeState(idle_current=11.7)
    assert found(life=idling, current=5.8) == "still"
    assert found(life=idling, current=5.9) == "unseen"


def test_with_a_supply_meter_alone_its_current_decides():
    supply_only = build(L1_N, "N", (SUPPLY_METER,))
    assert found(supply_only, current=11.7) == "turning"
    assert found(supply_only, current=0.5) == "still"
    assert found(supply_only, current=110.0) == "surging"


# --------------------------------------------------------------------------
# Lives of converters
# --------------------------------------------------------------------------


def test_a_running_converter_is_recognised_with_the_first_sample():
    assert states(slipway(), (1, running())) == ["running"]


def test_a_stopped_one_takes_two():
    assert states(slipway(), (2, stopped())) == ["blind", "stopped"]


def test_a_start_is_seen_at_its_surge_and_ends_when_the_legs_are_up():
    told = states(slipway(), (3, stopped()), (2, STARTING), (1, SLOW_STARTING), (2, running()))
    assert told == ["blind", "stopped", "stopped", "starting", "starting", "starting", "running", "running"]


def test_a_start_is_timed_from_its_first_sample_to_the_first_that_runs():
    told = lives(slipway(), (3, stopped()), (2, STARTING), (3, running()))
    assert [life.start_time for life in told[3:]] == [0.0, 1.0, 2.0, 2.0, 2.0]


def test_a_start_too_quick_to_be_seen_is_timed_from_the_last_sample_at_rest():
    assert last(slipway(), (3, stopped()), (2, running())).start_time == 1.0


def test_a_converter_found_running_has_no_start_time():
    assert math.isnan(last(slipway(), (5, running())).start_time)


def test_a_surge_that_its_own_powers_do_not_bear_out_needs_a_second_sample():
    odd = stopped(supply=said(voltage=230.0, current=110.0) | {(1, "apparent_power"): 0.0})
    assert states(slipway(), (3, stopped()), (1, odd), (1, stopped()))[-2:] == ["stopped", "stopped"]
    assert states(slipway(), (3, stopped()), (2, odd))[-2:] == ["stopped", "starting"]


def test_the_change_over_is_the_pause_between_start_and_run():
    told = states(slipway(), (3, stopped()), (2, STARTING), (2, COASTING), (1, running()))
    assert told[-3:] == ["starting", "change-over", "running"]


def test_what_coasts_longer_than_a_change_over_runs_down():
    told = states(slipway(), (3, stopped()), (2, STARTING), (8, COASTING))
    assert told[-1] == "run-down"
    assert "change-over" in told


def test_an_abandoned_start_ends_at_rest():
    assert states(slipway(), (3, stopped()), (2, STARTING), (4, stopped()))[-1] == "stopped"


def test_a_stop_runs_down_and_ends_at_rest():
    told = states(slipway(), (3, running()), (3, COASTING), (3, stopped()))
    assert told == ["running"] * 4 + ["run-down"] * 3 + ["stopped"] * 2


def test_a_stop_between_two_samples_is_at_rest_within_three():
    assert states(slipway(), (3, running()), (3, stopped()))[-3:] == ["running", "run-down", "stopped"]


def test_a_change_dates_from_the_first_sample_that_found_it():
    told = lives(slipway(), (3, running()), (3, COASTING))
    assert told[-1].since == 3.0


def test_a_converter_may_be_started_again_while_it_runs_down():
    assert states(slipway(), (3, running()), (3, COASTING), (1, STARTING))[-1] == "starting"


@pytest.mark.parametrize(
    "odd",
    [
        stopped(),
        COASTING,
        running(supply="no answer", leg_2="no answer", leg_3="no answer"),
        running(**SILENT),
        running(leg_2=said(0.0), leg_3=said(0.0)),
        dict.fromkeys(running(), "no answer"),
        running(supply=supply_says(current=0.0, power=0.0)),
    ],
)
def test_one_odd_sample_does_not_move_a_running_converter(odd):
    told = states(slipway(), (5, running()), (1, odd), (5, running()))
    assert set(told) == {"running"}


@pytest.mark.parametrize(
    "odd",
    [
        running(**SILENT),
        dict.fromkeys(running(), "no answer"),
        stopped(supply="no answer"),
        stopped(leg_2=said(230.0), leg_3=said(230.0)),
    ],
)
def test_one_odd_sample_does_not_move_a_stopped_converter(odd):
    assert set(states(slipway(), (3, stopped()), (1, odd), (4, stopped()))[1:]) == {"stopped"}


def test_supply_current_with_silent_legs_is_blind_and_never_stopped():
    told = states(slipway(), (20, running()), (20, running(**SILENT)))
    assert told[-1] == "blind"
    assert "stopped" not in told


def test_silent_legs_and_no_supply_current_is_stopped():
    assert states(slipway(), (20, running()), (5, stopped()))[-1] == "stopped"


def test_silent_legs_without_a_supply_meter_are_blind_though_l1_answers():
    legs_only = running(**SILENT, **NO_SUPPLY_METER)
    assert states(slipway(), (5, running()), (5, legs_only))[-1] == "blind"


def test_nothing_answering_is_blind():
    assert states(slipway(), (5, running()), (5, dict.fromkeys(running(), "no answer")))[-1] == "blind"


def test_without_a_supply_meter_the_voltages_decide():
    up = running(**NO_SUPPLY_METER)
    dead = running(**NO_SUPPLY_METER, leg_2=said(2.0), leg_3=said(3.0))
    rising = running(**NO_SUPPLY_METER, leg_2=said(100.0), leg_3=said(90.0))
    told = states(slipway(), (3, dead), (2, rising), (2, up), (2, rising), (2, dead))
    assert told[2:] == [
        "stopped",
        "stopped",
        "starting",
        "starting",
        "running",
        "running",
        "run-down",
        "run-down",
        "stopped",
    ]


def test_meters_that_boot_after_a_surge_are_borne_with():
    booting = running(leg_2="booting", leg_3="booting")
    told = states(slipway(), (3, stopped()), (2, STARTING), (10, booting), (2, running()))
    assert "blind" not in told[2:]
    assert told[-1] == "running"


def test_their_patience_ends():
    assert last(slipway(), (3, stopped()), (2, STARTING), (25, running(**SILENT))).state == "blind"


def test_a_lost_leg_does_not_stop_a_line_fed_converter_whose_current_flows():
    lost = split_running() | {"lines": numbered_lines(120.0, 120.0, 240.0)}
    assert set(states(split_phase(), (5, split_running()), (10, lost))) == {"running"}


def test_a_split_phase_converter_starts_runs_and_stops():
    rest = split_running(current=0.0) | {"lines": numbered_lines(120.0, 120.0, 240.0)}
    surge = split_running(current=150.0) | {"lines": numbered_lines(125.0, 125.0, 225.0)}
    told = states(split_phase(), (3, rest), (2, surge), (3, split_running()), (4, rest))
    # the line meter lives on its own supply and sees the dead leg: two witnesses, so one sample is enough
    assert told == ["stopped"] * 3 + ["starting"] * 2 + ["running"] * 3 + ["run-down"] + ["stopped"] * 3


def test_a_lamp_on_the_fed_leg_does_not_keep_the_converter_running():
    lamp_down = running(supply=supply_says(current=2.5, power=575.0), leg_2=said(100.0), leg_3=said(90.0))
    lamp = running(supply=supply_says(current=2.5, power=575.0), leg_2=said(1.0), leg_3=said(1.0))
    assert states(slipway(), (10, running()), (2, lamp_down), (4, lamp))[-1] == "stopped"


def test_the_supply_lost_while_running_runs_down():
    gone = running(
        supply=supply_says(voltage=2.0, current=0.0, power=0.0), leg_1=said(3.0), leg_2=said(150.0), leg_3=said(140.0)
    )
    assert states(slipway(), (5, running()), (3, gone))[-1] == "run-down"


# --------------------------------------------------------------------------
# Loading
# --------------------------------------------------------------------------


def loaded(amperes, supply=15.0):
    return running(supply=supply_says(current=supply), **{f"leg_{k}": said(228.0, amperes, 300.0) for k in (1, 2, 3)})


# the smallest machine is the extractor, 3.4 A: on from 0.51 A, starting from a step of 10.2 A
@pytest.mark.parametrize(("amperes", "loading"), [(0.5, "unloaded"), (0.52, "loaded")])
def test_a_machine_is_on_from_a_seventh_of_the_smallest_rated_current(amperes, loading):
    assert last(slipway(), (3, running()), (3, loaded(amperes))).loading == loading


@pytest.mark.parametrize(("amperes", "loading"), [(10.1, "loaded"), (10.3, "machine starting")])
def test_a_machine_starts_at_three_times_the_smallest_rated_current(amperes, loading):
    assert last(slipway(), (3, running()), (1, loaded(amperes))).loading == loading


def test_a_converter_found_at_work_is_loaded_and_no_machine_is_starting():
    assert last(slipway(), (2, loaded(12.0))).loading == "loaded"


def test_a_machines_start_lasts_thirty_seconds_at_most():
    told = [life.loading for life in lives(slipway(), (3, running()), (40, loaded(40.0, 90.0)))]
    assert told[3:].count("machine starting") == 31
    assert told[-1] == "loaded"


def test_a_machines_start_ends_when_its_current_falls():
    told = lives(slipway(), (3, running()), (3, loaded(40.0, 90.0)), (2, loaded(6.0)))
    assert [life.loading for life in told[3:]] == ["machine starting"] * 3 + ["loaded"] * 2


def test_a_heavy_start_that_resets_the_leg_meters_is_a_machine_starting():
    reset = running(supply=supply_says(current=90.0, power=9000.0, reactive=15000.0), **SILENT, leg_1="no answer")
    told = lives(slipway(), (10, running()), (6, reset))
    assert {life.state for life in told} == {"running"}
    assert told[-1].loading == "machine starting"


def test_with_a_supply_meter_alone_the_idling_level_decides():
    supply_only = build(L1_N, "N", (SUPPLY_METER,))
    idle, work = {"supply": supply_says()}, {"supply": supply_says(current=25.0)}
    told = lives(supply_only, (5, idle), (5, work), (5, idle))
    assert [told[4].loading, told[9].loading, told[14].loading] == ["unloaded", "loaded", "unloaded"]
    assert told[-1].idle_current == pytest.approx(11.7)


def test_the_idling_current_is_not_learned_from_one_low_sample():
    told = last(slipway(), (5, running()), (1, running(supply=supply_says(current=5.0))), (5, running()))
    assert told.idle_current == pytest.approx(11.7)


def test_a_converter_that_is_not_running_has_no_loading():
    assert {life.loading for life in lives(slipway(), (3, stopped()), (3, STARTING))} == {""}


def test_a_machine_left_on_does_not_keep_the_stopped_converter_running():
    # the machine runs on through the fed leg, at 3 A of its own, and holds the legs up
    left_on = running(
        supply=supply_says(current=3.2, power=500.0, reactive=540.0),
        leg_1=said(230.0, 3.2, 500.0, 540.0),
        leg_2=said(190.0, 0.0, 0.0, 0.0),
        leg_3=said(195.0, 0.0, 0.0, 0.0),
    )
    assert states(slipway(), (5, loaded(3.0)), (4, left_on))[-1] == "run-down"


def test_a_motor_that_stalls_on_the_fed_legs_of_a_stopped_converter_is_no_start():
    # 3 kW on L1-L2 of a split-phase supply, the idler isolated: 52 A standing still
    half = {"voltage": 115.0, "current": 52.0, "power": 3000.0, "reactive": 5100.0}
    stalled = {
        "supply": numbered(half, half),
        "lines": numbered(
            {"voltage": 115.0, "current": 52.0, "power": 3000.0, "reactive": 5100.0},
            {"voltage": 115.0, "current": 52.0, "power": 3000.0, "reactive": 5100.0},
            {"voltage": 230.0},
            {"current": 0.0},
        ),
    }
    rest = split_running(current=0.0) | {"lines": numbered_lines(120.0, 120.0, 240.0)}
    assert set(states(split_phase(), (3, rest), (5, stalled))) == {"stopped"}


def test_a_machine_at_work_does_not_hide_the_idler():
    assert last(slipway(), (5, loaded(6.0)), (5, loaded(6.0))).state == "running"


levels = st.floats(allow_nan=True, allow_infinity=True) | st.floats(0, 300)
samples = st.builds(Evidence, levels, levels, levels, levels, levels, levels)


@given(samples, st.builds(LifeState, state=st.sampled_from(STATES), idle_current=levels))
def test_every_evidence_is_put_into_one_of_the_words(evidence, life):
    assert find(compile_plan(SHED), life, evidence) in FINDINGS


SHED = slipway()
