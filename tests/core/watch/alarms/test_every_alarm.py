"""Every alarm an installation has is raised and returned once, on both feeds, with a text by the rules."""

import math
import re

import pytest

from fakes.alarm_scenes import SHEDS, Player, assessment, generator, of
from idlerwatch.core.values import Trouble, WindowRow
from idlerwatch.core.watch.alarms import availability

SUPPLY = ("supply", "supply")
EARTH = ("earthing", "converter", "neutral_earth_voltage")


def supply(**values):
    return {(*SUPPLY, name): value for name, value in values.items()}


def generated(feed, ratio):
    if feed == "line":
        return {("line", "l2-l3", "voltage_ratio"): ratio}
    return {("leg", "l2", "voltage_ratio"): ratio}


def unbalance(value):
    return {("converter", "converter", "voltage_unbalance_factor"): value}


def currents(*amperes):
    return {("leg", leg, "current"): value for leg, value in zip(("l1", "l2", "l3"), amperes, strict=True)}


def window(value):
    return (WindowRow("10min", 0.0, "converter", "converter", {"voltage_unbalance_factor": value, "flagged": 0.0}),)


def position(closed):
    return {("bank", "run", "position"): closed, ("bank", "run", "position_probability"): 0.9999}


def converter(**values):
    return {("converter", "converter", name): value for name, value in values.items()}


def case(*, letter="L", before=30, good=None, bad_letter=None, told=(), clear=(), rows=(), clear_rows=(), **bad):
    return {
        "letter": letter,
        "before": before,
        "good": good or {},
        "bad_letter": bad_letter or letter,
        "told": told,
        "clear": clear,
        "rows": rows,
        "clear_rows": clear_rows,
        "figures": bad.get("figures", {}),
        "meters": bad.get("meters", {}),
    }


def trouble(part, text):
    return (Trouble(0.0, part, text),)


LOST = ("capacitor", "c1", "lost_probability")
NEGATIVE = {("leg", "l2", "active_power"): -900.0}


def cases(feed):
    is_line = feed == "line"
    legs = "lines" if is_line else "legs"
    stalled = currents(40.0, 40.0, 0.0) if is_line else currents(40.0, 0.0, 0.0)
    found = {
        "supply-lost": case(figures=supply(voltage_ratio=0.3, voltage=70.0)),
        "supply-low": case(figures=supply(voltage_ratio=0.89)),
        "supply-very-low": case(figures=supply(voltage_ratio=0.84)),
        "supply-high": case(figures=supply(voltage_ratio=1.12)),
        "supply-frequency": case(figures=supply(frequency=51.0 if not is_line else 60.4)),
        "supply-overload": case(figures=supply(current_ratio=1.1)),
        "supply-overload-heavy": case(figures=supply(current_ratio=1.4)),
        "leading-supply": case(letter="U", figures=supply(reactive_power=-900.0)),
        "start-not-completed": case(letter="S", bad_letter="A"),
        "supply-legs-only": case(letter="S", good=currents(0.0, 0.0, 0.0), figures=stalled),
        "converter-stopped-under-load": case(bad_letter="S"),
        "left-on": case(letter="L", bad_letter="U"),
        "left-on-after-hours": case(letter="L", bad_letter="U"),
        "leg-lost": case(figures=generated(feed, 0.45)),
        "leg-low": case(figures=generated(feed, 0.88)),
        "leg-very-low": case(figures=generated(feed, 0.78)),
        "leg-high": case(figures=generated(feed, 1.12)),
        "leg-very-high": case(figures=generated(feed, 1.2)),
        "machine-on-two-legs": case(figures=currents(14.1, 0.1, 14.0)),
        "unbalance": case(rows=window(0.06), clear_rows=window(0.03)),
        "unbalance-high": case(figures=unbalance(0.09)),
        "ammeter-reversed": case(figures=NEGATIVE),
        "neutral-earth-high": case(figures={EARTH: 14.0}),
        "neutral-earth-dangerous": case(figures={EARTH: 60.0}),
        "neutral-earth-jump": case(figures={EARTH: 212.0}),
        "neutral-earth-near-zero": case(
            good=supply(current_ratio=0.6), figures={EARTH: 0.02} | supply(current_ratio=0.6)
        ),
        "supply-meter-silent": case(meters={"supply": "no answer"}),
        "leg-meter-silent": case(meters={legs: "no answer"}),
        "blind": case(bad_letter="B"),
        "earth-transducer-silent": case(meters={"earth": "no answer"}),
        "bus-down": case(told=trouble("bus panel", "port gone"), clear=trouble("bus panel", "")),
        "own-health": case(told=trouble("disk", "disk is nearly full"), clear=trouble("disk", "")),
        "way-out-down": case(told=trouble("mqtt", "cannot reach localhost:1883"), clear=trouble("mqtt", "")),
        "idler-temperature": case(figures={("machine", "idler", "temperature"): 370.0}),
        "machine-temperature": case(figures={("machine", "planer", "temperature"): 370.0}),
        "starts-too-many": None,
        "current-unexplained": case(
            good=converter(unexplained_current_ratio=0.02), figures=converter(unexplained_current_ratio=0.3)
        ),
    }
    if not is_line:
        found |= {
            "running-backwards": case(
                good=converter(backwards_probability=0.0001), figures=converter(backwards_probability=0.9999)
            ),
            "off-normal": case(good=converter(off_normal=0.002), figures=converter(off_normal=-0.06)),
            "bank-not-closed": case(good=position(1.0), figures=position(0.0)),
            "capacitor-lost": case(good={LOST: 0.0001}, figures={LOST: 0.9999}),
            "capacitor-weak": None,
        }
    if is_line:
        del found["ammeter-reversed"]  # no meter there stands across a leg and N with its ammeter in the same leg
        found |= {
            "supply-below-range": case(figures=supply(voltage_ratio=0.94)),
            "supply-above-range": case(figures=supply(voltage_ratio=1.06)),
            "neutral-shift": case(figures=supply(neutral_shift=8.0)),
            "neutral-shift-high": case(figures=supply(neutral_shift=15.0)),
            "neutral-earth-raised": case(figures={EARTH: 7.0}),
        }
    return found


