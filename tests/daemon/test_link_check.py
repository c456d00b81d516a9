"""`trialrunner check` at the link: what it asks of a rig, and what every bad rig is told."""

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest

from drivers.codec import pack_frame, unpack_frame
from drivers.errors import LinkLost
from drivers.memory_link import MemoryLink
from drivers.messages import (
    Bye,
    Channel,
    Describe,
    Done,
    Greeting,
    Hello,
    Message,
    Ping,
    Pong,
    Refused,
    Role,
    decode,
    encode,
)
from trialrunner.clock import ManualClock
from trialrunner.config import Config, load_text
from trialrunner.link_check import EXCHANGES, LinkCheckFailed, LinkFinding, try_link

TEXT = """\
[run]
name = "gantry"
[link]
url = "zmq+tcp://127.0.0.1:7000"
[trial]
n_samples = 200
period_s = 0.001
[[inputs]]
name = "force"
unit = "N"
low = -10.0
high = 10.0
[[outputs]]
name = "x"
unit = "mm"
low = -100.0
high = 100.0
[reference]
kind = "profile"
waypoints = [[0.0]]
velocity_limit_per_s = 1.0
[law]
kind = "pd"
proportional = 1.0
"""

GREETING = Greeting(
    number=0,
    version=1,
    name="bench",
    tick_hz=1_000_000_000,
    period_ticks=1_000_000,
    clock_steps=False,
    sample_type="f4",
    table_capacity=1000,
    max_samples=1000,
    samples_kept=1000,
    watchdog_ms=1000,
    starts=(0,),
    inject="actuator",
    reference_owner="daemon",
    reference_crc=0,
    n_inputs=1,
    n_outputs=1,
    n_auxiliary=0,
)

INPUT = Channel(0, Role.INPUT, 0, "force", "N", -8.0, 8.0, 100.0, "")
OUTPUT = Channel(0, Role.OUTPUT, 0, "x", "mm", -300.0, 300.0, float("inf"), "")

Answer = Callable[[Message, int], Message | None]


class Rig:
    """The far end of a memory link: answers every frame by a function."""

    def __init__(self, clock: ManualClock, answer: Answer) -> None:
        self.near, self._far = MemoryLink.pair()
        self._clock = clock
        self._answer = answer
        self.heard: list[type[Message]] = []
        self.round_trips_ns = iter([5_000_000, 2_000_000, *[9_000_000] * 100])

    def stray(self, frame: bytes) -> None:
        """Something that the daemon did not ask for."""
        self._far.send(frame)

    def pause(self, _: object, at_most_ns: int) -> None:
        """Time passes here and nowhere else; the answers arrive at its end."""
        frames = self._far.receive()
        self._clock.advance_to(self._clock.now_ns() + (0 if frames else max(at_most_ns, 1_000_000)))
        for received in frames:
            frame = unpack_frame(received.data, 1000)
            message = decode(frame.body)
            self.heard.append(type(message))
            if isinstance(message, Ping):
                self._clock.advance_to(self._clock.now_ns() + next(self.round_trips_ns))
            answer = self._answer(message, frame.sequence)
            if answer is not None:
                self._far.send(pack_frame(frame.session, 0, encode(answer)))


def good_answer(message: Message, number: int) -> Message | None:
    match message:
        case Hello():
            return replace(GREETING, number=number)
        case Describe(role=role):
            return replace(INPUT if role == Role.INPUT else OUTPUT, number=number)
        case Ping(token, sent_ns):
            return Pong(token, sent_ns, 1_000_000, 1_000_000)
        case Bye():
            return Done(number)
    return None


