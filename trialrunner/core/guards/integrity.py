"""Integrity: is the trial whole, and are its readings to be believed?"""

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np

from trialrunner.core.bounds import STRICT, AboveOne, Fraction, Positive, PositiveCount
from trialrunner.core.guards import GuardContext, Report, require_channels
from trialrunner.core.guards.readings import find_jump, find_spike, find_stuck
from trialrunner.core.settings import OutputChannel
from trialrunner.core.trial import Array, GuardResult, Memory, Trial

Finding = tuple[str, float, float]
"""Reason, number, limit."""


@dataclass(frozen=True, kw_only=True)
class Integrity:
    """Voids a trial that is not whole or in which a sensor was stuck, spiked or out of range."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "integrity"

    enabled: bool = True
    stuck_share: Fraction = 0.3
    """Share of the reference's whole range that it may cover while an output reads exactly the
    same value; 1: off. Raise it for a rig with a long dead time."""
    stuck_samples: PositiveCount = 20
    """Fewest samples with a moving reference in such a stretch."""
    spike_factor: AboveOne = 10.0
    """Largest height of a single-sample spike as a multiple of the channel's roughness (robust
    scale of its second differences, at least one step of the sensor); infinity: off."""
    jump_limits: Mapping[str, Positive] = field(default_factory=dict)
    """Largest change between two samples by output channel, in the output's unit."""

    def check_channels(self, outputs: tuple[OutputChannel, ...]) -> None:
        require_channels("guards.integrity.jump_limits", self.jump_limits, outputs)

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        report = Report(self.NAME, memory)
        finding = _incomplete(trial, context.outputs)
        if finding is not None:
            return report.void(*finding)
        finding = next(self._unbelievable(trial, context.outputs), None)
        if finding is not None:
            return report.void(*finding)
        return self._odd(trial, context.outputs, report)

    def _unbelievable(self, trial: Trial, outputs: tuple[OutputChannel, ...]) -> Iterator[Finding]:
        """The readings of a whole trial that cannot be true."""
        for j, channel in enumerate(outputs):
            y = trial.output_rows[j]
            yield from _out_of_range(y, channel)
            yield from self._spike(y, channel)
            yield from self._stuck(trial, j, channel)

    def _spike(self, y: Array, channel: OutputChannel) -> Iterator[Finding]:
        limit = self.jump_limits.get(channel.name, math.inf)
        if (peak := find_jump(y, limit)) is not None:
            yield (
                f"output {channel.name} jumps by {peak.height:.4g} {channel.unit} to sample "
                f"{peak.sample}; the limit is {limit:.4g} {channel.unit}",
                peak.height,
                limit,
            )
        if (peak := find_spike(y, self.spike_factor)) is not None:
            yield (
                f"output {channel.name} has a spike of {peak.height:.4g} {channel.unit} at sample "
                f"{peak.sample}; the limit is {peak.limit:.4g} {channel.unit}, "
                f"{self.spike_factor:.4g} times its roughness",
                peak.height,
                peak.limit,
            )

    def _stuck(self, trial: Trial, j: int, channel: OutputChannel) -> Iterator[Finding]:
        reference = np.ascontiguousarray(trial.reference[:, j])
        output = trial.output_rows[j]
        found = find_stuck(output, reference, self.stuck_share, self.stuck_samples)
        # A rig without a loop of its own may well stand still when nothing is fed forward.
        if found is None or (found.whole and not trial.feedforward.any()):
            return
        yield (
            f"output {channel.name} is stuck: samples {found.first} to {found.last} read the same "
            f"while the reference covers {found.travel:.4g} {channel.unit}; the limit is "
            f"{found.limit:.4g} {channel.unit}",
            found.travel,
            found.limit,
        )

    def _odd(self, trial: Trial, outputs: tuple[OutputChannel, ...], report: Report) -> GuardResult:
        """What is worth a word but leaves the trial fit to teach."""
        for j, channel in enumerate(outputs):
            if self.stuck_share < 1.0 and _motionless(trial, j):
                travel = float(np.ptp(trial.reference[:, j]))
                reason = (
                    f"output {channel.name} did not change at all while the reference covers "
                    f"{travel:.4g} {channel.unit} (limit 0); nothing was fed forward, so the rig "
                    f"may have stood still, or the sensor is dead"
                )
                return report.fired("warn", reason, travel, 0.0)
        bad = int(np.count_nonzero(~np.isfinite(trial.auxiliary)))
        if bad:
            reason = f"{bad} readings of auxiliary channels are not finite numbers; the limit is 0"
            return report.fired("warn", reason, bad, 0)
        return report.passed()


def _motionless(trial: Trial, j: int) -> bool:
    still = np.ptp(trial.output_rows[j]) == 0.0 and np.ptp(trial.reference[:, j]) > 0.0
    return bool(still) and not trial.feedforward.any()


def _incomplete(trial: Trial, outputs: tuple[OutputChannel, ...]) -> Finding | None:
    """What is missing of the trial."""
    n_samples = trial.output.shape[0]
    count = n_samples if trial.count < 0 else trial.count
    if trial.finish != "complete":
        words = trial.finish.replace("_", " ")
        return (
            f"the rig ended the trial after {count} of {n_samples} samples: {words}",
            count,
            n_samples,
        )
    if count != n_samples:
        return f"the rig took {count} samples; {n_samples} were ordered", count, n_samples
    if not trial.played_ok:
        reason = "the checksum of the feedforward that was played is not that of the one sent"
        return f"{reason} (1 mismatch, the limit is 0)", 1, 0
    bad = ~np.isfinite(trial.output)
    if not bad.any():
        return None
    j = int(np.argmax(bad.sum(axis=0)))
    n_bad, first = int(bad[:, j].sum()), int(np.argmax(bad[:, j]))
    reason = (
        f"{n_bad} of {n_samples} samples of output {outputs[j].name} are missing or no finite "
        f"numbers, first sample {first}; the limit is 0"
    )
    return reason, n_bad, 0


def _out_of_range(y: Array, channel: OutputChannel) -> Iterator[Finding]:
    for sample, limit, word in (
        (int(np.argmax(y)), channel.high, "above"),
        (int(np.argmin(y)), channel.low, "below"),
    ):
        value = float(y[sample])
        if value > limit if word == "above" else value < limit:
            yield (
                f"output {channel.name} reads {value:.4g} {channel.unit} at sample {sample}, "
                f"{word} its range's end at {limit:.4g} {channel.unit}",
                value,
                limit,
            )
