"""Files with settings in them: TOML is read here, and everything wrong with a file is one sentence.

The shipped ``config/`` lies in the package when it was installed from a wheel, and beside ``daemon/`` in the source.
A register map is looked up by its name in ``config/meters``, or read from a path (relative to the settings file).
"""

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from idlerwatch.core.settings.faults import Fault, SettingsError
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.settings.read import read_settings

_PACKAGE = Path(__file__).resolve().parent.parent


def config_directory() -> Path:
    """Return the folder of the shipped settings. Raises FileNotFoundError when the installation is broken."""
    for folder in (_PACKAGE / "config", _PACKAGE.parent.parent / "config"):
        if (folder / "alarms.toml").is_file():
            return folder
    raise FileNotFoundError(f"no config folder in {_PACKAGE} or beside its source: install the package again")


def load_settings(path: Path, number: int = 1) -> Settings:
    """Return the settings of a file with the shipped maps and alarm list. Raises `SettingsError`."""
    document = read_toml(path)
    maps = {**_shipped_maps(), **_own_maps(document, path.parent)}
    return read_settings(document, maps, read_toml(config_directory() / "alarms.toml"), number)


def read_toml(path: Path) -> Mapping[str, Any]:
    """Return a TOML file as a mapping. Raises `SettingsError` when it cannot be read."""
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise SettingsError([Fault(str(path), f"unreadable ({error.strerror})", "must be a file to read")]) from error
    except UnicodeDecodeError as error:
        raise SettingsError([Fault(str(path), f"not UTF-8 at byte {error.start}", "must be UTF-8 text")]) from error
    except tomllib.TOMLDecodeError as error:
        raise SettingsError([Fault(str(path), f"not TOML ({error})", "must be written like example.toml")]) from error


def _shipped_maps() -> dict[str, Mapping[str, Any]]:
    return {path.stem: read_toml(path) for path in sorted((config_directory() / "meters").glob("*.toml"))}


def _own_maps(document: Mapping[str, Any], folder: Path) -> dict[str, Mapping[str, Any]]:
    meters = document.get("meter")
    names = [meter.get("map") for meter in meters if isinstance(meter, Mapping)] if isinstance(meters, list) else []
    paths = {name: folder / name for name in names if isinstance(name, str) and ("/" in name or name.endswith(".toml"))}
    return {name: read_toml(path) for name, path in paths.items() if path.exists()}
