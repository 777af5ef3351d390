"""The way to the phone, over MQTT."""

from idlerwatch.edges.mqtt.link import Mqtt

__all__ = ["Mqtt"]
