"""Box, rate, pins, cap on change and the wire's number format."""

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trialrunner.core.errors import CoreError, SettingError, ShapeError
from trialrunner.core.limits import Limits, quantise
from trialrunner.core.rate_limit import bands, clamp_rate, envelope, envelope_where_needed
from trialrunner.core.trial import Array

METHODS = ("clamp", "envelope", "projection")
TYPES = {"f4": np.float32, "f8": np.float64}


def naive_clamp(goal: Array, rate: float) -> list[float]:
    """The definition, sample by sample."""
    out = [float(goal[0])]
    for wanted in goal[1:].tolist():
        change = wanted - out[-1]
        if change > rate:
            out.append(out[-1] + rate)
        elif change < -rate:
            out.append(out[-1] - rate)
        else:
            out.append(wanted)
    return out


def make_limits(n_samples: int, **changes: Any) -> Limits:
    """Limits of one input: box -1..1, 10/s at 10 ms, nothing else."""
    values: dict[str, Any] = {
        "low": np.array([-1.0]),
        "high": np.array([1.0]),
        "rate_per_s": np.array([10.0]),
        "period_s": 0.01,
        "change_cap": np.array([np.inf]),
        "pin_start": np.array([False]),
        "pin_end": np.array([False]),
    }
    for name, value in changes.items():
        values[name] = np.array([value]) if name in values and name != "period_s" else value
    return Limits(n_samples=n_samples, **values)


@st.composite
def signals(draw: st.DrawFn, max_size: int = 120) -> Array:
    """Walks, noise and steps of very different sizes, (n_samples,)."""
    n_samples = draw(st.integers(1, max_size))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    size = draw(st.sampled_from([1e-9, 1e-3, 0.3, 1.0, 30.0, 1e9]))
    kind = draw(st.sampled_from(["walk", "noise", "steps"]))
    if kind == "walk":
        return size * np.cumsum(rng.normal(size=n_samples)) * 0.1
    if kind == "noise":
        return size * rng.normal(size=n_samples)
    return size * np.repeat(rng.normal(size=n_samples), 7)[:n_samples]


@st.composite
def limits_and_wishes(draw: st.DrawFn) -> tuple[dict[str, Any], Array, Array, float]:
    """Random limits, a wish, a former feedforward, and the share of the soft start."""
    wish = draw(signals())
    former = np.resize(draw(signals()), wish.size)
    low = draw(st.sampled_from([-1.0, -0.3, 0.0, 0.05, -np.inf, -1e6]))
    may_pin = st.booleans() if low <= 0.0 else st.just(False)
    changes = {
        "low": low,
        "high": draw(st.sampled_from([1.0, 0.1, 3.0, np.inf, 1e6])),
        "rate_per_s": draw(st.sampled_from([np.inf, 1e-4, 0.37, 10.0, 123.4])),
        "change_cap": draw(st.sampled_from([np.inf, 1e-3, 0.2, 5.0])),
        "pin_start": draw(may_pin),
        "pin_end": draw(may_pin),
        "method": draw(st.sampled_from(METHODS)),
        "sample_type": draw(st.sampled_from(["f4", "f8"])),
    }
    return changes, wish, former, draw(st.sampled_from([1.0, 0.25, 0.6]))


def assert_rig_accepts(sent: Array, changes: dict[str, Any]) -> None:
    """What a rig checks, in its own arithmetic: box and rate of the table it received."""
    kind = TYPES[changes["sample_type"]]
    table = sent.astype(kind)
    assert np.array_equal(table.astype(np.float64), sent)
    for number in (kind, np.float64):
        values = table.astype(number)
        assert np.all(values >= number(changes["low"]))
        assert np.all(values <= number(changes["high"]))
        rate = number(changes["rate_per_s"]) * number(0.01)
        assert np.all(np.abs(np.diff(values)) <= rate)


@settings(max_examples=200, deadline=None)
@given(limits_and_wishes())
def test_a_rig_in_its_own_arithmetic_finds_box_rate_and_pins_kept(
    case: tuple[dict[str, Any], Array, Array, float],
) -> None:
    """Whatever was wished and sent before, the hard limits hold to the last bit."""
    changes, wish, former, share = case
    limits = make_limits(wish.size, **changes)
    sent = limits.apply(wish[:, None], former[:, None], share).feedforward[:, 0]
    assert_rig_accepts(sent, changes)
    assert not (changes["pin_start"] and sent[0])
    assert not (changes["pin_end"] and sent[-1])
    low, high = limits.box(share)
    assert low[0] <= sent.min()
    assert sent.max() <= high[0]


