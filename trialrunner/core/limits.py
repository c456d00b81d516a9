"""What may be sent: box, rate, pins, the cap on change, and the wire's number format.

The limits in order of precedence: box, pins and rate always hold; the cap on change gives way
where they leave it no room, which happens only when they became tighter than the feedforward last
sent; that one is then brought inside first and the cap counts from there.

A signal within all limits is sent as wished, only rounded to the sample type. Otherwise a channel
is limited on a grid: whole multiples of a power of two, so fine that every step is at most the
spacing of the sample type at the channel's largest value. On the grid bounds, sums and ramps are
exact whole numbers, so the limits hold exactly and the result is a number of the sample type. A
rig that checks the table in its own arithmetic therefore agrees, up to a hair that is left for it:
see HAIR.
"""

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np

from trialrunner.core.errors import CoreError, SettingError, require_shape
from trialrunner.core.laws import LawContext
from trialrunner.core.projection import project
from trialrunner.core.rate_limit import clamp_rate, envelope_where_needed
from trialrunner.core.settings import RunSettings
from trialrunner.core.trial import Array, Mask

SampleType = Literal["f4", "f8"]

EPSILON = {"f4": 2.0**-24, "f8": 2.0**-53}
"""Largest relative rounding error of each sample type."""

HAIR = 8.0
"""Rate limits are kept by this many epsilons of the sample type to spare: a rig may round the rate,
the period, their product and the difference of two samples. Box limits need no such margin: the
largest number of the sample type that does not exceed the limit is at most the limit as the rig
rounds it."""

GRID_BITS = {"f4": 24, "f8": 53}
"""Bits of a whole number that the sample type represents exactly."""

EXACT_BITS = 50
"""Bits of a value times the number of samples, so that twice a ramp stays exact in float64."""

SMALLEST_STEP = {"f4": 2.0**-149, "f8": 2.0**-1000}


@dataclass(frozen=True)
class Limited:
    """A feedforward as it will be sent."""

    feedforward: Array
    """(n_samples, n_inputs), within limits and representable in the sample type."""
    clipped: Mask
    """(n_samples, n_inputs): true where limits changed the wish by more than rounding."""


def quantise(signal: Array, sample_type: str) -> Array:
    """`signal` rounded to the nearest number of the wire's sample type; a new float64 array."""
    if sample_type == "f8":
        return signal.astype(np.float64)
    with np.errstate(over="ignore"):  # beyond float32: infinity, which `apply` refuses
        return signal.astype(np.float32).astype(np.float64)


