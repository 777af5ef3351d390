"""The broker's settings as `install.sh --broker` puts them down: who gets in, and who may do what."""

import re
import subprocess
from pathlib import Path

import pytest

from servers import Server, binary, free_port

CLONE = Path(__file__).parents[2]
MAIN = """
pid_file {folder}/mosquitto.pid
persistence true
persistence_location {folder}/
user root
include_dir {folder}/etc/mosquitto/conf.d
"""
"""The distribution's own mosquitto.conf, which reads ours."""


def install(root: Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        ["sh", str(CLONE / "deploy/install.sh"), "--root", str(root), "--files-only", "--broker"],
        capture_output=True,
        text=True,
        timeout=60,
        check=True,
    )


@pytest.fixture
def installed(tmp_path):
    binary("mosquitto_passwd")
    install(tmp_path)
    return tmp_path


@pytest.fixture
def broker(installed):
    """A broker with the installed settings, on another port and with the files where they were put."""
    port = free_port()
    settings = installed / "etc/mosquitto/conf.d/idlerwatch.conf"
    text = settings.read_text().replace("listener 1883", f"listener {port} 127.0.0.1")
    settings.write_text(re.sub(r"(_file) /etc", rf"\1 {installed}/etc", text))
    main = installed / "mosquitto.conf"
    main.write_text(MAIN.format(folder=installed))
    server = Server([binary("mosquitto"), "-c", str(main)], port, installed / "mosquitto.log")
    server.start()
    yield server
    server.kill()


def login(installed: Path, user: str) -> list[str]:
    secret = {"boatshed": "mqtt-password", "phone": "phone-password"}.get(user)
    return ["-u", user, "-P", (installed / "etc/idlerwatch" / secret).read_text()] if secret else []


def publish(broker: Server, words: list[str], topic: str, text: str) -> subprocess.CompletedProcess[str]:
    command = [binary("mosquitto_pub"), "-V", "5", "-p", str(broker.port), "-q", "1", "-r", *words]
    return subprocess.run(
        [*command, "-t", topic, "-m", text], capture_output=True, text=True, timeout=20, check=False
    )  # fmt: skip


def read(broker: Server, words: list[str], topic: str) -> str:
    command = [binary("mosquitto_sub"), "-V", "5", "-p", str(broker.port), "-C", "1", "-W", "10", *words]
    return subprocess.run([*command, "-t", topic], capture_output=True, text=True, timeout=20, check=False).stdout


def test_the_converter_tells_and_a_phone_reads(broker, installed):
    topic = "idlerwatch/slipway/boatshed/lamp"

    assert publish(broker, login(installed, "boatshed"), topic, "fine").stderr == ""
    assert read(broker, login(installed, "phone"), topic) == "fine\n"


def test_the_converter_finds_its_own_records_to_empty_them(broker, installed):
    topic = "idlerwatch/slipway/boatshed/alarm/leg-low/l2"
    publish(broker, login(installed, "boatshed"), topic, "{}")

    assert read(broker, login(installed, "boatshed"), "idlerwatch/slipway/boatshed/alarm/+/+") == "{}\n"


@pytest.mark.parametrize(
    ("user", "topic"),
    [
        ("boatshed", "idlerwatch/slipway/another/lamp"),
        ("phone", "idlerwatch/slipway/boatshed/lamp"),
        ("phone", "idlerwatch/slipway/boatshed/acknowledge"),
    ],
)
def test_nobody_tells_what_is_not_his(broker, installed, user, topic):
    assert "Not authorized" in publish(broker, login(installed, user), topic, "fine").stderr


def test_a_phone_may_acknowledge_once_the_line_is_taken_in(broker, installed):
    acl = installed / "etc/mosquitto/idlerwatch.acl"
    acl.write_text(acl.read_text().replace("#topic write", "topic write"))
    broker.stop()
    broker.start()
    topic = "idlerwatch/slipway/boatshed/acknowledge"

    assert publish(broker, login(installed, "phone"), topic, "{}").stderr == ""
    assert read(broker, login(installed, "boatshed"), topic) == "{}\n"


def test_nobody_gets_in_without_a_password(broker, installed):
    assert "ot authori" in publish(broker, login(installed, "stranger"), "idlerwatch/a/b/lamp", "fine").stderr


def test_passwords_are_kept_and_closed_to_others(installed):
    files = [
        installed / name
        for name in ("etc/mosquitto/idlerwatch.passwd", "etc/idlerwatch/phone-password", "etc/idlerwatch/mqtt-password")
    ]
    first = [file.read_bytes() for file in files]

    install(installed)

    assert [file.read_bytes() for file in files] == first
    assert [oct(file.stat().st_mode & 0o777) for file in files] == ["0o640", "0o600", "0o640"]


def test_the_settings_never_save_on_changes(installed):
    settings = (installed / "etc/mosquitto/conf.d/idlerwatch.conf").read_text().splitlines()

    # a retained topic each second would otherwise write a gigabyte a day
    assert "autosave_on_changes false" in settings
    assert "persistence true" in settings