@settings(max_examples=200, deadline=None)
@given(limits_and_wishes())
def test_what_is_within_limits_comes_back_bit_for_bit(
    case: tuple[dict[str, Any], Array, Array, float],
) -> None:
    """Limiting a second time changes nothing and marks nothing as cut."""
    changes, wish, _, share = case
    limits = make_limits(wish.size, **changes)
    once = limits.apply(wish[:, None], None, share).feedforward
    again = limits.apply(once, once, share)
    assert np.array_equal(again.feedforward, once)
    assert not again.clipped.any()


@settings(max_examples=200, deadline=None)
@given(limits_and_wishes())
def test_the_cap_on_change_holds_against_what_was_sent(
    case: tuple[dict[str, Any], Array, Array, float],
) -> None:
    """The next feedforward differs by at most the cap from one sent under the same limits."""
    changes, wish, former, _ = case
    limits = make_limits(wish.size, **changes)
    sent = limits.apply(former[:, None]).feedforward
    following = limits.apply(wish[:, None], sent).feedforward
    change = np.abs(following - sent).max()
    # A grid that must become coarser for a larger signal rounds the slopes of the former one.
    grid = 2.0**-23 if changes["sample_type"] == "f4" else 2.0**-40
    spare = wish.size * grid * max(np.abs(following).max(), np.abs(sent).max())
    assert change <= changes["change_cap"] + spare


@settings(max_examples=200, deadline=None)
@given(limits_and_wishes())
def test_the_mask_marks_exactly_what_was_changed_by_more_than_rounding(
    case: tuple[dict[str, Any], Array, Array, float],
) -> None:
    """Samples not marked are the wish but for rounding to the wire's numbers."""
    changes, wish, former, share = case
    result = make_limits(wish.size, **changes).apply(wish[:, None], former[:, None], share)
    away = np.abs(result.feedforward - wish[:, None])
    reach = max(np.abs(np.clip(wish, changes["low"], changes["high"])).max(), np.abs(former).max())
    grid = 2.0**-22 if changes["sample_type"] == "f4" else 2.0**-38
    assert np.all(away[~result.clipped] <= grid * reach)
    assert np.all(away[result.clipped] > 0.0)


@settings(max_examples=200, deadline=None)
@given(signals(300), st.sampled_from([0.01, 0.3, 1.0, 7.0]))
def test_the_clamp_is_the_plain_loop_to_the_last_bit(goal: Array, rate: float) -> None:
    """Walking only the limited stretches gives the same numbers as walking all."""
    assert clamp_rate(goal, rate).tolist() == naive_clamp(goal, rate)


def test_the_clamp_walks_stretches_longer_than_its_first_piece() -> None:
    """One step far beyond the rate among ten thousand quiet samples is followed to its end."""
    goal = np.zeros(10_000)
    goal[1234:] = 1.0
    goal[9000:] = -2.0
    assert clamp_rate(goal, 0.001).tolist() == naive_clamp(goal, 0.001)


@pytest.mark.parametrize("seed", range(20))
def test_the_clamp_is_the_plain_loop_where_stretches_touch(seed: int) -> None:
    """Few steps close together in a long quiet signal, some just after another was made up for."""
    rng = np.random.default_rng(seed)
    goal = np.zeros(2000)
    goal[500:540] = rng.integers(-4, 5, 40) / 2.0
    assert clamp_rate(goal, 1.0).tolist() == naive_clamp(goal, 1.0)


@pytest.mark.parametrize("sample_type", ["f4", "f8"])
def test_a_hair_is_left_for_a_rig_that_rounds_rate_and_period(sample_type: str) -> None:
    """Large rates ridden at full swing, where a rounding error of the product would show."""
    swing = np.where(np.arange(20) % 2, 1.0, -1.0)
    for rate in np.random.default_rng(4).uniform(20.0, 199.0, 300):
        changes = {"low": -1.0, "high": 1.0, "rate_per_s": float(rate), "sample_type": sample_type}
        sent = make_limits(20, **changes).apply(swing[:, None]).feedforward[:, 0]
        assert_rig_accepts(sent, changes)
        assert np.abs(np.diff(sent)).max() > 0.009999 * rate


