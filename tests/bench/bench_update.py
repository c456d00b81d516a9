"""Cost of an update against one bare rfft + irfft, its growth with the horizon, and its memory.

Run as a script; it prints a table and fails if the cost grows faster than n log n or memory faster
than n. Ratios only: absolute times are those of the machine.
"""

import gc
import math
import sys
import time
import tracemalloc
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy.fft import irfft, next_fast_len, rfft

from trialrunner.core.filters import QFilter
from trialrunner.core.laws import LawContext
from trialrunner.core.laws.pd import PdSettings
from trialrunner.core.learning import Learner
from trialrunner.core.limits import Limits
from trialrunner.core.run_state import Carry, RunState
from trialrunner.core.settings import (
    FilterSettings,
    Horizon,
    InputChannel,
    OutputChannel,
    RunSettings,
)
from trialrunner.core.trial import Array, Purpose, Trial
from trialrunner.launch import keep_freed_memory

PERIOD_S = 0.001
LENGTHS = (1_000, 10_000, 100_000, 1_000_000)
SPARE = 2.0
"""Noise of a shared machine: growth beyond n log n is called so from this factor on."""


@dataclass(frozen=True)
class Row:
    n_samples: int
    floor_s: float
    update_s: float
    filter_s: float
    clip_diff_s: float
    limits_free_s: float
    limits_busy_s: float
    peak_bytes: int


def main() -> int:
    """Measure, print, judge; 0 if cost and memory grow as they should."""
    keep_freed_memory()  # as the daemon does; page faults would triple the long FFTs
    print("n        rfft+irfft  update  /floor  Q/floor  limits: free/clip+diff  2 % cut  peak B/n")
    rows = []
    for n_samples in LENGTHS:
        row = measure(n_samples)
        rows.append(row)
        print(
            f"{row.n_samples:<9d}{1e3 * row.floor_s:8.3f} ms{1e3 * row.update_s:8.3f}"
            f"{row.update_s / row.floor_s:8.2f}{row.filter_s / row.floor_s:9.2f}"
            f"{row.limits_free_s / row.clip_diff_s:16.2f}"
            f"{row.limits_busy_s / row.clip_diff_s:15.1f}{row.peak_bytes / row.n_samples:10.0f}"
        )
    return judge(rows)


def judge(rows: list[Row]) -> int:
    """Growth from the second length to the last, where fixed costs no longer count."""
    first, last = rows[1], rows[-1]
    grown = last.update_s / first.update_s
    allowed = _n_log_n(last.n_samples) / _n_log_n(first.n_samples)
    exponent = math.log(grown) / math.log(last.n_samples / first.n_samples)
    memory = last.peak_bytes / first.peak_bytes / (last.n_samples / first.n_samples)
    print(
        f"from {first.n_samples} to {last.n_samples}: cost x {grown:.0f} (n log n: {allowed:.0f}), "
        f"exponent {exponent:.2f}; memory a sample x {memory:.2f}"
    )
    return 0 if grown <= SPARE * allowed and memory <= 1.5 else 1


def measure(n_samples: int) -> Row:
    """One channel: PD law, Gaussian Q, limits that do not bind, as in a healthy run."""
    rng = np.random.default_rng(1)
    signal = np.cumsum(rng.normal(size=(n_samples, 1)), axis=0)
    signal *= 0.5 / np.abs(signal).max()
    padded = np.zeros(next_fast_len(n_samples, real=True))
    padded[:n_samples] = signal[:, 0]
    learner, trial, carry = _learner(n_samples, signal)
    free, busy = _limits(n_samples, 10.0), _limits(n_samples, _rate_of_share(signal, 0.02))
    q_filter = QFilter(FilterSettings(bandwidth_hz=30.0), n_samples, PERIOD_S)
    times = _interleaved(
        n_samples,
        lambda: irfft(rfft(padded), len(padded)),
        lambda: learner.learn(trial, RunState(), carry),
        lambda: q_filter.apply(signal),
        lambda: (np.clip(signal, -1.0, 1.0), np.diff(signal, axis=0)),
        lambda: free.apply(signal, signal),
        lambda: busy.apply(signal, signal),
    )
    return Row(n_samples, *times, _peak_bytes(lambda: learner.learn(trial, RunState(), carry)))


def _learner(n_samples: int, signal: Array) -> tuple[Learner, Trial, Carry]:
    settings = RunSettings(
        horizon=Horizon(n_samples=n_samples, period_s=PERIOD_S),
        inputs=(InputChannel(name="u", unit="N", low=-9.0, high=9.0, rate_limit_per_s=1e6),),
        outputs=(OutputChannel(name="y", unit="mm", low=-9.0, high=9.0),),
        law=PdSettings(proportional=0.5, derivative=0.01, lead_samples=3),
        filter=FilterSettings(bandwidth_hz=30.0),
    )
    settings = replace(
        settings, inputs=(replace(settings.inputs[0], pin_start=False, pin_end=False),)
    )
    context = LawContext(
        PERIOD_S, n_samples, 1, 1, signal, np.array([-9.0]), np.array([9.0]), np.array([1e6])
    )
    carry = replace(Carry.zeros(n_samples, 1, 1), feedforward=signal, learned=signal)
    trial = Trial(
        index=0,
        purpose=Purpose.LEARN,
        feedforward=signal,
        reference=np.zeros_like(signal),
        output=0.1 * signal,
        auxiliary=np.zeros((n_samples, 0)),
        limited=np.zeros(signal.shape, dtype=bool),
        start_state=np.zeros(1),
    )
    return Learner(settings, context, "f8"), trial, carry


def _limits(n_samples: int, rate_per_sample: float) -> Limits:
    return Limits(
        low=np.array([-1.0]),
        high=np.array([1.0]),
        rate_per_s=np.array([rate_per_sample / PERIOD_S]),
        period_s=PERIOD_S,
        n_samples=n_samples,
        change_cap=np.array([np.inf]),
        pin_start=np.array([False]),
        pin_end=np.array([False]),
    )


def _rate_of_share(signal: Array, share: float) -> float:
    """The rate that this share of the signal's changes exceeds."""
    return float(np.quantile(np.abs(np.diff(signal[:, 0])), 1.0 - share))


def _interleaved(n_samples: int, *candidates: Callable[[], Any]) -> list[float]:
    """Median seconds of each, measured in turn, so that all meet the same weather."""
    rounds = max(9, min(200, 2_000_000 // n_samples))
    times: list[list[float]] = [[] for _ in candidates]
    for _ in range(rounds):
        for candidate, taken in zip(candidates, times, strict=True):
            began = time.perf_counter()
            candidate()
            taken.append(time.perf_counter() - began)
    return [sorted(taken[1:])[len(taken) // 2 - 1] for taken in times]


def _peak_bytes(candidate: Callable[[], Any]) -> int:
    """Largest memory in use at once by one call, its result included."""
    gc.collect()
    tracemalloc.start()
    candidate()
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    return peak


def _n_log_n(n: int) -> float:
    return n * math.log(n)


if __name__ == "__main__":
    sys.exit(main())
