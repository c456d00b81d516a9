"""The command socket: each request comes out once, each bad one is answered, nothing blocks."""

import json
from collections.abc import Callable, Iterator
from typing import Any

import pytest
import zmq

from trialrunner.clock import ManualClock
from trialrunner.operator_messages import OperatorAnswer, OperatorRequest
from trialrunner.operator_socket import MAX_JOURNAL, MAX_PER_CALL, Handle, OperatorSocket

Received = list[tuple[Handle, OperatorRequest]]


@pytest.fixture
def context() -> Iterator[zmq.Context[Any]]:
    with zmq.Context() as context:
        yield context


@pytest.fixture
def url(tmp_path_factory: pytest.TempPathFactory) -> str:
    """Short: Unix socket paths end at 107 bytes."""
    return f"ipc://{tmp_path_factory.mktemp('s')}/run.command"


@pytest.fixture
def daemon(context: zmq.Context[Any], url: str) -> Iterator[OperatorSocket]:
    socket = OperatorSocket(context, url, clock=ManualClock())
    yield socket
    socket.close()


@pytest.fixture
def connect(context: zmq.Context[Any], url: str) -> Iterator[Callable[..., zmq.Socket[Any]]]:
    """A plain client, DEALER unless another type is asked for."""
    made: list[zmq.Socket[Any]] = []

    def make(kind: int = zmq.DEALER) -> zmq.Socket[Any]:
        socket = context.socket(kind)
        made.append(socket)
        socket.set(zmq.LINGER, 0)
        socket.set(zmq.RCVTIMEO, 5_000)
        socket.connect(url)
        return socket

    yield make
    for socket in made:
        socket.close()


def request(id_: str = "request-1", verb: str = "pause", why: str = "lunch") -> OperatorRequest:
    return OperatorRequest(id_, verb, "Ada", why)


def send(client: zmq.Socket[Any], message: OperatorRequest) -> None:
    client.send(message.to_json().encode())


def heard(client: zmq.Socket[Any]) -> dict[str, Any]:
    found: dict[str, Any] = json.loads(client.recv())
    return found


def receive(daemon: OperatorSocket, messages: int = 1) -> Received:
    """What the daemon hands on once that many messages in all were read, good or bad."""
    found: Received = []
    done = 0
    while done < messages:
        assert daemon.socket.poll(5_000), "nothing arrived"
        before = _read_so_far(daemon)
        found += daemon.receive()
        done += _read_so_far(daemon) - before
    return found


def _read_so_far(daemon: OperatorSocket) -> int:
    return daemon.counts.requests + daemon.counts.repeated + daemon.counts.refused


def yes(message: OperatorRequest, text: str = "done") -> OperatorAnswer:
    return OperatorAnswer(message.id, True, text, 4, "2026-12-01T12:00:00Z")


