"""Log lines: JSON for machines, readable for people, never a reason to stop."""

import io
import json
import sys
from collections.abc import Iterator

import pytest
import structlog

from trialrunner.logs import LEVELS, configure_logs, get_logger


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


class Full(io.StringIO):
    """A disk that filled up, or a terminal that was closed."""

    def write(self, text: str) -> int:
        raise OSError(28, "No space left on device")

    def flush(self) -> None:
        raise OSError(28, "No space left on device")


@pytest.fixture(autouse=True)
def reset() -> Iterator[None]:
    """structlog's settings are global."""
    yield
    structlog.reset_defaults()


def test_without_a_terminal_each_line_is_one_json_object() -> None:
    """With time, level, part of the program, and null for what is no number."""
    stream = io.StringIO()
    configure_logs("info", stream)
    get_logger("session").info("trial", trial=3, norm=float("nan"), text="two\nlines")
    line = json.loads(stream.getvalue())
    assert line.pop("timestamp").endswith("Z")
    assert line == {
        "event": "trial", "level": "info", "part": "session", "trial": 3, "norm": None,
        "text": "two\nlines",
    }  # fmt: skip
    assert stream.getvalue().count("\n") == 1


def test_an_exception_is_logged_with_its_traceback() -> None:
    """For the report of a fault; still one line."""
    stream = io.StringIO()
    configure_logs("info", stream)
    try:
        raise ValueError("odd")
    except ValueError:
        get_logger("session").exception("failed")
    line = json.loads(stream.getvalue())
    assert line["level"] == "error"
    assert "ValueError: odd" in line["exception"]


@pytest.mark.parametrize("level", LEVELS)
def test_lines_below_the_level_are_dropped(level: str) -> None:
    """As --log-level says."""
    stream = io.StringIO()
    configure_logs(level, stream)
    logger = get_logger("x")
    for one in LEVELS:
        getattr(logger, one)("said")
    found = [json.loads(line)["level"] for line in stream.getvalue().splitlines()]
    assert found == list(LEVELS[LEVELS.index(level) :])


def test_a_terminal_gets_readable_lines_that_cannot_steer_it() -> None:
    """Texts of a rig lose their escapes; colours are ours."""
    stream = Terminal()
    configure_logs("info", stream)
    get_logger("session").warning("fault \x1b[2J", rig="belt\x1b]0;x\x07")
    text = stream.getvalue()
    assert "fault ?[2J" in text
    assert "\x1b[2J" not in text
    assert "\x1b]" not in text
    assert "belt?]0;x?" in text


@pytest.mark.parametrize("kind", ["full", "closed"])
def test_a_log_that_cannot_be_written_stops_nothing(kind: str) -> None:
    """The run matters more than its log; the record has what counts."""
    stream = Full() if kind == "full" else io.StringIO()
    configure_logs("info", stream)
    if kind == "closed":
        stream.close()
    get_logger("session").error("still running")


def test_a_character_that_the_stream_cannot_encode_stops_nothing() -> None:
    """A service may run with an ASCII locale."""
    raw = io.BytesIO()
    stream = io.TextIOWrapper(raw, encoding="ascii")
    stream.isatty = lambda: True  # type: ignore[method-assign]
    configure_logs("info", stream)
    get_logger("session").info("Größe")
    get_logger("session").info("plain")
    stream.flush()
    assert b"plain" in raw.getvalue()


def test_logs_go_to_stderr(capsys: pytest.CaptureFixture[str]) -> None:
    """stdout is for results."""
    configure_logs()
    get_logger("session").info("here")
    captured = capsys.readouterr()
    assert captured.out == ""
    assert json.loads(captured.err)["event"] == "here"
    assert not sys.stderr.isatty()
