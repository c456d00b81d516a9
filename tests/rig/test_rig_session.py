"""Greeting, numbers, peers, goodbye: the conversation around the trials."""

import itertools
import random

import pytest

from drivers.codec import pack_frame
from drivers.messages import (
    Alive,
    Arm,
    Bye,
    Channel,
    Clear,
    Describe,
    Disarm,
    Done,
    Greeting,
    Heartbeat,
    Hello,
    Ping,
    Pong,
    Refusal,
    Refused,
    Resend,
    RigState,
    Role,
    Start,
    TableBlock,
    TableClose,
    TableOpen,
    encode,
)
from mock_rig.plants import PLANTS


@pytest.mark.parametrize("name", PLANTS)
def test_every_plant_describes_itself_and_all_its_channels(bench, name):
    rig = bench(plant=PLANTS[name](0), greet=False)
    greeting = rig.hello()
    assert isinstance(greeting, Greeting)
    assert greeting.period_ticks * 1_000_000 % greeting.tick_hz == 0
    counts = {
        Role.INPUT: greeting.n_inputs,
        Role.OUTPUT: greeting.n_outputs,
        Role.AUXILIARY: greeting.n_auxiliary,
    }
    for role, count in counts.items():
        channels = [rig.ask(Describe(role, k)) for k in range(count)]
        assert all(isinstance(one, Channel) and one.low < one.high for one in channels)
        assert len({one.name for one in channels}) == count > 0
        assert rig.ask(Describe(role, count)).code == Refusal.UNSUPPORTED
    assert rig.ask(Describe(9, 0)).code == Refusal.UNSUPPORTED


def test_a_repeated_order_is_answered_again_and_not_carried_out_twice(bench, move):
    rig = bench()
    first = rig.arm(3, *move)
    counted = len([one for one in rig.of(Heartbeat) if one.state == RigState.ARMED])
    again = rig.ask(rig.arm_order(3, *move), number=rig.number)
    assert again == first
    assert len([one for one in rig.of(Heartbeat) if one.state == RigState.ARMED]) == counted


def test_an_answer_stays_the_same_even_if_it_would_be_another_by_now(bench, move):
    rig = bench()
    rig.arm(3, *move)
    refused = rig.ask(Start(3, 1))
    assert refused.code == Refusal.TOO_LATE
    good = Start(3, rig.tick() + 1000)
    assert rig.ask(good, number=rig.number) == refused


@pytest.mark.parametrize("number", [0, 2, 5, 2**32 - 1])
def test_an_order_out_of_turn_is_ignored_and_counted(bench, number):
    rig = bench()
    rig.ask(Describe(0, 0))
    rig.ask(Describe(0, 0))
    before = rig.rig.errors["number"]
    assert rig.send(Describe(0, 0), number=number) == []
    assert rig.rig.errors["number"] == before + 1
    assert isinstance(rig.ask(Describe(0, 0)), Channel)


def test_a_repeated_hello_gets_the_same_greeting_until_something_else_was_ordered(bench):
    rig = bench(greet=False)
    greeting = rig.hello()
    assert rig.ask(Hello((1,), "bench"), number=1) == greeting
    rig.ask(Describe(0, 0))
    assert rig.send(Hello((1,), "bench"), number=1) == []


def test_a_hello_that_is_not_number_one_is_ignored(bench):
    rig = bench(greet=False)
    assert rig.send(Hello((1,), "bench"), number=2) == []
    assert rig.rig.errors["number"] == 1


def test_session_zero_is_a_session_like_any_other(bench):
    rig = bench(greet=False)
    assert isinstance(rig.hello(session=0), Greeting)
    assert isinstance(rig.ask(Describe(0, 0)), Channel)


def test_frames_of_another_session_are_dropped_and_counted(bench):
    rig = bench()
    assert rig.send(Describe(0, 0), session=5) == []
    assert rig.rig.errors["session"] == 1


def test_nothing_is_answered_before_a_session_is_open(bench):
    rig = bench(greet=False)
    rig.wait(1000)
    assert rig.send(Ping(1, 2)) == []
    assert rig.heard == []


def test_a_new_session_starts_its_numbers_and_its_tables_afresh(bench, move):
    rig = bench()
    rig.arm(0, *move)
    rig.hello(session=78)
    rig.until(Heartbeat)
    rig.wait(300)
    assert rig.beat.state == RigState.READY
    assert rig.ask(rig.arm_order(0, *move)).code == Refusal.TABLE_UNVERIFIED


