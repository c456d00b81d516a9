"""Log lines on stderr: for people on a terminal, JSON otherwise (a service's journal, a file).

structlog is loaded when logs are wanted, not when this module is.
"""

from __future__ import annotations

import sys
from typing import TYPE_CHECKING, Any, TextIO

from trialrunner.operator_messages import json_text, printable

if TYPE_CHECKING:
    from structlog.typing import EventDict, FilteringBoundLogger, Processor

LEVELS = ("debug", "info", "warning", "error")


class _Unbreakable:
    """A stream whose failure costs log lines, not the run: the terminal closed, the disk filled."""

    def __init__(self, stream: TextIO) -> None:
        self._stream = stream
        self.lost = 0

    def write(self, text: str) -> int:
        try:
            return self._stream.write(text)
        except (OSError, ValueError):
            # ValueError: the stream was closed, or cannot encode the text.
            self.lost += 1
            return len(text)

    def flush(self) -> None:
        try:
            self._stream.flush()
        except (OSError, ValueError):
            self.lost += 1


def configure_logs(level: str = "info", stream: TextIO | None = None) -> None:
    """Log from `level` (one of LEVELS) up, to stderr or `stream`."""
    import structlog

    stream = stream or sys.stderr
    on_terminal = stream.isatty()
    processors: list[Processor] = [
        structlog.processors.add_log_level,
        structlog.processors.TimeStamper(fmt="iso" if not on_terminal else _TERMINAL_TIME),
        structlog.processors.format_exc_info,
    ]
    if on_terminal:
        processors += [_tame, structlog.dev.ConsoleRenderer(pad_event_to=0)]
    else:
        processors.append(structlog.processors.JSONRenderer(serializer=_serialise))
    structlog.configure(
        processors=processors,
        wrapper_class=structlog.make_filtering_bound_logger(level),
        logger_factory=structlog.PrintLoggerFactory(_Unbreakable(stream)),  # type: ignore[arg-type]
        cache_logger_on_first_use=True,
    )


_TERMINAL_TIME = "%Y-%m-%d %H:%M:%SZ"


def get_logger(name: str) -> FilteringBoundLogger:
    """A logger that names its part of the program in each line; see structlog for its methods."""
    import structlog

    logger: FilteringBoundLogger = structlog.get_logger(part=name)
    return logger


def _serialise(event: EventDict, **_: Any) -> str:
    return json_text(event)


def _tame(_: object, __: str, event: EventDict) -> EventDict:
    """Texts come from rigs and operators too; the part of the program is no news to a person."""
    return {
        key: printable(value) if isinstance(value, str) and key != "exception" else value
        for key, value in event.items()
        if key != "part"
    }
