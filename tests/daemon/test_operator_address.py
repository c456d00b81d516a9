"""Where the sockets live: private directories, one holder of an address, no file lost."""

import errno
import os
import socket
import stat
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
import zmq

from trialrunner import runtime_dir as places
from trialrunner.exit_codes import ExitCode, code_of
from trialrunner.local_address import AddressError, bind_private, socket_path
from trialrunner.locks import Busy
from trialrunner.operator_socket import OperatorSocket
from trialrunner.runtime_dir import NotPrivate, running_here, runtime_dir
from trialrunner.telemetry import Publisher

SOCKETS = [OperatorSocket, Publisher]
"""Both claim their address in the same way."""


@pytest.fixture
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Short: Unix socket paths end at 107 bytes."""
    return tmp_path_factory.mktemp("a")


@pytest.fixture
def home(folder: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """The runtime directory of this test; not yet created."""
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(folder))
    return folder / "trialrunner"


@pytest.fixture
def context() -> Iterator[zmq.Context[Any]]:
    with zmq.Context() as context:
        yield context


def dead_socket(path: Path) -> None:
    """What a killed daemon leaves."""
    with socket.socket(socket.AF_UNIX) as listener:
        listener.bind(str(path))


def test_the_runtime_directory_is_created_private(home: Path) -> None:
    """Whatever the umask says."""
    umask = os.umask(0)
    try:
        assert runtime_dir() == home
    finally:
        os.umask(umask)
    assert stat.S_IMODE(home.stat().st_mode) == 0o700
    assert runtime_dir() == home


def test_without_a_runtime_directory_the_user_id_keeps_users_apart(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Several users share the temporary directory."""
    monkeypatch.delenv("XDG_RUNTIME_DIR", raising=False)
    monkeypatch.setattr("tempfile.tempdir", str(folder))
    assert runtime_dir() == folder / f"trialrunner-{os.getuid()}"


def test_addresses_are_computed_without_touching_the_disk(home: Path) -> None:
    """A configuration can be checked on another machine."""
    assert places.default_command_url("bead") == f"ipc://{home}/bead.command"
    assert places.default_telemetry_url("bead") == f"ipc://{home}/bead.telemetry"
    assert not home.exists()


@pytest.mark.parametrize("mode", [0o701, 0o750, 0o777])
def test_a_runtime_directory_open_to_others_is_refused(home: Path, mode: int) -> None:
    """Whoever can reach a socket commands the rig."""
    home.mkdir()
    home.chmod(mode)
    with pytest.raises(NotPrivate, match=f"expected mode 0700, found mode {mode:04o}.*chmod 700"):
        runtime_dir()


