"""From the wire to the phone: pymodbus plays the meters, mosquitto is the broker, victoria-metrics the database.

How fast it goes is measured in ``tests/bench``; here it is shown that it arrives, and that it goes back.
"""

import json

import pytest

from fakes.daemon import METERS, daemon, phone, shed
from fakes.peer import peer
from idlerwatch.core import payloads
from idlerwatch.edges.journal import JournalReader
from servers import wait_until

LEG_LOW = """
[alarms.leg-low]
on_delay_s = 1.0
off_delay_s = 1.0
"""


@pytest.fixture
def meters():
    with peer(METERS) as playing:
        yield playing


def standing(listening, level="alarm/leg-low/l2"):
    return listening.json(level).get("state")


def test_a_leg_twelve_percent_low_reaches_the_phone_and_its_return_too(tmp_path, meters, broker, victoria):
    influx = f'\n[influx]\nurl = "{victoria.url}"\norg = "workshop"\nbucket = "converter"\n'
    settings = shed(tmp_path, meters.port, broker.port, influx + LEG_LOW)
    with phone(broker.port) as listening, daemon(tmp_path, settings) as running:
        wait_until(lambda: listening.json("assessment").get("loading") == "loaded", 20.0, "a loaded converter")
        assert listening.latest["watching"] == b"yes"
        assert listening.latest["lamp"] == b"fine"
        meters.set(12, voltage=0.88 * 230.0)
        wait_until(lambda: listening.of("leg-low"), 10.0, "a message")
        raised = listening.of("leg-low")[0][1]
        assert raised["state"] == "unacknowledged"
        assert raised["subject"] == "l2"
        assert raised["value"] == pytest.approx(0.88, abs=1e-4)
        assert raised["text"].startswith("TODAY:")
        assert "202 V" in raised["text"]
        wait_until(lambda: standing(listening) == "unacknowledged", what="the retained record")
        assert listening.json("alarm/leg-low/l2")["occurrence"] == raised["occurrence"]
        wait_until(lambda: listening.latest["lamp"] == b"look", what="the lamp")
        meters.set(12, voltage=229.0)
        wait_until(lambda: len(listening.of("leg-low")) > 1, 10.0, "the return")
        over = listening.of("leg-low")[1][1]
        assert over["state"] == "normal"
        assert over["occurrence"] == raised["occurrence"]
        assert over["text"].startswith("OK")
        wait_until(lambda: listening.latest["alarm/leg-low/l2"] == b"", what="an emptied record")
        wait_until(lambda: "leg_voltage" in victoria_names(victoria), 30.0, "windows in the database")
        assert running.stop() == 0
    rows = [json.loads(row) for row in victoria.export("leg_voltage").splitlines()]
    of_leg1 = next(row for row in rows if row["metric"]["subject"] == "l1" and row["metric"]["window"] == "10s")
    assert of_leg1["metric"]["site"] == "slipway"
    assert of_leg1["values"] == pytest.approx([230.0] * len(of_leg1["values"]), abs=0.01)


def victoria_names(victoria):
    return {json.loads(row)["metric"]["__name__"] for row in victoria.export('{window="10s"}').splitlines()}


def test_when_it_ends_nobody_is_left_believing_it_watches(tmp_path, meters, broker):
    with phone(broker.port) as listening, daemon(tmp_path, shed(tmp_path, meters.port, broker.port)) as running:
        wait_until(lambda: listening.latest.get("watching") == b"yes", 20.0, "a watch")
        running.kill()
        wait_until(lambda: listening.latest.get("watching") == b"no", 30.0, "the will")


