"""The daemon as a process of its own, on settings made for a test, and what a phone subscribed to it gets."""

import contextlib
import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any

import paho.mqtt.client as paho
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion

SOURCE = Path(__file__).resolve().parents[2] / "daemon"


class Phone:
    """Subscribes to everything of a site; keeps the newest payload of each topic, and all messages."""

    def __init__(self, port: int, topics: str = "idlerwatch/#") -> None:
        self.latest: dict[str, bytes] = {}
        self.messages: list[tuple[float, dict[str, Any]]] = []
        self.on_payload: Callable[[str, bytes], None] = lambda _level, _payload: None
        self._client = paho.Client(
            CallbackAPIVersion.VERSION2, client_id="listener", protocol=MQTTProtocolVersion.MQTTv5
        )
        self._client.on_message = self._on_message
        self._client.on_connect = lambda client, *_: client.subscribe(topics, qos=1)
        self._client.connect_async("127.0.0.1", port)
        self._client.reconnect_delay_set(1, 1)
        self._client.loop_start()

    def _on_message(self, _client: Any, _data: Any, message: paho.MQTTMessage) -> None:
        level = message.topic.split("/", 3)[3]
        self.latest[level] = message.payload
        if level == "message":
            self.messages.append((time.monotonic(), json.loads(message.payload)))
        self.on_payload(level, message.payload)

    def of(self, tag: str) -> list[tuple[float, dict[str, Any]]]:
        return [(at, message) for at, message in self.messages if message["tag"] == tag]

    def json(self, level: str) -> dict[str, Any]:
        return json.loads(self.latest.get(level) or b"{}")

    def close(self) -> None:
        self._client.disconnect()
        self._client.loop_stop()


@contextlib.contextmanager
def phone(port: int) -> Iterator[Phone]:
    listening = Phone(port)
    try:
        yield listening
    finally:
        listening.close()


class Daemon:
    """``idlerwatch run`` as a process."""

    def __init__(self, settings: Path, log: Path) -> None:
        self._command = [
            sys.executable,
            "-m",
            "idlerwatch",
            "run",
            "--settings",
            str(settings),
            "--quiet",
            "--trust-clock",
        ]
        self._log = log
        self.process: subprocess.Popen[bytes] | None = None

    def start(self) -> "Daemon":
        environment = {**os.environ, "PYTHONPATH": str(SOURCE)}
        with self._log.open("ab") as log:
            self.process = subprocess.Popen(self._command, stdout=log, stderr=log, env=environment)
        return self

    def reload(self) -> None:
        assert self.process is not None
        self.process.send_signal(signal.SIGHUP)

    def stop(self) -> int:
        assert self.process is not None
        self.process.terminate()
        return self.process.wait(20.0)

    def kill(self) -> None:
        if self.process is not None:
            self.process.kill()
            self.process.wait()

    @property
    def log(self) -> str:
        return self._log.read_text()


@contextlib.contextmanager
def daemon(folder: Path, settings: str) -> Iterator[Daemon]:
    path = folder / "idlerwatch.toml"
    path.write_text(settings)
    running = Daemon(path, folder / "daemon.log").start()
    try:
        yield running
    finally:
        running.kill()


SHED = """
[site]
name = "slipway"
converter = "boatshed"
cycle_s = {cycle_s}

[supply]
feed = "L1-N"
voltage = 230.0
breaker_amperes = 40

[[idler]]
rated_kw = 7.5
rated_voltage = 400.0
rated_current = 15.2
star_point = "N"

[[bus]]
name = "panel"
port = "{port}"
baudrate = {baudrate}

[[meter]]
name = "supply"
bus = "panel"
address = 1
map = "din-float32"
at = "supply"
powered_by = "own"
channels = [{{ across = "L1-N", through = "L1" }}]

[[meter]]
name = "leg2"
bus = "panel"
address = 12
map = "din-float32"
at = "leg"
powered_by = "own"
channels = [{{ across = "L2-N", through = "L2" }}]

[[meter]]
name = "leg3"
bus = "panel"
address = 13
map = "din-float32"
at = "leg"
powered_by = "own"
channels = [{{ across = "L3-N", through = "L3" }}]

[[meter]]
name = "leg1"
bus = "panel"
address = 11
map = "din-float32"
at = "leg"
powered_by = "own"
channels = [{{ across = "L1-N", through = "L1" }}]

[[machine]]
name = "planer"
rated_kw = 4.0
rated_current = 8.4

[mqtt]
host = "127.0.0.1"
port = {broker}
assessment_s = 0.0

[journal]
path = "{journal}"
commit_s = {commit_s}
"""

LEG = {"voltage": 229.0, "current": 5.0, "active_power": 700.0, "apparent_power": 1145.0, "reactive_power": 906.0,
       "power_factor": 0.61, "frequency": 50.0, "active_energy_import": 1.5}  # fmt: skip
METERS: Mapping[int, Mapping[str, float]] = {
    1: {**LEG, "voltage": 230.0, "current": 16.0, "active_power": 2900.0, "apparent_power": 3680.0,
        "reactive_power": 2265.0, "power_factor": 0.79},
    11: {**LEG, "voltage": 230.0},
    12: LEG,
    13: {**LEG, "voltage": 228.0},
}  # fmt: skip
"""A loaded converter that is in order."""


def shed(folder: Path, port: str, broker: int, more: str = "", cycle_s: float = 0.5, baudrate: int = 115200,
         commit_s: float = 1.0) -> str:  # fmt: skip
    places = {"port": port, "broker": broker, "journal": folder / "journal", "cycle_s": cycle_s, "baudrate": baudrate}
    return SHED.format(**places, commit_s=commit_s) + more


def example(folder: Path, port: str, broker: int, more: str = "") -> str:
    """Return the shipped example with the test's port, broker and journal, and without a database."""
    text = (SOURCE.parent / "config" / "example.toml").read_text()
    for key, value in {
        'port = "/dev/idlerwatch/12345678"': f'port = "{port}"',
        "port = 1883": f"port = {broker}",
        'host = "localhost"': 'host = "127.0.0.1"',
        'path = "/var/lib/idlerwatch"': f'path = "{folder / "journal"}"',
        "commit_s = 30.0": "commit_s = 1.0",
        "assessment_s = 1.0": "assessment_s = 0.0",
    }.items():
        assert key in text, f"the example has no {key}"
        text = text.replace(key, value)
    before, _, rest = text.partition("[influx]")
    return before + "[journal]" + rest.partition("[journal]")[2] + more
