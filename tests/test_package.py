"""The package as a whole: its import contracts, what a built wheel holds, and that the core knows no clock."""

import ast
import os
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
CORE = ROOT / "daemon" / "idlerwatch" / "core"

INSTALLED = """
from pathlib import Path
import idlerwatch
from idlerwatch.edges.files import config_directory, load_settings
from idlerwatch.schemas import schema
from idlerwatch.cli.demo import SCENARIOS
here = Path(idlerwatch.__file__).parent
assert str(here).startswith({place!r}), here
assert config_directory() == here / "config", config_directory()
assert len(load_settings(config_directory() / "example.toml").meter) == 6
assert schema("assessment")["title"]
assert any(SCENARIOS.glob("*.toml"))
print("found")
"""


def test_the_import_contracts_hold():
    found = subprocess.run([sys.executable, "-c", "from importlinter.cli import lint_imports_command as c; c()"],
                           cwd=ROOT, capture_output=True, text=True, check=False)  # fmt: skip
    assert found.returncode == 0, found.stdout


@pytest.fixture(scope="module")
def wheel(tmp_path_factory):
    place = tmp_path_factory.mktemp("wheel")
    subprocess.run([sys.executable, "-m", "pip", "wheel", "--no-deps", "--quiet", "--disable-pip-version-check",
                    "--wheel-dir", str(place), str(ROOT)], check=True)  # fmt: skip
    return next(place.glob("*.whl"))


def test_a_wheel_installed_elsewhere_finds_its_settings_maps_schemas_and_scenarios(wheel, tmp_path):
    target = tmp_path / "elsewhere"
    subprocess.run([sys.executable, "-m", "pip", "install", "--no-deps", "--quiet", "--disable-pip-version-check",
                    "--target", str(target), str(wheel)], check=True)  # fmt: skip
    environment = {**os.environ, "PYTHONPATH": str(target)}
    found = subprocess.run([sys.executable, "-c", INSTALLED.format(place=str(target))], cwd=tmp_path, env=environment,
                           capture_output=True, text=True, check=False)  # fmt: skip
    assert found.stdout == "found\n", found.stderr


def test_a_wheel_holds_the_licence_and_no_tests(wheel):
    names = zipfile.ZipFile(wheel).namelist()
    assert any(name.endswith("LICENSE") for name in names)
    assert not [name for name in names if "tests" in name]


@pytest.mark.parametrize("path", sorted(CORE.rglob("*.py")), ids=lambda path: str(path.relative_to(CORE)))
def test_the_core_never_asks_what_time_it_is_and_never_prints(path):
    calls = [node.func for node in ast.walk(ast.parse(path.read_text())) if isinstance(node, ast.Call)]
    names = {getattr(call, "attr", getattr(call, "id", "")) for call in calls}
    assert names & {"now", "today", "utcnow", "print", "open", "input"} == set()
