"""``idlerwatch assess``: what readings taken by hand, or recorded in a table, say about the converter."""

import csv
import json
import math
import sys
import textwrap
from collections.abc import Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any, Final

import click
from rich.box import SIMPLE_HEAD
from rich.console import Console
from rich.table import Table

from idlerwatch.core import payloads
from idlerwatch.core.byhand import Circumstances, Moment, assess_by_hand, read_word
from idlerwatch.core.conductors import LEGS, LINE_PAIRS
from idlerwatch.core.values import Assessment, Figure
from idlerwatch.core.watch.assess import EARTH_NOT_MEASURED, NOT_SEEN
from idlerwatch.core.watch.estimate import CONTRADICTION
from idlerwatch.core.wording import amperes, factor, percent, power, told, told_with_uncertainty, volts

WIDTH: Final = 88
_EXAMPLE = """\b
Examples:
  idlerwatch assess L1-N=231 L2-N=227 L3-N=229 L1-L2=404 L2-L3=381 L3-L1=399
  idlerwatch assess --feed L1-L2 --voltage 240 --neutral centre-tap L1-L2=241 L2-L3=233 L3-L1=236
  idlerwatch assess readings.csv --json"""


@click.command(name="assess", epilog=_EXAMPLE)
@click.argument("words", nargs=-1, required=True, metavar="WHAT=VALUE... | FILE.csv")
@click.option("--feed", default="L1-N", show_default=True, help="The pair the utility feeds.")
@click.option("--voltage", type=click.FloatRange(min=1.0), default=230.0, show_default=True, help="Declared across it.")
@click.option("--neutral", default="supply", show_default=True, help="What N is, as in the settings.")
@click.option("--class", "class_percent", type=click.FloatRange(min=0.001, max=20.0), default=0.5, show_default=True,
              help="Class of the meter: its limit, in percent of reading.")  # fmt: skip
@click.option("--json", "format_", flag_value="json", default="table", help="Print JSON: SI units, plain ratios.")
def command(words: Sequence[str], feed: str, voltage: float, neutral: str, class_percent: float, format_: str) -> None:  # noqa: PLR0917  # one an option
    """Assess readings given by hand, or the rows of a CSV file.

    A word says what was read: L1-N, L1-L2, N-PE a voltage, L1 a current, P_L1 and Q_L1 the power of a leg. A file has
    these words as its header, and one moment a row. Exit 1 where voltages contradict each other.
    """
    if len(words) == 1 and "=" not in words[0]:
        moments = list(read_table(Path(words[0])))
    else:
        moments = [Moment("", dict(map(_read_word, words)))]
    found = assess_by_hand(moments, Circumstances(feed.upper(), voltage, neutral, class_percent / 100.0))
    if format_ == "json":
        click.echo(json.dumps([_as_json(given) for given in found], indent=2, allow_nan=False))
    elif len(found) == 1:
        for line in tell(found[0]):
            click.echo(line)
    else:
        Console(width=None).print(_table(moments, found))
    if any(map(contradicts, found)):
        sys.exit(1)


# --------------------------------------------------------------------------
# What is read
# --------------------------------------------------------------------------


def _read_word(text: str) -> tuple[str, float]:
    word, equals, number = text.partition("=")
    if not equals:
        raise click.UsageError(f"{text!r} is no reading, must be WHAT=VALUE, like L1-N=231.4")
    return _word(word, ""), _number(number, word)


def _word(word: str, place: str) -> str:
    try:
        return read_word(word)
    except ValueError as error:
        raise click.UsageError(f"{place}{error}") from error


