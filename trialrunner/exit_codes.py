"""Exit codes of `trialrunner`, and which error leads to which; for scripts and service units."""

from enum import IntEnum


class ExitCode(IntEnum):
    """What a script may conclude."""

    OK = 0
    INTERNAL = 1
    """An unexpected error; a report was written and its path printed."""
    USAGE = 2
    """Wrong command line."""
    CONFIG = 3
    """The configuration, or a file that it names, cannot be used."""
    LINK = 4
    """The rig cannot be reached, or the line broke and did not come back."""
    DISAGREEMENT = 5
    """The rig is not the one that the configuration describes."""
    RECORD = 6
    """The record cannot be used: damaged, of another program, or of another configuration."""
    BUSY = 7
    """Another daemon holds the record, the port or the address."""
    HALTED = 8
    """The run ended while halted, by a guard, a fault or an operator."""
    NOT_CONVERGED = 9
    """A rehearsal did not come near enough to its repeatability floor."""
    DIFFERENT = 10
    """A replay did not reproduce the record."""
    REFUSED = 11
    """The daemon understood the operator's request and refused it."""
    NO_ANSWER = 12
    """No daemon answered the operator's request."""
    SYSTEM = 13
    """The operating system refused: disk full, no permission, no such file."""
    INTERRUPTED = 130
    """Ctrl-C, as shells count it."""


BY_ERROR: dict[str, ExitCode] = {
    "ConfigError": ExitCode.CONFIG,
    "ChannelFileError": ExitCode.CONFIG,
    "AddressError": ExitCode.CONFIG,
    "CoreError": ExitCode.CONFIG,
    "RehearsalError": ExitCode.CONFIG,
    "LinkBusy": ExitCode.BUSY,
    "DriverError": ExitCode.LINK,
    "LinkCheckFailed": ExitCode.LINK,
    "Busy": ExitCode.BUSY,
    "RunRefused": ExitCode.DISAGREEMENT,
    "RecordError": ExitCode.RECORD,
    "ReplayError": ExitCode.RECORD,
    "OSError": ExitCode.SYSTEM,
}
"""By class name, so that naming an error imports nothing; the nearest base class counts."""

_OURS = ("trialrunner", "drivers", "builtins")


def code_of(error: BaseException) -> ExitCode | None:
    """The exit code of an error meant for operators; None for one that nobody foresaw."""
    for cls in type(error).__mro__:
        if cls.__module__.partition(".")[0] in _OURS and cls.__name__ in BY_ERROR:
            return BY_ERROR[cls.__name__]
    return None
