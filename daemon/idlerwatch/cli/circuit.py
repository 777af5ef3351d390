"""``idlerwatch circuit``: learn the converter's circuit from what was recorded, accept it, see its history."""

import datetime as dt
import sys
import textwrap
from collections.abc import Iterator
from pathlib import Path
from typing import Final

import click
from rich.console import Console
from rich.progress import Progress, TaskID

from idlerwatch.core.settings.model import Settings
from idlerwatch.core.values import CycleEnd, Input
from idlerwatch.core.watch.circuit import refusal
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.learning import teach
from idlerwatch.core.watch.recording import record
from idlerwatch.core.watch.wiring import CircuitPlan, circuit_plan, lacks
from idlerwatch.edges.circuit_file import Version, accept, in_force, save, versions
from idlerwatch.edges.files import load_settings
from idlerwatch.edges.journal import JournalReader

WIDTH: Final = 80
CAUTION: Final = (
    "Before accepting, compare with a clamp meter: voltages between the legs, leg currents, the bank's current, with "
    "the converter as it should be. A fault that is accepted becomes the normal, and is never told again."
)
_MOMENT: Final = ["%Y-%m-%dT%H:%M", "%Y-%m-%dT%H:%M:%S", "%Y-%m-%d"]
_LEARN: Final = "\b\nExample:\n  idlerwatch circuit learn --settings idlerwatch.toml --since 2026-11-30"
_ACCEPT: Final = '\b\nExample:\n  idlerwatch circuit accept --settings idlerwatch.toml --by "A. Wright"'
_HISTORY: Final = "\b\nExample:\n  idlerwatch circuit history --settings idlerwatch.toml"


@click.group(name="circuit")
def command() -> None:
    """Learn the converter's circuit, accept it as the normal, see its history."""


def _settings(function: click.decorators.FC) -> click.decorators.FC:
    with_path = click.option(
        "--settings", "path", type=click.Path(path_type=Path), required=True, help="The settings of the installation."
    )
    with_folder = click.option(
        "--journal", "folder", type=click.Path(path_type=Path), help="The journal; default: that of the settings."
    )
    return with_path(with_folder(function))


@command.command(epilog=_LEARN)
@_settings
@click.option("--since", type=click.DateTime(_MOMENT), help="Local time; default: from the beginning.")
@click.option("--until", type=click.DateTime(_MOMENT), help="Local time; default: to the end.")
def learn(path: Path, folder: Path | None, since: dt.datetime | None, until: dt.datetime | None) -> None:
    """Learn the circuit from the recorded load states; it serves only once a person has accepted it.

    Let the converter run for a day or two first: every machine alone and together, at different hours.
    """
    settings = load_settings(path)
    journal = _journal(settings, folder)
    own = _wiring(settings)
    reader = JournalReader(journal)
    with Progress(console=Console(stderr=True), transient=True) as progress:
        task = progress.add_task("reading the journal", total=None)
        given = reader.inputs(_utc(since, -float("inf")), _utc(until, float("inf")))
        recording = record(settings, own, _counted(given, progress, task))
    reader.close()
    lesson = teach(settings, own, recording, dt.datetime.now(dt.UTC).strftime("%Y-%m-%dT%H:%M:%SZ"))
    for sentence in lesson.findings:
        _say(sentence)
    for sentence in lesson.faults:
        _say(f"Wrong: {sentence}.")
    if lesson.known is None:
        click.echo("Nothing was learned.")
        sys.exit(1)
    file = save(journal, lesson.known)
    _say(f"Written to {file}. It serves once it is accepted: idlerwatch circuit accept --by NAME.")


@command.command(name="accept", epilog=_ACCEPT)
@_settings
@click.argument("version", required=False)
@click.option("--by", required=True, help="Who accepts it.")
@click.option("--yes", is_flag=True, help="Do not ask.")
def accept_command(path: Path, folder: Path | None, version: str | None, by: str, *, yes: bool) -> None:
    """Accept a learned circuit (the newest, or VERSION as in the history) as this converter's normal."""
    settings = load_settings(path)
    journal = _journal(settings, folder)
    chosen = _chosen(versions(journal), version)
    if chosen.known is None:
        raise click.ClickException(chosen.fault)
    refused = refusal(_wiring(settings), chosen.known)
    if refused:
        raise click.ClickException(f"{chosen.name}: {refused}")
    _say(_line(chosen, is_in_force=False))
    _say(CAUTION)
    if not yes:
        click.confirm("Is this the converter as it should be?", abort=True)
    accept(chosen, by)
    _say(f"{chosen.name} is in force now; a running daemon takes it up when it is reloaded or restarted.")


@command.command(epilog=_HISTORY)
@_settings
def history(path: Path, folder: Path | None) -> None:
    """List what was learned, what was accepted by whom, and which circuit is in force."""
    settings = load_settings(path)
    journal = _journal(settings, folder)
    known, sentence = in_force(journal)
    own = _wiring(settings)
    for version in versions(journal):
        is_it = known is not None and version.known is not None and version.known.accepted_at == known.accepted_at
        _say(_line(version, is_in_force=is_it and bool(known and known.accepted_at)))
    if sentence:
        _say(f"In force: none; {sentence}.")
    elif known is not None and (refused := refusal(own, known)):
        _say(f"In force: none; {refused}.")


def _line(version: Version, *, is_in_force: bool) -> str:
    known = version.known
    if known is None:
        return f"{version.name}  {version.fault}"
    accepted = f"accepted by {known.accepted_by} on {known.accepted_at[:10]}" if known.accepted_at else "not accepted"
    mark = ", IN FORCE" if is_in_force else ""
    return (
        f"{version.name}  {known.states} load states, supply {known.lowest_supply:.0f} to {known.highest_supply:.0f} V,"
        f" misfit {known.misfit:.2f}; {accepted}{mark}"
    )


def _chosen(found: tuple[Version, ...], name: str | None) -> Version:
    if not found:
        raise click.ClickException("no circuit was learned here yet; see idlerwatch circuit learn --help")
    if name is None:
        return found[-1]
    for version in found:
        if version.name == name:
            return version
    raise click.UsageError(f"{name!r} is no version, must be one of {', '.join(version.name for version in found)}")


def _journal(settings: Settings, folder: Path | None) -> Path:
    where = folder or (Path(settings.journal.path) if settings.journal else None)
    if where is None or not where.is_dir():
        sentence = f"{where or 'no [journal] in the settings'} is no journal, must be a folder; name it with --journal"
        raise click.UsageError(sentence)
    return where


def _wiring(settings: Settings) -> CircuitPlan:
    plan = compile_plan(settings)
    own = circuit_plan(settings, plan)
    if own is None:
        raise click.ClickException(f"this installation does not show its circuit: {lacks(settings, plan)}")
    return own


def _utc(moment: dt.datetime | None, otherwise: float) -> float:
    return otherwise if moment is None else moment.astimezone().timestamp()


def _counted(given: Iterator[Input], progress: Progress, task: TaskID) -> Iterator[Input]:
    samples = 0
    for item in given:
        if isinstance(item, CycleEnd):
            samples += 1
            if samples % 500 == 0:
                progress.update(task, description=f"reading the journal: {samples} samples")
        yield item


def _say(text: str) -> None:
    click.echo(textwrap.fill(text, WIDTH, subsequent_indent="  ", break_long_words=False, break_on_hyphens=False))
