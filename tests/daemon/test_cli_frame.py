"""The frame of the command line: one table of commands, one way from errors to words and codes."""

import ast
import json
import os
import subprocess
import sys
from pathlib import Path

import click
import pytest

from drivers.errors import LinkBusy, LinkError, WireError
from trialrunner import __main__ as entry
from trialrunner import __version__
from trialrunner.channel_file import ChannelFileError
from trialrunner.cli import COMMANDS, cli
from trialrunner.config import ConfigError, load_text
from trialrunner.core.errors import SettingError, ShapeError
from trialrunner.exit_codes import BY_ERROR, ExitCode, code_of
from trialrunner.link_check import LinkCheckFailed
from trialrunner.locks import Busy, hold_lock, link_lock_path
from trialrunner.runtime_dir import make_private_dir, runtime_dir

GOOD = """\
[run]
name = "bench"
[link]
url = "zmq+tcp://127.0.0.1:7000"
[trial]
n_samples = 200
period_s = 0.01
[[inputs]]
name = "force"
unit = "N"
low = -10.0
high = 10.0
rate_limit_per_s = 500.0
[[outputs]]
name = "x"
unit = "mm"
low = -100.0
high = 100.0
[reference]
kind = "profile"
waypoints = [[0.0], [20.0]]
velocity_limit_per_s = 40.0
acceleration_limit_per_s2 = 400.0
[law]
kind = "pd"
proportional = 0.25
[filter]
bandwidth_hz = 12.5
"""


