"""The demo, whole: the daemon on the virtual shed for a minute, a phone, and a database that refuses what is wrong."""

import json
import threading

import jsonschema
import pytest
from click.testing import CliRunner

from fakes.daemon import phone
from idlerwatch.cli.broker import Broker as DemoBroker
from idlerwatch.cli.demo import SCENARIOS, play, shortened
from idlerwatch.cli.program import program
from idlerwatch.core.payloads import event_body
from idlerwatch.core.settings.model import Influx, Journal, Mqtt
from idlerwatch.core.values import AlarmEvent
from idlerwatch.core.watch.watch import Watch
from idlerwatch.edges.files import config_directory, load_settings, read_toml
from idlerwatch.edges.journal import JournalReader
from idlerwatch.rig.build import build_plant
from idlerwatch.rig.scenario import read_scenario
from idlerwatch.schemas import schema
from servers import broker, influxd

__all__ = ["broker", "influxd"]


@pytest.fixture
def installation():
    return load_settings(config_directory() / "example.toml")


def test_every_shipped_scenario_can_be_played_on_the_example(installation):
    plant = build_plant(installation)
    names = [meter.name for meter in installation.meter]
    for path in sorted(SCENARIOS.glob("*.toml")):
        assert read_scenario(path.stem, read_toml(path), plant, names).title


def test_a_scenario_of_ones_own_is_a_file(tmp_path, installation):
    own = tmp_path / "own.toml"
    own.write_text('title = "Mine"\nlasts_s = 5.0\n[[event]]\nat_s = 1.0\ndo = "start machine"\nwhat = "lathe"\n')
    shown = CliRunner().invoke(program, ["demo", "--scenario", str(own)])
    assert shown.exit_code == 2
    assert "event 1.what is 'lathe', must be a machine: resaw, planer, extractor, moulder" in shown.output
    shown = CliRunner().invoke(program, ["demo", "--scenario", "none"])
    assert "there is no scenario 'none'; there are" in shown.output


def test_delays_are_shortened_but_not_below_a_second(installation):
    low = installation.alarms["leg-low", ""]
    assert (low.on_delay_s, shortened(low).on_delay_s) == (60.0, 3.0)
    silent = installation.alarms["leg-meter-silent", ""]
    assert shortened(silent) == silent
    lost = installation.alarms["leg-lost", ""]
    assert (lost.on_delay_s, shortened(lost).on_delay_s) == (3.0, 1.0)


def test_a_bad_day_is_told_and_ends_well(installation, tmp_path, broker, influxd, capsys):
    settings = installation.model_copy(
        update={
            "mqtt": Mqtt(host="127.0.0.1", port=broker.port),
            "influx": Influx(url=influxd.v2_url, bucket=influxd.database),
            "journal": Journal(path=str(tmp_path / "journal"), commit_s=2.0),
            "alarms": {key: shortened(alarm) for key, alarm in installation.alarms.items()},
        }
    )
    names = [meter.name for meter in settings.meter]
    scenario = read_scenario("slipway", read_toml(SCENARIOS / "slipway.toml"), build_plant(settings), names)
    checked = Checked()
    with phone(broker.port) as listening:
        listening.on_payload = checked.take
        play(settings, scenario, DemoBroker(broker.port, "mosquitto", 5), 62.0, is_clock_right=lambda: True)
        raised = {message["tag"] for _, message in listening.messages if message["state"] == "unacknowledged"}
        over = {message["tag"] for _, message in listening.messages if message["state"] in ("normal", "returned")}
    assert checked.faults == []
    assert checked.kinds >= {"assessment", "message", "record"}
    assert len(raised & over) >= 2
    assert "supply-very-low" in raised & over
    assert {tag for tag in raised & over if tag.startswith("neutral-earth")}
    assert all(message["cause"] and message["advice"] for _, message in listening.messages)
    assert replayed(settings, tmp_path / "journal") == journaled(tmp_path / "journal")
    told = capsys.readouterr().out
    assert "messages reached the phone" in told
    assert not (tmp_path / "journal" / "refused").exists()
    assert list((tmp_path / "journal").glob("refused*")) == []
    counted = json.loads(influxd.query("SELECT COUNT(voltage) FROM leg"))
    assert counted["results"][0]["series"][0]["values"][0][1] > 0


def journaled(folder):
    """Each transition as the journal has it, bit for bit."""
    reader = JournalReader(folder)
    bodies = [event.body for event in reader.events("alarm")]
    reader.close()
    assert len(bodies) > 10
    return bodies


def replayed(settings, folder):
    """The same, from the recorded cycles fed to the core again."""
    reader = JournalReader(folder)
    watch, bodies = Watch.begin(settings), []
    for item in reader.inputs():
        watch, outputs = watch.take(item)
        bodies += [json.loads(json.dumps(event_body(event))) for event in outputs if isinstance(event, AlarmEvent)]
    reader.close()
    return bodies


class Checked:
    """Holds every payload against its schema."""

    def __init__(self) -> None:
        self.kinds: set[str] = set()
        self.faults: list[str] = []
        self._lock = threading.Lock()

    def take(self, level: str, payload: bytes) -> None:
        kind = {"assessment": "assessment", "message": "message"}.get(level, "record" if "alarm/" in level else "")
        if not kind or not payload:
            return
        with self._lock:
            self.kinds.add(kind)
            try:
                jsonschema.validate(json.loads(payload), schema(kind))
            except jsonschema.ValidationError as error:
                self.faults.append(f"{level}: {error.message}")
