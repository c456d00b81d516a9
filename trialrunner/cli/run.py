"""`trialrunner run`: learn on a rig, unattended."""

import click

from trialrunner.exit_codes import ExitCode

SAFETY = (
    "The daemon is not a safety function. Before it moves anything: a hard-wired emergency stop, "
    "mechanical end stops, torque and speed limits set in the drive, nobody inside the guarded "
    "space, a first run at reduced gain and force. Local codes and licensed practice come first."
)


@click.command(help=f"Run iterative learning control on the rig of CONFIG.\n\n{SAFETY}")
@click.argument("config", type=click.Path(dir_okay=False))
@click.option("--set", "overrides", multiple=True, metavar="KEY=VALUE", help="Override a setting.")
@click.option(
    "--new-run", is_flag=True, help="Begin a new record; an old one of that name is kept beside it."
)
@click.option(
    "--exit-on-halt", is_flag=True, help="Leave when the run halts instead of waiting for resume."
)
@click.option(
    "--log-level",
    type=click.Choice(["debug", "info", "warning", "error"]),
    default="info",
    show_default=True,
)
def command(
    config: str, overrides: tuple[str, ...], new_run: bool, exit_on_halt: bool, log_level: str
) -> int:
    from trialrunner import launch
    from trialrunner.config import load
    from trialrunner.logs import configure_logs

    configure_logs(log_level)
    settings = load(config, overrides)
    for warning in settings.warnings:
        click.echo(f"warning: {warning}", err=True)
    click.echo(SAFETY, err=True)
    launch.keep_freed_memory()
    launch.answer_quickly()
    with launch.launched(settings, new_run=new_run, exit_on_halt=exit_on_halt) as running:
        launch.catch_signals(running.waker)
        running.daemon.run()
        session = running.session
    return result(session.exit_reason, session.state.over, session.halted_by)


def result(exit_reason: str, over: str, halted: str) -> int:
    """Tell how the run ended; the exit code that goes with it."""
    if exit_reason:
        click.echo(f"trialrunner: {exit_reason}", err=True)
        return ExitCode.HALTED
    if halted:
        click.echo(f"trialrunner: left while halted: {halted}", err=True)
        return ExitCode.HALTED
    click.echo(
        f"trialrunner: {over or 'stopped; run the same configuration again to go on'}", err=True
    )
    return ExitCode.OK
