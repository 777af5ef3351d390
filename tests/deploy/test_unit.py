"""The systemd unit, the udev rule and what must be loaded before: they fit each other and hold what they promise."""

import re
import shutil
import subprocess
from pathlib import Path

import pytest

from servers import binary

DEPLOY = Path(__file__).parents[2] / "deploy"
UNIT = DEPLOY / "idlerwatch.service"


@pytest.fixture
def checkable(tmp_path):
    """Return a copy whose program exists on this machine, which `verify` asks for."""
    copy = tmp_path / UNIT.name
    text = UNIT.read_text()
    copy.write_text(re.sub(r"^ExecStart=\S+", f"ExecStart={shutil.which('true')}", text, flags=re.MULTILINE))
    return copy


def analyze(*words: str | Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [binary("systemd-analyze"), *map(str, words)], capture_output=True, text=True, timeout=60, check=False
    )


def test_systemd_understands_every_line_of_the_unit(checkable):
    found = analyze("verify", "--recursive-errors=no", "--man=no", checkable)

    assert (found.returncode, found.stderr) == (0, "")


def test_a_misspelt_line_would_have_been_found(checkable):
    checkable.write_text(checkable.read_text().replace("UMask=", "UMaks="))

    assert analyze("verify", "--recursive-errors=no", "--man=no", checkable).stderr != ""


def test_the_exposure_of_the_service_is_at_most_1_5(checkable):
    # 1.3 is what a service with a serial port and a network can reach; 0.1 goes to networks besides this board's own
    assert analyze("security", "--offline=true", "--threshold=15", "--no-pager", checkable).returncode == 0


def test_the_drivers_the_unit_may_open_are_loaded_before_it():
    devices = set(re.findall(r"^DeviceAllow=char-(\w+)", UNIT.read_text(), re.MULTILINE))
    lines = (DEPLOY / "modules-load.conf").read_text().splitlines()
    modules = {line for line in lines if line and not line.startswith("#")}

    driver_of = {
        "ttyUSB": "usbserial",
        "ttyACM": "cdc_acm",
    }  # the kernel's names, Documentation/admin-guide/devices.txt
    assert modules == {driver_of[device] for device in devices}
    assert "systemd-modules-load.service" in re.findall(r"^After=(.*)$", UNIT.read_text(), re.MULTILINE)[0].split()


def test_the_rule_names_adapters_of_every_driver_the_unit_may_open():
    devices = set(re.findall(r"^DeviceAllow=char-(\w+)", UNIT.read_text(), re.MULTILINE))
    rule = (DEPLOY / "70-idlerwatch.rules").read_text()

    assert re.findall(r'KERNEL!="([^"]*)"', rule) == ["|".join(f"{device}*" for device in ("ttyUSB", "ttyACM"))]
    assert devices == {"ttyUSB", "ttyACM"}
    jumps = re.findall(r'GOTO="(\w+)"', rule)
    assert set(jumps) == set(re.findall(r'LABEL="(\w+)"', rule))


def test_the_watchdog_leaves_time_for_several_cycles():
    assert int(re.findall(r"^WatchdogSec=(\d+)$", UNIT.read_text(), re.MULTILINE)[0]) >= 10