def play(player, given, tag):
    """Good, bad until the alarm comes, good until it goes; returns its events."""
    alarm = player.settings.alarms[tag, ""]
    player.play(given["before"], given["letter"], given["good"])
    longest = max(
        alarm.on_delay_s, (alarm.setpoint or 0) if alarm.unit == "s" else 0, 600 if tag == "ammeter-reversed" else 0
    )
    bad = {name: given[name] for name in ("figures", "meters", "told", "rows")}
    player.play(longest + 10, given["bad_letter"], **bad)
    rest = 3000 if tag == "ammeter-reversed" else alarm.off_delay_s + 10
    letter = "L" if tag in ("converter-stopped-under-load", "left-on", "left-on-after-hours") else given["letter"]
    player.play(rest, letter, given["good"], told=given["clear"], rows=given["clear_rows"])
    return of(player.events, tag)


ALL = [(feed, tag) for feed in SHEDS for tag, given in cases(feed).items() if given]


@pytest.mark.parametrize("feed", SHEDS)
def test_every_available_alarm_has_a_case(feed):
    available = {tag for tag, reason in availability(SHEDS[feed]()).items() if not reason}
    assert available == set(cases(feed))


@pytest.mark.parametrize(("feed", "tag"), ALL)
def test_alarm_is_raised_and_returned_with_texts_by_the_rules(feed, tag):
    player = Player(SHEDS[feed]())
    events = play(player, cases(feed)[tag], tag)
    assert events[0].previous == "normal"
    assert events[0].alarm.state == "unacknowledged"
    needs = player.settings.alarms[tag, ""].needs_acknowledgement
    assert [event.alarm.state for event in events][-1] == ("returned" if needs else "normal")
    assert math.isfinite(events[0].alarm.value)
    for event in player.events:
        check_text(event.alarm, event.alarm.text)


def test_starts_too_many_is_raised_by_the_fourth_in_ten_minutes_and_returns():
    player = Player(SHEDS["L1-N"]())
    player.play(5, "S")
    for _ in range(3):
        player.play(20, "U")
        player.play(20, "S")
    assert not of(player.events, "starts-too-many")
    player.play(20, "U")
    (event,) = of(player.events, "starts-too-many")
    assert "4 starts in 10 min" in event.alarm.text
    player.play(2600, "L")
    assert of(player.events, "starts-too-many")[-1].alarm.state == "normal"


def test_weak_capacitor_is_told_after_a_day_and_only_where_it_is_known_well():
    player = Player(SHEDS["L1-N"](capacitor_weak={"on_delay_s": 20.0, "off_delay_s": 20.0}))
    ratio = ("capacitor", "c1", "capacitance_ratio")
    player.play(30, "L", {ratio: 0.99})
    player.play(40, "L", {ratio: 0.85})
    player.play(40, "L", {ratio: 0.97})
    raised, over = of(player.events, "capacitor-weak")
    assert (raised.alarm.priority, over.alarm.state) == ("low", "normal")
    assert "C1" in raised.alarm.text
    assert "85.0 %" in raised.alarm.text


def test_start_bank_still_in_is_told_after_two_seconds_as_the_worst_there_is():
    settings = SHEDS["L1-N"]()
    (run,) = settings.bank
    start = run.model_copy(update={"name": "start", "closed_when": ("starting",)})
    player = Player(settings.model_copy(update={"bank": (run, start)}))
    found = {("bank", "start", "position"): 1.0, ("bank", "start", "position_probability"): 0.9995}
    player.play(5, "U", {("bank", "start", "position"): 0.0, ("bank", "start", "position_probability"): 0.9995})
    player.play(2, "U", found)
    assert not of(player.events, "start-bank-in")
    player.play(1, "U", found)
    (event,) = of(player.events, "start-bank-in")
    assert event.alarm.priority == "high"
    assert event.alarm.text.startswith("NOW: stop machines, then converter. Start capacitors are still in")
    check_text(event.alarm, event.alarm.text)