@pytest.fixture
def config(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Config:
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    return load_text(TEXT)


def check(config: Config, answer: Answer) -> tuple[LinkFinding, Rig]:
    clock = ManualClock()
    rig = Rig(clock, answer)
    return try_link(config, clock, lambda _: rig.near, rig.pause), rig


def test_a_good_rig_is_greeted_compared_and_left_alone(config: Config) -> None:
    """Hello, its channels, clock exchanges, goodbye: nothing that could move anything."""
    found, rig = check(config, good_answer)
    assert found.disagreements == ()
    assert found.greeting.name == "bench"
    assert (found.inputs[0].name, found.outputs[0].name) == ("force", "x")
    assert found.limits is not None
    assert found.limits.high.tolist() == [8.0]
    assert set(rig.heard) == {Hello, Describe, Ping, Bye}
    assert rig.heard.count(Ping) == EXCHANGES
    assert rig.heard[-1] is Bye


def test_the_exchange_of_least_delay_is_reported(config: Config) -> None:
    """The second of these took 2 ms, the others more."""
    found, _ = check(config, good_answer)
    assert found.exchange.delay_ns == 2_000_000


def test_frames_of_an_older_session_are_no_damage(config: Config) -> None:
    """A rig that was left in the middle of something still talks of it."""
    clock = ManualClock()
    rig = Rig(clock, good_answer)
    rig.stray(pack_frame(1, 0, encode(Bye())))
    assert try_link(config, clock, lambda _: rig.near, rig.pause).bad_frames == {}


def test_a_damaged_frame_is_counted_by_kind(config: Config) -> None:
    """So that somebody looks at the cable."""
    clock = ManualClock()
    rig = Rig(clock, good_answer)
    rig.stray(pack_frame(1, 0, encode(Bye()))[:-1] + b"!")
    assert try_link(config, clock, lambda _: rig.near, rig.pause).bad_frames == {"crc": 1}


def test_the_link_is_given_back_afterwards(config: Config) -> None:
    """A daemon may want it next."""
    _, rig = check(config, good_answer)
    with pytest.raises(LinkLost):
        rig.near.receive()


def test_a_rig_that_differs_is_reported_with_its_disagreements(config: Config) -> None:
    """No limits in force then: there is nothing to run."""

    def metres(message: Message, number: int) -> Message | None:
        answer = good_answer(message, number)
        if isinstance(answer, Channel) and answer.role == Role.OUTPUT:
            return replace(answer, unit="m")
        return answer

    found, _ = check(config, metres)
    assert found.limits is None
    assert len(found.disagreements) == 1
    assert "'m' on the rig" in found.disagreements[0]


def test_a_silent_rig_is_reported_after_the_configured_tries(config: Config) -> None:
    """Hello is sent again as often as configured, then given up."""
    clock = ManualClock()
    rig = Rig(clock, lambda message, number: None)
    with pytest.raises(LinkCheckFailed, match="does not answer Hello"):
        try_link(config, clock, lambda _: rig.near, rig.pause)
    assert set(rig.heard) == {Hello}
    assert len(rig.heard) >= config.link.max_tries


def test_a_refusal_is_reported_in_the_rigs_own_words(config: Config) -> None:
    """Another version of the protocol, or another daemon's session."""

    def busy(message: Message, number: int) -> Message | None:
        return Refused(number, 2, "another daemon has a session")

    with pytest.raises(LinkCheckFailed, match="refuses Hello: another daemon has a session"):
        check(config, busy)


def test_a_rig_without_a_clock_is_reported(config: Config) -> None:
    """It greets and never answers a clock exchange: no start could be ordered."""

    def timeless(message: Message, number: int) -> Message | None:
        return None if isinstance(message, Ping) else good_answer(message, number)

    with pytest.raises(LinkCheckFailed, match=r"clock exchange|nothing was heard"):
        check(config, timeless)


def test_a_rig_that_ignores_the_goodbye_changes_no_finding(config: Config) -> None:
    """Everything was known by then."""

    def rude(message: Message, number: int) -> Message | None:
        return None if isinstance(message, Bye) else good_answer(message, number)

    found, rig = check(config, rude)
    assert found.disagreements == ()
    assert rig.heard.count(Bye) >= config.link.max_tries