def test_a_runtime_directory_of_another_user_is_refused(
    home: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Somebody may have made it first, to listen in."""
    home.mkdir(mode=0o700)
    uid = os.geteuid()
    monkeypatch.setattr(os, "geteuid", lambda: uid + 1)
    with pytest.raises(NotPrivate, match=f"of user {uid + 1}, it belongs to user {uid}"):
        runtime_dir()


def test_a_link_or_file_in_place_of_the_runtime_directory_is_refused(
    home: Path, folder: Path
) -> None:
    """A link could be turned to another directory later."""
    home.symlink_to(folder)
    with pytest.raises(NotPrivate, match="found a symbolic link"):
        runtime_dir()
    home.unlink()
    home.write_text("")
    with pytest.raises(NotPrivate, match="found no directory"):
        runtime_dir()


def test_a_missing_parent_is_named(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """No tree of directories is made where a typing error points."""
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(folder / "gone"))
    with pytest.raises(NotPrivate, match=r"gone: no such directory; create it"):
        runtime_dir()


@pytest.mark.parametrize("make", SOCKETS)
def test_a_socket_of_ours_is_closed_to_others(
    make: Callable[..., Any], context: zmq.Context[Any], folder: Path
) -> None:
    """The file's mode does not depend on the umask, and the umask is left as it was."""
    umask = os.umask(0o022)
    try:
        opened = make(context, f"ipc://{folder}/s")
        assert stat.S_IMODE((folder / "s").stat().st_mode) == 0o600
        opened.close()
    finally:
        assert os.umask(umask) == 0o022


@pytest.mark.parametrize("make", SOCKETS)
def test_a_second_daemon_on_one_address_is_refused(
    make: Callable[..., Any], context: zmq.Context[Any], folder: Path
) -> None:
    """It learns who holds it, and the first keeps its socket; ZeroMQ alone would let it steal."""
    first = make(context, f"ipc://{folder}/s")
    before = (folder / "s").stat().st_ino
    with pytest.raises(Busy, match=rf"the address ipc://.*/s is held .*process {os.getpid()}"):
        make(context, f"ipc://{folder}/s")
    assert (folder / "s").stat().st_ino == before
    first.close()


@pytest.mark.parametrize("make", SOCKETS)
def test_an_address_can_be_used_again_after_closing(
    make: Callable[..., Any], context: zmq.Context[Any], folder: Path
) -> None:
    """A closed socket leaves its lock file, nothing else."""
    for _ in range(2):
        make(context, f"ipc://{folder}/s").close()
    assert [path.name for path in folder.iterdir()] == ["s.lock"]


def test_the_socket_of_a_dead_daemon_is_replaced(context: zmq.Context[Any], folder: Path) -> None:
    """After a kill the next start needs no cleaning up."""
    dead_socket(folder / "s")
    OperatorSocket(context, f"ipc://{folder}/s").close()


def test_another_program_that_listens_there_is_left_alone(
    context: zmq.Context[Any], folder: Path
) -> None:
    """It has no lock of ours, but it answers."""
    with socket.socket(socket.AF_UNIX) as listener:
        listener.bind(str(folder / "s"))
        listener.listen()
        with pytest.raises(Busy, match="another program listens there"):
            OperatorSocket(context, f"ipc://{folder}/s")
        assert (folder / "s").exists()


def test_a_file_that_is_no_socket_is_never_deleted(context: zmq.Context[Any], folder: Path) -> None:
    """ZeroMQ's bind would remove it without a word."""
    (folder / "results.csv").write_text("precious")
    with pytest.raises(AddressError, match=r"results\.csv: expected no file or an old socket"):
        OperatorSocket(context, f"ipc://{folder}/results.csv")
    assert (folder / "results.csv").read_text() == "precious"


def test_a_directory_that_others_may_write_is_refused(
    context: zmq.Context[Any], folder: Path
) -> None:
    """They could put another socket in place of ours; reading is harmless."""
    folder.chmod(0o1777)
    with pytest.raises(NotPrivate, match="expected a directory that only you may write"):
        OperatorSocket(context, f"ipc://{folder}/s")
    folder.chmod(0o755)
    OperatorSocket(context, f"ipc://{folder}/s").close()


@pytest.mark.parametrize(
    "url",
    [
        "tcp://0.0.0.0:5555", "tcp://*:5555", "tcp://192.168.0.2:5555", "tcp://bench:5555",
        "tcp://127.example.org:5555", "tcp://127.0.0.1", "tcp://127.0.0.1:5555;x", "tcp://[::]:5",
        "inproc://x", "ipc://", "zmq+ipc:///x", "", "/run/x",
    ],
)  # fmt: skip
def test_an_address_that_others_could_reach_is_refused(url: str, context: zmq.Context[Any]) -> None:
    """There are no keys yet, so TCP stays on the loopback."""
    with pytest.raises(AddressError, match="through a tunnel"):
        OperatorSocket(context, url)


@pytest.mark.parametrize("url", ["ipc://relative/s", "ipc://@abstract", "ipc://*"])
def test_an_ipc_address_without_a_full_path_is_refused(url: str) -> None:
    """It would depend on the current directory, or have no file whose mode protects it."""
    with pytest.raises(AddressError, match="expected the full path"):
        socket_path(url)


def test_the_longest_path_is_taken_and_a_longer_one_refused() -> None:
    """Linux ends socket addresses at 107 bytes; letters may have several."""
    assert socket_path("ipc:///" + "x" * 106) == Path("/" + "x" * 106)
    with pytest.raises(AddressError, match="at most 107 bytes, found 108"):
        socket_path("ipc:///" + "x" * 107)
    with pytest.raises(AddressError, match="found 121"):
        socket_path("ipc:///" + "é" * 60)


@pytest.mark.parametrize("make", SOCKETS)
def test_loopback_tcp_is_allowed_and_held_alone(
    make: Callable[..., Any], context: zmq.Context[Any]
) -> None:
    """The same words for a port that somebody has."""
    first = make(context, "tcp://127.0.0.1:*")
    with pytest.raises(Busy, match=r"127\.0\.0\.1:\d+ is held by another program"):
        make(context, first.url)
    first.close()


@pytest.mark.parametrize("port", ["0", "65536", "99999"])
def test_a_port_that_does_not_exist_is_refused(port: str) -> None:
    """ZeroMQ would listen on another one."""
    with pytest.raises(AddressError, match="expected a port from 1 to 65535"):
        socket_path(f"tcp://127.0.0.1:{port}")


class Forbidden:
    """A socket whose bind the operating system refuses."""

    def set(self, option: int, value: int) -> None:
        pass

    def bind(self, url: str) -> None:
        raise zmq.ZMQError(errno.EACCES)


def test_the_operating_systems_refusal_is_put_into_words() -> None:
    """The address, what the system said, and what to do; the umask is left as it was."""
    before = os.umask(0o022)
    try:
        with pytest.raises(AddressError, match=r"^tcp://x:80: Permission denied; choose another"):
            bind_private(Forbidden(), "tcp://x:80")  # type: ignore[arg-type]
        assert os.umask(0o022) == 0o022
    finally:
        os.umask(before)


def test_refused_addresses_lead_to_foreseen_exit_codes() -> None:
    """No crash report for them."""
    assert code_of(AddressError("x")) == ExitCode.CONFIG
    assert code_of(NotPrivate("x")) == ExitCode.SYSTEM
    assert code_of(Busy("x")) == ExitCode.BUSY


def test_only_live_daemons_are_listed(home: Path, context: zmq.Context[Any]) -> None:
    """A socket left by a dead one does not count, nor does telemetry."""
    assert running_here() == []
    runtime_dir()
    dead_socket(home / "old.command")
    live = [OperatorSocket(context, places.default_command_url(name)) for name in ("b", "a")]
    publisher = Publisher(context, places.default_telemetry_url("a"))
    assert running_here() == ["a", "b"]
    for one in (*live, publisher):
        one.close()
    assert running_here() == []


def test_runs_are_not_looked_for_in_a_directory_of_others(home: Path) -> None:
    """They could answer for the daemon."""
    home.mkdir()
    home.chmod(0o777)
    with pytest.raises(NotPrivate):
        running_here()
