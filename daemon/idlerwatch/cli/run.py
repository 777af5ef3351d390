"""``idlerwatch run``: the daemon."""

import logging
import os
import signal
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path

import click

from idlerwatch.core.settings.faults import SettingsError
from idlerwatch.core.settings.refusals import find_no_way_out
from idlerwatch.edges.clock import Clock, is_synchronised
from idlerwatch.edges.files import load_settings
from idlerwatch.service import Reload, Service, Stop, build

LOG_FORMAT = "%(levelname)s %(name)s: %(message)s"


@click.command()
@click.option(
    "--settings",
    "path",
    type=click.Path(path_type=Path),
    default=Path("/etc/idlerwatch/idlerwatch.toml"),
    show_default=True,
    help="The settings file.",
)
@click.option("--quiet", is_flag=True, help="No console, whatever the output is.")
@click.option(
    "--trust-clock", is_flag=True, help="Send trends at once: the clock is right at start (battery-backed, say)."
)
def command(path: Path, *, quiet: bool, trust_clock: bool) -> None:
    """Watch the converter until told to stop (SIGTERM, Ctrl-C); SIGHUP reads the settings again.

    Example: idlerwatch run --settings /etc/idlerwatch/idlerwatch.toml
    """
    logging.basicConfig(level=logging.INFO, format=LOG_FORMAT, stream=sys.stderr)
    settings = load_settings(path)
    if not sys.stdout.isatty() or quiet:
        faults = find_no_way_out(settings)
        if faults:
            raise SettingsError(faults)
    watch(path, _always if trust_clock else is_synchronised, quiet=quiet)


def _always() -> bool:
    return True


def watch(path: Path, is_clock_right: Callable[[], bool], *, quiet: bool) -> None:
    """Run the service on a settings file, with a console where somebody looks."""
    live = []
    if not quiet and (sys.stdout.isatty() or "INVOCATION_ID" not in os.environ):
        # imported here: a daemon that nobody looks at does without a terminal library's memory
        from idlerwatch.edges.console import Console  # noqa: PLC0415

        settings = load_settings(path)
        title = f"{settings.site.name} / {settings.site.converter}"
        live = [Console(sys.stdout, title, settings.supply.labels)]
    service = Service(
        lambda number: load_settings(path, number),
        lambda settings, post: build(settings, post, runtime_folder(), live, is_clock_right),
        Clock(),
    )
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, lambda *_: service.post(Stop()))
    if hasattr(signal, "SIGHUP"):
        signal.signal(signal.SIGHUP, lambda *_: service.post(Reload()))
    for console in live:
        console.start()
    try:
        service.run()
    finally:
        for console in live:
            console.stop()


def runtime_folder() -> Path:
    """Return where the journal lies when the settings have none: the service manager's folder, else a temporary one."""
    given = os.environ.get("RUNTIME_DIRECTORY", "").split(":")[0]
    return Path(given) if given else Path(tempfile.mkdtemp(prefix="idlerwatch-"))
