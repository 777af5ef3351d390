"""From mappings, as TOML gives them, to `Settings`: all faults at once, each a sentence with its place.

Three mappings go in: the settings document, the register maps by name, and the alarm list. Shapes are checked key by
key (`model`), then the map of each meter, the alarm list with its overrides, and last what the parts must be to each
other (`refusals`), for which the shapes must be right.
"""

import difflib
import math
from collections.abc import Iterator, Mapping, Sequence
from typing import Any, Final

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from idlerwatch.core.registers import RegisterMap, read_register_map
from idlerwatch.core.settings.faults import Fault, SettingsError
from idlerwatch.core.settings.model import PATTERNS, Alarm, Settings
from idlerwatch.core.settings.refusals import find_refusals

Document = Mapping[str, Any]
Path = tuple[int | str, ...]

VARIANT: Final = "line"
"""The sub-table of an alarm that holds what differs for a line feed."""
_RESOLVED: Final = ("alarms", "maps", "number")


def read_settings(
    document: Document, register_maps: Mapping[str, Document], alarm_list: Document, number: int = 1
) -> Settings:
    """Return the settings, resolved.

    Parameters
    ----------
    document
        The settings file as TOML gives it.
    register_maps
        Name or path, as the meters' key ``map`` gives it -> the map's document.
    alarm_list
        The shipped alarm list.
    number
        Which settings these are since the daemon began.

    Raises
    ------
    SettingsError
        With every fault that was found.
    """
    faults: list[Fault] = []
    shape = _read_shape({key: value for key, value in document.items() if key != "alarms"}, faults)
    maps = _read_maps(document, register_maps, faults)
    alarms = _read_alarms(alarm_list, document.get("alarms", {}), _is_line_feed(document), faults)
    if shape is None:
        raise SettingsError(faults)
    settings = shape.model_copy(update={"maps": maps, "alarms": alarms, "number": number})
    if len(maps) == len({meter.map for meter in settings.meter}):
        faults += find_refusals(settings)
    if faults:
        raise SettingsError(faults)
    return settings


def _read_shape(document: Document, faults: list[Fault]) -> Settings | None:
    unknown = [key for key in document if key in _RESOLVED]
    faults += [Fault(key, "an unknown key", _known_keys(Settings, key)) for key in unknown]
    try:
        return Settings.model_validate({key: value for key, value in document.items() if key not in _RESOLVED})
    except ValidationError as error:
        faults += explain(error, Settings, document)
        return None


def _is_line_feed(document: Document) -> bool:
    supply = document.get("supply")
    feed = supply.get("feed") if isinstance(supply, Mapping) else None
    return isinstance(feed, str) and "N" not in feed.split("-")


# --------------------------------------------------------------------------
# Register maps
# --------------------------------------------------------------------------


def _read_maps(
    document: Document, register_maps: Mapping[str, Document], faults: list[Fault]
) -> dict[str, RegisterMap]:
    maps: dict[str, RegisterMap] = {}
    wrong: set[str] = set()
    for place, name in _named_maps(document):
        if name in maps or name in wrong:
            continue
        if name not in register_maps:
            faults.append(Fault(place, repr(name), f"must be a file, or one of {', '.join(sorted(register_maps))}"))
            wrong.add(name)
            continue
        try:
            maps[name] = read_register_map(name, register_maps[name])
        except SettingsError as error:
            faults += error.faults
            wrong.add(name)
    return maps


def _named_maps(document: Document) -> Iterator[tuple[str, str]]:
    meters = document.get("meter")
    for index, meter in enumerate(meters if isinstance(meters, Sequence) else ()):
        if isinstance(meter, Mapping) and isinstance(meter.get("map"), str):
            yield _place(("meter", index, "map"), document), meter["map"]


# --------------------------------------------------------------------------
# Alarms
# --------------------------------------------------------------------------


def _read_alarms(
    alarm_list: Document, overrides: object, line_feed: object, faults: list[Fault]
) -> dict[tuple[str, str], Alarm]:
    """Return the alarms in force: the list's, overridden for a tag, then for a subject of a tag."""
    if not isinstance(overrides, Mapping):
        faults.append(Fault("alarms", repr(overrides), "must be a table of alarms"))
        overrides = {}
    alarms: dict[tuple[str, str], Alarm] = {}
    unknown = [str(tag) for tag in overrides if tag not in alarm_list]
    faults += [Fault(f"alarms.{tag}", "an unknown alarm", _did_you_mean(tag, alarm_list)) for tag in unknown]
    for tag, given in alarm_list.items():
        table = {key: value for key, value in given.items() if key != VARIANT}
        table |= given.get(VARIANT, {}) if line_feed else {}
        own = overrides.get(tag, {})
        if not isinstance(own, Mapping):
            faults.append(Fault(f"alarms.{tag}", repr(own), "must be a table"))
            continue
        subjects = {
            key: value for key, value in own.items() if isinstance(value, Mapping) and key not in Alarm.model_fields
        }
        table |= {key: value for key, value in own.items() if key not in subjects}
        for subject, special in {"": {}, **subjects}.items():
            alarms[tag, subject] = _read_alarm(tag, subject, {**table, **special}, faults)
    return alarms


