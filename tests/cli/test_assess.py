"""The command `assess`."""

import json
import math

import pytest
from click.testing import CliRunner

from idlerwatch.cli.assess import command
from idlerwatch.cli.program import program

EVEN_LEGS = ["L1-N=230", "L2-N=230", "L3-N=230"]
LINES = ["L1-L2=462", "L2-L3=463", "L3-L1=455", "--feed", "L1-L2", "--voltage", "460"]


def run(*words):
    return CliRunner().invoke(command, list(words))


def figure(result, quantity):
    (moment,) = json.loads(result.output, parse_constant=pytest.fail)
    return moment["figures"]["converter"]["converter"][quantity]["value"]


def test_three_line_voltages_give_rate_and_factor():
    """Largest deviation 5 V of the mean 460 V; the factor after Fortescue from the triangle's sides."""
    sides = [462.0, 463.0, 455.0]
    beta = sum(side**4 for side in sides) / sum(side**2 for side in sides) ** 2
    root = math.sqrt(3.0 - 6.0 * beta)
    result = run(*LINES, "--json")
    assert result.exit_code == 0, result.output
    assert figure(result, "line_voltage_unbalance_rate") == pytest.approx(5 / 460, rel=1e-5)
    assert figure(result, "voltage_unbalance_factor") == pytest.approx(math.sqrt((1 - root) / (1 + root)), rel=1e-3)


def test_legs_to_neutral_alone_give_no_unbalance_factor_but_null():
    result = run(*EVEN_LEGS, "--json")
    assert result.exit_code == 0, result.output
    assert figure(result, "voltage_unbalance_factor") is None
    assert json.loads(result.output)[0]["angles"] == "not seen"


def test_file_gives_one_moment_a_row(tmp_path):
    path = tmp_path / "clamp.csv"
    path.write_text("L1-N,L2-N,L3-N\n230,229,231\n230,221,231\n")
    result = run(str(path), "--json")
    assert result.exit_code == 0, result.output
    assert len(json.loads(result.output)) == 2


@pytest.mark.parametrize(
    "words",
    [["L1-N=foo"], ["L1-N=nan"], ["L9=3"], ["L1-N=-1"], ["L1-N"], ["no-such-file.csv"], ["L1-N=230", "--feed", "L9"]],
)
def test_what_cannot_be_read_is_a_sentence_and_exit_2(words):
    result = CliRunner().invoke(program, ["assess", *words])
    assert result.exit_code == 2
    assert "Traceback" not in result.output


def test_even_legs_over_uneven_lines_are_made_plain():
    """231/227/229 V to neutral: 0.9 %; 404/381/399 V between lines: 3.5 % (arithmetic on the definitions)."""
    result = run("L1-N=231", "L2-N=227", "L3-N=229", "L1-L2=404", "L2-L3=381", "L3-L1=399")
    text = " ".join(result.output.split())
    assert result.exit_code == 0
    assert "The legs look more even than the lines are: 0.9 % to neutral, but machines on the lines see 3.5 %." in text


@pytest.mark.parametrize(
    "words",
    [["L1-L2=100", "L2-L3=100", "L3-L1=230"],
     ["L1-N=230", "L2-N=229", "L3-N=231", "L1-L2=399", "L2-L3=397", "L3-L1=470"]],
)  # fmt: skip
def test_voltages_that_cannot_all_be_right_are_told_by_their_own_words_and_exit_1(words):
    result = run(*words)
    text = " ".join(result.output.split())
    assert result.exit_code == 1
    assert "the voltages contradict each other: one of " in text
    assert "'s L" not in text
    assert "No unbalance is told from voltages that cannot all be right" in text
    assert "Measure the three line voltages" not in text


def test_a_centre_tapped_supply_is_judged_by_its_lines():
    words = ["L1-N=120", "L2-N=120", "L3-N=208", "L1-L2=240", "L2-L3=240", "L3-L1=240"]
    result = run("--feed", "L1-L2", "--voltage", "240", "--neutral", "centre-tap", *words, "--json")
    assert figure(result, "voltage_unbalance_factor") == pytest.approx(0.0, abs=0.003)
    assert figure(result, "phase_voltage_unbalance_rate") is None
