"""Fourth step: in which state is the converter, and what hangs on it.

Each sample is put into one word, a *finding*: first by the supply's current (nothing, flowing, surging), which decides
between "stopped" and "cable cut"; then by the voltages of the generated legs (dead, between, up); then by which meters
sleep. The table of `findings` says what follows. No single sample moves the state on weak evidence: a
finding must come as often in a row as `CONFIRMATIONS` says; the change then dates from the first of them.

Where the supply's current flows and the generated legs' meters are silent the converter is unwatched: *blind*, never
stopped. Where nothing decides it is blind too. After a start or a machine's start, self-powered meters reset and boot
within seconds: their silence is then borne for `PATIENCE_S` and their boot time.

Levels of current come from the nameplates (`plan.Levels`); once the converter has run, from its own idling current,
the smallest two successive samples agree on: half of it is flow.
"""

import math
from dataclasses import dataclass
from typing import Final, NamedTuple

from idlerwatch.core.values import ConverterState, Loading
from idlerwatch.core.watch.derive import Derived
from idlerwatch.core.watch.findings import CONFIRMATIONS, TABLE, Finding
from idlerwatch.core.watch.plan import Plan

NAN: Final = math.nan

AT_REST: Final = frozenset({"stopped", "starting", "change-over", "run-down"})
"""States in which the supply has no load to feed, so that a smaller current is a start's."""
DEAD: Final = 0.2
"""Generated legs below this ratio of nominal carry no voltage worth the name."""
UP: Final = 0.7
"""Generated legs from this ratio of nominal on are made by a turning idler."""
SUPPLY_GONE: Final = 0.1
"""A supply voltage below this ratio feeds nothing."""
PATIENCE_S: Final = 15.0
"""For how long after a surge silent leg meters are borne with (common practice)."""
CHANGE_OVER_S: Final = 5.0
"""The longest change-over; what coasts longer runs down."""
MACHINE_START_S: Final = 30.0
"""The longest start of a machine (common practice: heavy wheels take up to 15 s)."""


@dataclass(frozen=True, slots=True)
class Evidence:
    """What the state is judged by; NaN where it is not seen.

    Supply current as its ammeter says, what of it the machines do not take (the ammeter's where that is not seen), and
    supply current as its apparent power says [A], supply voltage and the legs' height over
    nominal, the largest leg current [A], and whether a meter that lives on a generated leg is booting.
    """

    current: float
    idler_current: float
    power_current: float
    supply_ratio: float
    generated: float
    leg_current: float
    has_woken: bool = False


class LifeState(NamedTuple):
    """The state of the converter and what is remembered to judge the next sample.

    A named tuple, since a sample changes it four times and a dataclass of as many fields takes five times as long.
    """

    state: ConverterState = "blind"
    last_seen: ConverterState = "stopped"
    since: float = NAN
    last_at: float = NAN
    finding: Finding = "nothing"
    finding_since: float = NAN
    finding_count: int = 0
    surged_at: float = -math.inf
    idle_current: float = NAN
    last_current: float = NAN
    start_began: float = NAN
    start_time: float = NAN
    loading: Loading = ""
    usual_leg_current: float = NAN
    usual_supply_current: float = NAN
    machine_start_began: float = NAN


def begin_life() -> LifeState:
    """Return the state before the first sample: blind, since nothing has been seen."""
    return LifeState()


def judge_life(plan: Plan, state: LifeState, at: float, derived: Derived) -> LifeState:
    """Return the state after one sample."""
    evidence = gather(derived, plan)
    finding = find(plan, state, evidence)
    noted = _note(state, at, finding, evidence, plan)
    moved = _move(plan, noted, at, evidence)
    timed = _time_start(moved, state, at)
    return _load(plan, timed, at, evidence)


def gather(derived: Derived, plan: Plan) -> Evidence:
    """Return what one sample says for the judgement."""
    voltage = derived.supply.voltage.value
    watts = derived.supply.apparent.value
    currents = [power.current.value for power in derived.legs.values() if power.current.is_known]
    return Evidence(
        current=derived.supply.current.value,
        idler_current=_idler_current(derived),
        power_current=watts / voltage if voltage > 0.0 else NAN,
        supply_ratio=voltage / plan.feed.voltage,
        generated=derived.generated,
        leg_current=max(currents, default=NAN),
        has_woken=any(derived.meters.get(name) == "booting" for name in plan.on_generated),
    )


