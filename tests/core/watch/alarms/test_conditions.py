"""Conditions that are more than a figure against a setpoint, each on both sides; what an installation lacks."""

import pytest

from fakes import sheds
from fakes.alarm_scenes import Player, alarm_list, house, of, shed
from idlerwatch.core.settings.model import Start
from idlerwatch.core.values import WindowRow
from idlerwatch.core.watch.alarms import availability

EARTH = ("earthing", "converter", "neutral_earth_voltage")
L2 = ("leg", "l2", "voltage_ratio")


def raised(player, tag):
    return [event for event in of(player.events, tag) if event.previous == "normal"]


def currents(*amperes):
    return {("leg", leg, "current"): value for leg, value in zip(("l1", "l2", "l3"), amperes, strict=True)}


def supply(**values):
    return {("supply", "supply", name): value for name, value in values.items()}


# Setpoints of the trade in volts and amperes, 230 V L1-N and 240 V split-phase; each a little on either side.
@pytest.mark.parametrize(
    ("build", "tag", "address", "quiet", "loud", "nominal"),
    [
        (shed, "supply-lost", "supply", 115.1, 114.9, 230.0),
        (shed, "supply-low", "supply", 207.1, 206.9, 230.0),
        (shed, "supply-very-low", "supply", 195.6, 195.4, 230.0),
        (shed, "supply-high", "supply", 252.9, 253.1, 230.0),
        (shed, "leg-lost", "l2", 115.1, 114.9, 230.0),
        (shed, "leg-low", "l2", 207.1, 206.9, 230.0),
        (shed, "leg-very-low", "l2", 184.1, 183.9, 230.0),
        (shed, "leg-high", "l2", 252.9, 253.1, 230.0),
        (shed, "leg-very-high", "l2", 264.4, 264.6, 230.0),
        (house, "supply-lost", "supply", 120.1, 119.9, 240.0),
        (house, "supply-low", "supply", 216.1, 215.9, 240.0),
        (house, "supply-below-range", "supply", 228.1, 227.9, 240.0),
        (house, "supply-very-low", "supply", 204.1, 203.9, 240.0),
        (house, "supply-high", "supply", 263.9, 264.1, 240.0),
        (house, "supply-above-range", "supply", 251.9, 252.1, 240.0),
        (house, "leg-lost", "l2-l3", 150.1, 149.9, 240.0),
        (house, "leg-low", "l2-l3", 216.1, 215.9, 240.0),
        (house, "leg-very-low", "l2-l3", 192.1, 191.9, 240.0),
        (house, "leg-high", "l2-l3", 263.9, 264.1, 240.0),
        (house, "leg-very-high", "l2-l3", 275.9, 276.1, 240.0),
    ],
)
def test_voltage_setpoints_of_the_trade(*, build, tag, address, quiet, loud, nominal):
    measurement = {"supply": "supply", "l2": "leg"}.get(address, "line")
    for volts, count in ((quiet, 0), (loud, 1)):
        player = Player(build())
        player.play(640, figures={(measurement, address, "voltage_ratio"): volts / nominal})
        assert len(raised(player, tag)) == count


@pytest.mark.parametrize(
    ("build", "tag", "figures", "quiet", "loud"),
    [
        (shed, "supply-overload", ("supply", "supply", "current_ratio"), 0.999, 1.001),
        (shed, "supply-overload-heavy", ("supply", "supply", "current_ratio"), 1.299, 1.301),
        (shed, "supply-frequency", ("supply", "supply", "frequency"), 50.49, 50.51),
        (shed, "supply-frequency", ("supply", "supply", "frequency"), 49.51, 49.49),
        (house, "supply-frequency", ("supply", "supply", "frequency"), 59.71, 59.69),
        (house, "neutral-shift", ("supply", "supply", "neutral_shift"), 5.9, 6.1),
        (house, "neutral-shift-high", ("supply", "supply", "neutral_shift"), 11.9, 12.1),
        (house, "neutral-shift-high", ("leg", "l1", "voltage"), 131.9, 132.1),
        (shed, "neutral-earth-high", EARTH, 9.9, 10.1),
        (shed, "neutral-earth-dangerous", EARTH, 49.9, 50.1),
        (house, "neutral-earth-raised", EARTH, 4.9, 5.1),
        (shed, "unbalance-high", ("converter", "converter", "voltage_unbalance_factor"), 0.0799, 0.0801),
        (shed, "idler-temperature", ("machine", "idler", "temperature"), 363.1, 363.2),
    ],
)
def test_other_setpoints_of_the_trade(build, tag, figures, quiet, loud):
    for value, count in ((quiet, 0), (loud, 1)):
        player = Player(build())
        player.play(640, figures={figures: value})
        assert len(raised(player, tag)) == count


