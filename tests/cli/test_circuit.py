"""``circuit learn``, ``accept`` and ``history``: a day on the rig is recorded, learned, accepted, and judged by.

The journal is written as the service writes it, faster than it happens.
"""

import tomllib
from dataclasses import replace

import numpy as np
import pytest
from click.testing import CliRunner

from fakes.daemon import example
from fakes.days import LOADS, Shed, started
from idlerwatch.cli.program import program
from idlerwatch.core.values import Assessment, CycleEnd, Reading
from idlerwatch.core.watch.watch import Watch
from idlerwatch.edges.circuit_file import in_force
from idlerwatch.edges.files import load_settings
from idlerwatch.edges.journal import Journal

UTC = 1_790_000_000.0
SEED = 5


@pytest.fixture(scope="module")
def shop(tmp_path_factory):
    """Settings with a journal that holds a day of twelve load states."""
    folder = tmp_path_factory.mktemp("shop")
    path = folder / "idlerwatch.toml"
    path.write_text(example(folder, "nowhere", 1883))
    settings = load_settings(path)
    record(folder / "journal", settings, LOADS)
    return path


def record(folder, settings, loads, spoil=lambda item: item):
    journal = Journal(folder, utc=lambda: UTC)
    shed = started(Shed(settings, SEED))
    write(journal, shed.steady(15), spoil)
    for supply, machines in loads:
        shed.fault(supply_ratio=supply).machines(**machines).settle(3.0)
        write(journal, shed.steady(6), spoil)
    journal.close()


def write(journal, inputs, spoil):
    readings = []
    for item in inputs:
        if isinstance(item, CycleEnd):
            journal.add_cycle(readings, item, 1)
            readings = []
        else:
            readings.append(spoil(item))


def call(*words, **more):
    return CliRunner().invoke(program, ["circuit", *map(str, words)], **more)


def test_a_day_is_learned_accepted_and_judged_by(shop):
    journal = shop.parent / "journal"
    assert in_force(journal)[0] is None
    shown = call("learn", "--settings", shop)
    assert shown.exit_code == 0, shown.output
    assert "distinct load states" in shown.output
    assert "The circuit fits" in shown.output
    assert "It serves once it is accepted" in shown.output.replace("\n  ", " ")
    assert in_force(journal)[0] is None

    (file,) = (journal / "circuit").glob("*.toml")
    read = tomllib.loads(file.read_text())
    assert read["states"] >= 8
    assert read["lowest_supply_volts"] < 225.0
    assert read["highest_supply_volts"] > 245.0
    assert "not accepted" in call("history", "--settings", shop).output

    refused = call("accept", "--settings", shop, "--by", "A. Wright", input="n\n")
    assert refused.exit_code == 1
    assert "compare with a clamp meter" in refused.output.replace("\n  ", " ")
    assert in_force(journal)[0] is None

    taken = call("accept", "--settings", shop, "--by", "A. Wright", input="y\n")
    assert taken.exit_code == 0, taken.output
    known, sentence = in_force(journal)
    assert sentence == ""
    assert known.accepted_by == "A. Wright"
    assert "IN FORCE" in call("history", "--settings", shop).output

    settings = load_settings(shop)
    shed = started(Shed(settings, SEED)).machines(planer=0.45, extractor=0.4).settle(3.0)
    watch, last = Watch.begin(settings, known=known), None
    for item in shed.steady(5):
        watch, outputs = watch.take(item)
        last = next((output for output in outputs if isinstance(output, Assessment)), last)
    assert last.angles == "recovered"
    assert abs(last.figure("converter", "converter", "off_normal").value) < 0.01
    assert last.figure("bank", "run", "position") == (1.0, pytest.approx(np.nan, nan_ok=True), "learned")

    checked = CliRunner().invoke(program, ["check", "--settings", str(shop)])
    assert "accepted by A. Wright" in " ".join(checked.output.split())


def test_few_states_and_a_reversed_ammeter_are_faults_and_nothing_is_written(tmp_path):
    path = tmp_path / "idlerwatch.toml"
    path.write_text(example(tmp_path, "nowhere", 1883))
    settings = load_settings(path)
    record(tmp_path / "journal", settings, LOADS[:1])
    shown = call("learn", "--settings", path)
    assert shown.exit_code == 1
    assert "distinct load states were recorded, must be 3 at least" in " ".join(shown.output.split())

    def reverse(item):
        if getattr(item, "meter", "") != "leg2" or not isinstance(item, Reading):
            return item
        turned = {key: -v if key[1] in ("active_power", "reactive_power") else v for key, v in item.values.items()}
        return replace(item, values=turned)

    record(tmp_path / "spoilt", settings, LOADS, reverse)
    shown = call("learn", "--settings", path, "--journal", tmp_path / "spoilt")
    assert shown.exit_code == 1
    said = " ".join(shown.output.split())
    assert "Wrong: the ammeter of leg2 (L2) is turned round" in said
    assert "never with the secondary of a current transformer open" in said
    assert said.endswith("Nothing was learned.")
    assert not (tmp_path / "spoilt" / "circuit").exists()


def test_what_cannot_be_done_is_one_sentence(tmp_path):
    path = tmp_path / "idlerwatch.toml"
    path.write_text(example(tmp_path, "nowhere", 1883))
    missing = call("learn", "--settings", path, "--journal", tmp_path / "nowhere")
    assert missing.exit_code == 2
    assert "is no journal, must be a folder; name it with --journal" in " ".join(missing.output.split())
    (tmp_path / "journal").mkdir()
    nothing = call("accept", "--settings", path, "--by", "me", "--yes")
    assert nothing.exit_code == 1
    assert "no circuit was learned here yet" in nothing.output
    assert "In force: none" in call("history", "--settings", path).output


def test_help_has_an_example_for_each():
    for word in ("learn", "accept", "history"):
        shown = call(word, "--help")
        assert shown.exit_code == 0
        assert f"idlerwatch circuit {word}" in shown.output
