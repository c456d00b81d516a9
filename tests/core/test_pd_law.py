"""P and PD laws."""

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trialrunner.core.errors import SettingError
from trialrunner.core.laws import LawContext, Step
from trialrunner.core.laws.pd import PdSettings, slope
from trialrunner.core.trial import Array, Purpose, Trial

PERIOD_S = 0.002


def make_context(n_samples: int = 50, n_inputs: int = 1, n_outputs: int = 1) -> LawContext:
    return LawContext(
        period_s=PERIOD_S,
        n_samples=n_samples,
        n_inputs=n_inputs,
        n_outputs=n_outputs,
        reference=np.zeros((n_samples, n_outputs)),
        low=np.full(n_inputs, -1.0),
        high=np.full(n_inputs, 1.0),
        rate_per_s=np.full(n_inputs, math.inf),
    )


def make_trial(feedforward: Array, error: Array) -> Trial:
    """A trial whose error is exactly the one given."""
    return Trial(
        index=0,
        purpose=Purpose.LEARN,
        feedforward=feedforward,
        reference=error,
        output=np.zeros_like(error),
        auxiliary=np.zeros((len(error), 0)),
        limited=np.zeros(feedforward.shape, dtype=bool),
        start_state=np.zeros(error.shape[1]),
    )


def update(law_settings: PdSettings, feedforward: Array, error: Array, gain: float = 1.0) -> Step:
    context = make_context(len(error), feedforward.shape[1], error.shape[1])
    return law_settings.build(context).update(make_trial(feedforward, error), gain, {}, {})


def naive_update(pairs: list[tuple[Any, ...]], feedforward: Array, error: Array) -> Array:
    """Sample by sample; each pair is (input, output, proportional, derivative, lead)."""
    n_samples = len(error)
    out = feedforward.copy()
    for i, o, proportional, derivative, lead in pairs:
        for k in range(n_samples):
            ahead = min(k + lead, n_samples - 1)
            before, after = max(ahead - 1, 0), min(ahead + 1, n_samples - 1)
            rising = (error[after, o] - error[before, o]) / (2 * PERIOD_S)
            out[k, i] += proportional * error[ahead, o] + derivative * rising
    return out


def noise(seed: int, *shape: int) -> Array:
    return np.random.default_rng(seed).normal(size=shape)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 40), st.integers(1, 3), st.integers(1, 3))
def test_the_law_is_its_definition_sample_by_sample(
    seed: int, n_samples: int, n_inputs: int, n_outputs: int
) -> None:
    """For any pairing, gains and leads, against a plain loop."""
    rng = np.random.default_rng(seed)
    every = [(i, o) for i in range(n_inputs) for o in range(n_outputs)]
    chosen = [every[i] for i in rng.permutation(len(every))[: rng.integers(1, len(every) + 1)]]
    proportional, derivative = rng.normal(size=(2, len(chosen)))
    leads = rng.integers(0, n_samples, len(chosen)).tolist()
    law = PdSettings(
        pairs=tuple(chosen),
        proportional=tuple(proportional),
        derivative=tuple(0.01 * derivative),
        lead_samples=tuple(leads),
    )
    feedforward, error = rng.normal(size=(n_samples, n_inputs)), noise(seed, n_samples, n_outputs)
    terms = [
        (i, o, p, 0.01 * d, lead)
        for (i, o), p, d, lead in zip(chosen, proportional, derivative, leads, strict=True)
    ]
    expected = naive_update(terms, feedforward, error)
    assert np.allclose(
        update(law, feedforward, error).feedforward, expected, rtol=1e-12, atol=1e-12
    )


def test_one_number_stands_for_all_pairs() -> None:
    """A list of equal numbers gives the same bits; input i is paired with output i."""
    feedforward, error = noise(1, 30, 2), noise(2, 30, 2)
    short = PdSettings(proportional=0.4, derivative=0.01, lead_samples=3)
    long = PdSettings(
        pairs=((0, 0), (1, 1)),
        proportional=(0.4, 0.4),
        derivative=(0.01, 0.01),
        lead_samples=(3, 3),
    )
    first, second = (update(law, feedforward, error).feedforward for law in (short, long))
    assert np.array_equal(first, second)


