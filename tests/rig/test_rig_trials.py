"""Trials: armed, started, run, ended, asked for again; and what stops them."""

import numpy as np
import pytest

from drivers.messages import (
    Alive,
    Armed,
    Clear,
    Disarm,
    Done,
    Fault,
    FaultCode,
    Finished,
    FinishReason,
    Halt,
    Heartbeat,
    Refusal,
    Refused,
    Resend,
    RigState,
    Samples,
    Start,
    Started,
    StartMode,
)
from drivers.tables import table_crc
from mock_rig.clock import RigClock


def test_a_trial_starts_at_the_ordered_tick_and_ends_whole(bench, move):
    rig = bench(fast=False)
    armed = rig.arm(5, *move)
    assert isinstance(armed, Armed)
    assert armed.trial == 5
    assert armed.start_state == (move[1][0],)
    tick = rig.tick() + 40_000
    assert isinstance(rig.ask(Start(5, tick)), Done)
    rig.wait(39)
    assert rig.beat.state == RigState.ARMED
    done = rig.until(Finished)
    assert rig.of(Started) == [Started(5, tick)]
    samples = rig.collect(5, 200, rig.heard)
    assert done == Finished(
        5,
        FinishReason.COMPLETE,
        200,
        tick,
        table_crc(samples.tobytes()),
        table_crc(rig.rows(move[0]).tobytes()),
        armed.start_state,
    )


def test_states_pass_in_order_and_each_change_is_told_at_once(bench, move):
    rig = bench(fast=False)
    rig.trial(0, *move)
    rig.wait(500)
    states = [one.state for one in rig.of(Heartbeat)]
    changes = [b for a, b in zip([None, *states], states, strict=False) if a != b]
    assert changes == [
        RigState.READY,
        RigState.ARMED,
        RigState.RUNNING,
        RigState.RETURNING,
        RigState.READY,
    ]


@pytest.mark.parametrize("sample_type", ["f4", "f8"])
def test_jumping_time_and_the_hosts_time_give_the_same_samples(bench, move, sample_type):
    made = [bench(fast=fast, sample_type=sample_type) for fast in (True, False)]
    trials = [[rig.trial(k, *move) for k in range(2)] for rig in made]
    for (done, samples), (other, others) in zip(*trials, strict=True):
        np.testing.assert_array_equal(samples, others)
        assert done.sample_crc == other.sample_crc
        assert samples.dtype.itemsize == int(sample_type[1])


def test_jumping_time_takes_no_longer_than_the_line(bench, move):
    rig = bench(fast=True)
    rig.arm(0, *move)
    began = rig.now_ns
    rig.start(0, ahead_ms=500)
    rig.until(Finished)
    assert rig.now_ns - began < 50_000_000
    assert rig.tick() > began // 1000 + 500_000 + 200_000


def test_a_full_line_holds_jumping_time_back_and_loses_nothing(bench, move):
    rig = bench(fast=True)
    rig.arm(0, *move)
    rig.start(0)
    rig.wait(300, room=False)
    assert not rig.of(Samples)
    rig.until(Finished)
    assert np.isfinite(rig.collect(0, 200, rig.heard)).all()


def test_a_line_that_is_full_does_not_stop_the_hosts_time(bench, move):
    rig = bench(fast=False)
    rig.arm(0, *move)
    rig.start(0)
    rig.wait(300, room=False)
    assert rig.of(Finished)[-1].count == 200


@pytest.mark.parametrize("fast", [True, False])
def test_a_halt_in_a_trial_reaches_the_safe_state_before_another_sample(bench, move, fast):
    rig = bench(fast=fast)
    rig.arm(0, *move)
    rig.start(0)
    while rig.beat.state != RigState.RUNNING:
        rig.wait(0.1)
    rig.wait(0.1)
    rig.send(Halt(1, "smoke"))
    assert rig.beat.state == RigState.SAFE
    assert rig.beat.fault == FaultCode.HALTED
    done = rig.of(Finished)[-1]
    assert done.reason == FinishReason.HALTED
    assert 0 < done.count < 200
    rig.wait(400)
    assert len(rig.of(Finished)) == 1
    assert rig.beat.state == RigState.SAFE
    assert np.isfinite(rig.collect(0, 200, rig.heard)[: done.count]).all()


def test_every_halt_is_answered_by_a_heartbeat_because_one_may_be_lost(bench):
    rig = bench()
    rig.send(Halt(2, "first"))
    beats = [one for one in rig.send(Halt(2, "again")) if isinstance(one, Heartbeat)]
    assert [one.state for one in beats] == [RigState.SAFE]
    assert len(rig.of(Fault)) == 1


