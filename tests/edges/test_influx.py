import gzip
import json
import threading
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer

import pytest

from fakes.findings import UTC, event, row
from idlerwatch.core.blocks import Window
from idlerwatch.core.settings.model import Influx as Settings
from idlerwatch.core.values import WindowRow
from idlerwatch.edges.influx import REFUSED_FILE, Influx
from idlerwatch.edges.journal import Cursor, Journal
from idlerwatch.edges.outlet import Away, Outlet, Pace
from servers import free_port, wait_until


def writer(url, folder, timeout_s=10.0):
    settings = Settings(url=url, org="workshop", bucket="converter")
    return Influx(settings, "slipway", "boatshed", token="token", folder=folder, timeout_s=timeout_s)  # noqa: S106


def windows(rows):
    return [Window(n + 1, one) for n, one in enumerate(rows)]


class Database:
    """Answers as it is told to, and keeps the lines of what it accepted."""

    def __init__(self):
        self.answers, self.lines, self.requests = [], [], 0
        self.most_lines = 10_000
        self.hangs = threading.Event()
        database = self

        class Handler(BaseHTTPRequestHandler):
            protocol_version = "HTTP/1.1"

            def do_POST(self):
                database.requests += 1
                body = self.rfile.read(int(self.headers["Content-Length"]))
                text = gzip.decompress(body) if self.headers.get("Content-Encoding") == "gzip" else body
                lines = text.decode().split("\n")
                if database.hangs.is_set():
                    wait_until(lambda: not database.hangs.is_set())
                status, headers, answer = database.answers.pop(0) if database.answers else (204, {}, b"")
                if status == "reset":
                    self.connection.close()
                    return
                if len(lines) > database.most_lines:
                    status, answer = 413, b"<html>too large</html>"
                if status == 204:
                    database.lines += lines
                self.send_response(status)
                for name, value in headers.items():
                    self.send_header(name, value)
                self.send_header("Content-Length", str(len(answer)))
                self.end_headers()
                self.wfile.write(answer)

            def log_message(self, *_):
                pass

        self._server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
        self._server.handle_error = lambda *_: None
        threading.Thread(target=self._server.serve_forever, daemon=True).start()
        self.url = f"http://127.0.0.1:{self._server.server_port}"

    def close(self):
        self.hangs.clear()
        self._server.shutdown()
        self._server.server_close()


@pytest.fixture
def database():
    database = Database()
    yield database
    database.close()


def test_windows_land_in_a_database_and_read_back_as_they_were(victoria, tmp_path):
    influx = writer(victoria.url, tmp_path)
    rows = [row(n, voltage=230.25 + n, count=10.0) for n in range(30)]
    assert influx.send(windows(rows)) == 30
    (series,) = [json.loads(line) for line in victoria.export("leg_voltage").splitlines()]
    assert series["values"] == [230.25 + n for n in range(30)]
    assert series["timestamps"] == [round((UTC + 10 * n) * 1000) for n in range(30)]
    tags = {"site": "slipway", "converter": "boatshed", "window": "10s", "subject": "l2"}
    assert series["metric"].items() >= tags.items()
    influx.close()


def test_a_database_that_comes_later_gets_the_whole_backlog(tmp_path, victoria):
    victoria.kill()
    said = []
    journal = Journal(tmp_path / "journal")
    journal.add_windows([row(n, voltage=230.0) for n in range(2000)])
    journal.flush()
    cursor = Cursor(journal.path, "influx", at_first=0)
    sender = writer(victoria.url, journal.path)
    outlet = Outlet("window", journal, cursor, sender, report=said.append, pace=Pace(500, 0.02, 0.1))
    outlet.start()
    wait_until(lambda: said)
    assert "does not answer" in said[0]
    assert cursor.at == 0
    victoria.start()
    wait_until(lambda: cursor.at == 2000)
    outlet.stop()
    (series,) = [json.loads(line) for line in victoria.export("leg_voltage").splitlines()]
    assert len(series["values"]) == 2000
    assert said[1:] == [""]
    journal.close()


