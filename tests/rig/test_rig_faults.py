"""Faults on demand: what their texts may say, when they strike, and what each one does."""

import numpy as np
import pytest

from drivers.messages import (
    ANSWERS,
    Armed,
    Clear,
    Describe,
    Done,
    FaultCode,
    Finished,
    FinishReason,
    Heartbeat,
    Refusal,
    Resend,
    RigState,
    Samples,
    Start,
    Started,
)
from mock_rig.faults import KINDS, FaultScript, FaultSpec, FaultSpecError
from mock_rig.plant import Disturbance
from mock_rig.runner import Crash
from mock_rig.trial import disturbance


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("drpo@trial=3", "unknown fault 'drpo'"),
        ("drop", "not KEY=NUMBER"),
        ("drop@", "not KEY=NUMBER"),
        ("drop@trial", "not KEY=NUMBER"),
        ("drop@trial=many", "not KEY=NUMBER"),
        ("drop@trial=nan", "not KEY=NUMBER"),
        ("drop@p=inf", "not KEY=NUMBER"),
        ("drop@size=3", "one of trial=, from=, p="),
        ("drop@trial=3,from=4", "one of trial=, from=, p="),
        ("drop@trial=3,colour=4", "one of trial=, from=, p="),
        ("drop@trial=3,trial=4", "given twice"),
        ("drop@trial=1.5", "no trial"),
        ("drop@from=-1", "no trial"),
        ("drop@p=1.5", "no probability"),
        ("drop@trial=3,size=0", "takes 1 to"),
        ("friction@trial=3,size=0", "takes 0.1 to"),
        ("cut_short@trial=3,size=2", "takes 0 to 1"),
    ],
)
def test_a_faults_text_that_says_nothing_is_refused_in_words(text, word):
    with pytest.raises(FaultSpecError, match=word) as caught:
        FaultSpec.parse(text)
    assert str(caught.value).startswith(text)


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_can_be_ordered_with_its_own_default(kind):
    spec = FaultSpec.parse(f"{kind}@trial=4")
    assert spec.size == KINDS[kind].size
    assert KINDS[kind].low <= spec.size <= KINDS[kind].high


def test_faults_strike_in_their_trials_only():
    script = FaultScript(["drop@trial=3", "spike@from=5,size=2", "drop@trial=6,size=4"])
    assert [script.at(k) for k in range(3, 7)] == [
        {"drop": 1},
        {},
        {"spike": 2},
        {"spike": 2, "drop": 4},
    ]
    assert script.since(7, "spike") == 3


def test_a_probability_strikes_as_often_as_it_says_and_the_same_way_for_a_seed():
    struck = [bool(FaultScript(["drop@p=0.2"], 5).at(k)) for k in range(2000)]
    # Binomial: standard deviation sqrt(2000 * 0.2 * 0.8) = 18; five of them.
    assert abs(sum(struck) - 400) < 90
    assert struck == [bool(FaultScript(["drop@p=0.2"], 5).at(k)) for k in range(2000)]
    assert struck != [bool(FaultScript(["drop@p=0.2"], 6).at(k)) for k in range(2000)]


def test_after_a_crash_only_what_was_ordered_for_one_trial_is_forgotten():
    script = FaultScript(["crash@trial=2", "crash@p=0.1", "drop@trial=2"])
    assert script.without_struck("crash").texts == ("crash@p=0.1", "drop@trial=2")


def test_the_plants_faults_reach_the_plant():
    kinds = ["gain", "wrong_sign", "friction", "resonance", "load", "noise"]
    texts = [f"{kind}@trial=0" for kind in kinds] + ["delay@p=1,size=3", "offset@from=0,size=0.5"]
    faults = FaultScript(texts).at(0)
    assert disturbance(faults, 2) == Disturbance(-1.5, 3, 3, 0.5, 0.3, 20, (0.5, 0.0))
    assert disturbance({}, 2) == Disturbance()


