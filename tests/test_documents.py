"""The documents say what is: commands, links, keys of the settings, and the nomenclature."""

import re
import tomllib
from pathlib import Path
from typing import Any, get_args

import pytest
from pydantic import BaseModel

from idlerwatch.cli.program import COMMANDS, program
from idlerwatch.core.registers import read_register_map
from idlerwatch.core.settings import model
from idlerwatch.core.values import Assessment, CycleEnd
from idlerwatch.core.watch.watch import Watch
from idlerwatch.edges.files import config_directory, load_settings, read_toml

ROOT = Path(__file__).resolve().parents[1]
DOCUMENTS = [ROOT / name for name in ("README.md", "DEVELOPERS.md", "deploy/README.md")]
EXAMPLE = (ROOT / "config" / "example.toml").read_text()


def test_every_command_is_in_the_readme_and_every_command_there_exists():
    text = DOCUMENTS[0].read_text()
    told = set(re.findall(r"^\| `(\w+)` \|", text, re.MULTILINE))
    assert told == set(COMMANDS)
    for name in COMMANDS:
        assert program.get_command(None, name) is not None


@pytest.mark.parametrize("document", DOCUMENTS, ids=lambda path: str(path.relative_to(ROOT)))
def test_links_lead_somewhere(document):
    for link in re.findall(r"\]\(([^)#]+)\)", document.read_text()):
        assert link.startswith("http") or (document.parent / link).exists(), link


@pytest.mark.parametrize("document", DOCUMENTS, ids=lambda path: str(path.relative_to(ROOT)))
def test_options_that_documents_name_exist(document):
    words = set()
    for name in COMMANDS:
        command = program.get_command(None, name)
        for each in (command, *getattr(command, "commands", {}).values()):
            words |= {option for parameter in each.params for option in parameter.opts}
    places = [*(ROOT / "deploy").glob("*.sh"), *(ROOT / "tests" / "bench").glob("*.py")]
    scripts = "".join(path.read_text() for path in places)
    for option in re.findall(r"(?<![\w-])--[a-z][a-z-]+", document.read_text()):
        assert option in words | {"--help"} or option in scripts, option


def tables():
    """Every table of the settings with its model."""
    for name, field in model.Settings.model_fields.items():
        for kind in (field.annotation, *get_args(field.annotation)):
            if isinstance(kind, type) and issubclass(kind, BaseModel) and name not in ("alarms", "maps"):
                yield name, kind


@pytest.mark.parametrize(("table", "kind"), list(tables()))
def test_every_key_of_the_settings_is_explained_in_the_example(table, kind):
    assert re.search(rf"^(# )?\[+{table}\]+", EXAMPLE, re.MULTILINE)
    for key in kind.model_fields:
        assert re.search(rf"^(# )?{key} = ", EXAMPLE, re.MULTILINE), f"{table}.{key}"


def whole_example() -> str:
    """Return the example with its commented parts in force."""
    return re.sub(r"^# (\[[a-z0-9.\[\]-]+$|[a-z_]+ = )", r"\1", EXAMPLE, flags=re.MULTILINE)


def test_the_example_with_its_commented_parts_is_in_order_too(tmp_path):
    document: dict[str, Any] = tomllib.loads(whole_example())
    assert any(meter["name"] == "io" for meter in document["meter"])
    path = tmp_path / "whole.toml"
    path.write_text(whole_example())
    assert load_settings(path).contact


@pytest.mark.parametrize("path", sorted((ROOT / "config" / "meters").glob("*.toml")), ids=lambda path: path.stem)
def test_every_shipped_map_is_in_order(path):
    assert read_register_map(path.stem, read_toml(path)).points


def test_every_alarm_of_the_shipped_list_is_in_force_with_the_example():
    listed = read_toml(ROOT / "config" / "alarms.toml")
    tags = {alarm.tag for alarm in load_settings(config_directory() / "example.toml").alarms.values()}
    assert set(listed) <= tags


EVERYTHING_ELSE = """
[[meter]]
name = "at-planer"
bus = "panel"
address = 40
map = "din-float32"
at = "machine:planer"
powered_by = "own"
channels = [{ across = "L1-N", through = "L1" }]
"""
CONTACTS = ("coil run energised", "sequence right", "breaker tripped")


def test_the_nomenclature_holds_every_figure_of_an_assessment_and_no_other(tmp_path):
    contacts = (f'[[contact]]\nmeter = "io"\ninput = {k}\nmeans = "{means}"\n' for k, means in enumerate(CONTACTS, 2))
    path = tmp_path / "everything.toml"
    path.write_text(whole_example() + EVERYTHING_ELSE + "\n".join(contacts))
    _, outputs = Watch.begin(load_settings(path)).take(CycleEnd(1.0))
    assessment = next(output for output in outputs if isinstance(output, Assessment))

    assert nomenclature() == {(measurement, quantity) for measurement, _, quantity in assessment.figures}


def nomenclature() -> set[tuple[str, str]]:
    """Return the measurements and quantities of the table of figures in DEVELOPERS.md."""
    table = DOCUMENTS[1].read_text().partition("| quantity | stands in | meaning | unit | sign |")[2]
    rows = re.findall(r"^\| (`[^|]+) \| ([a-z, ]+) \|", table.partition("\n\n")[0], re.MULTILINE)
    return {
        (measurement, quantity)
        for quantities, places in rows
        for quantity in re.findall(r"`(\w+)`", quantities)
        for measurement in places.split(", ")
    }


def test_documents_speak_of_no_place_on_a_developers_machine():
    for document in (*DOCUMENTS, ROOT / "config" / "example.toml", ROOT / "config" / "alarms.toml"):
        assert not re.search(r"/(root|home)/", document.read_text()), document