def test_a_request_comes_out_and_its_answer_goes_back(
    daemon: OperatorSocket, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """The whole way, once."""
    client = connect()
    send(client, request())
    [(handle, got)] = receive(daemon)
    assert got == request()
    daemon.answer(handle, yes(got))
    assert heard(client) == {
        "version": 1, "id": "request-1", "ok": True, "text": "done", "trial": 4,
        "at": "2026-12-01T12:00:00Z", "data": {},
    }  # fmt: skip


def test_a_req_socket_is_answered_with_its_empty_frame(
    daemon: OperatorSocket, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """Also on a refusal: a REQ socket drops answers without the delimiter."""
    client = connect(zmq.REQ)
    send(client, request())
    [(handle, got)] = receive(daemon)
    daemon.answer(handle, yes(got))
    assert heard(client)["ok"]
    client.send(b"junk")
    assert receive(daemon) == []
    assert not heard(client)["ok"]


def test_nothing_to_read_returns_at_once(daemon: OperatorSocket) -> None:
    """The loop calls it every turn."""
    assert daemon.receive() == []


def test_a_repeated_request_is_answered_from_memory_and_not_handed_on(
    daemon: OperatorSocket, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """Sent twice is applied once, also over another connection."""
    client = connect()
    send(client, request())
    [(handle, got)] = receive(daemon)
    daemon.answer(handle, yes(got, "the one answer"))
    heard(client)
    other = connect()
    for sender in (client, other):
        send(sender, request())
        assert receive(daemon) == []
        assert heard(sender)["text"] == "the one answer"
    assert (daemon.counts.requests, daemon.counts.repeated) == (1, 2)


def test_a_request_repeated_before_its_answer_is_answered_where_it_came_from_last(
    daemon: OperatorSocket, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """A client that gave up its first connection listens on the second."""
    first, second = connect(), connect()
    send(first, request())
    [(handle, got)] = receive(daemon)
    send(second, request())
    assert receive(daemon) == []
    daemon.answer(handle, yes(got))
    assert heard(second)["ok"]
    assert not first.poll(0)


def test_the_id_of_another_request_is_refused(
    daemon: OperatorSocket, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """A client that uses an id twice must not believe that its second request was applied."""
    client = connect()
    send(client, request(why="lunch"))
    [(handle, got)] = receive(daemon)
    daemon.answer(handle, yes(got))
    heard(client)
    send(client, request(why="supper"))
    assert receive(daemon) == []
    answer = heard(client)
    assert not answer["ok"]
    assert answer["id"] == "request-1"
    assert "used before for another request" in answer["text"]


def test_a_request_on_record_is_not_applied_again(
    context: zmq.Context[Any], url: str, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """After a restart the record knows what memory does not."""
    asked: list[str] = []

    def known(id_: str) -> OperatorAnswer | None:
        asked.append(id_)
        return yes(request(id_), "from the record") if id_ == "old-request" else None

    daemon = OperatorSocket(context, url, known)
    client = connect()
    send(client, request("old-request"))
    send(client, request("new-request"))
    assert [got.id for _, got in receive(daemon, 2)] == ["new-request"]
    assert heard(client)["text"] == "from the record"
    assert asked == ["old-request", "new-request"]
    daemon.close()


def test_status_is_answered_afresh_each_time(
    daemon: OperatorSocket, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """It changes nothing, and its answer would be stale."""
    client = connect()
    for text in ("first", "second"):
        send(client, request(verb="status"))
        [(handle, got)] = receive(daemon)
        daemon.answer(handle, yes(got, text))
        assert heard(client)["text"] == text


@pytest.mark.parametrize(
    ("frames", "words"),
    [
        ([b""], "expected JSON"),
        ([b"\0" * 60_000], "expected JSON"),
        ([b"[" * 60_000], "nested too deeply"),
        ([b"{}"], "the key version is missing"),
        ([b"{}", b"{}"], "expected one frame, found 2"),
        ([b"", b"{}", b"{}"], "expected one frame, found 2"),
        ([b"", b"", b"", b""], "expected one frame, found 3"),
        ([b"x"] * 1_000, "expected one frame, found 1000"),
    ],
)  # fmt: skip
def test_a_bad_message_is_answered_at_once_and_counted(
    daemon: OperatorSocket,
    connect: Callable[..., zmq.Socket[Any]],
    frames: list[bytes],
    words: str,
) -> None:
    """The sender learns what is wrong; the loop never sees it; the next request is read."""
    client = connect()
    client.send_multipart(frames)
    assert receive(daemon) == []
    answer = json.loads(client.recv_multipart()[-1])
    assert not answer["ok"]
    assert words in answer["text"]
    assert answer["id"] == ""
    assert daemon.counts.refused == 1
    send(client, request())
    assert len(receive(daemon)) == 1


def test_an_oversized_frame_ends_its_connection_only(
    daemon: OperatorSocket, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """ZeroMQ drops it at its header; others are served as before."""
    big, good = connect(), connect()
    big.send(b" " * 65_537)
    send(good, request())
    assert len(receive(daemon)) == 1
    assert daemon.counts.refused == 0


def test_a_client_that_left_costs_nothing_but_a_count(daemon: OperatorSocket) -> None:
    """Its answer cannot be delivered; the daemon goes on."""
    daemon.answer(Handle(b"nobody", False, "request-1"), yes(request()))
    assert daemon.counts.undeliverable == 1


def test_a_client_that_does_not_read_cannot_block_the_daemon(
    daemon: OperatorSocket, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """Answers beyond what the queues hold are dropped and counted."""
    client = connect()
    client.set(zmq.RCVHWM, 1)
    send(client, request(verb="status"))
    [(handle, got)] = receive(daemon)
    bulky = OperatorAnswer(got.id, True, "x" * 100_000, 1, "2026")
    for _ in range(2_000):
        daemon.answer(handle, bulky)
        if daemon.counts.undeliverable:
            break
    assert daemon.counts.undeliverable


def test_one_call_reads_a_bounded_number(
    daemon: OperatorSocket, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """A flood cannot keep the loop from its rig; nothing is lost by it."""
    client = connect()
    total = MAX_PER_CALL + 30
    for number in range(total):
        send(client, request(f"request-{number}"))
    found: Received = []
    while len(found) < total:
        assert daemon.socket.poll(5_000)
        part = daemon.receive()
        assert len(part) <= MAX_PER_CALL
        found += part
    assert [got.id for _, got in found] == [f"request-{number}" for number in range(total)]


def test_the_journal_forgets_the_oldest_answer_only(
    daemon: OperatorSocket, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """Memory is bounded; the newest thousand requests are still known."""
    client = connect()
    for number in range(MAX_JOURNAL + 1):
        send(client, request(f"request-{number}"))
        for handle, got in receive(daemon):
            daemon.answer(handle, yes(got))
        heard(client)
    send(client, request("request-1"))
    assert receive(daemon) == []
    assert heard(client)["ok"]
    send(client, request("request-0"))
    assert [got.id for _, got in receive(daemon)] == ["request-0"]


def test_a_request_is_refused_while_too_many_wait(
    daemon: OperatorSocket, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """None of those that wait is forgotten: it could be applied twice."""
    client = connect()
    for number in range(MAX_JOURNAL):
        send(client, request(f"request-{number}"))
        receive(daemon)
    send(client, request("one-too-many"))
    assert receive(daemon) == []
    assert "too many requests wait" in heard(client)["text"]


def test_the_last_answer_still_arrives_after_closing(
    context: zmq.Context[Any], url: str, connect: Callable[..., zmq.Socket[Any]]
) -> None:
    """The one who ends the run hears that it ends."""
    daemon = OperatorSocket(context, url)
    client = connect()
    send(client, request(verb="end"))
    [(handle, got)] = receive(daemon)
    daemon.answer(handle, yes(got, "the run ends"))
    daemon.close()
    assert heard(client)["text"] == "the run ends"