def _number(text: str, place: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise click.UsageError(f"{place} is {text!r}, must be a number")
    return value


def read_table(path: Path) -> Iterator[Moment]:
    """Yield the moments of a CSV file; an empty cell is a reading that was not taken."""
    try:
        with path.open(newline="", encoding="utf-8") as file:
            rows = csv.reader(file)
            header = next(rows, [])
            words = [_word(word, f"{path.name}: column {number} is ") for number, word in enumerate(header, 1)]
            if not words:
                raise click.UsageError(f"{path.name} is empty, must begin with a header like L1-N,L2-N,L3-N")
            for number, row in enumerate(rows, 2):
                if row:
                    yield _moment(f"{path.name}, line {number}: ", words, row)
    except (OSError, UnicodeDecodeError) as error:
        raise click.UsageError(
            f"{path} cannot be read, must be a CSV file, or readings like L1-N=231: {error}"
        ) from error


def _moment(place: str, words: Sequence[str], row: Sequence[str]) -> Moment:
    if len(row) != len(words):
        raise click.UsageError(f"{place}{len(row)} cells, must be {len(words)} as in the header")
    cells = zip(words, row, strict=True)
    return Moment(place, {word: _number(cell, f"{place}{word}") for word, cell in cells if cell.strip()})


# --------------------------------------------------------------------------
# What is told
# --------------------------------------------------------------------------


def _as_json(given: Assessment) -> dict[str, Any]:
    whole = payloads.assessment(replace(given, state_since=given.at))  # one moment has no state before it
    figures = {measurement: whole["figures"][measurement] for measurement in ("leg", "line", "converter", "earthing")}
    return {"angles": whole["angles"], "figures": figures, "remarks": whole["remarks"]}


def tell(given: Assessment) -> Iterator[str]:
    """Yield what one moment says, a line each."""
    for leg in LEGS:
        row = {
            "": (given.leg(leg, "voltage"), volts),
            "current": (given.leg(leg, "current"), amperes),
            "active": (given.leg(leg, "active_power"), power),
            "power factor": (given.leg(leg, "power_factor"), factor),
        }
        known = [f"{name} {told(figure, how)}".strip() for name, (figure, how) in row.items() if figure.is_known]
        if known:
            yield f"{leg + ' to N':<9} {', '.join(known)}"
    for pair in LINE_PAIRS:
        line = given.figure("line", str(pair).lower(), "voltage")
        if line.is_known:
            yield f"{pair!s:<9} {volts(line.value)} ({line.known})"
    yield ""
    yield from _unbalances(given)
    yield ""
    odd = [remark for remark in given.remarks if remark not in (NOT_SEEN, EARTH_NOT_MEASURED)]
    for sentence in (*odd, contrast(given)):
        yield textwrap.fill(f"- {sentence}", WIDTH, subsequent_indent="  ")


_ROWS: Final = (
    ("unbalance of the lines, largest deviation", "line_voltage_unbalance_rate", percent),
    ("unbalance factor of the lines, V2/V1", "voltage_unbalance_factor", percent),
    ("unevenness of legs to neutral (no angles)", "phase_voltage_unbalance_rate", percent),
    ("positive sequence V1", "positive_sequence_voltage", volts),
    ("negative sequence V2", "negative_sequence_voltage", volts),
    ("zero sequence V0", "zero_sequence_voltage", volts),
    ("unbalance of the currents", "current_unbalance_rate", percent),
    ("power factor, arithmetic", "arithmetic_power_factor", factor),
    ("power factor, vector", "vector_power_factor", factor),
    ("power factor, effective", "effective_power_factor", factor),
    ("motors can carry, of their rating", "derating_factor", percent),
    ("added temperature rise of motors", "added_temperature_rise", percent),
)


def _unbalances(given: Assessment) -> Iterator[str]:
    missing = []
    for name, quantity, how in _ROWS:
        figure = given.figure("converter", "converter", quantity)
        if figure.is_known:
            yield f"{name:<43}{told_with_uncertainty(figure, how)}"
        else:
            missing.append(name)
    earth = given.figure("earthing", "converter", "neutral_earth_voltage")
    yield f"{'neutral to earth':<43}{told(earth, volts)}"
    if missing:
        yield textwrap.fill(f"not to be had from these: {'; '.join(missing)}", WIDTH, subsequent_indent="  ")


def contradicts(given: Assessment) -> bool:
    """Whether not all of the voltages that were read can be right."""
    return any(remark.startswith(CONTRADICTION) for remark in given.remarks)


def contrast(given: Assessment) -> str:
    """Return in one sentence what legs and lines say against each other.

    That even legs can hide uneven lines is what most readings taken by hand miss.
    """
    rate = given.figure("converter", "converter", "phase_voltage_unbalance_rate")
    true = given.figure("converter", "converter", "voltage_unbalance_factor")
    if not true.is_known and contradicts(given):
        return "No unbalance is told from voltages that cannot all be right: read them again, within ten seconds."
    if not true.is_known:
        return (
            "The unbalance is not known: leg-to-neutral voltages do not show the angles between the legs. Measure the "
            "three line voltages too."
            if rate.is_known
            else "The unbalance is not known: it needs the three line voltages."
        )
    if not rate.is_known:
        return f"Machines see an unbalance of {percent(true.value)}."
    if true.value > 1.2 * rate.value:  # a fifth more is worth a warning
        seen = f"machines on the lines see {percent(true.value)}"
        return f"The legs look more even than the lines are: {percent(rate.value)} to neutral, but {seen}."
    return f"Legs to neutral say {percent(rate.value)}, the lines {percent(true.value)}: machines see the lines."


def _table(moments: Sequence[Moment], found: Sequence[Assessment]) -> Table:
    table = Table(box=SIMPLE_HEAD)
    columns = {
        "LVUR": "line_voltage_unbalance_rate",
        "VUF": "voltage_unbalance_factor",
        "legs to N": "phase_voltage_unbalance_rate",
        "currents": "current_unbalance_rate",
    }
    table.add_column("line", justify="right")
    for name in (*columns, "N-PE"):
        table.add_column(name, no_wrap=True, justify="right")
    table.add_column("what does not fit")
    for moment, given in zip(moments, found, strict=True):
        figures = [given.figure("converter", "converter", quantity) for quantity in columns.values()]
        cells = [_cell(figure) for figure in figures]
        earth = given.figure("earthing", "converter", "neutral_earth_voltage")
        odd = [remark for remark in given.remarks if remark not in (NOT_SEEN, EARTH_NOT_MEASURED)]
        line = moment.place.rpartition("line ")[2].rstrip(": ")
        table.add_row(line, *cells, volts(earth.value) if earth.is_known else "-", "; ".join(odd))
    return table


def _cell(figure: Figure) -> str:
    """Return a ratio with its uncertainty, both in percent, that does not wrap."""
    return f"{100.0 * figure.value:.1f}±{100.0 * figure.uncertainty:.1f} %" if figure.is_known else "-"
