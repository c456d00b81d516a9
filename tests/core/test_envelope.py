"""Limits within the trial: checked block by block, told with sample, number and limit."""

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from trialrunner.core.envelope import Envelope
from trialrunner.core.errors import SettingError
from trialrunner.core.guards.envelope import Envelope as Guard
from trialrunner.core.settings import OutputChannel
from trialrunner.core.trial import Level

Make = Callable[..., Any]
OUTPUTS = (
    OutputChannel(name="x", unit="mm", low=-50.0, high=50.0),
    OutputChannel(name="y", unit="deg", low=-50.0, high=50.0),
)
REFERENCE = np.zeros((100, 2))


def envelope(**limits: Any) -> Envelope:
    return Envelope(outputs=OUTPUTS, period_s=0.01, reference=REFERENCE, **limits)


def output_with(sample: int, channel: int, value: float) -> np.ndarray:
    output = np.zeros((100, 2))
    output[sample:, channel] = value
    return output


def test_without_limits_nothing_is_a_breach() -> None:
    assert envelope().is_off
    assert envelope().breach(output_with(3, 0, 1e9)) is None


def test_an_error_beyond_its_limit_is_found_at_its_first_sample() -> None:
    """At the limit is not beyond it; the sign does not matter."""
    limits = envelope(error_limits={"y": 2.0})
    assert limits.breach(output_with(40, 1, 2.0)) is None
    assert limits.breach(output_with(40, 0, 9.0)) is None, "x has no limit"
    for value in (2.5, -2.5):
        found = limits.breach(output_with(40, 1, value))
        assert found is not None
        assert (found.sample, found.value, found.limit) == (40, 2.5, 2.0)
        assert found.reason == ("the error of output y is 2.5 deg at sample 40; the limit is 2 deg")


def test_blocks_give_what_the_whole_gives() -> None:
    """Samples are numbered in the trial, wherever the block begins."""
    limits = envelope(error_limits={"x": 1.0})
    output = output_with(57, 0, 3.0)
    assert limits.breach(output[:50], 0) is None
    assert limits.breach(output[50:75], 50) == limits.breach(output)


def test_a_rate_is_seen_across_blocks_that_overlap_by_a_sample() -> None:
    limits = envelope(rate_limits_per_s={"x": 50.0})
    output = output_with(60, 0, 1.0)
    assert limits.breach(output[:60], 0) is None
    found = limits.breach(output[59:80], 59)
    assert found is not None
    assert (found.sample, found.limit) == (60, 50.0)
    assert found.value == pytest.approx(100.0)
    assert "mm/s" in found.reason


def test_the_tube_is_around_the_last_accepted_trial() -> None:
    """Before there is one nothing is checked."""
    limits = envelope(tube={"x": 0.5})
    output = output_with(10, 0, 4.0)
    assert limits.breach(output) is None
    assert replace(limits, accepted=output + 0.4).breach(output) is None
    found = replace(limits, accepted=REFERENCE).breach(output)
    assert found is not None
    assert "last accepted trial" in found.reason
    assert found.sample == 10


def test_the_earliest_of_several_breaches_is_told() -> None:
    limits = envelope(error_limits={"x": 1.0, "y": 1.0})
    both = output_with(70, 0, 5.0) + output_with(30, 1, 5.0)
    found = limits.breach(both)
    assert found is not None
    assert (found.sample, "output y" in found.reason) == (30, True)


def test_missing_samples_are_no_breach() -> None:
    output = np.full((100, 2), np.nan)
    limits = envelope(error_limits={"x": 1.0}, rate_limits_per_s={"x": 1.0}, tube={"x": 1.0})
    assert replace(limits, accepted=REFERENCE).breach(output) is None


def test_the_guard_halts_and_voids(make_trial: Make, make_context: Make) -> None:
    """The same limit in the guard, also on a trial that broke off."""
    trial = make_trial()
    output = trial.output.copy()
    output[200:] += 5.0
    output[300:] = np.nan
    verdict = (
        Guard(error_limits={"x": 4.0})
        .judge(replace(trial, output=output), make_context(), {})
        .verdict
    )
    assert (verdict.level, verdict.void, verdict.limit) == (Level.HALT, True, 4.0)
    assert "sample 200" in verdict.reason
    assert Guard().judge(replace(trial, output=output), make_context(), {}).verdict.level == 0


def test_an_unknown_channel_is_refused() -> None:
    with pytest.raises(SettingError, match=r"guards.envelope.tube: expected .*x, y.* found z"):
        Guard(tube={"z": 1.0}).check_channels(OUTPUTS)
