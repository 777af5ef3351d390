"""What the conditions remember from one sample to the next.

Each kind of memory is its own frozen value with one step; a step that changes nothing returns what it was given.
Nothing here is saved: at a start the last minutes are fed again.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from statistics import median
from typing import Final

from idlerwatch.core.conductors import LEGS
from idlerwatch.core.values import Assessment, Trouble, WindowRow

Value = Callable[[tuple[str, str, str]], float]

HOUR_S: Final = 3600.0
_STARTS_REMEMBERED: Final = 5
_JUMP_WITHIN_S: Final = 2.0
_BLOCK_S: Final = 600.0

# --------------------------------------------------------------------------
# The converter's life
# --------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Life:
    """What the state letters of the past tell; instants are monotonic, NaN where it never was."""

    letter: str = ""
    since: float = math.nan
    machines_at: float = math.nan
    """When a machine last ran."""
    machine_start_at: float = math.nan
    """When a machine was last seen starting."""
    idle_since: float = math.nan
    """Since when the converter runs unloaded without a break."""
    starts: tuple[float, ...] = ()
    """The starts of the last hour."""
    start_times: tuple[float, ...] = ()
    """How long the last few completed starts took. [s]"""
    start_time: float = math.nan
    """Of the start going on. [s]"""
    stopped_under_load_at: float = math.nan

    @property
    def learned_start_time(self) -> float:
        """Median of the last few completed starts; NaN before the first. [s]"""
        return median(self.start_times) if self.start_times else math.nan


def live(life: Life, letter: str, at: float, start_time: float) -> Life:
    """Take one sample's state letter and, in a start, its time so far."""
    if letter in ("L", "M"):
        life = replace(life, machines_at=at, machine_start_at=at if letter == "M" else life.machine_start_at)
    if letter in ("A", "C"):
        begun = life.since if life.letter in ("A", "C") else at
        life = replace(life, start_time=at - begun if math.isnan(start_time) else start_time)
    return life if letter == life.letter else _change(life, letter, at)


def _change(life: Life, letter: str, at: float) -> Life:
    previous = life.letter
    starts = tuple(start for start in life.starts if at - start < HOUR_S)
    if previous in ("S", "D") and letter in ("A", "C", "U", "L", "M"):
        starts = (*starts, at)
    times = life.start_times
    if previous in ("A", "C") and letter in ("U", "L", "M"):
        times = (*times, life.start_time)[-_STARTS_REMEMBERED:]
    stopped = life.stopped_under_load_at
    if letter in ("A", "C", "U", "L", "M"):
        stopped = math.nan
    elif previous in ("L", "M") and letter in ("S", "D"):
        stopped = at
    return replace(
        life,
        letter=letter,
        since=life.since if {previous, letter} == {"A", "C"} else at,
        idle_since=at if letter == "U" else math.nan,
        starts=starts,
        start_times=times,
        stopped_under_load_at=stopped,
    )


# --------------------------------------------------------------------------
# Neutral to earth: a jump
# --------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Earth:
    """The last two seconds of neutral to earth, and from where it jumped (NaN: it did not). [V]"""

    recent: tuple[tuple[float, float], ...] = ()
    before_jump: float = math.nan


def jump(earth: Earth, voltage: float, at: float, limits: tuple[float, float]) -> Earth:
    """Take one sample's voltage; `limits` are how much is a jump and what still is one once there was. [V]"""
    if math.isnan(voltage):
        return earth
    before = earth.before_jump
    recent = (*((when, volts) for when, volts in earth.recent if at - when <= _JUMP_WITHIN_S + 0.1), (at, voltage))
    if math.isnan(before):
        lowest = min(volts for _, volts in recent)
        before = lowest if voltage - lowest > limits[0] else math.nan
    elif voltage - before <= limits[1]:
        before = math.nan
    return Earth(recent, before)


# --------------------------------------------------------------------------
# Ammeters the wrong way round
# --------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Block:
    """A leg under load: seconds, in how many of them its power was negative, the share of the last ten minutes."""

    seconds: float = 0.0
    negative: float = 0.0
    share: float = math.nan


