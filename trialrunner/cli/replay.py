"""`trialrunner replay`: judge a record again."""

from pathlib import Path

import click

from trialrunner.exit_codes import ExitCode


@click.command(
    "replay",
    help="Push the trials of RECORD through the same guards and laws once more.\n\nWithout --set "
    "every verdict, norm, decision and feedforward must come out bit for bit. With --set it shows "
    "what other settings would have decided, and from which trial on the record can no longer "
    "tell.\n\nA record that a daemon still writes is replayed as far as it goes.\n\n"
    f"Exit codes: {ExitCode.OK:d} reproduced, or answered what --set asked; "
    f"{ExitCode.DIFFERENT:d} not reproduced, the first difference is named; {ExitCode.RECORD:d} "
    f"the record cannot be read or --verify found damage; {ExitCode.CONFIG:d} the settings asked "
    f"about cannot be; {ExitCode.USAGE:d} wrong command line.",
)
@click.argument("record", type=click.Path(dir_okay=False, path_type=Path))
@click.option(
    "--set",
    "overrides",
    multiple=True,
    metavar="KEY=VALUE",
    help="What if: another setting, such as guards.error_growth.ratio=1.2; repeatable.",
)
@click.option("--all", "show_all", is_flag=True, help="Show every trial, not only those that tell.")
@click.option("--verify", is_flag=True, help="First check every checksum and the hash chain.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
def command(
    record: Path, overrides: tuple[str, ...], show_all: bool, verify: bool, as_json: bool
) -> int:
    from trialrunner.record import RecordReader
    from trialrunner.replay import Replay, ReplayError
    from trialrunner.replay_view import JsonView, TextView

    with RecordReader(record) as reader:
        damage = reader.verify() if verify else []
        for text in damage:
            click.echo(f"trialrunner: {record}: {text}", err=True)
        if damage:
            return ExitCode.RECORD
        try:
            replay = Replay(reader, overrides)
        except ReplayError as error:
            raise click.UsageError(str(error)) from None
        view = (JsonView if as_json else TextView)(bool(overrides), show_all)
        view.show(replay, reader, verified=verify)
    if overrides or not replay.first_difference:
        return ExitCode.OK
    return ExitCode.DIFFERENT
