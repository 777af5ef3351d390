"""Last step: gapless windows of 10 s, 10 min and 1 h on boundaries of the UTC clock.

Lengths are named after IEC 61000-4-30 (10 min), which is all these polled meters share with it. Voltages and currents
are aggregated as the root of the mean of squares, all else as the mean, a counter as its last value; with minimum,
maximum and the count of samples present. A row is *flagged* where more than a tenth of the samples expected is missing
(or where the clock stretched it). Long windows are made of the short ones, which nest in them: nothing is lost or
counted twice between them. A closing window is told with the first sample after it; what is open at a stop is lost.

Clock steps. A window is named by its start, and starts only grow:

* forward: the open windows close short and flagged; the time that never was has no windows;
* back, up to an hour: the open windows stay open until the clock has caught up, and are flagged for it, since a start
  that was told already must not be told twice;
* back by more than an hour: the clock was simply wrong before (a board without a battery); the open windows close and
  new ones begin by the new clock (only such a clock, gone astray and back again, tells a start twice).
"""

import math
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Final, Literal

import numpy as np
import numpy.typing as npt

from idlerwatch.core.values import UNKNOWN, Assessment, Figure, WindowRow

Floats = npt.NDArray[np.float64]
FigureName = tuple[str, str, str]
Name = Literal["10s", "10min", "1h"]

SHORT_S: Final = 10.0
LONG: Final[tuple[tuple[Name, float], ...]] = (("10min", 600.0), ("1h", 3600.0))
FARTHEST_STEP_BACK_S: Final = 3600.0

ROOT_MEAN_SQUARE: Final = frozenset({
    "voltage", "voltage_ratio", "current", "current_ratio", "neutral_earth_voltage", "neutral_shift",
    "usual_voltage", "zero_sequence_voltage", "positive_sequence_voltage", "negative_sequence_voltage",
})  # fmt: skip
COUNTERS: Final = frozenset({"active_energy_import"})
STANDING: Final = frozenset({"unacknowledged", "acknowledged"})


@dataclass(frozen=True, slots=True, eq=False)
class Summary:
    """What a window holds so far: an entry a figure in each array; `standing` counts samples with an alarm."""

    start: float
    samples: int
    first_at: float
    last_at: float
    names: tuple[FigureName, ...]
    count: Floats
    total: Floats
    squares: Floats
    low: Floats
    high: Floats
    last: Floats
    standing: Mapping[str, int]


@dataclass(frozen=True, slots=True, eq=False)
class WindowsState:
    """The samples of the open 10 s window, and the open long windows."""

    cycle_s: float
    start: float = math.nan
    instants: tuple[float, ...] = ()
    figures: tuple[Mapping[FigureName, Figure], ...] = ()
    standing: tuple[tuple[str, ...], ...] = ()
    long: tuple[Summary | None, ...] = (None,) * len(LONG)


def begin_windows(cycle_s: float) -> WindowsState:
    """Return the state before the first sample."""
    return WindowsState(cycle_s=cycle_s)


def step_windows(state: WindowsState, assessment: Assessment) -> tuple[WindowsState, tuple[WindowRow, ...]]:
    """Take one assessment; return the rows of the windows that closed before it."""
    start = _start_for(state, assessment.utc)
    rows: tuple[WindowRow, ...] = ()
    if start != state.start:
        state, rows = _close(state, start)
    return _add(state, assessment), rows


def _start_for(state: WindowsState, utc: float) -> float:
    """Return the start of the window a sample belongs to: the open one's while the clock catches up."""
    if not math.isfinite(utc):
        return state.start if state.figures else 0.0
    start = math.floor(utc / SHORT_S) * SHORT_S
    is_behind = state.start - FARTHEST_STEP_BACK_S <= start < state.start
    return state.start if is_behind else start


def _add(state: WindowsState, assessment: Assessment) -> WindowsState:
    standing = tuple(f"{alarm.tag}/{alarm.subject}" for alarm in assessment.alarms if alarm.state in STANDING)
    return replace(
        state,
        instants=(*state.instants, assessment.at),
        figures=(*state.figures, assessment.figures),
        standing=(*state.standing, standing),
    )


def _close(state: WindowsState, start: float) -> tuple[WindowsState, tuple[WindowRow, ...]]:
    """Close the 10 s window, and the long ones that do not hold the new start."""
    empty = WindowsState(cycle_s=state.cycle_s, start=start, long=state.long)
    if not state.figures:
        return empty, ()
    short = summarise(state)
    rows = list(_rows("10s", SHORT_S, short, state.cycle_s))
    kept: list[Summary | None] = []
    for (name, length), opened in zip(LONG, state.long, strict=True):
        grown = _grow(opened, short, length)
        is_over = math.floor(start / length) * length != grown.start
        rows += _rows(name, length, grown, state.cycle_s) if is_over else ()
        kept.append(None if is_over else grown)
    return replace(empty, long=tuple(kept)), tuple(rows)


def summarise(state: WindowsState) -> Summary:
    """Return the summary of the open 10 s window."""
    names, values = _table(state.figures)
    present = ~np.isnan(values)
    filled = np.where(present, values, 0.0)
    return Summary(
        start=state.start,
        samples=len(state.figures),
        first_at=state.instants[0],
        last_at=state.instants[-1],
        names=names,
        count=present.sum(axis=0).astype(np.float64),
        total=filled.sum(axis=0),
        squares=(filled * filled).sum(axis=0),
        low=np.where(present, values, np.inf).min(axis=0),
        high=np.where(present, values, -np.inf).max(axis=0),
        last=_last(values),
        standing=_counts(state.standing),
    )


