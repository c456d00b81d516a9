"""Telemetry: late subscribers see the state at once, losses show, nobody makes the daemon wait."""

import json
import re
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zmq

import trialrunner
from trialrunner.clock import ManualClock
from trialrunner.core.run_state import Carry, Outcome, RunState
from trialrunner.core.trial import Level, Purpose, Trial, Verdict
from trialrunner.observer import Observer
from trialrunner.telemetry import TOPICS, Publisher

Subscribe = Callable[..., "zmq.Socket[Any]"]


@pytest.fixture
def context() -> Iterator[zmq.Context[Any]]:
    with zmq.Context() as context:
        yield context


@pytest.fixture
def url(tmp_path_factory: pytest.TempPathFactory) -> str:
    """Short: Unix socket paths end at 107 bytes."""
    return f"ipc://{tmp_path_factory.mktemp('t')}/run.telemetry"


@pytest.fixture
def publisher(context: zmq.Context[Any], url: str) -> Iterator[Publisher]:
    publisher = Publisher(context, url, ManualClock())
    yield publisher
    publisher.close()


@pytest.fixture
def connect(context: zmq.Context[Any], url: str) -> Iterator[Subscribe]:
    """A plain client, not subscribed to anything unless told."""
    made: list[zmq.Socket[Any]] = []

    def make(*prefixes: bytes, kind: int = zmq.SUB, limit: int = 1_000) -> zmq.Socket[Any]:
        socket = context.socket(kind)
        made.append(socket)
        socket.set(zmq.LINGER, 0)
        socket.set(zmq.RCVTIMEO, 5_000)
        socket.set(zmq.RCVHWM, limit)
        socket.connect(url)
        for prefix in prefixes:
            socket.subscribe(prefix)
        return socket

    yield make
    for socket in made:
        socket.close()


def serve(publisher: Publisher) -> None:
    """Wait for a subscription and serve it."""
    assert publisher.socket.poll(5_000), "no subscription arrived"
    publisher.serve_subscriptions()


def heard(subscriber: "zmq.Socket[Any]") -> tuple[str, dict[str, Any]]:
    """Topic and JSON of the next message, which is one frame."""
    [frame] = subscriber.recv_multipart()
    topic, _, text = frame.partition(b"\0")
    return topic.decode(), json.loads(text)


def test_a_late_subscriber_sees_the_state_at_once(publisher: Publisher, connect: Subscribe) -> None:
    """What was published before it came; the newest only."""
    publisher.publish("status", {"trial": 1})
    publisher.publish("status", {"trial": 2})
    subscriber = connect(b"status\0")
    serve(publisher)
    topic, message = heard(subscriber)
    assert (topic, message["sequence"], message["data"]) == ("status", 2, {"trial": 2})


def test_a_second_late_subscriber_sees_it_too(publisher: Publisher, connect: Subscribe) -> None:
    """The same subscription again is still news."""
    publisher.publish("status", {"trial": 1})
    first = connect(b"status")
    serve(publisher)
    heard(first)
    second = connect(b"status")
    serve(publisher)
    assert heard(second)[1]["sequence"] == 1
    assert heard(first)[1]["sequence"] == 1, "told by its number that it is no news"


def test_a_subscriber_to_everything_gets_the_last_of_each_topic(
    publisher: Publisher, connect: Subscribe
) -> None:
    """In the order of the table."""
    for topic in reversed(TOPICS):
        publisher.publish(topic, {"topic": topic})
    subscriber = connect(b"")
    serve(publisher)
    assert [heard(subscriber)[0] for _ in TOPICS] == list(TOPICS)


def test_a_subscriber_gets_only_what_it_asked_for(publisher: Publisher, connect: Subscribe) -> None:
    """A watcher of trials need not read traces."""
    for topic in TOPICS:
        publisher.publish(topic, {})
    subscriber = connect(b"trial")
    serve(publisher)
    for topic in TOPICS:
        publisher.publish(topic, {})
    publisher.publish("trial", {"last": True})
    found = [heard(subscriber) for _ in range(3)]
    assert {topic for topic, _ in found} == {"trial"}
    assert [message["sequence"] for _, message in found] == [1, 2, 3]


def test_no_topic_begins_with_anothers_name() -> None:
    """Else a subscription to one would bring the other."""
    for one in TOPICS:
        assert [topic for topic in TOPICS if topic.startswith(one)] == [one]


