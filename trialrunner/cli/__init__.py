"""The command line: a table of commands, each loaded when it is asked for.

Only click is imported here, so that `trialrunner --help` answers at once. To add a command: a
file with a click command named `command`, and a row in COMMANDS.
"""

import importlib
from collections.abc import Mapping

import click

from trialrunner import __version__

COMMANDS: Mapping[str, tuple[str, str]] = {
    "run": ("trialrunner.cli.run", "Run the trials of CONFIG on its rig."),
    "rehearse": ("trialrunner.cli.rehearse", "Run CONFIG against a simulated rig."),
    "check": ("trialrunner.cli.check", "Say what CONFIG means and whether the rig agrees."),
    "tell": ("trialrunner.cli.tell", "Ask a running daemon for something, or how it is."),
    "replay": ("trialrunner.cli.replay", "Judge a record again, with the same or other settings."),
    "schema": ("trialrunner.cli.schema", "Print the JSON Schema of a configuration."),
}
"""Module and one-line help of each command by name, in the order of --help."""


class LazyGroup(click.Group):
    """A group that lists its commands from COMMANDS and imports only the one that is run."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        module, _ = COMMANDS[cmd_name]
        command: click.Command = importlib.import_module(module).command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl([(name, text) for name, (_, text) in COMMANDS.items()])


@click.group(cls=LazyGroup, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="trialrunner")
def cli() -> None:
    """Iterative learning control, unattended, on a real rig.

    The daemon is not a safety function: the rig needs its own emergency stop, end stops, and
    torque and speed limits in the drive.
    """