def test_dead_supply_has_no_frequency():
    player = Player(shed())
    player.play(60, figures=supply(voltage_ratio=0.05, frequency=3.0))
    assert raised(player, "supply-frequency") == []


@pytest.mark.parametrize(("before", "after", "count"), [(2.0, 21.9, 0), (2.0, 22.1, 1)])
def test_jump_of_the_neutral(before, after, count):
    player = Player(shed())
    player.play(10, figures={EARTH: before})
    player.play(10, figures={EARTH: after})
    assert len(raised(player, "neutral-earth-jump")) == count


def test_slow_rise_of_the_neutral_is_no_jump():
    player = Player(shed())
    for volts in range(2, 48, 3):
        player.play(1, figures={EARTH: float(volts)})
    player.play(10, figures={EARTH: 47.0})
    assert raised(player, "neutral-earth-jump") == []
    assert raised(player, "neutral-earth-high") != []


def test_jump_that_does_not_hold_is_none():
    player = Player(shed())
    player.play(10)
    player.play(2, figures={EARTH: 100.0})
    player.play(10)
    assert raised(player, "neutral-earth-jump") == []


def test_earthing_tt_allows_three_volts_more():
    settings = shed()
    tt = settings.model_copy(update={"supply": settings.supply.model_copy(update={"earthing": "TT"})})
    for volts, count in ((12.9, 0), (13.1, 1)):
        player = Player(tt)
        player.play(30, figures={EARTH: volts})
        assert len(raised(player, "neutral-earth-high")) == count


@pytest.mark.parametrize(("usual", "seconds", "count"), [(None, 8, 0), (None, 10, 1), (2.0, 4, 0), (2.0, 6, 1)])
def test_start_is_too_long_beyond_twice_the_usual_or_eight_seconds_unlearned(usual, seconds, count):
    settings = shed()
    start = Start(method="two-legs", usual_s=usual) if usual else None
    player = Player(settings.model_copy(update={"start": start}))
    player.play(5, "S", currents(0.0, 0.0, 0.0))
    player.play(seconds, "A", currents(0.0, 0.0, 0.0))
    assert len(raised(player, "start-not-completed")) == count


def test_start_time_is_learned_from_completed_starts():
    player = Player(shed())
    for _ in range(3):
        player.play(5, "S", currents(0.0, 0.0, 0.0))
        player.play(2, "A", currents(0.0, 0.0, 0.0))
        player.play(5, "U")
    player.play(5, "S", currents(0.0, 0.0, 0.0))
    player.play(6, "A", currents(0.0, 0.0, 0.0))
    assert len(raised(player, "start-not-completed")) == 1


@pytest.mark.parametrize(
    ("figures", "count"),
    [
        (currents(14.0, 0.0, 14.0), 1),
        (currents(14.0, 1.39, 14.0), 1),
        (currents(14.0, 1.41, 14.0), 0),
        (currents(1.0, 0.0, 1.0), 0),  # 40 % of the smallest machine's 3.4 A is 1.36 A
        (currents(14.0, 0.0, 0.0), 0),  # single-phase on one leg
    ],
)
def test_machine_on_two_legs(figures, count):
    player = Player(shed())
    player.play(10, figures=figures)
    assert len(raised(player, "machine-on-two-legs")) == count


@pytest.mark.parametrize(("amperes", "count"), [(5.0, 0), (5.2, 1)])
def test_supply_legs_only_beyond_one_and_a_half_of_the_smallest_machine(amperes, count):
    player = Player(shed())
    player.play(10, "S", currents(amperes, 0.0, 0.0))
    assert len(raised(player, "supply-legs-only")) == count


def test_converter_switched_off_unloaded_is_no_stop_under_load():
    player = Player(shed())
    player.play(10, "L")
    player.play(5, "U", currents(0.0, 0.0, 0.0))
    player.play(2, "D", currents(0.0, 0.0, 0.0))
    player.play(10, "S", currents(0.0, 0.0, 0.0))
    assert raised(player, "converter-stopped-under-load") == []