class Limits:
    """Brings a feedforward inside what may be sent. Pure; the same bits for the same arguments."""

    def __init__(
        self,
        *,
        low: Array,
        high: Array,
        rate_per_s: Array,
        period_s: float,
        n_samples: int,
        change_cap: Array,
        pin_start: Mask,
        pin_end: Mask,
        method: Literal["clamp", "envelope", "projection"] = "envelope",
        sample_type: str = "f8",
    ) -> None:
        """Arrays are (n_inputs,), infinite where there is no limit. Pins mean zero at that end,
        reached within the rate. Raises SettingError if the limits leave nothing to send.
        """
        self._low, self._high = _inward(low, high, sample_type)
        self._rate = rate_per_s * period_s * (1.0 - HAIR * EPSILON[sample_type])
        self._n_samples = n_samples
        self._change_cap = change_cap
        self._pin_start, self._pin_end = pin_start, pin_end
        self._method = method
        self._sample_type = sample_type
        self._rest = np.clip(0.0, self._low, self._high)
        self._check(low, high)

    @classmethod
    def of(cls, settings: RunSettings, context: LawContext, sample_type: str) -> "Limits":
        """The limits of a run; box and rate are those of the context."""
        inputs = settings.inputs
        return cls(
            low=context.low,
            high=context.high,
            rate_per_s=context.rate_per_s,
            period_s=context.period_s,
            n_samples=context.n_samples,
            change_cap=np.array([channel.change_cap for channel in inputs]),
            pin_start=np.array([channel.pin_start for channel in inputs]),
            pin_end=np.array([channel.pin_end for channel in inputs]),
            method=settings.learn.limit_method,
            sample_type=sample_type,
        )

    def box(self, share: float = 1.0) -> tuple[Array, Array]:
        """(n_inputs,) lower and upper limit, with only a share of the way from rest allowed.

        Rest is zero, or the nearest allowed value to it.
        """
        if share >= 1.0:
            return self._low, self._high
        rest = self._rest
        # An infinite box has no share; the soft start does not apply to it.
        low = np.where(np.isfinite(self._low), rest + share * (self._low - rest), self._low)
        high = np.where(np.isfinite(self._high), rest + share * (self._high - rest), self._high)
        return low, high

    def apply(self, wish: Array, previous: Array | None = None, share: float = 1.0) -> Limited:
        """The wish within limits, (n_samples, n_inputs), as it will be sent.

        `previous` is the feedforward last sent, against which the cap on change counts; None: no
        cap. `share` scales the box (soft start). A wish within limits comes back as it is, rounded.
        Raises CoreError if the wish is not finite.
        """
        shape = (self._n_samples, len(self._low))
        require_shape("feedforward wished", wish, shape)
        low, high = self.box(share)
        sent = quantise(wish, self._sample_type)
        clipped = np.zeros(shape, dtype=bool)
        for i in np.flatnonzero(~self._inside(sent, previous, low, high)).tolist():
            before = None
            if previous is not None and math.isfinite(self._change_cap[i]):
                before = previous[:, i]
            with np.errstate(over="ignore"):  # far beyond the box, which cuts it
                column = self._limit(i, wish[:, i], before, low[i], high[i])
            sent[:, i], clipped[:, i] = column
        return Limited(sent, clipped)

    def pushes_out(self, feedforward: Array, increment: Array, share: float = 1.0) -> Mask:
        """(n_samples, n_inputs): true where `feedforward` is at the box and `increment` goes on."""
        low, high = self.box(share)
        at_high = feedforward >= high - _closeness(high)
        at_low = feedforward <= low + _closeness(low)
        return (at_high & (increment > 0.0)) | (at_low & (increment < 0.0))

    def _inside(self, sent: Array, previous: Array | None, low: Array, high: Array) -> Mask:
        """(n_inputs,): channels that need nothing but rounding."""
        # Reductions along a short last axis are ten times slower: one channel a row.
        rows = np.ascontiguousarray(sent.T)
        smallest, largest = rows.min(axis=1), rows.max(axis=1)
        if not np.all(np.isfinite(smallest) & np.isfinite(largest)):
            n_bad = int(np.count_nonzero(~np.isfinite(sent)))
            raise CoreError(
                f"feedforward wished: expected finite numbers, found {n_bad} samples that are not; "
                "the law has diverged or its gains are far too large"
            )
        inside: Mask = (smallest >= low) & (largest <= high)
        inside &= ~self._pin_start | (sent[0] == 0.0)
        inside &= ~self._pin_end | (sent[-1] == 0.0)
        if len(sent) > 1 and np.any(np.isfinite(self._rate)):
            inside &= _sizes(rows[:, 1:] - rows[:, :-1]) <= self._rate
        if previous is not None and np.any(np.isfinite(self._change_cap)):
            inside &= _sizes(rows - previous.T) <= self._change_cap
        return inside

    def _limit(
        self, i: int, wish: Array, previous: Array | None, low: float, high: float
    ) -> tuple[Array, Mask]:
        """One channel on its grid and where it was cut, (n_samples,); `previous` only if capped."""
        in_box = np.clip(wish, low, high)
        reach = _size(in_box)
        if previous is not None:
            before = max(_size(previous), _size(np.clip(previous, low, high)))
            reach = max(before, min(reach, before + float(self._change_cap[i])))
        step = self._step(reach)
        bottom, top = np.ceil(low / step), np.floor(high / step)
        if bottom > top:
            # A box narrower than the grid: any constant within it will do.
            limited = np.full(len(wish), self._rest[i])
            return limited, np.abs(limited - wish) > step
        # No result leaves +-reach, so twice that is as good as no rate limit, and finite.
        rate = min(np.floor(self._rate[i] / step), np.ceil(2.0 * reach / step))
        lower, upper = self._hard_bounds(i, bottom, top, rate)
        if previous is not None:
            cap = float(self._change_cap[i]) / step
            lower, upper = _near(previous / step, cap, lower, upper, rate)
        goal = np.clip(np.rint(wish / step), -(2.0**EXACT_BITS), 2.0**EXACT_BITS)
        limited = self._bring_inside(goal, lower, upper, rate) * step
        return limited, np.abs(limited - wish) > step

    def _step(self, reach: float) -> float:
        """The grid for values up to `reach`: a power of two."""
        if reach == 0.0:
            return SMALLEST_STEP[self._sample_type]
        bits = min(GRID_BITS[self._sample_type], EXACT_BITS - self._n_samples.bit_length())
        return max(math.ldexp(1.0, math.frexp(reach)[1] - bits), SMALLEST_STEP[self._sample_type])

    def _hard_bounds(self, i: int, bottom: float, top: float, rate: float) -> tuple[Array, Array]:
        """Box, and a cone of the rate's slope from each pinned end, in grid steps."""
        lower, upper = np.full(self._n_samples, bottom), np.full(self._n_samples, top)
        cone = rate * np.arange(self._n_samples)
        for pinned, reachable in ((self._pin_start[i], cone), (self._pin_end[i], cone[::-1])):
            if pinned:
                lower, upper = np.maximum(lower, -reachable), np.minimum(upper, reachable)
        return lower, upper

    def _bring_inside(self, goal: Array, lower: Array, upper: Array, rate: float) -> Array:
        """Whole numbers in, whole numbers out: rounding a signal that keeps a whole rate and whole
        bounds to whole numbers keeps them, because rounding is monotone."""
        if self._method == "envelope":
            return np.floor(envelope_where_needed(np.clip(goal, lower, upper), rate))
        if self._method == "projection":
            goal = np.floor(project(goal, lower, upper, rate) + 0.5)
        # The clamp changes a projected signal only where rounding errors met a tie.
        return clamp_rate(np.clip(goal, lower, upper), rate)

    def _check(self, low: Array, high: Array) -> None:
        for i in range(len(low)):
            if not self._low[i] <= self._high[i]:
                raise SettingError(
                    f"inputs.{i}: no number of sample type {self._sample_type} lies within "
                    f"{low[i]:.10g} to {high[i]:.10g}; widen low and high"
                )
            if (self._pin_start[i] or self._pin_end[i]) and self._rest[i] != 0.0:
                raise SettingError(
                    f"inputs.{i}: pin_start and pin_end need zero within low and high, found "
                    f"{low[i]:g} to {high[i]:g}; switch the pins off or widen the limits"
                )


