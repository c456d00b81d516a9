"""`python -m mock_rig`: wrong arguments in words; the process on its links, and after a crash."""

import json
import os
import signal
import subprocess
import sys

import numpy as np
import pytest
import zmq
from click.testing import CliRunner

from drivers.codec import pack_frame, unpack_frame
from drivers.messages import (
    Arm,
    Armed,
    Greeting,
    Hello,
    Refused,
    Start,
    Table,
    TableBlock,
    TableClose,
    TableOpen,
    TableState,
    decode,
    encode,
)
from drivers.tables import table_crc
from mock_rig import __main__ as command

PATIENCE_MS = 20_000


@pytest.fixture
def invoke(monkeypatch, tmp_path):
    """Runs the command in this process, with its signals left alone."""
    monkeypatch.setattr(signal, "signal", lambda *_: None)

    def run(*arguments, link=None):
        link = f"pty://{tmp_path}/rig" if link is None else link
        return CliRunner().invoke(command.main, ["--link", link, *map(str, arguments)])

    return run


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--plant", "crane"], "'crane' is not one of"),
        (["--fault", "drpo@trial=3"], "unknown fault 'drpo'"),
        (["--fault", "drop@trial=3", "--fault", "spike@p=7"], "p=7 is no probability"),
        (["--table-capacity", "0"], "0 is not in the range"),
        (["--watchdog-ms", "-5"], "-5 is not in the range"),
        (["--sample-type", "f2"], "'f2' is not one of"),
        (["--seed", "x"], "'x' is not a valid integer"),
        (["--reference", "/nowhere/at/all.npy"], "does not exist"),
        (["--unknown"], "No such option"),
    ],
)
def test_wrong_arguments_end_with_code_2_and_the_reason(invoke, arguments, words):
    done = invoke(*arguments)
    assert done.exit_code == 2
    assert words in done.output
    assert "Traceback" not in done.output


@pytest.mark.parametrize(
    "link",
    ["rig", "ftp://host/x", "pty://relative", "zmq+tcp://127.0.0.1", "serial:///dev/no-such-port"],
)
def test_a_link_that_cannot_be_opened_ends_with_code_4_and_names_it(invoke, link):
    done = invoke(link=link)
    assert done.exit_code == command.EXIT_LINK
    assert f"mock_rig: {link}" in done.output


@pytest.mark.parametrize(
    ("values", "words"),
    [
        (np.zeros(10), "needs (samples, 1)"),
        (np.zeros((10, 2)), "needs (samples, 1)"),
        (np.zeros((0, 1)), "needs (samples, 1)"),
        (np.full((3, 1), np.nan), "not finite"),
        (np.array([["a"]]), "array of numbers"),
        (np.array([[None]]), "expected an NPY file"),
        (b"", "expected an NPY file"),
        (b"not an array", "expected an NPY file"),
    ],
)
def test_a_reference_that_does_not_fit_is_refused_in_words(invoke, tmp_path, values, words):
    path = tmp_path / "reference.npy"
    if isinstance(values, bytes):
        path.write_bytes(values)
    else:
        np.save(path, values, allow_pickle=True)
    done = invoke("--reference", path)
    assert done.exit_code == 2
    # Long lines are wrapped for the terminal.
    assert words in " ".join(done.output.split())


def test_an_archive_of_several_arrays_is_no_reference(invoke, tmp_path):
    np.savez(tmp_path / "reference.npz", a=np.zeros((3, 1)))
    done = invoke("--reference", tmp_path / "reference.npz")
    assert done.exit_code == 2
    assert "expected an NPY file" in " ".join(done.output.split())


def test_the_help_names_every_fault_and_every_exit_code(invoke):
    shown = CliRunner().invoke(command.main, ["--help"]).output
    for kind in command.KINDS:
        assert f"  {kind} " in shown
    assert "4 the link cannot be opened" in " ".join(shown.split())


# -- as a process ---------------------------------------------------------------------------


@pytest.fixture
def process():
    """Starts mock rigs; what they say first is read. Ends them all."""
    started = []

    def start(*arguments):
        rig = subprocess.Popen(
            [sys.executable, "-m", "mock_rig", *map(str, arguments)],
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        started.append(rig)
        return rig, json.loads(rig.stdout.readline())

    yield start
    for rig in started:
        rig.kill()
        rig.communicate()


@pytest.mark.slow
def test_on_a_pseudo_terminal_it_ends_with_code_0_and_takes_its_port_away(process, tmp_path):
    path = tmp_path / "rig"
    rig, said = process("--link", f"pty://{path}", "--plant", "chamber")
    assert said["connect"] == f"serial://{path}"
    assert said["plant"] == "chamber"
    assert os.readlink(path).startswith("/dev/")
    rig.send_signal(signal.SIGTERM)
    _, errors = rig.communicate(timeout=PATIENCE_MS / 1000)
    assert (rig.returncode, errors) == (0, "")
    assert not path.is_symlink()


class PlainDaemon:
    """What a stranger's daemon would do with a ZeroMQ socket."""

    def __init__(self, context, url, session):
        self.socket = context.socket(zmq.DEALER)
        self.socket.setsockopt(zmq.LINGER, 0)
        self.socket.connect(url.removeprefix("zmq+"))
        self.session, self.number = session, 0

    def order(self, message):
        self.number += 1
        self.socket.send(pack_frame(self.session, self.number, encode(message)))

    def ask(self, message, *kinds):
        """Send a numbered message; the first message of these kinds."""
        self.order(message)
        while self.socket.poll(PATIENCE_MS):
            found = decode(unpack_frame(self.socket.recv(), 1 << 20).body)
            if isinstance(found, kinds):
                return found
        raise AssertionError(f"no answer to {message}")

    def load(self, table, rows):
        crc = table_crc(rows.tobytes())
        self.ask(TableOpen(table, 1, len(rows), rows.shape[1], crc, False), TableState)
        block = TableBlock(table, 1, 0, rows.tobytes())
        self.socket.send(pack_frame(self.session, 0, encode(block)))
        assert self.ask(TableClose(table, 1), TableState).verified
        return crc


@pytest.fixture
def strangers():
    """Builds plain daemons and closes their sockets."""
    made = []
    with zmq.Context() as context:

        def make(url, session):
            made.append(PlainDaemon(context, url, session))
            return made[-1]

        yield make
        for one in made:
            one.socket.close()


@pytest.mark.slow
def test_over_zeromq_it_crashes_when_ordered_and_comes_back_knowing_nothing(process, strangers):
    rig, said = process(
        "--link", "zmq+tcp://127.0.0.1:0", "--plant", "chamber", "--fault", "crash@trial=0,size=0.1"
    )
    rows = np.full((100, 1), 30.0, dtype="<f4")
    crcs = table_crc((rows * 0).tobytes()), table_crc(rows.tobytes())
    first = strangers(said["connect"], 5)
    assert first.ask(Hello((1,), "stranger"), Greeting).name == "mock chamber"
    first.load(Table.FEEDFORWARD, rows * 0)
    first.load(Table.REFERENCE, rows)
    armed = first.ask(Arm(0, 100, *crcs, 0), Armed, Refused)
    first.order(Start(0, armed.tick + 10**9))
    again = json.loads(rig.stdout.readline())
    assert again == said
    second = strangers(again["connect"], 6)
    second.ask(Hello((1,), "stranger"), Greeting)
    refused = second.ask(Arm(0, 100, *crcs, 0), Armed, Refused)
    assert "not here" in refused.text
    assert rig.poll() is None