@pytest.mark.parametrize(("factor", "flagged", "count"), [(0.0501, 0.0, 1), (0.0499, 0.0, 0), (0.0501, 1.0, 0)])
def test_unbalance_is_judged_on_whole_ten_minute_windows(factor, flagged, count):
    fields = {"voltage_unbalance_factor": factor, "flagged": flagged}
    player = Player(shed())
    player.play(10)
    player.play(10, rows=(WindowRow("10min", 0.0, "converter", "converter", fields),))
    assert len(raised(player, "unbalance")) == count


def test_rate_of_the_lines_stands_in_where_the_factor_is_not_known():
    missing = {("converter", "converter", "voltage_unbalance_factor"): float("nan")}
    player = Player(shed())
    player.play(70, figures=missing | {("converter", "converter", "line_voltage_unbalance_rate"): 0.09})
    assert len(raised(player, "unbalance-high")) == 1


def test_sleeping_and_booting_meters_are_not_silent():
    player = Player(shed())
    player.play(120, "U", meters={"legs": "asleep", "supply": "booting"})
    assert raised(player, "leg-meter-silent") == raised(player, "supply-meter-silent") == []


def test_leg_meter_is_given_fifteen_seconds_more_after_a_machine_s_start():
    player = Player(shed())
    player.play(3, "M")
    player.play(44, "L", meters={"legs": "no answer"})
    assert raised(player, "leg-meter-silent") == []
    player.play(4, "L", meters={"legs": "no answer"})
    assert len(raised(player, "leg-meter-silent")) == 1


def test_bus_whose_meters_are_all_silent_is_one_message():
    settings = shed()
    player = Player(settings)
    player.play(120, "B", meters={meter.name: "no answer" for meter in settings.meter})
    assert [event.alarm.tag for event in player.events if event.is_told] == ["bus-down"]


def test_left_on_counts_unbroken_idling_only():
    player = Player(shed())
    player.settings.people.working_hours  # noqa: B018  (given, yet left-on itself knows no hours)
    player.play(1700, "U")
    player.play(5, "L")
    player.play(1700, "U")
    assert raised(player, "left-on") == []
    player.play(110, "U")
    assert len(raised(player, "left-on")) == 1


def test_per_leg_meters_see_unbalance_through_the_circuit_but_not_without_power():
    settings = sheds.slipway().model_copy(update={"alarms": alarm_list(is_line=False)})
    assert not availability(settings)["unbalance"]
    voltmeters = tuple(
        meter.model_copy(update={"channels": tuple(c.model_copy(update={"through": None}) for c in meter.channels)})
        for meter in settings.meter
    )
    found = availability(settings.model_copy(update={"meter": voltmeters}))
    assert "angles are not seen" in found["unbalance"]
    assert found["off-normal"] == "the power of L2 and L3 is not measured"


def test_what_no_condition_computes_yet_is_not_available():
    found = availability(shed())
    assert found["bank-stuck-closed"] == "needs bank positions at rest"
    assert found["start-bank-in"] == "no bank is open in running"


def test_without_a_transducer_earth_is_not_available():
    settings = sheds.split_phase().model_copy(update={"alarms": alarm_list(is_line=True)})
    found = availability(settings)
    earth = [reason for tag, reason in found.items() if tag.startswith("neutral-earth")]
    assert earth == ["no transducer stands across N-PE"] * len(earth)


def test_it_system_has_no_neutral_to_earth_alarms():
    settings = shed()
    it = settings.model_copy(update={"supply": settings.supply.model_copy(update={"earthing": "IT"})})
    assert availability(it)["neutral-earth-dangerous"] == "not applicable on an IT system"


def test_subject_with_its_own_setpoint_is_judged_by_it():
    settings = shed()
    alarm = settings.alarms["leg-low", ""].model_copy(update={"setpoint": 0.8})
    own = settings.model_copy(update={"alarms": {**settings.alarms, ("leg-low", "l2"): alarm}})
    player = Player(own)
    player.play(70, figures={L2: 0.88, ("leg", "l3", "voltage_ratio"): 0.88})
    assert [event.alarm.subject for event in raised(player, "leg-low")] == ["l3"]


def test_every_explained_alarm_is_in_the_list():
    alarms = alarm_list(is_line=False)
    tags = {tag for tag, _ in alarms}
    assert {explained for alarm in alarms.values() for explained in alarm.explains} <= tags
