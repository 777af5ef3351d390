"""The chain, threaded: readings in, one assessment a cycle, alarm events and closed windows out.

`Watch` is a frozen value: `take` returns the next one beside the outputs, so that the daemon, a replay from the journal
and a test run the very same thing, and the same inputs always give the same outputs. Readings only move the first
step; the whole chain runs at the end of a cycle:

    align -> derive -> estimate -> life -> circuit -> assess -> alarms -> windows

The alarm step is given the window rows that the sample before closed, since a row is only known when the next window
begins; what people and the tool itself say (`Acknowledge`, `Shelve`, `Trouble`) waits for the end of the cycle.
"""

from dataclasses import dataclass, replace

from idlerwatch.core.converter.known import KnownCircuit
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.values import (
    Acknowledge,
    CycleEnd,
    Input,
    MeterSilent,
    Output,
    Reading,
    Sample,
    Shelve,
    StandingAlarm,
    Trouble,
    WindowRow,
)
from idlerwatch.core.watch.alarms import AlarmsState, begin_alarms, judge_alarms, restore
from idlerwatch.core.watch.align import AlignState, begin_align, step
from idlerwatch.core.watch.assess import assess
from idlerwatch.core.watch.circuit import (
    NOT_LEARNED,
    CircuitState,
    Judge,
    begin_circuit,
    compile_judge,
    judge_circuit,
    with_recovered,
)
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.derive import derive
from idlerwatch.core.watch.estimate import estimate
from idlerwatch.core.watch.life import LifeState, begin_life, judge_life
from idlerwatch.core.watch.plan import Plan
from idlerwatch.core.watch.windows import WindowsState, begin_windows, step_windows

Told = Acknowledge | Shelve | Trouble


@dataclass(frozen=True, slots=True, eq=False)
class Watch:
    """The state of the whole chain between two inputs."""

    plan: Plan
    judge: Judge | None
    align: AlignState
    life: LifeState
    circuit: CircuitState
    alarms: AlarmsState
    windows: WindowsState
    told: tuple[Told, ...] = ()
    rows: tuple[WindowRow, ...] = ()

    @staticmethod
    def begin(
        settings: Settings,
        standing: tuple[StandingAlarm, ...] = (),
        known: KnownCircuit | None = None,
        remark: str = NOT_LEARNED,
    ) -> "Watch":
        """Return the watch before the first input.

        Parameters
        ----------
        settings
            In force.
        standing
            The alarms that stood at the end of the last run.
        known
            The circuit that was learned and accepted; None where the plate's values must serve.
        remark
            Why it is None, in a sentence.
        """
        plan = compile_plan(settings)
        judge = compile_judge(settings, plan, known, remark)
        return Watch(
            plan=plan,
            judge=judge,
            align=begin_align(plan.slow),
            life=begin_life(),
            circuit=begin_circuit(judge),
            alarms=begin_alarms(settings, standing),
            windows=begin_windows(plan.cycle_s),
        )

    def with_standing(self, standing: tuple[StandingAlarm, ...]) -> "Watch":
        """Return the watch with exactly these alarms standing: for a start, after the last minutes were fed."""
        return replace(self, alarms=restore(self.alarms, standing))

    def take(self, event: Input) -> tuple["Watch", tuple[Output, ...]]:
        """Take one input; a cycle's end gives an assessment, then alarm events, then rows of closed windows."""
        match event:
            case Reading() | MeterSilent() | CycleEnd():
                align, sample = step(self.align, event)
                watch = Watch(
                    self.plan,
                    self.judge,
                    align,
                    self.life,
                    self.circuit,
                    self.alarms,
                    self.windows,
                    self.told,
                    self.rows,
                )
                return (watch, ()) if sample is None else _judge(watch, sample)
            case Acknowledge() | Shelve() | Trouble():
                return replace(self, told=(*self.told, event)), ()


def _judge(watch: Watch, sample: Sample) -> tuple[Watch, tuple[Output, ...]]:
    """Run the chain on one sample."""
    derived = derive(watch.plan, sample)
    seen = estimate(watch.plan, derived)
    life = judge_life(watch.plan, watch.life, sample.at, derived)
    circuit, found = judge_circuit(watch.judge, watch.circuit, sample, derived, life)
    judged = assess(watch.plan, sample, derived, with_recovered(seen, found), life, found=found)
    alarms, events, standing, lamp = judge_alarms(watch.alarms, judged, watch.told, watch.rows)
    assessment = replace(judged, alarms=standing, lamp=lamp)
    windows, rows = step_windows(watch.windows, assessment)
    after = replace(watch, life=life, circuit=circuit, alarms=alarms, windows=windows, told=(), rows=rows)
    return after, (assessment, *events, *rows)
