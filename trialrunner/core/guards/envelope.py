"""Envelope: limits that hold at every sample; a breach halts the rig within the trial."""

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any, ClassVar

from trialrunner.core.bounds import STRICT, Positive
from trialrunner.core.envelope import Envelope as Limits
from trialrunner.core.guards import GuardContext, Report, require_channels
from trialrunner.core.settings import OutputChannel
from trialrunner.core.trial import Array, GuardResult, Level, Memory, Trial, Verdict


@dataclass(frozen=True, kw_only=True)
class Envelope:
    """Halts the rig at once, in the middle of the trial, when a sample is beyond a limit.

    The trial is void. Nothing is limited until a limit is set: what is dangerous on a rig only its
    owner knows, and a number drawn from healthy trials would halt runs for want of patience. This
    is no safety function: samples arrive late, or not at all.
    """

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "envelope"

    enabled: bool = True
    error_limits: Mapping[str, Positive] = field(default_factory=dict)
    """Largest absolute error at any sample by output channel, in the output's unit."""
    rate_limits_per_s: Mapping[str, Positive] = field(default_factory=dict)
    """Largest change between two samples by output channel, as a rate in its unit a second."""
    tube: Mapping[str, Positive] = field(default_factory=dict)
    """Largest distance from the last accepted trial's output at the same sample. It must leave
    room for what one update may change. Checked only while samples stream in."""

    def check_channels(self, outputs: tuple[OutputChannel, ...]) -> None:
        for name in ("error_limits", "rate_limits_per_s", "tube"):
            require_channels(f"guards.envelope.{name}", getattr(self, name), outputs)

    def limits(
        self, outputs: tuple[OutputChannel, ...], period_s: float, reference: Array
    ) -> Limits:
        """To check samples with; `reference` (n_samples, n_outputs)."""
        return Limits(
            outputs=outputs,
            period_s=period_s,
            reference=reference,
            error_limits=self.error_limits,
            rate_limits_per_s=self.rate_limits_per_s,
            tube=self.tube,
        )

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        limits = self.limits(context.outputs, context.period_s, trial.reference)
        found = None if limits.is_off else replace(limits, tube={}).breach(trial.output)
        if found is None:
            return Report(self.NAME, memory).passed()
        verdict = Verdict(self.NAME, Level.HALT, found.reason, found.value, found.limit, void=True)
        return GuardResult(verdict, memory)
