"""`trialrunner tell`, against a command socket that another thread serves."""

import json
import os
import socket as sockets
import subprocess
import sys
import threading
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
import zmq

from trialrunner.__main__ import run_command
from trialrunner.exit_codes import ExitCode
from trialrunner.operator_messages import (
    STATUS_FIELDS,
    VERBS,
    OperatorAnswer,
    OperatorRequest,
)
from trialrunner.operator_socket import OperatorSocket
from trialrunner.runtime_dir import default_command_url, runtime_dir
from trialrunner.status_view import duration, status_lines

Answer = Callable[[OperatorRequest], OperatorAnswer]

STATUS: dict[str, Any] = {
    "run": "bead-axis", "state": "running", "trial": 12, "purpose": "learn", "learning": True,
    "frozen_by": "", "gain": 1.0, "norm_last": 0.01234567, "norm_best": 0.0119, "best_trial": 11,
    "norm_first": 1.52, "floor": None, "voids": 2, "roll_backs": 1, "late_updates": 0,
    "guards": {
        "integrity": {"level": "pass", "reason": "", "value": 0.0, "limit": 0.0, "void": False},
        "saturation": {
            "level": "warn", "reason": "12 % of the samples are at a limit, 10 % are allowed",
            "value": 0.12, "limit": 0.1, "void": False,
        },
    },
    "link": {"url": "serial:///dev/ttyUSB0", "up": True, "errors": 1},
    "rig": {"name": "belt axis", "state": "running", "fault": ""},
    "started": "2026-12-01T13:10:22.123456Z", "elapsed_s": 252.3, "trials_total": 40,
    "remaining_s": 590.0, "record": "bead-axis.trialrecord", "over": "",
}  # fmt: skip


def obliging(request: OperatorRequest) -> OperatorAnswer:
    """Does everything but learn."""
    data = STATUS if request.verb == "status" else {}
    text = "not now" if request.verb == "learn" else f"{request.verb} is done"
    return OperatorAnswer(
        request.id, request.verb != "learn", text, 13, "2026-12-01T13:14:34Z", data
    )


class Served:
    """A daemon's command socket in a thread of its own; keeps what it was asked."""

    def __init__(self, url: str, answer: Answer = obliging) -> None:
        self.asked: list[OperatorRequest] = []
        self._answer = answer
        self._context: zmq.Context[Any] = zmq.Context()
        self._socket = OperatorSocket(self._context, url)
        self._stop, self._stopper = os.pipe()
        self._thread = threading.Thread(target=self._serve)
        self._thread.start()

    def _serve(self) -> None:
        poller = zmq.Poller()
        poller.register(self._socket.socket, zmq.POLLIN)
        poller.register(self._stop, zmq.POLLIN)
        while self._stop not in dict(poller.poll()):
            for handle, request in self._socket.receive():
                self.asked.append(request)
                self._socket.answer(handle, self._answer(request))

    def close(self) -> None:
        os.write(self._stopper, b".")
        self._thread.join()
        self._socket.close()
        self._context.term()
        os.close(self._stop)
        os.close(self._stopper)


