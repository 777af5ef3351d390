import contextlib
import json
import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from jsonschema import Draft202012Validator

from fakes.findings import UTC, alarm, assessment, event, row
from idlerwatch.core import payloads
from idlerwatch.core.values import Acknowledge, Figure, Shelve, Trouble, WindowRow
from idlerwatch.schemas import schema


def valid(name, body):
    Draft202012Validator(schema(name)).validate(json.loads(payloads.text(body)))


@pytest.mark.parametrize("name", ["assessment", "record", "message", "acknowledge", "shelve"])
def test_each_schema_is_a_schema(name):
    Draft202012Validator.check_schema(schema(name))


@pytest.mark.parametrize(
    "state", ["unacknowledged", "acknowledged", "returned", "shelved", "suppressed", "out-of-service"]
)
def test_a_record_in_each_state_fits_its_schema(state):
    valid("record", payloads.record(alarm(state=state)))


def test_a_message_fits_its_schema_and_carries_identity_and_instant():
    body = payloads.message(event(3))
    valid("message", body)
    assert body["id"] == "leg-low/l2/2026-12-01T06:00:00.000Z/3"
    assert body["at"] == "2026-12-01T06:00:03.000Z"
    assert body["previous"] == "normal"


def test_an_assessment_fits_its_schema_and_says_how_each_figure_is_known():
    body = payloads.assessment(assessment())
    valid("assessment", body)
    assert body["figures"]["line"]["l1-l2"]["voltage"] == {"value": 372.0, "uncertainty": 2.0, "known": "mapped"}
    assert body["state_since"] == "2026-12-01T05:47:26.000Z"


def test_what_is_not_measured_is_null_never_zero_and_never_nan():
    body = payloads.assessment(assessment())
    figure = body["figures"]["earthing"]["converter"]["neutral_earth_voltage"]
    assert figure == {"value": None, "uncertainty": None, "known": "not measured"}
    assert "NaN" not in payloads.text(body)


def test_infinity_is_null_too():
    assert payloads.number(math.inf) is None


def test_the_journal_gives_an_alarm_back_with_all_its_digits():
    exact = event(2, of=alarm(value=0.1 + 0.2, raised_at=UTC + 1e-6))
    back = payloads.read_event(json.loads(json.dumps(payloads.event_body(exact), allow_nan=False)))
    assert math.isnan(back.alarm.usual)
    assert payloads.event_body(back) == payloads.event_body(exact)


@pytest.mark.parametrize(
    "told", [Acknowledge(1.1, "a", "l2", "Jo"), Shelve(1 / 3, "a", "l2", "Jo", 60.0), Trouble(2.0, "mqtt", "gone")]
)
def test_the_journal_gives_back_what_people_and_parts_told(told):
    assert payloads.read_told(json.loads(json.dumps(payloads.told_body(told, 4)))) == (told, 4)


def test_a_command_in_order_is_read():
    body = {"tag": "leg-low", "subject": "l2", "by": "Jo"}
    valid("acknowledge", body)
    assert payloads.read_command("acknowledge", json.dumps(body).encode(), 7.0) == Acknowledge(
        7.0, "leg-low", "l2", "Jo"
    )


@pytest.mark.parametrize(
    "payload",
    [
        b"",
        b"\xff",
        b"[]",
        b"7",
        b'{"tag": "x"}',
        b'{"tag": "", "subject": "l2"}',
        b'{"tag": 3, "subject": "l2"}',
        b"[" * 5000,
        b'{"tag": "x", "subject": "l2", "by": null}',
    ],
)
def test_a_command_that_is_no_command_is_one_sentence(payload):
    with pytest.raises(ValueError, match=r"^acknowledge"):
        payloads.read_command("acknowledge", payload, 0.0)


@pytest.mark.parametrize(
    ("seconds", "is_fine"),
    [(0, True), (28800, True), (28800.1, False), (-0.1, False), ("60", False), (True, False), (None, False)],
)
def test_shelving_lasts_up_to_eight_hours(seconds, is_fine):
    payload = json.dumps({"tag": "x", "subject": "l2", "by": "Jo", "for_s": seconds}).encode()
    if is_fine:
        assert payloads.read_command("shelve", payload, 0.0).for_s == seconds
    else:
        with pytest.raises(ValueError, match="for_s"):
            payloads.read_command("shelve", payload, 0.0)


@given(st.binary(max_size=200))
def test_whatever_a_phone_sends_is_a_command_or_a_value_error(payload):
    with contextlib.suppress(ValueError):
        assert isinstance(payloads.read_command("shelve", payload, 0.0), Shelve)


def test_a_line_holds_floats_only_and_leaves_missing_numbers_out():
    given_row = WindowRow("10s", UTC, "leg", "l2", {"voltage": math.nan, "count": 10.0, "power": -1234567.0})
    assert payloads.line(given_row, "slipway", "boatshed") == (
        "leg,converter=boatshed,site=slipway,subject=l2,window=10s count=10,power=-1234567 1796104800000"
    )


def test_a_row_without_any_number_is_no_line():
    assert payloads.line(row(voltage=math.nan), "slipway", "boatshed") == ""


def test_a_figure_is_known_when_it_has_a_value():
    assert Figure(0.0).is_known
    assert not Figure().is_known
