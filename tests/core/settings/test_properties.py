"""Whatever mapping comes in: settings, or faults that read as sentences; never another exception."""

import copy
import tomllib

from hypothesis import given
from hypothesis import settings as bounded
from hypothesis import strategies as st

from idlerwatch.core.settings.faults import SettingsError
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.settings.read import read_settings
from idlerwatch.edges.files import config_directory

FOLDER = config_directory()
MAPS = {path.stem: tomllib.loads(path.read_text()) for path in (FOLDER / "meters").glob("*.toml")}
EXAMPLE = tomllib.loads((FOLDER / "example.toml").read_text())
LIST = {"leg-low": {"watches": "leg-low", "setpoint": 0.9, "priority": "medium"}}
WORDS = st.sampled_from(
    ["L1-N", "L1-L2", "N-PE", "own", "none", "supply", "leg", "run", "panel", "running", "", "free"]
)
SCALARS = st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8) | WORDS
VALUES = st.recursive(
    SCALARS,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=6), inner, max_size=3),
    max_leaves=6,
)
TABLES = st.sampled_from([*Settings.model_fields, "alarms", "suply"])


def read_or_refuse(document):
    try:
        read_settings(document, MAPS, LIST)
    except SettingsError as error:
        faults = error.faults
    else:
        return
    assert faults
    assert all(fault.place and fault.wanted for fault in faults)


def places(value, path=()):
    """Yield the path to everything inside a document."""
    steps = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for step, inner in steps:
        yield (*path, step)
        yield from places(inner, (*path, step))


@given(st.dictionaries(TABLES, VALUES, max_size=6))
@bounded(max_examples=150, deadline=None)
def test_any_mapping_gives_settings_or_faults(document):
    read_or_refuse(document)


@given(st.sampled_from(sorted(places(EXAMPLE), key=str)), VALUES)
@bounded(max_examples=250, deadline=None)
def test_example_with_anything_in_one_place_gives_settings_or_faults(path, value):
    document = copy.deepcopy(EXAMPLE)
    inside = document
    for step in path[:-1]:
        inside = inside[step]
    inside[path[-1]] = value
    read_or_refuse(document)


@given(VALUES)
@bounded(max_examples=100, deadline=None)
def test_any_overrides_of_alarms_give_settings_or_faults(overrides):
    read_or_refuse({**EXAMPLE, "alarms": overrides})
