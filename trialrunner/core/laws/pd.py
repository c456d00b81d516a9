"""P and PD laws with phase lead: u' = u + gain * (P + D d/dt) e(t + lead).

The plain laws of the trade: a proportional law suits a first-order response, derivative action
adds the phase that a second-order one lacks, and a lead makes up for delay (Longman 2000 for the
lead). They need no model.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar, Literal

import numpy as np

from trialrunner.core.bounds import STRICT, Count, NonNegative
from trialrunner.core.errors import SettingError
from trialrunner.core.filters import ZeroPhase, cosine_frequencies_hz, first_order_magnitude
from trialrunner.core.laws import LawContext, Step
from trialrunner.core.trial import Array, Memory, Trial


@dataclass(frozen=True, kw_only=True)
class PdSettings:
    """A P or PD law. Each number holds for all pairs; a list gives one number a pair."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    kind: Literal["pd"] = "pd"
    pairs: tuple[tuple[Count, Count], ...] = ()
    """Which input learns from which output: pairs of input index and output index, from 0. Empty:
    input i from output i. An input may learn from several outputs; their corrections add up."""
    proportional: float | tuple[float, ...]
    """Input units per output unit of error."""
    derivative: float | tuple[float, ...] = 0.0
    """Input units times seconds per output unit. 0 is a P law."""
    derivative_filter_s: NonNegative | tuple[NonNegative, ...] = 0.0
    """Time constant of a first-order low-pass on the derivative, applied without phase lag; it is
    -3 dB at 1 / (2 pi time constant). 0: none."""
    lead_samples: Count | tuple[Count, ...] = 0
    """The error is taken from this many samples ahead; usually the delay of the rig."""

    def build(self, context: LawContext) -> "PdLaw":
        """Raises SettingError if pairs or lists do not fit the channels or the horizon."""
        pairs = self._checked_pairs(context)
        n = len(pairs)
        proportional = _per_pair("law.proportional", self.proportional, n)
        derivative = _per_pair("law.derivative", self.derivative, n)
        smoothing_s = _per_pair("law.derivative_filter_s", self.derivative_filter_s, n)
        leads = _per_pair("law.lead_samples", self.lead_samples, n)
        if not any(proportional) and not any(derivative):
            raise SettingError(
                "law.proportional and law.derivative: expected a gain that is not zero, found only "
                "zeros, with which nothing is learned; set law.proportional"
            )
        for lead in leads:
            if not 0 <= lead < context.n_samples:
                raise SettingError(
                    f"law.lead_samples: expected 0 to {context.n_samples - 1} (samples of a trial "
                    f"less one), found {lead}"
                )
        terms = zip(pairs, proportional, derivative, smoothing_s, leads, strict=True)
        return PdLaw(
            tuple(
                _Pair(i, o, float(p), float(d), int(lead), _low_pass(s if d else 0.0, context))
                for (i, o), p, d, s, lead in terms
            ),
            context.period_s,
        )

    def _checked_pairs(self, context: LawContext) -> tuple[tuple[int, int], ...]:
        if not self.pairs:
            if context.n_inputs != context.n_outputs:
                raise SettingError(
                    f"law.pairs: with {context.n_inputs} inputs and {context.n_outputs} outputs "
                    "expected a list of [input, output] index pairs, found none"
                )
            return tuple((i, i) for i in range(context.n_inputs))
        for i, o in self.pairs:
            if not (0 <= i < context.n_inputs and 0 <= o < context.n_outputs):
                raise SettingError(
                    f"law.pairs: expected an input below {context.n_inputs} and an output below "
                    f"{context.n_outputs}, found [{i}, {o}]; indices count from 0"
                )
        if len(set(self.pairs)) < len(self.pairs):
            raise SettingError(
                f"law.pairs: expected each pair once, found {[list(p) for p in self.pairs]}"
            )
        return self.pairs


def _per_pair(key: str, value: float | tuple[float, ...], n_pairs: int) -> tuple[float, ...]:
    if not isinstance(value, tuple):
        return (value,) * n_pairs
    if len(value) != n_pairs:
        raise SettingError(
            f"{key}: expected one number, or one for each of the {n_pairs} pairs, "
            f"found {len(value)} numbers"
        )
    return value


def _low_pass(time_constant_s: float, context: LawContext) -> ZeroPhase | None:
    if time_constant_s == 0.0:
        return None
    frequency_hz = cosine_frequencies_hz(context.n_samples, context.period_s)
    return ZeroPhase(first_order_magnitude(frequency_hz, time_constant_s))


@dataclass(frozen=True)
class _Pair:
    input: int
    output: int
    proportional: float
    derivative: float
    lead: int
    low_pass: ZeroPhase | None


class PdLaw:
    """Built by PdSettings. Keeps nothing between trials."""

    def __init__(self, pairs: tuple[_Pair, ...], period_s: float) -> None:
        self._pairs = pairs
        self._period_s = period_s

    def update(
        self, trial: Trial, gain: float, memory: Memory, arrays: Mapping[str, Array]
    ) -> Step:
        error = trial.error
        feedforward = trial.feedforward.copy()
        for pair in self._pairs:
            correction = self._correction(pair, error[:, pair.output])
            feedforward[:, pair.input] += gain * _from_ahead(correction, pair.lead)
        return Step(feedforward)

    def _correction(self, pair: _Pair, error: Array) -> Array:
        correction = pair.proportional * error
        if pair.derivative:
            smooth = error if pair.low_pass is None else pair.low_pass.apply(error[:, None])[:, 0]
            correction += pair.derivative * slope(smooth, self._period_s)
        return correction


def slope(signal: Array, period_s: float) -> Array:
    """Central difference, (n_samples,), in units per second; at the ends as if reflected evenly.

    The whole error is known, so the difference needs no past-only form and has no phase error; its
    gain sin(w T) / T falls to zero at Nyquist. With the even reflection (the one of the Q-filter)
    its norm is at most 1 / T also at the ends, where a one-sided difference would exceed it.
    """
    padded = np.concatenate((signal[:1], signal, signal[-1:]))
    return np.asarray((padded[2:] - padded[:-2]) / (2.0 * period_s))


def _from_ahead(correction: Array, lead: int) -> Array:
    """correction(t + lead); the last sample is held where the trial has ended.

    Held, because zeros would leave the last `lead` inputs unlearned: the feedforward would drop
    there, and the Q-filter would carry the drop into samples that matter (on a first-order plant
    with 10 samples of delay the spectral radius of a trial is 0.96 with zeros, 0.84 held). The
    price: the frequency condition |Q (1 - G L)| < 1 does not speak for the last `lead` inputs.
    """
    if lead == 0:
        return correction
    return np.concatenate((correction[lead:], np.full(lead, correction[-1])))