def _read_alarm(tag: str, subject: str, table: Document, faults: list[Fault]) -> Alarm:
    """Return an alarm; a faulty one holds its place, so that alarms which explain it are not faulty too."""
    place = f"alarms.{tag}.{subject}" if subject else f"alarms.{tag}"
    try:
        return Alarm.model_validate({"tag": tag, **table})
    except ValidationError as error:
        found = (Fault(f"{place}.{fault.place}", fault.found, fault.wanted) for fault in explain(error, Alarm, table))
        faults += [fault for fault in found if fault not in faults]
        return Alarm.model_construct(tag=tag)


# --------------------------------------------------------------------------
# Sentences
# --------------------------------------------------------------------------


def explain(error: ValidationError, model: type[BaseModel], document: Document) -> list[Fault]:
    """Return pydantic's findings as faults with places in the words of the settings file."""
    faults: list[Fault] = []
    for detail in error.errors(include_url=False):
        if detail["type"] == "too_short" and detail["input"]:
            continue  # entries that are faulty themselves, and named
        fault = _explain(detail, model, document)
        if fault.place not in {known.place for known in faults}:
            faults.append(fault)
    return faults


def _explain(detail: ErrorDetails, model: type[BaseModel], document: Document) -> Fault:
    path = _real_path(detail["loc"], document)
    place = _place(path, document) or "the settings"
    match detail["type"]:
        case "missing":
            return Fault(place, "missing", "must be given")
        case "extra_forbidden":
            return Fault(place, "an unknown key", _known_keys(model, *path))
        case _:
            return Fault(place, _show(detail["input"]), _wanted(detail))


def _wanted(detail: ErrorDetails) -> str:
    context: Mapping[str, Any] = detail.get("ctx", {})
    match detail["type"]:
        case "greater_than":
            return f"must be greater than {context['gt']:g}"
        case "greater_than_equal" if context["ge"] == 0:
            return "must not be negative"
        case "greater_than_equal":
            return f"must be at least {context['ge']:g}"
        case "less_than_equal":
            return f"must be at most {context['le']:g}"
        case "literal_error":
            return f"must be {context['expected']}"
        case "value_error":
            return str(context["error"]).split(", ", 1)[-1]
        case "string_pattern_mismatch":
            return PATTERNS.get(context["pattern"], f"must match {context['pattern']}")
        case "too_short":
            return "must hold at least one"
        case "string_too_long":
            return f"must have at most {context['max_length']} characters"
        case "string_too_short":
            return "must not be empty"
        case kind if kind.startswith(("float", "finite")):
            return "must be a number"
        case kind if kind.startswith("int"):
            return "must be a whole number"
        case kind if kind.startswith("string"):
            return "must be a text in quotes"
        case kind if kind.startswith("bool"):
            return "must be true or false"
        case kind if kind.startswith(("tuple", "list")):
            return "must be a list"
        case kind if kind.startswith(("model", "dict", "mapping")):
            return "must be a table"
        case _:
            return "must be " + detail["msg"][0].lower() + detail["msg"][1:]


def _show(value: object) -> str:
    if isinstance(value, float) and not math.isfinite(value):
        return str(value)
    text = repr(value) if isinstance(value, str | int | float | bool) else f"a {type(value).__name__}"
    return {"a dict": "a table", "a list": "a list"}.get(text, text if len(text) <= 60 else text[:57] + "...")


def _real_path(path: Sequence[int | str], document: Document) -> Path:
    """Return a path without the names of union members that pydantic puts into it."""
    real: list[int | str] = []
    value: object = document
    for index, step in enumerate(path):
        if isinstance(value, Mapping) and (step in value or index == len(path) - 1):
            if step not in value and _is_member(step):
                break
            value = value.get(step)
        elif isinstance(value, list | tuple) and isinstance(step, int) and step < len(value):
            value = value[step]
        else:
            continue
        real.append(step)
    return tuple(real)


def _is_member(step: int | str) -> bool:
    return isinstance(step, str) and any(sign in step for sign in "[(,")


def _place(path: Sequence[int | str], document: Document) -> str:
    """Return a path as a person writes it; an entry of a list goes by its name, else by its number from 1."""
    words: list[str] = []
    value: object = document
    for step in path:
        value = _inside(value, step)
        name = value.get("name") if isinstance(value, Mapping) and isinstance(step, int) else None
        if isinstance(step, int):
            words.append(name if isinstance(name, str) else str(step + 1))
        else:
            words.append(step)
    return ".".join(words)


def _inside(value: object, step: int | str) -> object:
    if isinstance(value, Mapping):
        return value.get(step)
    if isinstance(value, list | tuple) and isinstance(step, int) and step < len(value):
        return value[step]
    return None


def _known_keys(model: type[BaseModel], *path: int | str) -> str:
    *above, key = path
    for step in above:
        inner = None if isinstance(step, int) else _model_of(model, step)
        model = inner or model
    return _did_you_mean(str(key), [name for name in model.model_fields if name not in _RESOLVED])


def _model_of(model: type[BaseModel], field: str) -> type[BaseModel] | None:
    pending: list[Any] = [model.model_fields[field].annotation] if field in model.model_fields else []
    while pending:
        kind = pending.pop()
        if isinstance(kind, type) and issubclass(kind, BaseModel):
            return kind
        pending += getattr(kind, "__args__", ())
    return None


def _did_you_mean(word: str, known: Sequence[str] | Mapping[str, object]) -> str:
    near = difflib.get_close_matches(word, list(known), n=1)
    return f"did you mean {near[0]}?" if near else f"must be one of {', '.join(sorted(known))}"