def test_every_line_is_accepted_by_a_database_that_refuses_what_is_wrong(influxd, tmp_path):
    awkward = [
        WindowRow("10s", UTC, "leg", "a b,c=d", {"voltage": 1e-7, "current": 1e12, "power": -0.0, "count": 3.0}),
        WindowRow("10min", UTC + 0.0005, "bank", "run\\", {"current ratio": 0.5, "a,b": 1.0, "a=b": 2.0}),
        WindowRow("1h", UTC, "supply, main", "supply", {"voltage": float("nan"), "count": 360.0}),
        WindowRow("1h", UTC, "supply", "supply", {"voltage": float("nan")}),
    ]
    influx = writer(influxd.v2_url, tmp_path)
    assert influx.send(windows([*awkward, *(row(n) for n in range(50))])) == 54
    assert not (tmp_path / REFUSED_FILE).exists()
    answer = json.loads(influxd.query('SELECT count("count") FROM /.*/'))
    counts = {series["name"]: series["values"][0][1] for series in answer["results"][0]["series"]}
    assert counts == {"leg": 51, "supply, main": 1}
    influx.close()


def test_exactly_the_poison_lines_are_set_aside_with_the_databases_sentence(influxd, tmp_path):
    influx = writer(influxd.v2_url, tmp_path)
    # fields whose type the database has fixed as text before
    _write_plain(influxd, 'leg,converter=boatshed,site=slipway,subject=l9,window=10s spoilt="text" 1796104800000')
    rows = [row(n, voltage=230.0) for n in range(200)]
    for n in (17, 18, 130):
        rows[n] = row(n, subject="l9", spoilt=1.0)
    assert influx.send(windows(rows)) == 200
    aside = (tmp_path / REFUSED_FILE).read_text().splitlines()
    refused = [line for line in aside if not line.startswith("#")]
    assert [int(line.rsplit(" ", 1)[1]) for line in refused] == [round((UTC + 10 * n) * 1000) for n in (17, 18, 130)]
    assert all("conflict" in line for line in aside if line.startswith("#"))
    answer = json.loads(influxd.query('SELECT count("voltage") FROM leg'))
    assert answer["results"][0]["series"][0]["values"][0][1] == 197
    influx.close()


def _write_plain(influxd, line):
    import urllib.request  # noqa: PLC0415

    url = f"{influxd.url}/write?db=converter&precision=ms"
    urllib.request.urlopen(urllib.request.Request(url, line.encode())).read()  # noqa: S310


@pytest.mark.parametrize("status", [401, 403, 404, 429, 500, 503])
def test_what_does_not_lie_in_the_lines_keeps_them(database, tmp_path, status):
    database.answers = [(status, {}, b'{"message": "not now"}')]
    influx = writer(database.url, tmp_path)
    with pytest.raises(Away, match=f"{status}: not now"):
        influx.send(windows([row()]))
    assert influx.send(windows([row()])) == 1
    assert len(database.lines) == 1
    assert not (tmp_path / REFUSED_FILE).exists()
    influx.close()


def test_the_database_may_ask_for_a_while(database, tmp_path):
    database.answers = [(429, {"Retry-After": "17"}, b"")]
    influx = writer(database.url, tmp_path)
    with pytest.raises(Away) as away:
        influx.send(windows([row()]))
    assert away.value.retry_after_s == 17.0
    influx.close()


def test_an_unknown_organisation_is_no_fault_of_the_lines(database, tmp_path):
    database.answers = [(400, {}, b'{"message": "organization name \\"workshop\\" not found"}')]
    influx = writer(database.url, tmp_path)
    with pytest.raises(Away, match="not found"):
        influx.send(windows([row()]))
    influx.close()


def test_what_is_too_large_is_sent_in_parts(database, tmp_path):
    database.most_lines = 7
    influx = writer(database.url, tmp_path)
    assert influx.send(windows([row(n) for n in range(50)])) == 50
    assert len(database.lines) == 50
    influx.close()


@pytest.mark.parametrize("fault", ["hang", "reset", "nobody"])
def test_no_answer_keeps_everything(database, tmp_path, fault):
    url = f"http://127.0.0.1:{free_port()}" if fault == "nobody" else database.url
    database.answers = [("reset", {}, b"")] if fault == "reset" else []
    if fault == "hang":
        database.hangs.set()
    influx = writer(url, tmp_path, timeout_s=0.2)
    with pytest.raises(Away, match="does not answer"):
        influx.send(windows([row()]))
    influx.close()


def test_an_event_of_the_journal_is_no_line(database, tmp_path):
    journal = Journal(tmp_path)
    journal.add_alarm(event())
    journal.close()
    assert writer(database.url, tmp_path).send(windows([row(voltage=float("nan"))])) == 1
    assert database.requests == 0
