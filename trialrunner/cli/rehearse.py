"""`trialrunner rehearse`: the main job against the mock rig, as two real processes."""

import click

from trialrunner.exit_codes import ExitCode

BUILT_IN = "bead_axis.toml"


@click.command(
    help="Learn on the mock rig of CONFIG (default: the bead axis), as two processes on this "
    "machine: `python -m mock_rig` and `trialrunner run`. Nothing real moves."
)
@click.argument("config", required=False, type=click.Path(dir_okay=False))
@click.option(
    "--link",
    type=click.Choice(["serial", "zmq"]),
    help="Serial line over a pseudo-terminal, or ZeroMQ; the configuration's choice if left out.",
)
@click.option("--trials", type=click.IntRange(min=1), help="Trials before the floor is measured.")
@click.option("--seed", type=click.IntRange(min=0), help="Seed of the mock rig's noise and faults.")
@click.option("--record", type=click.Path(dir_okay=False), help="Record file; must not exist yet.")
@click.option("--fault", "faults", multiple=True, metavar="SPEC", help="A fault of the mock rig.")
@click.option("--set", "overrides", multiple=True, metavar="KEY=VALUE", help="Override a setting.")
@click.option(
    "--real-time", is_flag=True, help="Keep the rig's own clock instead of going as fast as it can."
)
@click.option("--json", "as_json", is_flag=True, help="Print the summary as JSON.")
def command(
    config: str | None,
    link: str | None,
    trials: int | None,
    seed: int | None,
    record: str | None,
    faults: tuple[str, ...],
    overrides: tuple[str, ...],
    real_time: bool,
    as_json: bool,
) -> int:
    from trialrunner.rehearsal import Rehearsal, rehearse
    from trialrunner.rehearsal_view import show

    wanted = Rehearsal(
        config=config,
        link=link,
        trials=trials,
        seed=seed,
        record=record,
        faults=faults,
        overrides=overrides,
        real_time=real_time,
    )
    summary = show(rehearse(wanted), quiet=as_json)
    if as_json:
        import json

        click.echo(json.dumps(summary.to_json(), indent=2))
    if summary.daemon_exit:
        return summary.daemon_exit
    return ExitCode.OK if summary.reached else ExitCode.NOT_CONVERGED
