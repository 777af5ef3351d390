"""Real servers on free loopback ports for tests; import the fixtures from a conftest or a test module.

A missing binary skips the test, unless ``CI=true``: then it fails.
"""

import contextlib
import os
import shutil
import socket
import subprocess
import threading
import time
import urllib.error
import urllib.parse
import urllib.request
from collections.abc import Callable, Iterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path

import pytest

DEADLINE_S = 10.0


def wait_until(condition: Callable[[], object], deadline_s: float = DEADLINE_S, what: str = "the condition") -> None:
    until = time.monotonic() + deadline_s
    while not condition():
        if time.monotonic() > until:
            pytest.fail(f"{what} did not come true within {deadline_s} s")
        time.sleep(0.005)


def free_port() -> int:
    with socket.socket() as sock:
        sock.bind(("127.0.0.1", 0))
        return sock.getsockname()[1]


def binary(*names: str) -> str:
    for name in names:
        path = shutil.which(name) or shutil.which(name, path="/usr/sbin:/usr/local/sbin:/sbin")
        if path:
            return path
    if os.environ.get("CI") == "true":
        pytest.fail(f"{names[0]} is not installed")
    pytest.skip(f"{names[0]} is not installed")


def is_listening(port: int) -> bool:
    with socket.socket() as sock:
        sock.settimeout(0.5)
        return sock.connect_ex(("127.0.0.1", port)) == 0


class Server:
    """A process that listens on one port, and can be started, killed and started again."""

    def __init__(self, command: list[str], port: int, log: Path) -> None:
        self.command, self.port, self._log = command, port, log
        self.process: subprocess.Popen[bytes] | None = None

    def start(self) -> "Server":
        with self._log.open("ab") as log:
            self.process = subprocess.Popen(self.command, stdout=log, stderr=log)
        wait_until(lambda: is_listening(self.port) or self.process.poll() is not None, what="a listening server")
        assert self.process.poll() is None, self._log.read_text()
        return self

    def kill(self) -> None:
        if self.process is not None:
            self.process.kill()
            self.process.wait()
            self.process = None

    def stop(self) -> None:
        """End it in order: it brings to the disk what it has acknowledged."""
        self.process.terminate()
        self.process.wait(DEADLINE_S)
        self.process = None

    @property
    def url(self) -> str:
        return f"http://127.0.0.1:{self.port}"


class Broker(Server):
    """A mosquitto with settings of its own; not started."""

    def __init__(self, folder: Path, *lines: str) -> None:
        port = free_port()
        folder.mkdir(parents=True, exist_ok=True)
        settings = folder / "mosquitto.conf"
        user = ("user root",) if os.geteuid() == 0 else ()
        plain = () if any(line.startswith("allow_anonymous") for line in lines) else ("allow_anonymous true",)
        settings.write_text("\n".join([f"listener {port} 127.0.0.1", *user, *plain, *lines, ""]))
        super().__init__([binary("mosquitto"), "-c", str(settings)], port, folder / "mosquitto.log")


@pytest.fixture
def broker(tmp_path: Path) -> Iterator[Broker]:
    server = Broker(tmp_path / "broker")
    server.start()
    yield server
    server.kill()


class VictoriaMetrics(Server):
    """A time-series database that proves that a write has landed."""

    def __init__(self, folder: Path) -> None:
        port = free_port()
        folder.mkdir(parents=True, exist_ok=True)
        command = [
            binary("victoria-metrics"),
            f"-httpListenAddr=127.0.0.1:{port}",
            f"-storageDataPath={folder / 'data'}",
            "-dedup.minScrapeInterval=1ms",
            "-search.latencyOffset=0s",
            "-retentionPeriod=100y",
        ]
        super().__init__(command, port, folder / "victoria-metrics.log")

    def export(self, name: str) -> str:
        """Return all series of a name (``measurement_field``) as JSON lines."""
        urllib.request.urlopen(f"{self.url}/internal/force_flush").read()  # noqa: S310
        query = urllib.parse.urlencode({"match[]": name, "start": 0, "end": 4102444800})
        return urllib.request.urlopen(f"{self.url}/api/v1/export?{query}").read().decode()  # noqa: S310


