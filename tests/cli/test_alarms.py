"""The command `alarms`."""

import json

import pytest
from click.testing import CliRunner

from fakes.alarm_scenes import LIST
from idlerwatch.cli.alarms import command
from idlerwatch.edges.files import config_directory

EXAMPLE = str(config_directory() / "example.toml")


def test_table_lists_the_alarms_in_force_and_says_why_others_are_not():
    result = CliRunner().invoke(command, ["--settings", EXAMPLE])
    assert result.exit_code == 0
    assert "leg-low" in result.output
    assert "no bank is open in running" in result.output


def test_json_holds_every_alarm_of_the_list_with_its_reason():
    result = CliRunner().invoke(command, ["--settings", EXAMPLE, "--json"])
    rows = {row["tag"]: row for row in json.loads(result.output) if not row["subject"]}
    assert set(rows) == set(LIST)
    assert rows["leg-low"]["not_available"] == ""
    assert rows["leg-low"]["setpoint"] == pytest.approx(0.9)
    assert rows["off-normal"]["not_available"] == ""
    assert rows["coil-margin"]["not_available"] == "needs the coils' voltages to be followed"


def test_settings_file_that_is_not_there_is_a_usage_fault():
    assert CliRunner().invoke(command, ["--settings", "no-such-file.toml"]).exit_code == 2
