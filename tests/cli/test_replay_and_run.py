"""``replay`` and ``run`` as commands: what they print, and what they refuse."""

import subprocess
import sys

import pytest
from click.testing import CliRunner

from fakes.daemon import SOURCE, example
from idlerwatch.cli.program import program
from idlerwatch.core.values import CycleEnd, MeterSilent, Reading
from idlerwatch.edges.journal import Journal

UTC = 1796104800.0
LOADED = {"supply": (230.0, 20.0, 3500.0), "leg1": (230.0, 8.0, 1200.0), "leg2": (228.0, 8.0, 1200.0),
          "leg3": (229.0, 8.0, 1200.0)}  # fmt: skip


@pytest.fixture
def settings(tmp_path):
    path = tmp_path / "idlerwatch.toml"
    path.write_text(example(tmp_path, "nowhere", 1883))
    return path


def record(folder, cycles, volts_of):
    """Cycles a second apart, written as the service writes them."""
    journal = Journal(folder, utc=lambda: UTC)
    for second in range(cycles):
        at = 100.0 + second
        readings = [
            Reading(name, at, {(1, "voltage"): volts_of(second, name, volts), (1, "current"): amperes,
                               (1, "active_power"): watts, (1, "reactive_power"): 900.0, (0, "frequency"): 50.0})
            for name, (volts, amperes, watts) in LOADED.items()
        ]  # fmt: skip
        journal.add_cycle([*readings, MeterSilent("bank", at, "no answer")], CycleEnd(at, UTC - 100.0), 1)
    journal.close()


def test_a_recorded_day_is_told_again(settings, tmp_path):
    def sagging(second, name, volts):
        return 180.0 if 100 <= second < 160 and name in ("supply", "leg1") else volts

    record(tmp_path / "journal", 300, sagging)
    shown = CliRunner().invoke(program, ["replay", "--settings", str(settings), "--every", "100"])
    assert shown.exit_code == 0, shown.output
    assert "MESSAGE (high) NOW:" in shown.output
    assert "180 V" in shown.output
    assert "MESSAGE (high) OK again" in shown.output
    assert shown.output.endswith("300 samples replayed.\n")


def test_other_settings_judge_the_same_day_otherwise(settings, tmp_path):
    record(tmp_path / "journal", 120, lambda second, name, volts: 200.0 if name == "leg2" and second > 20 else volts)
    settings.write_text(settings.read_text() + "\n[alarms.leg-low]\nsetpoint = 0.80\n")
    shown = CliRunner().invoke(program, ["replay", "--settings", str(settings)])
    assert "L2 is low" not in shown.output
    settings.write_text(settings.read_text().replace("setpoint = 0.80", "setpoint = 0.90"))
    shown = CliRunner().invoke(program, ["replay", "--settings", str(settings)])
    assert "L2 is low" in shown.output


def test_a_journal_that_is_not_there_is_one_sentence(settings):
    shown = CliRunner().invoke(program, ["replay", "--settings", str(settings), "--journal", "nowhere"])
    assert shown.exit_code == 2
    assert "nowhere is no journal, must be a folder; name it with --journal" in shown.output


def test_a_daemon_that_nobody_would_hear_refuses_to_run(tmp_path, settings):
    whole = settings.read_text()
    start, end = whole.index("[mqtt]"), whole.index("[people]")
    settings.write_text(whole[:start] + whole[end:])
    command = [sys.executable, "-m", "idlerwatch", "run", "--settings", str(settings)]
    ended = subprocess.run(command, capture_output=True, text=True, check=False, timeout=30.0,
                           env={"PYTHONPATH": str(SOURCE), "PATH": ""})  # fmt: skip
    assert ended.returncode == 2
    assert ended.stderr == (
        "the settings is without any way out, must hold [mqtt], [influx] or [journal]: nobody would hear it\n"
    )


def test_settings_that_are_not_there_are_one_sentence(tmp_path):
    shown = CliRunner().invoke(program, ["run", "--settings", str(tmp_path / "none.toml")])
    assert shown.exit_code == 2
    assert "none.toml is unreadable (No such file or directory), must be a file to read" in shown.output