@pytest.fixture
def victoria(tmp_path: Path) -> Iterator[VictoriaMetrics]:
    server = VictoriaMetrics(tmp_path / "victoria")
    server.start()
    yield server
    server.kill()


class InfluxWithShim(Server):
    """An influxd 1.6 behind a small door that speaks the v2 write API: proves what is refused."""

    database = "converter"

    def __init__(self, folder: Path) -> None:
        port = free_port()
        folder.mkdir(parents=True, exist_ok=True)
        settings = folder / "influxd.conf"
        settings.write_text(_INFLUXD.format(folder=folder, port=port, rpc=free_port()))
        super().__init__([binary("influxd"), "-config", str(settings)], port, folder / "influxd.log")
        self._door: ThreadingHTTPServer | None = None

    def start(self) -> "InfluxWithShim":
        super().start()
        wait_until(self._pings, what="an influxd that answers")
        self.query(f"CREATE DATABASE {self.database}", post=True)
        self._door = ThreadingHTTPServer(("127.0.0.1", 0), _door_to(self))
        threading.Thread(target=self._door.serve_forever, daemon=True).start()
        return self

    def kill(self) -> None:
        if self._door is not None:
            self._door.shutdown()
            self._door.server_close()
            self._door = None
        super().kill()

    @property
    def v2_url(self) -> str:
        return f"http://127.0.0.1:{self._door.server_port}"

    def query(self, text: str, *, post: bool = False) -> str:
        query = urllib.parse.urlencode({"db": self.database, "q": text, "epoch": "ms"})
        request = urllib.request.Request(f"{self.url}/query?{query}", method="POST" if post else "GET")  # noqa: S310
        return urllib.request.urlopen(request).read().decode()  # noqa: S310

    def _pings(self) -> bool:
        with contextlib.suppress(OSError):
            return urllib.request.urlopen(f"{self.url}/ping").status == 204  # noqa: S310
        return False


def _door_to(influx: InfluxWithShim) -> type[BaseHTTPRequestHandler]:
    class Door(BaseHTTPRequestHandler):
        protocol_version = "HTTP/1.1"

        def do_POST(self) -> None:
            asked = urllib.parse.parse_qs(urllib.parse.urlsplit(self.path).query)
            body = self.rfile.read(int(self.headers["Content-Length"]))
            query = urllib.parse.urlencode({"db": asked["bucket"][0], "precision": asked["precision"][0]})
            headers = {"Content-Encoding": self.headers.get("Content-Encoding", "identity")}
            request = urllib.request.Request(f"{influx.url}/write?{query}", body, headers)  # noqa: S310
            try:
                with urllib.request.urlopen(request) as answer:  # noqa: S310
                    status, text = answer.status, answer.read()
            except urllib.error.HTTPError as error:
                with error:
                    status, text = error.code, error.read()
            self.send_response(status)
            self.send_header("Content-Length", str(len(text)))
            self.end_headers()
            self.wfile.write(text)

        def log_message(self, *_: object) -> None:
            pass

    return Door


_INFLUXD = """
reporting-disabled = true
bind-address = "127.0.0.1:{rpc}"
[meta]
  dir = "{folder}/meta"
[data]
  dir = "{folder}/data"
  wal-dir = "{folder}/wal"
[http]
  bind-address = "127.0.0.1:{port}"
[monitor]
  store-enabled = false
"""


@pytest.fixture
def influxd(tmp_path: Path) -> Iterator[InfluxWithShim]:
    server = InfluxWithShim(tmp_path / "influxd")
    server.start()
    yield server
    server.kill()
