"""One cycle: whom to ask, again, or not at all.

First every meter that answered last time is asked for its fast blocks, and one meter for its slow ones. What failed
is asked for again while there is time left in the cycle. Last, one of the silent meters is asked one short block, once;
the others wait their turn. Each meter is delivered once, as soon as it is known what of it.

A block is only asked for in a shape that is not owed any more (`reshaped`); where there is none, it is not asked.
"""

import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from typing import Final, Literal

from idlerwatch.core.polling import Block, LineTiming, MeterPlan, plan_meter, reshaped, wanted_points
from idlerwatch.core.registers import Point, RegisterKey, RegisterMap, figures
from idlerwatch.core.settings.model import Meter
from idlerwatch.core.values import MeterSilent, Reading
from idlerwatch.edges.bus.exchange import Master

Deliver = Callable[[Reading | MeterSilent], None]
Reason = Literal["no answer", "wrong answer", "refused", "port gone", "not asked", "booting"]

SILENT_FROM: Final = 2
"""Cycles without an answer after which a meter counts as having been away, and boots when it is back."""


@dataclass
class MeterOnBus:
    """A meter, what it is asked, and how it has been answering. `missed` counts cycles without an answer."""

    meter: Meter
    plan: MeterPlan
    points: tuple[Point, ...]
    missed: int = 0
    booting_until: float = float("-inf")

    @property
    def name(self) -> str:
        """The meter's name."""
        return self.meter.name

    @property
    def address(self) -> int:
        """The meter's address."""
        return self.meter.address


def on_bus(meter: Meter, register_map: RegisterMap, timing: LineTiming) -> MeterOnBus:
    """Return a meter with its plan."""
    channels = len(meter.channels)
    timing = LineTiming(timing.baudrate, timing.character_bits, register_map.answer_delay_s)
    return MeterOnBus(meter, plan_meter(register_map, channels, timing), wanted_points(register_map, channels))


@dataclass
class _Gathered:
    """What one meter has told in this cycle, and which blocks failed."""

    registers: dict[RegisterKey, int] = field(default_factory=dict)
    failed: list[Block] = field(default_factory=list)
    reason: str = ""
    began: float = float("inf")
    ended: float = 0.0
    is_slow: bool = False

    @property
    def at(self) -> float:
        """The middle of the exchanges, or now where there was none."""
        return (self.began + self.ended) / 2.0 if self.registers else time.monotonic()


class Cycle:
    """Runs cycles on one bus; what it remembers from one to the next is each meter's silence and whose turn it is."""

    def __init__(self, meters: Sequence[MeterOnBus], master: Master, deliver: Deliver) -> None:
        self._meters = meters
        self._master = master
        self._deliver = deliver
        self._turn = 0
        self._probed = 0
        self._undelivered: list[MeterOnBus] = []

    def run(self, until: float) -> None:
        """Ask everybody; what is asked again must end by `until`. Raises one of `PORT_LOST`, see `give_up`."""
        self._undelivered = list(self._meters)
        self._turn += 1
        pending: list[tuple[MeterOnBus, _Gathered]] = []
        for one in [one for one in self._meters if not one.missed]:
            gathered = self._gather(one)
            if gathered.failed:
                pending.append((one, gathered))
            else:
                self._tell(one, gathered)
        for one, gathered in pending:
            self._again(one, gathered, until)
            self._tell(one, gathered)
        self._silent_ones()

    def give_up(self, reason: Reason) -> None:
        """Deliver whoever was not delivered in this cycle as silent."""
        for one in self._undelivered:
            self._deliver(MeterSilent(one.name, time.monotonic(), reason))
        self._undelivered = []

    def expect_everybody(self) -> None:
        """Begin a cycle that may turn out to have no port: nobody was delivered yet."""
        self._undelivered = list(self._meters)

    def _gather(self, one: MeterOnBus) -> _Gathered:
        gathered = _Gathered()
        for block in one.plan.fast:
            if gathered.reason == "no answer" or not self._fetch(one, block, gathered):
                gathered.failed.append(block)
        if not gathered.failed and self._meters[self._turn % len(self._meters)] is one:
            gathered.is_slow = all(self._fetch(one, block, gathered) for block in one.plan.slow)
        return gathered

    def _again(self, one: MeterOnBus, gathered: _Gathered, until: float) -> None:
        """Ask again for what failed, while that surely ends in time."""
        for block in list(gathered.failed):
            if time.monotonic() + self._master.longest_s(one.address, block) > until:
                return
            self._master.drain(until)
            if time.monotonic() + self._master.longest_s(one.address, block) > until:
                return
            if self._fetch(one, block, gathered):
                gathered.failed.remove(block)
            elif gathered.reason == "no answer":
                return

    def _fetch(self, one: MeterOnBus, block: Block, gathered: _Gathered) -> bool:
        """Ask for a block in a shape that is not owed; False where there is none, or the answer failed."""
        way = reshaped(block, self._master.owed_by(one.address), one.address, one.plan)
        if not way:
            gathered.reason = gathered.reason or "no answer"
            return False
        for part in way:
            answer = self._master.ask(one.address, part)
            if answer.failure:
                gathered.reason = answer.failure
                return False
            gathered.registers.update(answer.registers)
            gathered.began = min(gathered.began, answer.began)
            gathered.ended = max(gathered.ended, answer.ended)
        return True

    def _silent_ones(self) -> None:
        silent = [one for one in self._meters if one.missed and one in self._undelivered]
        asked = next(self._in_turn(silent), None)
        for one in silent:
            if one is not asked:
                one.missed += 1
                self._hand_over(one, MeterSilent(one.name, time.monotonic(), "not asked"))
        if asked is not None:
            self._probe(asked)

    def _in_turn(self, silent: Sequence[MeterOnBus]) -> Iterator[MeterOnBus]:
        """Yield the silent meters that can be asked, the one whose turn it is first."""
        self._probed += 1
        for index in range(len(silent)):
            one = silent[(self._probed + index) % len(silent)]
            if reshaped(one.plan.probe, self._master.owed_by(one.address), one.address, one.plan):
                yield one

    def _probe(self, one: MeterOnBus) -> None:
        """Ask a silent meter one short block, once; if it answers, all of it."""
        probed = _Gathered()
        if self._fetch(one, one.plan.probe, probed):
            self._come_back(one)
            self._tell(one, self._gather(one))
        else:
            one.missed += 1
            self._hand_over(one, MeterSilent(one.name, time.monotonic(), probed.reason))

    def _come_back(self, one: MeterOnBus) -> None:
        if one.missed >= SILENT_FROM:
            one.booting_until = time.monotonic() + one.meter.boot_s
        one.missed = 0

    def _tell(self, one: MeterOnBus, gathered: _Gathered) -> None:
        if not gathered.registers:
            one.missed += gathered.reason == "no answer"
            self._hand_over(one, MeterSilent(one.name, time.monotonic(), gathered.reason))
            return
        if gathered.at < one.booting_until:
            self._hand_over(one, MeterSilent(one.name, gathered.at, "booting"))
            return
        points = [point for point in one.points if point.group == "fast" or gathered.is_slow]
        values, reasons = figures(points, gathered.registers)
        self._hand_over(one, Reading(one.name, gathered.at, values, reasons))

    def _hand_over(self, one: MeterOnBus, value: Reading | MeterSilent) -> None:
        self._undelivered.remove(one)
        self._deliver(value)
