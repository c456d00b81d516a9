"""Health: slow changes of rig and line that no single trial shows."""

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np

from trialrunner.core.bounds import STRICT, NonNegative, Positive, PositiveFraction
from trialrunner.core.guards import Action, GuardContext, Report
from trialrunner.core.guards.readings import resolution
from trialrunner.core.trial import Array, GuardResult, Memory, Trial

WEIGHT = 0.1
"""Weight of the newest trial in a moving mean."""

WARM_UP = 10
"""Trials before a moving mean is compared with anything."""

REARM = 0.8
"""Share of its limit below which a complaint that was made can be made again."""

Finding = tuple[str, float, float, str]
"""Key, value, limit, reason."""


@dataclass(frozen=True, kw_only=True)
class Health:
    """Watches auxiliary channels, start, response, line and sensor over many trials.

    A slow change is told once, and again only after it was clearly gone: a warning at every trial
    would hide the next one. An auxiliary channel beyond its limit is told at every trial.
    """

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "health"

    enabled: bool = True
    action: Action = "warn"
    """What the guard asks for on a slow change."""
    auxiliary_high: Mapping[str, float] = field(default_factory=dict)
    """Largest reading by auxiliary channel, such as a motor's temperature, in its unit."""
    auxiliary_low: Mapping[str, float] = field(default_factory=dict)
    """Smallest reading by auxiliary channel."""
    auxiliary_action: Action = "halt"
    start_drift: PositiveFraction = 0.5
    """Largest moving mean of the distance from the start of the reference, as a share of the
    channel's start_tolerance."""
    response_change: Positive = 0.05
    """Largest change of an output's size while the same feedforward is repeated, as a share."""
    asked_again: PositiveFraction = 0.05
    """Largest moving mean of the share of samples that had to be asked for again."""
    late_periods: Positive = 1.2
    """Largest moving mean of the start's lateness, in sample periods."""
    quantisation: NonNegative = 2.0
    """Sensor's step as a multiple of the output's error (root mean square) above which learning
    follows the sensor's steps; 0: off."""

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        beyond = next(self._auxiliary(trial, context), None)
        means = self._moving_means(trial, context, memory)
        response = _response(trial, memory)
        said = _words(memory, "said")
        findings = list(self._findings(trial, context, means, response))
        high = {key for key, value, limit, _ in findings if value > limit}
        kept = {key for key, value, limit, _ in findings if value > REARM * limit} & said
        new = [one for one in findings if one[0] in high - said]
        told = kept | {one[0] for one in new[:1]}
        report = Report(self.NAME, {**means, **response, "said": ",".join(sorted(told))})
        if beyond is not None:
            _, value, limit, reason = beyond
            return report.fired(self.auxiliary_action, reason, value, limit)
        if new:
            _, value, limit, reason = new[0]
            return report.fired(self.action, reason, value, limit)
        return report.passed()

    def _auxiliary(self, trial: Trial, context: GuardContext) -> Iterator[Finding]:
        for word, limits in (("high", self.auxiliary_high), ("low", self.auxiliary_low)):
            for name, limit in limits.items():
                if name not in context.auxiliary:
                    known = ", ".join(context.auxiliary) or "none"
                    reason = (
                        f"guards.health.auxiliary_{word} limits {name}, and the rig has 0 "
                        f"auxiliary channels of that name (known: {known})"
                    )
                    yield name, 0.0, 1.0, reason
                    continue
                readings = trial.auxiliary[:, context.auxiliary.index(name)]
                readings = readings[np.isfinite(readings)]
                if not readings.size:
                    continue
                value = float(readings.max() if word == "high" else readings.min())
                if value > limit if word == "high" else value < limit:
                    than = "above" if word == "high" else "below"
                    reason = f"{name} reads {value:.4g}, {than} its limit {limit:.4g}"
                    yield name, value, limit, reason

    def _moving_means(
        self, trial: Trial, context: GuardContext, memory: Memory
    ) -> dict[str, float | int | str | list[float]]:
        """Plain means at first, then with the weight of the newest held at WEIGHT."""
        count = min(_number(memory, "trials") + 1.0, 1e9)
        weight = max(WEIGHT, 1.0 / count)
        away = trial.start_state - trial.reference[0]
        now = {f"start {c.name}": float(d) for c, d in zip(context.outputs, away, strict=True)}
        now["asked again"] = trial.asked_again / len(trial.output)
        now["late"] = abs(trial.start_lateness_s) / context.period_s
        means: dict[str, float | int | str | list[float]] = {"trials": int(count)}
        for key, value in now.items():
            before = _number(memory, key)
            means[key] = before + weight * (value - before) if math.isfinite(value) else before
        return means

    def _findings(
        self, trial: Trial, context: GuardContext, means: Memory, response: Memory
    ) -> Iterator[Finding]:
        if _number(means, "trials") >= WARM_UP:
            yield from self._slow(context, means)
        yield from self._same_feedforward(context, response)
        yield from self._coarse(trial, context)

    def _slow(self, context: GuardContext, means: Memory) -> Iterator[Finding]:
        for channel in context.outputs:
            limit = self.start_drift * channel.start_tolerance
            mean = abs(_number(means, f"start {channel.name}"))
            reason = (
                f"output {channel.name} starts {mean:.4g} {channel.unit} from the reference in the "
                f"mean of the last trials; the limit is {limit:.4g} {channel.unit}"
            )
            yield f"start {channel.name}", mean, limit, reason
        share, periods = _number(means, "asked again"), _number(means, "late")
        yield (
            "asked again",
            share,
            self.asked_again,
            f"a share of {share:.3g} of the samples had to be asked for again in the mean of the "
            f"last trials; the limit is {self.asked_again:.3g}: look at the line",
        )
        yield (
            "late",
            periods,
            self.late_periods,
            f"trials start {periods:.3g} sample periods off in the mean of the last trials; the "
            f"limit is {self.late_periods:.3g}",
        )

    def _same_feedforward(self, context: GuardContext, response: Memory) -> Iterator[Finding]:
        first, last = response["first size"], response["last size"]
        assert isinstance(first, list)
        assert isinstance(last, list)
        for channel, before, now in zip(context.outputs, first, last, strict=True):
            factor = now / before if before > 0.0 else 1.0
            change = abs(factor - 1.0)
            reason = (
                f"output {channel.name} answers the same feedforward with {factor:.3g} times "
                f"the size it had when it was first repeated; the limit is a change of "
                f"{self.response_change:.3g}: friction, gain or supply has changed"
            )
            yield f"response {channel.name}", change, self.response_change, reason

    def _coarse(self, trial: Trial, context: GuardContext) -> Iterator[Finding]:
        if self.quantisation <= 0.0:
            return
        for j, channel in enumerate(context.outputs):
            step = resolution(trial.output_rows[j])
            size = float(np.sqrt(np.mean(np.square(trial.error[:, j]))))
            ratio = step / size if size > 0.0 else 0.0
            reason = (
                f"output {channel.name} is measured in steps of {step:.4g} {channel.unit}, "
                f"{ratio:.3g} times its error of {size:.4g} {channel.unit}; the limit is "
                f"{self.quantisation:.3g} times: learning follows the sensor's steps"
            )
            yield f"step {channel.name}", ratio, self.quantisation, reason


def _fingerprint(array: Array) -> int:
    """Tells one feedforward from another: its bits, weighted by their place, modulo 2^64."""
    bits = np.ascontiguousarray(array).view(np.uint64).ravel()
    odd = 2 * np.arange(bits.size, dtype=np.uint64) + np.uint64(1)
    return int(np.sum(bits * odd, dtype=np.uint64))


def _response(trial: Trial, memory: Memory) -> dict[str, float | int | str | list[float]]:
    """Size (standard deviation) of each output when this feedforward was first played, and now."""
    played = _fingerprint(trial.feedforward)
    size = np.std(trial.output_rows, axis=1).tolist()
    first = memory.get("first size")
    same = memory.get("played") == played and isinstance(first, list) and len(first) == len(size)
    return {"played": played, "first size": first if same and first else size, "last size": size}


def _number(memory: Memory, key: str) -> float:
    value = memory.get(key, 0.0)
    return 0.0 if isinstance(value, str | list) else float(value)


def _words(memory: Memory, key: str) -> set[str]:
    value = memory.get(key, "")
    return set(value.split(",")) - {""} if isinstance(value, str) else set()