def _inward(low: Array, high: Array, sample_type: str) -> tuple[Array, Array]:
    """The smallest and largest number of the sample type within the limits."""
    if sample_type == "f8":
        return low, high
    with np.errstate(over="ignore"):  # infinity, brought back by one step below
        first, last = low.astype(np.float32), high.astype(np.float32)
    first = np.where(first < low, np.nextafter(first, np.float32(np.inf)), first)
    last = np.where(last > high, np.nextafter(last, np.float32(-np.inf)), last)
    return first.astype(np.float64), last.astype(np.float64)


def _near(
    previous: Array, cap: float, lower: Array, upper: Array, rate: float
) -> tuple[Array, Array]:
    """Bounds tightened to `cap` about the previous signal, which is brought inside first.

    All of these keep the rate, so their larger and smaller do too, and there is always room.
    """
    on_grid = np.rint(previous)
    centre = clamp_rate(np.clip(on_grid, lower, upper), rate)
    # A larger signal has a coarser grid, from which the previous one may lie off.
    cap = max(np.floor(cap - _size(on_grid - previous)), 0.0)
    return np.maximum(lower, centre - cap), np.minimum(upper, centre + cap)


def _size(signal: Array) -> float:
    return float(max(signal.max(), -signal.min()))


def _sizes(signal: Array) -> Array:
    """(n_channels,): largest magnitude of each row."""
    return np.asarray(np.maximum(signal.max(axis=1), -signal.min(axis=1)))


def _closeness(bound: Array) -> Array:
    """How near to a bound counts as at it: well above rounding, well below any resolution."""
    return np.where(np.isfinite(bound), 1e-6 * np.abs(bound), 0.0)
