"""``idlerwatch check``: every fault of the settings at once, or what this installation can and cannot see."""

from pathlib import Path

import click
from rich.console import Console
from rich.padding import Padding
from rich.text import Text

from idlerwatch.core.settings.advice import advise, bus_time_s, wiring_level
from idlerwatch.core.settings.model import Settings
from idlerwatch.core.watch.alarms import availability
from idlerwatch.edges.files import load_settings

_EXAMPLE = "\b\nExample:\n  idlerwatch check --settings /etc/idlerwatch/idlerwatch.toml"


@click.command(name="check", epilog=_EXAMPLE)
@click.option("--settings", "path", type=click.Path(path_type=Path), required=True, help="The settings file.")
def command(path: Path) -> None:
    """Read the settings and say what this installation can and cannot see.

    Faults are printed one a line, each with its place, what was found and what was wanted, and the exit code is 2.
    Advice is no fault: the exit code is 0.
    """
    settings = load_settings(path)
    console = Console(highlight=False, soft_wrap=False)
    for line in summary(settings):
        console.print(Text(line))
    console.print(Text("\nWhat this installation sees, and what would be better", style="bold"))
    for sentence in advise(settings):
        console.print(Padding(Text(f"- {sentence}"), (0, 0, 0, 2)))
    missing = [tag for tag, reason in availability(settings).items() if reason]
    console.print(
        Text(f"\n{len(missing)} alarms of the list are not available here; `idlerwatch alarms` says which, and why.")
    )


def summary(settings: Settings) -> list[str]:
    """Return the installation in a few lines."""
    supply = settings.supply
    lines = [
        f"{settings.site.name} / {settings.site.converter}: the settings are in order.",
        f"Feed {supply.feed}, {supply.voltage:g} V, {supply.frequency:g} Hz, {supply.earthing}; "
        f"{sum(idler.rated_kw for idler in settings.idler):g} kW of idlers; wiring level {wiring_level(settings)}.",
    ]
    for bus in settings.bus:
        meters = [meter.name for meter in settings.meter if meter.bus == bus.name]
        lines.append(
            f"Bus {bus.name} on {bus.port}: {', '.join(meters)}; {bus_time_s(settings, bus):.2f} s on the wire of a "
            f"{settings.site.cycle_s:g} s cycle."
        )
    return lines