def _table(figures: tuple[Mapping[FigureName, Figure], ...]) -> tuple[tuple[FigureName, ...], Floats]:
    """Return the names of all figures and their values, a row a sample; usually every sample has the same names."""
    names = tuple(figures[0])
    if all(tuple(each) == names for each in figures[1:]):
        return names, np.array([[figure.value for figure in each.values()] for each in figures])
    names = tuple(dict.fromkeys(name for each in figures for name in each))
    return names, np.array([[each.get(name, UNKNOWN).value for name in names] for each in figures])


def _last(values: Floats) -> Floats:
    """Return the last value present in each column; NaN where there is none."""
    last: Floats = values[0]
    for row in values[1:]:
        last = np.where(np.isnan(row), last, row)
    return last


def _counts(standing: Iterable[tuple[str, ...]]) -> Mapping[str, int]:
    counts: dict[str, int] = {}
    for alarms in standing:
        for alarm in alarms:
            counts[alarm] = counts.get(alarm, 0) + 1
    return counts


# --------------------------------------------------------------------------
# Long windows
# --------------------------------------------------------------------------


def _grow(opened: Summary | None, short: Summary, length: float) -> Summary:
    if opened is None:
        return replace(short, start=math.floor(short.start / length) * length)
    return merge(opened, short)


def merge(first: Summary, second: Summary) -> Summary:
    """Return the summary of two successive stretches, named by the start of the first."""
    names = first.names if first.names == second.names else tuple(dict.fromkeys((*first.names, *second.names)))
    one, two = _spread(first, names), _spread(second, names)
    return Summary(
        start=first.start,
        samples=one.samples + two.samples,
        first_at=one.first_at,
        last_at=two.last_at,
        names=names,
        count=one.count + two.count,
        total=one.total + two.total,
        squares=one.squares + two.squares,
        low=np.minimum(one.low, two.low),
        high=np.maximum(one.high, two.high),
        last=np.where(np.isnan(two.last), one.last, two.last),
        standing={
            alarm: one.standing.get(alarm, 0) + two.standing.get(alarm, 0) for alarm in {**one.standing, **two.standing}
        },
    )


def _spread(summary: Summary, names: tuple[FigureName, ...]) -> Summary:
    """Return a summary over more names; figures it does not have were never present."""
    if summary.names == names:
        return summary
    place = {name: index for index, name in enumerate(names)}
    where = [place[name] for name in summary.names]

    def over(values: Floats, absent: float) -> Floats:
        spread = np.full(len(names), absent)
        spread[where] = values
        return spread

    return replace(
        summary,
        names=names,
        count=over(summary.count, 0.0),
        total=over(summary.total, 0.0),
        squares=over(summary.squares, 0.0),
        low=over(summary.low, np.inf),
        high=over(summary.high, -np.inf),
        last=over(summary.last, np.nan),
    )


# --------------------------------------------------------------------------
# Rows
# --------------------------------------------------------------------------


def expected_samples(length: float, summary: Summary, cycle_s: float) -> float:
    """Return how many samples a whole window holds; where cycles follow each other freely, by their mean spacing."""
    if cycle_s > 0.0:
        return length / cycle_s
    if summary.samples < 2 or summary.last_at <= summary.first_at:
        return math.inf
    return length * (summary.samples - 1) / (summary.last_at - summary.first_at)


def is_flagged(count: float, expected: float) -> bool:
    """Return whether more than a tenth of the samples is missing, or the clock stretched the window."""
    return count < 0.9 * expected - 1e-9 or count > 1.1 * expected + 1.0


def _rows(window: Name, length: float, summary: Summary, cycle_s: float) -> Iterator[WindowRow]:
    expected = expected_samples(length, summary, cycle_s)
    for (measurement, subject), fields in _fields(summary).items():
        fields["flagged"] = float(is_flagged(fields["count"], expected))
        yield WindowRow(window, summary.start, measurement, subject, fields)
    flagged = float(is_flagged(summary.samples, expected))
    for alarm, count in summary.standing.items():
        told = {"standing": count / summary.samples, "count": float(summary.samples), "flagged": flagged}
        yield WindowRow(window, summary.start, "alarm", alarm, told)


def aggregate(summary: Summary) -> Floats:
    """Return each figure's value over the window: root mean square, mean, or last; NaN where it was never present."""
    count = np.where(summary.count > 0.0, summary.count, np.nan)
    quantities = [quantity for _, _, quantity in summary.names]
    squared = np.array([quantity in ROOT_MEAN_SQUARE for quantity in quantities])
    counted = np.array([quantity in COUNTERS for quantity in quantities])
    value = np.where(squared, np.sqrt(summary.squares / count), summary.total / count)
    return np.where(counted, summary.last, value)


def _fields(summary: Summary) -> dict[tuple[str, str], dict[str, float]]:
    """Return the fields of each row; what was never present is left out, and so are rows of which nothing was."""
    rows: dict[tuple[str, str], dict[str, float]] = {}
    columns = zip(
        summary.names, aggregate(summary).tolist(), summary.low.tolist(), summary.high.tolist(),
        summary.count.tolist(), strict=True,
    )  # fmt: skip
    for (measurement, subject, quantity), value, low, high, count in columns:
        if count == 0.0:
            continue
        row = rows.setdefault((measurement, subject), {"count": 0.0})
        row[quantity] = value
        row[f"{quantity}_min"] = low
        row[f"{quantity}_max"] = high
        row["count"] = max(row["count"], count)
    return rows
