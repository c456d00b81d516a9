"""Where a run's sockets and crash reports live; nothing here touches the disk or imports much."""

import os
import tempfile
from pathlib import Path

MAX_IPC_PATH_BYTES = 107
"""Longest path of a Unix socket address on Linux, without the closing zero."""


def runtime_dir(run_name: str) -> Path:
    """Directory of a run's sockets; the daemon creates it with mode 0700.

    Below XDG_RUNTIME_DIR where the system gives one (already private to the user), otherwise
    below the temporary directory, with the user id in the name.
    """
    base = os.environ.get("XDG_RUNTIME_DIR")
    if base:
        return Path(base) / "trialrunner" / run_name
    return Path(tempfile.gettempdir()) / f"trialrunner-{os.getuid()}" / run_name


def default_command_url(run_name: str) -> str:
    """Address at which the daemon of this run takes operator requests."""
    return f"ipc://{runtime_dir(run_name) / 'command'}"


def default_telemetry_url(run_name: str) -> str:
    """Address at which the daemon of this run publishes its state."""
    return f"ipc://{runtime_dir(run_name) / 'telemetry'}"


def state_dir() -> Path:
    """Directory for crash reports (XDG_STATE_HOME, or ~/.local/state)."""
    base = os.environ.get("XDG_STATE_HOME")
    return (Path(base) if base else Path.home() / ".local" / "state") / "trialrunner"