# -- the line -------------------------------------------------------------------------------


@pytest.fixture
def spoiled(bench, move):
    """Trial 1 with faults (trial 0 is clean): bench, Finished, what arrived; and clean samples."""

    def make(*faults, **choices):
        rig = bench(faults=[text.replace("@", "@trial=1,", 1) for text in faults], **choices)
        rig.trial(0, *move)
        done, samples = rig.trial(1, *move)
        clean = bench(**choices)
        clean.trial(0, *move)
        return rig, done, samples, clean.trial(1, *move)[1]

    return make


def blocks_of(rig, trial=1):
    return [(one.first, len(one.data)) for one in rig.of(Samples) if one.trial == trial]


def fetch(rig, trial=1):
    """Ask for everything once more; what arrives."""
    rig.heard.clear()
    rig.ask(Resend(trial, ((0, 10**6),)))
    rig.until(Finished)
    return rig.collect(trial, 200, rig.heard)


@pytest.mark.parametrize(("fault", "lost"), [("drop@size=2", 2), ("corrupt@size=3", 3)])
def test_lost_blocks_are_missing_and_come_when_asked_for(spoiled, fault, lost):
    rig, done, samples, clean = spoiled(fault, block_bytes=80)
    assert done.count == 200
    assert len(blocks_of(rig)) == 20 - lost
    assert np.isnan(samples[:, 0]).sum() == 10 * lost
    assert rig.spoiled == (lost if fault.startswith("corrupt") else 0)
    np.testing.assert_array_equal(fetch(rig), clean)


def test_doubled_blocks_come_twice_with_the_same_content(spoiled):
    rig, _, samples, clean = spoiled("duplicate@size=3", block_bytes=80)
    assert len(blocks_of(rig)) == 23
    assert len(set(blocks_of(rig))) == 20
    np.testing.assert_array_equal(samples, clean)


def test_reordered_blocks_all_come_but_not_in_order(spoiled):
    rig, _, samples, clean = spoiled("reorder@size=2", block_bytes=8)
    firsts = [first for first, _ in blocks_of(rig)]
    assert firsts == [1, 0, 3, 2, *range(4, 200)]
    np.testing.assert_array_equal(samples, clean)


def test_finished_overtakes_the_only_block_of_a_trial(bench, move):
    rig = bench(faults=["reorder@trial=0"], block_bytes=65536)
    rig.arm(0, *move)
    rig.start(0)
    rig.until(Finished)
    rig.wait(1)
    kinds = [type(one) for one in rig.heard if isinstance(one, Samples | Finished)]
    assert kinds == [Finished, Samples]


def test_a_late_block_comes_after_the_end_of_its_trial(spoiled):
    rig, _, samples, _ = spoiled("late@size=0.3", block_bytes=80)
    assert np.isnan(samples[:, 0]).sum() == 10
    seen = len(blocks_of(rig))
    rig.wait(350)
    assert len(blocks_of(rig)) == seen + 1


def test_a_late_block_of_an_old_session_never_comes(bench, move):
    rig = bench(faults=["late@trial=0,size=0.3"])
    rig.trial(0, *move)
    rig.hello(session=78)
    rig.heard.clear()
    rig.wait(1000)
    assert not rig.of(Samples)


# -- answers --------------------------------------------------------------------------------


def answers(rig, message, **choices):
    return [one for one in rig.send(message, **choices) if isinstance(one, ANSWERS)]


@pytest.mark.parametrize("fault", ["lost_answer", "corrupt_answer"])
def test_a_lost_answer_comes_when_the_order_is_repeated_and_it_was_carried_out_once(
    bench, move, fault
):
    rig = bench(faults=[f"{fault}@trial=0"], fast=False)
    rig.load(0, move[0])
    rig.load(1, move[1])
    assert answers(rig, rig.arm_order(0, *move)) == []
    assert rig.beat.state == RigState.ARMED
    again = answers(rig, rig.arm_order(0, *move), number=rig.number)
    assert [type(one) for one in again] == [Armed]
    assert rig.spoiled == (fault == "corrupt_answer")


