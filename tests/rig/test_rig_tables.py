"""Tables: checked before anything is played, whole or streamed."""

import dataclasses

import numpy as np
import pytest

from drivers.messages import (
    Alive,
    Arm,
    Armed,
    Clear,
    Credit,
    Done,
    Fault,
    FaultCode,
    Finished,
    FinishReason,
    Heartbeat,
    Refusal,
    Refused,
    RigState,
    Table,
    TableBlock,
    TableClose,
    TableOpen,
    TableState,
)
from drivers.tables import table_crc

FEED, REF = Table.FEEDFORWARD, Table.REFERENCE


def test_gaps_are_named_and_filled_and_blocks_may_come_in_any_order_and_twice(bench, move):
    rig = bench()
    rows = rig.rows(move[0])
    assert rig.open(FEED, rows) == TableState(rig.number, FEED, 1, False, ())
    blocks = rig.blocks(FEED, rows, size=20)
    for block in [blocks[9], blocks[0], blocks[0], blocks[5]]:
        rig.send(block)
    state = rig.ask(TableClose(FEED, 1))
    assert not state.verified
    assert state.missing == ((20, 80), (120, 60))
    for block in blocks:
        rig.send(block)
    assert rig.ask(TableClose(FEED, 1)).verified


def test_a_table_of_another_checksum_is_never_played(bench, move):
    rig = bench()
    rows = rig.rows(move[0])
    wrong = table_crc(rows.tobytes()) ^ 1
    rig.open(FEED, rows, crc=wrong)
    for block in rig.blocks(FEED, rows):
        rig.send(block)
    assert rig.ask(TableClose(FEED, 1)) == TableState(rig.number, FEED, 1, False, ())
    rig.load(REF, move[1])
    ref_crc = table_crc(rig.rows(move[1]).tobytes())
    for crc in (wrong, wrong ^ 1):
        refused = rig.ask(Arm(0, len(rows), crc, ref_crc, 0))
        assert refused.code == Refusal.TABLE_UNVERIFIED
    assert not rig.of(Armed)


def test_only_the_announced_tables_of_the_announced_length_are_played(bench, move):
    rig = bench()
    rig.load(FEED, move[0])
    rig.load(REF, move[1])
    right = rig.arm_order(0, *move)
    for change in (
        {"feedforward_crc": right.feedforward_crc ^ 1},
        {"reference_crc": right.reference_crc ^ 1},
        {"n_samples": 199},
        {"n_samples": 201},
    ):
        refused = rig.ask(dataclasses.replace(right, **change))
        assert refused.code == Refusal.TABLE_UNVERIFIED
    assert isinstance(rig.ask(right), Armed)


def test_after_a_wrong_checksum_the_whole_table_is_sent_again(bench, move):
    rig = bench()
    rows = rig.rows(move[0])
    spoiled = rows.copy()
    spoiled[7] += 0.5
    rig.open(FEED, rows)
    for block in rig.blocks(FEED, spoiled):
        rig.send(block)
    assert not rig.ask(TableClose(FEED, 1)).verified
    for block in rig.blocks(FEED, rows):
        rig.send(block)
    assert rig.ask(TableClose(FEED, 1)).verified


def test_the_first_arrival_of_a_sample_holds(bench, move):
    rig = bench()
    rows = rig.rows(move[0])
    rig.open(FEED, rows)
    rig.send(rig.blocks(FEED, rows, size=60)[1])
    for block in rig.blocks(FEED, np.roll(rows, 1), size=60)[:2]:
        rig.send(block)
    for block in rig.blocks(FEED, rows, size=60)[2:]:
        rig.send(block)
    assert not rig.ask(TableClose(FEED, 1)).verified
    rig.open(FEED, rows, revision=2)
    for block in rig.blocks(FEED, rows, revision=2, size=60):
        rig.send(block)
    for block in rig.blocks(FEED, np.roll(rows, 1), revision=2, size=60):
        rig.send(block)
    assert rig.ask(TableClose(FEED, 2)).verified


def test_a_late_block_cannot_change_a_verified_table(bench, move):
    rig = bench()
    rig.arm(0, *move)
    rig.send(TableBlock(FEED, 1, 10, rig.rows(np.full(50, 9.0)).tobytes()))
    rig.start(0)
    done = rig.until(Finished)
    clean = bench()
    _, samples = clean.trial(0, *move)
    np.testing.assert_array_equal(rig.collect(0, 200, rig.heard), samples)
    assert done.feedforward_crc == table_crc(rig.rows(move[0]).tobytes())