def test_a_version_that_the_rig_does_not_speak_is_refused_in_words(bench):
    rig = bench(greet=False)
    refused = rig.hello(versions=(7, 9))
    assert refused == Refused(1, Refusal.VERSION, "this rig speaks protocol version 1")
    assert rig.send(Describe(0, 0)) == []


def test_a_second_daemon_is_refused_while_the_first_is_alive_and_not_after(bench):
    rig = bench()
    hello = pack_frame(99, 1, encode(Hello((1,), "other")))
    rig.put(hello, peer=2)
    assert [one.code for one in rig.take() if isinstance(one, Refused)] == [Refusal.BUSY]
    assert isinstance(rig.ask(Describe(0, 0)), Channel)
    rig.wait(1100)
    rig.put(hello, peer=2)
    assert any(isinstance(one, Greeting) for one in rig.take())
    assert rig.send(Describe(0, 0)) == []


def test_after_goodbye_nothing_is_said_and_any_daemon_may_greet(bench):
    rig = bench()
    assert isinstance(rig.ask(Bye()), Done)
    assert isinstance(rig.ask(Bye(), number=rig.number), Done)
    rig.heard.clear()
    rig.wait(5000)
    assert rig.send(Ping(1, 1)) == []
    assert rig.send(Describe(0, 0)) == []
    assert rig.heard == []
    rig.put(pack_frame(99, 1, encode(Hello((1,), "other"))), peer=2)
    assert any(isinstance(one, Greeting) for one in rig.take())


def test_goodbye_in_a_trial_brings_the_rig_back_without_a_fault(bench, move):
    rig = bench(fast=False)
    rig.arm(0, *move)
    rig.start(0)
    rig.wait(50)
    assert rig.beat.state == RigState.RUNNING
    rig.ask(Bye())
    rig.wait(5000)
    assert rig.rig.runner.state is RigState.READY


def test_answers_follow_a_daemon_that_connected_anew_with_its_session(bench):
    rig = bench()
    rig.put(rig.frame(Describe(0, 0)), peer=9)
    assert [peer for _, peer in rig.rig.outgoing(rig.now_ns)] == [9]


def test_a_clock_exchange_returns_the_daemons_time_and_the_rigs_tick(bench):
    rig = bench(fast=False)
    pong = rig.send(Ping(4, 123456789))[0]
    assert pong == Pong(4, 123456789, rig.now_ns // 1000, rig.now_ns // 1000)


def test_heartbeats_come_at_least_every_quarter_of_the_watchdogs_time(bench):
    rig = bench(watchdog_ms=400)
    rig.heard.clear()
    rig.wait(4000)
    ticks = [one.tick for one in rig.of(Heartbeat)]
    assert len(ticks) >= 40
    assert max(b - a for a, b in itertools.pairwise(ticks)) <= 100_000


def random_message(chance):
    u8, u32 = chance.randrange(256), chance.randrange(2**32)
    small = chance.randrange(4)
    data = chance.randbytes(chance.choice([0, 3, 4, 400]))
    return chance.choice(
        [
            Describe(u8, small),
            TableOpen(small, 1, chance.choice([0, 1, 100, u32]), small, u32, chance.random() < 0.3),
            TableBlock(small, 1, chance.choice([0, 50, u32]), data),
            TableClose(small, 1),
            Arm(small, chance.choice([1, 100, u32]), u32, u32, u8),
            Start(small, chance.choice([0, u32, 2**64 - 1])),
            Disarm(small),
            Resend(small, ((u32, u32), (0, u32))),
            Clear("why"),
            Alive(),
            Ping(u32, u32),
            Heartbeat(u8, 1, 1, 1, 0),
        ]
    )


@pytest.mark.parametrize("seed", range(8))
def test_whatever_is_ordered_the_rig_answers_or_counts_and_lives(bench, move, seed):
    """Random orders, half of them right after tables were loaded and a trial was armed."""
    chance = random.Random(seed)
    rig = bench(seed=seed, rig_starts=True, table_capacity=150)
    for _ in range(40):
        if chance.random() < 0.3:
            rig.send(rig.arm_order(0, *move, start=chance.randrange(256)))
            rig.arm(chance.randrange(4), move[0][:100], move[1][:100], chance.randrange(2))
        for _ in range(5):
            rig.send(random_message(chance))
        rig.put(chance.randbytes(chance.randrange(60)))
        rig.wait(chance.choice([0.1, 30]))
    if rig.beat.state == RigState.SAFE:
        assert isinstance(rig.ask(Clear("start again")), Done)
    rig.wait(500)
    rig.hello(session=1234)
    rig.wait(500)
    done, samples = rig.trial(9, move[0][:100], move[1][:100])
    assert done.count == 100
    assert (samples == samples).all()
