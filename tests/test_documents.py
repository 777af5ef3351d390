"""The documents say what is: commands, links, keys of the settings, and the nomenclature."""

import re
import tomllib
from pathlib import Path
from typing import Any, get_args

import pytest
from pydantic import BaseModel

from idlerwatch.cli.program import COMMANDS, program
from idlerwatch.core.settings import model
from idlerwatch.core.values import Assessment, CycleEnd
from idlerwatch.core.watch.watch import Watch
from idlerwatch.edges.files import config_directory, load_settings

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
        words |= {option for parameter in program.get_command(None, name).params for option in parameter.opts}
    scripts = "".join(path.read_text() for path in (ROOT / "deploy").glob("*.sh"))
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


def test_the_example_with_its_commented_parts_is_in_order_too(tmp_path):
    whole = re.sub(r"^# (\[[a-z0-9.\[\]-]+$|[a-z_]+ = )", r"\1", EXAMPLE, flags=re.MULTILINE)
    document: dict[str, Any] = tomllib.loads(whole)
    assert any(meter["name"] == "io" for meter in document["meter"])
    path = tmp_path / "whole.toml"
    path.write_text(whole)
    assert load_settings(path).contact


def test_every_quantity_an_assessment_can_hold_is_in_the_nomenclature():
    _, outputs = Watch.begin(load_settings(config_directory() / "example.toml")).take(CycleEnd(1.0))
    assessment = next(output for output in outputs if isinstance(output, Assessment))
    told = DOCUMENTS[1].read_text()
    for _, _, quantity in assessment.figures:
        assert f"`{quantity}`" in told, quantity


def test_documents_speak_of_no_place_on_a_developers_machine():
    for document in (*DOCUMENTS, ROOT / "config" / "example.toml", ROOT / "config" / "alarms.toml"):
        assert not re.search(r"/(root|home)/", document.read_text()), document
