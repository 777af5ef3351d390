"""``idlerwatch replay``: recorded cycles through the core again, as fast as it goes."""

import datetime as dt
from collections.abc import Iterator
from pathlib import Path

import click
from rich.progress import Progress

from idlerwatch.core.converter.known import KnownCircuit
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.values import AlarmEvent, Assessment, Input
from idlerwatch.core.watch.watch import Watch
from idlerwatch.edges.circuit_file import in_force
from idlerwatch.edges.console import message_line, status_line
from idlerwatch.edges.files import load_settings
from idlerwatch.edges.journal import JournalReader

_EXAMPLE = """\b
Examples:
  idlerwatch replay --settings idlerwatch.toml
  idlerwatch replay --settings idlerwatch.toml --journal copied-journal --since 2026-11-30T14:00 --every 600"""


@click.command(name="replay", epilog=_EXAMPLE)
@click.option("--settings", "path", type=click.Path(path_type=Path), required=True, help="The settings to judge by.")
@click.option(
    "--journal", "folder", type=click.Path(path_type=Path), help="The journal; default: that of the settings."
)
@click.option("--since", type=click.DateTime(["%Y-%m-%dT%H:%M", "%Y-%m-%dT%H:%M:%S", "%Y-%m-%d"]), help="Local time.")
@click.option("--until", type=click.DateTime(["%Y-%m-%dT%H:%M", "%Y-%m-%dT%H:%M:%S", "%Y-%m-%d"]), help="Local time.")
@click.option("--every", "every_s", type=click.FloatRange(min=0.0), default=600.0, show_default=True,
              help="A line of state so often, in seconds.")  # fmt: skip
def command(
    path: Path,
    folder: Path | None,
    since: dt.datetime | None,
    until: dt.datetime | None,
    every_s: float,
) -> None:
    """Feed recorded cycles to the core again and print what it says: a bad day, on a laptop, with other settings."""
    settings = load_settings(path)
    where = folder or (Path(settings.journal.path) if settings.journal else None)
    if where is None or not where.is_dir():
        sentence = f"{where or 'no [journal] in the settings'} is no journal, must be a folder; name it with --journal"
        raise click.UsageError(sentence)
    reader = JournalReader(where)
    given = reader.inputs(_utc(since, -float("inf")), _utc(until, float("inf")))
    samples = 0
    with Progress(transient=True) as progress:
        task = progress.add_task("replaying", total=None)
        for samples, line in tell(settings, given, every_s, in_force(where)[0]):
            progress.update(task, description=f"replaying: {samples} samples")
            progress.console.print(line, soft_wrap=True, highlight=False, markup=False)
    reader.close()
    click.echo(f"{samples} samples replayed.")


def _utc(moment: dt.datetime | None, otherwise: float) -> float:
    return otherwise if moment is None else moment.astimezone().timestamp()


def tell(
    settings: Settings, given: Iterator[Input], every_s: float, known: KnownCircuit | None = None
) -> Iterator[tuple[int, str]]:
    """Yield how many samples there were so far, and a line: each message, and the state now and then."""
    watch = Watch.begin(settings, known=known)
    samples, due, offset, last = 0, -float("inf"), 0.0, ""
    for item in given:
        watch, outputs = watch.take(item)
        for output in outputs:
            match output:
                case Assessment():
                    samples, offset = samples + 1, output.local_offset
                    last = status_line(output)
                    if output.at >= due:
                        due = output.at + every_s
                        yield samples, last
                case AlarmEvent() if output.is_told:
                    yield samples, message_line(output, offset)
    if last:
        yield samples, last
