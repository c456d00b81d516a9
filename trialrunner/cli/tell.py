"""`trialrunner tell`: ask a running daemon for something, or how it is.

Starts fast: no numerics, no validation library; a configuration is only looked up for its address.
"""

import getpass
import os
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import click

from trialrunner.exit_codes import ExitCode
from trialrunner.operator_messages import (
    MAX_WHO,
    MAX_WHY,
    STATUS_FIELDS,
    VERBS,
    BadMessage,
    NoAnswer,
    OperatorAnswer,
    OperatorRequest,
    checked_target,
    printable,
)
from trialrunner.runtime_dir import (
    NotPrivate,
    default_command_url,
    running_here,
    runtime_path,
)

_VERBS_HELP = "\n".join(f"  {verb:<9} {meaning}" for verb, meaning in VERBS.items())

_HELP = f"""Ask a running daemon for something, or how it is.

\b
{_VERBS_HELP}

REASON (or --why) goes on record; everything but status needs it. Requests take effect between two
trials, halt at once; the answer names the trial. Not a safety function: for danger there is the
rig's emergency stop.

\b
  trialrunner tell status
  trialrunner tell halt "bead smears at the corner"
  trialrunner tell rollback --to 12 --why "trial 13 hit the clamp"

Exit codes: 0 done, {ExitCode.REFUSED:d} refused, {ExitCode.NO_ANSWER:d} no daemon answered, \
{ExitCode.USAGE:d} wrong command line.
"""


@click.command("tell", help=_HELP)
@click.argument("verb", type=click.Choice(list(VERBS)), metavar="VERB")
@click.argument("reason", required=False, default="")
@click.option("--why", default="", help="The reason, in words for the record.")
@click.option(
    "--to", default=None, metavar="TRIAL", help="For rollback: best (default), last_good or index."
)
@click.option("--run", "run_name", default=None, metavar="NAME", help="The run of that name.")
@click.option(
    "--config",
    default=None,
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
    help="The run of that configuration.",
)
@click.option("--url", default=None, help="The daemon's command address, ipc:// or tcp://.")
@click.option("--who", default=None, metavar="NAME", help="Who asks; the login name if left out.")
@click.option(
    "--timeout",
    "timeout_s",
    default=5.0,
    show_default=True,
    type=click.FloatRange(0, 3600, min_open=True),
    metavar="SECONDS",
    help="How long to wait for an answer.",
)
@click.option("--json", "as_json", is_flag=True, help="Print the daemon's answer as JSON.")
def command(
    verb: str,
    reason: str,
    why: str,
    to: str | None,
    run_name: str | None,
    config: Path | None,
    url: str | None,
    who: str | None,
    timeout_s: float,
    as_json: bool,
) -> int:
    # ZeroMQ is loaded only to ask: --help needs none.
    from trialrunner.operator_client import BadAddress, OperatorClient, new_id

    request = _request(
        new_id(), verb, _one_line(f"{reason} {why}"), to, _one_line(who or _login_name())
    )
    try:
        address = _address(run_name, config, url)
        with OperatorClient(address) as client:
            answer = client.ask(request, timeout_s)
    except BadAddress as error:
        raise click.UsageError(str(error)) from None
    except (NoAnswer, BadMessage, NotPrivate) as error:
        click.echo(f"trialrunner: {error}", err=True)
        return ExitCode.NO_ANSWER
    if as_json:
        click.echo(answer.to_json())
    else:
        _show(request, answer)
    return ExitCode.OK if answer.ok else ExitCode.REFUSED


def _request(id_: str, verb: str, why: str, to: str | None, who: str) -> OperatorRequest:
    """The request, or a usage error where the daemon would refuse it anyway."""
    if not why and verb != "status":
        raise click.UsageError(
            f'{verb} needs a reason for the record: trialrunner tell {verb} "reason"'
        )
    if len(why) > MAX_WHY:
        raise click.UsageError(
            f"the reason: expected at most {MAX_WHY} characters, found {len(why)}"
        )
    if len(who) > MAX_WHO:
        raise click.UsageError(f"--who: expected at most {MAX_WHO} characters, found {len(who)}")
    if to is not None and verb != "rollback":
        raise click.UsageError(f"--to belongs to rollback, not to {verb}")
    try:
        arguments = {"to": checked_target(to or "best")} if verb == "rollback" else {}
    except ValueError as error:
        raise click.UsageError(f"--{error}") from None
    return OperatorRequest(id=id_, verb=verb, who=who, why=why, arguments=arguments)


def _one_line(text: str) -> str:
    """One line of printable characters, as the daemon wants it."""
    return "".join(letter for letter in " ".join(text.split()) if letter.isprintable())


def _login_name() -> str:
    try:
        return getpass.getuser()
    except (KeyError, OSError):
        # A user without an entry in the password file, as in some containers.
        return f"user {os.getuid()}"


def _address(run_name: str | None, config: Path | None, url: str | None) -> str:
    """Where the daemon is. Raises UsageError, NoAnswer, NotPrivate."""
    if sum(one is not None for one in (run_name, config, url)) > 1:
        raise click.UsageError("give one of --run, --config and --url")
    if url is not None:
        return url
    if config is not None:
        return _configured_address(config)
    return default_command_url(run_name or _only_run())


def _only_run() -> str:
    runs = running_here()
    if len(runs) > 1:
        raise click.UsageError(f"several runs are going; choose by --run: {', '.join(runs)}")
    if not runs:
        raise NoAnswer(
            f"no run of yours is going: no daemon listens in {runtime_path()}. Start one with "
            "`trialrunner run CONFIG`; one with an address of its own is found by --config or "
            "--url."
        )
    return runs[0]


def _configured_address(config: Path) -> str:
    """The command address that a configuration leads to; its other settings are not looked at."""
    import tomllib

    try:
        document = tomllib.loads(config.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise click.UsageError(f"{config}: {error}") from None
    url = _setting(document, "operator", "command_url")
    name = _setting(document, "run", "name")
    if url is None and name is None:
        raise click.UsageError(f"{config}: names neither operator.command_url nor run.name")
    return url or default_command_url(str(name))


def _setting(document: dict[str, Any], table: str, key: str) -> str | None:
    found = document.get(table)
    value = found.get(key) if isinstance(found, dict) else None
    return value if isinstance(value, str) else None


def _show(request: OperatorRequest, answer: OperatorAnswer) -> None:
    if not answer.ok:
        click.echo(f"trialrunner: {request.verb} refused: {printable(answer.text)}", err=True)
    elif request.verb == "status":
        for line in _coloured(answer):
            click.echo(line)
    else:
        at = "" if answer.trial is None else f" (trial {answer.trial})"
        click.echo(f"{request.verb}: {printable(answer.text) or 'on record'}{at}")


def _coloured(answer: OperatorAnswer) -> Iterator[str]:
    """click drops the colour itself where the output is no terminal."""
    from trialrunner.status_view import STYLES, status_lines

    missing = STATUS_FIELDS.keys() - answer.data.keys()
    if missing:
        yield f"(the daemon, of another version, does not tell {', '.join(sorted(missing))})"
        yield answer.to_json()
        return
    width = min(100, shutil.get_terminal_size().columns)
    colour = STYLES.get(str(answer.data.get("state")))
    plain = colour is None or "NO_COLOR" in os.environ
    for line in status_lines(answer.data, width):
        yield line if plain or not line.startswith("state") else click.style(line, fg=colour)
