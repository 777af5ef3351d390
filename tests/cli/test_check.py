"""The command `check`."""

from click.testing import CliRunner

from idlerwatch.cli.program import program
from idlerwatch.edges.files import config_directory

EXAMPLE = config_directory() / "example.toml"


def run(path):
    return CliRunner().invoke(program, ["check", "--settings", str(path)])


def changed(tmp_path, old, new):
    text = EXAMPLE.read_text()
    assert old in text
    path = tmp_path / "shed.toml"
    path.write_text(text.replace(old, new))
    return path


def words(result):
    return " ".join(result.output.split())


def test_example_is_without_fault_and_fits_eighty_columns_in_a_pipe():
    result = run(EXAMPLE)
    assert result.exit_code == 0
    assert "wiring level 3" in result.output
    assert all(len(line) <= 80 for line in result.output.splitlines())
    assert "\x1b" not in result.output


def test_angles_that_are_recovered_and_not_measured_are_told():
    assert "Angles between the legs are not measured; they are recovered" in words(run(EXAMPLE))


def test_every_fault_is_a_line_and_the_exit_code_is_2(tmp_path):
    path = changed(tmp_path, "stopbits = 1 ", "stopbits = 3 ")
    path.write_text(path.read_text().replace("voltage = 230.0 ", "voltage = -230.0 "))
    result = run(path)
    assert result.exit_code == 2
    assert [line.split(" is ")[0] for line in result.output.splitlines()] == ["supply.voltage", "bus.panel.stopbits"]


def test_bus_too_slow_for_the_cycle_is_advice_and_no_fault(tmp_path):
    result = run(changed(tmp_path, "baudrate = 19200", "baudrate = 2400"))
    assert result.exit_code == 0
    assert "The bus panel needs" in words(result)


def test_high_alarm_switched_off_is_told(tmp_path):
    path = changed(tmp_path, "# [alarms.leg-low]", "[alarms.leg-very-low]\nenabled = false\n# [alarms.leg-low]")
    assert "leg-very-low is switched off" in words(run(path))


def test_file_that_is_not_there_is_one_sentence(tmp_path):
    result = run(tmp_path / "none.toml")
    assert result.exit_code == 2
    assert len(result.output.splitlines()) == 1