@pytest.fixture(autouse=True)
def home(tmp_path_factory: pytest.TempPathFactory, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Runtime directory of this test alone; short, for Unix socket paths."""
    folder = tmp_path_factory.mktemp("h")
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(folder))
    monkeypatch.setenv("COLUMNS", "80")
    return folder / "trialrunner"


@pytest.fixture
def serve() -> Iterator[Callable[..., Served]]:
    made: list[Served] = []

    def make(run: str = "bead-axis", answer: Answer = obliging) -> Served:
        made.append(Served(default_command_url(run), answer))
        return made[-1]

    yield make
    for one in made:
        one.close()


Tell = Callable[..., tuple[int, str, str]]


@pytest.fixture
def tell(capsys: pytest.CaptureFixture[str]) -> Tell:
    """Runs the command line; exit code, stdout, stderr."""

    def run(*arguments: str) -> tuple[int, str, str]:
        code = run_command(["tell", *arguments])
        out, err = capsys.readouterr()
        return code, out, err

    return run


# -- the command ---------------------------------------------------------------------------------


def test_the_only_run_that_is_going_is_found(serve: Callable[..., Served], tell: Tell) -> None:
    """On most benches there is one daemon."""
    daemon = serve()
    code, out, _ = tell("halt", "smoke  at the\tdrive", "--who", "Ada")
    assert (code, out) == (ExitCode.OK, "halt: halt is done (trial 13)\n")
    [request] = daemon.asked
    assert (request.verb, request.who, request.why) == ("halt", "Ada", "smoke at the drive")


@pytest.mark.parametrize("verb", [verb for verb in VERBS if verb != "learn"])
def test_every_verb_reaches_the_daemon(verb: str, serve: Callable[..., Served], tell: Tell) -> None:
    """With --why just as with a bare reason; the login name signs it."""
    daemon = serve()
    assert tell(verb, "--why", "a test")[0] == ExitCode.OK
    [request] = daemon.asked
    assert request.verb == verb
    assert request.why == "a test"
    assert request.who


def test_a_refusal_has_its_own_exit_code(serve: Callable[..., Served], tell: Tell) -> None:
    """The daemon's words go to stderr."""
    serve()
    code, out, err = tell("learn", "now")
    assert (code, out, err) == (ExitCode.REFUSED, "", "trialrunner: learn refused: not now\n")


@pytest.mark.parametrize(
    ("given", "sent"), [([], "best"), (["--to", "last_good"], "last_good"), (["--to", "12"], "12")]
)
def test_a_roll_back_names_its_target(
    given: list[str], sent: str, serve: Callable[..., Served], tell: Tell
) -> None:
    """The best trial unless told otherwise."""
    daemon = serve()
    tell("rollback", "clamp slipped", *given)
    assert daemon.asked[0].arguments == {"to": sent}


def test_json_prints_the_answer_as_it_came(serve: Callable[..., Served], tell: Tell) -> None:
    """For scripts: one line, every field; the exit code says refused as ever."""
    serve()
    code, out, _ = tell("status", "--json")
    answer = json.loads(out)
    assert code == ExitCode.OK
    assert out.count("\n") == 1
    assert answer["data"] == STATUS
    code, out, err = tell("learn", "now", "--json")
    assert (code, json.loads(out)["ok"], err) == (ExitCode.REFUSED, False, "")


def test_several_runs_are_listed_to_choose_from(serve: Callable[..., Served], tell: Tell) -> None:
    """Nothing is sent to any of them; --run picks one."""
    first, second = serve("bead-axis"), serve("chamber")
    code, _, err = tell("status")
    assert code == ExitCode.USAGE
    assert "choose by --run: bead-axis, chamber" in err
    assert tell("note", "here", "--run", "chamber")[0] == ExitCode.OK
    assert (len(first.asked), len(second.asked)) == (0, 1)


def test_without_a_daemon_the_way_out_is_told(home: Path, tell: Tell) -> None:
    """Where it looked, and what to do."""
    code, _, err = tell("status")
    assert code == ExitCode.NO_ANSWER
    assert f"no daemon listens in {home}" in err
    assert "trialrunner run CONFIG" in err
    code, _, err = tell("status", "--run", "nope")
    assert code == ExitCode.NO_ANSWER
    assert "nope.command: there is no such socket" in err
    assert "--config" in err


def test_a_socket_left_by_a_dead_daemon_is_told_from_a_missing_one(tell: Tell) -> None:
    """At once, not after the timeout."""
    with sockets.socket(sockets.AF_UNIX) as dead:
        dead.bind(str(runtime_dir() / "old.command"))
    code, _, err = tell("status", "--run", "old", "--timeout", "3000")
    assert code == ExitCode.NO_ANSWER
    assert "its daemon is gone" in err


def test_a_runtime_directory_open_to_others_is_not_trusted(home: Path, tell: Tell) -> None:
    """Somebody else might answer there."""
    home.mkdir()
    home.chmod(0o777)
    code, _, err = tell("status")
    assert code == ExitCode.NO_ANSWER
    assert "chmod 700" in err


def test_a_configuration_leads_to_its_daemon(
    serve: Callable[..., Served], tell: Tell, tmp_path: Path
) -> None:
    """By the run's name, or by an address of its own."""
    serve("chamber")
    config = tmp_path / "c.toml"
    config.write_text('[run]\nname = "chamber"\n')
    assert tell("status", "--config", str(config))[0] == ExitCode.OK
    url = default_command_url("chamber")
    config.write_text(f'[run]\nname = "other"\n[operator]\ncommand_url = "{url}"\n')
    assert tell("status", "--config", str(config))[0] == ExitCode.OK
    assert tell("status", "--url", url)[0] == ExitCode.OK


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["halt"], 'halt needs a reason for the record: trialrunner tell halt "reason"'),
        (["halt", "\x1b"], "halt needs a reason"),
        (["halt", "x" * 1001], "at most 1000 characters, found 1001"),
        (["pause", "x", "--who", "y" * 65], "--who: expected at most 64 characters"),
        (["pause", "x", "--to", "3"], "--to belongs to rollback"),
        (["rollback", "x", "--to", "worst"], "--to: expected best, last_good or the index"),
        (["explode"], "is not one of"),
        (["status", "--url", "nonsense"], "nonsense: Invalid argument"),
        (["status", "--url", "a", "--run", "b"], "give one of --run, --config and --url"),
        (["status", "--timeout", "0"], "--timeout"),
        (["status", "--config", "gone.toml"], "gone.toml"),
    ],
)
def test_a_wrong_command_line_sends_nothing(
    arguments: list[str], words: str, serve: Callable[..., Served], tell: Tell
) -> None:
    """Usage errors have their own exit code and say what was expected."""
    daemon = serve()
    code, _, err = tell(*arguments)
    assert code == ExitCode.USAGE
    assert words in err
    assert daemon.asked == []


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[run", "c.toml: "),
        ("[link]\n", "names neither operator.command_url nor run.name"),
        ("run = 3\n[operator]\ncommand_url = 4\n", "names neither"),
    ],
)
def test_a_configuration_that_names_no_run_is_a_usage_error(
    text: str, words: str, tell: Tell, tmp_path: Path
) -> None:
    """In words; `trialrunner check` says more."""
    config = tmp_path / "c.toml"
    config.write_text(text)
    code, _, err = tell("status", "--config", str(config))
    assert code == ExitCode.USAGE
    assert words in err


