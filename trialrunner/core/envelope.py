"""Limits within the trial: what is checked on each block of samples while the rig still runs; pure.

The guard judges the whole trial by the same limits, so that record and replay tell the same.
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from trialrunner.core.settings import OutputChannel
from trialrunner.core.trial import Array


@dataclass(frozen=True)
class Breach:
    """The first sample beyond a limit."""

    sample: int
    reason: str
    value: float
    limit: float


@dataclass(frozen=True)
class Envelope:
    """Limits by output channel, in its unit; a channel that is not named has none."""

    outputs: tuple[OutputChannel, ...]
    period_s: float
    reference: Array
    """(n_samples, n_outputs)."""
    error_limits: Mapping[str, float] = field(default_factory=dict)
    rate_limits_per_s: Mapping[str, float] = field(default_factory=dict)
    tube: Mapping[str, float] = field(default_factory=dict)
    accepted: Array | None = None
    """(n_samples, n_outputs): output of the last accepted trial; None before there is one."""

    @property
    def is_off(self) -> bool:
        return not (self.error_limits or self.rate_limits_per_s or self.tube)

    def breach(self, output: Array, first: int = 0) -> Breach | None:
        """The earliest sample beyond a limit.

        `output` is (n, n_outputs): samples `first` to `first + n - 1` of the trial. Samples that
        are no numbers are for other guards. A rate is checked between samples of one block; pass
        the last sample of the block before as well, so that no pair is left out.
        """
        found = [
            one
            for j, channel in enumerate(self.outputs)
            for one in self._in_channel(j, channel, output, first)
        ]
        return min(found, key=lambda one: one.sample, default=None)

    def _in_channel(
        self, j: int, channel: OutputChannel, output: Array, first: int
    ) -> Sequence[Breach]:
        y, span = output[:, j], slice(first, first + len(output))
        name, unit = channel.name, channel.unit
        checks = [
            (f"error of output {name}", unit, self.reference[span, j] - y, self.error_limits),
            (
                f"rate of output {name}",
                f"{unit}/s",
                np.diff(y, prepend=y[:1]) / self.period_s,
                self.rate_limits_per_s,
            ),
        ]
        if self.accepted is not None:
            away = y - self.accepted[span, j]
            words = f"distance of output {name} from the last accepted trial"
            checks.append((words, unit, away, self.tube))
        found = []
        for words, of, size, limits in checks:
            limit = limits.get(name, math.inf)
            beyond = np.flatnonzero(np.abs(size) > limit)
            if beyond.size:
                k, value = int(beyond[0]), abs(float(size[beyond[0]]))
                reason = (
                    f"the {words} is {value:.4g} {of} at sample {first + k}; the limit is "
                    f"{limit:.4g} {of}"
                )
                found.append(Breach(first + k, reason, value, limit))
        return found