def count(block: Block, seconds: float, apparent_power: float, active_power: float) -> Block:
    """Take a loaded sample that stands for some seconds; after ten minutes of them the share is told."""
    if math.isnan(apparent_power) or math.isnan(active_power):
        return block
    negative = block.negative + (seconds if active_power < -0.25 * apparent_power else 0.0)
    total = block.seconds + seconds
    return Block(share=negative / total) if total >= _BLOCK_S else Block(total, negative, block.share)


# --------------------------------------------------------------------------
# All of it
# --------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Habits:
    """What of the alarm list and the settings the memory needs."""

    jump: tuple[float, float] = (20.0, 15.0)
    loaded_amperes: float = math.nan
    """Above it a leg counts as loaded, for `Block`. [A]"""


@dataclass(frozen=True, slots=True)
class Memory:
    """Everything the conditions remember."""

    at: float = math.nan
    cycle: float = math.nan
    """Between the last two samples. [s]"""
    life: Life = Life()
    earth: Earth = Earth()
    blocks: tuple[Block, Block, Block] = (Block(), Block(), Block())
    unbalance: float = math.nan
    unbalance_at: float = math.nan
    """Of the last whole 10-minute window, and when it closed."""
    idle_apparent_power: float = math.nan
    """Running mean of the supply's while unloaded. [V A]"""
    troubles: Mapping[str, str] = field(default_factory=dict)


_EARTH: Final = ("earthing", "converter", "neutral_earth_voltage")
_START: Final = ("converter", "converter", "start_time")
_SUPPLY: Final = ("supply", "supply", "apparent_power")
_LEG_POWERS: Final = tuple(
    tuple(("leg", leg.lower(), quantity) for quantity in ("current", "apparent_power", "active_power")) for leg in LEGS
)


def remember(
    memory: Memory,
    habits: Habits,
    assessment: Assessment,
    letter: str,
    news: tuple[Trouble | WindowRow, ...],
) -> Memory:
    """Take one sample, and as news what happened to the tool itself and the windows that have closed."""
    at = assessment.at
    seen = assessment.figures

    def value(address: tuple[str, str, str]) -> float:
        figure = seen.get(address)
        return math.nan if figure is None else figure.value

    window = _window(news)
    return Memory(
        at=at,
        cycle=at - memory.at,
        life=live(memory.life, letter, at, value(_START)),
        earth=jump(memory.earth, value(_EARTH), at, habits.jump),
        blocks=_blocks(memory, at, value, habits) if letter == "L" else memory.blocks,
        unbalance=memory.unbalance if window is None else window,
        unbalance_at=memory.unbalance_at if window is None else at,
        idle_apparent_power=_mean(memory, value(_SUPPLY)) if letter == "U" else memory.idle_apparent_power,
        troubles=_troubles(memory.troubles, news),
    )


def _blocks(memory: Memory, at: float, value: Value, habits: Habits) -> tuple[Block, Block, Block]:
    seconds = min(at - memory.at, 10.0) if at > memory.at else 0.0
    first, second, third = (
        count(block, seconds, value(apparent), value(active)) if value(current) > habits.loaded_amperes else block
        for block, (current, apparent, active) in zip(memory.blocks, _LEG_POWERS, strict=True)
    )
    return first, second, third


def _window(news: tuple[Trouble | WindowRow, ...]) -> float | None:
    """Return the unbalance of a whole 10-minute window among the rows; the rate where the factor is not measured."""
    for row in news:
        if (
            isinstance(row, WindowRow)
            and row.window == "10min"
            and row.measurement == "converter"
            and not row.fields.get("flagged")
        ):
            factor = row.fields.get("voltage_unbalance_factor")
            return row.fields.get("line_voltage_unbalance_rate") if factor is None else factor
    return None


def _mean(memory: Memory, apparent_power: float) -> float:
    """Follow the mean with a time constant of ten minutes."""
    mean = memory.idle_apparent_power
    if math.isnan(apparent_power) or math.isnan(mean):
        return apparent_power if math.isnan(mean) else mean
    share = min(1.0, max(0.0, memory.cycle) / _BLOCK_S)
    return mean + share * (apparent_power - mean)


def _troubles(known: Mapping[str, str], news: tuple[Trouble | WindowRow, ...]) -> Mapping[str, str]:
    if not any(isinstance(trouble, Trouble) for trouble in news):
        return known
    latest = {**known, **{trouble.part: trouble.text for trouble in news if isinstance(trouble, Trouble)}}
    return {part: text for part, text in latest.items() if text}
