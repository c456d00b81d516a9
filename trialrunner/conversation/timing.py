"""Patience of the daemon with the rig; the [link] table of the configuration."""

from dataclasses import dataclass
from typing import Any, ClassVar

from trialrunner.core.bounds import STRICT, NonNegative, Positive, PositiveCount


@dataclass(frozen=True, kw_only=True)
class LinkTiming:
    """How long to wait and how often to ask."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    answer_timeout_s: Positive = 0.5
    """A numbered message without an answer for this long is sent again."""
    max_tries: PositiveCount = 6
    """So often, before the rig counts as silent."""
    silence_s: Positive = 3.0
    """A rig of which nothing valid was heard for this long counts as silent."""
    ready_timeout_s: Positive = 120.0
    """Longest return of the rig to its start."""
    resend_rounds: PositiveCount = 5
    """Times that missing samples or blocks are asked for before the trial is given up."""
    clock_exchanges: PositiveCount = 6
    """Clock exchanges before each start."""
    start_lead_s: NonNegative = 0.05
    """A start is ordered at least this far ahead; more where the line is slow."""
