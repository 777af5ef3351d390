"""Topics and line protocol against their published descriptions.

Sources: MQTT Version 5.0 (OASIS standard), 4.7 topic names and filters, 3.3.1 retain [seen in a list of its normative
statements and the mqtt(7) manual page]; InfluxDB v2 line protocol reference, special characters [seen].
"""

import pytest
from paho.mqtt.client import topic_matches_sub

from fakes.findings import UTC
from idlerwatch.core import payloads
from idlerwatch.core.values import WindowRow

# filter, topic, whether it matches: the manual page's examples
MATCHES = [
    *[(pattern, "a/b/c/d", True) for pattern in ("a/b/c/d", "+/b/c/d", "a/+/c/d", "a/+/+/d", "+/+/+/+")],
    *[(pattern, "a/b/c/d", True) for pattern in ("#", "a/#", "a/b/#", "a/b/c/#", "+/b/c/#")],
    *[(pattern, "a/b/c/d", False) for pattern in ("a/b/c", "b/+/c/d", "+/+/+")],
    ("level1/#", "level1", True),
    ("1/2/#", "1/2s/s", False),
]


@pytest.mark.parametrize(("pattern", "topic", "does_match"), MATCHES)
def test_a_phone_subscribes_by_the_published_rules(pattern, topic, does_match):
    assert topic_matches_sub(pattern, topic) is does_match


@pytest.mark.parametrize(
    "subscription", ["idlerwatch/#", "idlerwatch/slipway/+/alarm/#", "idlerwatch/+/+/alarm/leg-low/l2"]
)
def test_an_alarms_topic_is_found_by_subscriptions_at_each_level(subscription):
    topic = payloads.alarm_topic(payloads.prefix("slipway", "boatshed"), "leg-low", "l2")
    assert topic_matches_sub(subscription, topic)


@pytest.mark.parametrize("level", ["", "a/b", "+", "#", "level1#", "nul\0"])
def test_no_topic_holds_wildcards_empty_levels_or_nul(level):
    with pytest.raises(ValueError, match="must be"):
        payloads.topic("idlerwatch", level)


# place, what stands there, what the line must show
ESCAPES = [
    ("measurement", "my leg", "my\\ leg"),
    ("measurement", "leg,a", "leg\\,a"),
    ("measurement", "leg=a", "leg=a"),
    ("tag", "a b", "a\\ b"),
    ("tag", "a,b", "a\\,b"),
    ("tag", "a=b", "a\\=b"),
    ("field", "a b", "a\\ b"),
    ("field", "a,b", "a\\,b"),
    ("field", "a=b", "a\\=b"),
]


@pytest.mark.parametrize(("place", "word", "escaped"), ESCAPES)
def test_special_characters_are_escaped_where_the_reference_says(place, word, escaped):
    row = WindowRow(
        "10s",
        UTC,
        word if place == "measurement" else "leg",
        word if place == "tag" else "l2",
        {word if place == "field" else "voltage": 1.0},
    )
    line = payloads.line(row, "slipway", "boatshed")
    assert {
        "measurement": line.startswith(f"{escaped},converter="),
        "tag": f",subject={escaped}," in line,
        "field": f" {escaped}=1 " in line,
    }[place]


def test_an_empty_tag_value_is_left_out_since_it_would_be_rejected():
    assert "subject" not in payloads.line(WindowRow("10s", UTC, "leg", "", {"voltage": 1.0}), "slipway", "boatshed")


@pytest.mark.parametrize("value", [float("nan"), float("inf"), float("-inf")])
def test_numbers_that_the_database_rejects_are_left_out(value):
    line = payloads.line(WindowRow("10s", UTC, "leg", "l2", {"bad": value, "voltage": 1.0}), "slipway", "boatshed")
    assert "bad" not in line


def test_tags_are_sorted_and_no_name_begins_with_an_underscore():
    line = payloads.line(WindowRow("10s", UTC, "leg", "l2", {"voltage": 1.0}), "slipway", "boatshed")
    tags = [tag.split("=")[0] for tag in line.split(" ")[0].split(",")[1:]]
    assert tags == sorted(tags)
    assert not any(tag.startswith("_") for tag in tags)