def test_bank_is_not_missed_before_its_control_had_its_time_nor_while_undecided():
    player = Player(SHEDS["L1-N"]())
    player.play(2, "U", position(0.0))
    player.play(200, "U")
    assert not of(player.events, "bank-not-closed")


def test_bank_partly_in_is_not_called_open_but_a_needless_one_is_called_in():
    settings = SHEDS["L1-N"]()
    (run,) = settings.bank
    start = run.model_copy(update={"name": "start", "closed_when": ("starting",)})
    player = Player(settings.model_copy(update={"bank": (run, start)}))
    half = {("bank", name, "position"): 0.5 for name in ("run", "start")}
    half |= {("bank", name, "position_probability"): 0.9999 for name in ("run", "start")}
    player.play(60, "U", half)
    assert not of(player.events, "bank-not-closed")
    assert of(player.events, "start-bank-in")


def test_contact_for_the_sequence_tells_a_converter_that_runs_backwards():
    player = Player(SHEDS["L1-N"]())
    player.play(5, "U", converter(sequence_right=1.0))
    player.play(6, "U", converter(sequence_right=0.0))
    (event,) = of(player.events, "running-backwards")
    assert "spindle" in event.alarm.text


def test_generator_frequency_takes_the_place_of_the_network_s():
    settings = generator()
    assert availability(settings)["supply-frequency"] == "the supply is a generator"
    player = Player(settings)
    events = play(player, case(figures=supply(frequency=47.5)), "generator-frequency")
    assert [event.alarm.state for event in events] == ["unacknowledged", "normal"]
    assert events[0].is_told
    assert "47.5 Hz" in events[0].alarm.text


def test_leading_supply_is_told_on_a_generator_only():
    for build, is_told in ((SHEDS["L1-N"], False), (generator, True)):
        player = Player(build())
        events = play(player, cases("L1-N")["leading-supply"], "leading-supply")
        assert [event.is_told for event in events] == [is_told, is_told]


# -------------------------------------------------------------------------- the rules of the texts

VERBS = frozenset(
    (
        *("avoid", "ask", "call", "end", "have", "keep", "leave", "let", "look", "make", "note", "plan", "press"),
        *("run", "start", "stop", "switch", "take", "tell", "touch", "unplug"),
    )
)
FORBIDDEN = (
    r"check (the )?system", r"\bdead\b", r"\bsafe\b", r"(?<![\d.])0 V", r"open the (box|panel|enclosure|cover)",
    r"\bnan\b", r"None", r"[\[\]{}]", r"not measured measured", r"\bbypass\b", r"  ",
)  # fmt: skip


def check_text(alarm, text):
    assert len(text) <= 240, text
    assert text.isprintable()
    for pattern in FORBIDDEN:
        assert not re.search(pattern, text, re.IGNORECASE), (pattern, text)
    assert not text.endswith("…"), text
    if alarm.state in ("normal", "returned"):
        assert re.match(r"OK again \d\d:\d\d: ", text), text
        assert "It lasted" in text
        return
    first = "NOW: " if alarm.priority == "high" else "TODAY: "
    assert text.startswith(first), text
    assert text.removeprefix(first).split()[0] in VERBS, text
    assert text.count("ikely") <= 1
    assert re.search(r"\d", text), text
    assert alarm.cause
    assert alarm.advice


def test_cautions_stand_where_they_belong():
    for feed, build in SHEDS.items():
        player = Player(build())
        (event, *_) = play(player, cases(feed)["neutral-earth-dangerous"], "neutral-earth-high")
        assert "upstream of the bond does not show" in event.alarm.text
        player = Player(build())
        (event, *_) = play(player, cases(feed)["neutral-earth-jump"], "neutral-earth-jump")
        assert "touch no metal" in event.alarm.text
        assert "212 V above earth (was 2.0 V)" in event.alarm.text
        player = Player(build())
        (event, *_) = play(player, cases(feed)["machine-on-two-legs"], "machine-on-two-legs")
        assert "do not try again" in event.alarm.text


def test_usual_value_stands_beside_the_found_one():
    player = Player(SHEDS["L1-N"]())
    events = play(player, case(figures=generated("L1-N", 0.88)), "leg-low")
    assert "202 V" in events[0].alarm.text
    assert "usual 230 V" in events[0].alarm.text
    assert events[0].alarm.usual == pytest.approx(1.0)


def test_label_of_a_conductor_is_used():
    settings = SHEDS["L1-N"]()
    named = settings.model_copy(update={"supply": settings.supply.model_copy(update={"labels": {"L2": "grey"}})})
    events = play(Player(named), case(figures=generated("L1-N", 0.88)), "leg-low")
    assert "L2 (grey) is low" in events[0].alarm.text


def test_time_in_a_text_is_local():
    player = Player(SHEDS["L1-N"]())
    events = play(player, case(figures=generated("L1-N", 0.78)), "leg-very-low")
    utc = assessment(player.settings, 30.0).utc
    minutes = int((utc + 7200.0) % 86400 // 60)
    assert f"since {minutes // 60:02d}:{minutes % 60:02d}" in events[0].alarm.text
