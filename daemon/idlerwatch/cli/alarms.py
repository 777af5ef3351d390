"""``idlerwatch alarms``: the alarm list in force for an installation, and which alarms are not available in it."""

import json
from pathlib import Path
from typing import Any

import click
from rich import box
from rich.console import Console
from rich.table import Table

from idlerwatch.core.settings.model import Alarm, Settings
from idlerwatch.core.watch.alarms import availability
from idlerwatch.core.watch.texts import duration
from idlerwatch.edges.files import load_settings

_EXAMPLE = "\b\nExample:\n  idlerwatch alarms --settings /etc/idlerwatch/idlerwatch.toml"


@click.command(name="alarms", epilog=_EXAMPLE)
@click.option(
    "--settings",
    "path",
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
    required=True,
    help="The settings file.",
)
@click.option("--json", "format_", flag_value="json", default="table", help="Print JSON instead of a table.")
def command(path: Path, format_: str) -> None:
    """List the alarms in force, and which are not available here and why."""
    rows = list_alarms(load_settings(path))
    if format_ == "json":
        click.echo(json.dumps(rows, indent=2, ensure_ascii=False))
        return
    in_force = [row for row in rows if not row["not_available"]]
    console = Console()
    console.print(_in_force(in_force))
    console.print(_missing([row for row in rows if row["not_available"]]))
    click.echo(f"{len(in_force)} alarms are in force; {len(rows) - len(in_force)} are not available here.")


def list_alarms(settings: Settings) -> list[dict[str, Any]]:
    """Return one row an alarm of the list, and one for each subject that has settings of its own."""
    lacking = availability(settings)
    return [_row(alarm, subject, lacking[tag]) for (tag, subject), alarm in settings.alarms.items()]


def _row(alarm: Alarm, subject: str, lacking: str) -> dict[str, Any]:
    return {
        "tag": alarm.tag,
        "subject": subject,
        "watches": alarm.watches,
        "setpoint": alarm.setpoint,
        "deadband": alarm.deadband,
        "clears_at": alarm.clears_at,
        "unit": alarm.unit,
        "on_delay_s": alarm.on_delay_s,
        "off_delay_s": alarm.off_delay_s,
        "priority": alarm.priority,
        "priority_when": dict(alarm.priority_when),
        "suppressed_in": list(alarm.suppressed_in),
        "explains": list(alarm.explains),
        "needs_acknowledgement": alarm.needs_acknowledgement,
        "chronic": alarm.chronic,
        "not_available": lacking,
    }


def _in_force(rows: list[dict[str, Any]]) -> Table:
    table = Table("alarm", "setpoint", "back", "on", "off", "priority", "not in", box=box.SIMPLE_HEAD, pad_edge=False)
    for column in table.columns[:5]:
        column.no_wrap = True
    for row in rows:
        table.add_row(*_cells(row))
    return table


def _missing(rows: list[dict[str, Any]]) -> Table:
    table = Table("not available here", "because", box=box.SIMPLE_HEAD)
    for row in rows:
        table.add_row(_name(row), row["not_available"], style="dim")
    return table


def _name(row: dict[str, Any]) -> str:
    return f"{row['tag']} {row['subject']}".strip()


def _cells(row: dict[str, Any]) -> tuple[str, ...]:
    has_none = row["setpoint"] is None
    back = f"by {_people(row['deadband'], row)}" if row["clears_at"] is None else f"to {_people(row['clears_at'], row)}"
    other = "".join(f", {when}: {priority}" for when, priority in row["priority_when"].items())
    return (
        _name(row),
        "" if has_none else _people(row["setpoint"], row),
        "" if has_none else back,
        duration(row["on_delay_s"]),
        duration(row["off_delay_s"]),
        row["priority"] + other,
        "".join(row["suppressed_in"]),
    )


def _people(value: float, row: dict[str, Any]) -> str:
    """Return a value as people read it: ratios in percent, temperatures in degrees Celsius."""
    match row["unit"]:
        case "1":
            return f"{100 * value:g} %"
        case "K" if value > 200:
            return f"{value - 273.15:g} °C"
        case "s":
            return duration(value)
        case unit:
            return f"{value:g} {unit}"
