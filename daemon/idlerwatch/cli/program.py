"""The program's group of commands; each command's module is imported only when it is called for.

Exit 0 done, 1 something found wrong in the world, 2 wrong settings or usage. A fault of the settings is printed as its
sentences, one a line, never as a traceback.
"""

import importlib
import sys
from typing import Final

import click

from idlerwatch import __version__
from idlerwatch.core.settings.faults import SettingsError

COMMANDS: Final = {
    "run": "watch the converter: the daemon",
    "demo": "watch a virtual converter through a bad day",
    "check": "read the settings and say what this installation can and cannot see",
    "assess": "assess readings given by hand or in a CSV file",
    "circuit": "learn the converter's circuit from what was recorded, and accept it as the normal",
    "alarms": "list the alarms in force, and which are not available",
    "replay": "feed recorded cycles to the core again and print what it would have said",
}


class Program(click.Group):
    """A group that knows its commands by name and imports them late."""

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002  (the signature is click's)
        """Return the names in the order a newcomer meets them."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:  # noqa: ARG002
        """Return a command by its name, None where there is no such command."""
        if cmd_name not in COMMANDS:
            return None
        module = importlib.import_module(f"idlerwatch.cli.{cmd_name}")
        command: click.Command = module.command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:  # noqa: ARG002
        """Write the list of commands without importing any of them."""
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))

    def invoke(self, ctx: click.Context) -> object:
        """Run, and turn faults of the settings into sentences and exit 2."""
        try:
            return super().invoke(ctx)
        except SettingsError as error:
            click.echo(str(error), err=True)
            sys.exit(2)


@click.command(cls=Program, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="idlerwatch")
def program() -> None:
    """Watch a running rotary phase converter.

    idlerwatch informs; it protects nobody and switches nothing. Fuses, overload relays and residual-current devices
    stay what they are, and local codes and a licensed electrician decide.
    """