def test_a_table_that_the_rig_holds_is_not_sent_again(bench, move):
    rig = bench()
    rig.load(FEED, move[0], revision=1)
    state = rig.open(FEED, rig.rows(move[0]), revision=2)
    assert state == TableState(rig.number, FEED, 2, True, ())
    assert not rig.open(FEED, rig.rows(move[0] * 0.5), revision=3).verified


def test_blocks_of_another_revision_or_beyond_the_end_are_dropped(bench, move):
    rig = bench()
    rows = rig.rows(move[0])
    rig.open(FEED, rows, revision=4)
    for block in rig.blocks(FEED, rows, revision=3):
        rig.send(block)
    rig.send(TableBlock(FEED, 4, 190, rows[:50].tobytes()))
    rig.send(TableBlock(FEED, 4, 0, rows[:2].tobytes()[:-1]))
    rig.send(TableBlock(9, 4, 0, rows[:2].tobytes()))
    assert rig.rig.errors["stale block"] == 5
    assert rig.rig.errors["block"] == 2
    rig.send(TableBlock(FEED, 4, 0, rows[:1].tobytes()))
    assert rig.ask(TableClose(FEED, 4)).missing == ((1, 199),)


@pytest.mark.parametrize(
    ("table", "change", "word"),
    [
        (FEED, lambda u: np.where(np.arange(200) == 90, 10.5, u), "outside the declared range"),
        (FEED, lambda u: np.where(np.arange(200) == 90, -3.0, u), "faster than the declared rate"),
        (FEED, lambda u: np.where(np.arange(200) == 90, np.nan, u), "not a number"),
        (FEED, lambda u: np.where(np.arange(200) == 90, np.inf, u), "not a number"),
        (REF, lambda u: u + 5.0, "outside the declared range"),
        (REF, lambda u: np.where(np.arange(200) == 90, np.nan, u), "not a number"),
    ],
)
def test_the_rig_refuses_tables_beyond_its_own_limits(bench, move, table, change, word):
    rig = bench()
    refused = rig.load(table, change(move[table]))
    assert isinstance(refused, Refused)
    assert refused.code == Refusal.BEYOND_LIMIT
    assert word in refused.text
    other = Table(1 - table)
    rig.load(other, move[other])
    assert isinstance(rig.ask(rig.arm_order(0, *move)), Refused)


def test_a_table_exactly_at_the_limits_passes_in_float32(bench):
    rig = bench()
    steps = np.concatenate([np.arange(0.0, 10.0, 2.0), [10.0], np.full(5, 10.0)])
    assert rig.load(FEED, steps).verified


@pytest.mark.parametrize(
    ("order", "code"),
    [
        (TableOpen(5, 1, 10, 1, 0, False), Refusal.UNSUPPORTED),
        (TableOpen(FEED, 1, 10, 2, 0, False), Refusal.MALFORMED),
        (TableOpen(FEED, 1, 0, 1, 0, False), Refusal.MALFORMED),
        (TableOpen(FEED, 1, 401, 1, 0, True), Refusal.TOO_LARGE),
        (TableOpen(FEED, 1, 101, 1, 0, False), Refusal.TOO_LARGE),
        (TableClose(FEED, 1), Refusal.MALFORMED),
    ],
)
def test_tables_of_a_wrong_shape_or_size_are_refused(bench, order, code):
    rig = bench(table_capacity=100, max_samples=400)
    assert rig.ask(order).code == code


def test_no_table_is_opened_while_a_trial_is_armed(bench, move):
    rig = bench()
    rig.arm(0, *move)
    assert rig.open(FEED, rig.rows(move[0])).code == Refusal.NOT_READY


def test_a_rig_with_its_own_reference_takes_none_and_tells_its_checksum(bench, move):
    rig = bench(reference=np.asarray(move[1]).reshape(-1, 1), greet=False)
    greeting = rig.hello()
    assert greeting.reference_owner == "rig"
    assert greeting.reference_crc == table_crc(rig.rows(move[1]).tobytes())
    assert rig.open(REF, rig.rows(move[1])).code == Refusal.UNSUPPORTED
    done, samples = rig.trial(0, *move)
    sent = bench()
    np.testing.assert_allclose(samples, sent.trial(0, *move)[1], atol=1e-6)
    assert done.reason == FinishReason.COMPLETE


