"""Files with settings in them: what is wrong with one is one sentence."""

import shutil

import pytest

from idlerwatch.core.settings.faults import SettingsError
from idlerwatch.edges.files import config_directory, load_settings, read_toml

EXAMPLE = config_directory() / "example.toml"


def sentence(path):
    with pytest.raises(SettingsError) as caught:
        load_settings(path)
    (fault,) = caught.value.faults
    assert "\n" not in str(fault)
    return str(fault)


def test_example_loads_with_the_shipped_maps_and_alarm_list():
    settings = load_settings(EXAMPLE, 3)
    assert settings.number == 3
    assert settings.alarms["leg-low", ""].priority == "medium"


def test_file_that_is_not_there_is_one_sentence(tmp_path):
    assert sentence(tmp_path / "none.toml").startswith(f"{tmp_path / 'none.toml'} is unreadable (No such file")


def test_folder_is_one_sentence(tmp_path):
    assert "unreadable" in sentence(tmp_path)


def test_what_is_not_toml_is_one_sentence_with_its_line(tmp_path):
    path = tmp_path / "bad.toml"
    path.write_text("[site]\nname = slipway\n")
    assert "not TOML" in sentence(path)
    assert "line 2" in sentence(path)


def test_what_is_not_utf_8_is_one_sentence(tmp_path):
    path = tmp_path / "bad.toml"
    path.write_bytes(b'[site]\nname = "slip\xe4way"\n')
    assert "not UTF-8 at byte 19" in sentence(path)


def test_map_of_ones_own_is_read_from_a_path_beside_the_settings(tmp_path):
    shutil.copy(config_directory() / "meters" / "din-float32.toml", tmp_path / "mine.toml")
    path = tmp_path / "shed.toml"
    path.write_text(EXAMPLE.read_text().replace('map = "din-float32"', 'map = "mine.toml"'))
    assert "mine.toml" in load_settings(path).maps


def test_map_of_ones_own_that_is_not_there_is_one_sentence(tmp_path):
    path = tmp_path / "shed.toml"
    path.write_text(EXAMPLE.read_text().replace('map = "din-float32"', 'map = "mine.toml"'))
    assert "'mine.toml', must be a file" in sentence(path)


def test_toml_is_read_as_a_mapping():
    assert read_toml(EXAMPLE)["site"]["name"] == "slipway"