@pytest.fixture(autouse=True)
def private_state(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """No test writes a report into the home of whoever runs it."""
    monkeypatch.setenv("XDG_STATE_HOME", str(tmp_path / "state"))


@pytest.fixture
def good(tmp_path: Path) -> str:
    path = tmp_path / "bench.toml"
    path.write_text(GOOD)
    return str(path)


@pytest.fixture
def raising(monkeypatch: pytest.MonkeyPatch):
    """A command line whose only command raises what it is given."""

    def install(error: BaseException) -> None:
        @click.command()
        def command() -> None:
            raise error

        monkeypatch.setattr(cli, "get_command", lambda ctx, name: command)

    return install


# --- the table --------------------------------------------------------------------------------


def test_help_lists_every_command_with_one_line(capsys: pytest.CaptureFixture[str]) -> None:
    """From the table alone, without loading one of them."""
    assert entry.run_command(["--help"]) == ExitCode.OK
    text = capsys.readouterr().out
    for name, (_, line) in COMMANDS.items():
        assert name in text
        assert line.split()[0] in text
    assert "not a safety function" in text


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_of_the_table_exists_and_explains_itself(
    name: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """Its module has `command`, and --help is an answer, not an error."""
    assert entry.run_command([name, "--help"]) == ExitCode.OK
    assert capsys.readouterr().out.startswith(f"Usage: trialrunner {name}")


HEAVY = ("numpy", "scipy", "pydantic", "zmq", "structlog", "rich", "serial", "asyncio")


@pytest.mark.slow
@pytest.mark.parametrize("arguments", [["--help"], ["--version"], *[[n, "-h"] for n in COMMANDS]])
def test_help_loads_nothing_heavy(arguments: list[str]) -> None:
    """What is not imported costs no time; the time itself is for the benchmarks."""
    code = (
        "import sys\nfrom trialrunner.__main__ import run_command\n"
        f"run_command({arguments!r})\n"
        f"print([m for m in {HEAVY!r} if m in sys.modules], file=sys.stderr)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stderr.strip() == "[]"


# --- errors to words and codes ----------------------------------------------------------------


@pytest.mark.parametrize(
    ("error", "code", "words"),
    [
        (ConfigError("a.toml", ["x: y"]), ExitCode.CONFIG, "a.toml: 1 problem\n  x: y"),
        (ChannelFileError("r.csv, line 3: no"), ExitCode.CONFIG, "r.csv, line 3: no"),
        (SettingError("law.kp: no"), ExitCode.CONFIG, "law.kp: no"),
        (ShapeError("y: no"), ExitCode.CONFIG, "y: no"),
        (LinkError("port: no"), ExitCode.LINK, "port: no"),
        (WireError("crc", "bad"), ExitCode.LINK, "bad"),
        (LinkCheckFailed("silent"), ExitCode.LINK, "silent"),
        (LinkBusy("port: busy"), ExitCode.BUSY, "port: busy"),
        (PermissionError(13, "Permission denied", "/a"), ExitCode.SYSTEM, "/a: Permission denied"),
        (OSError(28, "No space left on device"), ExitCode.SYSTEM, "No space left on device"),
    ],
)
def test_a_foreseen_error_is_one_message_and_its_code(
    raising, capsys: pytest.CaptureFixture[str], error: Exception, code: ExitCode, words: str
) -> None:
    """On stderr, without a traceback; the nearest class of the table decides."""
    raising(error)
    assert entry.run_command(["x"]) == code
    out, err = capsys.readouterr()
    assert out == ""
    assert err == f"trialrunner: {words}\n"


def test_errors_of_later_parts_are_known_by_name() -> None:
    """Naming a class imports nothing, so the table must name classes that exist."""
    from trialrunner.record import RecordError

    assert code_of(Busy("x")) == ExitCode.BUSY
    assert code_of(RecordError("x")) == ExitCode.RECORD


ANSWERED_WHERE_RAISED = {"OverrideError", "BadAddress", "BadMessage", "NoAnswer"}
"""Errors that become a problem, a usage error or an exit code before they reach the frame."""


def test_every_error_class_of_ours_leads_to_a_code() -> None:
    """A new one must be given a row, or be answered where it is raised."""
    bases: dict[str, list[str]] = {}
    for folder in ("trialrunner", "drivers"):
        for path in (Path(__file__).parents[2] / folder).rglob("*.py"):
            for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
                if isinstance(node, ast.ClassDef):
                    bases[node.name] = [base.id for base in node.bases if hasattr(base, "id")]

    def lineage(name: str) -> set[str]:
        return {name}.union(*(lineage(base) for base in bases.get(name, [])))

    errors = {n for n in bases if lineage(n) & {"Exception", "OSError", "ValueError"}}
    assert {"ConfigError", "LinkBusy", "RecordDamaged"} <= errors
    homeless = {n for n in errors if not lineage(n) & set(BY_ERROR)} - ANSWERED_WHERE_RAISED
    assert homeless == set()


def test_an_error_of_another_library_is_not_taken_for_ours() -> None:
    """Also when its class happens to have the same name."""

    class DriverError(Exception):
        pass

    DriverError.__module__ = "sqlalchemy.exc"
    assert code_of(DriverError()) is None


def test_the_codes_are_distinct_and_named() -> None:
    """A script tells them apart; every error of the table leads to one that is not success."""
    assert len({int(code) for code in ExitCode}) == len(ExitCode)
    assert all(code not in (ExitCode.OK, ExitCode.INTERNAL) for code in BY_ERROR.values())


def test_an_unforeseen_error_is_a_short_message_and_a_private_report(
    raising, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """No traceback on the operator's screen; all of it in the file that is named."""
    monkeypatch.setenv("XDG_STATE_HOME", str(tmp_path / "state"))
    raising(ZeroDivisionError("division by zero"))
    assert entry.run_command(["x"]) == ExitCode.INTERNAL
    err = capsys.readouterr().err
    assert "Traceback" not in err
    assert "ZeroDivisionError: division by zero" in err
    (report,) = (tmp_path / "state" / "trialrunner").iterdir()
    assert str(report) in err
    assert report.stat().st_mode & 0o777 == 0o600
    text = report.read_text()
    assert "Traceback (most recent call last)" in text
    assert __version__ in text


def test_a_report_goes_to_the_temporary_directory_where_there_is_no_state_directory(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """A service user has no home; a full disk has no room at all."""
    blocked = tmp_path / "file"
    blocked.write_text("")
    monkeypatch.setenv("XDG_STATE_HOME", str(blocked))
    monkeypatch.setattr(entry.tempfile, "gettempdir", lambda: str(tmp_path / "temp"))
    path = entry.write_crash_report(ValueError("x"))
    assert path is not None
    assert path.parent == tmp_path / "temp"
    monkeypatch.setattr(entry.tempfile, "gettempdir", lambda: str(blocked))
    assert entry.write_crash_report(ValueError("x")) is None


@pytest.mark.parametrize("error", [KeyboardInterrupt(), click.Abort()])
def test_an_interrupt_is_no_error(
    raising, capsys: pytest.CaptureFixture[str], error: BaseException
) -> None:
    """130, as shells expect after Ctrl-C."""
    raising(error)
    assert entry.run_command(["x"]) == ExitCode.INTERRUPTED
    assert "interrupted" in capsys.readouterr().err


@pytest.mark.parametrize("line", [["nonsense"], ["check"], ["check", "--nonsense", "x"], []])
def test_a_wrong_command_line_shows_the_usage(
    line: list[str], capsys: pytest.CaptureFixture[str]
) -> None:
    """Exit code 2, as everywhere."""
    assert entry.run_command(line) == ExitCode.USAGE
    assert "Usage: trialrunner" in capsys.readouterr().err


def test_a_command_may_return_its_own_code(monkeypatch: pytest.MonkeyPatch) -> None:
    """`replay` and `rehearse` end with a finding, not with an error."""

    @click.command()
    def command() -> int:
        return ExitCode.DIFFERENT

    monkeypatch.setattr(cli, "get_command", lambda ctx, name: command)
    assert entry.run_command(["x"]) == 10


@pytest.mark.slow
def test_a_reader_that_leaves_early_is_no_error() -> None:
    """`trialrunner schema | head -1` ends quietly."""
    shell = f"{sys.executable} -m trialrunner schema | head -c 1; echo ${{PIPESTATUS[0]}}"
    done = subprocess.run(["bash", "-c", shell], capture_output=True, text=True, check=True)
    assert done.stdout == "{0\n"
    assert done.stderr == ""


# --- schema and check -------------------------------------------------------------------------


def test_schema_prints_json_or_writes_it(
    capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    """Standard JSON, without Infinity; to a file where asked."""
    assert entry.run_command(["schema"]) == ExitCode.OK
    printed = json.loads(capsys.readouterr().out, parse_constant=pytest.fail)
    assert printed["properties"]["trial"]
    target = tmp_path / "schema.json"
    assert entry.run_command(["schema", "--output", str(target)]) == ExitCode.OK
    assert json.loads(target.read_text()) == printed


def test_check_says_what_it_understood(
    good: str, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Channels, limits, trial, reference against its limits, law, filter, guards, end."""
    monkeypatch.setenv("COLUMNS", "200")
    assert entry.run_command(["check", "--no-link", good]) == ExitCode.OK
    text = " ".join(capsys.readouterr().out.split())
    for words in [
        "200 samples every 0.01 s: 2 s, at 100 Hz",
        "bench.trialrecord (new)",
        "force N -10 10 500 - start and end",
        "x mm -100 100",
        "velocity 40 40 mm/s",
        "acceleration 400 400 mm/s2",
        "jerk 40000 - mm/s3",
        "It moves from 0 s to 0.59 s.",
        "proportional* 0.25",
        "gaussian, -3 dB at 12.5 Hz",
        "integrity admission",
        "error_growth learning",
        "105 trials, 4 min",
    ]:
        assert words in text


def test_check_shows_warnings(good: str, capsys: pytest.CaptureFixture[str]) -> None:
    """What is allowed and probably not meant."""
    arguments = ["check", "--no-link", good, "--set", "guards.divergence.enabled=false"]
    assert entry.run_command(arguments) == ExitCode.OK
    assert "warning: guards.divergence.enabled (override): this guard is off" in (
        capsys.readouterr().out
    )


def test_check_of_a_bad_file_ends_with_its_problems(
    good: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """The same message and code as `run` would give."""
    assert entry.run_command(["check", good, "--set", "trial.n_samples=0"]) == ExitCode.CONFIG
    assert "trial.n_samples (override): expected a whole number" in capsys.readouterr().err


def test_check_of_an_absent_port_is_a_link_error(
    good: str, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """After the configuration was shown: that much is known."""
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    url = f"link.url=serial://{tmp_path}/ttyABSENT"
    assert entry.run_command(["check", good, "--set", url]) == ExitCode.LINK
    out, err = capsys.readouterr()
    assert "Inputs" in out
    assert "ttyABSENT" in err
    assert "Traceback" not in err


def test_check_leaves_a_link_alone_that_a_daemon_holds(
    good: str, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """A greeting would end the daemon's session, in the middle of a trial."""
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    make_private_dir(runtime_dir())
    url = "zmq+tcp://127.0.0.1:7000"
    with hold_lock(link_lock_path(url), "the link"):
        assert entry.run_command(["check", good]) == ExitCode.BUSY
    assert f"the link {url} is held by another trialrunner" in capsys.readouterr().err


def test_the_shown_peaks_are_those_of_the_difference_quotients() -> None:
    """Against a parabola, whose second quotient is exact and whose third is zero."""
    import numpy as np

    from trialrunner.check_view import peaks

    time_s = np.arange(100) * 0.01
    found = peaks(3.0 * time_s[:, None] ** 2, 0.01)
    assert found[0][0] == pytest.approx(6.0 * (0.99 - 0.005))
    assert found[1][0] == pytest.approx(6.0)
    assert found[2][0] == pytest.approx(0.0, abs=1e-6)
    assert peaks(np.zeros((1, 2)), 0.01)[3].tolist() == [0.0, 0.0]


def test_settings_are_shown_with_a_star_where_they_are_not_the_default() -> None:
    """So that an engineer sees at once what the file changed."""
    from trialrunner.check_view import settings_in_words

    config = load_text(GOOD, ["learn.forgetting=0.01"])
    words = settings_in_words(config.learn, skip=("limit_method",))
    assert words.startswith("forgetting* 0.01, average_trials 1, ")
    assert "limit_method" not in words


def test_the_crash_report_needs_no_home(monkeypatch: pytest.MonkeyPatch) -> None:
    """A service has no HOME; the state directory then comes from the user database."""
    from trialrunner.runtime_dir import state_dir

    monkeypatch.delenv("XDG_STATE_HOME", raising=False)
    monkeypatch.delenv("HOME", raising=False)
    assert os.path.isabs(state_dir())
