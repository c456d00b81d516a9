"""`trialrunner check`: what a configuration means, and whether the rig agrees with it."""

import click

from trialrunner.exit_codes import ExitCode


@click.command("check")
@click.argument("config", type=click.Path(dir_okay=False))
@click.option("--set", "overrides", multiple=True, metavar="KEY=VALUE", help="Override a setting.")
@click.option("--no-link", is_flag=True, help="Leave the rig alone.")
def command(config: str, overrides: tuple[str, ...], no_link: bool) -> int:
    """Say what CONFIG means and whether the rig agrees.

    Greets the rig, compares channels, units, period and limits, and exchanges clocks. Nothing
    moves. The exit code is 0 if a run could start, 3 for the configuration, 4 for the link, 5 for
    a disagreement, 7 if a daemon holds the link.
    """
    from rich.console import Console

    from trialrunner.check_view import show_config, show_finding
    from trialrunner.config import load

    console = Console(highlight=False)
    settings = load(config, overrides)
    show_config(console, settings)
    if no_link:
        return ExitCode.OK
    from trialrunner.link_check import try_link

    found = try_link(settings)
    show_finding(console, settings, found)
    if found.disagreements:
        click.echo("trialrunner: the rig is not the one that the configuration describes", err=True)
        return ExitCode.DISAGREEMENT
    click.echo("Rig and configuration agree.")
    return ExitCode.OK
