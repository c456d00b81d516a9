"""Integrity: whole trials with believable readings pass, everything else is void with a reason."""

import re
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from trialrunner.core.errors import SettingError
from trialrunner.core.guards import GuardContext
from trialrunner.core.guards.integrity import Integrity
from trialrunner.core.guards.readings import find_spike, find_stuck, resolution
from trialrunner.core.settings import OutputChannel
from trialrunner.core.trial import GuardResult, Level, Trial

Make = Callable[..., Any]


def judge(trial: Trial, context: GuardContext, **settings: Any) -> GuardResult:
    return Integrity(**settings).judge(trial, context, {})


def with_output(trial: Trial, sample: int | slice, value: Any) -> Trial:
    output = trial.output.copy()
    output[sample, 0] = value
    return replace(trial, output=output)


def assert_void(result: GuardResult, *words: str) -> None:
    """Void, of level WARN, with number, limit and the given words in one sentence."""
    verdict = result.verdict
    assert verdict.void
    assert verdict.level is Level.WARN
    assert verdict.guard == "integrity"
    for word in (*words, f"{verdict.value:.4g}", f"{verdict.limit:.4g}"):
        assert word in verdict.reason
    assert ". " not in re.sub(r"\d\.\d", "", verdict.reason)


@pytest.mark.parametrize("seed", range(20))
def test_a_healthy_noisy_trial_passes(make_trial: Make, make_context: Make, seed: int) -> None:
    """White noise on a smooth move is no fault."""
    assert judge(make_trial(seed), make_context()).verdict.level is Level.PASS


def test_missing_samples_void(make_trial: Make, make_context: Make) -> None:
    """Samples that did not arrive are counted and the first is named."""
    trial = with_output(make_trial(), slice(30, 33), np.nan)
    assert_void(judge(trial, make_context()), "3 of 400 samples", "output x", "first sample 30")


def test_infinity_in_the_data_voids(make_trial: Make, make_context: Make) -> None:
    """An infinite reading is as bad as a missing one."""
    assert_void(judge(with_output(make_trial(), 5, np.inf), make_context()), "1 of 400")


def test_a_trial_cut_short_voids(make_trial: Make, make_context: Make) -> None:
    """Any finish reason but complete voids, with the rig's word for it."""
    trial = make_trial(finish="cut_short", count=123)
    assert_void(judge(trial, make_context()), "cut short", "123 of 400")


def test_a_wrong_count_voids(make_trial: Make, make_context: Make) -> None:
    """The rig must have taken exactly the samples ordered."""
    assert_void(judge(make_trial(count=399), make_context()), "399", "400")


def test_a_wrong_table_checksum_voids(make_trial: Make, make_context: Make) -> None:
    """A trial that played something else than was sent must not teach."""
    assert_void(judge(make_trial(played_ok=False), make_context()), "checksum")


@pytest.mark.parametrize(("value", "word"), [(51.0, "above"), (-50.5, "below")])
def test_a_reading_out_of_range_voids(
    make_trial: Make, make_context: Make, value: float, word: str
) -> None:
    """A reading outside the channel's range is not believed, and names its side."""
    result = judge(with_output(make_trial(), 200, value), make_context())
    assert_void(result, word, "sample 200", "mm")


def test_a_reading_at_the_end_of_the_range_is_believed(
    make_trial: Make, make_context: Make, move: Any
) -> None:
    """Only beyond it is outside."""
    channel = replace(make_context().outputs[0], low=0.0, high=10.0)
    context = make_context(outputs=(channel,))
    assert judge(make_trial(output=move.copy()), context).verdict.level is Level.PASS


def test_a_trial_of_no_samples_voids(make_trial: Make, make_context: Make) -> None:
    """A count of 0 is a count, not "all"."""
    assert_void(judge(make_trial(count=0), make_context()), "took 0 samples")


@pytest.mark.parametrize("sample", [2, 40, 120, 200, 397])
@pytest.mark.parametrize("sign", [-1.0, 1.0])
def test_a_single_sample_spike_voids(
    make_trial: Make, make_context: Make, sample: int, sign: float
) -> None:
    """One sample that leaves and comes back is found at rest and on the move."""
    trial = make_trial()
    trial = with_output(trial, sample, trial.output[sample, 0] + sign * 2.0)
    assert_void(judge(trial, make_context()), "spike", f"sample {sample}")