def test_a_subscriber_that_does_not_read_sees_its_loss(
    publisher: Publisher, connect: Subscribe
) -> None:
    """The publisher drops and goes on; the gap in the numbers shows it."""
    subscriber = connect(b"trace", limit=1)
    serve(publisher)
    bulk = {"error": ["x" * 1_000] * 100}
    for _ in range(300):
        publisher.publish("trace", bulk)
    numbers = [heard(subscriber)[1]["sequence"]]
    while subscriber.poll(200):
        numbers.append(heard(subscriber)[1]["sequence"])
    publisher.publish("trace", {})
    numbers.append(heard(subscriber)[1]["sequence"])
    assert numbers == sorted(set(numbers))
    assert numbers[-1] == 301
    assert len(numbers) < 301


def test_a_restart_shows_as_another_publisher(
    context: zmq.Context[Any], url: str, connect: Subscribe
) -> None:
    """The numbers begin anew, so that `since` must tell."""
    seen = []
    for start_ns in (1_000_000_000, 2_000_000_000):
        publisher = Publisher(context, url, ManualClock(start_ns))
        publisher.publish("status", {})
        subscriber = connect(b"status")
        serve(publisher)
        seen.append(heard(subscriber)[1])
        subscriber.close()
        publisher.close()
    assert [message["sequence"] for message in seen] == [1, 1]
    assert seen[0]["since"] != seen[1]["since"]


def test_what_is_no_number_becomes_null(publisher: Publisher, connect: Subscribe) -> None:
    """JSON has no NaN; arrays of NumPy arrive as lists."""
    values = {"error": np.array([[1.0, np.nan]]), "norm": float("inf")}
    publisher.publish("trace", values)
    subscriber = connect(b"trace")
    serve(publisher)
    assert heard(subscriber)[1]["data"] == {"error": [[1.0, None]], "norm": None}


@pytest.mark.parametrize(
    "frames", [[b""], [b"\x05junk"], [b"\x01", b"status"], [b"\x02status"], [b"\x00never"]]
)
def test_what_is_no_subscription_is_dropped(
    frames: list[bytes], publisher: Publisher, connect: Subscribe
) -> None:
    """Subscribers may send anything; the next real one is served."""
    publisher.publish("status", {})
    odd = connect(kind=zmq.XSUB)
    odd.send_multipart(frames)
    odd.send(b"\x01status")
    poller = zmq.Poller()
    poller.register(odd, zmq.POLLIN)
    poller.register(publisher.socket, zmq.POLLIN)
    while odd not in (ready := dict(poller.poll(5_000))):
        assert ready, "the real subscription was not served"
        publisher.serve_subscriptions()
    assert heard(odd)[0] == "status"


def test_an_endless_subscription_ends_its_connection_only(
    publisher: Publisher, connect: Subscribe
) -> None:
    """Prefixes are short; a long one is no subscriber of ours."""
    publisher.publish("status", {})
    connect(b"x" * 1_000)
    good = connect(b"status")
    serve(publisher)
    assert heard(good)[0] == "status"


def test_without_subscribers_nothing_waits(publisher: Publisher) -> None:
    """Nor grows: one message a topic is kept."""
    for number in range(10_000):
        publisher.publish("health", {"sample": number})
    publisher.serve_subscriptions()


# -- the document, against the code --------------------------------------------------------------


def documented() -> dict[str, str]:
    """Topic and the cell with its fields, from OPERATOR.md."""
    text = (Path(trialrunner.__file__).parent / "OPERATOR.md").read_text(encoding="utf-8")
    chapter = text.split("\n## Telemetry\n")[1].split("\n## ")[0]
    rows = re.findall(r"^\| `(\w+)` \| [^|]* \| ([^|]*) \|$", chapter, re.MULTILINE)
    return dict(rows)


def test_the_document_lists_every_topic() -> None:
    """And none that does not exist."""
    assert documented().keys() == TOPICS.keys()


def test_the_daemon_publishes_exactly_the_documented_fields() -> None:
    """A field that is added there must be described here."""
    published: dict[str, set[str]] = {}
    observer = Observer(
        "run", "record", "link", 3, ManualClock(),
        lambda topic, values: published.update({topic: set(values)}), lambda *_, **__: None,
    )  # fmt: skip
    arrays = np.zeros((4, 1))
    carry = Carry(arrays, arrays.astype(bool), arrays, arrays)
    trial = Trial(
        0, Purpose.LEARN, arrays, arrays, arrays, arrays, arrays.astype(bool), np.zeros(1)
    )
    verdict = Verdict("saturation", Level.WARN, "much", 0.2, 0.1)
    observer.outcome(Outcome((verdict,), False, 1.0, "learn", "", RunState(trial=1), carry, False))
    observer.samples(2)
    observer.trace(trial, 0.01)
    observer.event("rig", "greets")
    for topic, cell in documented().items():
        if topic != "status":
            assert published[topic] == set(re.findall(r"`(\w+)`", cell)), topic
