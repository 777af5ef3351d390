"""Scenarios: small files that say what happens to the virtual converter, and when.

    title = "A leg falls"
    lasts_s = 60.0

    [[event]]
    at_s = 2.0
    do = "start converter"

    [[event]]
    at_s = 8.0
    do = "start machine"
    what = "planer"

    [[event]]
    at_s = 20.0
    do = "sag supply"
    to = 0.86

Each kind of event is one entry of `ACTIONS`; what it needs (`what`, `to`) is said there.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Annotated, Any, Final

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, ValidationError

from idlerwatch.core.conductors import LEGS
from idlerwatch.core.settings.faults import Fault, SettingsError
from idlerwatch.core.settings.read import explain
from idlerwatch.rig.values import OPEN, Faults, Orders, Plant


class Event(BaseModel):
    """Something that happens at an instant of the scenario; `says` is told to whoever watches."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    at_s: Annotated[float, Field(ge=0)]
    do: str
    what: str = ""
    to: float | None = None
    says: str = ""


class Scenario(BaseModel):
    """A title of one sentence, how long it lasts, and its events."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    title: Annotated[str, Field(min_length=1)]
    lasts_s: Annotated[float, Field(gt=0)]
    seed: int = 1
    event: tuple[Event, ...] = ()


@dataclass(frozen=True, slots=True)
class Course:
    """What people have ordered and what is broken, at an instant; `unplugged` are buses whose adapter is out."""

    orders: Orders
    faults: Faults
    pulled_backwards: bool = False
    silent: frozenset[str] = frozenset()


def read_scenario(name: str, document: Mapping[str, Any], plant: Plant, meters: Sequence[str] = ()) -> Scenario:
    """Return a scenario that this plant can play, its events in order of time.

    Raises
    ------
    SettingsError
        With every fault: an unknown event, or one about something that the plant does not have.
    """
    try:
        scenario = Scenario.model_validate(document)
    except ValidationError as error:
        places = explain(error, Scenario, document)
        raise SettingsError([replace(fault, place=f"{name}: {fault.place}") for fault in places]) from error
    faults = [
        fault
        for number, event in enumerate(scenario.event, 1)
        for fault in _faults_of(f"{name}: event {number}", event, plant, meters)
    ]
    if faults:
        raise SettingsError(faults)
    return scenario.model_copy(update={"event": tuple(sorted(scenario.event, key=lambda event: event.at_s))})


def _faults_of(place: str, event: Event, plant: Plant, meters: Sequence[str]) -> list[Fault]:
    action = ACTIONS.get(event.do)
    if action is None:
        return [Fault(f"{place}.do", repr(event.do), f"must be one of {', '.join(sorted(ACTIONS))}")]
    faults = []
    known = action.names(plant) if action.kind != "meter" else tuple(meters)
    if known is not None and event.what not in known:
        wanted = f"must be a {action.kind}: {', '.join(known) or 'there is none'}"
        faults.append(Fault(f"{place}.what", repr(event.what), wanted))
    if action.needs_to and event.to is None:
        faults.append(Fault(f"{place}.to", "missing", f"must be given with {event.do!r}"))
    return faults


def play(course: Course, event: Event, plant: Plant) -> Course:
    """Return the course after an event."""
    return ACTIONS[event.do].act(course, event, plant)


# --------------------------------------------------------------------------
# What can happen
# --------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Action:
    """One kind of event: what it does, what `what` names (``""`` for nothing), and whether it needs `to`."""

    act: Callable[[Course, Event, Plant], Course]
    kind: str = ""
    needs_to: bool = False

    def names(self, plant: Plant) -> tuple[str, ...] | None:
        """Return what `what` may be, None where the event is about nothing in particular."""
        return {
            "machine": (*plant.motors.names, *plant.loads.names),
            "motor": plant.motors.names,
            "bank": plant.banks.names,
            "capacitor": plant.capacitors.names,
            "leg": LEGS,
        }.get(self.kind)


def _orders(course: Course, **changes: object) -> Course:
    return replace(course, orders=replace(course.orders, **changes))  # type: ignore[arg-type]


def _faults(course: Course, **changes: object) -> Course:
    return replace(course, faults=replace(course.faults, **changes))  # type: ignore[arg-type]


def _run(on: object) -> Callable[[Course, Event, Plant], Course]:
    return lambda course, _, plant: _orders(course, run=np.full(plant.count, on))


def _backwards(course: Course, _: Event, plant: Plant) -> Course:
    return replace(_orders(course, run=np.full(plant.count, True)), pulled_backwards=True)


def _machine(on: object) -> Callable[[Course, Event, Plant], Course]:
    def act(course: Course, event: Event, plant: Plant) -> Course:
        if event.what in plant.motors.names:
            return _orders(course, motor_on=_with(course.orders.motor_on, plant.motors.names, event.what, on))
        return _orders(course, load_on=_with(course.orders.load_on, plant.loads.names, event.what, on))

    return act


def _work(course: Course, event: Event, plant: Plant) -> Course:
    return _orders(course, motor_load=_with(course.orders.motor_load, plant.motors.names, event.what, event.to))


def _by_hand(on: object) -> Callable[[Course, Event, Plant], Course]:
    def act(course: Course, event: Event, plant: Plant) -> Course:
        return _orders(course, bank_by_hand=_with(course.orders.bank_by_hand, plant.banks.names, event.what, on))

    return act


def _ratio(course: Course, event: Event, plant: Plant) -> Course:
    return _faults(course, supply_ratio=np.full(plant.count, 1.0 if event.to is None else event.to))


def _resistance(name: str, ohms: float) -> Callable[[Course, Event, Plant], Course]:
    def act(course: Course, event: Event, plant: Plant) -> Course:
        return _faults(course, **{name: np.full(plant.count, ohms if event.to is None else event.to)})

    return act


def _at_leg(name: str, ohms: float) -> Callable[[Course, Event, Plant], Course]:
    def act(course: Course, event: Event, _: Plant) -> Course:
        before = getattr(course.faults, name)
        return _faults(course, **{name: _with(before, LEGS, event.what, ohms if event.to is None else event.to)})

    return act


def _at_bank(name: str, value: object) -> Callable[[Course, Event, Plant], Course]:
    def act(course: Course, event: Event, plant: Plant) -> Course:
        before = getattr(course.faults, name)
        return _faults(course, **{name: _with(before, plant.banks.names, event.what, event.to or value)})

    return act


def _motor_leg(ohms: float) -> Callable[[Course, Event, Plant], Course]:
    """Open leg 2 at a machine: a fuse, a contact, a wire."""

    def act(course: Course, event: Event, plant: Plant) -> Course:
        resistance = course.faults.motor_resistance.copy()
        resistance[:, plant.motors.names.index(event.what), 1] = ohms
        return _faults(course, motor_resistance=resistance)

    return act


def _capacitor(course: Course, event: Event, plant: Plant) -> Course:
    ratio = 0.0 if event.to is None else event.to
    return _faults(
        course, capacitor_ratio=_with(course.faults.capacitor_ratio, plant.capacitors.names, event.what, ratio)
    )


def _meter(course: Course, event: Event, _: Plant) -> Course:
    return replace(course, silent=course.silent | {event.what})


def _meter_back(course: Course, event: Event, _: Plant) -> Course:
    return replace(course, silent=course.silent - {event.what})


def _with(values: Any, names: Sequence[str], name: str, value: object) -> Any:
    changed = np.array(values)
    changed[:, names.index(name)] = value
    return changed


ACTIONS: Final[Mapping[str, Action]] = {
    "start converter": Action(_run(True)),
    "stop converter": Action(_run(False)),
    "start converter backwards": Action(_backwards),
    "start machine": Action(_machine(True), "machine"),
    "stop machine": Action(_machine(False), "machine"),
    "work machine": Action(_work, "motor", needs_to=True),
    "close bank by hand": Action(_by_hand(True), "bank"),
    "open bank by hand": Action(_by_hand(False), "bank"),
    "sag supply": Action(_ratio, needs_to=True),
    "restore supply": Action(lambda course, event, plant: _ratio(course, event.model_copy(update={"to": 1.0}), plant)),
    "cut supply": Action(_resistance("supply_resistance", OPEN)),
    "return supply": Action(_resistance("supply_resistance", 0.0)),
    "lift neutral": Action(_resistance("neutral_resistance", OPEN)),
    "loosen neutral": Action(_resistance("neutral_resistance", 1.0), needs_to=True),
    "restore neutral": Action(_resistance("neutral_resistance", 0.0)),
    "open idler lead": Action(_at_leg("lead_resistance", OPEN), "leg"),
    "restore idler lead": Action(_at_leg("lead_resistance", 0.0), "leg"),
    "open leg": Action(_at_leg("leg_resistance", OPEN), "leg"),
    "restore leg": Action(_at_leg("leg_resistance", 0.0), "leg"),
    "open leg at machine": Action(_motor_leg(OPEN), "motor"),
    "restore leg at machine": Action(_motor_leg(0.0), "motor"),
    "weld bank": Action(_at_bank("welded", True), "bank"),
    "free bank": Action(_at_bank("welded", False), "bank"),
    "open bank coil": Action(_at_bank("coil_open", True), "bank"),
    "restore bank coil": Action(_at_bank("coil_open", False), "bank"),
    "chatter bank": Action(_at_bank("chatter", 10.0), "bank"),
    "calm bank": Action(_at_bank("chatter", 0.0), "bank"),
    "lose capacitor": Action(_capacitor, "capacitor"),
    "age capacitor": Action(_capacitor, "capacitor", needs_to=True),
    "silence meter": Action(_meter, "meter"),
    "restore meter": Action(_meter_back, "meter"),
}