def test_a_doubled_answer_comes_twice(bench, move):
    rig = bench(faults=["double_answer@trial=0"], fast=False)
    rig.load(0, move[0])
    rig.load(1, move[1])
    first, second = answers(rig, rig.arm_order(0, *move))
    assert first == second


def test_a_late_answer_comes_after_its_time(bench, move):
    rig = bench(faults=["late_answer@trial=0,size=0.2"], fast=False)
    rig.load(0, move[0])
    rig.load(1, move[1])
    assert answers(rig, rig.arm_order(0, *move)) == []
    rig.heard.clear()
    rig.wait(199)
    assert not rig.of(Armed)
    rig.wait(2)
    assert len(rig.of(Armed)) == 1


# -- the trial ------------------------------------------------------------------------------


def test_a_missed_start_leaves_the_trial_armed(bench, move):
    rig = bench(faults=["missed_start@trial=0"], fast=False, watchdog_ms=60_000)
    rig.arm(0, *move)
    assert isinstance(rig.start(0), Done)
    rig.wait(5000)
    assert rig.beat.state == RigState.ARMED
    assert not rig.of(Started)


def test_a_rig_that_starts_by_itself_can_miss_that_too(bench, move):
    rig = bench(faults=["missed_start@trial=0"], rig_starts=True, watchdog_ms=60_000)
    rig.arm(0, *move, start=1)
    rig.wait(5000)
    assert rig.beat.state == RigState.ARMED


def test_a_late_start_is_late_by_its_size_and_says_so(bench, move):
    rig = bench(faults=["late_start@trial=0,size=0.05"], fast=False)
    rig.arm(0, *move)
    tick = rig.tick() + 10_000
    rig.ask(Start(0, tick))
    assert rig.until(Finished).start_tick == tick + 50_000


def test_an_offset_shows_in_the_start_state_and_in_the_first_sample(spoiled):
    _, done, samples, clean = spoiled("offset@size=0.3")
    assert done.start_state == pytest.approx((0.3,))
    assert samples[0, 0] - clean[0, 0] == pytest.approx(0.3, abs=1e-6)


def test_a_stuck_sensor_repeats_one_value_from_its_share_on(spoiled):
    _, _, samples, clean = spoiled("stuck@size=0.4")
    np.testing.assert_array_equal(samples[:81], clean[:81])
    assert set(samples[80:, 0]) == {samples[80, 0]}
    assert len(set(clean[80:, 0])) > 100


def test_a_spike_is_one_sample_and_as_large_as_ordered(spoiled):
    _, _, samples, clean = spoiled("spike@size=0.5")
    off = np.flatnonzero(samples[:, 0] != clean[:, 0])
    assert len(off) == 1
    assert samples[off, 0] - clean[off, 0] == pytest.approx(5.0, abs=1e-5)


def test_samples_that_are_no_numbers_come_as_ordered_and_pass_the_checksum(spoiled):
    rig, _, samples, _ = spoiled("nan@size=4")
    assert np.isnan(samples[:, 0]).sum() == 4
    assert np.isfinite(samples[:, 1]).all()
    assert np.isnan(fetch(rig)[:, 0]).sum() == 4


def test_a_noise_burst_lasts_a_tenth_of_the_trial(spoiled):
    _, _, samples, clean = spoiled("noise_burst@size=0.05")
    off = np.flatnonzero(samples[:, 0] != clean[:, 0])
    assert len(off) == off[-1] - off[0] + 1 == 20
    burst = (samples - clean)[off, 0]
    # 20 Gaussian numbers of standard deviation 0.5: chi-squared bounds far outside chance.
    assert 0.25 < burst.std() < 0.85