class Streamer:
    """A daemon's side of one streamed feedforward, for a rig with its own reference."""

    def __init__(self, rig, values, size=20, crc=None):
        self.rig, self.size = rig, size
        self.rows = rig.rows(values)
        self.sent = self.seen = 0
        self.crc = table_crc(self.rows.tobytes()) if crc is None else crc
        rig.open(FEED, self.rows, crc=self.crc, streamed=True)
        self.feed()

    def feed(self, most=10**9):
        """Send what the credit allows; after a gap go back to what the rig has."""
        while True:
            credits = [one for one in self.rig.heard[self.seen :] if isinstance(one, Credit)]
            self.seen = len(self.rig.heard)
            if not credits:
                return
            self.have, self.upto = credits[-1].have, credits[-1].upto
            self.sent = max(self.sent, self.have)
            while self.sent < min(self.upto, most):
                end = min(self.sent + self.size, self.upto, most)
                block = TableBlock(FEED, 1, self.sent, self.rows[self.sent : end].tobytes())
                self.rig.send(block)
                self.sent = end

    def run(self, feed_until=10**9):
        """Feed while the trial runs, to its end."""
        seen = len(self.rig.heard)
        for _ in range(100_000):
            self.rig.send(Alive())
            self.rig.wait(1)
            self.feed(feed_until)
            done = [one for one in self.rig.heard[seen:] if isinstance(one, Finished)]
            if done:
                return done[-1]
        raise AssertionError("never finished")


@pytest.fixture
def stream(bench):
    """A bench that holds 150 samples with its own zero reference of 1000, and a streamed table."""

    def make(values=None, **choices):
        rig = bench(table_capacity=150, reference=np.zeros((1000, 1)), fast=False, **choices)
        if values is None:
            values = np.sin(np.pi * np.linspace(0, 1, 1000)) ** 2
        return rig, values

    return make


def arm_streamed(rig, streamer, trial=0):
    return rig.ask(Arm(trial, len(streamer.rows), streamer.crc, 0, 0))


@pytest.mark.parametrize("fast", [True, False])
def test_a_streamed_table_plays_as_a_stored_one_and_never_more_than_fits_is_asked_for(bench, fast):
    values = np.sin(np.pi * np.linspace(0, 1, 1000)) ** 2
    zeros = np.zeros((1000, 1))
    rig = bench(table_capacity=150, reference=zeros, fast=fast)
    streamer = Streamer(rig, values)
    assert streamer.sent == 150
    assert isinstance(arm_streamed(rig, streamer), Armed)
    rig.start(0)
    done = streamer.run()
    assert (done.reason, done.count, done.feedforward_crc) == (
        FinishReason.COMPLETE,
        1000,
        streamer.crc,
    )
    for credit in rig.of(Credit):
        assert credit.upto - credit.have <= 150
    stored = bench(reference=zeros)
    _, samples = stored.trial(0, values, zeros[:, 0])
    np.testing.assert_array_equal(rig.collect(0, 1000, rig.heard), samples)


def test_arming_waits_until_the_memory_is_full(stream):
    rig, values = stream()
    rows = rig.rows(values)
    crc = table_crc(rows.tobytes())
    rig.open(FEED, rows, streamed=True)
    for block in rig.blocks(FEED, rows[:140], size=20):
        rig.send(block)
    assert rig.ask(Arm(0, 1000, crc, 0, 0)).code == Refusal.TABLE_UNVERIFIED
    rig.send(TableBlock(FEED, 1, 140, rows[140:150].tobytes()))
    assert isinstance(rig.ask(Arm(0, 1000, crc, 0, 0)), Armed)


def test_a_lost_block_is_told_by_the_next_credit_and_nothing_after_it_is_taken(stream):
    rig, values = stream()
    rows = rig.rows(values)
    rig.open(FEED, rows, streamed=True)
    blocks = rig.blocks(FEED, rows[:150], size=50)
    rig.send(blocks[0])
    rig.heard.clear()
    rig.send(blocks[2])
    assert {(one.have, one.upto) for one in rig.of(Credit)} == {(50, 150)}


