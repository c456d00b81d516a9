"""Entry of `trialrunner` and `python -m trialrunner`: runs a command, turns errors into words.

No traceback reaches the operator's screen: a foreseen error is one message and an exit code, an
unforeseen one a short message and a report in a file.
"""

import os
import sys
import tempfile
import traceback
from collections.abc import Sequence
from datetime import UTC, datetime
from pathlib import Path

import click

from trialrunner import __version__
from trialrunner.cli import cli
from trialrunner.exit_codes import ExitCode, code_of


def main(arguments: Sequence[str] | None = None) -> None:
    """Run a command and exit the process with its exit code."""
    sys.exit(run_command(arguments))


def run_command(arguments: Sequence[str] | None = None) -> int:
    """Run a command line; returns the exit code. A command may return one itself."""
    try:
        result = cli.main(arguments, prog_name="trialrunner", standalone_mode=False)
    except click.UsageError as error:
        error.show()
        return ExitCode.USAGE
    except click.ClickException as error:
        error.show()
        return ExitCode.SYSTEM
    except (click.Abort, KeyboardInterrupt):
        click.echo("trialrunner: interrupted", err=True)
        return ExitCode.INTERRUPTED
    except BrokenPipeError:
        # The reader of our output (head, less) has left; nothing is wrong.
        _silence_stdout()
        return ExitCode.OK
    except Exception as error:
        return _report(error)
    return result if isinstance(result, int) else ExitCode.OK


def _report(error: Exception) -> int:
    code = code_of(error)
    if code is not None:
        click.echo(f"trialrunner: {_in_words(error)}", err=True)
        return code
    path = write_crash_report(error)
    where = f"the full report is in {path}" if path else "and no report could be written"
    click.echo(
        f"trialrunner: an error that nobody foresaw, {type(error).__name__}: {error}\n"
        f"This is a fault of the program, not yours; {where}.",
        err=True,
    )
    return ExitCode.INTERNAL


def _in_words(error: Exception) -> str:
    """An operating system's error names its file; ours are sentences already."""
    if type(error).__module__ == "builtins" and isinstance(error, OSError) and error.strerror:
        name = f"{error.filename}: " if error.filename else ""
        return f"{name}{error.strerror}"
    return str(error)


def write_crash_report(error: BaseException) -> Path | None:
    """Write the traceback to a private file in the state or else the temporary directory.

    Returns its path, None if neither can be written.
    """
    from trialrunner.runtime_dir import state_dir

    stamp = datetime.now(UTC).strftime("%Y%m%dT%H%M%SZ")
    text = (
        f"trialrunner {__version__}, Python {sys.version.split()[0]}, {stamp}\n"
        f"{' '.join(sys.argv)}\n\n{''.join(traceback.format_exception(error))}"
    )
    for folder in (state_dir(), Path(tempfile.gettempdir())):
        path = folder / f"crash-{stamp}-{os.getpid()}.txt"
        try:
            folder.mkdir(parents=True, exist_ok=True, mode=0o700)
            handle = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
            with os.fdopen(handle, "w", encoding="utf-8") as file:
                file.write(text)
        except OSError:
            continue
        return path
    return None


def _silence_stdout() -> None:
    """Keep Python from complaining about the broken pipe once more at exit."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


if __name__ == "__main__":
    main()