def _idler_current(derived: Derived) -> float:
    """Return what of the supply's current the machines do not take. [A]

    A machine left on when the converter stops runs on through the fed legs, draws current and holds the legs up; that
    the idler takes nothing shows in the powers alone.
    """
    supply, machines = derived.supply, derived.total
    rest = math.hypot(supply.active.value - machines.active.value, supply.reactive.value - machines.reactive.value)
    if math.isnan(rest) or not supply.voltage.value > 0.0:
        return supply.current.value
    return min(supply.current.value, rest / supply.voltage.value)


# --------------------------------------------------------------------------
# Finding
# --------------------------------------------------------------------------


def flow_level(plan: Plan, state: LifeState) -> float:
    """Return from which supply current on the idler takes current: half of its idling current, once known.

    A converter that was found at work may never have been seen idling: a fifth of full current bounds the level. [A]
    """
    known = min(0.5 * state.idle_current, 0.2 * plan.levels.full)
    return plan.levels.flow if math.isnan(known) else max(plan.levels.flow, known)


def find(plan: Plan, state: LifeState, evidence: Evidence) -> Finding:
    """Return what one sample says, in one word."""
    if evidence.supply_ratio < SUPPLY_GONE or evidence.idler_current < flow_level(plan, state):
        return "coasting" if evidence.generated >= DEAD else "still"
    if math.isnan(evidence.current):
        return _by_voltages(evidence)
    if evidence.idler_current >= plan.levels.surge:
        return "surging"
    if evidence.generated >= UP:
        return "turning"
    if evidence.idler_current >= plan.levels.start and state.state in AT_REST:
        return "surging"
    if math.isnan(evidence.generated):
        return _by_meters(plan, evidence)
    return "rising" if evidence.generated >= DEAD else "humming"


def _by_meters(plan: Plan, evidence: Evidence) -> Finding:
    """Return the finding where the current flows and no meter reads a generated leg.

    A meter that boots lives on its leg, so the leg does; where the legs have no meter at all the current alone must do.
    """
    return "turning" if evidence.has_woken or not plan.watches_generated else "unseen"


def _by_voltages(evidence: Evidence) -> Finding:
    """Return the finding where the supply's current is not known."""
    if math.isnan(evidence.generated):
        return "nothing"
    if evidence.generated >= UP:
        return "turning"
    return "between" if evidence.generated >= DEAD else "still"


def _witnesses(plan: Plan, state: LifeState, finding: Finding, evidence: Evidence) -> int:
    """Return how many independent witnesses a finding has: the meter's own powers, the legs' voltages."""
    match finding:
        case "surging":
            return 1 + (evidence.power_current >= 0.5 * plan.levels.start)
        case "turning" | "rising":
            flows = evidence.current >= flow_level(plan, state)
            return 1 + (flows and (evidence.has_woken or not math.isnan(evidence.generated)))
        case "still":
            rests = evidence.idler_current < flow_level(plan, state)
            return 1 + (rests and evidence.generated < DEAD)
        case _:
            return 1


def _note(state: LifeState, at: float, finding: Finding, evidence: Evidence, plan: Plan) -> LifeState:
    """Count how often in a row the finding came; a surge and a machine's start are remembered for patience."""
    weight = _witnesses(plan, state, finding, evidence)
    surges = finding == "surging" or state.loading == "machine starting"
    return state._replace(
        finding=finding,
        finding_since=state.finding_since if finding == state.finding else at,
        finding_count=weight + (state.finding_count if finding == state.finding else 0),
        surged_at=at if surges else state.surged_at,
    )


# --------------------------------------------------------------------------
# State
# --------------------------------------------------------------------------


def _move(plan: Plan, state: LifeState, at: float, evidence: Evidence) -> LifeState:
    following = _following(state, at)
    if math.isnan(state.since):
        state = state._replace(since=at)
    if following == state.state or not _is_confirmed(plan, state, at):
        return _learn_idle(plan, state, evidence)
    seen = state.last_seen if following == "blind" else following
    return state._replace(state=following, last_seen=seen, since=_changed_at(state), last_current=NAN)


