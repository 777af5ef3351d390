"""A broker and a phone for the demo: mosquitto where it is installed, else amqtt; never proof of delivery elsewhere."""

import asyncio
import contextlib
import json
import shutil
import socket
import subprocess
import threading
import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final, Literal

import click
import paho.mqtt.client as paho
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion

UP_WITHIN_S: Final = 10.0
_MOSQUITTO_PLACES: Final = "/usr/sbin:/usr/local/sbin"


@dataclass(frozen=True, slots=True)
class Broker:
    """Where it listens, on loopback only, what it is, and the MQTT protocol it speaks."""

    port: int
    name: str
    protocol: Literal[3, 5]


@contextlib.contextmanager
def start_broker(folder: Path) -> Iterator[Broker]:
    """Run a broker on a free loopback port for as long as the block lasts."""
    program = shutil.which("mosquitto") or shutil.which("mosquitto", path=_MOSQUITTO_PLACES)
    port = _free_port()
    if program is not None:
        with _mosquitto(program, port, folder):
            yield Broker(port, "mosquitto", 5)
    else:
        with _amqtt(port):
            yield Broker(port, "amqtt", 3)


@contextlib.contextmanager
def _mosquitto(program: str, port: int, folder: Path) -> Iterator[None]:
    config = folder / "mosquitto.conf"
    config.write_text(f"listener {port} 127.0.0.1\nallow_anonymous true\npersistence false\nlog_type error\n")
    process = subprocess.Popen([program, "-c", str(config)], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    try:
        _wait_for(port)
        yield
    finally:
        process.terminate()
        process.wait(5.0)


@contextlib.contextmanager
def _amqtt(port: int) -> Iterator[None]:
    try:
        from amqtt.broker import Broker as Amqtt  # noqa: PLC0415  # an extra
    except ImportError as error:
        sentence = "the demo needs a broker: install mosquitto, or idlerwatch with its extra `broker`"
        raise click.ClickException(sentence) from error
    loop = asyncio.new_event_loop()
    settings = {
        "listeners": {"default": {"type": "tcp", "bind": f"127.0.0.1:{port}"}},
        "plugins": {"amqtt.plugins.authentication.AnonymousAuthPlugin": {"allow_anonymous": True}},
    }

    async def begin() -> Any:
        broker = Amqtt(settings)
        await broker.start()
        return broker

    thread = threading.Thread(target=loop.run_forever, name="broker", daemon=True)
    thread.start()
    broker = asyncio.run_coroutine_threadsafe(begin(), loop).result(UP_WITHIN_S)
    try:
        _wait_for(port)
        yield
    finally:
        with contextlib.suppress(Exception):  # a broker of a demo that is over
            asyncio.run_coroutine_threadsafe(broker.shutdown(), loop).result(5.0)
        loop.call_soon_threadsafe(loop.stop)
        thread.join(5.0)


def _free_port() -> int:
    with socket.socket() as sock:
        sock.bind(("127.0.0.1", 0))
        port: int = sock.getsockname()[1]
        return port


def _wait_for(port: int) -> None:
    until = time.monotonic() + UP_WITHIN_S
    while time.monotonic() < until:
        with socket.socket() as sock:
            sock.settimeout(0.5)
            if sock.connect_ex(("127.0.0.1", port)) == 0:
                return
        time.sleep(0.02)
    raise click.ClickException(f"the demo's broker did not listen on port {port} within {UP_WITHIN_S:.0f} s")


class Phone:
    """Subscribes to a converter's messages, as an MQTT app on a phone does."""

    def __init__(self, broker: Broker, topic: str, arrived: Callable[[Mapping[str, Any]], None]) -> None:
        version = MQTTProtocolVersion.MQTTv5 if broker.protocol == 5 else MQTTProtocolVersion.MQTTv311
        self._client = paho.Client(CallbackAPIVersion.VERSION2, client_id="phone", protocol=version)
        self._client.suppress_exceptions = True
        self._client.on_message = lambda _client, _data, message: arrived(json.loads(message.payload))
        self._client.on_connect = lambda client, *_: client.subscribe(topic, qos=1)
        self._client.connect("127.0.0.1", broker.port)
        self._client.loop_start()

    def close(self) -> None:
        """Hang up."""
        self._client.disconnect()
        self._client.loop_stop()