def test_a_spike_smaller_than_the_motion_of_a_sample_is_found(
    make_trial: Make, make_context: Make
) -> None:
    """At full speed the axis moves 0.2 mm a sample; a spike of as much stands out all the same."""
    trial = make_trial()
    assert trial.reference[121, 0] - trial.reference[120, 0] > 0.19
    trial = with_output(trial, slice(None), np.round(trial.reference[:, 0], 2))
    assert judge(trial, make_context()).verdict.level is Level.PASS
    trial = with_output(trial, 120, trial.output[120, 0] + 0.2)
    assert_void(judge(trial, make_context()), "spike", "sample 120")


def test_several_spikes_do_not_hide_each_other(make_trial: Make, make_context: Make) -> None:
    """A burst of spikes is found although each is another's neighbour."""
    trial = make_trial()
    y = trial.output[:, 0].copy()
    y[200:220:4] += 3.0
    assert_void(judge(with_output(trial, slice(None), y), make_context()), "spike")


def test_a_jump_beyond_its_stated_limit_voids(make_trial: Make, make_context: Make) -> None:
    """A step that stays is no spike; with a limit of its own it is not believed."""
    trial = make_trial()
    y = trial.output[:, 0].copy()
    y[250:] += 5.0
    trial = with_output(trial, slice(None), y)
    assert judge(trial, make_context()).verdict.level is Level.PASS
    result = judge(trial, make_context(), jump_limits={"x": 2.0})
    assert_void(result, "jumps", "sample 250", "2 mm")


def test_a_limit_for_an_unknown_output_is_refused(make_context: Make) -> None:
    """A misspelt channel name is an error, not a limit that never acts."""
    with pytest.raises(SettingError, match=r"jump_limits.*x.*found y"):
        Integrity(jump_limits={"y": 1.0}).check_channels(make_context().outputs)


@pytest.mark.parametrize("start", [0, 100, 150, 250])
def test_a_stuck_sensor_voids(make_trial: Make, make_context: Make, start: int) -> None:
    """Readings that stay exactly the same to the end while the reference moves."""
    trial = make_trial()
    trial = with_output(trial, slice(start, None), trial.output[start, 0])
    result = judge(trial, make_context())
    assert_void(result, "stuck", f"samples {start} to 399")


def test_dwell_at_rest_is_not_stuck(make_trial: Make, make_context: Make, move: Any) -> None:
    """Without noise the readings of a dwell are equal for long, and that is right."""
    assert judge(make_trial(output=move.copy()), make_context()).verdict.level is Level.PASS


def chamber(resolution_k: float, delay: int) -> tuple[Any, Any]:
    """Slow ramp of 40 K over 1000 samples and a lagging, coarsely quantised reading of it."""
    reference = np.interp(np.arange(1400), [50, 1050], [20.0, 60.0])
    late = np.concatenate([np.full(delay, 20.0), reference])[:1400]
    return reference, np.round(late / resolution_k) * resolution_k


@pytest.mark.parametrize(("resolution_k", "delay"), [(0.1, 120), (0.5, 250), (2.0, 10)])
def test_a_slow_coarse_chamber_is_not_stuck(resolution_k: float, delay: int) -> None:
    """Dead time of a quarter of the ramp and 50 equal readings in a row are healthy."""
    reference, output = chamber(resolution_k, delay)
    assert find_stuck(output, reference, 0.3, 20) is None
    assert find_spike(output, 10.0) is None


def test_a_reference_within_the_sensors_steps_is_not_stuck() -> None:
    """A reference that moves by less than a few steps of the sensor need not show."""
    reference = 0.9 * np.sin(np.linspace(0, 6, 600))
    output = np.where(np.arange(600) == 300, 0.5, 0.0)
    assert find_stuck(output, reference, 0.3, 20) is None


