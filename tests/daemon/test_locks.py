"""One holder at a time; the kernel gives a lock back however the holder ends."""

import os
import signal
import subprocess
import sys

import pytest

from trialrunner.locks import Busy, hold_lock, link_lock_path
from trialrunner.runtime_dir import NotPrivate

HOLDER = """
import sys
from pathlib import Path
from trialrunner.locks import hold_lock
with hold_lock(Path(sys.argv[1]), "the record x"):
    print("held", flush=True)
    sys.stdin.read()
"""


@pytest.fixture
def path(tmp_path):
    return tmp_path / "x.lock"


def test_a_held_lock_is_refused_with_what_who_and_what_to_do(path):
    """And free again after release, as often as wanted."""
    with hold_lock(path, "the record x") as lock:
        assert lock.held
        with pytest.raises(Busy) as caught:
            hold_lock(path, "the record x")
        words = f"the record x is held by another trialrunner (process {os.getpid()}); stop that"
        assert words in str(caught.value)
    assert not lock.held
    lock.release()
    hold_lock(path, "the record x").release()


def test_a_refused_try_leaves_no_file_descriptor_open(path):
    """A daemon that tries all night must not run out of them."""
    with hold_lock(path, "x"):
        before = len(os.listdir("/proc/self/fd"))
        for _ in range(20):
            with pytest.raises(Busy):
                hold_lock(path, "x")
        assert len(os.listdir("/proc/self/fd")) == before


def test_rubbish_in_the_lock_file_is_not_repeated_to_the_operator(path):
    """Only a number is taken for a process."""
    with hold_lock(path, "x"):
        path.write_bytes(b"\xff\x1b[31m rm -rf\n")
        with pytest.raises(Busy, match="held by another trialrunner; stop"):
            hold_lock(path, "x")


def test_a_lock_is_not_handed_on_to_a_child_process(path):
    """A child that outlives the daemon would keep the record locked."""
    lock = hold_lock(path, "x")
    child = subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE)
    lock.release()
    hold_lock(path, "x").release()
    child.communicate(b"\n")


@pytest.mark.slow
def test_a_killed_holder_frees_the_lock(path):
    """The file stays, its lock does not."""
    process = subprocess.Popen(
        [sys.executable, "-c", HOLDER, str(path)],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    with process.stdout, process.stdin:
        assert process.stdout.readline() == "held\n"
        with pytest.raises(Busy, match=f"process {process.pid}"):
            hold_lock(path, "x")
        process.send_signal(signal.SIGKILL)
        process.wait()
    hold_lock(path, "x").release()


def test_a_directory_that_is_not_there_is_an_error_of_the_system(tmp_path):
    """Told by whoever wanted the lock, in his words."""
    with pytest.raises(FileNotFoundError):
        hold_lock(tmp_path / "no" / "x.lock", "x")


@pytest.fixture
def runtime(tmp_path, monkeypatch):
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    return tmp_path / "trialrunner"


def test_the_same_port_has_one_lock_whatever_its_name_or_options(runtime, tmp_path):
    """A by-id name is a symbolic link to the port."""
    port = tmp_path / "ttyUSB0"
    port.touch()
    by_id = tmp_path / "usb-adapter-7"
    by_id.symlink_to(port)
    one = link_lock_path(f"serial://{port}?baud=1000000")
    assert link_lock_path(f"serial://{by_id}") == one
    assert link_lock_path(f"serial://{tmp_path}/ttyUSB1") != one
    assert one.parent == runtime
    assert link_lock_path("zmq+tcp://127.0.0.1:5000") != link_lock_path("zmq+tcp://127.0.0.1:5001")


def test_the_locks_directory_is_the_users_own(runtime):
    """Created closed to others; refused if others may write there."""
    path = link_lock_path("serial:///dev/ttyUSB0")
    assert runtime.stat().st_mode & 0o777 == 0o700
    hold_lock(path, "the link").release()
    runtime.chmod(0o777)
    with pytest.raises(NotPrivate):
        link_lock_path("serial:///dev/ttyUSB0")