def test_the_safe_state_holds_until_a_person_clears_it(bench, move):
    rig = bench()
    rig.send(Halt(1, "smoke"))
    assert rig.arm(0, *move).code == Refusal.SAFE_STATE
    rig.wait(5000)
    assert rig.beat.state == RigState.SAFE
    assert isinstance(rig.ask(Clear("looked at it")), Done)
    rig.wait(300)
    assert rig.beat.state == RigState.READY
    assert rig.beat.fault == FaultCode.NONE
    assert rig.trial(1, *move)[0].reason == FinishReason.COMPLETE


def test_a_new_session_does_not_lift_the_safe_state(bench):
    rig = bench()
    rig.send(Halt(1, "smoke"))
    rig.hello(session=500)
    rig.wait(1000)
    assert rig.beat.state == RigState.SAFE


def test_a_daemon_that_falls_silent_in_a_trial_brings_the_rig_to_its_safe_state(bench, move):
    rig = bench(fast=False, watchdog_ms=100)
    rig.arm(0, *move)
    rig.start(0)
    rig.wait(95)
    assert rig.beat.state == RigState.RUNNING
    rig.wait(10)
    assert rig.beat.state == RigState.SAFE
    assert rig.beat.fault == FaultCode.WATCHDOG
    assert rig.of(Finished)[-1].reason == FinishReason.HALTED
    assert rig.of(Fault)[-1].code == FaultCode.WATCHDOG


def test_the_watchdog_hears_any_frame_of_the_session_and_no_other(bench, move):
    rig = bench(fast=False, watchdog_ms=100)
    rig.arm(0, *move)
    for _ in range(10):
        rig.wait(80)
        rig.send(Alive())
    assert rig.beat.state == RigState.ARMED
    rig.wait(60)
    rig.put(rig.frame(Alive(), session=5))
    rig.put(b"\x00garbage that is long enough")
    rig.wait(60)
    assert rig.beat.state == RigState.SAFE


def test_the_watchdog_sleeps_while_nothing_is_armed(bench):
    rig = bench(watchdog_ms=100)
    rig.wait(5000)
    assert rig.beat.state == RigState.READY


def test_a_start_in_the_past_or_absurdly_far_ahead_is_refused(bench, move):
    rig = bench()
    rig.arm(0, *move)
    assert rig.ask(Start(0, rig.tick())).code == Refusal.TOO_LATE
    assert rig.ask(Start(0, 2**64 - 1)).code == Refusal.MALFORMED
    assert rig.ask(Start(1, rig.tick() + 1000)).code == Refusal.WRONG_TRIAL
    assert isinstance(rig.start(0), Done)


def test_orders_that_do_not_fit_the_state_are_refused(bench, move):
    rig = bench(fast=False)
    assert rig.ask(Start(0, rig.tick() + 1000)).code == Refusal.WRONG_TRIAL
    assert rig.ask(Resend(0, ())).code == Refusal.NOT_KEPT
    assert rig.arm(0, *move, start=StartMode.RIG).code == Refusal.UNSUPPORTED
    assert rig.ask(rig.arm_order(0, *move, start=77)).code == Refusal.UNSUPPORTED
    assert isinstance(rig.ask(rig.arm_order(0, *move)), Armed)
    assert rig.ask(rig.arm_order(0, *move)).code == Refusal.NOT_READY
    rig.start(0)
    rig.wait(100)
    assert rig.ask(Disarm(0)).code == Refusal.NOT_READY
    assert rig.ask(Resend(0, ())).code == Refusal.NOT_KEPT
    rig.until(Finished)
    assert rig.ask(rig.arm_order(1, *move)).code == Refusal.NOT_READY


def test_an_armed_trial_can_be_forgotten_and_armed_again(bench, move):
    rig = bench()
    rig.arm(0, *move)
    assert isinstance(rig.ask(Disarm(0)), Done)
    assert rig.beat.state == RigState.READY
    assert isinstance(rig.ask(Disarm(0)), Done)
    assert rig.ask(Start(0, rig.tick() + 1000)).code == Refusal.WRONG_TRIAL
    assert rig.ask(Resend(0, ())).code == Refusal.NOT_KEPT
    rig.heard.clear()
    rig.wait(500)
    assert (rig.beat.trial, rig.beat.state) == (0, RigState.READY)
    assert not rig.of(Started)
    done, _ = rig.trial(0, *move)
    assert done.reason == FinishReason.COMPLETE


