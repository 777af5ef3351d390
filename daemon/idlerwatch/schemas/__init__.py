"""JSON Schemas (2020-12) of everything that goes out over MQTT and of what a phone may send."""

import json
from importlib.resources import files
from typing import Any, cast


def schema(name: str) -> dict[str, Any]:
    """Return the schema ``assessment``, ``record``, ``message``, ``acknowledge`` or ``shelve``."""
    return cast("dict[str, Any]", json.loads(files(__name__).joinpath(f"{name}.json").read_text(encoding="utf-8")))