def test_the_gain_scales_what_is_learned_not_what_was_sent() -> None:
    """Half the gain is half the step from the feedforward as sent; zero gain repeats it."""
    feedforward, error = noise(3, 30, 1), noise(4, 30, 1)
    law = PdSettings(proportional=0.7, derivative=0.02)
    full = update(law, feedforward, error).feedforward - feedforward
    half = update(law, feedforward, error, gain=0.5).feedforward - feedforward
    assert np.allclose(half, 0.5 * full, rtol=1e-12, atol=1e-14)
    assert np.array_equal(update(law, feedforward, error, gain=0.0).feedforward, feedforward)


def test_without_error_nothing_is_learned() -> None:
    """The feedforward comes back bit for bit, as a new array."""
    feedforward = noise(5, 30, 1)
    step = update(PdSettings(proportional=1.0), feedforward, np.zeros((30, 1)))
    assert np.array_equal(step.feedforward, feedforward)
    assert step.feedforward is not feedforward
    assert step.purpose is Purpose.LEARN


def test_a_lead_takes_the_error_from_ahead_and_holds_the_last() -> None:
    """An error of 0, 1, 2, ... with a lead of 2 teaches 2, 3, ... and the last value to the end."""
    error = np.arange(6.0)[:, None]
    step = update(PdSettings(proportional=1.0, lead_samples=2), np.zeros((6, 1)), error)
    assert step.feedforward[:, 0].tolist() == [2.0, 3.0, 4.0, 5.0, 5.0, 5.0]


def test_the_slope_has_no_phase_error() -> None:
    """The slope of a cosine is minus its sine, times sin(w T)/T, at every sample."""
    n_samples, number = 128, 9
    angle = np.pi * number * (np.arange(n_samples) + 0.5) / n_samples
    step = np.pi * number / n_samples
    expected = -np.sin(step) / PERIOD_S * np.sin(angle)
    assert np.allclose(slope(np.cos(angle), PERIOD_S), expected, rtol=0, atol=1e-9)


@settings(max_examples=20, deadline=None)
@given(st.integers(1, 60))
def test_the_slope_never_exceeds_a_norm_of_one_over_the_period(n_samples: int) -> None:
    """As an operator, also at the ends."""
    matrix = np.array([slope(row, PERIOD_S) for row in np.eye(n_samples)])
    assert np.linalg.norm(matrix, 2) <= (1.0 + 1e-12) / PERIOD_S


def test_the_derivative_filter_lowers_the_derivative_only() -> None:
    """At 1/(2 pi time constant) the derivative is down by 3 dB; the proportional part is not."""
    n_samples, number = 400, 20
    angle = np.pi * number * (np.arange(n_samples) + 0.5) / n_samples
    error = np.cos(angle)[:, None]
    tau_s = n_samples * PERIOD_S / (np.pi * number)
    flat = np.zeros((n_samples, 1))
    plain = update(PdSettings(proportional=0.0, derivative=0.1), flat, error).feedforward
    smooth = PdSettings(proportional=0.0, derivative=0.1, derivative_filter_s=tau_s)
    both = PdSettings(proportional=0.5, derivative=0.1, derivative_filter_s=tau_s)
    lowered = update(smooth, flat, error).feedforward
    assert np.allclose(lowered, plain / math.sqrt(2.0), rtol=0, atol=1e-12)
    assert np.allclose(update(both, flat, error).feedforward, lowered + 0.5 * error, atol=1e-12)


@pytest.mark.parametrize(
    ("given", "channels", "text"),
    [
        ({}, (2, 1), "law.pairs: with 2 inputs and 1 outputs expected a list of .* found none"),
        ({"pairs": ((0, 1),)}, (1, 1), r"law.pairs: .* output below 1, found \[0, 1\]"),
        ({"pairs": ((0, 0), (0, 0))}, (1, 1), "law.pairs: expected each pair once"),
        ({"proportional": (1.0, 2.0)}, (1, 1), "law.proportional: .* the 1 pairs, found 2 numbers"),
        ({"derivative": ()}, (1, 1), "law.derivative: .* found 0 numbers"),
        ({"lead_samples": 50}, (1, 1), "law.lead_samples: expected 0 to 49 .* found 50"),
        ({"proportional": 0.0}, (1, 1), "found only zeros"),
    ],
)
def test_settings_that_do_not_fit_are_refused(
    given: dict[str, Any], channels: tuple[int, int], text: str
) -> None:
    """The text names the setting, what was expected and what was found."""
    values: dict[str, Any] = {"proportional": 1.0, **given}
    with pytest.raises(SettingError, match=text):
        PdSettings(**values).build(make_context(50, *channels))