def test_a_block_that_does_not_fit_into_the_memory_is_dropped(stream):
    rig, values = stream()
    rows = rig.rows(values)
    rig.open(FEED, rows, streamed=True)
    for block in rig.blocks(FEED, rows[:140], size=20):
        rig.send(block)
    rig.send(TableBlock(FEED, 1, 140, rows[140:160].tobytes()))
    rig.heard.clear()
    rig.wait(300)
    assert (rig.of(Credit)[-1].have, rig.of(Credit)[-1].upto) == (140, 150)


def test_a_repeated_block_is_dropped_and_no_credit_is_sent_for_it(stream):
    rig, values = stream()
    rows = rig.rows(values)
    rig.open(FEED, rows, streamed=True)
    blocks = rig.blocks(FEED, rows[:150], size=50)
    rig.send(blocks[0])
    rig.send(blocks[1])
    assert rig.send(blocks[0]) == []
    rig.send(blocks[2])
    crc = table_crc(rows.tobytes())
    assert isinstance(rig.ask(Arm(0, 1000, crc, 0, 0)), Armed)


def test_the_first_credit_follows_the_answer(stream):
    rig, _ = stream()
    order = TableOpen(FEED, 1, 1000, 1, 7, True)
    assert [type(one) for one in rig.send(order)] == [TableState, Credit]


def test_a_lost_credit_comes_again_with_the_heartbeat(stream):
    rig, values = stream()
    rig.open(FEED, rig.rows(values), streamed=True)
    rig.heard.clear()
    rig.wait(300)
    assert (rig.of(Credit)[-1].have, rig.of(Credit)[-1].upto) == (0, 150)


def test_a_table_that_runs_dry_takes_the_rig_to_its_safe_state(stream):
    rig, values = stream()
    streamer = Streamer(rig, values)
    arm_streamed(rig, streamer)
    rig.start(0)
    done = streamer.run(feed_until=400)
    assert done.reason == FinishReason.UNDERRUN
    assert done.count == 400
    assert done.feedforward_crc == table_crc(streamer.rows[:400].tobytes())
    assert rig.beat.state == RigState.SAFE
    assert rig.of(Fault)[-1].code == FaultCode.UNDERRUN


def test_a_streamed_table_of_a_wrong_checksum_ends_in_the_safe_state(stream):
    rig, values = stream()
    streamer = Streamer(rig, values, crc=12345)
    arm_streamed(rig, streamer)
    rig.start(0)
    done = streamer.run()
    assert done.reason == FinishReason.FAULT
    assert rig.beat.state == RigState.SAFE


def test_a_streamed_table_beyond_the_limits_is_not_played_to_where_it_breaks_them(stream):
    rig, values = stream()
    values = values.copy()
    values[600] = 10.5
    streamer = Streamer(rig, values)
    arm_streamed(rig, streamer)
    rig.start(0)
    done = streamer.run()
    assert done.reason == FinishReason.FAULT
    assert done.count < 600
    assert rig.beat.fault == FaultCode.BEYOND_LIMIT


def test_a_jump_between_two_streamed_blocks_is_a_change_too(stream):
    rig, values = stream()
    values = values.copy()
    values[100:] += 4.0
    streamer = Streamer(rig, values)
    refused = arm_streamed(rig, streamer)
    assert refused.code == Refusal.BEYOND_LIMIT
    assert "rate" in refused.text


def test_a_streamed_table_is_not_played_a_second_time(stream):
    rig, values = stream()
    streamer = Streamer(rig, values)
    arm_streamed(rig, streamer)
    rig.start(0)
    streamer.run()
    rig.wait(500)
    assert rig.beat.state == RigState.READY
    assert arm_streamed(rig, streamer, trial=1).code == Refusal.TABLE_UNVERIFIED


def test_after_an_underrun_the_rig_clears_and_takes_a_new_table(stream):
    rig, values = stream()
    streamer = Streamer(rig, values)
    arm_streamed(rig, streamer)
    rig.start(0)
    streamer.run(feed_until=400)
    assert isinstance(rig.ask(Clear("the line was slow")), Done)
    rig.until(Heartbeat)
    rig.wait(300)
    again = Streamer(rig, values)
    assert isinstance(arm_streamed(rig, again, trial=1), Armed)
    rig.start(1)
    assert again.run().reason == FinishReason.COMPLETE