def test_a_rig_at_rest_without_feedforward_is_warned_of_not_voided(
    make_trial: Make, make_context: Make
) -> None:
    """An open-loop rig stands still in its first trial; a dead sensor looks the same once."""
    still = make_trial(output=np.zeros((400, 1)), feedforward=np.zeros((400, 1)))
    verdict = judge(still, make_context()).verdict
    assert (verdict.level, verdict.void) == (Level.WARN, False)
    assert "did not change at all" in verdict.reason
    assert_void(judge(replace(still, feedforward=np.full((400, 1), 0.1)), make_context()), "stuck")


def test_standing_still_is_right_where_the_reference_does(
    make_trial: Make, make_context: Make
) -> None:
    """A constant reference asks for no motion, with or without feedforward."""
    flat = np.zeros((400, 1))
    for feedforward in (flat, flat + 0.1):
        trial = make_trial(reference=flat, output=flat, feedforward=feedforward)
        assert judge(trial, make_context()).verdict.level is Level.PASS


def test_the_check_for_stuck_sensors_can_be_switched_off(
    make_trial: Make, make_context: Make
) -> None:
    """stuck_share = 1: neither voided nor warned of, as for a rig with a very long dead time."""
    for feedforward in (np.zeros((400, 1)), np.full((400, 1), 0.1)):
        trial = make_trial(output=np.zeros((400, 1)), feedforward=feedforward)
        result = judge(trial, make_context(), stuck_share=1.0)
        assert result.verdict.level is Level.PASS


def test_a_broken_auxiliary_channel_is_only_warned_of(make_trial: Make, make_context: Make) -> None:
    """Auxiliary channels do not teach, so they cannot void."""
    verdict = judge(make_trial(auxiliary=np.full((400, 1), np.nan)), make_context()).verdict
    assert (verdict.level, verdict.void) == (Level.WARN, False)
    assert "400" in verdict.reason
    assert (verdict.value, verdict.limit) == (400.0, 0.0)


@pytest.mark.parametrize("seed", range(5))
@pytest.mark.parametrize(
    "kind",
    [
        "triangle",
        "corner",
        "step",
        "coarse encoder",
        "vibration on the move",
        "bang-bang",
        "held samples",
    ],
)
def test_normal_moves_have_no_spikes(kind: str, seed: int) -> None:
    """Sharp but healthy signals: nothing stands out for one sample."""
    rng = np.random.default_rng(seed)
    n = np.arange(2000)
    smooth = 40.0 * np.sin(2 * np.pi * n / 1000)
    moving = (n > 700) & (n < 1300)
    signals = {
        "triangle": 0.3 * np.abs((n % 200) - 100.0),
        "corner": np.where(n < 1000, 0.5 * n, 500.0 - 0.2 * (n - 1000)),
        "step": np.where(n > 900, 30.0, 0.0) + 0.01 * rng.standard_normal(2000),
        "coarse encoder": np.round(smooth + 0.2 * rng.standard_normal(2000)),
        "vibration on the move": moving * rng.standard_normal(2000),
        "bang-bang": np.cumsum(np.cumsum(np.where((n // 250) % 2, -1e-3, 1e-3))),
        "held samples": smooth[n - n % 10],
    }
    assert find_spike(signals[kind], 10.0) is None


def test_short_trials_are_judged_without_fuss() -> None:
    """A trial of a few samples has no spike and is never stuck."""
    for n_samples in range(1, 8):
        y = np.arange(float(n_samples)) % 2
        assert find_spike(y, 10.0) is None
        assert find_stuck(np.zeros(n_samples), y, 0.3, 20) is None


def test_resolution_is_the_smallest_change() -> None:
    """The step of a quantised reading, and 0 for one that never changes."""
    assert resolution(np.array([0.0, 0.5, 0.5, 2.0])) == 0.5
    assert resolution(np.zeros(4)) == 0.0


def test_the_broken_output_of_two_is_named(make_trial: Make, make_context: Make, move: Any) -> None:
    """With several outputs the reason names the one at fault."""
    two = np.hstack([move, move])
    trial = make_trial(reference=two, start_state=two[0])
    output = trial.output.copy()
    output[100:, 1] = output[100, 1]
    y = OutputChannel(name="y", unit="mm", low=-50.0, high=50.0)
    context = make_context(outputs=(*make_context().outputs, y))
    assert_void(judge(replace(trial, output=output), context), "output y is stuck")