def test_a_status_of_another_version_is_shown_as_it_is(
    serve: Callable[..., Served], tell: Tell
) -> None:
    """Fields that are missing are named; no traceback."""
    part = {key: value for key, value in STATUS.items() if key != "gain"}
    serve(answer=lambda r: OperatorAnswer(r.id, True, "", 1, "2026-12-01T00:00:00Z", part))
    code, out, _ = tell("status")
    assert code == ExitCode.OK
    assert "does not tell gain" in out
    assert '"norm_last":0.01234567' in out


@pytest.mark.slow
def test_tell_loads_no_numerics_and_no_validation() -> None:
    """What is not imported costs no time: an operator in a hurry asks often."""
    code = (
        "import sys\nfrom trialrunner.__main__ import run_command\n"
        "run_command(['tell', 'status', '--url', 'ipc:///nowhere'])\n"
        "heavy = {'numpy', 'scipy', 'pydantic', 'structlog', 'rich', 'asyncio', 'serial'}\n"
        "print(sorted(heavy & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout == "[]\n"
    assert "no such socket" in done.stderr


# -- the status block ----------------------------------------------------------------------------


def test_the_status_is_a_block_that_a_person_reads_at_a_glance(
    serve: Callable[..., Served], tell: Tell
) -> None:
    """As printed in a terminal of 80 columns."""
    serve()
    assert tell("status")[1] == (
        "run          bead-axis\n"
        "state        running\n"
        "trial        12 (of 0 to 39), to learn\n"
        "time         4 min 12 s since 2026-12-01 13:10:22 UTC, up to 9 min 50 s to go\n"
        "error norm   last 0.01235   best 0.0119 (trial 11)   first 1.52\n"
        "             the best is 128 times below the first\n"
        "learning     on\n"
        "so far       2 trials void, 1 roll back, no late updates\n"
        "guards       1 pass\n"
        "             warn: saturation: 12 % of the samples are at a limit, 10 % are\n"
        "             allowed\n"
        "rig          belt axis running\n"
        "link         up, 1 bad frame, serial:///dev/ttyUSB0\n"
        "record       bead-axis.trialrecord\n"
    )


def block(**changes: Any) -> str:
    return "\n".join(status_lines(STATUS | changes))


def test_the_status_fields_of_the_test_are_the_documented_ones() -> None:
    """Otherwise this file would test a block that no daemon sends."""
    assert STATUS.keys() == STATUS_FIELDS.keys()


def test_a_halted_run_says_why_and_how_to_go_on() -> None:
    """The first question of whoever looks."""
    rig = {"name": "belt axis", "state": "safe", "fault": "the emergency stop is pressed"}
    text = block(state="halted", rig=rig)
    assert "state        halted\n             the emergency stop is pressed; `tell resume" in text


def test_a_run_before_its_first_trial_shows_no_numbers() -> None:
    """Unknown is not zero."""
    text = block(
        state="idle", trial=0, norm_last=None, norm_best=None, best_trial=None, norm_first=None,
        guards={}, remaining_s=None, rig={"name": "", "state": "", "fault": ""},
    )  # fmt: skip
    assert "no trial has counted yet" in text
    assert "rig          not greeted yet" in text
    assert "to go" not in text
    assert "guards" not in text


def test_an_ended_run_says_so_instead_of_its_state() -> None:
    """And promises no time to go."""
    text = block(state="idle", over="converged after 31 trials", floor=0.0118)
    assert "state        over: converged after 31 trials" in text
    assert "repeatability floor 0.0118" in text
    assert "to go" not in text


def test_frozen_learning_names_who_froze_it() -> None:
    """And a lowered gain."""
    assert "learning     frozen by Ada, gain lowered to 0.25" in block(
        learning=False, frozen_by="Ada", gain=0.25
    )


def test_guards_are_listed_worst_first() -> None:
    """By what they did, then by whether the trial counted."""
    found = {"level": "warn", "reason": "w", "value": 0, "limit": 0, "void": False}
    text = block(
        guards={
            "a": found,
            "b": found | {"level": "roll back", "reason": "r"},
            "c": found | {"void": True, "reason": "v"},
        }
    )
    assert (
        "guards       roll back: b: r\n             warn, void: c: v\n             warn: a: w"
        in text
    )


@pytest.mark.parametrize("width", [40, 60, 80, 100])
def test_no_line_is_wider_than_the_terminal(width: int) -> None:
    """Also with a long path, which is cut where it must be."""
    long = "/a/very/long/path" * 12
    lines = list(status_lines(STATUS | {"record": long}, width))
    assert max(len(line) for line in lines) <= width
    assert long in "".join(line.strip() for line in lines).replace("record", "").replace(" ", "")


def test_what_a_rig_says_cannot_steer_the_terminal() -> None:
    """Escape sequences lose their escape."""
    rig = {"name": "belt\x1b[2J", "state": "safe\n", "fault": ""}
    assert "\x1b" not in block(rig=rig)


@pytest.mark.parametrize(
    ("seconds", "text"),
    [(0, "0 s"), (59.6, "1 min 0 s"), (252.3, "4 min 12 s"), (7_260, "2 h 1 min"),
     (284_400, "3 d 7 h"), (-1, "0 s")],
)  # fmt: skip
def test_durations_have_two_units(seconds: float, text: str) -> None:
    """More would not be read."""
    assert duration(seconds) == text