def _following(state: LifeState, at: float) -> ConverterState:
    following = TABLE[state.state][state.finding]
    if state.state == "blind" and state.finding == "surging" and state.last_seen == "running":
        return "blind"  # lost sight of while it ran: what surges is a machine
    if following == state.state == "change-over" and at - state.since > CHANGE_OVER_S:
        return "run-down"
    return following


def _changed_at(state: LifeState) -> float:
    """Return when the state changed: with the first of the confirming samples, never before the last change."""
    return max(state.since, state.finding_since)


def _is_confirmed(plan: Plan, state: LifeState, at: float) -> bool:
    if state.finding_count < CONFIRMATIONS[state.finding]:
        return False
    is_borne = state.finding == "unseen" and state.state == "running"
    return not (is_borne and at - state.surged_at < PATIENCE_S + plan.boot_s)


def _learn_idle(plan: Plan, state: LifeState, evidence: Evidence) -> LifeState:
    """Keep the smallest supply current of the running, unloaded converter that two successive samples agree on."""
    if state.state != "running" or state.finding != "turning" or evidence.leg_current >= plan.levels.machine:
        return state._replace(last_current=NAN)
    larger = max(evidence.current, state.last_current)
    if not math.isnan(state.last_current) and not larger >= state.idle_current:
        return state._replace(last_current=evidence.current, idle_current=larger)
    return state._replace(last_current=evidence.current)


def _time_start(state: LifeState, before: LifeState, at: float) -> LifeState:
    """Keep the time of the start going on, or of the last one; a converter found running has none."""
    began = state.start_began
    if state.state == "starting" and before.state in ("stopped", "run-down", "blind"):
        began = state.since
    elif state.state == "running" and before.state == "stopped":
        # too quick to be seen starting: it began after the last sample that found it at rest
        began = before.last_at
    elif state.state not in ("starting", "change-over") and before.state not in ("starting", "change-over"):
        return state._replace(last_at=at)
    ended = state.since if state.state == "running" else at
    return state._replace(last_at=at, start_began=began, start_time=ended - began)


# --------------------------------------------------------------------------
# Loading
# --------------------------------------------------------------------------


def _load(plan: Plan, state: LifeState, at: float, evidence: Evidence) -> LifeState:
    """Say what the running converter carries; a machine's start is a step of current, and lasts 30 s at most."""
    if state.state != "running":
        return state._replace(loading="", machine_start_began=NAN, usual_leg_current=NAN, usual_supply_current=NAN)
    began = _or(state.machine_start_began, at)
    if _starts(plan, state, evidence) and at - began <= MACHINE_START_S:
        return state._replace(loading="machine starting", machine_start_began=began)
    return state._replace(
        loading=_steady_loading(plan, state, evidence),
        machine_start_began=NAN,
        usual_leg_current=_or(evidence.leg_current, state.usual_leg_current),
        usual_supply_current=_or(evidence.current, state.usual_supply_current),
    )


def _or(value: float, otherwise: float) -> float:
    return otherwise if math.isnan(value) else value


def _starts(plan: Plan, state: LifeState, evidence: Evidence) -> bool:
    """Return whether currents stand a machine's starting current above what they were before."""
    leg_step = evidence.leg_current - state.usual_leg_current
    if not math.isnan(leg_step):
        return leg_step >= plan.levels.machine_surge
    if evidence.current >= plan.levels.surge:
        return True
    step = evidence.current - _or(state.usual_supply_current, evidence.current)
    return step >= 3.0 * plan.levels.machine_supply


def _steady_loading(plan: Plan, state: LifeState, evidence: Evidence) -> Loading:
    if not math.isnan(evidence.leg_current):
        return "loaded" if evidence.leg_current >= plan.levels.machine else "unloaded"
    if math.isnan(evidence.current) or math.isnan(state.idle_current):
        return state.loading
    surplus = evidence.current - state.idle_current
    return "loaded" if surplus >= 0.5 * plan.levels.machine_supply else "unloaded"