@pytest.mark.parametrize("sample_type", ["f4", "f8"])
def test_box_limits_that_the_wire_cannot_hold_are_rounded_inwards(sample_type: str) -> None:
    """Whichever way the nearest number of the sample type lies."""
    wish = np.array([-9.0, 9.0])
    for low, high in np.random.default_rng(5).uniform(0.1, 2.0, (200, 2)):
        changes = {"low": -low, "high": high, "rate_per_s": np.inf, "sample_type": sample_type}
        sent = make_limits(2, **changes).apply(wish[:, None]).feedforward[:, 0]
        assert_rig_accepts(sent, changes)
        assert np.allclose(sent, [-low, high], rtol=0, atol=1e-6)


def test_the_cap_holds_exactly_against_a_signal_off_the_grid() -> None:
    """A larger next signal has a coarser grid; the rounding of the former one is allowed for."""
    rng = np.random.default_rng(6)
    limits = make_limits(30, rate_per_s=np.inf, change_cap=0.013, sample_type="f4")
    for size in (1e-3, 1e-2, 0.1, 0.9):
        former = quantise(size * rng.uniform(-1.0, 1.0, (30, 1)), "f4")
        sent = limits.apply(rng.normal(size=(30, 1)), former).feedforward
        assert np.abs(sent - former).max() <= 0.013


@settings(max_examples=200, deadline=None)
@given(signals(60), st.sampled_from([0.05, 0.5, 2.0]))
def test_the_bands_are_the_tightest_signals_within_the_rate(goal: Array, rate: float) -> None:
    """They equal the minimum and maximum over all other samples, computed one by one."""
    below, above = bands(goal, rate)
    k = np.arange(goal.size)
    spread = rate * np.abs(k[:, None] - k)
    slack = 1e-12 * (np.abs(goal).max() + rate * goal.size)
    assert np.allclose(below, (goal + spread).min(axis=1), rtol=0, atol=slack)
    assert np.allclose(above, (goal - spread).max(axis=1), rtol=0, atol=slack)


@settings(max_examples=100, deadline=None)
@given(signals(60), st.sampled_from([0.05, 0.5, 2.0]))
def test_no_signal_within_the_rate_is_nearer_than_the_envelope(goal: Array, rate: float) -> None:
    """Its largest distance is half the worst excess of any two samples, a bound for every signal
    within the rate."""
    k = np.arange(goal.size)
    excess = np.abs(goal[:, None] - goal) - rate * np.abs(k[:, None] - k)
    least = max(excess.max(), 0.0) / 2.0
    distance = np.abs(envelope(goal, rate) - goal).max()
    assert distance <= least + 1e-12 * (np.abs(goal).max() + rate * goal.size)


def test_the_envelope_centres_a_ramp_on_the_step_it_replaces() -> None:
    """A step in the middle is met half-way at the step, without delay."""
    goal = np.repeat([0.0, 8.0], 10)
    limited = envelope(goal, 1.0)
    assert np.array_equal(limited - 4.0, -(limited - 4.0)[::-1])


@pytest.mark.parametrize("method", METHODS)
def test_pins_bring_both_ends_to_zero_within_the_rate(method: str) -> None:
    """A constant wish becomes a trapezoid whose flanks are the rate."""
    limits = make_limits(101, pin_start=True, pin_end=True, method=method, low=-1.0, high=1.0)
    sent = limits.apply(np.full((101, 1), 0.9)).feedforward[:, 0]
    expected = np.minimum(0.9, 0.1 * np.minimum(np.arange(101), np.arange(101)[::-1]))
    assert np.allclose(sent, expected, atol=1e-9)


def test_hard_limits_beat_the_cap_when_they_became_tighter() -> None:
    """A feedforward sent under wider limits comes inside at once, further than the cap."""
    limits = make_limits(50, high=0.5, change_cap=0.01)
    former = np.full((50, 1), 2.0)
    sent = limits.apply(former, former).feedforward
    assert np.allclose(sent, 0.5)
    assert sent.max() <= 0.5


def test_a_box_that_left_the_former_feedforward_behind_is_entered_on_the_wires_numbers() -> None:
    """From zero into a box that begins at ten, a cap of 0.1 apart: still float32 numbers."""
    changes = {"low": 10.0, "high": 20.0, "change_cap": 0.1, "sample_type": "f4"}
    limits = make_limits(40, **changes)
    sent = limits.apply(np.full((40, 1), 30.0), np.zeros((40, 1))).feedforward[:, 0]
    assert np.allclose(sent, 10.1, rtol=0, atol=1e-5)
    assert_rig_accepts(sent, {**changes, "rate_per_s": 10.0})


