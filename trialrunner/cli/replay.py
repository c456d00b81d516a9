"""`trialrunner replay`: judge records again."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import click

from trialrunner.exit_codes import ExitCode

if TYPE_CHECKING:
    from concurrent.futures import Executor

WORST_FIRST = (ExitCode.RECORD, ExitCode.DIFFERENT, ExitCode.OK)


@click.command(
    "replay",
    help="Push the trials of each RECORD through the same guards and laws once more.\n\nWithout "
    "--set every verdict, norm, decision and feedforward must come out bit for bit. With --set it "
    "shows what other settings would have decided, and from which trial on the record can no "
    "longer tell. With --sweep guards alone are asked, with every combination of settings: false "
    "alarms against delay.\n\nA record that a daemon still writes is replayed as far as it goes."
    "\n\n"
    f"Exit codes: {ExitCode.OK:d} reproduced, or answered what --set asked; "
    f"{ExitCode.DIFFERENT:d} not reproduced, the first difference is named; {ExitCode.RECORD:d} "
    f"the record cannot be read or --verify found damage; {ExitCode.CONFIG:d} the settings asked "
    f"about cannot be; {ExitCode.USAGE:d} wrong command line. Of several records the worst counts.",
)
@click.argument(
    "records", metavar="RECORD...", nargs=-1, required=True,
    type=click.Path(dir_okay=False, path_type=Path),
)  # fmt: skip
@click.option(
    "--set",
    "overrides",
    multiple=True,
    metavar="KEY=VALUE",
    help="What if: another setting, such as guards.error_growth.ratio=1.2; repeatable.",
)
@click.option("--all", "show_all", is_flag=True, help="Show every trial, not only those that tell.")
@click.option("--verify", is_flag=True, help="First check every checksum and the hash chain.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON; a line for each of several.")
@click.option(
    "--sweep",
    "sweeps",
    multiple=True,
    metavar="KEY=LOW:HIGH:COUNT",
    help="Try a guard's setting over a range, or KEY=A,B,C; repeatable, all combinations are run.",
)
@click.option(
    "--fault-at",
    "faults_at",
    multiple=True,
    metavar="[RECORD=]TRIAL",
    help="Sweep: the first faulty trial, of all records or of one; others have no fault.",
)
@click.option("--jobs", type=click.IntRange(min=1), help="Sweep: processes; default: all cores.")
@click.option("--dask", metavar="ADDRESS", help="Sweep: on this Dask scheduler's machines.")
@click.option(
    "--write",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Sweep: write the recommended setting as TOML.",
)
@click.option(
    "-o",
    "picture",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Sweep: write the trade-off as SVG.",
)
def command(
    records: tuple[Path, ...],
    overrides: tuple[str, ...],
    show_all: bool,
    verify: bool,
    as_json: bool,
    sweeps: tuple[str, ...],
    faults_at: tuple[str, ...],
    jobs: int | None,
    dask: str | None,
    write: Path | None,
    picture: Path | None,
) -> int:
    if not sweeps:
        if faults_at or jobs or dask or write or picture:
            raise click.UsageError("--fault-at, --jobs, --dask, --write and -o belong to --sweep")
        if len(records) == 1:
            return _replay_one(records[0], overrides, show_all, verify, as_json)
        codes = [_one_line(record, overrides, verify, as_json) for record in records]
        return min(codes, key=WORST_FIRST.index)
    if overrides or show_all:
        raise click.UsageError("--set and --all do not go with --sweep")
    for record in records if verify else ():
        if _damaged(record):
            return ExitCode.RECORD
    return _sweep(records, sweeps, faults_at, jobs, dask, write, picture, as_json)


def _damaged(record: Path) -> bool:
    from trialrunner.record import RecordReader

    with RecordReader(record) as reader:
        damage = reader.verify()
    for text in damage:
        click.echo(f"trialrunner: {record}: {text}", err=True)
    return bool(damage)


def _replay_one(
    record: Path, overrides: tuple[str, ...], show_all: bool, verify: bool, as_json: bool
) -> int:
    from trialrunner.record import RecordReader
    from trialrunner.replay import Replay, ReplayError
    from trialrunner.replay_view import JsonView, TextView

    if verify and _damaged(record):
        return ExitCode.RECORD
    with RecordReader(record) as reader:
        try:
            replay = Replay(reader, overrides)
        except ReplayError as error:
            raise click.UsageError(str(error)) from None
        view = (JsonView if as_json else TextView)(bool(overrides), show_all)
        view.show(replay, reader, verified=verify)
    if overrides or not replay.first_difference:
        return ExitCode.OK
    return ExitCode.DIFFERENT


def _one_line(record: Path, overrides: tuple[str, ...], verify: bool, as_json: bool) -> ExitCode:
    """One of several records: what became of it in a line; a damaged one does not end the rest."""
    import json

    from trialrunner.record import RecordError, RecordReader
    from trialrunner.replay import Replay, ReplayError

    n_trials, first, parted, code = 0, "", None, ExitCode.OK
    try:
        if verify and _damaged(record):
            raise RecordError("damaged; see above")
        with RecordReader(record) as reader:
            replay = Replay(reader, overrides)
            for _ in replay.trials():
                pass
        n_trials, first = replay.n_trials, replay.first_difference
        parted = replay.counterfactual_from
        code = ExitCode.DIFFERENT if first and not overrides else ExitCode.OK
    except ReplayError as error:
        raise click.UsageError(str(error)) from None
    except RecordError as error:
        first, code = str(error), ExitCode.RECORD
    if as_json:
        line = {"record": str(record), "trials": n_trials, "first_difference": first or None}
        click.echo(json.dumps(line | {"counterfactual_from": parted, "exit_code": int(code)}))
    else:
        said = first or "reproduced, bit for bit"
        told = "" if parted is None else f"; it can tell up to trial {parted - 1}"
        click.echo(f"{record}: {n_trials} trials: {said}{told}")
    return code


def _sweep(
    records: Sequence[Path],
    sweeps: Sequence[str],
    faults_at: Sequence[str],
    jobs: int | None,
    dask: str | None,
    write: Path | None,
    picture: Path | None,
    as_json: bool,
) -> int:
    from trialrunner import sweep_view
    from trialrunner.replay import ReplayError
    from trialrunner.sweep import Axis, sweep

    n_jobs = jobs or os.cpu_count() or 1
    try:
        axes = [Axis.parse(text) for text in sweeps]
        with _executor(n_jobs, dask) as executor:
            shares = -(-n_jobs // len(records))
            found = sweep(records, axes, _faults(records, faults_at), executor, shares)
    except ReplayError as error:
        raise click.UsageError(str(error)) from None
    (sweep_view.show_json if as_json else sweep_view.show_text)(found)
    if picture is not None:
        picture.write_text(sweep_view.svg(found), encoding="utf-8")
    if write is not None:
        text = sweep_view.fragment(found)
        if text is None:
            click.echo(f"trialrunner: {write} was not written: {sweep_view.NO_SETTING}", err=True)
            return ExitCode.DIFFERENT
        write.write_text(text, encoding="utf-8")
    return ExitCode.OK


def _executor(jobs: int, dask: str | None) -> Executor:
    """Local processes, or Dask's if asked for."""
    import importlib
    import multiprocessing
    from concurrent.futures import ProcessPoolExecutor

    if dask is None:
        return ProcessPoolExecutor(jobs, mp_context=multiprocessing.get_context("spawn"))
    try:
        distributed = importlib.import_module("distributed")
    except ImportError:
        raise click.UsageError(
            "--dask: Dask is not installed; pip install distributed, or leave --dask out"
        ) from None
    executor: Executor = distributed.Client(dask).get_executor()
    return executor


def _faults(records: Sequence[Path], texts: Sequence[str]) -> dict[Path, int]:
    found: dict[Path, int] = {}
    for text in texts:
        name, _, trial = text.rpartition("=")
        if not trial.isdecimal():
            raise click.UsageError(f"--fault-at {text}: expected TRIAL or RECORD=TRIAL")
        named = [one for one in records if not name or name in (str(one), one.name)]
        if not named:
            raise click.UsageError(f"--fault-at {text}: {name} is none of the records given")
        found |= dict.fromkeys(named, int(trial))
    return found
