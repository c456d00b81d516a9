"""Where a run's sockets and crash reports live, and which runs have a daemon there.

The addresses are only computed; `runtime_dir` creates the directory and checks it. Imports
little: the command line loads this for --help.
"""

import os
import socket
import stat
import tempfile
from pathlib import Path

MAX_IPC_PATH_BYTES = 107
"""Longest path of a Unix socket address on Linux, without the closing zero."""

COMMAND_SUFFIX = ".command"
TELEMETRY_SUFFIX = ".telemetry"

OPEN_TO_OTHERS = 0o077
"""Mode bits by which anybody but the owner may do anything with a directory."""
WRITABLE_BY_OTHERS = 0o022
"""Mode bits by which somebody else could put another socket in place of ours."""


class NotPrivate(OSError):
    """A directory for sockets with which other users could meddle; the text is for an operator."""


def runtime_dir() -> Path:
    """Directory of this user's sockets and link locks, created with mode 0700 if need be.

    Raises NotPrivate if it is another user's or open to others, OSError if it cannot be created.
    """
    path = runtime_path()
    make_private_dir(path)
    return path


def runtime_path() -> Path:
    """Where `runtime_dir` is; touches no disk.

    Below XDG_RUNTIME_DIR where the system gives one (already private to the user), otherwise
    below the temporary directory, with the user id in the name.
    """
    base = os.environ.get("XDG_RUNTIME_DIR")
    if base:
        return Path(base) / "trialrunner"
    return Path(tempfile.gettempdir()) / f"trialrunner-{os.getuid()}"


def default_command_url(run_name: str) -> str:
    """Address at which the daemon of this run takes operator requests."""
    return f"ipc://{runtime_path() / run_name}{COMMAND_SUFFIX}"


def default_telemetry_url(run_name: str) -> str:
    """Address at which the daemon of this run publishes its state."""
    return f"ipc://{runtime_path() / run_name}{TELEMETRY_SUFFIX}"


def state_dir() -> Path:
    """Directory for crash reports (XDG_STATE_HOME, or ~/.local/state)."""
    base = os.environ.get("XDG_STATE_HOME")
    return (Path(base) if base else Path.home() / ".local" / "state") / "trialrunner"


def make_private_dir(path: Path) -> None:
    """Create the directory with mode 0700 unless it is there, then `require_private` it.

    Raises NotPrivate, or OSError if it cannot be created.
    """
    try:
        path.mkdir(mode=0o700)
    except FileExistsError:
        pass
    except FileNotFoundError as error:
        raise NotPrivate(f"{path.parent}: no such directory; create it, or {_CHOOSE}") from error
    require_private(path)


def require_private(path: Path) -> None:
    """Raise NotPrivate unless the directory is this user's and closed to others.

    Our own directory must have mode 0700. One that the configuration names may be read by others
    (the sockets in it are closed to them), but not written.
    """
    found = path.lstat()
    if not stat.S_ISDIR(found.st_mode):
        kind = "a symbolic link" if stat.S_ISLNK(found.st_mode) else "no directory"
        raise NotPrivate(f"{path}: expected a directory of yours, found {kind}; {_CHOOSE}")
    if found.st_uid != os.geteuid():
        raise NotPrivate(
            f"{path}: expected a directory of user {os.geteuid()}, it belongs to user "
            f"{found.st_uid}; {_CHOOSE}"
        )
    ours = path == runtime_path()
    mode = stat.S_IMODE(found.st_mode)
    if mode & (OPEN_TO_OTHERS if ours else WRITABLE_BY_OTHERS):
        expected = "mode 0700" if ours else "a directory that only you may write"
        raise NotPrivate(
            f"{path}: expected {expected}, found mode {mode:04o}; whoever reaches a socket there "
            f"could command the rig: chmod 700 it, or {_CHOOSE}"
        )


_CHOOSE = "choose another by XDG_RUNTIME_DIR or the setting operator.command_url"


def is_listening(path: Path | str) -> bool:
    """True if a program listens on this Unix socket; a file left by a dead one does not count."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM | socket.SOCK_NONBLOCK) as probe:
        try:
            probe.connect(str(path))
        except BlockingIOError:
            # Its backlog is full: somebody is there.
            return True
        except OSError:
            return False
    return True


def running_here() -> list[str]:
    """Names of the runs whose daemon listens at its default address, in order.

    Raises NotPrivate if others could have put sockets there.
    """
    folder = runtime_path()
    if not folder.exists():
        return []
    require_private(folder)
    sockets = sorted(folder.glob(f"*{COMMAND_SUFFIX}"))
    return [path.name.removesuffix(COMMAND_SUFFIX) for path in sockets if is_listening(path)]