def test_settings_that_are_in_order_replace_the_parts_and_faulty_ones_are_refused(tmp_path, meters, broker):
    settings = shed(tmp_path, meters.port, broker.port)
    with phone(broker.port) as listening, daemon(tmp_path, settings) as running:
        wait_until(lambda: listening.json("assessment").get("settings") == 1, 20.0, "an assessment")
        (tmp_path / "idlerwatch.toml").write_text(settings.replace("rated_kw = 4.0", "rated_kw = -4.0"))
        running.reload()
        wait_until(lambda: "machine.planer.rated_kw is -4.0, must be greater than 0" in running.log, 10.0, "a refusal")
        seen = listening.json("assessment")["at"]
        wait_until(lambda: listening.json("assessment")["at"] > seen, 10.0, "assessments going on")
        assert listening.json("assessment")["settings"] == 1
        (tmp_path / "idlerwatch.toml").write_text(settings.replace("rated_kw = 4.0", "rated_kw = 5.0"))
        running.reload()
        wait_until(lambda: listening.json("assessment").get("settings") == 2, 20.0, "the new settings")
        assert running.stop() == 0


def test_broker_and_database_that_come_later_get_everything(tmp_path, meters, broker, victoria):
    broker.kill()
    victoria.kill()
    influx = f'\n[influx]\nurl = "{victoria.url}"\norg = "workshop"\nbucket = "converter"\n'
    settings = shed(tmp_path, meters.port, broker.port, influx + LEG_LOW)
    with daemon(tmp_path, settings) as running:
        wait_until(lambda: (tmp_path / "journal").is_dir() and list((tmp_path / "journal").glob("events-*")), 20.0)
        meters.set(12, voltage=0.88 * 230.0)
        journal_says(tmp_path / "journal", "leg-low", "unacknowledged")
        broker.start()
        victoria.start()
        with phone(broker.port) as listening:
            wait_until(lambda: standing(listening) == "unacknowledged", 40.0, "the alarm from before")
            wait_until(lambda: "leg_voltage" in victoria_names(victoria), 60.0, "windows from before")
        assert running.stop() == 0


def test_a_restarted_daemon_keeps_an_alarm_under_its_name(tmp_path, meters, broker):
    settings = shed(tmp_path, meters.port, broker.port, LEG_LOW)
    with phone(broker.port) as listening:
        with daemon(tmp_path, settings) as running:
            wait_until(lambda: listening.json("assessment").get("loading") == "loaded", 20.0, "a loaded converter")
            meters.set(12, voltage=0.88 * 230.0)
            wait_until(lambda: listening.of("leg-low"), 10.0, "a message")
            running.kill()
        occurrence = listening.of("leg-low")[0][1]["occurrence"]
        with daemon(tmp_path, settings) as running:
            wait_until(lambda: listening.json("assessment").get("alarms"), 20.0, "an assessment with the alarm")
            assert occurrence in [alarm["occurrence"] for alarm in listening.json("assessment")["alarms"]]
            meters.set(12, voltage=229.0)
            wait_until(lambda: listening.of("leg-low")[-1][1]["state"] == "normal", 20.0, "the return")
            assert listening.of("leg-low")[-1][1]["occurrence"] == occurrence
            assert running.stop() == 0
        # killed between the broker's receipt and its own note of it, it says the same once more, under the same name
        assert {message["id"] for _, message in listening.messages} == {f"{occurrence}/1", f"{occurrence}/2"}


def journal_says(folder, tag, state):
    def has() -> bool:
        reader = JournalReader(folder)
        try:
            alarms = [payloads.read_event(event.body).alarm for event in reader.events("alarm")]
        finally:
            reader.close()
        return any(alarm.tag == tag and alarm.state == state for alarm in alarms)

    wait_until(has, 30.0, f"{tag} {state} in the journal")


def test_a_damaged_circuit_is_said_in_one_sentence_and_the_daemon_runs(tmp_path, meters, broker):
    folder = tmp_path / "journal" / "circuit"
    folder.mkdir(parents=True)
    (folder / "20261130T100000Z.toml").write_text("version = 1\nlearned_at = 7\n")
    with phone(broker.port) as listening, daemon(tmp_path, shed(tmp_path, meters.port, broker.port)) as running:
        wait_until(lambda: listening.json("assessment").get("loading") == "loaded", 20.0, "a loaded converter")
        remarks = " ".join(listening.json("assessment")["remarks"])
        assert "20261130T100000Z.toml: learned_at is 7, must be a text; the plate's values serve" in remarks
        assert running.stop() == 0
