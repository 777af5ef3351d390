"""``idlerwatch check``: every fault of the settings at once, or what this installation can and cannot see."""

import textwrap
from pathlib import Path
from typing import Final

import click

from idlerwatch.core.converter.nameplate import believed
from idlerwatch.core.settings.advice import advise, bus_time_s, wiring_level
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.watch.alarms import availability
from idlerwatch.core.watch.circuit import NOT_LEARNED, refusal
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.wiring import circuit_plan, lacks, plate_of
from idlerwatch.edges.circuit_file import in_force
from idlerwatch.edges.files import load_settings

WIDTH: Final = 80
_EXAMPLE = "\b\nExample:\n  idlerwatch check --settings /etc/idlerwatch/idlerwatch.toml"


@click.command(name="check", epilog=_EXAMPLE)
@click.option("--settings", "path", type=click.Path(path_type=Path), required=True, help="The settings file.")
def command(path: Path) -> None:
    """Read the settings and say what this installation can and cannot see.

    Faults are printed one a line, each with its place, what was found and what was wanted, and the exit code is 2.
    Advice is no fault: the exit code is 0.
    """
    settings = load_settings(path)
    for line in summary(settings):
        click.echo(textwrap.fill(line, WIDTH, subsequent_indent="  "))
    click.echo("\nWhat this installation sees, and what would be better")
    for sentence in advise(settings):
        click.echo(textwrap.fill(f"- {sentence}", WIDTH, initial_indent="  ", subsequent_indent="    "))
    click.echo(textwrap.fill(f"- {circuit_sentence(settings)}", WIDTH, initial_indent="  ", subsequent_indent="    "))
    missing = [tag for tag, reason in availability(settings).items() if reason]
    last = f"{len(missing)} alarms of the list are not available here; `idlerwatch alarms` says which, and why."
    click.echo("\n" + textwrap.fill(last, WIDTH))


def circuit_sentence(settings: Settings) -> str:
    """Return what there is of the converter's circuit, in a sentence."""
    plan = compile_plan(settings)
    own = circuit_plan(settings, plan)
    if own is None:
        return f"The converter's circuit is not seen: {lacks(settings, plan)}."
    plates = [fault for idler in settings.idler if (fault := believed(plate_of(settings, idler))[1])]
    doubt = f" Of the idler's plate, {plates[0]}; its other figures serve." if plates else ""
    known, sentence = (None, NOT_LEARNED) if settings.journal is None else in_force(Path(settings.journal.path))
    if known is None:
        return f"Circuit: {sentence}.{doubt}"
    refused = refusal(own, known)
    return f"Circuit: {refused or f'learned {known.learned_at[:10]}, accepted by {known.accepted_by}'}.{doubt}"


def summary(settings: Settings) -> list[str]:
    """Return the installation in a few lines."""
    supply = settings.supply
    idlers = sum(idler.rated_kw for idler in settings.idler)
    lines = [
        f"{settings.site.name} / {settings.site.converter}: the settings are in order.",
        f"Feed {supply.feed}, {supply.voltage:g} V, {supply.frequency:g} Hz, {supply.earthing}.",
        f"Idlers {idlers:g} kW; wiring level {wiring_level(settings)}.",
    ]
    for bus in settings.bus:
        meters = [meter.name for meter in settings.meter if meter.bus == bus.name]
        lines.append(
            f"Bus {bus.name} on {bus.port}: {', '.join(meters)}; {bus_time_s(settings, bus):.2f} s on the wire of a "
            f"{settings.site.cycle_s:g} s cycle."
        )
    return lines