def test_drift_grows_trial_by_trial(bench, move):
    rig, clean = bench(faults=["drift@from=2,size=0.01"]), bench()
    offs = [rig.trial(k, *move)[1] - clean.trial(k, *move)[1] for k in range(5)]
    np.testing.assert_allclose([off[:, 0].mean() for off in offs], [0, 0, 0.1, 0.2, 0.3], atol=1e-6)


def test_gain_and_noise_reach_the_outputs(spoiled):
    _, _, samples, clean = spoiled("gain@size=2")
    assert np.abs(samples - clean)[:, 0].max() > 0.3
    _, _, samples, clean = spoiled("noise@size=50")
    assert 1e-3 < (samples - clean)[:, 0].std() < 1e-2


def test_a_trial_cut_short_says_so_and_how_many_samples_it_has(spoiled):
    rig, done, samples, clean = spoiled("cut_short@size=0.25")
    assert (done.reason, done.count) == (FinishReason.CUT_SHORT, 50)
    np.testing.assert_array_equal(samples[:50], clean[:50])
    assert np.isnan(samples[50:]).all()
    rig.wait(300)
    assert rig.beat.state == RigState.READY


def test_silence_lasts_its_time_and_then_the_rig_speaks_again(bench, move):
    rig = bench(faults=["silence@trial=0,size=2"], fast=False, watchdog_ms=60_000)
    rig.arm(0, *move)
    rig.start(0)
    rig.wait(21)
    rig.heard.clear()
    rig.wait(1990)
    assert rig.heard == []
    assert rig.send(Describe(0, 0)) == []
    rig.wait(15_000)
    assert rig.beat.state == RigState.READY


def test_a_crash_ends_the_process_in_the_middle_of_the_trial(bench, move):
    rig = bench(faults=["crash@trial=0,size=3"], fast=False)
    rig.arm(0, *move)
    rig.start(0)
    with pytest.raises(Crash) as caught:
        rig.wait(1000)
    assert caught.value.away_s == 3
    assert not rig.of(Finished)


def test_an_emergency_stop_cannot_be_cleared_while_the_button_is_pressed(bench, move):
    rig = bench(faults=["emergency_stop@trial=0,size=5"], fast=False)
    rig.arm(0, *move)
    rig.start(0)
    done = rig.until(Finished)
    assert (done.reason, done.count) == (FinishReason.FAULT, 100)
    assert (rig.beat.state, rig.beat.fault) == (RigState.SAFE, FaultCode.EMERGENCY_STOP)
    refused = rig.ask(Clear("go on"))
    assert refused.code == Refusal.SAFE_STATE
    assert "still pressed" in refused.text
    rig.wait(5000)
    assert isinstance(rig.ask(Clear("go on")), Done)
    rig.until(Heartbeat)
    rig.wait(300)
    assert rig.beat.state == RigState.READY


@pytest.mark.parametrize("fault", ["emergency_stop", "drive_fault"])
def test_a_trial_of_one_sample_can_be_stopped_too(bench, fault):
    rig = bench(faults=[f"{fault}@trial=0"])
    rig.arm(0, [0.0], [0.0])
    rig.start(0)
    assert rig.until(Finished).count == 1
    assert rig.beat.state == RigState.SAFE


def test_a_drive_fault_ends_the_trial_at_its_share_in_the_safe_state(bench, move):
    rig = bench(faults=["drive_fault@trial=0,size=0.3"])
    rig.arm(0, *move)
    rig.start(0)
    done = rig.until(Finished)
    assert (done.reason, done.count) == (FinishReason.FAULT, 60)
    assert rig.beat.fault == FaultCode.DRIVE


def test_faults_and_noise_are_the_same_bits_for_the_same_seed(bench, move):
    faults = [f"{kind}@p=0.5" for kind in ("drop", "spike", "corrupt", "noise_burst", "reorder")]

    def run(seed):
        rig = bench(faults=faults, seed=seed, block_bytes=80)
        return [rig.trial(k, *move)[1].tobytes() for k in range(6)]

    assert run(3) == run(3)
    assert run(3) != run(4)