@pytest.mark.parametrize("fast", [True, False])
def test_a_rig_that_starts_by_itself_reports_the_tick(bench, move, fast):
    rig = bench(fast=fast, rig_starts=True, rig_start_s=0.1)
    armed = rig.arm(0, *move, start=StartMode.RIG)
    done = rig.until(Finished)
    assert rig.of(Started)[0].tick == done.start_tick == armed.tick + 100_000


def test_samples_are_sent_again_as_asked_and_finished_after_them(bench, move):
    rig = bench()
    done, samples = rig.trial(0, *move)
    rig.heard.clear()
    spans = ((0, 3), (150, 10**6), (400, 5))
    assert isinstance(rig.ask(Resend(0, spans)), Done)
    assert rig.until(Finished) == done
    assert isinstance(rig.of(Finished)[0], Finished)
    again = rig.collect(0, 200, rig.heard)
    np.testing.assert_array_equal(again[:3], samples[:3])
    np.testing.assert_array_equal(again[150:], samples[150:])
    assert np.isnan(again[3:150]).all()
    kinds = [type(one) for one in rig.heard if isinstance(one, Samples | Finished)]
    assert kinds.index(Finished) == len(kinds) - 1


def test_an_empty_request_gets_finished_alone(bench, move):
    rig = bench()
    done, _ = rig.trial(0, *move)
    rig.heard.clear()
    rig.ask(Resend(0, ()))
    assert rig.until(Finished) == done
    assert not rig.of(Samples)


def test_blocks_asked_for_again_wait_for_room_on_the_line(bench, move):
    rig = bench(block_bytes=8)
    rig.trial(0, *move)
    rig.wait(300)
    rig.heard.clear()
    rig.ask(Resend(0, ((0, 200),)))
    rig.wait(50, room=False)
    assert not rig.of(Samples)
    rig.until(Finished)
    assert np.isfinite(rig.collect(0, 200, rig.heard)).all()


def test_a_rig_that_keeps_nothing_refuses_but_repeats_its_finished(bench, move):
    rig = bench(samples_kept=False)
    done, _ = rig.trial(0, *move)
    refused = rig.ask(Resend(0, ((0, 5),)))
    assert isinstance(refused, Refused)
    assert refused.code == Refusal.NOT_KEPT
    rig.ask(Resend(0, ()))
    assert rig.until(Finished) == done


def test_a_trial_is_kept_until_the_next_is_armed_or_a_session_opens(bench, move):
    rig = bench(fast=False)
    rig.trial(0, *move)
    rig.wait(300)
    rig.ask(rig.arm_order(1, *move))
    assert [rig.ask(Resend(k, ())).code for k in (0, 1)] == [Refusal.NOT_KEPT] * 2
    rig.start(1)
    rig.until(Finished)
    rig.hello(session=78)
    assert rig.ask(Resend(1, ())).code == Refusal.NOT_KEPT


def test_a_slow_trial_is_told_in_parts_every_quarter_of_the_watchdogs_time(bench, move):
    rig = bench(fast=False, watchdog_ms=100, block_bytes=65536)
    rig.arm(0, *move)
    rig.start(0)
    rig.until(Finished)
    counts = [len(one.data) // 8 for one in rig.of(Samples)]
    assert sum(counts) == 200
    # A sample a millisecond: a quarter of 100 ms and the sample that finds it over.
    assert max(counts) <= 27
    assert len(counts) <= 10


def test_the_rigs_clock_never_goes_back():
    clock = RigClock(1_000_000, fast=True)
    clock.jump_to(5_000_000, 0)
    clock.jump_to(3_000_000, 0)
    assert clock.tick(0) == 5_000_000
    assert clock.tick(1_000_000_000) == 6_000_000
    assert clock.tick(clock.wall_ns(7_000_001)) == 7_000_001


def test_a_hello_in_a_trial_ends_it_with_a_controlled_stop_and_no_report(bench, move):
    rig = bench(fast=False)
    rig.arm(0, *move)
    rig.start(0)
    rig.wait(100)
    assert rig.beat.state == RigState.RUNNING
    rig.heard.clear()
    rig.hello(session=78)
    rig.wait(100)
    assert rig.beat.state == RigState.RETURNING
    rig.wait(200)
    assert rig.beat.state == RigState.READY
    assert not rig.of(Finished)
    assert not rig.of(Samples)
    assert rig.ask(Resend(0, ())).code == Refusal.NOT_KEPT


def test_blocks_are_as_full_as_the_line_allows(bench, move):
    rig = bench(block_bytes=64)
    rig.trial(0, *move)
    sizes = [len(one.data) for one in rig.of(Samples)]
    assert sizes == [64] * 25
