"""Figures and instants as people read them: volts, percent, kilowatts, local time.

What is not measured is said so; it is never a 0.
"""

import math
from collections.abc import Callable, Mapping
from typing import Final

from idlerwatch.core.values import Assessment, Figure

NOT_MEASURED: Final = "not measured"

Formatter = Callable[[float], str]


def volts(value: float) -> str:
    """Return volts: whole ones, below ten with one decimal.

    Examples
    --------
    >>> volts(231.6), volts(2.06), volts(9.97)
    ('232 V', '2.1 V', '10 V')
    """
    return f"{value:.1f} V" if abs(value) < 9.95 else f"{value:.0f} V"


def amperes(value: float) -> str:
    """Return amperes with one decimal."""
    return f"{value:.1f} A"


def power(value: float, unit: str = "W") -> str:
    """Return power in thousands, with two decimals below ten.

    Examples
    --------
    >>> power(1234.0), power(-23456.0, "var")
    ('1.23 kW', '-23.5 kvar')
    """
    return f"{value / 1000.0:.{2 if abs(value) < 9995.0 else 1}f} k{unit}"


def percent(value: float) -> str:
    """Return a ratio in percent, below 10 % with one decimal.

    Examples
    --------
    >>> percent(0.0234), percent(0.985)
    ('2.3 %', '98 %')
    """
    return f"{100.0 * value:.1f} %" if abs(value) < 0.0995 else f"{100.0 * value:.0f} %"


def factor(value: float) -> str:
    """Return a power factor or another pure number."""
    return f"{value:.2f}"


def hertz(value: float) -> str:
    """Return a frequency."""
    return f"{value:.2f} Hz"


def told(figure: Figure, formatter: Formatter) -> str:
    """Return a figure, or that it is not measured."""
    return formatter(figure.value) if figure.is_known else NOT_MEASURED


def told_with_uncertainty(figure: Figure, formatter: Formatter) -> str:
    """Return a figure with its expanded uncertainty where one is stated, and large enough to be written.

    Examples
    --------
    >>> told_with_uncertainty(Figure(0.0234, 0.004, "measured"), percent)
    '2.3 % ± 0.4 %'
    >>> told_with_uncertainty(Figure(2.0, 0.01, "measured"), volts)
    '2.0 V'
    """
    if not figure.is_known or math.isnan(figure.uncertainty) or formatter(figure.uncertainty) == formatter(0.0):
        return told(figure, formatter)
    return f"{formatter(figure.value)} ± {formatter(figure.uncertainty)}"


def joined(figures: Mapping[str, tuple[Figure, Formatter]]) -> str:
    """Return the figures that are known, each after its word, or that none is measured.

    Examples
    --------
    >>> joined({"": (Figure(231.0), volts), "power factor": (Figure(), factor)})
    '231 V'
    """
    known = [
        f"{word} {formatter(figure.value)}".strip() for word, (figure, formatter) in figures.items() if figure.is_known
    ]
    return ", ".join(known) or NOT_MEASURED


def clock_time(utc: float, local_offset: float) -> str:
    """Return the local time of day.

    Examples
    --------
    >>> clock_time(1796104800.0, 3600.0)
    '07:00:00'
    """
    seconds = math.floor(utc + local_offset) % 86400
    return f"{seconds // 3600:02d}:{seconds // 60 % 60:02d}:{seconds % 60:02d}"


def duration(seconds: float) -> str:
    """Return a duration in its two largest units.

    Examples
    --------
    >>> duration(42.4), duration(754.0), duration(22200.0)
    ('42 s', '12 min 34 s', '6 h 10 min')
    """
    whole = max(0, round(seconds))
    if whole < 60:
        return f"{whole} s"
    if whole < 3600:
        return f"{whole // 60} min {whole % 60} s"
    return f"{whole // 3600} h {whole // 60 % 60} min"


def state(assessment: Assessment) -> str:
    """Return the converter's state and for how long it has been so."""
    loading = f", {assessment.loading}" if assessment.loading else ""
    return f"{assessment.state}{loading} for {duration(assessment.at - assessment.state_since)}"


def silent_meters(assessment: Assessment) -> str:
    """Return which meters do not answer and why, or that all do."""
    silent = [f"{meter}: {why}" for meter, why in assessment.meters.items() if why != "answering"]
    many = len(assessment.meters)
    return f"{many - len(silent)} of {many} answer; {', '.join(silent)}" if silent else f"all {many} answer"