def test_the_soft_start_scales_the_box_about_rest() -> None:
    """A quarter of the way from zero, or from the nearest allowed value to zero."""
    low, high = make_limits(5, low=-2.0, high=4.0).box(0.25)
    assert (low[0], high[0]) == (-0.5, 1.0)
    low, high = make_limits(5, low=10.0, high=18.0).box(0.25)
    assert (low[0], high[0]) == (10.0, 12.0)


def test_only_the_channel_beyond_its_limits_is_touched() -> None:
    """The other channel keeps every bit of its wish."""
    limits = Limits(
        low=np.array([-1.0, -1.0]),
        high=np.array([1.0, 1.0]),
        rate_per_s=np.array([np.inf, np.inf]),
        period_s=0.01,
        n_samples=100,
        change_cap=np.array([np.inf, np.inf]),
        pin_start=np.array([False, False]),
        pin_end=np.array([False, False]),
    )
    wish = np.random.default_rng(1).uniform(-0.9, 0.9, (100, 2))
    wish[40, 0] = 1.5
    result = limits.apply(wish)
    assert np.array_equal(result.feedforward[:, 1], wish[:, 1])
    assert np.flatnonzero(result.clipped).tolist() == [80]


def test_a_loose_box_does_not_coarsen_a_small_signal() -> None:
    """The grid follows the signal, not the box: a rate-limited microvolt stays a microvolt."""
    limits = make_limits(200, low=-1e6, high=1e6, rate_per_s=1e-5, sample_type="f4")
    wish = 1e-6 * np.sign(np.sin(np.arange(200) / 20.0))[:, None]
    sent = limits.apply(wish).feedforward
    assert np.abs(np.diff(sent[:, 0])).max() > 0.99e-7
    assert np.abs(sent - wish).min() < 1e-12


@pytest.mark.parametrize("sample_type", ["f4", "f8"])
def test_quantise_gives_the_nearest_number_of_the_sample_type(sample_type: str) -> None:
    """What is sent equals what the rig will hold."""
    values = np.random.default_rng(2).normal(size=1000)
    assert np.array_equal(quantise(values, sample_type), values.astype(TYPES[sample_type]))


def test_only_going_further_out_of_the_box_pushes_out() -> None:
    """At the upper limit upwards counts, downwards and inside it does not."""
    limits = make_limits(4)
    feedforward = np.array([[1.0], [1.0], [-1.0], [0.5]])
    increment = np.array([[0.1], [-0.1], [-0.1], [0.1]])
    assert limits.pushes_out(feedforward, increment)[:, 0].tolist() == [True, False, True, False]


Build = Callable[[], object]


@pytest.mark.parametrize(
    ("build", "text"),
    [
        (lambda: make_limits(5, low=2.0, high=3.0, pin_end=True), "need zero within"),
        (lambda: make_limits(5, low=0.1, high=0.1, sample_type="f4"), "no number of sample type"),
        (lambda: make_limits(5, low=1.0, high=-1.0), "no number of sample type"),
    ],
)
def test_limits_that_leave_nothing_to_send_are_refused(build: Build, text: str) -> None:
    """The text says what to change."""
    with pytest.raises(SettingError, match=text):
        build()


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_a_wish_that_is_not_finite_is_refused(bad: float) -> None:
    """It is an error of the law, not something to clip."""
    wish = np.zeros((10, 1))
    wish[3] = bad
    with pytest.raises(CoreError, match="1 samples that are not"):
        make_limits(10).apply(wish)


def test_a_wish_of_the_wrong_shape_is_refused() -> None:
    """Expected and found shapes are named."""
    with pytest.raises(ShapeError, match=r"expected shape \(10, 1\), found \(9, 1\)"):
        make_limits(10).apply(np.zeros((9, 1)))


@given(signals(), st.sampled_from([0.003, 0.05, 0.7, 20.0]), st.integers(0, 2))
def test_the_envelope_round_the_breaks_is_the_envelope_of_the_whole(
    goal: Array, share: float, quiet: int
) -> None:
    """Whole numbers, as the limits use it; with long stretches that need nothing."""
    rest = np.zeros(quiet * 500)
    goal = np.rint(np.clip(np.concatenate((rest, goal, rest)), -1e6, 1e6) * 1e3)
    rate = max(1.0, np.floor(share * (np.max(np.abs(goal)) + 1.0)))
    np.testing.assert_array_equal(envelope_where_needed(goal, rate), envelope(goal, rate))
