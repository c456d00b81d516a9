"""The client behind `trialrunner tell`: it asks until it is answered, and says who was silent."""

import threading
from collections.abc import Callable, Iterator

import pytest
import zmq

from trialrunner.operator_client import BadAddress, OperatorClient, new_id
from trialrunner.operator_messages import BadMessage, NoAnswer, OperatorAnswer, OperatorRequest


@pytest.fixture
def url(tmp_path_factory: pytest.TempPathFactory) -> str:
    """Short: Unix socket paths end at 107 bytes."""
    return f"ipc://{tmp_path_factory.mktemp('c')}/bench.command"


@pytest.fixture
def router(url: str) -> "Iterator[zmq.Socket[bytes]]":
    """Whatever a test wants a daemon to be."""
    with zmq.Context() as context, context.socket(zmq.ROUTER) as router:
        router.set(zmq.LINGER, 0)
        router.bind(url)
        yield router


@pytest.fixture
def behave() -> Iterator[Callable[[Callable[[], None]], None]]:
    """Runs the daemon's part of a test in a thread, to its end."""
    threads: list[threading.Thread] = []

    def start(part: Callable[[], None]) -> None:
        threads.append(threading.Thread(target=part))
        threads[-1].start()

    yield start
    for thread in threads:
        thread.join()


def request(verb: str = "pause") -> OperatorRequest:
    return OperatorRequest(new_id(), verb, "Ada", "lunch")


def yes(id_: str, text: str = "") -> bytes:
    return OperatorAnswer(id_, True, text, 3, "2026-12-01T00:00:00Z").to_json().encode()


def test_a_request_is_sent_again_with_the_same_id_until_it_is_answered(
    url: str, router: "zmq.Socket[bytes]", behave: Callable[[Callable[[], None]], None]
) -> None:
    """Each retry is a new connection with the very same bytes, so that it is applied once."""
    got: list[tuple[bytes, bytes]] = []
    asked = request()

    def lose_two_then_answer() -> None:
        peer, body = router.recv_multipart()
        while body != b"stop":
            got.append((peer, body))
            if len(got) > 2:
                router.send_multipart([peer, yes(asked.id, "at last")])
            peer, body = router.recv_multipart()

    behave(lose_two_then_answer)
    with OperatorClient(url, retry_s=0.1) as client:
        answer = client.ask(asked, timeout_s=30.0)
    with zmq.Context() as context, context.socket(zmq.DEALER) as stopper:
        stopper.connect(url)
        stopper.send(b"stop")
    assert answer.text == "at last"
    assert {body for _, body in got} == {asked.to_json().encode()}
    assert len({peer for peer, _ in got}) == len(got) >= 3


def test_a_daemon_that_does_not_answer_is_named_with_what_to_do(
    url: str, router: "zmq.Socket[bytes]"
) -> None:
    """It listens and stays silent: stopped, or hung."""
    with (
        OperatorClient(url, retry_s=0.02) as client,
        pytest.raises(NoAnswer, match=r"bench\.command: no answer within 0\.05 s.*own stop"),
    ):
        client.ask(request("halt"), timeout_s=0.05)


def test_answers_to_other_requests_are_passed_over(
    url: str, router: "zmq.Socket[bytes]", behave: Callable[[Callable[[], None]], None]
) -> None:
    """A late one must not be taken for the answer to this request."""
    asked = request()

    def answer_twice() -> None:
        peer, _ = router.recv_multipart()
        router.send_multipart([peer, yes("an-older-request", "late")])
        router.send_multipart([peer, yes(asked.id, "mine")])

    behave(answer_twice)
    with OperatorClient(url, retry_s=30.0) as client:
        assert client.ask(asked, timeout_s=30.0).text == "mine"


@pytest.mark.parametrize(
    ("reply", "words"),
    [
        (b"hello", "expected JSON"),
        (b'{"id":"x"}', "lacks a key"),
        (OperatorAnswer("", False, "expected JSON", None, "").to_json().encode(), "understand"),
    ],
)
def test_something_else_that_answers_is_told_from_a_daemon(
    reply: bytes,
    words: str,
    url: str,
    router: "zmq.Socket[bytes]",
    behave: Callable[[Callable[[], None]], None],
) -> None:
    """Another program at the address, or a daemon of another version."""
    behave(lambda: router.send_multipart([router.recv_multipart()[0], reply]))
    with OperatorClient(url, retry_s=30.0) as client, pytest.raises(BadMessage, match=words):
        client.ask(request("status"), timeout_s=30.0)


@pytest.mark.parametrize("url", ["", "nonsense", "udp://x", "tcp://127.0.0.1", "ipc://"])
def test_an_address_that_cannot_be_connected_to_is_told(url: str) -> None:
    """With the forms that can."""
    with pytest.raises(BadAddress, match="expected ipc:///path or tcp://host:port"):
        OperatorClient(url)
